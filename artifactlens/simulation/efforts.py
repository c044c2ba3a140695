"""How the effort of a muscle goes with time: bursts, chewing, shivering, tremor, tonic.

Rates are common practice. Each takes a scene, chance, onset and duration (s) and gives the
effort at each sample, shape (n_samples,), largest value 1, nothing outside.
"""

from __future__ import annotations

from typing import TYPE_CHECKING, Protocol

import numpy as np

from artifactlens.simulation.scene import Scene, ease

if TYPE_CHECKING:
    from numpy.typing import NDArray


class Effort(Protocol):
    """Effort at each sample of a scene, from ``onset`` for ``duration`` seconds."""

    def __call__(
        self, scene: Scene, rng: np.random.Generator, onset: float, duration: float
    ) -> NDArray[np.float64]:
        """Shape (n_samples,), largest value 1."""
        ...


def burst(
    scene: Scene, rng: np.random.Generator, onset: float, duration: float
) -> NDArray[np.float64]:
    """Effort over time, largest value 1: quick rise, slower release, unsteady between.

    A twitch lasts 50 to 200 ms, a burst 0.3 to 3 s; longer ones wax and wane. Shape
    (n_samples,).
    """
    since = scene.time - onset
    rise = ease(since / min(0.08, 0.3 * duration))
    release = ease((duration - since) / min(0.25, 0.5 * duration))
    knots = np.arange(-0.5, duration + 1.0, 0.4)
    shape = np.interp(since, knots, np.exp(0.25 * rng.standard_normal(len(knots))))
    shape *= rise * release
    return np.asarray(shape / max(float(shape.max()), 1e-12))


def chewing(
    scene: Scene, rng: np.random.Generator, onset: float, duration: float
) -> NDArray[np.float64]:
    """Bites at 1 to 2 a second, each of 0.2 to 0.45 s with a strength of its own."""
    rate, share = rng.uniform(1.0, 2.0), rng.uniform(0.3, 0.5)
    turns, within = _turns(scene, rng, onset, duration, rate)
    strength = np.exp(0.25 * rng.standard_normal(int(turns.max(initial=0)) + 1))
    bite = ease(within / (0.35 * share)) * ease((share - within) / (0.5 * share))
    return _fitted(scene, strength[turns] * bite, onset, duration, 0.05)


def _rhythmic(
    scene: Scene, rng: np.random.Generator, onset: float, duration: float, rate_hz: float
) -> NDArray[np.float64]:
    _, within = _turns(scene, rng, onset, duration, rate_hz)
    depth, narrow = rng.uniform(0.6, 1.0), rng.uniform(0.7, 2.0)
    swing = 1 - depth + depth * np.sin(np.pi * within) ** (2 * narrow)
    knots = np.arange(-1.0, duration + 2.0, 0.7)
    size = np.exp(0.3 * rng.standard_normal(len(knots)))
    swing *= np.interp(scene.time - onset, knots, size)
    return _fitted(scene, swing, onset, duration, 0.2)


def shivering(
    scene: Scene, rng: np.random.Generator, onset: float, duration: float
) -> NDArray[np.float64]:
    """Shivering: effort that swings at 8 to 12 Hz, in waves."""
    return _rhythmic(scene, rng, onset, duration, rng.uniform(8.0, 12.0))


def tremor(
    scene: Scene, rng: np.random.Generator, onset: float, duration: float
) -> NDArray[np.float64]:
    """Tremor: effort that swings at 4 to 7 Hz."""
    return _rhythmic(scene, rng, onset, duration, rng.uniform(4.0, 7.0))


def tonic(
    scene: Scene, rng: np.random.Generator, onset: float, duration: float
) -> NDArray[np.float64]:
    """Steady tension that drifts over many seconds and comes and goes slowly."""
    knots = np.arange(-8.0, duration + 16.0, 8.0)
    size = np.exp(0.2 * rng.standard_normal(len(knots)))
    return _fitted(scene, np.interp(scene.time - onset, knots, size), onset, duration, 1.0)


def _turns(
    scene: Scene, rng: np.random.Generator, onset: float, duration: float, rate_hz: float
) -> tuple[NDArray[np.int64], NDArray[np.float64]]:
    """Number of each turn of a rhythm that is never quite regular, and how much is done."""
    gaps = np.exp(0.1 * rng.standard_normal(int(1.5 * rate_hz * duration) + 3)) / rate_hz
    ends = np.concatenate([[0.0], np.cumsum(gaps)])
    turns = np.interp(scene.time - onset, ends, np.arange(len(ends), dtype=np.float64))
    return turns.astype(np.int64), np.mod(turns, 1.0)


def _fitted(
    scene: Scene, shape: NDArray[np.float64], onset: float, duration: float, ramp: float
) -> NDArray[np.float64]:
    held = shape * scene.gate(onset, duration, min(ramp, duration / 3))
    return np.asarray(held / max(float(held.max(initial=0.0)), 1e-12))


EFFORTS: dict[str, Effort] = {
    "burst": burst,
    "chewing": chewing,
    "shivering": shivering,
    "tremor": tremor,
    "tonic": tonic,
}
