"""Muscle: trains of motor-unit action potentials from four muscles near the scalp."""

from __future__ import annotations

from typing import TYPE_CHECKING, NamedTuple

import numpy as np

from artifactlens.errors import SamplingRateError
from artifactlens.simulation.scene import Scene, Simulated, ease

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import ArrayLike, NDArray


class Muscle(NamedTuple):
    """A muscle of the right side; the left is its mirror image.

    ``place`` in metres in the head frame; ``extent`` (metre) how far its parts lie from
    it; ``low_hz`` and ``high_hz`` are the corners of its spectrum (:func:`power_shape`).
    """

    place: tuple[float, float, float]
    extent: float
    low_hz: float
    high_hz: float


# Peaks: frontalis 20-30 Hz, temporalis 40-80 Hz (Goncharova et al. 2003, from memory).
# Masseter as temporalis, somewhat faster; the neck broad (both common practice).
MUSCLES: dict[str, Muscle] = {
    "frontalis": Muscle((0.035, 0.095, 0.005), 0.012, 27.0, 45.0),
    "temporalis": Muscle((0.080, 0.032, -0.005), 0.018, 60.0, 100.0),
    "masseter": Muscle((0.072, 0.040, -0.065), 0.015, 60.0, 130.0),
    "neck": Muscle((0.035, -0.092, -0.045), 0.018, 30.0, 160.0),
}

SPREAD = 0.03
"""Distance in metres at which a muscle's potential begins to fall off steeply."""

_PARTS = 6


def power_shape(freqs: ArrayLike, low_hz: float, high_hz: float) -> NDArray[np.float64]:
    r"""Power spectrum of a surface electromyogram, largest value 1.

    :math:`P \propto f^2 / ((f^2 + f_l^2) (f^2 + f_h^2)^2)` (Shwedyk et al. 1977, IEEE Trans
    Biomed Eng 24:417, from memory): rises with the square below :math:`f_l`, so that weak
    muscle reaches into alpha (Shackman et al. 2009), and reaches to about 300 Hz
    (Muthukumaraswamy 2013).
    """
    square = np.asarray(freqs, dtype=np.float64) ** 2
    fine = np.arange(1.0, 500.0) ** 2

    def shape(squared: NDArray[np.float64]) -> NDArray[np.float64]:
        return np.asarray(squared / ((squared + low_hz**2) * (squared + high_hz**2) ** 2))

    return np.asarray(shape(square) / shape(fine).max())


def spread_map(sites: ArrayLike, place: ArrayLike) -> NDArray[np.float64]:
    """Share of a superficial source at ``place`` that each site sees, shape (n_sites,).

    ``(1 + (d / SPREAD)^2)^-1.5`` of the distance d: falls with the cube, as the field of a
    dipole just below the surface does (a simplification: real muscles have a direction).
    """
    way = np.asarray(sites, dtype=np.float64) - np.asarray(place, dtype=np.float64)
    return np.asarray((1 + (way**2).sum(axis=1) / SPREAD**2) ** -1.5)


