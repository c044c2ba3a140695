"""Invented background: broadband noise, alpha and beta of cortical dipoles."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from artifactlens.simulation.head import (
    HEAD_RADIUS,
    SKULL,
    direction,
    lead_field,
    patch_map,
)
from artifactlens.simulation.scene import Scene, Simulated

if TYPE_CHECKING:
    from numpy.typing import ArrayLike, NDArray

KNEE_HZ = 22.0
"""Above this the background falls more steeply, by the square of the frequency: from 30 to
98 Hz that makes the exponent of about 3 that scalp spectra have without muscle (``floor``).
"""


def shaped_noise(
    n_rows: int, scene: Scene, rng: np.random.Generator, exponent: float
) -> NDArray[np.float64]:
    r"""Independent rows of noise, rms 1, with a falling power spectrum.

    :math:`P(f) \propto (f^2 + 0.5^2)^{-\alpha / 2} \; (1 + f^2 / f_k^2)^{-1}`, f in hertz,
    knee :math:`f_k` ``KNEE_HZ``. Shape (n_rows, n_samples).
    """
    from scipy.fft import irfft, next_fast_len, rfft, rfftfreq

    padded = next_fast_len(scene.n_samples, real=True)
    freqs = rfftfreq(padded, 1 / scene.sfreq)
    power = (freqs**2 + 0.25) ** (-exponent / 2) / (1 + (freqs / KNEE_HZ) ** 2)
    power[0] = 0.0
    noise = irfft(rfft(rng.standard_normal((n_rows, padded))) * np.sqrt(power), padded)
    return np.asarray(noise[:, : scene.n_samples] / np.sqrt(power.mean()))


def narrow_band(
    scene: Scene, rng: np.random.Generator, centre_hz: float, width_hz: float
) -> NDArray[np.complex128]:
    """Rhythm that waxes and wanes: a Gaussian band of noise about ``centre_hz``.

    ``width_hz`` is the standard deviation of the band; 0.5 Hz gives spindles of a second or
    two. Complex, shape (n_samples,): the real part is the rhythm, its rms 1; the angle is
    its phase.
    """
    from scipy.fft import fftfreq, ifft

    freqs = fftfreq(scene.n_samples, 1 / scene.sfreq)
    inside = (np.abs(freqs - centre_hz) < 5 * width_hz) & (freqs > 0)
    real, imaginary = rng.standard_normal((2, int(inside.sum())))
    spectrum = np.zeros(scene.n_samples, dtype=np.complex128)
    spectrum[inside] = real + 1j * imaginary
    spectrum[inside] *= np.exp(-0.5 * ((freqs[inside] - centre_hz) / width_hz) ** 2)
    wave = ifft(spectrum)
    return np.asarray(wave / np.sqrt(np.mean(wave.real**2)))


def cortical_dipoles(
    count: int, rng: np.random.Generator
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Random sources in the cortex.

    Even over the sphere down to 30 degrees below its equator, at 75 to 85 % of its radius
    (drawn inwards for the blur of the skull), moments in any direction (cortex is folded).

    Returns
    -------
    positions, moments : arrays, shape (count, 3), metre and without unit (length 1)
    """
    height = rng.uniform(np.sin(np.radians(-30.0)), 1.0, size=count)
    outward = direction(rng.uniform(0, 360, size=count), np.degrees(np.arcsin(height)))
    depth = rng.uniform(0.75, 0.85, size=(count, 1))
    moments = rng.standard_normal((count, 3))
    moments /= np.linalg.norm(moments, axis=1, keepdims=True)
    return HEAD_RADIUS * SKULL * depth * outward, moments


def mixing(sites: ArrayLike, count: int, rng: np.random.Generator) -> NDArray[np.float64]:
    """What each site sees of ``count`` random cortical dipoles, shape (n_sites, count)."""
    positions, moments = cortical_dipoles(count, rng)
    return np.asarray(np.einsum("sdk,dk->sd", lead_field(sites, positions), moments))


