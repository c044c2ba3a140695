"""The stages of the main job, second by second, on one layout of a stream."""

from __future__ import annotations

import dataclasses
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from artifactlens import __version__
from artifactlens.assessable import assess
from artifactlens.epochs import EpochGrid, batches, epoch_grid, median_of_known
from artifactlens.errors import StreamError
from artifactlens.features import (
    FeatureTable,
    mains_is_carried,
    measure,
    usual_values,
)
from artifactlens.features.spatial import eye_leads
from artifactlens.flagging import judge, pop_moments
from artifactlens.frames import build_frame
from artifactlens.impedances import impedances_of
from artifactlens.kinds import KIND_NAMES
from artifactlens.live.windows import RawWindow, Rolling
from artifactlens.recording import from_array
from artifactlens.result import (
    Assessment,
    RecordingFacts,
    Result,
    Setup,
    SiteEvidence,
    finite_or_none,
)
from artifactlens.sitecare.evidence import Evidence
from artifactlens.sitecare.setup import SETUP_SECONDS, setup_check
from artifactlens.sitecare.shares import site_evidence
from artifactlens.sitecare.signs import STRETCH_SECONDS, SignKeeper, signs_of
from artifactlens.sitecare.verdicts import advise, site_verdicts
from artifactlens.survey import PLAUSIBLE_UV, Conditions, survey

if TYPE_CHECKING:
    from artifactlens.advice import Advice
    from artifactlens.curves import Model
    from artifactlens.features import Measures
    from artifactlens.live.stream_grid import Stretch
    from artifactlens.live.stream_header import StreamFacts
    from artifactlens.recording import Recording
    from artifactlens.sitecare.evidence import Finding

Array = NDArray[np.float32]

FAULTS = ("flat", "missing", "clipped")

RAW_SECONDS = 64.0
"""Samples kept for the survey and for the answers to a biological calibration."""

FIRST_SURVEY_SECONDS = 5
PRIOR_EPOCHS = 10.0
"""A site's usual value leans on that of the whole head as if on so many seconds."""

STEADY_EPOCHS = 2
"""Epochs behind one that its median over five seconds looks at: so many are scored again."""

CONTEXT_EPOCHS = 2


