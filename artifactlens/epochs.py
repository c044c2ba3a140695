"""From a recording to bounded batches of one-second epochs of site potentials."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

if TYPE_CHECKING:
    from artifactlens.frames import Frame
    from artifactlens.recording import Recording

Bools = NDArray[np.bool_]

BATCH_EPOCHS = 32

SLOWEST_HZ = 10.0
"""With fewer samples a second no kind and no electrode can be judged."""

FLAT_UV = 0.2
"""Peak-to-peak below which a channel is flat: an amplifier alone makes more noise."""

CLIPPED_SHARE = 0.04
"""Share of an epoch's samples on its own extreme value from which it counts as clipped."""

CLIPPED_UV = 150.0
"""Clipping is looked for only in swings larger than this."""


@dataclass(frozen=True, slots=True)
class EpochGrid:
    """One-second epochs from the start of every uninterrupted segment.

    ``start`` (n_epochs,) first sample of each epoch, ``onset`` (n_epochs,) seconds from the
    start of the recording, ``segment`` (n_epochs,) index of its segment. ``n_samples`` is
    the length of an epoch: the whole samples that fit into a second.
    """

    start: NDArray[np.int64]
    onset: NDArray[np.float64]
    segment: NDArray[np.int64]
    n_samples: int

    def __len__(self) -> int:
        return len(self.start)


@dataclass(frozen=True, slots=True)
class EpochBatch:
    """Site potentials of a few neighbouring epochs with one second of context either side.

    Attributes
    ----------
    first : int
        Index of the first epoch in the grid.
    sites_uv : array, shape (n_sites, n_times), microvolt, float32
        Mean zero over each connected chain; 0 where a site is not available.
    starts : array, shape (n_epochs + 2,)
        First sample in ``sites_uv`` of each epoch, the context epochs included.
    inside : array, shape (n_epochs + 2,), bool
        False for context beyond an end of the segment (filled by mirroring).
    ok : array, shape (n_sites, n_epochs + 2), bool
        Whether the site has a signal in the epoch.
    n_samples : int
        Samples in an epoch.
    sampling_rate : float, hertz
    flat, missing, clipped : array, shape (n_channels, n_epochs), bool
        Faults of the used channels.
    """

    first: int
    sites_uv: NDArray[np.float32]
    starts: NDArray[np.int64]
    inside: NDArray[np.bool_]
    ok: NDArray[np.bool_]
    n_samples: int
    sampling_rate: float
    flat: NDArray[np.bool_]
    missing: NDArray[np.bool_]
    clipped: NDArray[np.bool_]

    def __len__(self) -> int:
        return len(self.starts) - 2

    def windows(
        self, starts: NDArray[np.int64], n: int, signal: NDArray[np.float32] | None = None
    ) -> NDArray[np.float32]:
        """Windows of ``n`` samples, shape (n_rows, n_windows, n); a view where possible."""
        return windows_of(self.sites_uv if signal is None else signal, starts, n)


def windows_of(
    signal: NDArray[np.float32], starts: NDArray[np.int64], n: int
) -> NDArray[np.float32]:
    """Cut ``signal`` (n_rows, n_times) into windows, shape (n_rows, n_windows, n).

    Back-to-back windows come as a view, others as a copy.
    """
    if len(starts) and np.all(np.diff(starts) == n):
        first = int(starts[0])
        return signal[:, first : first + n * len(starts)].reshape(
            len(signal), len(starts), n
        )
    return signal[:, starts[:, None] + np.arange(n)]


def finite_rows(values: NDArray[np.floating]) -> Bools:
    """Which rows of a matrix hold finite numbers only, shape (n_rows,)."""
    return np.asarray(np.isfinite(values).all(axis=1))


