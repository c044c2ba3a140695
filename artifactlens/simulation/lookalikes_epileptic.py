"""Patterns of epilepsy and of encephalopathy that artifacts are mistaken for.

Shapes, places and rates are those of the trade's textbooks (common practice).
"""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from artifactlens.simulation.head import direction, patch_map
from artifactlens.simulation.patterns import (
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


def frontal_delta(
    scene: Scene,
    rng: np.random.Generator,
    onset: float,
    duration: float,
    amplitude_uv: float,
) -> Simulated:
    """Frontal intermittent rhythmic delta: 1.5 to 3 Hz, round to saw-toothed.

    Mostly on both sides with one leading a little, sometimes nearly on one side only, more
    towards the poles or more towards the middle.
    """
    stretch = scene.stretch(onset, duration)
    height = rng.uniform(4.0, 28.0)
    maps = cortex(
        scene.sites,
        rng,
        [-22, 22, 0],
        [height, height, height + 12],
        spread_deg=(20.0, 32.0),
        wander_deg=4.0,
        lean=float(rng.choice([0.1, 0.25, 0.7], p=[0.4, 0.45, 0.15])),
    )
    maps *= np.array([1.0, 1.0, rng.uniform(0.0, 0.8)])[:, None]
    phase = wandering_phase(stretch, rng, rng.uniform(1.6, 2.9), 0.04)
    lags = rng.uniform(-0.35, 0.35, size=(3, 1))
    second, turn = rng.uniform(0.0, 0.4), rng.uniform(0, 2 * np.pi)
    waves = np.sin(phase + lags) + second * np.sin(2 * (phase + lags) + turn)
    waves *= stretch.gate(min(0.5, duration / 3)) * unsteady(stretch, rng, 0.25, 0.7)
    return placed(stretch, "frontal rhythmic delta", maps, waves, amplitude_uv)


def spike_and_wave(
    scene: Scene,
    rng: np.random.Generator,
    onset: float,
    duration: float,
    amplitude_uv: float,
) -> Simulated:
    """Generalised spike-and-wave, 2.5 to 4 a second and slowing a little.

    Frontal maximum more often than not; each wave has a size of its own, spikes may be
    lower or higher than the waves, and one side may be the stronger.
    """
    stretch = scene.stretch(onset, duration)
    rate = rng.uniform(2.7, 4.0)
    slowing = rate * rng.uniform(0.0, 0.08) / max(duration, 1.0)
    cycles = rate * stretch.time - slowing * stretch.time**2
    number = cycles.astype(np.int64)
    count = int(number.max(initial=0)) + 1
    waves_are = np.exp(0.18 * rng.standard_normal(count))
    spikes_are = np.exp(rng.uniform(-1.0, 0.3) + 0.4 * rng.standard_normal(count))
    place, width = np.mod(cycles, 1.0), rng.uniform(0.15, 0.26)
    middle = rng.uniform(0.54, 0.66)
    spike = -1.1 * bump(place, 0.12, width) + 0.35 * bump(place, 0.24, width)
    wave = -bump(place, middle, rng.uniform(0.85, 1.1))
    wave = spikes_are[number] * spike + waves_are[number] * wave
    wave *= stretch.gate(min(0.25, duration / 3))
    maps = cortex(
        scene.sites,
        rng,
        [-22, 22, 0, -75, 75, -150, 150],
        [30, 30, 55, 42, 42, 25, 25],
        spread_deg=(22.0, 34.0),
        lean=float(rng.choice([0.1, 0.35])),
    )
    backwards = float(np.exp(rng.uniform(-2.0, 0.3)))
    maps *= np.array(
        [1, 1, rng.uniform(0.2, 1), 0.7, 0.7, 0.5 * backwards, 0.5 * backwards]
    )[:, None]
    return placed(stretch, "spike-and-wave", maps, wave, amplitude_uv)


def polyspike(
    scene: Scene,
    rng: np.random.Generator,
    onset: float,
    duration: float,
    amplitude_uv: float,
) -> Simulated:
    """Polyspike and wave: bursts of 3 to 6 spikes, each with a slow wave, on both sides."""
    stretch = scene.stretch(onset, duration)
    wave = np.zeros(stretch.n_samples)
    starts = np.concatenate([[0.0], 0.9 + np.cumsum(rng.uniform(0.7, 1.6, size=8))])
    for start in starts[(starts == 0) | (starts < duration - 0.7)]:
        gap = 1 / rng.uniform(12.0, 22.0)
        count = int(rng.integers(3, 7))
        at = start + 0.05 + gap * (np.arange(count) + rng.uniform(-0.15, 0.15, size=count))
        heights = rng.uniform(0.5, 1.0, size=count)
        spikes = bump(stretch.time[:, None], at, 1.1 * gap) - 0.4 * bump(
            stretch.time[:, None], at + 0.45 * gap, 0.8 * gap
        )
        slow = rng.uniform(0.3, 0.5)
        wave -= spikes @ heights
        wave -= rng.uniform(0.4, 1.0) * bump(stretch.time, at[-1] + 0.55 * slow, slow)
    wave *= stretch.gate(min(0.05, duration / 4))
    maps = cortex(
        scene.sites,
        rng,
        [-25, 25, 0, -80, 80],
        [32, 32, 58, 42, 42],
        spread_deg=(20.0, 34.0),
    )
    maps *= np.array([1.0, 1.0, rng.uniform(0.2, 1.0), 0.6, 0.6])[:, None]
    return placed(stretch, "polyspike and wave", maps, wave, amplitude_uv)


def focal_spike(
    scene: Scene,
    rng: np.random.Generator,
    onset: float,
    duration: float,
    amplitude_uv: float,
) -> Simulated:
    """Spike of 35 to 80 ms and slow wave after it, from one patch of the convexity.

    A spike is usually followed by a slow wave (Gelisse et al. 2024); one in eight has
    hardly any here.
    """
    stretch = scene.stretch(onset, duration)
    breadth = rng.uniform(0.035, 0.08)
    after = rng.uniform(0.3, 0.7) if rng.random() < 0.875 else 0.05
    rest = duration - 0.1
    wave = -bump(stretch.time, 0.042, breadth)
    wave += rng.uniform(0.1, 0.4) * bump(stretch.time, 0.042 + 0.7 * breadth, breadth)
    wave -= after * bump(stretch.time, 0.1 + rng.uniform(0.35, 0.5) * rest, rest)
    wave *= stretch.gate(0.012)
    places = direction(
        [-75, 75, -50, 50, -85, 85, -145, 145, -20, 20],
        [-5, -5, 20, 20, 45, 45, 10, 10, 12, 12],
    )
    centre = places[rng.integers(len(places))] + 0.15 * rng.standard_normal(3)
    site_map = patch_map(
        scene.sites,
        centre,
        spread_deg=rng.uniform(12, 25),
        tilt_deg=rng.uniform(0, 60),
        tilt_towards_deg=rng.uniform(0, 360),
    )
    return placed(stretch, "focal spike", site_map[None, :], wave, amplitude_uv)


def seizure_fast(
    scene: Scene,
    rng: np.random.Generator,
    onset: float,
    duration: float,
    amplitude_uv: float,
) -> Simulated:
    """Focal rhythm that starts fast and low (11 to 20 Hz) and grows, slows and spreads."""
    stretch = scene.stretch(onset, duration)
    done = np.clip(stretch.time / max(duration, 1e-9), 0, 1)
    first = rng.uniform(11.0, 20.0)
    last = max(8.0, first * rng.uniform(0.5, 0.8))
    rate = first * (last / first) ** done
    phase = wandering_phase(stretch, rng, rate, 0.02)
    sharp = rng.uniform(0.2, 0.8)
    growth = rng.uniform(0.1, 0.4)
    later = np.clip((done - rng.uniform(0.3, 0.6)) / 0.3, 0, 1)
    waves = np.stack([contour(phase, sharp), later * contour(phase - 0.7, sharp)])
    waves *= (growth + (1 - growth) * done) * stretch.gate(min(0.3, duration / 3))
    waves *= unsteady(stretch, rng, 0.15, 0.8)
    side = one_side(rng)
    azimuth, height = rng.choice([(80, 0), (45, 22), (85, 45), (140, 15)])
    maps = cortex(
        scene.sites,
        rng,
        [side * azimuth, side * (azimuth + rng.choice([-30, 30]))],
        [height, height + 12],
        spread_deg=(12.0, 22.0),
        tilt_deg=45.0,
        lean=0.0,
    )
    return placed(stretch, "fast ictal rhythm", maps, waves, amplitude_uv)


def paroxysmal_fast(
    scene: Scene,
    rng: np.random.Generator,
    onset: float,
    duration: float,
    amplitude_uv: float,
) -> Simulated:
    """Generalised paroxysmal fast activity: a burst at 15 to 25 Hz, front and middle."""
    stretch = scene.stretch(onset, duration)
    done = np.clip(stretch.time / max(duration, 1e-9), 0, 1)
    rate = rng.uniform(16.0, 25.0) * (1 - rng.uniform(0, 0.06) * done)
    phase = wandering_phase(stretch, rng, rate, 0.05)
    lags = rng.uniform(-0.4, 0.4, size=(5, 1))
    waves = contour(phase + lags, rng.uniform(0.0, 0.7))
    waves *= stretch.gate(min(0.3, duration / 3)) * unsteady(stretch, rng, 0.3, 0.25)
    maps = cortex(
        scene.sites,
        rng,
        [-25, 25, 0, -80, 80],
        [30, 30, 58, 42, 42],
        spread_deg=(20.0, 32.0),
    )
    maps *= np.array([1.0, 1.0, rng.uniform(0.2, 1.0), 0.7, 0.7])[:, None]
    return placed(stretch, "paroxysmal fast activity", maps, waves, amplitude_uv)
