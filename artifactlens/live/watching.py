"""A watch: from the stream to the state that page and terminal show, for hours."""

from __future__ import annotations

import threading
import time
from collections import deque
from dataclasses import replace
from importlib import import_module
from typing import TYPE_CHECKING, Self

import numpy as np

from artifactlens.curves import load_model
from artifactlens.errors import ArtifactlensError
from artifactlens.impedances import impedances_of
from artifactlens.live.inlet import Assembler, Changed, Gone, Inlet, Samples
from artifactlens.live.session import Session
from artifactlens.live.state import FLOWING, NOTHING_YET, LiveState, Prompt
from artifactlens.page.words import clock
from artifactlens.sitecare.biocal import respond, steps
from artifactlens.sitecare.biocal_words import protocol_tasks

if TYPE_CHECKING:
    from artifactlens.live.inlet import Piece, StreamFacts
    from artifactlens.sitecare.biocal import Calibration

PULL_SECONDS = 0.2
"""The state is renewed at least so often, samples or not."""

DELAYS_KEPT = 600
NOTES_KEPT = 5

ANSWER_SECONDS = 2.0
"""After the last request the patient is given so long before the answers are looked at."""

MOST_FAILURES, FAILURES_SECONDS = 3, 60.0
"""After so many failures within so much stream time the watch gives up."""


