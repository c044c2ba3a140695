"""Mains interference: a line frequency that wanders a little, with its harmonics."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from artifactlens.errors import SamplingRateError
from artifactlens.simulation.scene import Scene, Simulated

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import NDArray

TOLERANCE = 0.01
"""Share by which the frequency may be off for 99.5 % of the year (EN 50160)."""


def slow_track(
    time: NDArray[np.float64], rng: np.random.Generator, scale: float
) -> NDArray[np.float64]:
    """Smooth random track that changes over about ``scale`` seconds, rms about 1."""
    rates = rng.uniform(0.1, 1.0, size=(6, 1)) / scale
    phases = rng.uniform(0, 2 * np.pi, size=(6, 1))
    return np.asarray(np.sin(2 * np.pi * rates * time + phases).sum(axis=0) / np.sqrt(3.0))


def line_frequency(
    time: NDArray[np.float64],
    rng: np.random.Generator,
    nominal_hz: float,
    wander: float = 0.001,
) -> NDArray[np.float64]:
    """Line frequency at each time (seconds), hertz, shape (n_samples,).

    A start within ``wander`` (a share of the nominal) and a slow drift about it, never off
    by more than ``TOLERANCE``. Large grids keep within 0.001 nearly always (common
    practice); small ones use more of the tolerance.
    """
    track = wander * (rng.uniform(-1, 1) + 0.5 * slow_track(time, rng, 60.0))
    return np.asarray(nominal_hz * (1 + TOLERANCE * np.tanh(track / TOLERANCE)))


def hum(
    scene: Scene,
    rng: np.random.Generator,
    *,
    size_uv: float,
    nominal_hz: float = 50.0,
    rows: Sequence[int] | None = None,
    common: bool = False,
    onset: float = 0.0,
    duration: float | None = None,
    wander: float = 0.001,
    harmonics: Sequence[float] = (1.0, 0.08, 0.25, 0.04, 0.1),
) -> Simulated:
    """Mains at some electrodes or at all.

    Parameters
    ----------
    scene : Scene
        Electrodes and time.
    rng : numpy Generator
        Where chance comes from.
    size_uv : float
        Amplitude (half of peak to peak) of the fundamental at the strongest electrode,
        microvolt; it drifts slowly about this.
    nominal_hz : float
        50 or 60.
    rows : sequence of int, or None
        Electrodes that pick it up; None is every one.
    common : bool
        True: the same size and phase at each of ``rows``, as from a ground at fault; a
        reference among them cancels it. False: each its own (0.2 to 1 of the largest).
    onset : float
        Seconds. A start within the scene fades in over half a second, an end fades out.
    duration : float or None
        Seconds; None is to the end of the scene.
    wander : float
        See :func:`line_frequency`.
    harmonics : sequence of float
        Amplitudes of the fundamental and its multiples; odd ones stand out (common
        practice). Those at or above the Nyquist frequency are left out.

    Raises
    ------
    SamplingRateError
        If the fundamental itself is not below the Nyquist frequency.
    """
    highest = nominal_hz * (1 + TOLERANCE)
    if highest >= scene.sfreq / 2:
        raise SamplingRateError(
            f"Mains at {nominal_hz:g} Hz needs a sampling rate above {2 * highest:g} Hz; "
            f"given {scene.sfreq:g} Hz.",
            "Leave mains out at this sampling rate.",
        )
    chosen = np.arange(scene.n_sites) if rows is None else np.asarray(rows)
    ends = scene.length if duration is None else onset + duration
    # Edges that lie at or beyond those of the scene get no fade.
    start = onset if onset > 0 else -1.0
    stop = ends if ends < scene.length else scene.length + 1.0
    frequency = line_frequency(scene.time, rng, nominal_hz, wander)
    turns = 2 * np.pi * np.cumsum(frequency) / scene.sfreq
    size = size_uv * np.exp(0.2 * slow_track(scene.time, rng, 20.0))
    size *= scene.gate(start, stop - start, 0.5)
    shares = np.ones(len(chosen)) if common else rng.uniform(0.2, 1.0, len(chosen))
    delays = np.zeros(len(chosen)) if common else rng.uniform(0, 2 * np.pi, len(chosen))
    field = np.zeros((scene.n_sites, scene.n_samples), dtype=np.float32)
    for order, part in enumerate(harmonics, start=1):
        phase = rng.uniform(0, 2 * np.pi)
        if order * highest < scene.sfreq / 2:
            wave = np.sin(order * (turns + delays[:, None]) + phase)
            field[chosen] += (shares / shares.max())[:, None] * size * part * wave
    what = f"{nominal_hz:g} Hz mains at {len(chosen)} of {scene.n_sites} electrodes"
    return scene.simulated("mains", field, [(what, onset, ends - onset)])
