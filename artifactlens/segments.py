"""From scores per second and site to segments: hysteresis, merging, refined ends."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

if TYPE_CHECKING:
    from artifactlens.epochs import EpochGrid
    from artifactlens.features import FeatureTable

Ints = NDArray[np.intp]
Bools = NDArray[np.bool_]

HOLE_SECONDS = {"eye": 0, "muscle": 1, "pop": 0, "mains": 5}
"""A pause of at most so many epochs between two marked ones does not split a segment."""

SAME_EVENT_OVERLAP = 0.5
"""Runs at two sites are one event if they share this part of the longer one."""

SITE_SHARE = 0.3
"""A site belongs to an eye event if it is marked in this share of its epochs."""

POP_TOGETHER_SECONDS = 0.05
TENTHS = 10


@dataclass(frozen=True, slots=True)
class Segments:
    """Events of one kind, in order of onset.

    ``first`` and ``last`` (exclusive) are epoch indices; ``sites`` holds a tuple of site
    indices per event; ``peak_epoch`` and ``peak_site`` its strongest cell;
    ``first_site`` and ``last_site`` the sites that begin and end it. All but ``sites`` have
    shape (n_events,).
    """

    first: Ints
    last: Ints
    sites: list[tuple[int, ...]]
    peak_epoch: Ints
    peak_site: Ints
    first_site: Ints
    last_site: Ints


def find_segments(
    kind: str,
    probability: NDArray[np.floating],
    grid: EpochGrid,
    step_at: NDArray[np.floating],
    *,
    enter: float,
    stay: float,
) -> Segments:
    """Events of one kind.

    Parameters
    ----------
    kind : str
    probability : array, shape (n_epochs, n_sites)
        NaN where the kind cannot be judged.
    grid : EpochGrid
        No event crosses a gap.
    step_at : array, shape (n_epochs, n_sites)
        Place of the fastest step within the epoch, 0..1.
    enter, stay : float
        Hysteresis: an event needs one cell at ``enter`` or more and lasts while cells stay
        at ``stay`` or more.
    """
    p = np.nan_to_num(probability, nan=-1.0)
    if kind == "eye":
        # The field of one movement of the eyes reaches many sites at once.
        together = p.max(axis=1, initial=-1.0)[:, None]
        runs = _runs(together, grid, enter, stay, HOLE_SECONDS[kind])
        return _eye_events(runs, p, stay)
    runs = _runs(p, grid, enter, stay, HOLE_SECONDS[kind])
    return _merge(kind, runs, p, step_at)


@dataclass(frozen=True, slots=True)
class _Runs:
    """Uninterrupted stretches at single columns, column after column."""

    column: Ints
    first: Ints
    last: Ints


def _runs(
    p: NDArray[np.floating], grid: EpochGrid, enter: float, stay: float, hole: int
) -> _Runs:
    n_epochs, n_columns = p.shape
    if not n_epochs:
        nothing = np.zeros(0, dtype=np.intp)
        return _Runs(nothing, nothing, nothing)
    low = p >= stay
    breaks = np.flatnonzero(np.diff(grid.segment)) + 1
    edges = np.zeros((n_epochs + 1, n_columns), dtype=np.int8)
    edges[:-1] += low
    edges[1:] -= low
    if len(breaks):
        # A gap ends a run and starts another even if both sides are marked.
        both = low[breaks - 1] & low[breaks]
    first_c, first_e = np.nonzero((edges == 1).T)
    last_c, last_e = np.nonzero((edges == -1).T)
    if len(breaks) and both.any():
        which, column = np.nonzero(both)
        first_c, first_e = _insert(first_c, first_e, column, breaks[which])
        last_c, last_e = _insert(last_c, last_e, column, breaks[which])
    column, first, last = first_c, first_e, last_e
    # Only runs that somewhere reach the upper threshold count.
    high = np.zeros((n_epochs + 1, n_columns), dtype=np.int64)
    np.cumsum(p >= enter, axis=0, out=high[1:])
    keep = high[last, column] > high[first, column]
    column, first, last = column[keep], first[keep], last[keep]
    if hole and len(column):
        joins = (
            (column[1:] == column[:-1])
            & (first[1:] - last[:-1] <= hole)
            & (grid.segment[first[1:]] == grid.segment[last[:-1] - 1])
        )
        begin = np.concatenate([[True], ~joins])
        end = np.concatenate([~joins, [True]])
        column, first, last = column[begin], first[begin], last[end]
    return _Runs(column, first, last)


def _insert(column: Ints, epoch: Ints, more_c: Ints, more_e: Ints) -> tuple[Ints, Ints]:
    column, epoch = np.append(column, more_c), np.append(epoch, more_e)
    order = np.lexsort((epoch, column))
    return column[order], epoch[order]


def _eye_events(runs: _Runs, p: NDArray[np.floating], stay: float) -> Segments:
    sites: list[tuple[int, ...]] = []
    peak_epoch = np.zeros(len(runs.first), dtype=np.intp)
    peak_site = np.zeros_like(peak_epoch)
    for number, (first, last) in enumerate(zip(runs.first, runs.last, strict=True)):
        part = p[first:last]
        epoch, site = np.unravel_index(int(part.argmax()), part.shape)
        share = (part >= stay).mean(axis=0)
        share[site] = 1.0
        sites.append(tuple(int(index) for index in np.flatnonzero(share >= SITE_SHARE)))
        peak_epoch[number], peak_site[number] = first + epoch, site
    return Segments(
        runs.first, runs.last, sites, peak_epoch, peak_site, peak_site, peak_site.copy()
    )


def _merge(
    kind: str,
    runs: _Runs,
    p: NDArray[np.floating],
    step_at: NDArray[np.floating],
) -> Segments:
    n = len(runs.first)
    if not n:
        nothing = np.zeros(0, dtype=np.intp)
        return Segments(nothing, nothing, [], nothing, nothing, nothing, nothing)
    peak = _peaks(runs, p)
    group = _groups(kind, runs, peak, p.shape, step_at)
    strength = p[peak, runs.column]

    # Of runs that begin or end together, the strongest tells the time, not the first channel.
    order = np.lexsort((-strength, runs.first, group))
    starts = np.flatnonzero(np.diff(group[order], prepend=-1))
    first = np.minimum.reduceat(runs.first[order], starts)
    last = np.maximum.reduceat(runs.last[order], starts)
    members = np.split(order, starts[1:])
    sites = [tuple(sorted({int(runs.column[run]) for run in part})) for part in members]
    first_site = runs.column[order[starts]]
    by_last = np.lexsort((-strength, -runs.last, group))
    last_site = runs.column[by_last[starts]]
    by_strength = np.lexsort((-strength, group))[starts]

    in_time = np.lexsort((first_site, first))
    return Segments(
        first[in_time],
        last[in_time],
        [sites[index] for index in in_time],
        peak[by_strength][in_time],
        runs.column[by_strength][in_time],
        first_site[in_time],
        last_site[in_time],
    )


def _peaks(runs: _Runs, p: NDArray[np.floating]) -> Ints:
    """Epoch of the highest probability of each run."""
    length = runs.last - runs.first
    offset = np.concatenate([[0], np.cumsum(length)[:-1]])
    member = np.repeat(np.arange(len(length)), length)
    epoch = np.arange(length.sum()) - offset[member] + runs.first[member]
    value = p[epoch, runs.column[member]]
    highest = np.maximum.reduceat(value, offset)
    is_peak = value == highest[member]
    owner, place = np.unique(member[is_peak], return_index=True)
    peak = np.empty(len(length), dtype=np.intp)
    peak[owner] = epoch[is_peak][place]
    return peak


def _groups(
    kind: str,
    runs: _Runs,
    peak: Ints,
    shape: tuple[int, ...],
    step_at: NDArray[np.floating],
) -> Ints:
    """Which runs are one event: those that share most of their time (a pop: its instant)."""
    from scipy.sparse import coo_array
    from scipy.sparse.csgraph import connected_components

    n, n_sites = len(runs.first), shape[1]
    run_at = np.full((n_sites, shape[0] + 1), -1, dtype=np.int64)
    length = runs.last - runs.first
    member = np.repeat(np.arange(n), length)
    offset = np.concatenate([[0], np.cumsum(length)[:-1]])
    epoch = np.arange(length.sum()) - offset[member] + runs.first[member]
    run_at[runs.column[member], epoch] = member

    one = np.repeat(np.arange(n), n_sites)
    other_site = np.tile(np.arange(n_sites), n)
    # Of two overlapping runs, one holds the first epoch of the other.
    other = run_at[other_site, runs.first[one]]
    held = (other >= 0) & (other != one)
    one, other = one[held], other[held]
    shared = np.minimum(runs.last[one], runs.last[other]) - np.maximum(
        runs.first[one], runs.first[other]
    )
    same = shared >= SAME_EVENT_OVERLAP * np.maximum(length[one], length[other])
    if kind == "pop":
        at = peak + step_at[peak, runs.column]
        same &= np.abs(at[one] - at[other]) <= POP_TOGETHER_SECONDS
    one, other = one[same], other[same]
    links = coo_array((np.ones(len(one)), (one, other)), shape=(n, n))
    return connected_components(links, directed=False)[1].astype(np.intp)


def refine(
    kind: str,
    events: Segments,
    grid: EpochGrid,
    table: FeatureTable,
    quiet_pace: NDArray[np.floating],
    tail_seconds: float,
) -> tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.float64]]:
    """Onset, end and driving moment of each event in seconds, finer than the grid.

    Eye and muscle begin and end where the pace of the trace (mean step per tenth of a
    second) crosses the geometric mean of its quiet and its highest value; a pop begins at
    its step and lasts until the recorder's high-pass has let it go; mains keeps the grid.

    Parameters
    ----------
    quiet_pace : array, shape (n_sites,), microvolt
        The site's pace on quiet epochs.
    tail_seconds : float
        How long a pop is taken to last after its last step.
    """
    onset = grid.onset[events.first].copy()
    end = grid.onset[events.last - 1] + 1.0
    moment = grid.onset[events.peak_epoch] + 0.5
    if not len(onset) or kind == "mains":
        return onset, end, moment
    if kind == "pop":
        moment = grid.onset[events.peak_epoch] + _place(
            table, events.peak_epoch, events.peak_site
        )
        begin = grid.onset[events.first] + _place(table, events.first, events.first_site)
        final = grid.onset[events.last - 1] + _place(
            table, events.last - 1, events.last_site
        )
        return np.maximum(begin - 0.03, 0), final + tail_seconds, moment
    if kind == "eye":
        moment = grid.onset[events.peak_epoch] + table.front_at[events.peak_epoch].astype(
            float
        )
    edge_before, has_before = _neighbour_epoch(events.first, -1, grid)
    edge_after, has_after = _neighbour_epoch(events.last - 1, +1, grid)
    pace_first = np.concatenate(
        [
            np.where(has_before[:, None], table.pace[edge_before, events.first_site], 0),
            table.pace[events.first, events.first_site],
        ],
        axis=1,
    ).astype(float)
    pace_last = np.concatenate(
        [
            table.pace[events.last - 1, events.last_site],
            np.where(has_after[:, None], table.pace[edge_after, events.last_site], 0),
        ],
        axis=1,
    ).astype(float)
    half = TENTHS // 2
    start_level = _level(pace_first[:, TENTHS:], quiet_pace[events.first_site])
    end_level = _level(pace_last[:, :TENTHS], quiet_pace[events.last_site])
    above = pace_first[:, half:] >= start_level[:, None]
    begin = np.where(above.any(axis=1), above.argmax(axis=1) - half, 0) / TENTHS
    above = (pace_last[:, : TENTHS + half] >= end_level[:, None])[:, ::-1]
    final = (
        np.where(above.any(axis=1), TENTHS + half - above.argmax(axis=1), TENTHS) / TENTHS
    )
    refined_end = grid.onset[events.last - 1] + final
    refined_onset = np.maximum(onset + begin, 0)
    short = refined_end - refined_onset < 0.1
    return (
        np.where(short, onset, refined_onset),
        np.where(short, end, refined_end),
        moment,
    )


def _place(table: FeatureTable, epochs: Ints, sites: Ints) -> NDArray[np.float64]:
    return np.asarray(table.step_at[epochs, sites], dtype=np.float64)


def _level(pace: NDArray[np.float64], quiet: NDArray[np.floating]) -> NDArray[np.float64]:
    highest = pace.max(axis=1)
    return np.sqrt(highest * np.fmin(np.fmax(quiet, 0.1), np.fmax(highest, 0.1)))


def _neighbour_epoch(epoch: Ints, step: int, grid: EpochGrid) -> tuple[Ints, Bools]:
    beside = np.clip(epoch + step, 0, len(grid) - 1)
    return beside, (beside != epoch) & (grid.segment[beside] == grid.segment[epoch])


def union_seconds(
    onset: NDArray[np.floating], end: NDArray[np.floating], limit: float
) -> float:
    """Seconds covered by at least one of the intervals, none counted past ``limit``."""
    if not len(onset):
        return 0.0
    order = np.argsort(onset, kind="stable")
    begin = np.asarray(onset, dtype=float)[order]
    finish = np.maximum.accumulate(np.minimum(np.asarray(end, dtype=float)[order], limit))
    covered_from = np.maximum(begin[1:], finish[:-1])
    first = max(0.0, finish[0] - begin[0])
    return float(first + np.maximum(finish[1:] - covered_from, 0).sum())
