"""Electrode pops, a loose lead, a swaying site, and the recorder's filters that shape them.

A pop is a step of the potential between one electrode and the skin. It reaches one row
only (the reference's row, if that electrode pops, and so every channel that is measured
against it). What a reader knows as steep rise and slow fall comes from the recorder's
high-pass, so a pop is a plain step here and the filter a function of its own.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from artifactlens.simulation.scene import Scene, Simulated, ease

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import ArrayLike, NDArray

POP_FORMS: tuple[str, ...] = ("step", "partial return", "settling")


def high_pass_first_order(
    x: ArrayLike, cutoff_hz: float, sfreq: float
) -> NDArray[np.float64]:
    r"""First-order high-pass of a recorder, causal, at rest before the first sample.

    :math:`y_n = a (y_{n-1} + x_n - x_{n-1})` with :math:`a = e^{-2 \pi f_c / f_s}`: a step
    decays with :math:`\tau = 1 / (2 \pi f_c)` exactly, at every sampling rate. ``x``
    (..., n_samples) in microvolt, ``cutoff_hz`` and ``sfreq`` in hertz.
    """
    from scipy.signal import lfilter

    signal = np.asarray(x, dtype=np.float64)
    decay = float(np.exp(-2 * np.pi * cutoff_hz / sfreq))
    kept = lfilter([decay, -decay], [1.0, -decay], signal - signal[..., :1], axis=-1)
    return np.asarray(kept)


def low_pass(
    x: ArrayLike, cutoff_hz: float, sfreq: float, *, order: int = 4
) -> NDArray[np.float64]:
    """Causal Butterworth low-pass (anti-alias or high-frequency filter of a recorder).

    ``x`` (..., n_samples) in microvolt, at rest before its first sample. A cut-off at or
    above the Nyquist frequency removes nothing.
    """
    from scipy.signal import butter, sosfilt

    signal = np.asarray(x, dtype=np.float64)
    if cutoff_hz >= sfreq / 2:
        return signal
    sections = butter(order, cutoff_hz, fs=sfreq, output="sos")
    rest = signal[..., :1]
    return np.asarray(sosfilt(sections, signal - rest, axis=-1) + rest)


def step_wave(
    time: NDArray[np.float64], onset: float, rise: float = 0.005, form: str = "step"
) -> NDArray[np.float64]:
    """Step of height 1 at ``onset`` (seconds), half-cosine rise of ``rise`` seconds.

    ``form``: a lasting "step"; a "partial return" (after 0.12 s four tenths jump back);
    "settling" (the contact recovers by itself with a time constant of 0.4 s).
    """
    since = time - onset
    wave = ease(since / rise)
    if form == "partial return":
        wave -= 0.4 * ease((since - 0.12) / rise)
    elif form == "settling":
        wave *= np.exp(-np.maximum(since - rise, 0) / 0.4)
    return wave


def pops(
    scene: Scene,
    rng: np.random.Generator,
    row: int,
    onsets: Sequence[float],
    *,
    sizes_uv: Sequence[float] | None = None,
    forms: Sequence[str] = ("step",),
    high_pass_hz: float | None = None,
) -> Simulated:
    """Pops of one electrode.

    Parameters
    ----------
    scene : Scene
        Electrodes and time.
    rng : numpy Generator
        Where chance comes from.
    row : int
        The electrode that pops.
    onsets : sequence of float
        Seconds.
    sizes_uv : sequence of float, or None
        Signed heights, microvolt; None draws 30 to 1000, even on a logarithmic scale.
    forms : sequence of str
        Those of ``POP_FORMS`` to draw from; the rise is drawn from 2 to 20 ms.
    high_pass_hz : float or None
        None leaves plain steps, for a recorder that is applied afterwards. Give a cut-off
        in hertz to add pops to a recording that has been through its recorder already.
    """
    wave = np.zeros(scene.n_samples)
    spans = []
    for number, onset in enumerate(onsets):
        drawn = np.exp(rng.uniform(np.log(30.0), np.log(1000.0))) * rng.choice([-1.0, 1.0])
        size = float(drawn if sizes_uv is None else sizes_uv[number])
        form = str(rng.choice(list(forms)))
        wave += size * step_wave(scene.time, onset, rng.uniform(0.002, 0.02), form)
        spans.append((f"pop ({form})", float(onset), 0.3))
    return _one_row(scene, row, wave, spans, high_pass_hz)


def _one_row(
    scene: Scene,
    row: int,
    wave: NDArray[np.float64],
    spans: list[tuple[str, float, float]],
    high_pass_hz: float | None,
    kind: str = "pop",
) -> Simulated:
    field = np.zeros((scene.n_sites, scene.n_samples), dtype=np.float32)
    if high_pass_hz is not None:
        wave = high_pass_first_order(wave, high_pass_hz, scene.sfreq)
    field[row] = wave
    return scene.simulated(kind, field, spans)


def unstable_run(
    rng: np.random.Generator, onset: float, duration: float, per_second: float = 0.6
) -> list[float]:
    """Times of an unstable electrode's pops: at random, some of them in quick pairs."""
    count = max(int(rng.poisson(per_second * duration)), 2)
    single = rng.uniform(onset, onset + duration, size=count)
    echo = single[rng.random(count) < 0.3] + rng.uniform(0.15, 0.5)
    times = np.sort(np.concatenate([single, echo]))
    return [float(time) for time in times[times < onset + duration]]


