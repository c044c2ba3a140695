"""The stages of the main job, second by second, on one layout of a stream."""

from __future__ import annotations

import dataclasses
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from artifactlens import __version__
from artifactlens.assessable import assess
from artifactlens.epochs import EpochGrid, batches
from artifactlens.errors import OptionError, SamplingRateError, StreamError
from artifactlens.features import (
    FeatureTable,
    mains_is_carried,
    measure,
)
from artifactlens.features.spatial import eye_leads
from artifactlens.flagging import judge, pop_moments
from artifactlens.frames import build_frame
from artifactlens.impedances import impedances_of
from artifactlens.kinds import KIND_NAMES
from artifactlens.live.outcome import site_table, stream_facts
from artifactlens.live.usual import leaning_usual
from artifactlens.live.windows import Rolling, Seconds
from artifactlens.recording import from_array
from artifactlens.result import (
    Assessment,
    Result,
    Setup,
)
from artifactlens.sitecare.answers import answer_findings
from artifactlens.sitecare.biocal import Calibration
from artifactlens.sitecare.evidence import Evidence
from artifactlens.sitecare.setup import SETUP_SECONDS, setup_check
from artifactlens.sitecare.signs import STRETCH_SECONDS, SignKeeper, signs_of
from artifactlens.sitecare.verdicts import advise
from artifactlens.survey import PLAUSIBLE_UV, Conditions, survey

if TYPE_CHECKING:
    from artifactlens.curves import Model
    from artifactlens.features import Measures
    from artifactlens.live.stream_grid import Stretch
    from artifactlens.live.stream_header import StreamFacts
    from artifactlens.recording import Recording

Array = NDArray[np.float32]

SURVEY_SECONDS = 60
RAW_SECONDS = 64.0
"""Samples kept for the survey and for the answers to a biological calibration."""

FIRST_SURVEY_SECONDS = 5
SHORTEST_PAUSE, LONGEST_PAUSE = 10, 20
"""Seconds between two surveys: few at first, and twice as many after each."""

LINE_CERTAIN_DB = 6.0
"""Mains that stands out so far shows the frequency of the place, which does not change."""

STEADY_EPOCHS = CONTEXT_EPOCHS = 2
"""Epochs that are scored again, for what follows counts in medians over five seconds; epochs
that are measured along with a new one."""

SLOWEST_STREAM_HZ = 25.0
LEAST_MINUTES, MOST_MINUTES = 0.5, 24 * 60


