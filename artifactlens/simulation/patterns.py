"""What the patterns of ``lookalikes`` are built of: cortical patches and wave shapes.

Forms vary between calls (place, extent, side, sharpness), so that nothing can be learnt by
heart. Fields are always those of patches of cortex, never of the eye's sources.
"""

from __future__ import annotations

from typing import TYPE_CHECKING, NamedTuple, Protocol

import numpy as np

from artifactlens.simulation.head import direction, patch_map
from artifactlens.simulation.scene import Scene, Simulated, Stretch

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


def cortex(
    sites: ArrayLike,
    rng: np.random.Generator,
    azimuths: Sequence[float],
    elevations: Sequence[float],
    *,
    spread_deg: tuple[float, float] = (14.0, 26.0),
    wander_deg: float = 6.0,
    uneven: float = 0.2,
    lean: float = 0.2,
    tilt_deg: float = 25.0,
) -> NDArray[np.float64]:
    """Maps of patches of cortex about given directions, drawn anew for each call.

    Parameters
    ----------
    sites : array, shape (n_sites, 3)
        Electrodes, metre.
    rng : numpy Generator
        Where chance comes from.
    azimuths, elevations : sequence of float
        Degrees, as in :func:`~artifactlens.simulation.head.direction`.
    spread_deg : pair of float
        Degrees from the middle to the rim: drawn once, patches of a pattern are alike.
    wander_deg : float
        Standard deviation of each patch's place, degrees.
    uneven : float
        Standard deviation of the logarithm of each patch's size.
    lean : float
        The same for the right side against the midline, and of the left the other way.
    tilt_deg : float
        Largest angle of a patch's moment from the outward direction.

    Returns
    -------
    array, shape (n_patches, n_sites), without unit
    """
    count = len(azimuths)
    spread = float(rng.uniform(*spread_deg))
    up = np.asarray(elevations) + wander_deg * rng.standard_normal(count)
    turn = wander_deg * rng.standard_normal(count) / np.maximum(np.cos(np.radians(up)), 0.4)
    side = np.sign(np.sin(np.radians(azimuths)).round(6))
    size = np.exp(uneven * rng.standard_normal(count) + lean * rng.standard_normal() * side)
    tilts, towards = rng.uniform(0, tilt_deg, count), rng.uniform(0, 360, count)
    maps = [
        patch_map(sites, centre, spread_deg=spread, tilt_deg=tilt, tilt_towards_deg=toward)
        for centre, tilt, toward in zip(
            direction(np.asarray(azimuths) + turn, up), tilts, towards, strict=True
        )
    ]
    return size[:, None] * np.array(maps)


def one_side(rng: np.random.Generator) -> float:
    """Right (1) or left (-1)."""
    return float(rng.choice([-1.0, 1.0]))


def placed(
    stretch: Stretch,
    what: str,
    maps: NDArray[np.float64],
    waves: NDArray[np.float64],
    amplitude_uv: float,
) -> Simulated:
    """Patches at work, largest absolute value over sites and time ``amplitude_uv``.

    ``maps`` (n_patches, n_sites); ``waves`` (n_patches, n_samples of the stretch), or one
    for all, (n_samples,).
    """
    waves = np.atleast_2d(waves)
    seen = maps if len(waves) == len(maps) else maps.sum(axis=0, keepdims=True)
    # Written where it belongs at once: copies of long recordings are what takes time.
    potentials = np.zeros((stretch.scene.n_sites, stretch.scene.n_samples), np.float32)
    field = potentials[:, stretch.samples]
    np.matmul(seen.T.astype(np.float32), waves.astype(np.float32), out=field)
    peak = max(float(field.max(initial=0.0)), -float(field.min(initial=0.0)), 1e-12)
    field *= amplitude_uv / peak
    span = (what, stretch.onset, stretch.duration)
    return stretch.scene.simulated("brain", potentials, [span])


def bump(
    time: NDArray[np.float64], centre: NDArray[np.float64] | float, width: float
) -> NDArray[np.float64]:
    """Smooth hump of height 1; ``width`` is its breadth at the foot."""
    return np.asarray(np.exp(-0.5 * ((time - centre) / (width / 5)) ** 2))


def contour(phase: ArrayLike, sharp: float) -> NDArray[np.float64]:
    """One wave per turn of ``phase`` (radian): a cosine at ``sharp`` 0, arches at 1.

    Arches have sharp negative ends and round positive ones, as mu and wickets have.
    """
    angle = np.asarray(phase, dtype=np.float64)
    arch = 2 * np.abs(np.sin(angle / 2)) - 4 / np.pi
    return np.asarray(sharp * arch - (1 - sharp) * np.cos(angle))


def wandering_phase(
    stretch: Stretch,
    rng: np.random.Generator,
    rate_hz: NDArray[np.float64] | float,
    jitter: float = 0.06,
) -> NDArray[np.float64]:
    """Phase (radian) of a rhythm whose rate keeps to ``rate_hz`` but for ``jitter``.

    ``rate_hz`` one number or one for each sample; ``jitter`` is the standard deviation of
    the rate as a share, over stretches of 0.4 s. Starts anywhere in the turn.
    """
    knots = np.arange(-0.4, stretch.duration + 0.8, 0.4)
    pace = np.interp(stretch.time, knots, 1 + jitter * rng.standard_normal(len(knots)))
    turns = np.cumsum(pace * rate_hz) / stretch.scene.sfreq
    return np.asarray(2 * np.pi * (turns + rng.uniform()))


def unsteady(
    stretch: Stretch, rng: np.random.Generator, spread: float, every: float
) -> NDArray[np.float64]:
    """Size that waxes and wanes: about 1, log standard deviation ``spread``.

    A new value each ``every`` seconds, straight between. Shape (n_samples,).
    """
    knots = np.arange(-every, stretch.duration + 2 * every, every)
    sizes = np.exp(spread * rng.standard_normal(len(knots)))
    return np.asarray(np.interp(stretch.time, knots, sizes))


def bands(
    stretch: Stretch,
    rng: np.random.Generator,
    count: int,
    centre_hz: float,
    width_hz: float,
    shared: float,
) -> NDArray[np.complex128]:
    """Rhythms of ``count`` patches that share part of their activity.

    Gaussian bands of noise as in :func:`~artifactlens.simulation.brain.narrow_band`, but
    made as slow envelopes of one carrier, which is quicker. ``shared`` is the share of the
    amplitude in common, 0 to 1; each patch has a lag of its own of up to 0.5 radian. Real
    part: the rhythm, rms about 1; angle: its phase. Shape (count, n_samples).
    """
    from scipy.fft import fftfreq, ifft

    rate = 16 * width_hz
    # Longer than needed: the ends of a Fourier series meet.
    n_slow = int((stretch.duration + 4.0) * rate) + 32
    freqs = fftfreq(n_slow, 1 / rate)
    shape = np.exp(-0.5 * (freqs / width_hz) ** 2) * (freqs > 0.3 - centre_hz)
    real, imaginary = rng.standard_normal((2, count + 1, n_slow))
    slow = ifft((real + 1j * imaginary) * shape, axis=-1)
    slow *= np.sqrt(2 / np.mean(np.abs(slow) ** 2, axis=1, keepdims=True))
    lags = np.exp(1j * rng.uniform(-0.5, 0.5, size=(count, 1)))
    slow = shared * lags * slow[-1] + np.sqrt(1 - shared**2) * slow[:-1]
    knots = np.arange(n_slow) / rate
    envelopes = np.stack([np.interp(stretch.time, knots, row) for row in slow])
    return np.asarray(envelopes * np.exp(2j * np.pi * centre_hz * stretch.time))
