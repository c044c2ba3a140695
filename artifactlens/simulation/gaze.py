"""Sequences of gaze: scanning, reading, jerks, pursuit and nystagmus.

All but pursuit are one thing: jumps to targets, and a drift after each. Rates and sizes are
common practice where no source is named.
"""

from __future__ import annotations

from typing import TYPE_CHECKING, Protocol

import numpy as np

from artifactlens.simulation.eye import (
    JUMP_S,
    JUMP_S_PER_DEGREE,
    SPIKE_LEAD_S,
    SPIKE_S,
    SPIKE_UV,
    TYPICAL_EYES,
    EyePair,
    gaze_potentials,
    spike_map,
)
from artifactlens.simulation.scene import Scene, Simulated, Stretch, ease

if TYPE_CHECKING:
    from numpy.typing import NDArray

WIDEST_DEG = (32.0, 22.0)
"""How far gaze goes sideways and up or down before the head would turn, degrees."""

_HOME_S = 0.15


class GazeMaker(Protocol):
    """How a sequence of gaze is put into silent potentials; its ranges are its own."""

    def __call__(
        self,
        scene: Scene,
        rng: np.random.Generator,
        onset: float,
        duration: float,
        *,
        pair: EyePair = TYPICAL_EYES,
    ) -> Simulated:
        """Sequence from ``onset`` for ``duration`` seconds, back to straight ahead."""
        ...


def gaze_track(
    time: NDArray[np.float64],
    starts: NDArray[np.float64],
    targets: NDArray[np.float64],
    drifts: NDArray[np.float64],
) -> NDArray[np.float64]:
    """Gaze that jumps and drifts.

    Parameters
    ----------
    time : array, shape (n_samples,), second
    starts : array, shape (n_jumps,), second
        Onsets of the jumps, in order, further apart than a jump lasts.
    targets : array, shape (n_jumps, 2), degree
        To the right and upwards: where each jump ends. Straight ahead before the first.
    drifts : array, shape (n_jumps, 2), degree per second
        Slow movement from the onset of each jump to that of the next.

    Returns
    -------
    array, shape (n_samples, 2), degree
    """
    gaps = np.diff(starts, append=starts[-1:])
    left = np.concatenate([np.zeros((1, 2)), (targets + drifts * gaps[:, None])[:-1]])
    jumps = targets - left
    lasts = JUMP_S + JUMP_S_PER_DEGREE * np.hypot(*jumps.T)
    which = np.searchsorted(starts, time, side="right") - 1
    now = np.maximum(which, 0)
    since = (time - starts[now])[:, None]
    track = left[now] + jumps[now] * ease(since / lasts[now, None]) + drifts[now] * since
    return np.where(which[:, None] >= 0, track, 0.0)


def _jumping(
    stretch: Stretch,
    what: str,
    starts: NDArray[np.float64],
    targets: NDArray[np.float64],
    drifts: NDArray[np.float64],
    pair: EyePair,
) -> Simulated:
    """Potentials of jumps and drifts, with a way home at the end and a spike at each jump."""
    kept = starts < stretch.duration - 2 * _HOME_S
    starts = np.append(starts[kept], stretch.duration - _HOME_S)
    targets = np.concatenate([targets[kept], np.zeros((1, 2))])
    drifts = np.concatenate([drifts[kept], np.zeros((1, 2))])
    sites = stretch.scene.sites
    track = gaze_track(stretch.time, starts, targets, drifts)
    field = gaze_potentials(sites, track[:, 0], track[:, 1], pair=pair)
    before = np.concatenate([np.zeros((1, 2)), targets[:-1]])
    sideways = (targets - before)[:, 0]
    # Small jumps have small spikes; from 8 degrees on they are alike (our own choice).
    heights = SPIKE_UV * np.clip(np.abs(sideways) / 8.0, 0.0, 1.0)
    begin = starts - SPIKE_LEAD_S
    now = np.maximum(np.searchsorted(begin, stretch.time, side="right") - 1, 0)
    since = stretch.time - begin[now]
    bells = heights[now] * ease(np.minimum(since, SPIKE_S - since) / (SPIKE_S / 2))
    for side in (-1.0, 1.0):
        towards = np.where(np.sign(sideways[now]) == side, bells, 0.0)
        field += np.outer(spike_map(sites, side), towards)
    return stretch.simulated("eye", field, what)


def _times(
    rng: np.random.Generator, duration: float, shortest: float, longest: float
) -> NDArray[np.float64]:
    gaps = rng.uniform(shortest, longest, size=int(duration / shortest) + 1)
    starts = 0.02 + np.concatenate([[0.0], np.cumsum(gaps)])
    return np.asarray(starts[starts < duration])


def _heading(rng: np.random.Generator, level: float = 0.7) -> NDArray[np.float64]:
    """Unit vector (right, up): level with chance ``level``, else upright or oblique."""
    drawn = rng.choice(3, p=[level, (1 - level) / 2, (1 - level) / 2])
    angle = (rng.choice([0.0, np.pi]), np.pi / 2, rng.uniform(0, 2 * np.pi))[drawn]
    return np.array([np.cos(angle), np.sin(angle)])