class Session:
    """Measures and judges a stream as it comes; remembers the last minutes.

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
        self.layout, self.model = layout, model
        self._line = line_frequency
        self._ohms = impedances_kohm or {}
        self._lay_out()
        self._raw = RawWindow(len(layout.labels), layout.sampling_rate, RAW_SECONDS)
        self._samples = int(np.floor(layout.sampling_rate + 1e-9))
        self._rows = Rolling(int(60 * minutes))
        self._conditions: Conditions | None = None
        self._usual: Array | None = None
        self._usual_of = 0
        self._epochs = 0
        self._in_segment = 0
        self._segment = -1
        self._segment_onset = 0.0
        self._origin: float | None = None
        self._setup: Setup | None = None
        self._setup_done = False
        self._surveyed = 0

    @property
    def seconds(self) -> float:
        """End of the last whole epoch, seconds from the first sample of the stream."""
        return float(self._rows.column("onset")[-1]) + 1.0 if len(self._rows) else 0.0

    @property
    def now(self) -> float:
        """Time of the next sample, seconds from the first one of the stream."""
        return self._segment_onset + self._raw.end / self.layout.sampling_rate

    def recent_sites(self) -> tuple[Array, float]:
        """Site potentials of the last minute (n_sites, n_times), and when they begin."""
        raw = self._raw
        data = raw.piece(raw.first, raw.end)[self.frame.channels]
        start = self._segment_onset + raw.first / self.layout.sampling_rate
        return self.frame.matrix() @ data, start

    def add(self, stretch: Stretch) -> int:
        """Take in samples; returns how many epochs they completed."""
        rate = self.layout.sampling_rate
        if self._origin is None:
            self._origin = stretch.time
        if stretch.segment != self._segment:
            self._segment = stretch.segment
            self._segment_onset = max(stretch.time - self._origin, self.seconds)
            self._in_segment = 0
            self._raw.restart()
        done = 0
        # A long piece is cut, so that the window holds every epoch when its turn comes.
        for low in range(0, stretch.uv.shape[1], self._samples):
            self._raw.add(stretch.uv[:, low : low + self._samples])
            while self._start_of(self._in_segment) + self._samples <= self._raw.end:
                done += self._finish_epoch(
                    self._segment_onset + self._in_segment_time(rate)
                )
                self._in_segment += 1
        return done

    def _in_segment_time(self, rate: float) -> float:
        return self._start_of(self._in_segment) / rate

    def _start_of(self, epoch: int) -> int:
        return int(np.rint(epoch * self.layout.sampling_rate))

    def _finish_epoch(self, onset: float) -> int:
        """Measure and score the epoch that has just ended; the ones before it once more."""
        self._epochs += 1
        if self._conditions is None:
            if self._epochs < FIRST_SURVEY_SECONDS:
                return 0
            self._survey()
        number = self._in_segment
        first = max(number - CONTEXT_EPOCHS, 0)
        piece = self._recording(
            self._start_of(first), self._start_of(number) + self._samples
        )
        if piece is None or self._conditions is None:
            return 0
        grid = epoch_grid(piece)
        levels = self._conditions.levels_uv
        batch = next(batches(piece, self.frame, grid, len(grid), levels))
        measures = measure(batch, self.frame, self._leads, self._conditions)
        newest = signs_of(batch, self.frame, self._conditions, newest=1)
        if (
            len(grid) > 1
            and len(self._rows)
            and self._rows.column("segment")[-1] == self._segment
        ):
            self._rows.rewrite(-1, _row(measures, -2))
        self._rows.append(
            {
                **_row(measures, -1),
                "onset": np.array(onset),
                "segment": np.array(self._segment, dtype=np.int64),
                "probability": np.full(
                    (len(KIND_NAMES), len(self.frame.sites)), np.nan, dtype=np.float32
                ),
            }
        )
        self._keeper.add(np.array([onset]), *newest)
        self._keeper.forget(float(self._rows.column("onset")[0]))
        self._score()
        return 1

    def _recording(self, start: int, stop: int) -> Recording | None:
        data = self._raw.piece(start, stop)
        if data.shape[1] < stop - start:
            return None
        return from_array(
            data, self.layout.sampling_rate, self.layout.labels, types=self.layout.types
        )

    def settle(self) -> None:
        """What may wait until a result is out: survey and usual values, now and then."""
        if self._conditions is None or not len(self._rows):
            return
        if self._epochs >= min(2 * self._surveyed, self._surveyed + 60):
            self._survey()
        if len(self._rows) >= min(1.1 * self._usual_of, self._usual_of + 30):
            self._learn_usual()

    def _survey(self) -> None:
        """Look at the last minute, as at stretches of a recording."""
        recent = self._recording(self._raw.first, self._raw.end)
        if recent is None or recent.n_samples < self.layout.sampling_rate:
            return
        self._surveyed = self._epochs
        self._conditions = survey(recent, self.frame, self._line)
        averaged = self._conditions.average_reference
        if averaged and self.frame.montage == "referential" and not len(self._rows):
            self._lay_out(measured_average=True)

    def _lay_out(self, *, measured_average: bool = False) -> None:
        """Find the sites of the layout, and what depends on them."""
        self.frame = build_frame(
            self.layout.labels, self.layout.types, None, measured_average=measured_average
        )
        self._leads = eye_leads(self.frame)
        self._keeper = SignKeeper(None, len(self.frame.sites))
        self._impedances = impedances_of(self.frame, self._ohms)

    def _learn_usual(self) -> Array:
        """Usual values of the minutes so far, leaning on the head's while they are few."""
        own = usual_values(self._rows.column("values").transpose(1, 0, 2))
        n = len(self._rows)
        sites = np.array([role != "reference" for role in self.frame.roles])
        head = median_of_known(own[:, sites].T)[:, None]
        lean = np.float32(PRIOR_EPOCHS / (n + PRIOR_EPOCHS))
        leaning = (1 - lean) * own + lean * np.where(np.isfinite(head), head, own)
        self._usual, self._usual_of = leaning.astype(np.float32), n
        return self._usual

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
        judged = judge(
            self.model, self._table(count), self.frame, self._assessable(self._known())
        )
        for place in range(-min(count, STEADY_EPOCHS + 1), 0):
            self._rows.rewrite(place, {"probability": judged.probability[:, place]})

    def _known(self) -> Conditions:
        if self._conditions is None:
            raise StreamError(
                "Judging needs a first survey of the stream, and none was made.",
                "Wait until the session has taken in some seconds.",
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
        rows, model = self._rows, self.model
        conditions = self._known()
        probability = rows.column("probability").transpose(1, 0, 2)
        onset = rows.column("onset")
        grid = EpochGrid(
            start=np.zeros(len(onset), dtype=np.int64),
            onset=onset,
            segment=rows.column("segment"),
            n_samples=self._samples,
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

    def result(
        self, extra: tuple[Finding, ...] = (), responses: tuple[str, ...] = ()
    ) -> Result:
        """Sites, advice and setup of the last minutes, without flags.

        Parameters
        ----------
        extra : tuple of Finding
            What other tests have found, such as a biological calibration.
        responses : tuple of str
            What that calibration showed.
        """
        evidence = self.evidence()
        conditions = self._known()
        advice = advise(evidence, extra)
        if not self._setup_done:
            self._setup = setup_check(evidence)
            self._setup_done = self.seconds >= SETUP_SECONDS + STRETCH_SECONDS
        setup = self._setup
        return Result(
            tool_version=__version__,
            model_name=self.model.name,
            model_sha256=self.model.sha256,
            parameters={"mark": "sure", "line_frequency": f"{self._line or 'auto'}"},
            recording=self._facts(conditions),
            assessable=self._assessable(conditions),
            touched={},
            flags=(),
            sites=self._sites(evidence, advice),
            advice=advice,
            setup=setup and dataclasses.replace(setup, responses=responses),
        )

    def _sites(
        self, evidence: Evidence, advice: tuple[Advice, ...]
    ) -> tuple[SiteEvidence, ...]:
        verdicts, reasons = site_verdicts(evidence, advice)
        signs = evidence.log.signs
        rows = site_evidence(
            self.model,
            np.ascontiguousarray(evidence.probability),
            self._table(),
            self.frame,
            self._assessable(self._known()),
            (),
            {name: getattr(signs, name).mean(axis=0) for name in FAULTS},
            "sure",
        )
        return tuple(
            dataclasses.replace(
                row,
                verdict=verdict,
                why=why,
                impedance_kohm=finite_or_none(kohm),
                pops_per_minute=None,  # counted from flags, which a watch does not make
            )
            for row, verdict, why, kohm in zip(
                rows, verdicts, reasons, self._impedances, strict=True
            )
        )

    def _facts(self, conditions: Conditions) -> RecordingFacts:
        return RecordingFacts(
            name=self.layout.name,
            format="LSL stream",
            duration=round(self.seconds, 3),
            sampling_rate=self.layout.sampling_rate,
            montage=self.frame.montage,
            high_pass=conditions.high_pass,
            low_pass=None
            if conditions.low_pass_source == "sampling rate"
            else conditions.low_pass,
            notch=conditions.notch,
            line_frequency=conditions.line_frequency
            if mains_is_carried(conditions)
            else None,
            gaps=(),
            set_aside=(*self.layout.set_aside, *self.frame.set_aside),
            annotation_onsets=(),
            notes=self.frame.notes,
        )


def _row(measures: Measures, place: int) -> dict[str, NDArray[Any]]:
    """What is kept of one epoch of a batch."""
    return {
        "values": measures.values[:, place],
        "pace": measures.pace[place],
        "step_at": measures.step_at[place],
        "front_at": measures.front_at[place],
    }
