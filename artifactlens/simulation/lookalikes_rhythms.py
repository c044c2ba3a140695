"""Rhythms and variants of the waking brain that artifacts are mistaken for.

Shapes, places and rates are those of the trade's textbooks (common practice).
"""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from artifactlens.simulation.patterns import (
    bands,
    contour,
    cortex,
    one_side,
    placed,
    unsteady,
    wandering_phase,
)
from artifactlens.simulation.scene import ease

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import NDArray

    from artifactlens.simulation.scene import Scene, Simulated


def _arches(carrier: NDArray[np.complex128], sharp: float) -> NDArray[np.float64]:
    """Rhythm with the size and pace of ``carrier`` and the form of ``contour``."""
    return np.asarray(np.abs(carrier) * contour(np.angle(carrier), sharp))


def medication_beta(
    scene: Scene,
    rng: np.random.Generator,
    onset: float,
    duration: float,
    amplitude_uv: float,
) -> Simulated:
    """Plentiful beta of sedatives: 14 to 28 Hz, front and middle, both sides."""
    stretch = scene.stretch(onset, duration)
    waves = bands(
        stretch, rng, 7, rng.uniform(15.0, 27.0), rng.uniform(0.8, 2.5),
        rng.uniform(0.2, 0.6),
    ).real  # fmt: skip
    waves *= stretch.gate(min(0.4, duration / 3))
    maps = cortex(
        scene.sites,
        rng,
        [-30, 30, -60, 60, 0, -90, 90],
        [22, 22, 45, 45, 55, 30, 30],
        spread_deg=(10.0, 22.0),
        tilt_deg=50.0,
    )
    maps *= np.array([1, 1, 1, 1, 1, 0.6, 0.6])[:, None]
    return placed(stretch, "medication beta", maps, waves, amplitude_uv)


def mu(
    scene: Scene,
    rng: np.random.Generator,
    onset: float,
    duration: float,
    amplitude_uv: float,
) -> Simulated:
    """Mu: arches at 8 to 11 Hz over one or the other central region, negative-sharp."""
    stretch = scene.stretch(onset, duration)
    rate, width = rng.uniform(8.3, 10.8), rng.uniform(0.25, 0.6)
    sharp = rng.uniform(0.3, 1.0)
    waves = _arches(bands(stretch, rng, 2, rate, width, rng.uniform(0.2, 0.8)), sharp)
    waves *= stretch.gate(min(0.3, duration / 3))
    side = one_side(rng)
    weaker = rng.uniform(0.1, 0.9)
    maps = cortex(
        scene.sites,
        rng,
        [side * 93, -side * 93],
        [47, 47],
        spread_deg=(14.0, 24.0),
        wander_deg=4.0,
        lean=0.0,
    )
    maps *= np.array([1.0, weaker])[:, None]
    return placed(stretch, "mu", maps, waves, amplitude_uv)


def sharp_alpha(
    scene: Scene,
    rng: np.random.Generator,
    onset: float,
    duration: float,
    amplitude_uv: float,
) -> Simulated:
    """Posterior rhythm of sharp outline, 8 to 12 Hz, at times half or twice that rate."""
    stretch = scene.stretch(onset, duration)
    rate = rng.uniform(8.2, 11.8)
    carrier = bands(stretch, rng, 5, rate, rng.uniform(0.3, 0.6), rng.uniform(0.6, 0.9))
    waves = _arches(carrier, rng.uniform(0.5, 1.0))
    variant = rng.choice(["plain", "slow", "fast"], p=[0.6, 0.2, 0.2])
    if variant == "slow":
        waves += 0.6 * np.abs(carrier) * np.cos(np.unwrap(np.angle(carrier)) / 2)
    elif variant == "fast":
        waves += 0.7 * np.abs(carrier) * np.cos(2 * np.angle(carrier))
    waves *= stretch.gate(min(0.4, duration / 3))
    maps = cortex(
        scene.sites,
        rng,
        [-155, 155, -140, 140, 180],
        [2, 2, 16, 16, 18],
        spread_deg=(14.0, 26.0),
        lean=0.25,
    )
    return placed(stretch, "sharp posterior rhythm", maps, waves, amplitude_uv)


def photic_driving(
    scene: Scene,
    rng: np.random.Generator,
    onset: float,
    duration: float,
    amplitude_uv: float,
) -> Simulated:
    """Occipital answer to flashes at a steady 5 to 25 a second, with its double."""
    stretch = scene.stretch(onset, duration)
    turns = 2 * np.pi * float(rng.integers(5, 26)) * stretch.time
    wave = np.sin(turns) + rng.uniform(0.1, 0.6) * np.sin(2 * turns + rng.uniform(0, 6))
    wave *= stretch.gate(min(0.3, duration / 3)) * unsteady(stretch, rng, 0.12, 1.0)
    maps = cortex(
        scene.sites, rng, [-150, 150, 180], [5, 5, 20], spread_deg=(16.0, 26.0), lean=0.25
    )
    return placed(stretch, "photic driving", maps, wave, amplitude_uv)