def motor_units(
    scene: Scene, rng: np.random.Generator, muscle: Muscle, *, units: int = 20
) -> NDArray[np.float64]:
    """Summed trains of ``units`` motor units of one part of a muscle, rms 1, (n_samples,).

    Each fires at 8 to 25 per second with 20 % variation of the interval (from memory) and
    has its own size; the shape of its potential follows the spectrum of the muscle. With
    few units single potentials can be seen, with many they blend.
    """
    from scipy.fft import irfft, next_fast_len, rfft, rfftfreq

    rates = rng.uniform(8.0, 25.0, size=(units, 1))
    count = int(np.ceil(1.3 * scene.length * rates.max())) + 20
    gaps = np.maximum(1 + 0.2 * rng.standard_normal((units, count)), 0.2) / rates
    times = np.cumsum(gaps, axis=1) - rng.uniform(0, 1, size=(units, 1)) / rates
    sizes = np.broadcast_to(rng.lognormal(0.0, 0.5, size=(units, 1)), times.shape)
    within = (times >= 0) & (times < scene.length)
    samples = np.minimum(
        (times[within] * scene.sfreq).astype(np.int64), scene.n_samples - 1
    )
    train = np.bincount(samples, weights=sizes[within], minlength=scene.n_samples)
    padded = next_fast_len(scene.n_samples + int(scene.sfreq), real=True)
    power = power_shape(rfftfreq(padded, 1 / scene.sfreq), muscle.low_hz, muscle.high_hz)
    # A phase of its own: potentials are biphasic to triphasic, of either sign.
    turn = np.exp(1j * rng.uniform(0, 2 * np.pi))
    wave = irfft(rfft(train, padded) * np.sqrt(power) * turn, padded)[: scene.n_samples]
    return np.asarray(wave / max(float(wave.std()), 1e-12))


def effort(
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


def contraction(
    scene: Scene,
    rng: np.random.Generator,
    name: str,
    onset: float,
    duration: float,
    *,
    rms_uv: float,
    sides: Sequence[str] = ("left", "right"),
    units: int = 20,
) -> Simulated:
    """One muscle contracts, on one side or on both with activity of their own.

    A muscle is six parts that fire independently, scattered over its extent, so that
    neighbouring sites see partly the same and partly not.

    Parameters
    ----------
    scene : Scene
        Electrodes and time.
    rng : numpy Generator
        Where chance comes from.
    name : str
        A key of ``MUSCLES``.
    onset, duration : float
        Seconds.
    rms_uv : float
        Root mean square at the strongest site, microvolt, while the effort is more than
        half of its largest: 2 is hardly seen, 20 plain, 100 and more swamps the trace.
    sides : sequence of "left", "right"
        The stronger side gets ``rms_uv``, the other 0.7 times that or more.
    units : int
        Motor units in each part.

    Raises
    ------
    SamplingRateError
        If the sampling rate carries next to nothing of muscle.
    """
    if scene.sfreq < 64:
        raise SamplingRateError(
            f"Muscle needs a sampling rate of 64 Hz or more; given {scene.sfreq:g} Hz.",
            "Simulate at the sampling rate of a recorder.",
        )
    first = int(np.clip((onset - 0.1) * scene.sfreq, 0, scene.n_samples))
    last = int(np.clip((onset + duration + 0.1) * scene.sfreq, first, scene.n_samples))
    field = np.zeros((scene.n_sites, scene.n_samples), dtype=np.float32)
    span = (f"{name} {' and '.join(sides)}", onset, duration)
    if last - first >= 2:
        # Only the stretch that is active is computed: recordings are long, bursts short.
        active = Scene(scene.sites, last - first, scene.sfreq)
        envelope = effort(active, rng, onset - first / scene.sfreq, duration)
        both = np.zeros((scene.n_sites, active.n_samples))
        for side in sides:
            both += rng.uniform(0.7, 1.0) * _one_side(
                active, rng, MUSCLES[name], side, units
            )
        both *= envelope
        power = np.mean(both[:, envelope > 0.5] ** 2, axis=1).max()
        field[:, first:last] = rms_uv * both / max(float(np.sqrt(power)), 1e-12)
    return scene.simulated("muscle", field, [span])


def _one_side(
    scene: Scene, rng: np.random.Generator, muscle: Muscle, side: str, units: int
) -> NDArray[np.float64]:
    mirror = np.array([-1.0 if side == "left" else 1.0, 1.0, 1.0])
    scatter = muscle.extent * rng.uniform(-1, 1, size=(_PARTS, 3))
    parts = np.array(muscle.place) * mirror + scatter
    seen = np.stack([spread_map(scene.sites, part) for part in parts], axis=1)
    trains = [motor_units(scene, rng, muscle, units=units) for _ in parts]
    return np.asarray(seen @ np.stack(trains))
