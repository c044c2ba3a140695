"""Backgrounds of children and infants: high and slow, and nothing that an eye did.

A model that had seen only adult look-alikes took many of these for eye movement. Shapes,
places and rates are those of the trade's textbooks (common practice).
"""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from artifactlens.simulation.patterns import (
    bands,
    bump,
    contour,
    cortex,
    one_side,
    placed,
    unsteady,
    wandering_phase,
)

if TYPE_CHECKING:
    from artifactlens.simulation.scene import Scene, Simulated

_AROUND = (
    [-25, 25, 0, -60, 60, -90, 90, -90, 90, -125, 125, -155, 155, 180],
    [15, 15, 50, 10, 10, 0, 0, 48, 48, 10, 10, 12, 12, 45],
)
"""Azimuths and elevations of fourteen patches all over the convexity, degrees."""


def posterior_slow_waves(
    scene: Scene,
    rng: np.random.Generator,
    onset: float,
    duration: float,
    amplitude_uv: float,
) -> Simulated:
    """Posterior slow waves of youth: single or grouped, 2.5 to 4.5 Hz, in the alpha.

    Of one side or the other, the posterior rhythm (8 to 10.5 Hz) riding on them.
    """
    stretch = scene.stretch(onset, duration)
    slow = bands(stretch, rng, 4, rng.uniform(2.6, 4.4), rng.uniform(0.3, 0.7), 0.7).real
    alpha = bands(stretch, rng, 4, rng.uniform(8.0, 10.5), 0.4, 0.8)
    ridden = np.abs(alpha) * contour(np.angle(alpha), rng.uniform(0.0, 0.8))
    # Now and then, not all the time.
    swell = unsteady(stretch, rng, 0.6, 0.7)
    waves = swell * slow + rng.uniform(0.2, 0.8) * ridden
    waves *= stretch.gate(min(0.5, duration / 3))
    maps = cortex(
        scene.sites,
        rng,
        [-152, 152, -125, 125],
        [8, 8, 18, 18],
        spread_deg=(16.0, 28.0),
        lean=0.45,
    )
    return placed(stretch, "posterior slow waves of youth", maps, waves, amplitude_uv)


def childhood_slowing(
    scene: Scene,
    rng: np.random.Generator,
    onset: float,
    duration: float,
    amplitude_uv: float,
) -> Simulated:
    """Theta and delta of a child, awake or drowsy: 2 to 6 Hz, high, nearly everywhere.

    Front, middle or back may stand out; patches share from a third to most of it.
    """
    stretch = scene.stretch(onset, duration)
    count = len(_AROUND[0])
    shared = rng.uniform(0.3, 0.85)
    waves = bands(
        stretch, rng, count, rng.uniform(2.6, 5.4), rng.uniform(0.4, 0.9), shared
    ).real
    slower = bands(stretch, rng, 4, rng.uniform(2.0, 2.8), 0.35, shared).real
    waves += rng.uniform(0.0, 0.6) * slower[rng.integers(4, size=count)]
    waves *= stretch.gate(min(0.6, duration / 3)) * unsteady(stretch, rng, 0.35, 0.9)
    maps = cortex(scene.sites, rng, *_AROUND, spread_deg=(16.0, 28.0), uneven=0.3)
    forwards = np.cos(np.radians(_AROUND[0])) * np.cos(np.radians(_AROUND[1]))
    maps *= np.exp(rng.normal(0.0, 0.6) * forwards)[:, None]
    return placed(stretch, "slow activity of a child", maps, waves, amplitude_uv)


def infant_background(
    scene: Scene,
    rng: np.random.Generator,
    onset: float,
    duration: float,
    amplitude_uv: float,
) -> Simulated:
    """Background of an infant: very high, irregular, 0.5 to 4 Hz, patches on their own.

    Waves come and go at each place for itself; theta rides on them, and now and then
    there is a frontal sharp transient of both sides (biphasic, 0.25 to 0.45 s).
    """
    stretch = scene.stretch(onset, duration)
    count = len(_AROUND[0])
    ramp = stretch.gate(min(0.6, duration / 3))
    shared = rng.uniform(0.0, 0.45)
    waves = bands(
        stretch, rng, count, rng.uniform(0.8, 1.8), rng.uniform(0.45, 0.8), shared
    ).real
    upper = bands(stretch, rng, 5, rng.uniform(3.0, 5.0), 1.0, 0.0).real
    waves += rng.uniform(0.2, 0.6) * upper[rng.integers(5, size=count)]
    waves *= np.stack([unsteady(stretch, rng, 0.45, 1.3) for _ in range(count)]) * ramp
    maps = cortex(
        scene.sites, rng, *_AROUND, spread_deg=(12.0, 26.0), uneven=0.35, tilt_deg=60.0
    )
    sharp = np.zeros(stretch.n_samples)
    for at in rng.uniform(0.3, max(duration - 0.5, 0.4), size=rng.poisson(duration / 12)):
        lasts = rng.uniform(0.25, 0.45)
        height = rng.uniform(1.5, 3.5) * one_side(rng)
        # Short against the scene: only the samples near it.
        first, last = np.searchsorted(stretch.time, [at - lasts, at + 2 * lasts])
        near = stretch.time[first:last]
        sharp[first:last] += height * bump(near, at, 0.6 * lasts)
        sharp[first:last] -= 0.8 * height * bump(near, at + 0.45 * lasts, 0.8 * lasts)
    frontal = cortex(scene.sites, rng, [-22, 22], [20, 20], spread_deg=(14.0, 22.0))
    maps = np.concatenate([maps, frontal.sum(axis=0, keepdims=True)])
    waves = np.concatenate([waves, (sharp * ramp)[None, :]])
    return placed(stretch, "background of an infant", maps, waves, amplitude_uv)


def drowsy_rhythm(
    scene: Scene,
    rng: np.random.Generator,
    onset: float,
    duration: float,
    amplitude_uv: float,
) -> Simulated:
    """Rhythmic theta of a drowsy infant or toddler: 3.5 to 6 Hz, steady, wide."""
    stretch = scene.stretch(onset, duration)
    phase = wandering_phase(stretch, rng, rng.uniform(3.6, 5.8), 0.04)
    lags = rng.uniform(-0.5, 0.5, size=(7, 1))
    waves = np.sin(phase + lags)
    waves *= stretch.gate(min(1.0, duration / 3)) * unsteady(stretch, rng, 0.25, 1.0)
    maps = cortex(
        scene.sites,
        rng,
        [-30, 30, 0, -90, 90, -145, 145],
        [30, 30, 60, 40, 40, 25, 25],
        spread_deg=(20.0, 32.0),
        uneven=0.4,
    )
    return placed(stretch, "rhythmic theta of drowsiness", maps, waves, amplitude_uv)
