"""Spans of time and the one-second epochs that they lie in."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

Bools = NDArray[np.bool_]
Seconds = NDArray[np.float64]
Span = tuple[float, float]
"""Begin and end."""

LEAST_OVERLAP = 0.1
"""Seconds of a flag or of a reading that make a second count as marked: both are told to a
tenth, and less than that is the edge of the second beside it."""


def touched(begin: Seconds, end: Seconds, onset: Seconds) -> Bools:
    """Which seconds an interval touches by a tenth, or by all of itself if it is shorter.

    Parameters
    ----------
    begin, end : array, shape (n,), seconds
    onset : array, shape (n_epochs,), seconds

    Returns
    -------
    array, shape (n, n_epochs), bool
    """
    shared = np.minimum(end[:, None], onset + 1) - np.maximum(begin[:, None], onset)
    # Tenths are no binary fractions: a microsecond is left for rounding.
    least = np.minimum(LEAST_OVERLAP, end - begin)[:, None] - 1e-6
    return np.asarray((shared >= least) & (shared > 0))


def within(spans: Sequence[Span], onset: Seconds) -> Bools:
    """Which seconds have their middle in one of the spans, shape (n_epochs,)."""
    bounds = np.array(spans, dtype=np.float64).reshape(-1, 2)
    middle = onset + 0.5
    inside = (bounds[:, :1] <= middle) & (middle < bounds[:, 1:])
    return np.asarray(inside.any(axis=0))


def runs(mask: Bools) -> list[tuple[int, int]]:
    """First place, and place after the last, of every uninterrupted run of a mask (n,)."""
    edges = np.flatnonzero(np.diff(np.r_[False, mask, False])).tolist()
    return list(zip(edges[::2], edges[1::2], strict=True))