def scan(
    scene: Scene,
    rng: np.random.Generator,
    onset: float,
    duration: float,
    *,
    pair: EyePair = TYPICAL_EYES,
) -> Simulated:
    """Looking around: jumps to level, upright and oblique targets, plateaus that drift.

    0.2 to 2.5 s between jumps; the drift is up to 3 degrees a second.
    """
    stretch = scene.stretch(onset, duration)
    starts = _times(rng, duration, 0.2, float(rng.uniform(0.4, 2.5)))
    share = rng.uniform(0.3, 1.0)
    drawn = share * rng.uniform(-1, 1, size=(len(starts), 2)) * WIDEST_DEG
    drawn[:, 1] *= rng.choice([0.2, 1.0])
    drifts = rng.uniform(-1, 1, size=drawn.shape) * rng.choice([0.0, 1.0, 3.0])
    return _jumping(stretch, "looking around", starts, drawn, drifts, pair)


def reading(
    scene: Scene,
    rng: np.random.Generator,
    onset: float,
    duration: float,
    *,
    pair: EyePair = TYPICAL_EYES,
) -> Simulated:
    """Reading: a staircase of small jumps to the right, then one sweep back, line by line.

    Fixations of 0.2 to 0.35 s, lines 8 to 24 degrees wide (from memory).
    """
    stretch = scene.stretch(onset, duration)
    starts = _times(rng, duration, 0.2, 0.35)
    width, stops = rng.uniform(8.0, 24.0), int(rng.integers(4, 9))
    number = np.arange(len(starts))
    along = (number % stops) / (stops - 1) - 0.5
    right = width * along + rng.normal(0, 0.05 * width, size=len(starts))
    up = 5.0 - 0.7 * (number // stops % 14)
    targets = np.stack([right, up], axis=1)
    return _jumping(stretch, "reading", starts, targets, np.zeros_like(targets), pair)


def square_wave_jerks(
    scene: Scene,
    rng: np.random.Generator,
    onset: float,
    duration: float,
    *,
    pair: EyePair = TYPICAL_EYES,
) -> Simulated:
    """Square-wave jerks: 2 to 8 degrees aside, back after about 0.2 s, again and again."""
    stretch = scene.stretch(onset, duration)
    away = _times(rng, duration, 0.6, float(rng.uniform(0.8, 3.0)))
    back = away + rng.uniform(0.15, 0.35, size=len(away))
    starts = np.stack([away, back], axis=1).ravel()
    sizes = rng.uniform(2.0, 8.0) * np.exp(0.2 * rng.standard_normal(len(away)))
    targets = np.zeros((len(starts), 2))
    targets[::2, 0] = sizes * rng.choice([-1.0, 1.0])
    return _jumping(
        stretch, "square-wave jerks", starts, targets, np.zeros_like(targets), pair
    )


def nystagmus(
    scene: Scene,
    rng: np.random.Generator,
    onset: float,
    duration: float,
    *,
    pair: EyePair = TYPICAL_EYES,
) -> Simulated:
    """Nystagmus: slow drift one way, quick jump back, 1 to 4 a second, 3 to 12 degrees."""
    stretch = scene.stretch(onset, duration)
    beat = 1 / rng.uniform(1.0, 4.0)
    starts = _times(rng, duration, 0.85 * beat, 1.15 * beat)
    sizes = rng.uniform(3.0, 12.0) * np.exp(0.15 * rng.standard_normal((len(starts), 1)))
    way = _heading(rng, 0.8)
    gaps = np.diff(starts, append=starts[-1] + beat)[:, None]
    return _jumping(
        stretch, "nystagmus", starts, sizes / 2 * way, -sizes / gaps * way, pair
    )


def pursuit(
    scene: Scene,
    rng: np.random.Generator,
    onset: float,
    duration: float,
    *,
    pair: EyePair = TYPICAL_EYES,
) -> Simulated:
    """Smooth following of something that swings: 0.3 to 1 Hz, 8 to 30 degrees."""
    stretch = scene.stretch(onset, duration)
    swing = np.sin(2 * np.pi * rng.uniform(0.3, 1.0) * stretch.time + rng.uniform(0, 6))
    swing *= rng.uniform(8.0, 30.0) * stretch.gate(min(0.6, duration / 3))
    way = _heading(rng)
    field = gaze_potentials(scene.sites, swing * way[0], 0.7 * swing * way[1], pair=pair)
    return stretch.simulated("eye", field, "pursuit")


GAZE_SEQUENCES: dict[str, GazeMaker] = {
    "scan": scan,
    "reading": reading,
    "square_wave_jerks": square_wave_jerks,
    "nystagmus": nystagmus,
    "pursuit": pursuit,
}
