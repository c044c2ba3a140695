"""Features of the power spectrum: one spectrum per half-second hop, shared by all.

Spectra are one-sided densities in microvolt squared per hertz over Hann windows [1]_ of one
second. The spectrum of an epoch is the weighted mean of its own window (one half) and the
two that straddle its ends (one quarter each), so that every sample of the epoch counts
about alike (Welch 1967 [2]_).

References
----------
.. [1] Harris (1978), Proc. IEEE 66(1), doi:10.1109/PROC.1978.10837
.. [2] Welch (1967), IEEE Trans. Audio Electroacoust. 15(2), doi:10.1109/TAU.1967.1161901
"""

from __future__ import annotations

import itertools
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from artifactlens.errors import SamplingRateError

if TYPE_CHECKING:
    from artifactlens.epochs import EpochBatch

Array = NDArray[np.float32]

HIGHEST_HZ = 200.0
"""Nothing above is used, whatever the sampling rate."""

SLOPE_EDGES_HZ = (14.0, 17.0, 20.5, 24.5, 29.5, 35.5, 42.5)
HIGH_BAND_HZ = (55.0, 95.0)
LINE_MARGIN_HZ = 6.0
"""How far beyond the line its flanks are read."""

LEAST_LINE_DB = 5.0
FLOOR = np.float32(1e-6)
"""Power density (uV^2/Hz) added before a logarithm: far below any amplifier's noise."""


