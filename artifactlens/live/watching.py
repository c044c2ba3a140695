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
from artifactlens.live.inlet import Assembler, Changed, Gone, Inlet, Samples
from artifactlens.live.session import Session
from artifactlens.live.state import NOTHING_YET, LiveState, Prompt
from artifactlens.page.words import clock
from artifactlens.sitecare.answers import answer_findings
from artifactlens.sitecare.biocal import Calibration, respond, steps
from artifactlens.sitecare.biocal_words import protocol_tasks

if TYPE_CHECKING:
    from artifactlens.live.inlet import StreamFacts
    from artifactlens.live.stream_grid import Stretch
    from artifactlens.sitecare.biocal import Task
    from artifactlens.sitecare.evidence import Finding

PULL_SECONDS = 0.2
"""The state is renewed at least so often, samples or not."""

DELAYS_KEPT = 600
NOTES_KEPT = 5

ANSWER_SECONDS = 2.0
"""After the last request the patient is given so long before the answers are looked at."""


class Watch:
    """Watches one stream; a context manager.

    Nothing of the stream is written anywhere, and what is held in memory does not grow.

    Parameters
    ----------
    stream : str or None
        Name of the stream; None takes the one of type EEG.
    wait_seconds : float
        How long to look for it at first.
    minutes : float
        How far the advice looks back.
    calibration : bool
        Lead the patient through the short protocol and judge the answers.
    line_frequency : float or None
        50 or 60 if known.
    impedances : dict of str to float, optional
        Kilo-ohm by site; they go before those that the stream offers.
    """

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
        self._inlet = Inlet(stream, wait_seconds=wait_seconds)
        self._minutes = minutes
        self._line_frequency = line_frequency
        self._impedances = impedances or {}
        self._model = load_model()
        self._state = NOTHING_YET
        self._lock = threading.Lock()
        self._notes: deque[str] = deque(maxlen=NOTES_KEPT)
        self._delays: deque[float] = deque(maxlen=DELAYS_KEPT)
        self._outages = 0
        self._filled = 0
        self._lost = False
        self._ask = calibration
        self._asked_at: float | None = None
        self._answers: tuple[Finding, ...] = ()
        self._sentences: tuple[str, ...] = ()

    def __enter__(self) -> Self:
        """Find the stream.

        Raises
        ------
        StreamError, SitesError
            If there is none that can be watched.
        """
        # Imported on first use otherwise, which would make the first result late.
        for module in ("scipy.fft", "scipy.sparse.csgraph"):
            import_module(module)
        self._inlet.__enter__()
        try:
            self._begin(self._inlet.facts)
        except ArtifactlensError:
            self._inlet.__exit__(None, None, None)
            raise
        self._show()
        return self

    def __exit__(self, *_: object) -> None:
        """Let go of the stream."""
        self._inlet.__exit__(None, None, None)

    def state(self) -> LiveState:
        """The state as of now; may be asked for from any thread."""
        with self._lock:
            return self._state

    def run(self, stop: threading.Event) -> None:
        """Take in what comes until ``stop`` is set."""
        while not stop.is_set():
            self.step()

    def step(self) -> None:
        """Take in what came, judge whole seconds, renew the state."""
        done = 0
        pieces = self._inlet.pull(PULL_SECONDS)
        came = time.perf_counter()
        for piece in pieces:
            if isinstance(piece, Samples):
                self._lost = False
                for stretch in self._grid.add(piece):
                    done += self._take(stretch)
            elif isinstance(piece, Gone):
                self._lost = True
                self._outages += 1
                self._note(f"The source was lost at {clock(self._now)}.")
            elif isinstance(piece, Changed):
                self._come_back(piece.facts)
        self._show(judged=bool(done))
        if done:
            self._delays.append(time.perf_counter() - came)
            with self._lock:
                self._state = replace(
                    self._state, delay=self._delays[-1], slowest=max(self._delays)
                )
            self._session.settle()

    def _begin(self, facts: StreamFacts) -> None:
        self._facts = facts
        offered = dict(zip(facts.labels, facts.impedances_kohm, strict=True))
        known = {label: float(k) for label, k in offered.items() if np.isfinite(k)}
        self._grid = Assembler(facts.sampling_rate, len(facts.labels))
        self._session = Session(
            facts,
            self._model,
            minutes=self._minutes,
            line_frequency=self._line_frequency,
            impedances_kohm={**known, **self._impedances},
        )
        self._now = 0.0

    def _come_back(self, facts: StreamFacts) -> None:
        self._lost = False
        if facts.same_layout(self._facts):
            self._note(f"The source came back at {clock(self._now)}.")
            return
        before, after = len(self._facts.labels), len(facts.labels)
        what = (
            f"with {after} channels, it had {before}"
            if after != before
            else "with other channels or another sampling rate"
        )
        self._filled += self._grid.filled
        try:
            self._begin(facts)
        except ArtifactlensError as error:
            self._note(f"The source came back {what}: {error.problem} {error.remedy}")
            return
        self._note(f"The source came back {what}; the watch began anew.")
        self._answers, self._sentences, self._asked_at = (), (), None

    def _take(self, stretch: Stretch) -> int:
        done = self._session.add(stretch)
        self._now = self._session.now
        return done

    def _note(self, sentence: str) -> None:
        self._notes.append(sentence)

    def _show(self, *, judged: bool = False) -> None:
        session = self._session
        prompt = self._prompt()
        before = self.state()
        result = before.result
        if judged:
            result = session.result(self._answers, self._sentences)
        elif not session.seconds:
            result = None
        phase = "lost" if self._lost else "watching" if result else "gathering"
        fresh = LiveState(
            phase=phase,
            stream=self._facts.name,
            seconds=self._now,
            result=result,
            marked_now=session.marked_now(),
            filled=self._filled + self._grid.filled,
            outages=self._outages,
            delay=before.delay,
            slowest=before.slowest,
            prompt=prompt,
            notes=tuple(self._notes),
        )
        with self._lock:
            self._state = fresh

    def _prompt(self) -> Prompt | None:
        """Where the patient is in the protocol; judges the answers when it is through."""
        if not self._ask or self._lost:
            return None
        if self._asked_at is None:
            if not self._session.seconds:
                return None
            self._asked_at = self._now
        since = self._now - self._asked_at
        lines = steps()
        for number, line in enumerate(lines, start=1):
            if since < line.seconds:
                return Prompt(line.words, line.seconds - since, number, len(lines))
            since -= line.seconds
        if since >= ANSWER_SECONDS:
            self._ask = False
            self._judge_answers(protocol_tasks(self._asked_at))
        return None

    def _judge_answers(self, tasks: tuple[Task, ...]) -> None:
        sites_uv, start = self._session.recent_sites()
        answers: Calibration = respond(
            sites_uv, self._facts.sampling_rate, self._session.frame, tasks, start=start
        )
        self._answers = answer_findings(
            answers, self._session.frame, self._session.evidence().log
        )
        self._sentences = answers.sentences
