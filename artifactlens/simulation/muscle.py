"""Muscle: trains of motor-unit action potentials from four muscles near the scalp.

How the effort goes with time (a burst, chewing, shivering ...) is in ``efforts``.
"""

from __future__ import annotations

from typing import TYPE_CHECKING, NamedTuple

import numpy as np

from artifactlens.errors import SamplingRateError
from artifactlens.simulation.efforts import EFFORTS
from artifactlens.simulation.head import HEAD_RADIUS, lead_field
from artifactlens.simulation.scene import Scene, Simulated, unit_directions

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import ArrayLike, NDArray


class Muscle(NamedTuple):
    """A muscle of the right side; the left is its mirror image.

    ``place`` in metres in the head frame; ``extent`` (metre) how far its parts lie from
    it; ``low_hz`` and ``high_hz`` are the corners of its spectrum (:func:`power_shape`);
    ``fibre`` is where its fibres run, any length; ``directed`` is how much of its field
    follows them, 0 to 1 (:func:`fibre_map`), the rest spreads evenly (:func:`spread_map`).
    """

    place: tuple[float, float, float]
    extent: float
    low_hz: float
    high_hz: float
    fibre: tuple[float, float, float]
    directed: float = 0.0


# Peaks: frontalis 20-30 Hz, temporalis 40-80 Hz (Goncharova et al. 2003, from memory).
# Masseter as temporalis, somewhat faster; the neck broad (both common practice). Fibres:
# the forehead's run upwards, the temple's back and up in a fan, the neck's upwards.
MUSCLES: dict[str, Muscle] = {
    "frontalis": Muscle((0.035, 0.095, 0.005), 0.012, 27.0, 45.0, (0.1, 0.0, 1.0)),
    "temporalis": Muscle((0.080, 0.032, -0.005), 0.018, 60.0, 100.0, (0.0, -0.4, 1.0)),
    "masseter": Muscle((0.072, 0.040, -0.065), 0.015, 60.0, 130.0, (0.1, 0.3, 1.0)),
    "neck": Muscle((0.035, -0.092, -0.045), 0.018, 30.0, 160.0, (-0.2, 0.1, 1.0)),
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
    dipole just below the surface does (a simplification: see :func:`fibre_map`).
    """
    way = np.asarray(sites, dtype=np.float64) - np.asarray(place, dtype=np.float64)
    return np.asarray((1 + (way**2).sum(axis=1) / SPREAD**2) ** -1.5)


def fibre_map(sites: ArrayLike, place: ArrayLike, fibre: ArrayLike) -> NDArray[np.float64]:
    """Share of a superficial source that lies along ``fibre``, shape (n_sites,).

    A dipole 5 mm below the scalp, along the fibres: nothing right over it, and opposite
    signs before and behind. About 1 where it is largest.
    """
    outward = unit_directions(np.reshape(place, (1, 3)))[0]
    along = np.asarray(fibre, dtype=np.float64)
    along = along - (along @ outward) * outward
    along /= np.linalg.norm(along)
    source = 0.95 * HEAD_RADIUS * outward
    # A dipole d below a plane is strongest d / sqrt(2) before and behind its foot.
    strongest = HEAD_RADIUS * outward + 0.035 * HEAD_RADIUS * along
    peak = lead_field(strongest[None, :], source)[0, 0] @ along
    return np.asarray(lead_field(sites, source)[:, 0] @ along / peak)


def draw_muscle(rng: np.random.Generator, name: str, jitter: float = 1.0) -> Muscle:
    """Muscle of another person: place, spectrum and direction scattered about the typical.

    Standard deviations at ``jitter`` 1: 6 mm of place, 12 % of the corners of the spectrum,
    0.3 of the fibres' direction; ``directed`` is 0 in a third and up to 0.7 in the others
    (our own choice; peaks keep to the published ranges in most).
    """
    typical = MUSCLES[name]
    place = np.array(typical.place) + 0.006 * jitter * rng.standard_normal(3)
    low, high = np.exp(0.12 * jitter * rng.standard_normal(2))
    fibre = np.array(typical.fibre) + 0.3 * jitter * rng.standard_normal(3)
    directed = jitter > 0 and rng.random() > 1 / 3
    return Muscle(
        (float(place[0]), float(place[1]), float(place[2])),
        typical.extent * float(np.exp(0.2 * jitter * rng.standard_normal())),
        typical.low_hz * float(low),
        typical.high_hz * float(high),
        (float(fibre[0]), float(fibre[1]), float(fibre[2])),
        float(rng.uniform(0.0, 0.7)) if directed else typical.directed,
    )


def motor_units(
    scene: Scene,
    rng: np.random.Generator,
    muscle: Muscle,
    *,
    units: int = 20,
    rate_hz: tuple[float, float] = (8.0, 25.0),
) -> NDArray[np.float64]:
    """Summed trains of ``units`` motor units of one part of a muscle, rms 1, (n_samples,).

    Each fires at ``rate_hz`` (8 to 25) per second with 20 % variation of the interval (from
    memory) and has its own size; the shape of its potential follows the spectrum of the
    muscle. With few units single potentials can be seen, with many they blend.
    """
    from scipy.fft import irfft, next_fast_len, rfft, rfftfreq

    rates = rng.uniform(*rate_hz, size=(units, 1))
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
    effort: str = "burst",
    muscle: Muscle | None = None,
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
    effort : str
        A key of ``EFFORTS``: how the effort goes with time.
    muscle : Muscle or None
        Another person's muscle of that name (:func:`draw_muscle`); None is the typical one.

    Raises
    ------
    SamplingRateError
        If the sampling rate carries next to nothing of muscle.
    """
    _require_rate(scene)
    # Only the stretch that is active is computed: recordings are long, bursts short.
    first = int(np.clip((onset - 0.1) * scene.sfreq, 0, scene.n_samples))
    last = int(np.clip((onset + duration + 0.1) * scene.sfreq, first, scene.n_samples))
    field = np.zeros((scene.n_sites, scene.n_samples), dtype=np.float32)
    manner = "" if effort == "burst" else f" ({effort})"
    span = (f"{name} {' and '.join(sides)}{manner}", onset, duration)
    if last - first >= 2:
        active = Scene(scene.sites, last - first, scene.sfreq)
        envelope = EFFORTS[effort](active, rng, onset - first / scene.sfreq, duration)
        shares, seen, trains = [], [], []
        for side in sides:
            shares.append(np.full(_PARTS, rng.uniform(0.7, 1.0)))
            seen.append(_parts(scene.sites, rng, muscle or MUSCLES[name], side, _PARTS))
            trains += [
                motor_units(active, rng, muscle or MUSCLES[name], units=units)
                for _ in range(_PARTS)
            ]
        maps = np.concatenate(seen, axis=1) * np.concatenate(shares)
        waves = np.stack(trains) * envelope
        plain = waves[:, envelope > 0.5]
        # Mean square at each site, from the covariance of the parts: they are few.
        power = np.sum((maps @ (plain @ plain.T)) * maps, axis=1).max()
        power /= max(plain.shape[1], 1)
        maps *= rms_uv / max(float(np.sqrt(power)), 1e-12)
        np.matmul(
            maps.astype(np.float32), waves.astype(np.float32), out=field[:, first:last]
        )
    return scene.simulated("muscle", field, [span])


def single_unit(
    scene: Scene,
    rng: np.random.Generator,
    name: str,
    onset: float,
    duration: float,
    *,
    peak_uv: float,
    side: str = "right",
    muscle: Muscle | None = None,
) -> Simulated:
    """One motor unit that fires at 8 to 15 a second: a train of small spikes.

    ``peak_uv`` is the largest absolute value at the strongest site; the others as in
    :func:`contraction`.
    """
    _require_rate(scene)
    stretch = scene.stretch(onset, duration)
    whose = muscle or MUSCLES[name]
    field = np.zeros((scene.n_sites, stretch.n_samples))
    if stretch.n_samples >= 2:
        active = Scene(scene.sites, stretch.n_samples, scene.sfreq)
        wave = motor_units(active, rng, whose, units=1, rate_hz=(8.0, 15.0))
        wave *= stretch.gate(min(0.02, duration / 4))
        seen = _parts(scene.sites, rng, whose, side, 1)[:, 0]
        field = np.outer(seen, wave)
        field *= peak_uv / max(float(np.abs(field).max()), 1e-12)
    return stretch.simulated("muscle", field, f"motor unit of the {name} {side}")


def _parts(
    sites: ArrayLike, rng: np.random.Generator, muscle: Muscle, side: str, count: int
) -> NDArray[np.float64]:
    """What each site sees of ``count`` parts of a muscle, shape (n_sites, count)."""
    mirror = np.array([-1.0 if side == "left" else 1.0, 1.0, 1.0])
    scatter = muscle.extent * rng.uniform(-1, 1, size=(count, 3))
    places = np.array(muscle.place) * mirror + scatter
    seen = [(1 - muscle.directed) * spread_map(sites, place) for place in places]
    if muscle.directed:
        fibre = np.array(muscle.fibre) * mirror
        for number, place in enumerate(places):
            own = fibre + 0.2 * rng.standard_normal(3)
            seen[number] = seen[number] + muscle.directed * fibre_map(sites, place, own)
    return np.stack(seen, axis=1)


def _require_rate(scene: Scene) -> None:
    if scene.sfreq < 64:
        raise SamplingRateError(
            f"Muscle needs a sampling rate of 64 Hz or more; given {scene.sfreq:g} Hz.",
            "Simulate at the sampling rate of a recorder.",
        )