def epoch_spectra(batch: EpochBatch) -> tuple[Array, NDArray[np.float64]]:
    """Power spectral density of every epoch and site.

    Returns
    -------
    psd : array, shape (n_sites, n_epochs, n_freqs), microvolt squared per hertz
    freqs : array, shape (n_freqs,), hertz
    """
    n, starts = batch.n_samples, batch.starts
    own, freqs = _window_power(batch, starts[1:-1], n)
    straddling, _ = _window_power(batch, starts[1:] - n // 2, n)
    left = 0.25 * (batch.inside & batch.ok)[:, :-2]
    right = 0.25 * (batch.inside & batch.ok)[:, 2:]
    total = 0.5 + left + right
    own *= (0.5 / total).astype(np.float32)[:, :, None]
    own += straddling[:, :-1] * (left / total).astype(np.float32)[:, :, None]
    own += straddling[:, 1:] * (right / total).astype(np.float32)[:, :, None]
    return own, freqs


def _window_power(
    batch: EpochBatch, starts: NDArray[np.int64], n: int
) -> tuple[Array, NDArray[np.float64]]:
    import scipy.fft

    window = np.hanning(n + 1)[:-1].astype(np.float32)
    n_fft = scipy.fft.next_fast_len(n, real=True)
    freqs = scipy.fft.rfftfreq(n_fft, 1 / batch.sampling_rate)
    keep = int(np.searchsorted(freqs, min(HIGHEST_HZ, freqs[-1]), side="right"))
    spectrum = scipy.fft.rfft(batch.windows(starts, n) * window, n=n_fft, axis=2)[
        ..., :keep
    ]
    power = spectrum.real**2
    power += spectrum.imag**2
    power *= np.float32(2 / (batch.sampling_rate * np.sum(window.astype(np.float64) ** 2)))
    return power, freqs[:keep]


def band_density(
    psd: Array,
    freqs: NDArray[np.float64],
    low: float,
    high: float,
    *,
    without: tuple[float, ...] = (),
    usable: float = np.inf,
) -> Array:
    """Mean power density of a band in decibel, ``10 log10`` of uV^2/Hz.

    Parameters
    ----------
    psd : array, shape (..., n_freqs), uV^2/Hz
    freqs : array, shape (n_freqs,), hertz
    low, high : float, hertz
        Bins with ``low <= f <= high`` count.
    without : tuple of float, hertz
        Bins within 3 Hz of these are left out (line frequency and harmonics).
    usable : float, hertz
        Bins above carry no signal of the scalp and are left out.

    Returns
    -------
    array, shape (...), decibel; NaN if less than three tenths of the band is left.
    """
    band = (freqs >= low) & (freqs <= high)
    keep = band & (freqs <= usable)
    for line in without:
        band &= np.abs(freqs - line) > 3
        keep &= np.abs(freqs - line) > 3
    if not keep.any() or keep.sum() < 0.3 * band.sum():
        return np.full(psd.shape[:-1], np.nan, dtype=np.float32)
    weights = (keep / keep.sum()).astype(np.float32)
    return 10 * np.log10(psd @ weights + FLOOR)


def spectral_slope(psd: Array, freqs: NDArray[np.float64], *, usable: float) -> Array:
    """Slope of log power over log frequency between 14 and 42 Hz.

    Ordinary least squares through band means that are evenly spaced in log frequency;
    the alpha peak and the line frequency lie outside. Scalp EEG free of muscle falls with
    about 1/f to 1/f^2, so -1 to -2; muscle brings the slope near 0 or above
    (Fitzgibbon et al. 2016 put the border near -0.31 over 7-75 Hz; value from memory).

    Returns
    -------
    array, shape (...), exponent; NaN if ``usable`` leaves fewer than four bands.
    """
    edges = np.array(SLOPE_EDGES_HZ)
    pairs = [
        (low, high)
        for low, high in itertools.pairwise(edges)
        if high <= usable and ((freqs >= low) & (freqs < high)).any()
    ]
    if len(pairs) < 4:
        return np.full(psd.shape[:-1], np.nan, dtype=np.float32)
    masks = np.array(
        [(freqs >= low) & (freqs < high) for low, high in pairs], dtype=np.float64
    )
    masks /= masks.sum(axis=1, keepdims=True)
    centres = np.log10(masks @ freqs)
    weights = centres - centres.mean()
    weights /= np.sum(weights**2)
    level = np.log10(psd @ masks.T.astype(np.float32) + FLOOR)
    return level @ weights.astype(np.float32)


def peakedness(psd: Array, freqs: NDArray[np.float64], low: float, high: float) -> Array:
    """Highest bin of a band over the band's mean, decibel.

    A spindle or medication beta makes one narrow peak, muscle a broad rise. NaN if the
    band is empty, as below a low-pass at 12 Hz.
    """
    band = (freqs >= low) & (freqs <= high)
    if not band.any():
        return np.full(psd.shape[:-1], np.nan, dtype=np.float32)
    part = psd[..., band]
    return 10 * np.log10((part.max(axis=-1) + FLOOR) / (part.mean(axis=-1) + FLOOR))


def mains_ratio(psd: Array, freqs: NDArray[np.float64], *, mains_hz: float) -> Array:
    r"""Mains power over the power beside it.

    :math:`10 \log_{10} (\bar P_{core} / \bar P_{ring})`: *core* bins lie within 1 Hz of
    ``mains_hz``, *ring* bins 2 to 6 Hz away.

    Parameters
    ----------
    psd : array, shape (..., n_freqs), uV^2/Hz
    freqs : array, shape (n_freqs,), hertz
    mains_hz : float, hertz

    Returns
    -------
    array, shape (...), decibel
        About 0 for white noise. NaN if the ring holds no power (flat line).

    Raises
    ------
    SamplingRateError
        If ``mains_hz + 6`` exceeds the highest frequency of the spectrum.
    """
    core, ring = _core_and_ring(freqs, mains_hz)
    beside = psd @ ring
    with np.errstate(divide="ignore", invalid="ignore"):
        ratio = 10 * np.log10(psd @ core / beside)
    return np.where(beside > 0, ratio, np.float32(np.nan))


def mains_amplitude(psd: Array, freqs: NDArray[np.float64], *, mains_hz: float) -> Array:
    """Amplitude of the mains sine, microvolt (peak).

    A sine of amplitude ``a`` adds power ``a^2 / 2``, which the Hann window spreads over the
    bins within 2 Hz; what the flanks lead one to expect there is taken off first. 0 where
    the line stands less than ``LEAST_LINE_DB`` above its flanks: muscle has power there too,
    and its chance peaks are no mains.
    """
    core, ring = _core_and_ring(freqs, mains_hz)
    wide = (np.abs(freqs - mains_hz) <= 2.01).astype(np.float32)
    spacing = np.float32(freqs[1] - freqs[0])
    beside = psd @ ring
    excess = (psd @ wide - beside * wide.sum()) * spacing
    stands_out = psd @ core > 10 ** (LEAST_LINE_DB / 10) * beside
    return np.sqrt(2 * np.maximum(np.where(stands_out, excess, 0), 0))


def beyond_the_mean(size: Array, ok: NDArray[np.bool_], chain: NDArray[np.intp]) -> Array:
    """Amplitudes less what the mean of a chain carries over from its strongest site.

    In a chain of mean zero over n sites, an amplitude A at one site alone shows as A / n at
    every other. Taken off in power is 1.5 times that, since others may add to it.

    Parameters
    ----------
    size : array, shape (n_sites, n_epochs), microvolt
    ok : array, shape (n_sites, n_epochs), bool
    chain : array, shape (n_sites,)
        Connected component of each site.
    """
    own = np.empty_like(size)
    for number in np.unique(chain):
        rows = chain == number
        strongest = np.where(ok[rows], size[rows], np.float32(0)).max(axis=0)
        carried = np.float32(1.5) * strongest / np.maximum(ok[rows].sum(axis=0), 1)
        square = size[rows] ** 2 - carried.astype(np.float32) ** 2
        own[rows] = np.sqrt(np.maximum(square, 0))
    return own


def _core_and_ring(freqs: NDArray[np.float64], mains_hz: float) -> tuple[Array, Array]:
    # The last bin of an odd window lies half a bin below Nyquist, the line up to 1 % off.
    if mains_hz + LINE_MARGIN_HZ > freqs[-1] + 1.2:
        raise SamplingRateError(
            f"mains_ratio reads up to {mains_hz + 6:g} Hz, but the spectrum ends at "
            f"{freqs[-1]:g} Hz.",
            "Record at a higher sampling rate to judge mains.",
        )
    distance = np.abs(freqs - mains_hz)
    core = (distance <= 1.01).astype(np.float32)
    ring = ((distance >= 2.01) & (distance <= 6.01)).astype(np.float32)
    return core / core.sum(), ring / ring.sum()
