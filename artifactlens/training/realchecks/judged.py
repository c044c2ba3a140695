"""A measured recording as a user of a given model would see it judged."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from artifactlens.curves import Model
from artifactlens.errors import RecordingError
from artifactlens.flagging import MARKS
from artifactlens.kinds import KIND_NAMES
from artifactlens.pipeline import Measured, conclude
from artifactlens.result import Flag
from artifactlens.training.corpora.spans import Bools, touched


@dataclass(frozen=True, slots=True)
class Judged:
    """What the pipeline concludes at both operating points.

    ``onset`` (n_epochs,) in seconds; ``probability`` (n_kinds, n_epochs, n_sites), NaN where
    not assessable; ``sites`` as the file spells them, ``canonical`` in the 10-05 system;
    ``flags`` per operating point; ``limits`` the probability of every operating point and
    kind.
    """

    onset: NDArray[np.float64]
    probability: NDArray[np.float64]
    sites: tuple[str, ...]
    canonical: tuple[str | None, ...]
    flags: dict[str, tuple[Flag, ...]]
    limits: dict[str, dict[str, float]]

    def second_score(
        self, kind: str, columns: NDArray[np.intp] | None = None
    ) -> NDArray[np.float64]:
        """Highest probability over the sites, shape (n_epochs,); NaN where there is none."""
        rows = self.probability[KIND_NAMES.index(kind)]
        return highest(rows if columns is None else rows[:, columns])

    def reached(self, mark: str, kind: str) -> Bools:
        """Seconds whose own score reaches an operating point, shape (n_epochs,).

        Unlike a flag this has no refined ends and does not run on into doubtful seconds.
        """
        return np.asarray(self.reached_cells(mark, kind).any(axis=1))

    def reached_cells(self, mark: str, kind: str) -> Bools:
        """As :meth:`reached`, cell by cell: shape (n_epochs, n_sites)."""
        rows = self.probability[KIND_NAMES.index(kind)]
        return np.asarray(rows >= self.limits[mark][kind])

    def flagged(
        self, mark: str, kind: str, columns: NDArray[np.intp] | None = None
    ) -> Bools:
        """Seconds under a flag of the kind (at one of the sites), shape (n_epochs,)."""
        chosen = self._flags_at(mark, kind, columns)
        return np.asarray(_seconds_of(chosen, self.onset).any(axis=0))

    def flagged_cells(self, mark: str, kind: str) -> Bools:
        """Cells under a flag of the kind, shape (n_epochs, n_sites)."""
        chosen = self._flags_at(mark, kind, None)
        seconds = _seconds_of(chosen, self.onset)
        sites = np.array(
            [[site in flag.sites for site in self.sites] for flag in chosen], dtype=bool
        ).reshape(len(chosen), len(self.sites))
        return (seconds.T.astype(np.int64) @ sites.astype(np.int64)) > 0

    def _flags_at(
        self, mark: str, kind: str, columns: NDArray[np.intp] | None
    ) -> list[Flag]:
        names = None if columns is None else {self.sites[column] for column in columns}
        return [
            flag
            for flag in self.flags[mark]
            if flag.kind == kind and (names is None or names.intersection(flag.sites))
        ]


def judge_recording(measured: Measured, model: Model) -> Judged:
    """Conclude a measured recording at both operating points."""
    results = {
        mark: conclude(measured, model, mark=mark, line_frequency=None) for mark in MARKS
    }
    scores = results["sure"].scores
    if scores is None:
        raise RecordingError(
            "A result with scores is needed; this one has none.",
            "Conclude the measured recording again.",
        )
    return Judged(
        onset=scores.onset,
        probability=scores.probability.astype(np.float64),
        sites=scores.sites,
        canonical=measured.frame.canonical,
        flags={mark: result.flags for mark, result in results.items()},
        limits={
            mark: {head.kind: head.limit(mark) for head in model.heads} for mark in MARKS
        },
    )


def _seconds_of(flags: list[Flag], onset: NDArray[np.float64]) -> Bools:
    begin = np.array([flag.onset for flag in flags])
    return touched(begin, np.array([flag.end for flag in flags]), onset)


def highest(probability: NDArray[np.float64]) -> NDArray[np.float64]:
    """Largest known value of the last axis; NaN where all are unknown."""
    known = np.where(np.isnan(probability), -np.inf, probability)
    top = known.max(axis=-1, initial=-np.inf)
    return np.where(np.isinf(top), np.nan, top)
