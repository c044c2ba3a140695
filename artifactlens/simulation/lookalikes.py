"""Cerebral patterns that artifacts are mistaken for: what a flag must not sweep away.

Each function puts one pattern of the brain (cortical patches in the sphere of ``head``)
into otherwise silent potentials. Shapes, places and rates are those of the trade's
textbooks (common practice). ``amplitude_uv`` is the largest absolute value at the
strongest site.
"""

from __future__ import annotations

from typing import TYPE_CHECKING, NamedTuple, Protocol

import numpy as np

from artifactlens.simulation.brain import narrow_band, rhythm
from artifactlens.simulation.head import direction, patch_map
from artifactlens.simulation.scene import Scene, Simulated

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import ArrayLike, NDArray


class Maker(Protocol):
    """How a pattern is put into silent potentials."""

    def __call__(
        self,
        scene: Scene,
        rng: np.random.Generator,
        onset: float,
        duration: float,
        amplitude_uv: float,
    ) -> Simulated:
        """Pattern from ``onset`` for ``duration`` seconds."""
        ...


class LookAlike(NamedTuple):
    """A pattern, its usual duration (seconds) and amplitude, and the kind it mimics."""

    make: Maker
    duration: tuple[float, float]
    amplitude_uv: tuple[float, float]
    mistaken_for: str


def _map(
    sites: ArrayLike, azimuths: Sequence[float], elevations: Sequence[float], spread: float
) -> NDArray[np.float64]:
    """Patches active together, largest absolute value 1, shape (n_sites,)."""
    patches = direction(azimuths, elevations)
    field = np.sum(
        [patch_map(sites, patch, spread_deg=spread) for patch in patches], axis=0
    )
    return np.asarray(field / np.abs(field).max())


def _placed(
    scene: Scene,
    what: str,
    site_map: NDArray[np.float64],
    wave: NDArray[np.float64],
    onset: float,
    duration: float,
    amplitude_uv: float,
) -> Simulated:
    peak = max(float(np.abs(wave).max()), 1e-12)
    field = np.outer(site_map, amplitude_uv * wave / peak)
    return scene.simulated("brain", field, [(what, onset, duration)])


def _bump(time: NDArray[np.float64], centre: float, width: float) -> NDArray[np.float64]:
    """Smooth hump of height 1; ``width`` is its breadth at the foot."""
    return np.asarray(np.exp(-0.5 * ((time - centre) / (width / 5)) ** 2))


def frontal_delta(
    scene: Scene,
    rng: np.random.Generator,
    onset: float,
    duration: float,
    amplitude_uv: float,
) -> Simulated:
    """Frontal intermittent rhythmic delta: 2 to 2.5 Hz on both sides."""
    time = scene.time - onset
    rate = rng.uniform(2.0, 2.5)
    phase = 2 * np.pi * rate * time + 0.25 * np.sin(2 * np.pi * 0.4 * time)
    wave = np.sin(phase) + 0.25 * np.sin(2 * phase + 0.6)
    wave *= scene.gate(onset, duration, min(0.5, duration / 3))
    wave *= np.exp(0.2 * np.sin(2 * np.pi * 0.6 * time + rng.uniform(0, 6)))
    site_map = _map(scene.sites, [-20, 20], [22, 22], 24.0)
    return _placed(
        scene, "frontal rhythmic delta", site_map, wave, onset, duration, amplitude_uv
    )


def spike_and_wave(
    scene: Scene,
    rng: np.random.Generator,
    onset: float,
    duration: float,
    amplitude_uv: float,
) -> Simulated:
    """Generalised spike-and-wave, slowing from 3.2 to 2.7 a second, frontal maximum."""
    time = scene.time - onset
    slowing = np.clip(time / max(duration, 1e-9), 0, 1)
    cycles = rng.uniform(3.1, 3.3) * time - 0.25 * slowing * time
    place = np.mod(cycles, 1.0)
    wave = -1.1 * _bump(place, 0.12, 0.22) + 0.35 * _bump(place, 0.24, 0.15)
    wave -= 0.9 * _bump(place, 0.6, 1.0)
    wave *= scene.gate(onset, duration, min(0.25, duration / 3))
    site_map = _map(scene.sites, [-20, 20, 0, -75, 75], [30, 30, 55, 40, 40], 30.0)
    return _placed(scene, "spike-and-wave", site_map, wave, onset, duration, amplitude_uv)