def lambda_wave(
    scene: Scene,
    rng: np.random.Generator,
    onset: float,
    duration: float,
    amplitude_uv: float,
    *,
    saccades: Sequence[float] | None = None,
) -> Simulated:
    """Lambda waves: occipital, positive, saw-toothed, 0.1 to 0.25 s, after eye movements.

    ``saccades`` are the onsets of the eye movements (s), each followed by a wave after
    about 90 ms (from memory); None draws them at 1 to 4 a second, as in a person who scans
    a picture.
    """
    stretch = scene.stretch(onset, duration)
    if saccades is None:
        gaps = rng.uniform(0.25, 0.9, size=int(duration / 0.25) + 2)
        starts = np.concatenate([[0.0], np.cumsum(gaps)])
    else:
        starts = np.asarray(saccades, dtype=np.float64) + 0.09 - onset
    wave = np.zeros(stretch.n_samples)
    rise = rng.uniform(0.35, 0.6)
    for start in starts[(starts >= -1e-9) & (starts <= duration - 0.1)]:
        lasts = min(float(rng.uniform(0.1, 0.25)), duration - start)
        done = (stretch.time - start) / lasts
        size = float(np.exp(0.25 * rng.standard_normal()))
        wave += size * (ease(done / rise) - ease((done - rise) / (1 - rise)))
    wave *= stretch.gate(0.02)
    maps = cortex(
        scene.sites,
        rng,
        [-158, 158, 180],
        [4, 4, 14],
        spread_deg=(14.0, 24.0),
        wander_deg=4.0,
    )
    return placed(stretch, "lambda waves", maps, wave, amplitude_uv)


_REGIONS = {"F": (45, 25), "C": (88, 48), "P": (130, 38), "T": (88, 4)}


def breach(
    scene: Scene,
    rng: np.random.Generator,
    onset: float,
    duration: float,
    amplitude_uv: float,
) -> Simulated:
    """Breach rhythm beside a hole in the skull: sharp 6 to 11 Hz and beta, focal and high.

    Over one frontal, central, parietal or temporal region of one side.
    """
    stretch = scene.stretch(onset, duration)
    slow = bands(stretch, rng, 2, rng.uniform(6.5, 10.5), rng.uniform(0.5, 1.2), 0.5)
    fast = bands(stretch, rng, 2, rng.uniform(16.0, 26.0), rng.uniform(1.5, 3.0), 0.4)
    waves = _arches(slow, rng.uniform(0.6, 1.0)) + rng.uniform(0.3, 0.9) * fast.real
    waves *= stretch.gate(min(0.5, duration / 3)) * unsteady(stretch, rng, 0.3, 0.6)
    side = one_side(rng)
    azimuth, height = _REGIONS[str(rng.choice(list(_REGIONS)))]
    maps = cortex(
        scene.sites,
        rng,
        [side * azimuth, side * (azimuth + rng.uniform(-15, 15))],
        [height, height + rng.uniform(-10, 10)],
        spread_deg=(14.0, 22.0),
        lean=0.0,
        tilt_deg=20.0,
    )
    maps *= np.array([1.0, rng.uniform(0.2, 0.8)])[:, None]
    return placed(stretch, "breach rhythm", maps, waves, amplitude_uv)


def wicket(
    scene: Scene,
    rng: np.random.Generator,
    onset: float,
    duration: float,
    amplitude_uv: float,
) -> Simulated:
    """Wickets: temporal arches at 6 to 11 Hz, singly (below 0.25 s) or in trains."""
    stretch = scene.stretch(onset, duration)
    if duration < 0.25:
        rise = rng.uniform(0.3, 0.6)
        done = stretch.time / duration
        wave = ease((done - rise) / (1 - rise)) - ease(done / rise)
        wave = -(np.abs(wave) ** rng.uniform(0.8, 1.8))
        wave += rng.uniform(0.0, 0.3) * np.sin(np.pi * np.clip(done, 0, 1)) ** 2
    else:
        phase = wandering_phase(stretch, rng, rng.uniform(6.3, 10.7), 0.05)
        wave = contour(phase, rng.uniform(0.7, 1.0))
        wave *= stretch.gate(duration * rng.uniform(0.2, 0.5))
        wave *= unsteady(stretch, rng, 0.2, 0.2)
    side = one_side(rng)
    along = rng.uniform(70, 105)
    maps = cortex(
        scene.sites,
        rng,
        [side * along, -side * along],
        [2, 2],
        spread_deg=(12.0, 24.0),
        lean=0.0,
        tilt_deg=40.0,
    )
    maps *= np.array([1.0, rng.uniform(0.0, 0.3)])[:, None]
    return placed(stretch, "wickets", maps, wave, amplitude_uv)


def temporal_theta(
    scene: Scene,
    rng: np.random.Generator,
    onset: float,
    duration: float,
    amplitude_uv: float,
) -> Simulated:
    """Rhythmic temporal theta of drowsiness: 5 to 7 Hz, notched, of one side or both."""
    stretch = scene.stretch(onset, duration)
    rate = rng.uniform(5.1, 6.9)
    notch, turn = rng.uniform(0.2, 0.6), rng.normal(np.pi, 0.5)
    # Both sides have it independently, at nearly the same rate.
    phase = np.stack(
        [wandering_phase(stretch, rng, rate * share, 0.03) for share in (1.0, 0.98)]
    )
    waves = np.cos(phase) + notch * np.cos(2 * phase + turn)
    waves *= stretch.gate(min(0.5, duration / 3))
    waves *= np.stack([unsteady(stretch, rng, 0.3, 0.6) for _ in range(2)])
    side = one_side(rng)
    along = rng.uniform(68, 95)
    maps = cortex(
        scene.sites,
        rng,
        [side * along, -side * along],
        [2, 2],
        spread_deg=(14.0, 26.0),
        lean=0.0,
        tilt_deg=40.0,
    )
    maps *= np.array([1.0, rng.uniform(0.0, 0.8)])[:, None]
    return placed(stretch, "rhythmic temporal theta", maps, waves, amplitude_uv)
