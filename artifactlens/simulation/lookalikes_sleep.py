"""Patterns of sleep and drowsiness that artifacts are mistaken for.

Shapes, places and rates are those of the trade's textbooks (common practice).
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
    from numpy.typing import NDArray

    from artifactlens.simulation.scene import Scene, Simulated, Stretch


def spindle(
    scene: Scene,
    rng: np.random.Generator,
    onset: float,
    duration: float,
    amplitude_uv: float,
) -> Simulated:
    """Sleep spindle: 12 to 14.5 Hz over the middle of the head, 0.5 to 2 s."""
    maps = cortex(
        scene.sites,
        rng,
        [-85, 85, 0],
        [56, 56, 66],
        spread_deg=(13.0, 22.0),
        wander_deg=4.0,
    )
    stretch = scene.stretch(onset, duration)
    return _spindle(stretch, rng, rng.uniform(12.2, 14.3), maps, amplitude_uv)


def frontal_spindle(
    scene: Scene,
    rng: np.random.Generator,
    onset: float,
    duration: float,
    amplitude_uv: float,
) -> Simulated:
    """Slow spindle of the front: 10.5 to 12.5 Hz, 0.5 to 2 s."""
    maps = cortex(
        scene.sites,
        rng,
        [-32, 32, 0],
        [34, 34, 46],
        spread_deg=(13.0, 22.0),
        wander_deg=5.0,
        lean=0.3,
    )
    stretch = scene.stretch(onset, duration)
    return _spindle(stretch, rng, rng.uniform(10.7, 12.3), maps, amplitude_uv)


def _spindle(
    stretch: Stretch,
    rng: np.random.Generator,
    rate_hz: float,
    maps: NDArray[np.float64],
    amplitude_uv: float,
) -> Simulated:
    phase = wandering_phase(stretch, rng, rate_hz, 0.015)
    lags = rng.uniform(-0.3, 0.3, size=(len(maps), 1))
    waves = np.sin(phase + lags) * stretch.gate(stretch.duration * rng.uniform(0.25, 0.5))
    return placed(stretch, "sleep spindle", maps, waves, amplitude_uv)


def k_complex(
    scene: Scene,
    rng: np.random.Generator,
    onset: float,
    duration: float,
    amplitude_uv: float,
) -> Simulated:
    """K-complex: sharp negative wave, slower positive one, midline frontal maximum.

    One in three carries a spindle on its second half; one side may be the stronger.
    """
    stretch = scene.stretch(onset, duration)
    done = stretch.time / duration
    sharp = rng.uniform(0.2, 0.3)
    wave = -bump(done, sharp, rng.uniform(0.3, 0.5))
    wave += rng.uniform(0.4, 0.8) * bump(
        done, sharp + rng.uniform(0.33, 0.45), rng.uniform(0.55, 0.8)
    )
    if rng.random() < 0.33:
        ride = bump(done, 0.7, 0.6) * np.sin(
            2 * np.pi * rng.uniform(12.0, 14.0) * stretch.time + rng.uniform(0, 6)
        )
        wave += rng.uniform(0.08, 0.2) * ride
    wave *= stretch.gate(0.1 * duration)
    maps = cortex(
        scene.sites,
        rng,
        [-38, 38, 0, 0],
        [36, 36, 52, 80],
        spread_deg=(20.0, 30.0),
        wander_deg=4.0,
        lean=float(rng.choice([0.05, 0.2])),
    )
    return placed(stretch, "K-complex", maps, wave, amplitude_uv)


def vertex_wave(
    scene: Scene,
    rng: np.random.Generator,
    onset: float,
    duration: float,
    amplitude_uv: float,
) -> Simulated:
    """Vertex sharp waves of early sleep: negative, under 0.25 s, greatest near Cz.

    One if ``duration`` is below 0.5 s, else a run of them with heights of their own.
    """
    stretch = scene.stretch(onset, duration)
    lasts, starts = duration, np.zeros(1)
    if duration >= 0.5:
        lasts = float(rng.uniform(0.15, 0.25))
        gaps = rng.uniform(0.3, 1.0, size=int(duration / 0.3) + 1)
        starts = np.concatenate([[0.0], np.cumsum(gaps)])
        starts = starts[starts <= duration - lasts]
    before, after = rng.uniform(0.05, 0.35), rng.uniform(0.1, 0.5)
    middle, breadth = rng.uniform(0.33, 0.48), rng.uniform(0.35, 0.65)
    wave = np.zeros(stretch.n_samples)
    for start in starts:
        done = (stretch.time - start) / lasts
        size = float(np.exp(0.3 * rng.standard_normal()))
        wave += size * (before * bump(done, 0.12, 0.2) - bump(done, middle, breadth))
        wave += size * after * bump(done, middle + 0.35, 0.5)
    wave *= stretch.gate(0.1 * lasts)
    maps = cortex(
        scene.sites,
        rng,
        [0, 180, -90, 90],
        [70, 74, 64, 64],
        spread_deg=(18.0, 28.0),
        wander_deg=3.0,
        lean=float(rng.choice([0.05, 0.15])),
    )
    return placed(stretch, "vertex wave", maps, wave, amplitude_uv)


def slow_waves(
    scene: Scene,
    rng: np.random.Generator,
    onset: float,
    duration: float,
    amplitude_uv: float,
) -> Simulated:
    """High slow waves, 0.6 to 2 Hz, as of deep sleep or overbreathing.

    Mostly with a frontal maximum; in one of four the back of the head is higher, as in
    children who overbreathe.
    """
    stretch = scene.stretch(onset, duration)
    waves = bands(
        stretch, rng, 6, rng.uniform(0.9, 1.7), rng.uniform(0.2, 0.35),
        rng.uniform(0.65, 0.9),
    ).real  # fmt: skip
    waves *= stretch.gate(min(0.5, duration / 3))
    maps = cortex(
        scene.sites,
        rng,
        [-30, 30, 0, -100, 100, 180],
        [38, 38, 60, 35, 35, 35],
        spread_deg=(20.0, 30.0),
    )
    front = (0.45, 0.4, 0.4) if rng.random() < 0.75 else (2.0, 1.8, 2.2)
    maps *= np.array([1, 1, 0.8, *front])[:, None]
    return placed(stretch, "high slow waves", maps, waves, amplitude_uv)


def fourteen_six(
    scene: Scene,
    rng: np.random.Generator,
    onset: float,
    duration: float,
    amplitude_uv: float,
) -> Simulated:
    """14 and 6 a second positive bursts, posterior temporal, of one side or the other."""
    stretch = scene.stretch(onset, duration)
    which = rng.choice(["14", "6", "both"], p=[0.45, 0.2, 0.35])
    fast = -contour(wandering_phase(stretch, rng, rng.uniform(13.0, 15.0), 0.02), 0.9)
    slow = -contour(wandering_phase(stretch, rng, rng.uniform(5.5, 7.0), 0.02), 0.9)
    wave = {"14": fast, "6": slow, "both": fast + rng.uniform(0.5, 1.2) * slow}[which]
    wave = wave * stretch.gate(duration * rng.uniform(0.2, 0.45))
    side = one_side(rng)
    maps = cortex(
        scene.sites,
        rng,
        [side * 118, side * 145, -side * 118],
        [2, 12, 2],
        spread_deg=(18.0, 30.0),
        lean=0.0,
    )
    maps *= np.array([1.0, 0.5, rng.uniform(0.0, 0.35)])[:, None]
    return placed(stretch, "14 and 6 positive bursts", maps, wave, amplitude_uv)


def hypnagogic_bursts(
    scene: Scene,
    rng: np.random.Generator,
    onset: float,
    duration: float,
    amplitude_uv: float,
) -> Simulated:
    """Hypnagogic hypersynchrony of a drowsy child: high bursts at 3 to 5 Hz everywhere."""
    stretch = scene.stretch(onset, duration)
    phase = wandering_phase(stretch, rng, rng.uniform(3.2, 4.8), 0.04)
    lags = rng.uniform(-0.35, 0.35, size=(7, 1))
    waves = contour(phase + lags, rng.uniform(0.0, 0.5))
    waves *= stretch.gate(min(0.6, duration / 3)) * unsteady(stretch, rng, 0.3, 0.5)
    maps = cortex(
        scene.sites,
        rng,
        [-28, 28, 0, -85, 85, -145, 145],
        [28, 28, 55, 45, 45, 22, 22],
        spread_deg=(22.0, 34.0),
        uneven=0.3,
    )
    return placed(stretch, "hypnagogic hypersynchrony", maps, waves, amplitude_uv)