def median_of_known(values: NDArray[np.floating]) -> NDArray[np.float32]:
    """Median over the first axis ignoring NaN; NaN where nothing is left."""
    ordered = np.sort(values, axis=0)
    count = np.isfinite(ordered).sum(axis=0)
    low, high = np.maximum((count - 1) // 2, 0), np.minimum(count // 2, len(values) - 1)
    middle = (
        np.take_along_axis(ordered, low[None], 0)[0]
        + np.take_along_axis(ordered, high[None], 0)[0]
    ) / 2
    return np.where(count > 0, middle, np.float32(np.nan)).astype(np.float32)


def epoch_grid(recording: Recording) -> EpochGrid:
    """Lay the grid of one-second epochs; a rest shorter than an epoch is left out."""
    rate = recording.sampling_rate
    n = int(np.floor(rate + 1e-9))
    start, onset, index = [], [], []
    for number, segment in enumerate(recording.segments):
        most = int(segment.n_samples / rate) + 1
        offset = np.rint(np.arange(most) * rate).astype(np.int64)
        offset = offset[offset + n <= segment.n_samples]
        start.append(segment.start + offset)
        onset.append(segment.onset + offset / rate)
        index.append(np.full(len(offset), number, dtype=np.int64))
    empty = np.zeros(0)
    return EpochGrid(
        start=np.concatenate([*start, empty]).astype(np.int64),
        onset=np.concatenate([*onset, empty]),
        segment=np.concatenate([*index, empty]).astype(np.int64),
        n_samples=n,
    )


def batches(
    recording: Recording,
    frame: Frame,
    grid: EpochGrid,
    batch_epochs: int = BATCH_EPOCHS,
    levels_uv: NDArray[np.float32] | None = None,
) -> Iterator[EpochBatch]:
    """Read the recording once, a batch at a time; no batch crosses a gap.

    ``levels_uv`` (n_used_channels,) is taken off every channel, so that an electrode offset
    makes no jump in the others where its channel is lost.
    """
    segments = recording.segments
    solved: dict[bytes, NDArray[np.float32]] = {}
    for number, segment in enumerate(segments):
        members = np.flatnonzero(grid.segment == number)
        for low in range(0, len(members), batch_epochs):
            chosen = members[low : low + batch_epochs]
            yield _batch(
                recording, frame, grid, chosen, segment.start, segment.n_samples, solved,
                levels_uv,
            )  # fmt: skip


def _batch(
    recording: Recording,
    frame: Frame,
    grid: EpochGrid,
    chosen: NDArray[np.intp],
    segment_start: int,
    segment_length: int,
    solved: dict[bytes, NDArray[np.float32]],
    levels_uv: NDArray[np.float32] | None,
) -> EpochBatch:
    n, rate = grid.n_samples, recording.sampling_rate
    own = grid.start[chosen]
    # Context lies where the grid has it, so that no measure depends on the batch size.
    before = _beside(grid, int(chosen[0]), -1)
    after = _beside(grid, int(chosen[-1]), +1)
    positions = np.concatenate([[before], own, [after]])
    low, high = max(before, segment_start), min(after + n, segment_start + segment_length)
    data = recording.read(low, high)[frame.channels]
    inside = np.ones(len(positions), dtype=bool)
    inside[0] = before >= segment_start
    inside[-1] = after + n <= segment_start + segment_length
    if low > before or high < after + n:
        pad = ((0, 0), (low - before, after + n - high))
        mode = "symmetric" if max(pad[1]) <= data.shape[1] else "edge"
        data = np.pad(data, pad, mode=mode)  # type: ignore[call-overload]
    starts = positions - before

    epochs = windows_of(data, starts, n)
    top, bottom = epochs.max(axis=2), epochs.min(axis=2)
    # Samples between two epochs (rates that are no whole number) count as well.
    missing = np.logical_or.reduceat(~np.isfinite(data), starts, axis=1)
    with np.errstate(invalid="ignore"):
        flat = ~missing & (top - bottom < FLAT_UV)
        large = ~missing & (top - bottom > CLIPPED_UV)
    clipped = np.zeros_like(large)
    if large.any():
        rows, columns = np.nonzero(large)
        cut = epochs[rows, columns]
        at_extreme = np.maximum(
            (cut == top[rows, columns, None]).mean(axis=1),
            (cut == bottom[rows, columns, None]).mean(axis=1),
        )
        clipped[rows, columns] = at_extreme > CLIPPED_SHARE
    if levels_uv is not None and len(levels_uv):
        data = data - levels_uv[:, None]
    sites, ok = _solve(data, ~(missing | flat), starts, frame, solved)
    core = slice(1, -1)
    return EpochBatch(
        first=int(chosen[0]),
        sites_uv=sites,
        starts=starts,
        inside=inside,
        ok=ok,
        n_samples=n,
        sampling_rate=rate,
        flat=flat[:, core],
        missing=missing[:, core],
        clipped=clipped[:, core],
    )


def _beside(grid: EpochGrid, epoch: int, way: int) -> int:
    """First sample of the epoch before (-1) or behind (+1), in the segment or beyond it."""
    other = epoch + way
    if 0 <= other < len(grid) and grid.segment[other] == grid.segment[epoch]:
        return int(grid.start[other])
    return int(grid.start[epoch]) + way * grid.n_samples


def _solve(
    data: NDArray[np.float32],
    available: NDArray[np.bool_],
    starts: NDArray[np.int64],
    frame: Frame,
    solved: dict[bytes, NDArray[np.float32]],
) -> tuple[NDArray[np.float32], NDArray[np.bool_]]:
    """Site potentials; each pattern of available channels has its own least squares."""

    def matrix_for(pattern: NDArray[np.bool_]) -> NDArray[np.float32]:
        key = pattern.tobytes()
        if key not in solved:
            solved[key] = frame.matrix(pattern)
        return solved[key]

    patterns, which = np.unique(available, axis=1, return_inverse=True)
    which = which.ravel()
    n_sites = len(frame.sites)
    ok = np.empty((n_sites, len(starts)), dtype=bool)
    if patterns.shape[1] == 1:
        matrix = matrix_for(patterns[:, 0])
        good = finite_rows(matrix)
        ok[:] = good[:, None]
        if not available.all():
            data = np.where(patterns, data, np.float32(0))
        return np.where(good[:, None], matrix, np.float32(0)) @ data, ok
    sites = np.zeros((n_sites, data.shape[1]), dtype=np.float32)
    # Samples between two epochs (rates that are no whole number) go with the epoch before.
    owner = np.repeat(which, np.diff(np.append(starts, data.shape[1])))
    for number in range(patterns.shape[1]):
        pattern = patterns[:, number]
        matrix = matrix_for(pattern)
        good = finite_rows(matrix)
        ok[:, which == number] = good[:, None]
        part = np.where(pattern[:, None], data[:, owner == number], np.float32(0))
        sites[:, owner == number] = np.where(good[:, None], matrix, np.float32(0)) @ part
    return sites, ok
