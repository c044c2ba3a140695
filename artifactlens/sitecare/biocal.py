"""The biological calibration as a self-test of the leads.

Blinks, lateral gaze and a jaw clench are asked for at the start of a recording. What the
leads show of them tells whether each sits where its label says and carries a signal.
"""

from __future__ import annotations

import math
from collections import defaultdict
from collections.abc import Iterable, Iterator, Sequence
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, NamedTuple

import numpy as np
from numpy.typing import NDArray

from artifactlens.epochs import finite_rows
from artifactlens.errors import SitesError
from artifactlens.sitecare.biocal_answers import Answer, Look, Suspect
from artifactlens.sitecare.biocal_blinks import judge_blinks
from artifactlens.sitecare.biocal_gaze import judge_gaze
from artifactlens.sitecare.biocal_jaw import judge_jaw
from artifactlens.sitecare.biocal_traces import Places, find_places, reduce_traces
from artifactlens.sitecare.biocal_words import Step, Task, announced, anywhere, steps

if TYPE_CHECKING:
    from artifactlens.frames import Frame
    from artifactlens.recording import Recording

__all__ = [
    "Calibration",
    "LeadFault",
    "Response",
    "Step",
    "Task",
    "calibrate",
    "respond",
    "steps",
]

BEFORE_S, AFTER_S = 6.0, 1.0
"""What is read around a task: the quiet before it, and the end of its last movement."""

FEWEST_SITES = 4

LEAST_S = 2.0
"""Less signal than this around a task tells nothing."""

CARRIED_HZ = 30.0
"""A clench is looked for if the recorder's low-pass lets through this much."""

_JUDGES = {"blink": judge_blinks, "gaze": judge_gaze, "jaw": judge_jaw}


@dataclass(frozen=True, slots=True)
class Response:
    """The answer to one task.

    Attributes
    ----------
    task : str
        One of :data:`~artifactlens.sitecare.biocal_words.KINDS`.
    onset : float
        When it was asked for, seconds from the start of the recording.
    verdict : str
        One of :data:`~artifactlens.sitecare.biocal_answers.VERDICTS`.
    sites : tuple of str
        Sites that answered, or those at fault, as the file spells them.
    sentence : str
    """

    task: str
    onset: float
    verdict: str
    sites: tuple[str, ...]
    sentence: str


@dataclass(frozen=True, slots=True)
class LeadFault:
    """What the answers point to, ready to become an :class:`~artifactlens.advice.Advice`.

    Attributes
    ----------
    cause, sign : str
        Words of :mod:`artifactlens.advice`: "site", "placement" or "patient" (who is to be
        asked again); "no response" or "mirrored".
    sites : tuple of str
        As the file spells them, the first one most.
    plain : bool
        Whether it is strong enough to act upon.
    stretches : tuple of (float, float)
        Onset and end of the tasks that showed it, seconds.
    reason : str
        One clause.
    checks : tuple of str
        What to do, in order.
    """

    cause: str
    sign: str
    sites: tuple[str, ...]
    plain: bool
    stretches: tuple[tuple[float, float], ...]
    reason: str
    checks: tuple[str, ...]


@dataclass(frozen=True, slots=True)
class Calibration:
    """Answers in order of time, and the faults they point to. Both empty if nothing was asked."""

    responses: tuple[Response, ...] = ()
    faults: tuple[LeadFault, ...] = ()

    @property
    def sentences(self) -> tuple[str, ...]:
        """What the calibration showed, a sentence for each task."""
        return tuple(response.sentence for response in self.responses)


def calibrate(
    recording: Recording, frame: Frame, *, asked: bool = False, seconds: float = 120.0
) -> Calibration:
    """Judge the calibration that a recording's own annotations announce.

    Only the stretches around the tasks are read. No text of an annotation reaches the
    outcome, which has our own words only.

    Parameters
    ----------
    recording : Recording
    frame : Frame
    asked : bool
        A calibration is known to have been done: where no annotation announces one, the first
        ``seconds`` are searched for blinks, gaze to both sides and a clench.
    seconds : float
    """
    end = recording.duration
    tasks = announced(recording.annotations, end)
    if not tasks and asked:
        tasks = anywhere(0.0, min(seconds, end))
    if not tasks:
        return Calibration()
    edges = [recording.filters[index].low_pass for index in frame.channels]
    fast = all(edge is None or edge >= CARRIED_HZ for edge in edges)
    cuts = (_read(recording, frame, task) for task in tasks)
    return _conclude(frame, recording.sampling_rate, tasks, cuts, fast)


def respond(
    sites_uv: NDArray[np.floating],
    sampling_rate: float,
    frame: Frame,
    tasks: Sequence[Task],
    *,
    start: float = 0.0,
) -> Calibration:
    """Judge tasks whose times are known, on site potentials in memory.

    Parameters
    ----------
    sites_uv : array, shape (n_sites, n_times), microvolt
        As :meth:`~artifactlens.frames.Frame.matrix` gives them; NaN where lost.
    sampling_rate : float, hertz
    frame : Frame
    tasks : sequence of Task
        In order of time.
    start : float
        Second of the first sample, on the clock of the tasks.

    Raises
    ------
    SitesError
        If there is not one row for each site of the frame.
    """
    sites = np.asarray(sites_uv)
    if sites.ndim != 2 or len(sites) != len(frame.sites):
        raise SitesError(
            f"One row of samples is needed for each of {len(frame.sites)} sites; given was an "
            f"array of shape {sites.shape}.",
            "Give frame.matrix() times the used channels.",
        )
    rate = sampling_rate
    cuts = []
    for task in tasks:
        first = max(round((task.onset - BEFORE_S - start) * rate), 0)
        last = min(max(round((task.end + AFTER_S - start) * rate), first), sites.shape[1])
        cuts.append(_Cut(sites[:, first:last], start + first / rate))
    return _conclude(frame, rate, tasks, cuts, True)