class Watch:
    """Watches one stream; a context manager.

    Nothing of the stream is written anywhere, and what is held in memory does not grow.

    A source that goes is waited for. If it comes back with a layout that cannot be watched,
    a note says why, nothing is shown of the sites, and the next one is waited for. If
    judging fails for a reason that nobody thought of, a note says so and the watch begins
    anew with what comes next; if it fails again and again, :meth:`run` ends with the error.

    Parameters
    ----------
    stream : str or None
        Name of the stream; None takes the one of type EEG.
    wait_seconds : float
        How long to look for it at first.
    minutes : float
        How far the advice looks back.
    calibration : bool
        Lead the patient through the short protocol and judge the answers; once more if
        samples are missing meanwhile, or if the source comes back with other channels.
    line_frequency : float or None
        50 or 60 if known.
    impedances : dict of str to float, optional
        Kilo-ohm by site; they go before those that the stream offers.

    Attributes
    ----------
    failure : Exception or None
        What :meth:`run` ended with, for whoever had it run in a thread. The state stands
        still then, in the phase "stopped" and with a note.
    """

    _facts: StreamFacts
    _grid: Assembler

    def __init__(
        self,
        stream: str | None = None,
        *,
        wait_seconds: float = 10.0,
        minutes: float = 10.0,
        calibration: bool = False,
        line_frequency: float | None = None,
        impedances: dict[str, float] | None = None,
    ) -> None:
        self.failure: Exception | None = None
        self._inlet = Inlet(stream, wait_seconds=wait_seconds)
        self._minutes = minutes
        self._line_frequency = line_frequency
        self._impedances = impedances or {}
        self._model = load_model()
        self._state = NOTHING_YET
        self._lock = threading.Lock()
        self._notes: deque[str] = deque(maxlen=NOTES_KEPT)
        self._delays: deque[float] = deque(maxlen=DELAYS_KEPT)
        self._failures: deque[float] = deque(maxlen=MOST_FAILURES)
        self._judged_seconds = 0.0  # of all sessions
        self._outages = 0
        self._breaks = 0
        self._lost = self._returned = False
        self._heard = 0.0  # when the stream last went on, by time.monotonic
        self._wanted = calibration
        self._filled_before = 0
        self._now = 0.0
        # None where the layout cannot be watched.
        self._session: Session | None = None

    def __enter__(self) -> Self:
        """Find the stream.

        Raises
        ------
        StreamError, SitesError, SamplingRateError, OptionError
            If there is none, or it cannot be watched so.
        """
        # Imported on first use otherwise, which would make the first result late.
        for module in ("scipy.fft", "scipy.sparse.csgraph"):
            import_module(module)
        self._inlet.__enter__()
        try:
            self._begin(self._inlet.facts)
        except BaseException:
            self._inlet.__exit__(None, None, None)
            raise
        self._heard = time.monotonic()
        self._check_impedances()
        self._show()
        return self

    def __exit__(self, *_: object) -> None:
        """Let go of the stream."""
        self._inlet.__exit__(None, None, None)

    def state(self) -> LiveState:
        """The state as of now; may be asked for from any thread.

        How long the stream is silent is told even while this watch is busy, or stuck.
        """
        with self._lock:
            state = self._state
        if state.phase not in FLOWING:
            return state
        return replace(state, silent=max(time.monotonic() - self._heard, 0.0))

    def run(self, stop: threading.Event) -> None:
        """Take in what comes until ``stop`` is set.

        Raises
        ------
        Exception
            If the stream cannot be read any more, or judging fails again and again; it is
            kept in ``failure``, too.
        """
        try:
            while not stop.is_set():
                self.step()
        except Exception as error:
            self.failure = error
            self._note(
                f"The watch has stopped at {clock(self._now)} by a failure of its own "
                f"({type(error).__name__}); start it again."
            )
            self._publish(
                replace(
                    self.state(),
                    phase="stopped",
                    silent=0.0,
                    marked_now={},
                    prompt=None,
                    notes=tuple(self._notes),
                )
            )
            raise

    def step(self) -> None:
        """Take in what came, judge whole seconds, renew the state."""
        pieces = self._inlet.pull(PULL_SECONDS)
        came = time.perf_counter()
        try:
            done = sum(self._take(piece) for piece in pieces)
            self._show(judged=bool(done))
            if done:
                self._judged_seconds += done
                self._delays.append(time.perf_counter() - came)
                delay, slowest = self._delays[-1], max(self._delays)
                self._publish(replace(self.state(), delay=delay, slowest=slowest))
            if done and self._session is not None:
                self._session.settle()
        except Exception as error:
            self._begin_again(error)

    def _take(self, piece: Piece) -> int:
        """Take in one piece; returns how many seconds were judged."""
        if isinstance(piece, Gone):
            self._lost = True
            self._outages += 1
            self._note(f"The source was lost at {clock(self._now)}.")
        elif isinstance(piece, Changed):
            self._come_back(piece.facts)
        elif isinstance(piece, Samples):
            return self._take_samples(piece)
        return 0

    def _take_samples(self, samples: Samples) -> int:
        self._lost = False
        session, breaks = self._session, self._grid.breaks
        if session is None:
            self._heard = time.monotonic()
            return 0
        stretches = self._grid.add(samples)
        if stretches:  # what came twice, or without a time, is nothing new
            self._heard = time.monotonic()
            found = self._grid.breaks - breaks
            if self._returned:  # the break that an outage leaves is told as the outage
                found = max(found - 1, 0)
            self._breaks, self._returned = self._breaks + found, False
        done = sum(session.add(stretch) for stretch in stretches)
        self._now = session.now
        return done

    def _begin(self, facts: StreamFacts) -> None:
        """Watch a layout that nothing is known of; changes nothing if it cannot be."""
        session = Session(
            facts,
            self._model,
            minutes=self._minutes,
            line_frequency=self._line_frequency,
            impedances_kohm=self._known_impedances(facts),
        )
        grid = Assembler(facts.sampling_rate, len(facts.labels))
        if self._session is not None:
            self._filled_before += self._grid.filled
        self._facts, self._session, self._grid = facts, session, grid
        self._now = 0.0
        self._ask = self._wanted
        self._answers: Calibration | None = None
        self._asked_at: tuple[int, float] | None = None

    def _known_impedances(self, facts: StreamFacts) -> dict[str, float]:
        offered = zip(facts.labels, facts.impedances_kohm, strict=True)
        known = {label: float(kohm) for label, kohm in offered if np.isfinite(kohm)}
        return {**known, **self._impedances}

    def _check_impedances(self) -> None:
        """Say so if those given are all of another head box."""
        session, given = self._session, self._impedances
        if session is None or not given:
            return
        if not np.isfinite(impedances_of(session.frame, given)).any():
            names = ", ".join(list(given)[:3]) + (", ..." if len(given) > 3 else "")
            self._note(
                f"None of the impedances given ({names}) is of a site of the stream: "
                "name the sites as the stream does."
            )

    def _come_back(self, facts: StreamFacts) -> None:
        self._lost = False
        session = self._session
        self._returned = True
        if session is not None and facts.same_layout(self._facts):
            session.tell_impedances(self._known_impedances(facts))
            session.come_back(time.monotonic() - self._heard)
            self._note(f"The source came back at {clock(self._now)}.")
            return
        before, after = len(self._facts.labels), len(facts.labels)
        what = (
            f"with {after} channels, it had {before}"
            if after != before
            else "with other channels or another sampling rate"
        )
        at = clock(self._now)
        try:
            self._begin(facts)
        except ArtifactlensError as error:
            self._forget(facts)
            self._note(f"The source came back {what}: {error.problem} {error.remedy}")
            return
        self._note(f"The source came back at {at} {what}; the watch began anew.")
        self._check_impedances()

    def _forget(self, facts: StreamFacts) -> None:
        """What was known of the layout before says nothing of this one."""
        if self._session is not None:
            self._filled_before += self._grid.filled
        self._facts, self._session = facts, None

    def _begin_again(self, error: Exception) -> None:
        """Go on after a failure, if it is not one of many."""
        seconds = self._judged_seconds
        self._failures.append(seconds)
        recent = sum(seconds - at < FAILURES_SECONDS for at in self._failures)
        if recent >= MOST_FAILURES:
            raise error
        self._note(
            f"At {clock(self._now)} judging failed ({type(error).__name__}); "
            "the watch began anew."
        )
        ask = self._ask
        self._begin(self._facts)
        self._ask = ask  # what was answered, or could not be judged, is not asked for again
        self._show()

    def _note(self, sentence: str) -> None:
        self._notes.append(sentence)

    def _publish(self, state: LiveState) -> None:
        with self._lock:
            self._state = state

    def _show(self, *, judged: bool = False) -> None:
        session, before = self._session, self.state()
        prompt, result, marked = None, None, {}
        if session is not None:
            prompt = self._prompt(session)
            if judged:
                result = session.result(self._answers)
            elif session.seconds:
                result = before.result
            marked = {} if self._lost else session.marked_now()
        if self._lost:
            phase = "lost"
        elif session is None:
            phase = "refused"
        else:
            phase = "watching" if result else "gathering"
        filled = 0 if session is None else self._grid.filled
        self._publish(
            LiveState(
                phase=phase,
                stream=self._facts.name,
                seconds=self._now,
                result=result,
                marked_now=marked,
                filled=self._filled_before + filled,
                outages=self._outages,
                delay=before.delay,
                slowest=before.slowest,
                prompt=prompt,
                notes=tuple(self._notes),
                breaks=self._breaks,
                setup_left=None if session is None else session.setup_left,
            )
        )

    def _prompt(self, session: Session) -> Prompt | None:
        """Where the patient is in the protocol; judges the answers when it is through."""
        if not self._ask or self._lost or not session.seconds:
            return None
        if self._asked_at is not None and self._asked_at[0] != session.segment:
            self._note("Samples were missing: the calibration begins once more.")
            self._asked_at = None
        if self._asked_at is None:
            self._asked_at = session.segment, self._now
        begun = self._asked_at[1]
        since = self._now - begun
        lines = steps()
        for number, line in enumerate(lines, start=1):
            if since < line.seconds:
                return Prompt(line.words, line.seconds - since, number, len(lines))
            since -= line.seconds
        if since >= ANSWER_SECONDS:
            self._ask = False
            sites_uv, start = session.recent_sites()
            self._answers = respond(
                sites_uv,
                self._facts.sampling_rate,
                session.frame,
                protocol_tasks(begun),
                start=start,
            )
        return None