class Session:
    """Measures and judges a stream as it comes; remembers the last minutes.

    Nothing is judged before five seconds have come; they are kept and measured then. No
    result depends on how the samples are cut into pieces.

    The survey is made anew now and then, and after every second as long as no channel has
    shown a signal. One that sees no signal does not replace one that did: a head box
    unplugged for a minute does not undo what is known.

    Parameters
    ----------
    layout : StreamFacts
    model : Model
    minutes : float
        How far advice looks back.
    line_frequency : float or None
        50 or 60 if known.
    impedances_kohm : dict of str to float
        By site or channel label.

    Raises
    ------
    SitesError
        If the stream has fewer than two EEG channels.
    SamplingRateError
        If it has fewer than 25 samples a second.
    OptionError
        If ``minutes`` is less than half a minute or more than a day.
    """

    def __init__(
        self,
        layout: StreamFacts,
        model: Model,
        *,
        minutes: float = 10.0,
        line_frequency: float | None = None,
        impedances_kohm: dict[str, float] | None = None,
    ) -> None:
        if not layout.sampling_rate >= SLOWEST_STREAM_HZ:
            raise SamplingRateError(
                f"A watch needs at least {SLOWEST_STREAM_HZ:g} samples a second; the stream "
                f"{layout.name!r} has {layout.sampling_rate:g}.",
                "Name the stream of the scalp EEG itself.",
            )
        if not LEAST_MINUTES <= minutes <= MOST_MINUTES:
            raise OptionError(
                f"A watch looks back over {LEAST_MINUTES:g} to {MOST_MINUTES:g} minutes; "
                f"given were {minutes:g}.",
                "Give 10, for instance.",
            )
        self.layout, self.model = layout, model
        self._line = line_frequency
        self._place_hz: float | None = None
        self._look_back = 60.0 * minutes
        self._seconds = Seconds(len(layout.labels), layout.sampling_rate, RAW_SECONDS)
        self._lay_out()
        self.tell_impedances(impedances_kohm or {})
        self._conditions: Conditions | None = None
        self._epochs = 0  # measured so far
        self._measured = 0  # of the segment at hand
        self._unheard = 0  # seconds of segments that ended before the first survey
        self._next_survey = 0
        self._pause = SHORTEST_PAUSE

    @property
    def segment(self) -> int:
        """Number of the uninterrupted stretch at hand; -1 before the first sample."""
        return self._seconds.segment

    @property
    def seconds(self) -> float:
        """End of the last epoch that was judged, seconds from the first sample; or 0."""
        return float(self._rows.column("onset")[-1]) + 1.0 if len(self._rows) else 0.0

    @property
    def now(self) -> float:
        """Time of the next sample, seconds from the first one of the stream."""
        return self._seconds.now

    @property
    def setup_left(self) -> float | None:
        """Seconds until the setup check is closed; None once it is."""
        return None if self._setup_done else max(self._until_settled(self.now), 0.0)

    def _until_settled(self, moment: float) -> float:
        """Seconds from then until the start is known for good, or about to be forgotten."""
        enough = min(SETUP_SECONDS + STRETCH_SECONDS, self._look_back)
        begun = float(self._rows.column("onset")[0]) if len(self._rows) else 0.0
        return enough - (moment - begun)

    def tell_impedances(self, kohm: dict[str, float]) -> None:
        """Impedances, kilo-ohm by site or channel label, in place of those so far."""
        self._ohms = kohm
        self._impedances = impedances_of(self.frame, kohm)

    def come_back(self, seconds_away: float) -> None:
        """The source was away for so long, by the clock of this computer."""
        self._seconds.come_back(seconds_away)

    def add(self, stretch: Stretch) -> int:
        """Take in samples; returns how many epochs they completed.

        Every whole second is measured and judged, however many come at once.
        """
        seconds = self._seconds
        if stretch.segment != seconds.segment:
            self.settle()  # while the window still holds what led here
            if self._conditions is None:
                self._unheard += seconds.whole
            seconds.begin_segment(stretch)
            self._measured = 0
        done = 0
        # A long piece is cut, so that the window holds every epoch when its turn comes.
        for low in range(0, stretch.uv.shape[1], seconds.n_samples):
            seconds.add(stretch.uv[:, low : low + seconds.n_samples])
            done += self._measure_whole_seconds()
        return done

    def _measure_whole_seconds(self) -> int:
        whole = self._seconds.whole
        if self._conditions is None:
            if not whole or self._unheard + whole < FIRST_SURVEY_SECONDS:
                return 0
            self._survey(whole)
        done = whole - self._measured
        while self._measured < whole:
            self.settle()
            self._measure_next()
        return done

    def _measure_next(self) -> None:
        """Measure and score the next epoch; the ones before it once more."""
        conditions, seconds, number = self._known(), self._seconds, self._measured
        around = range(max(number - CONTEXT_EPOCHS, 0), number + 1)
        starts = np.array([seconds.start_of(k) for k in around])
        onset = np.array([seconds.time_of(starts[-1])])
        piece = self._recording(int(starts[0]), seconds.end_of(number))
        # Laid by hand: where a second is no whole number of samples, a grid that begins with
        # the first of the three would have the others a sample away from their places.
        grid = EpochGrid(
            start=starts - starts[0],
            onset=(starts - starts[0]) / seconds.rate,
            segment=np.zeros(len(starts), dtype=np.int64),
            n_samples=seconds.n_samples,
        )
        batch = next(batches(piece, self.frame, grid, len(grid), conditions.levels_uv))
        measures = measure(batch, self.frame, self._leads, conditions)
        newest = signs_of(batch, self.frame, conditions, newest=1)
        rows = self._rows
        if len(grid) > 1 and len(rows) and rows.column("segment")[-1] == seconds.segment:
            rows.rewrite(-1, _row(measures, -2))
        rows.append(
            {
                **_row(measures, -1),
                "onset": onset[0],
                "segment": np.array(seconds.segment, dtype=np.int64),
                "probability": np.full(
                    (len(KIND_NAMES), len(self.frame.sites)), np.nan, dtype=np.float32
                ),
            }
        )
        # By time, not by number: what was before a long break is old.
        kept = rows.column("onset") >= onset[0] + 0.5 - self._look_back
        rows.drop(int(kept.argmax()))
        self._keeper.add(onset, *newest)
        self._keeper.forget(float(rows.column("onset")[0]))
        self._measured += 1
        self._epochs += 1
        self._score()

    def _recording(self, start: int, stop: int) -> Recording:
        return from_array(
            self._seconds.raw.piece(start, stop),
            self.layout.sampling_rate,
            self.layout.labels,
            types=self.layout.types,
        )

    def settle(self) -> None:
        """What may wait until a result is out: survey and usual values, now and then.

        If it is not called it is made up for before the next epoch.
        """
        if self._conditions is None or not self._measured:
            return
        if self._epochs >= self._next_survey:
            self._survey(self._measured)
        next_usual = min(1.1 * self._usual_at, self._usual_at + 30)
        if len(self._rows) and self._epochs >= next_usual:
            self._learn_usual()

    def _survey(self, epochs: int) -> None:
        """Look at the last minute up to the end of so many epochs, as at a recording."""
        stop = self._seconds.end_of(epochs - 1)
        start = stop - round(SURVEY_SECONDS * self.layout.sampling_rate)
        recent = self._recording(max(start, self._seconds.raw.first), stop)
        found = survey(recent, self.frame, self._line)
        if found.line_found_db >= LINE_CERTAIN_DB:
            self._place_hz = found.line_frequency
        elif self._place_hz is not None:
            found = dataclasses.replace(found, line_frequency=self._place_hz)
        first = self._conditions is None or not _sees(self._conditions)
        averaged = found.average_reference and self.frame.montage == "referential"
        if _sees(found) and first and averaged:
            self._lay_out(measured_average=True)
        if _sees(found) or self._conditions is None:
            self._conditions = found
        self._next_survey = self._epochs + 1
        if _sees(self._conditions):
            self._next_survey = self._epochs + self._pause
            self._pause = min(2 * self._pause, LONGEST_PAUSE)

    def _lay_out(self, *, measured_average: bool = False) -> None:
        """Find the sites of the layout, and begin with nothing known of them."""
        self.frame = build_frame(
            self.layout.labels, self.layout.types, None, measured_average=measured_average
        )
        self._leads = eye_leads(self.frame)
        self._rows = Rolling(int(np.ceil(self._look_back)))
        self._keeper = SignKeeper(None, len(self.frame.sites))
        self._usual: Array | None = None
        self._usual_at = 0
        self._setup: Setup | None = None
        self._setup_done = False
        if measured_average:
            self.tell_impedances(self._ohms)

    def _learn_usual(self) -> Array:
        sites = np.array([role != "reference" for role in self.frame.roles])
        values = self._rows.column("values").transpose(1, 0, 2)
        self._usual, self._usual_at = leaning_usual(values, sites), self._epochs
        return self._usual

    def recent_sites(self) -> tuple[Array, float]:
        """Site potentials of the last minute (n_sites, n_times), and when they begin.

        NaN where a site was lost; the others are solved from the channels that were there.
        """
        raw = self._seconds.raw
        data = raw.piece(raw.first, raw.end)[self.frame.channels]
        patterns, which = np.unique(np.isfinite(data), axis=1, return_inverse=True)
        sites = np.full((len(self.frame.sites), data.shape[1]), np.nan, dtype=np.float32)
        for number, there in enumerate(patterns.T):
            at = which.ravel() == number
            known = np.where(there[:, None], data[:, at], np.float32(0))
            sites[:, at] = self.frame.matrix(there) @ known
        return sites, self._seconds.time_of(raw.first)

    def _table(self, epochs: int | None = None) -> FeatureTable:
        """The last epochs, or all, with the usual values of all minutes."""
        part = slice(None) if epochs is None else slice(-epochs, None)
        rows = self._rows
        return FeatureTable(
            values=rows.column("values")[part].transpose(1, 0, 2),
            usual=self._learn_usual() if self._usual is None else self._usual,
            pace=rows.column("pace")[part],
            step_at=rows.column("step_at")[part],
            front_at=rows.column("front_at")[part],
            segment=rows.column("segment")[part],
        )

    def _score(self) -> None:
        """Score the last epochs again: features over five seconds look at what follows."""
        count = min(len(self._rows), 3 * STEADY_EPOCHS + 1)
        assessable = self._assessable(self._known())
        judged = judge(self.model, self._table(count), self.frame, assessable)
        for place in range(-min(count, STEADY_EPOCHS + 1), 0):
            self._rows.rewrite(place, {"probability": judged.probability[:, place]})

    def _known(self) -> Conditions:
        if self._conditions is None:
            raise StreamError(
                f"Judging needs {FIRST_SURVEY_SECONDS} seconds of the stream; there are "
                f"{self._unheard + self._seconds.whole} whole ones.",
                "Wait until the session has taken them in.",
            )
        return self._conditions

    def _assessable(self, conditions: Conditions) -> tuple[Assessment, ...]:
        low, high = PLAUSIBLE_UV
        return assess(
            self.frame,
            self._leads,
            conditions,
            float(self._epochs),
            not low <= conditions.amplitude_uv <= high,
        )

    def marked_now(self) -> dict[str, tuple[str, ...]]:
        """Sites marked in the last second, by kind, at the operating point "sure"."""
        if not len(self._rows):
            return {}
        last = np.nan_to_num(self._rows.column("probability")[-1], nan=-1.0)
        return {
            head.kind: tuple(
                self.frame.sites[row] for row in np.flatnonzero(last[index] >= head.sure)
            )
            for index, head in enumerate(self.model.heads)
        }

    def evidence(self) -> Evidence:
        """What the search for electrode faults looks at: the last minutes."""
        rows, model, conditions = self._rows, self.model, self._known()
        if not len(rows):
            raise StreamError("No second was judged yet.", "Take in another one.")
        probability = rows.column("probability").transpose(1, 0, 2)
        onset = rows.column("onset")
        grid = EpochGrid(
            start=np.zeros(len(onset), dtype=np.int64),
            onset=onset,
            segment=rows.column("segment"),
            n_samples=self._seconds.n_samples,
        )
        return Evidence.of(
            self.frame,
            self._keeper.log(),
            model,
            probability,
            pop_moments(model, probability, rows.column("step_at"), grid),
            self._table(),
            conditions.line_frequency if mains_is_carried(conditions) else None,
        )

    def result(self, calibration: Calibration | None = None) -> Result:
        """Sites, advice and setup of the last minutes, without flags.

        Parameters
        ----------
        calibration : Calibration, optional
            The answers of the patient, if they were asked for.

        Raises
        ------
        StreamError
            If no epoch was judged yet.
        """
        evidence = self.evidence()
        conditions = self._known()
        answers = calibration or Calibration()
        extra = answer_findings(answers, self.frame, evidence.log)
        advice = advise(evidence, extra)
        if not self._setup_done:
            self._setup = setup_check(evidence)
            self._setup_done = self._until_settled(self.seconds) <= 0.5
        setup, assessable = self._setup, self._assessable(conditions)
        return Result(
            tool_version=__version__,
            model_name=self.model.name,
            model_sha256=self.model.sha256,
            parameters={
                "mark": "sure",
                "line_frequency": f"{self._line:g}" if self._line else "auto",
            },
            recording=stream_facts(self.layout, self.frame, conditions, self.seconds),
            assessable=assessable,
            touched={},
            flags=(),
            sites=site_table(
                evidence, advice, self.model, self._table(), assessable, self._impedances
            ),
            advice=advice,
            setup=setup and dataclasses.replace(setup, responses=answers.sentences),
        )


def _sees(conditions: Conditions) -> bool:
    """Whether the survey found a signal on any channel, and for most of a stretch."""
    return conditions.amplitude_uv > 0


def _row(measures: Measures, place: int) -> dict[str, NDArray[Any]]:
    """What is kept of one epoch of a batch."""
    return {
        "values": measures.values[:, place],
        "pace": measures.pace[place],
        "step_at": measures.step_at[place],
        "front_at": measures.front_at[place],
    }
