"""Truth per epoch and site from the size of the artifact at each electrode."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from artifactlens.features.amplitude import STEP_SECONDS
from artifactlens.frames import Frame
from artifactlens.kinds import KIND_NAMES
from artifactlens.sites import canonical_site
from artifactlens.training.examples import CLEAN, PRESENT, UNKNOWN
from artifactlens.training.situation import Situation

Array = NDArray[np.float64]

BEHIND = ("P3", "Pz", "P4", "O1", "O2")
"""Sites that the eyes hardly reach: what a reader sees of an eye movement is against them."""


def label_cells(
    frame: Frame,
    starts: NDArray[np.int64],
    n: int,
    sfreq: float,
    names: tuple[str, ...],
    electrodes: dict[str, Array],
    quiet_channels: Array,
    situation: Situation,
    reference_row: str | None,
) -> tuple[NDArray[np.int8], NDArray[np.float32]]:
    """Truth and strength of every kind at every epoch and site of the frame.

    A cell is *present* when the artifact at its electrode is large enough for a reader to
    see over the background there, *clean* when it is far below, and unknown in between:

    ======  ==========================  ===================  ==================
    kind    size                        present from         clean below
    ======  ==========================  ===================  ==================
    eye     peak-to-peak against the    30 uV and the slow   10 uV
            sites behind                background's usual
    muscle  rms above 15 Hz in the      2 uV and 1.5 times   0.35 times
            strongest fifth of a        the background
            second                      there
    pop     change over 16 ms           20 uV and twice the  4 uV and no tail
                                        background's usual   above 15 uV
    mains   amplitude                   1.5 uV and 3 dB      1 uV or -6 dB
                                        over the background
    ======  ==========================  ===================  ==================

    Mains of 1 uV, plain in a spectrum, is a seventh of a millimetre on paper: it is no flag.

    ``electrodes`` holds per kind the potentials at ``names`` and, last, at the reference.
    """
    index = starts[:, None] + np.arange(n)
    rows = _rows_of(frame, names, reference_row)
    shape = (len(KIND_NAMES), len(starts), len(frame.sites))
    truth = np.full(shape, UNKNOWN, dtype=np.int8)
    strength = np.full(shape, np.nan, dtype=np.float32)
    average = quiet_channels - quiet_channels.mean(axis=0)
    quiet = np.concatenate([average, -quiet_channels.mean(axis=0, keepdims=True)])
    lag = max(1, round(STEP_SECONDS * sfreq))
    behind = [names.index(name) for name in BEHIND if name in names]
    for number, kind in enumerate(KIND_NAMES):
        if kind not in electrodes:
            continue
        field = electrodes[kind]
        if kind == "eye" and behind:
            field = field - field[behind].mean(axis=0)
        field = field[:, index]
        base = quiet[:, index]
        size, present, clean = _SIZES[kind](field, base, sfreq, lag, situation)
        cell = np.where(present, PRESENT, np.where(clean, CLEAN, UNKNOWN)).astype(np.int8)
        known = rows >= 0
        truth[number][:, known] = cell[rows[known]].T
        strength[number][:, known] = size[rows[known]].T
    return truth, strength


def _rows_of(
    frame: Frame, names: tuple[str, ...], reference_row: str | None
) -> NDArray[np.intp]:
    rows = []
    for site, canonical, role in zip(
        frame.sites, frame.canonical, frame.roles, strict=True
    ):
        name = canonical or canonical_site(site)
        if role == "reference" and reference_row in ("ears", "mix"):
            rows.append(len(names))
        else:
            rows.append(names.index(name) if name in names else -1)
    return np.array(rows, dtype=np.intp)


Sized = tuple[Array, NDArray[np.bool_], NDArray[np.bool_]]


def _eye_size(field: Array, base: Array, sfreq: float, lag: int, s: Situation) -> Sized:
    size = np.ptp(field, axis=2)
    # What is as slow as an eye movement: means over a tenth of a second, alpha averages out.
    n = base.shape[2] // 10
    slow = base[:, :, : 10 * n].reshape(*base.shape[:2], 10, n).mean(axis=3)
    usual = np.median(np.ptp(slow, axis=2), axis=1)[:, None]
    return size, (size >= 30) & (size >= usual), size < 10


def _muscle_size(field: Array, base: Array, sfreq: float, lag: int, s: Situation) -> Sized:
    fast, usual = _above_15(field, sfreq), _above_15(base, sfreq)
    n = fast.shape[2] // 5
    parts = fast[:, :, : 5 * n].reshape(*fast.shape[:2], 5, n)
    size = np.sqrt((parts**2).mean(axis=3)).max(axis=2)
    beside = np.sqrt(np.median((usual**2).mean(axis=2), axis=1))[:, None] + 0.3
    return size, (size >= 1.5 * beside) & (size >= 2), size < 0.35 * beside


def _above_15(x: Array, sfreq: float) -> Array:
    from scipy.fft import irfft, rfft, rfftfreq

    n = x.shape[2]
    gain = rfftfreq(n, 1 / sfreq) >= 15
    return np.asarray(irfft(rfft(x, axis=2) * gain, n, axis=2))


def _pop_size(field: Array, base: Array, sfreq: float, lag: int, s: Situation) -> Sized:
    size = np.abs(field[:, :, lag:] - field[:, :, :-lag]).max(axis=2)
    usual = np.median(np.abs(base[:, :, lag:] - base[:, :, :-lag]).max(axis=2), axis=1)[
        :, None
    ]
    tail = np.ptp(field, axis=2)
    return size, (size >= 20) & (size >= 2 * usual), (size < 4) & (tail < 15)


def _mains_size(field: Array, base: Array, sfreq: float, lag: int, s: Situation) -> Sized:
    from scipy.fft import rfft, rfftfreq

    n = field.shape[2]
    window = np.hanning(n + 1)[:-1]
    near = np.abs(rfftfreq(n, 1 / sfreq) - s.line) <= 1.6
    scale = 2 / (sfreq * np.sum(window**2)) * (sfreq / n)

    def power(x: Array) -> Array:
        spectrum = rfft(x * window, axis=2)[:, :, near]
        return np.asarray(scale * (np.abs(spectrum) ** 2).sum(axis=2))

    own = power(field)
    beside = np.median(power(base), axis=1)[:, None] + 1e-3
    size = np.sqrt(2 * own)
    over = 10 * np.log10(own / beside + 1e-9)
    return size, (size >= 1.5) & (over >= 3), (size < 1) | (over < -6)


_SIZES = {"eye": _eye_size, "muscle": _muscle_size, "pop": _pop_size, "mains": _mains_size}