def focal_spike(
    scene: Scene,
    rng: np.random.Generator,
    onset: float,
    duration: float,
    amplitude_uv: float,
) -> Simulated:
    """Spike of 60 ms and slow wave after it, from one patch anywhere in the convexity."""
    time = scene.time - onset
    wave = -_bump(time, 0.04, 0.06) + 0.3 * _bump(time, 0.085, 0.06)
    wave -= 0.45 * _bump(time, 0.1 + 0.45 * duration, 0.85 * duration)
    wave *= scene.gate(onset, duration, 0.015)
    places = direction(
        [-75, 75, -50, 50, -85, 85, -145, 145], [-5, -5, 20, 20, 45, 45, 10, 10]
    )
    centre = places[rng.integers(len(places))] + 0.15 * rng.standard_normal(3)
    site_map = patch_map(
        scene.sites, centre, spread_deg=rng.uniform(14, 25), tilt_deg=rng.uniform(0, 40)
    )
    return _placed(scene, "focal spike", site_map, wave, onset, duration, amplitude_uv)


def spindle(
    scene: Scene,
    rng: np.random.Generator,
    onset: float,
    duration: float,
    amplitude_uv: float,
) -> Simulated:
    """Sleep spindle: 12 to 14 Hz over the middle of the head, 0.5 to 2 s."""
    time = scene.time - onset
    wave = np.sin(2 * np.pi * rng.uniform(12.0, 14.0) * time + rng.uniform(0, 6))
    wave *= scene.gate(onset, duration, duration / 2)
    site_map = _map(scene.sites, [-85, 85, 0], [55, 55, 65], 16.0)
    return _placed(scene, "sleep spindle", site_map, wave, onset, duration, amplitude_uv)


def k_complex(
    scene: Scene,
    rng: np.random.Generator,
    onset: float,
    duration: float,
    amplitude_uv: float,
) -> Simulated:
    """K-complex: sharp negative wave, slower positive one, midline frontal maximum."""
    time = (scene.time - onset) / duration
    wave = -_bump(time, 0.25, 0.4) + rng.uniform(0.5, 0.8) * _bump(time, 0.65, 0.7)
    wave *= scene.gate(onset, duration, 0.1 * duration)
    site_map = _map(scene.sites, [-38, 38, 0, 0], [35, 35, 50, 80], 26.0)
    return _placed(scene, "K-complex", site_map, wave, onset, duration, amplitude_uv)


def vertex_wave(
    scene: Scene,
    rng: np.random.Generator,
    onset: float,
    duration: float,
    amplitude_uv: float,
) -> Simulated:
    """Vertex sharp wave of early sleep: negative, under 0.2 s, greatest at Cz."""
    time = (scene.time - onset) / duration
    wave = 0.2 * _bump(time, 0.12, 0.2) - _bump(time, 0.4, 0.5)
    wave += rng.uniform(0.2, 0.4) * _bump(time, 0.75, 0.5)
    wave *= scene.gate(onset, duration, 0.1 * duration)
    site_map = _map(scene.sites, [0, 180, -90, 90], [68, 72, 62, 62], 24.0)
    return _placed(scene, "vertex wave", site_map, wave, onset, duration, amplitude_uv)


def medication_beta(
    scene: Scene,
    rng: np.random.Generator,
    onset: float,
    duration: float,
    amplitude_uv: float,
) -> Simulated:
    """Plentiful beta of sedatives: 16 to 26 Hz, front and middle, both sides."""
    places = direction([-30, 30, -60, 60, 0, -90, 90], [20, 20, 45, 45, 55, 25, 25])
    made = rhythm(
        scene,
        rng,
        "medication beta",
        onset,
        duration,
        centres=places,
        centre_hz=float(rng.uniform(16.0, 26.0)),
        width_hz=1.6,
        amplitude_uv=1.0,
        shared=0.4,
    )
    peak = max(float(np.abs(made.potentials).max()), 1e-12)
    spans = [("medication beta", onset, duration)]
    return scene.simulated("brain", amplitude_uv / peak * made.potentials, spans)


