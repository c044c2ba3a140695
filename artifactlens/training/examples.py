"""Labelled examples: per epoch and site, the features and the truth of each kind."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from artifactlens.features.catalogue import FEATURE_NAMES
from artifactlens.kinds import KIND_NAMES

if TYPE_CHECKING:
    from artifactlens.features import FeatureTable

UNKNOWN, CLEAN, PRESENT = -1, 0, 1


@dataclass(frozen=True, slots=True)
class Examples:
    """Rows of (epoch, site) cells.

    Attributes
    ----------
    features : array, shape (n_rows, n_features), float32
        In the order of ``FEATURE_NAMES``.
    truth : array, shape (n_rows, n_kinds), int8
        1 present, 0 clean, -1 unknown or too weak to call.
    person : array, shape (n_rows,), str
    second : array, shape (n_rows,), int
        The same number for all sites of one second; unique over the set.
    origin : array, shape (n_rows,), str
        Corpus, with "simulated" or "real" before a colon.
    condition : array, shape (n_rows,), str
        The recording conditions in words.
    strength : array, shape (n_rows, n_kinds), float32
        Size of the artifact at the cell (see ``simulated.py``), 0 where there is none,
        NaN where unknown.
    look_alike : array, shape (n_rows,), str
        Cerebral pattern that was put into this second, or "".
    """

    features: NDArray[np.float32]
    truth: NDArray[np.int8]
    person: NDArray[np.str_]
    second: NDArray[np.int64]
    origin: NDArray[np.str_]
    condition: NDArray[np.str_]
    strength: NDArray[np.float32]
    look_alike: NDArray[np.str_]

    def __len__(self) -> int:
        return len(self.features)

    def subset(self, rows: NDArray[np.bool_]) -> Examples:
        """The rows for which ``rows`` is true."""
        return Examples(
            *(getattr(self, name)[rows] for name in Examples.__dataclass_fields__)
        )


def from_table(
    table: FeatureTable,
    truth: NDArray[np.int8],
    strength: NDArray[np.float32],
    *,
    person: str,
    origin: str,
    condition: str = "",
    look_alike: NDArray[np.str_] | None = None,
) -> Examples:
    """Rows of one recording.

    Parameters
    ----------
    table : FeatureTable
    truth, strength : arrays, shape (n_kinds, n_epochs, n_sites)
    look_alike : array, shape (n_epochs,), optional
    """
    known = np.isfinite(table.values[0])
    features = np.stack([table.column(name)[known] for name in FEATURE_NAMES], axis=1)
    n_rows = len(features)
    second = np.nonzero(known)[0].astype(np.int64)
    patterns = np.full(len(known), "") if look_alike is None else look_alike
    return Examples(
        features=features.astype(np.float32),
        truth=np.stack([truth[k][known] for k in range(len(KIND_NAMES))], axis=1),
        person=np.full(n_rows, person),
        second=second,
        origin=np.full(n_rows, origin),
        condition=np.full(n_rows, condition),
        strength=np.stack([strength[k][known] for k in range(len(KIND_NAMES))], axis=1),
        look_alike=patterns[second],
    )


def join(parts: list[Examples]) -> Examples:
    """One set of several; seconds stay unique."""
    offset, seconds = 0, []
    for part in parts:
        seconds.append(part.second + offset)
        offset += int(part.second.max(initial=-1)) + 1
    joined = {
        name: np.concatenate([getattr(part, name) for part in parts])
        for name in Examples.__dataclass_fields__
        if name != "second"
    }
    return Examples(second=np.concatenate(seconds), **joined)
