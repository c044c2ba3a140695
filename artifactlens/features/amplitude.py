"""Features of the trace itself: swing, fastest step, and what a step leaves behind."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

if TYPE_CHECKING:
    from artifactlens.epochs import EpochBatch

Array = NDArray[np.float32]

STEP_SECONDS = 0.016
"""A pop rises within a few milliseconds, smeared by the recorder's low-pass."""

BINS_PER_SECOND = 10
SMALL_UV = np.float32(0.05)


@dataclass(frozen=True, slots=True)
class Steps:
    """The fastest step of each epoch and site.

    ``size`` signed microvolt and ``at`` (sample within the epoch), shape (n_sites,
    n_epochs); ``elsewhere`` root mean square step of the neighbours that have a signal at the
    same instant, microvolt, NaN where none has; ``pace`` mean absolute step in tenths of a
    second, shape (n_sites, n_epochs, 10), microvolt; ``retention`` see :func:`step_retention`.
    """

    size: Array
    at: NDArray[np.intp]
    elsewhere: Array
    pace: Array
    retention: Array


def swing(batch: EpochBatch) -> Array:
    """Peak-to-peak amplitude, shape (n_sites, n_epochs), microvolt."""
    epochs = batch.windows(batch.starts[1:-1], batch.n_samples)
    return epochs.max(axis=2) - epochs.min(axis=2)


def fastest_steps(batch: EpochBatch, neighbours: Array) -> Steps:
    """Find the largest change over 16 ms and look at the neighbours at that instant.

    Parameters
    ----------
    batch : EpochBatch
    neighbours : array, shape (n_sites, n_sites)
        Weights of each site's neighbours, rows summing to 1.
    """
    n, rate = batch.n_samples, batch.sampling_rate
    lag = max(1, round(STEP_SECONDS * rate))
    signal = batch.sites_uv
    change = np.empty_like(signal)
    np.subtract(signal[:, lag:], signal[:, :-lag], out=change[:, :-lag])
    change[:, -lag:] = 0
    _forget_lost(batch, change, lag)
    starts = batch.starts[1:-1]
    within = batch.windows(starts, n, change)
    size_abs = np.abs(within)
    at = size_abs.argmax(axis=2)
    rows = np.arange(len(signal))[:, None]
    instant = starts + at
    size = change[rows, instant]

    # A neighbour's share of the same step may come a sample earlier or later.
    seen = np.abs(change[:, instant])
    for shift in (-(lag // 2), lag // 2):
        if shift:
            np.maximum(seen, np.abs(change[:, instant + shift]), out=seen)
    there = neighbours @ batch.ok[:, 1:-1].astype(np.float32)
    with np.errstate(divide="ignore", invalid="ignore"):
        square = np.einsum("st,tse->se", neighbours, seen**2) / there
    elsewhere = np.sqrt(np.where(there > 0, square, np.nan)).astype(np.float32)

    edges = (np.arange(BINS_PER_SECOND) * n) // BINS_PER_SECOND
    counts = np.diff(np.append(edges, n)).astype(np.float32)
    pace = (np.add.reduceat(size_abs, edges, axis=2) / counts).astype(np.float32)
    return Steps(size, at, elsewhere, pace, step_retention(batch, size, instant, lag))


def _forget_lost(batch: EpochBatch, change: Array, lag: int) -> None:
    """A site that is lost falls to 0 in the frame: that jump is none of its trace."""
    rows, epochs = np.nonzero(batch.ok[:, :-1] & ~batch.ok[:, 1:])
    if len(rows):
        ends = batch.starts[epochs + 1]
        change[rows[:, None], ends[:, None] - np.arange(1, lag + 1)] = 0


def step_retention(
    batch: EpochBatch, size: Array, instant: NDArray[np.intp], lag: int
) -> Array:
    """How much of a step still stands a tenth of a second later.

    Mean of the trace 30-130 ms after the step less its mean 20-120 ms before, over the
    size of the step. A pop decays with the recorder's time constant (tau = 1/(2 pi fc), so
    0.16 s or more at 1 Hz or less) and keeps most of it; a spike comes back and swings
    over: near 0 or below. "Steep rise and slow fall" (SCORE, Beniczky et al. 2017).

    Returns
    -------
    array, shape (n_sites, n_epochs), ratio limited to -1..2
    """
    rate = batch.sampling_rate
    total = np.zeros((len(batch.sites_uv), batch.sites_uv.shape[1] + 1))
    np.cumsum(batch.sites_uv, axis=1, out=total[:, 1:])
    rows = np.arange(len(total))[:, None]
    last = total.shape[1] - 1
    span = max(1, round(0.1 * rate))

    def mean_from(first: NDArray[np.intp]) -> NDArray[np.float64]:
        low, high = np.clip(first, 0, last), np.clip(first + span, 0, last)
        width = np.maximum(high - low, 1)
        return np.asarray((total[rows, high] - total[rows, low]) / width)

    after = mean_from(instant + lag + round(0.03 * rate))
    before = mean_from(instant - round(0.02 * rate) - span)
    step = np.where(np.abs(size) > SMALL_UV, size, np.inf)
    return np.clip((after - before) / step, -1, 2).astype(np.float32)
