"""What a task was answered with, and which leads that makes suspect."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from artifactlens.sitecare.biocal_traces import Array, Bools, Places, Traces, quiet_level
from artifactlens.sitecare.biocal_words import Task

VERDICTS = ("as expected", "missing", "mirrored", "one side missing", "cannot tell")

LATE_SECONDS = 5.0
"""Notes are typed by hand: what is not seen after one may have come so far before it."""


LEAST_QUIET_S = 2.0


@dataclass(frozen=True, slots=True)
class Suspect:
    """A lead fault that an answer points to.

    ``cause`` and ``sign`` are words of :mod:`artifactlens.advice`; ``rows`` the sites
    concerned, the first one most; ``plain`` whether it is strong enough to act upon;
    ``reason`` one clause; ``checks`` in the order of work.
    """

    cause: str
    sign: str
    rows: tuple[int, ...]
    plain: bool
    reason: str
    checks: tuple[str, ...]


@dataclass(frozen=True, slots=True)
class Answer:
    """What was seen of one task: one of ``VERDICTS``, the sites meant and a clause.

    ``sound`` are the rows that answered as they should.
    """

    verdict: str
    rows: tuple[int, ...]
    clause: str
    sound: tuple[int, ...] = ()
    suspects: tuple[Suspect, ...] = ()


@dataclass(frozen=True, eq=False)
class Look:
    """One task before the traces around it; ``since`` is when the task before it ended."""

    task: Task
    traces: Traces
    places: Places
    since: float

    def within(self, time: Array) -> Bools:
        """Moments of the task, with a tolerance at both ends."""
        inside = (time >= self.task.onset - 0.2) & (time <= self.task.end + 0.3)
        return np.asarray(inside)

    def before(self, time: Array) -> Bools:
        """Moments just before it that belong to no other task."""
        first = max(self.since, self.task.onset - LATE_SECONDS)
        return np.asarray((time >= first) & (time < self.task.onset - 0.2))

    def quiet(self, values: Array) -> Array:
        """Usual level at each site: of the seconds before the task, or of all if that is less.

        Many blinks on end leave too little quiet within the task.
        """
        everywhere = quiet_level(values)
        before = values[:, self.traces.time < self.task.onset - 0.2]
        if np.isfinite(before).any(axis=0).sum() < LEAST_QUIET_S * self.traces.slow_rate:
            return everywhere
        return np.asarray(np.fmin(everywhere, quiet_level(before)))

    def name(self, row: int) -> str:
        """The file's spelling of a site."""
        return self.places.frame.sites[row]

    def names(self, rows: tuple[int, ...], *, most: int = 4, last: str = "and") -> str:
        """The names of sites in a sentence."""
        shown = [self.name(row) for row in rows[:most]]
        if len(rows) > most:
            shown[-1:] = [f"{len(rows) - most + 1} more"]
        return f" {last} ".join(filter(None, [", ".join(shown[:-1]), shown[-1]]))

    def measured(self, rows: tuple[int, ...], values: Array) -> str:
        """Sites with their deflections, "Fp1 +142 uV and Fp2 +150 uV"."""
        shown = [f"{self.name(row)} {values[row]:+.0f} uV" for row in rows[:4]]
        return " and ".join(filter(None, [", ".join(shown[:-1]), shown[-1]]))


def strongest_first(rows: NDArray[np.intp], values: Array) -> tuple[int, ...]:
    """Rows in order of their absolute values."""
    return tuple(int(row) for row in rows[np.argsort(-np.abs(values[rows]), kind="stable")])
