"""Invented recordings for tests: noise of a known spectrum, and events at known places."""

from __future__ import annotations

import numpy as np

from artifactlens.epochs import EpochBatch
from artifactlens.recording import from_array

SITES = (
    "Fp1", "Fp2", "F7", "F3", "Fz", "F4", "F8", "T7", "C3", "Cz",
    "C4", "T8", "P7", "P3", "Pz", "P4", "P8", "O1", "O2",
)  # fmt: skip


def noise(n_rows, n_samples, sfreq, *, exponent=1.0, rms_uv=10.0, seed=0):
    """Independent noise whose power falls with 1/f^exponent, nothing below 0.5 Hz."""
    rng = np.random.default_rng(seed)
    freqs = np.fft.rfftfreq(n_samples, 1 / sfreq)
    gain = np.where(freqs >= 0.5, np.maximum(freqs, 0.5) ** (-exponent / 2), 0.0)
    spectrum = np.fft.rfft(rng.normal(size=(n_rows, n_samples)), axis=1)
    shaped = np.fft.irfft(spectrum * gain, n_samples, axis=1)
    return rms_uv * shaped / shaped.std(axis=1, keepdims=True)


def ten_twenty(seconds, sfreq=256.0, seed=0, **options):
    """Noise of the 19 sites of the 10-20 system, (19, n_samples) microvolt; see noise."""
    return noise(len(SITES), round(seconds * sfreq), sfreq, seed=seed, **options)


def referential(data, sfreq=256.0, labels=SITES, **options):
    """A recording of these potentials against one reference that is no named site."""
    return from_array(data, sfreq, [f"{site}-REF" for site in labels], **options)


def row(site):
    return SITES.index(site)


def sine(n_samples, sfreq, hz, amplitude, phase=0.3):
    return amplitude * np.sin(2 * np.pi * hz * np.arange(n_samples) / sfreq + phase)


def step(n_samples, sfreq, second, size, tau=np.inf):
    """A step of this size at this second that decays with tau seconds."""
    after = np.arange(n_samples) / sfreq - second
    return np.where(after >= -1e-9, size * np.exp(-np.maximum(after, 0) / tau), 0.0)


def bump(n_samples, sfreq, second, size, width=0.3):
    """A raised cosine around this second: a blink, a turn of the eyes and back."""
    away = np.arange(n_samples) / sfreq - second
    return np.where(np.abs(away) < width / 2, size * np.cos(np.pi * away / width) ** 2, 0.0)


def batch_of(sites_uv, sfreq):
    """An EpochBatch of these site potentials; first and last second are the context."""
    data = np.asarray(sites_uv, dtype=np.float32)
    n = int(sfreq)
    starts = np.arange(data.shape[1] // n) * n
    inner = (len(data), len(starts) - 2)
    return EpochBatch(
        first=0,
        sites_uv=data,
        starts=starts,
        inside=np.ones(len(starts), dtype=bool),
        ok=np.ones((len(data), len(starts)), dtype=bool),
        n_samples=n,
        sampling_rate=float(sfreq),
        flat=np.zeros(inner, dtype=bool),
        missing=np.zeros(inner, dtype=bool),
        clipped=np.zeros(inner, dtype=bool),
    )