def background(
    scene: Scene,
    rng: np.random.Generator,
    *,
    rms_uv: float = 10.0,
    exponent: float = 1.2,
    dipoles: int = 80,
) -> Simulated:
    """Ongoing broadband activity; its truth is empty.

    Parameters
    ----------
    scene : Scene
        Electrodes and time.
    rng : numpy Generator
        Where chance comes from.
    rms_uv : float
        Root mean square over sites and time, microvolt.
    exponent : float
        Power falls with frequency to this power up to ``KNEE_HZ``, and 2 more above.
    dipoles : int
        Independent sources.
    """
    waves = shaped_noise(dipoles, scene, rng, exponent)
    field = mixing(scene.sites, dipoles, rng) @ waves
    return scene.simulated("brain", rms_uv / np.sqrt(np.mean(field**2)) * field, [])


def rhythm(
    scene: Scene,
    rng: np.random.Generator,
    what: str,
    onset: float,
    duration: float,
    *,
    centres: ArrayLike,
    centre_hz: float,
    width_hz: float,
    amplitude_uv: float,
    shared: float = 0.7,
) -> Simulated:
    """Rhythm of several patches of cortex that share part of their activity.

    Parameters
    ----------
    scene : Scene
        Electrodes and time.
    rng : numpy Generator
        Where chance comes from.
    what : str
        What the truth calls it.
    onset, duration : float
        Seconds.
    centres : array, shape (n_patches, 3)
        Directions of the patches.
    centre_hz, width_hz : float
        See :func:`narrow_band`.
    amplitude_uv : float
        At the strongest site: 1.4 times the root mean square while it lasts, microvolt.
    shared : float
        Share of the amplitude that the patches have in common, 0 to 1.
    """
    common = narrow_band(scene, rng, centre_hz, width_hz)
    field = np.zeros((scene.n_sites, scene.n_samples))
    for centre in np.asarray(centres, dtype=np.float64):
        own = narrow_band(scene, rng, centre_hz, width_hz)
        lag = np.exp(1j * rng.uniform(-0.6, 0.6))
        tilt, towards = rng.uniform(0, 50), rng.uniform(0, 360)
        seen = patch_map(scene.sites, centre, tilt_deg=tilt, tilt_towards_deg=towards)
        field += np.outer(seen, (shared * lag * common + np.sqrt(1 - shared**2) * own).real)
    gate = scene.gate(onset, duration, min(0.4, duration / 3))
    field *= gate
    power = np.sum(field**2, axis=1).max() / max(float(np.sum(gate**2)), 1e-12)
    field *= amplitude_uv / max(float(np.sqrt(2 * power)), 1e-12)
    return scene.simulated("brain", field, [(what, onset, duration)])


def alpha(
    scene: Scene,
    rng: np.random.Generator,
    onset: float,
    duration: float,
    *,
    amplitude_uv: float = 40.0,
    peak_hz: float | None = None,
) -> Simulated:
    """Posterior alpha, 9 to 11 Hz unless told, waxing and waning over a second or two."""
    return rhythm(
        scene,
        rng,
        "posterior alpha",
        onset,
        duration,
        centres=direction([-155, 155, -140, 140, 180], [0, 0, 12, 12, 15]),
        centre_hz=float(rng.uniform(9.0, 11.0)) if peak_hz is None else peak_hz,
        width_hz=0.45,
        amplitude_uv=amplitude_uv,
    )


def beta(
    scene: Scene,
    rng: np.random.Generator,
    onset: float,
    duration: float,
    *,
    amplitude_uv: float = 8.0,
    peak_hz: float | None = None,
) -> Simulated:
    """Beta over the front and the middle, 16 to 24 Hz unless told, in short spindles."""
    return rhythm(
        scene,
        rng,
        "beta",
        onset,
        duration,
        centres=direction([-35, 35, -80, 80, 0], [25, 25, 50, 50, 60]),
        centre_hz=float(rng.uniform(16.0, 24.0)) if peak_hz is None else peak_hz,
        width_hz=2.5,
        amplitude_uv=amplitude_uv,
        shared=0.5,
    )