def loose_lead(
    scene: Scene,
    rng: np.random.Generator,
    row: int,
    onset: float,
    duration: float,
    *,
    size_uv: float = 300.0,
    mains_hz: float | None = 50.0,
    high_pass_hz: float | None = None,
) -> Simulated:
    """Lead that makes and loses contact: jumps between offsets, noise and mains while off.

    Parameters
    ----------
    scene : Scene
        Electrodes and time.
    rng : numpy Generator
        Where chance comes from.
    row : int
        The electrode whose lead is loose.
    onset, duration : float
        Seconds.
    size_uv : float
        Spread (standard deviation) of the offsets, microvolt.
    mains_hz : float or None
        Line frequency that the loose lead picks up, at a tenth of ``size_uv``.
    high_pass_hz : float or None
        As in :func:`pops`.
    """
    spells = max(int(rng.poisson(0.75 * duration)), 1)
    changes = np.sort(rng.uniform(onset, onset + duration, size=2 * spells))
    # In contact, off, in contact, ... : off between an odd change and the next.
    offsets = np.zeros(2 * spells + 1)
    offsets[1::2] = size_uv * rng.standard_normal(spells)
    state = np.searchsorted(changes, scene.time, side="right")
    wave = 0.05 * size_uv * rng.standard_normal(scene.n_samples)
    if mains_hz is not None and mains_hz < scene.sfreq / 2:
        turns = mains_hz * scene.time + rng.uniform()
        wave += 0.1 * size_uv * np.sin(2 * np.pi * turns)
    wave = offsets[state] + (state % 2) * wave
    wave = low_pass(wave, 0.45 * scene.sfreq, scene.sfreq)
    return _one_row(scene, row, wave, [("loose lead", onset, duration)], high_pass_hz)


def sway(
    scene: Scene,
    rng: np.random.Generator,
    row: int,
    onset: float,
    duration: float,
    size_uv: float,
    *,
    high_pass_hz: float | None = None,
) -> Simulated:
    """One electrode that wanders slowly, as with sweat or a drying site; not a pop.

    0.1 to 0.5 Hz (common practice), of kind "other".

    Parameters
    ----------
    scene : Scene
        Electrodes and time.
    rng : numpy Generator
        Where chance comes from.
    row : int
        The electrode.
    onset, duration : float
        Seconds.
    size_uv : float
        Largest absolute value, microvolt; before the filter, as ``high_pass_hz`` in
        :func:`pops`.
    """
    rates = rng.uniform(0.1, 0.5, size=(4, 1))
    phases = rng.uniform(0, 2 * np.pi, size=(4, 1))
    sizes = rng.uniform(0.3, 1.0, size=4) / np.sqrt(rates[:, 0])
    wave = sizes @ np.sin(2 * np.pi * rates * scene.time + phases)
    wave *= scene.gate(onset, duration, min(2.0, duration / 3))
    wave *= size_uv / max(float(np.abs(wave).max()), 1e-12)
    spans = [("slow sway", onset, duration)]
    return _one_row(scene, row, wave, spans, high_pass_hz, kind="other")