class _Cut(NamedTuple):
    """Site potentials (n_sites, n_times) and the second at which they begin."""

    sites_uv: NDArray[np.floating]
    start: float


def _read(recording: Recording, frame: Frame, task: Task) -> _Cut:
    """The stretch around a task, within the uninterrupted segment in which it begins."""
    rate = recording.sampling_rate
    for segment in recording.segments:
        if not 0 <= task.onset - segment.onset < segment.n_samples / rate:
            continue
        since = task.onset - segment.onset
        first = max(round((since - BEFORE_S) * rate), 0)
        last = min(round((since + task.duration + AFTER_S) * rate), segment.n_samples)
        channels = recording.read(segment.start + first, segment.start + last)
        channels = channels[frame.channels]
        there = finite_rows(channels)
        sites = frame.matrix(there) @ np.where(there[:, None], channels, np.float32(0))
        return _Cut(sites, segment.onset + first / rate)
    return _Cut(np.zeros((len(frame.sites), 0), np.float32), task.onset)


def _conclude(
    frame: Frame,
    sampling_rate: float,
    tasks: Sequence[Task],
    cuts: Iterable[_Cut],
    fast: bool,
) -> Calibration:
    places = find_places(frame)
    answers = []
    since = -math.inf
    for task, cut in zip(tasks, cuts, strict=True):
        answers.append(_answer(places, sampling_rate, task, cut, since, fast))
        since = max(since, task.end if task.timed else -math.inf)
    return Calibration(
        tuple(
            _response(frame, task, answer)
            for task, answer in zip(tasks, answers, strict=True)
        ),
        tuple(_faults(frame, tasks, answers)),
    )


def _answer(
    places: Places, sampling_rate: float, task: Task, cut: _Cut, since: float, fast: bool
) -> Answer:
    count = sum(role == "site" for role in places.frame.roles)
    if count < FEWEST_SITES:
        return Answer("cannot tell", (), f"{count} sites are too few")
    if cut.sites_uv.shape[1] < sampling_rate * LEAST_S:
        return Answer("cannot tell", (), "the signal is missing there")
    traces = reduce_traces(cut.sites_uv, sampling_rate, places.frame, cut.start, fast=fast)
    answer = _JUDGES[_family(task)](Look(task, traces, places, since))
    return answer if task.timed else _unasked(answer)


def _unasked(answer: Answer) -> Answer:
    """What is left of an answer at no known time: nobody knows whether it was the task."""
    if any(suspect.plain for suspect in answer.suspects):
        return answer
    verdict = answer.verdict
    if verdict in ("mirrored", "one side missing"):
        verdict = "cannot tell"
    return replace(answer, verdict=verdict, suspects=())


def _response(frame: Frame, task: Task, answer: Answer) -> Response:
    when = (
        _clock(task.onset) if task.timed else f"{_clock(task.onset)} to {_clock(task.end)}"
    )
    return Response(
        task=task.kind,
        onset=task.onset,
        verdict=answer.verdict,
        sites=tuple(frame.sites[row] for row in answer.rows),
        sentence=f"{when} {task.kind}: {answer.verdict}, {answer.clause}.",
    )


def _clock(seconds: float) -> str:
    whole = int(seconds)
    return f"{whole // 3600}:{whole // 60 % 60:02d}:{whole % 60:02d}"


def _faults(
    frame: Frame, tasks: Sequence[Task], answers: list[Answer]
) -> Iterator[LeadFault]:
    """What most answers of a family agree on; the same site and sign of all families together."""
    found: dict[tuple[str, str, tuple[int, ...]], list[tuple[Task, Suspect]]] = defaultdict(
        list
    )
    for task, answer in zip(tasks, answers, strict=True):
        for suspect in answer.suspects:
            found[suspect.cause, suspect.sign, suspect.rows].append((task, suspect))
    for (cause, sign, rows), group in found.items():
        families = {_family(task) for task, _ in group}
        others = [
            answer
            for task, answer in zip(tasks, answers, strict=True)
            if _family(task) in families and answer.verdict != "cannot tell"
        ]
        against = sum(_speaks_for(answer, rows, cause) for answer in others)
        if against >= len(group) or 2 * len(group) <= len(others):
            continue
        # What one of several tasks showed and the others could not tell is not plain.
        count = sum(_family(task) in families for task in tasks)
        first = {_family(task): suspect for task, suspect in reversed(group)}
        yield LeadFault(
            cause=cause,
            sign=sign,
            sites=tuple(frame.sites[row] for row in rows),
            plain=len(families) > 1
            or (any(suspect.plain for _, suspect in group) and 2 * len(group) > count),
            stretches=tuple((task.onset, task.end) for task, _ in group),
            reason="; ".join(first[family].reason for family in sorted(families)),
            checks=next(iter(first.values())).checks,
        )


def _family(task: Task) -> str:
    return task.kind.split()[0]


def _speaks_for(answer: Answer, rows: tuple[int, ...], cause: str) -> bool:
    """Whether an answer shows that the sites are sound, or the patient was willing."""
    if cause == "patient":
        return not set(rows).isdisjoint(answer.sound)
    return set(rows) <= set(answer.sound)