def mu(
    scene: Scene,
    rng: np.random.Generator,
    onset: float,
    duration: float,
    amplitude_uv: float,
) -> Simulated:
    """Mu: arches at 8 to 11 Hz over one or the other central region, negative-sharp."""
    carrier = narrow_band(scene, rng, rng.uniform(8.5, 10.5), 0.4)
    wave = carrier.real + 0.4 * (carrier**2 / np.maximum(np.abs(carrier), 1e-12)).real
    wave *= scene.gate(onset, duration, min(0.3, duration / 3))
    sides = rng.permutation([1.0, rng.uniform(0.2, 0.9)])
    site_map = sides[0] * _map(scene.sites, [-80, -108], [45, 45], 22.0) + sides[1] * _map(
        scene.sites, [80, 108], [45, 45], 22.0
    )
    site_map /= np.abs(site_map).max()
    return _placed(scene, "mu", -site_map, wave, onset, duration, amplitude_uv)


def photic_driving(
    scene: Scene,
    rng: np.random.Generator,
    onset: float,
    duration: float,
    amplitude_uv: float,
) -> Simulated:
    """Occipital answer to flashes at a steady 6 to 18 a second, with its double."""
    time = scene.time - onset
    rate = float(rng.integers(6, 19))
    wave = np.sin(2 * np.pi * rate * time) + rng.uniform(0.2, 0.6) * np.sin(
        4 * np.pi * rate * time + rng.uniform(0, 6)
    )
    wave *= scene.gate(onset, duration, min(0.3, duration / 3))
    site_map = _map(scene.sites, [-150, 150, 180], [5, 5, 20], 20.0)
    return _placed(scene, "photic driving", site_map, wave, onset, duration, amplitude_uv)


def slow_waves(
    scene: Scene,
    rng: np.random.Generator,
    onset: float,
    duration: float,
    amplitude_uv: float,
) -> Simulated:
    """High slow waves, 0.7 to 2 Hz, as of deep sleep or overbreathing, frontal maximum."""
    gate = scene.gate(onset, duration, min(0.5, duration / 3))
    field = np.zeros((scene.n_sites, scene.n_samples))
    common = narrow_band(scene, rng, 1.3, 0.35)
    for centre, share in zip(
        direction([-30, 30, 0, -100, 100, 180], [40, 40, 60, 35, 35, 40]),
        (1.0, 1.0, 0.8, 0.5, 0.5, 0.5),
        strict=True,
    ):
        own = narrow_band(scene, rng, 1.3, 0.35)
        wave = (0.85 * common * np.exp(1j * rng.uniform(-0.5, 0.5)) + 0.5 * own).real
        field += np.outer(share * patch_map(scene.sites, centre, spread_deg=26.0), wave)
    field *= gate
    field *= amplitude_uv / max(float(np.abs(field).max()), 1e-12)
    return scene.simulated("brain", field, [("high slow waves", onset, duration)])


LOOK_ALIKES: dict[str, LookAlike] = {
    "frontal_delta": LookAlike(frontal_delta, (2.0, 6.0), (60.0, 180.0), "eye"),
    "slow_waves": LookAlike(slow_waves, (4.0, 20.0), (80.0, 250.0), "eye"),
    "spike_and_wave": LookAlike(spike_and_wave, (2.0, 12.0), (100.0, 350.0), "eye"),
    "k_complex": LookAlike(k_complex, (0.6, 1.1), (75.0, 200.0), "eye"),
    "vertex_wave": LookAlike(vertex_wave, (0.15, 0.25), (50.0, 150.0), "pop"),
    "focal_spike": LookAlike(focal_spike, (0.25, 0.5), (50.0, 200.0), "pop"),
    "spindle": LookAlike(spindle, (0.5, 2.0), (20.0, 60.0), "muscle"),
    "medication_beta": LookAlike(medication_beta, (4.0, 60.0), (20.0, 60.0), "muscle"),
    "mu": LookAlike(mu, (1.0, 4.0), (20.0, 60.0), "muscle"),
    "photic_driving": LookAlike(photic_driving, (5.0, 10.0), (20.0, 80.0), "mains"),
}
