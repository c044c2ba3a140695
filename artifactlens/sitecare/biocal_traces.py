"""What a calibration is judged from: slow traces against the sites behind, and fast power."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from artifactlens.epochs import finite_rows
from artifactlens.features.spatial import EyeLeads, eye_leads

if TYPE_CHECKING:
    from artifactlens.frames import Frame

Array = NDArray[np.float64]
Bools = NDArray[np.bool_]

SLOW_HZ = 50.0
FAST_WINDOW_S = 0.5
FAST_HZ = (20.0, 44.0)
"""Muscle rises above 20 Hz (Whitham et al. 2007); up to 44 Hz the window keeps clear of the
mains of any country."""

LEAST_FAST_HZ = 30.0
"""A recording that carries nothing above this does not show a clench."""

QUIET_SHARE = 0.35
"""Quantile of absolute values that stands for quiet: it may hold movements for half the time.
That of a normal distribution is 0.454 standard deviations."""

_QUIET_OF_NORMAL = 0.4538
_HOPS_AT_ONCE = 64


@dataclass(frozen=True, eq=False)
class Traces:
    """A stretch of signal, reduced.

    Attributes
    ----------
    start : float
        Second of its first sample.
    slow : array, shape (n_sites, n_slow), microvolt
        Block means, about 50 a second, each site against the median of the sites of its chain
        that lie away from the eyes; NaN where that cannot be told.
    slow_rate : float, hertz
    power : array, shape (n_sites, n_hops), uV^2
        Of 20 to 44 Hz in windows of half a second; no hops where that is not carried.
    hop_s, first_hop : float, seconds
        Distance of the windows, and the middle of the first one.
    """

    start: float
    slow: Array
    slow_rate: float
    power: Array
    hop_s: float
    first_hop: float

    @cached_property
    def time(self) -> Array:
        """Middle of each slow sample, seconds."""
        count = np.arange(self.slow.shape[1])
        return np.asarray(self.start + (count + 0.5) / self.slow_rate)

    @cached_property
    def hop_time(self) -> Array:
        """Middle of each window of power, seconds."""
        return np.asarray(self.first_hop + np.arange(self.power.shape[1]) * self.hop_s)

    def bumps(self) -> Array:
        """Tenths of a second against both flanks, 0.3 to 0.5 s away: blinks, (n_sites, n_slow)."""
        mean = self._mean
        return mean(-0.05, 0.05) - 0.5 * (mean(-0.5, -0.3) + mean(0.3, 0.5))

    def moves(self) -> Array:
        """The fifth of a second after a moment against that before: saccades."""
        return self._mean(0.04, 0.24) - self._mean(-0.24, -0.04)

    def _mean(self, begin: float, end: float) -> Array:
        """Mean from ``begin`` to ``end`` seconds about every sample; NaN at both ends."""
        rate, n = self.slow_rate, self.slow.shape[1]
        first = round(begin * rate)
        last = max(round(end * rate), first + 1)
        edge = int(np.ceil(0.5 * rate)) + 1
        found = np.full_like(self.slow, np.nan)
        if n <= 2 * edge:
            return found
        total = np.cumsum(np.pad(self.slow, ((0, 0), (1, 0))), axis=1)
        at = np.arange(edge, n - edge)
        found[:, at] = (total[:, at + last] - total[:, at + first]) / (last - first)
        return found


@dataclass(frozen=True, eq=False)
class Places:
    """Which sites serve, by direction from the centre of the head.

    ``usable`` (n_sites,) marks scalp sites that have others of their chain to be compared
    with. ``blink`` and ``lateral`` (n_sites,) are what a blink and a turn to the right
    should show, 1 at the strongest site; 0 where unknown.
    """

    frame: Frame
    leads: EyeLeads
    direction: Array
    usable: Bools
    blink: Array
    lateral: Array


def rest_sites(frame: Frame) -> list[NDArray[np.intp]]:
    """For each site, the sites of its chain that lie away from the eyes; at least two, or none.

    The back of the head where the chain reaches it, else the top, else the midline.
    """
    direction = _directions(frame)
    x, y = direction[:, 0], direction[:, 1]
    scalp = np.isfinite(x) & (np.array(frame.roles) == "site")
    with np.errstate(invalid="ignore"):
        tiers = (
            y <= -0.3,
            (y <= 0.15) & (np.abs(x) < 0.9),
            (np.abs(x) < 0.35) & (y < 0.85),
        )
    chosen = {}
    for chain in np.unique(frame.chain):
        inside = scalp & (frame.chain == chain)
        found = (np.flatnonzero(inside & tier) for tier in tiers)
        chosen[chain] = next(
            (rows for rows in found if len(rows) > 1), np.array([], np.intp)
        )
    return [chosen[chain] for chain in frame.chain]


def find_places(frame: Frame) -> Places:
    """Choose the sites of a recording that take part in a calibration."""
    leads = eye_leads(frame)
    direction = _directions(frame)
    rest = rest_sites(frame)
    usable = np.array([len(rows) > 0 for rows in rest])
    usable &= np.isfinite(direction[:, 0]) & (np.array(frame.roles) == "site")
    maps = np.zeros((2, len(frame.sites)))
    for row in np.flatnonzero(usable):
        maps[:, row] = leads.maps[:, row] - np.median(leads.maps[:, rest[row]], axis=1)
    vertical, lateral = maps
    # Two dipoles alone are too focal for a lid: the root gives F3/F4 and F7/F8 the 30 to
    # 50 % of the poles that are usual (common practice).
    upright = np.sqrt(np.maximum(vertical, 0) / max(float(vertical.max()), 1e-12))
    turned = lateral / max(float(np.abs(lateral).max()), 1e-12)
    return Places(frame, leads, direction, usable, upright, turned)


def _directions(frame: Frame) -> Array:
    with np.errstate(invalid="ignore"):
        length = np.linalg.norm(frame.positions, axis=1, keepdims=True)
        return np.asarray(frame.positions / length)


def reduce_traces(
    sites_uv: NDArray[np.floating],
    sampling_rate: float,
    frame: Frame,
    start: float,
    *,
    fast: bool = True,
) -> Traces:
    """Reduce site potentials (n_sites, n_times), microvolt, that begin at ``start`` seconds.

    Sites with a missing sample are taken as unknown for the whole stretch. ``fast`` is False
    where a filter is known to have removed what lies above 20 Hz.
    """
    sites = np.asarray(sites_uv)
    known = finite_rows(sites)
    width = max(1, int(sampling_rate / SLOW_HZ))
    count = sites.shape[1] // width
    slow = sites[:, : count * width].reshape(len(sites), count, width)
    slow = slow.mean(axis=2, dtype=np.float64)
    against = np.full_like(slow, np.nan)
    for row, rows in enumerate(rest_sites(frame)):
        there = rows[known[rows]]
        if known[row] and len(there) > 1:
            against[row] = slow[row] - np.median(slow[there], axis=0)
    half = max(1, round(sampling_rate * FAST_WINDOW_S / 2))
    return Traces(
        start=start,
        slow=against,
        slow_rate=sampling_rate / width,
        power=_fast_power(sites if fast else sites[:, :0], known, sampling_rate, half),
        hop_s=half / sampling_rate,
        first_hop=start + half / sampling_rate,
    )


def _fast_power(
    sites: NDArray[np.floating], known: Bools, sampling_rate: float, half: int
) -> Array:
    top = min(FAST_HZ[1], 0.45 * sampling_rate)
    hops = max(sites.shape[1] // half - 1, 0)
    if top < LEAST_FAST_HZ:
        hops = 0
    window = np.hanning(2 * half)
    freqs = np.fft.rfftfreq(2 * half, 1 / sampling_rate)
    band = (freqs >= FAST_HZ[0]) & (freqs <= top)
    scale = 2 / (2 * half * np.sum(window**2))
    power = np.full((len(sites), hops), np.nan)
    rows = np.flatnonzero(known)
    for first in range(0, hops, _HOPS_AT_ONCE):
        starts = np.arange(first, min(first + _HOPS_AT_ONCE, hops)) * half
        cut = sites[rows[:, None, None], starts[:, None] + np.arange(2 * half)]
        bins = np.fft.rfft(cut * window, axis=2)[:, :, band]
        power[rows[:, None], starts // half] = scale * np.sum(np.abs(bins) ** 2, axis=2)
    return power


def quiet_level(values: Array) -> Array:
    """Robust standard deviation of what is usual at each site, even amid movements.

    Parameters
    ----------
    values : array, shape (n_sites, n_moments)
        Moments at which no site has a value are left out.

    Returns
    -------
    array, shape (n_sites,)
        NaN for sites without values.
    """
    seen = np.abs(values[:, np.isfinite(values).any(axis=0)])
    if not seen.shape[1]:
        return np.full(len(values), np.nan)
    return np.asarray(np.quantile(seen, QUIET_SHARE, axis=1) / _QUIET_OF_NORMAL)
