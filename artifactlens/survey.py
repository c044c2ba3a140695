"""A first look at a recording: what its filters, units, reference and mains are like.

The survey reads a bounded number of short stretches spread over the recording, so that
one pass over everything can then run with fixed parameters.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from artifactlens.epochs import median_of_known

if TYPE_CHECKING:
    from artifactlens.frames import Frame
    from artifactlens.recording import Recording

STRETCHES = 40
STRETCH_SECONDS = 4.0

LINE_FREQUENCIES = (50.0, 60.0)
LINE_TOLERANCE = 0.01
"""EN 50160: within 1 % for 99.5 % of the year."""

CHANCE_DB = 14.0
"""What the strongest bin of many sites makes of the noise of one stretch; falls with the root
of their number (our own simulation of pink noise)."""

LINE_FOUND_DB = 3.0
NOTCH_DIP_DB = -6.0
ROLL_OFF_DB = 10.0
OVERRIDE_SHARE = {"header": 0.7, "sampling rate": 0.9}
"""A measured low-pass counts if it lies below this share of the header's or of Nyquist."""

AVERAGE_REFERENCE_RATIO = 0.02
PLAUSIBLE_UV = (0.8, 400.0)
"""Median robust amplitude of scalp EEG channels that passes without a remark."""


@dataclass(frozen=True, slots=True)
class Conditions:
    """What the recording lets be measured; frequencies in hertz, None where unknown.

    ``high_pass`` and ``low_pass`` are the band that the recorder kept, ``low_pass`` never
    above the Nyquist frequency; ``low_pass_source`` is "header", "measured" or
    "sampling rate". ``notch`` is the line frequency that was filtered out.
    ``line_frequency`` is where mains is looked for, ``line_found_db`` by how much it stands
    above its flanks, and above what chance makes of so few stretches, at the site where it is
    strongest. ``amplitude_uv`` is the median
    robust standard deviation over channels. ``levels_uv`` (n_channels,) is the usual
    level of each used channel (electrode offset), empty where unknown.
    """

    sampling_rate: float
    high_pass: float | None
    low_pass: float
    low_pass_source: str
    notch: float | None
    notch_source: str
    line_frequency: float
    line_found_db: float
    amplitude_uv: float
    average_reference: bool
    levels_uv: NDArray[np.float32] = field(
        default_factory=lambda: np.zeros(0, dtype=np.float32), compare=False
    )


def survey(
    recording: Recording, frame: Frame, line_frequency: float | None = None
) -> Conditions:
    """Look at stretches spread evenly over the recording.

    Parameters
    ----------
    recording, frame
        What to look at, and its sites.
    line_frequency : float, optional
        Nominal mains frequency if it is known (50 or 60); else both are tried.
    """
    stretches = _stretches(recording)
    channels = [recording.read(a, b)[frame.channels] for a, b in stretches]
    rate = recording.sampling_rate
    nyquist = rate / 2
    spectra, robust, common, levels = [], [], [], []
    matrix = frame.matrix()
    for data in channels:
        good = np.isfinite(data).all(axis=1) & (np.ptp(data, axis=1) > 0)
        if not good.any():
            continue
        level = np.median(data, axis=1)
        levels.append(np.where(good, level, np.float32(np.nan)))
        robust.append(1.4826 * np.median(np.abs(data - level[:, None]), axis=1)[good])
        centred = data[good] - data[good].mean(axis=1, keepdims=True)
        common.append(
            (centred.mean(axis=0).std(), np.sqrt(np.mean(centred**2, axis=1)).mean())
        )
        used = matrix if good.all() else frame.matrix(good)
        sites = np.where(np.isfinite(used), used, 0) @ np.where(good[:, None], data, 0)
        if sites.shape[1] >= 64:
            spectra.append(_spectrum(sites, rate))
    if not robust:
        return Conditions(
            rate, None, nyquist, "sampling rate", None, "", line_frequency or 50.0,
            float("nan"), float("nan"), False,
        )  # fmt: skip
    mean_rms, channel_rms = np.median(np.array(common), axis=0)
    header = [recording.filters[index] for index in frame.channels]
    low_pass, source = nyquist, "sampling rate"
    stated = [entry.low_pass for entry in header if entry.low_pass]
    if stated and (typical := float(np.median(stated))) < nyquist:
        low_pass, source = typical, "header"
    high = [entry.high_pass for entry in header if entry.high_pass]
    notch = [entry.notch for entry in header if entry.notch]
    notch_at = float(np.median(notch)) if notch else None
    notch_source = "header" if notch else ""

    line, found = line_frequency or LINE_FREQUENCIES[0], float("nan")
    length = max((freqs.size for freqs, _ in spectra), default=0)
    same = [(freqs, psd) for freqs, psd in spectra if freqs.size == length]
    if same:
        freqs = same[0][0]
        stack = np.stack([power for _, power in same])
        psd = np.median(stack, axis=0)
        # Mains may be there for a part of the time only.
        at_times = np.quantile(stack, 0.9, axis=0)
        chance = CHANCE_DB / np.sqrt(len(same))
        roll_off = _roll_off(freqs, psd)
        if roll_off is not None and roll_off < OVERRIDE_SHARE[source] * low_pass:
            low_pass, source = roll_off, "measured"
        candidates = (line_frequency,) if line_frequency else LINE_FREQUENCIES
        looked = [
            (
                *_line_height(freqs, at_times, nominal),
                _line_dip(freqs, psd, nominal),
                nominal,
            )
            for nominal in candidates
            # Less than half a second may have no bin at the line.
            if nominal + 3 < nyquist and freqs[1] <= 1.5
        ]
        if looked:
            found, line, _, nominal = max(
                (peak, at, dip, nominal) for peak, at, dip, nominal in looked
            )
            dips = [(entry[2], entry[3]) for entry in looked if entry[3] + 3 < low_pass]
            if notch_at is None and dips and min(dips)[0] < NOTCH_DIP_DB:
                notch_at, notch_source = min(dips)[1], "measured"
            found -= chance
            if found < LINE_FOUND_DB:
                line = notch_at or nominal
    return Conditions(
        sampling_rate=rate,
        high_pass=float(np.median(high)) if high else None,
        low_pass=float(low_pass),
        low_pass_source=source,
        notch=notch_at,
        notch_source=notch_source,
        line_frequency=float(line),
        line_found_db=float(found),
        amplitude_uv=float(np.median(np.concatenate(robust))),
        average_reference=bool(
            len(frame.channels) > 2 and mean_rms < AVERAGE_REFERENCE_RATIO * channel_rms
        ),
        levels_uv=np.nan_to_num(median_of_known(np.stack(levels))),
    )


def _stretches(recording: Recording) -> list[tuple[int, int]]:
    """At most STRETCHES windows of STRETCH_SECONDS, evenly spread over the segments."""
    length = int(STRETCH_SECONDS * recording.sampling_rate)
    windows = []
    for segment in recording.segments:
        count = max(1, segment.n_samples // length)
        for k in range(min(count, STRETCHES)):
            start = segment.start + int(k * max(1, count / STRETCHES)) * length
            stop = min(start + length, segment.start + segment.n_samples)
            if stop - start >= 8:
                windows.append((start, stop))
    if len(windows) > STRETCHES:
        pick = np.linspace(0, len(windows) - 1, STRETCHES).round().astype(int)
        windows = [windows[index] for index in pick]
    return windows


def _spectrum(
    sites: NDArray[np.floating], rate: float
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Hann spectrum of each site over two-second windows, half overlapping."""
    import scipy.fft

    n = min(sites.shape[1], int(2 * rate))
    step = max(1, n // 2)
    starts = np.arange(0, sites.shape[1] - n + 1, step)
    cut = sites[:, starts[:, None] + np.arange(n)].astype(np.float64)
    cut -= cut.mean(axis=2, keepdims=True)
    window = np.hanning(n)
    power = np.abs(scipy.fft.rfft(cut * window, axis=2)) ** 2
    return scipy.fft.rfftfreq(n, 1 / rate), 2 * power.mean(axis=1) / (
        rate * np.sum(window**2)
    )


def _roll_off(freqs: NDArray[np.float64], psd: NDArray[np.float64]) -> float | None:
    """Frequency where a low-pass bites, or None.

    Scalp EEG falls by at most about 5 dB over a third of an octave above 20 Hz and then
    meets the amplifier's floor; a recorder's low-pass falls faster. Compared are the levels
    just below a candidate and a third above it, line frequencies left out.
    """
    alive = (psd > 0).any(axis=1)
    if not alive.any():
        return None
    level = 10 * np.log10(np.median(psd[alive], axis=0) + 1e-12)
    keep = np.ones_like(freqs, dtype=bool)
    for line in LINE_FREQUENCIES:
        for harmonic in (1, 2, 3):
            keep &= np.abs(freqs - harmonic * line) > 2.5
    nyquist = freqs[-1]
    candidates = np.arange(20.0, 0.75 * nyquist, 1.0)
    falls = np.full(candidates.shape, -np.inf)
    for k, edge in enumerate(candidates):
        below = keep & (freqs >= 0.8 * edge) & (freqs <= edge)
        above = (
            keep
            & (freqs >= 1.25 * edge)
            & (freqs <= 1.45 * edge)
            & (freqs < 0.97 * nyquist)
        )
        if below.sum() >= 3 and above.sum() >= 3:
            falls[k] = level[below].mean() - level[above].mean()
    steep = np.flatnonzero(falls >= ROLL_OFF_DB)
    if not len(steep):
        return None
    # Above the first such fall everything must stay low, or it is a dip and no roll-off.
    edge = candidates[steep[0]]
    beyond = keep & (freqs > 1.3 * edge) & (freqs < 0.97 * nyquist)
    below = keep & (freqs >= 0.8 * edge) & (freqs <= edge)
    reference = level[below].mean()
    if level[beyond].mean() > reference - ROLL_OFF_DB:
        return None
    # A steep filter bites later than the first fall shows: where 5 dB are gone, of which
    # brain alone takes about 2.
    smooth = np.convolve(level, np.ones(3) / 3, mode="same")
    gone = keep & (freqs >= edge) & (smooth < reference - 5.0)
    return float(freqs[gone][0]) if gone.any() else float(edge)


def _line_height(
    freqs: NDArray[np.float64], psd: NDArray[np.float64], nominal: float
) -> tuple[float, float]:
    """Height of the line at its strongest site over its flanks (dB), and where it is (Hz)."""
    near = np.abs(freqs - nominal) <= nominal * LINE_TOLERANCE + 0.25
    flank = np.median(psd[:, _flanks(freqs, nominal)], axis=1)
    alive = flank > 0
    if not alive.any():
        return float("nan"), nominal
    height = 10 * np.log10(psd[alive][:, near].max(axis=1) / flank[alive] + 1e-12)
    strongest = int(np.argmax(height))
    at = freqs[near][int(np.argmax(psd[alive][strongest][near]))]
    return float(height[strongest]), float(at)


def _line_dip(
    freqs: NDArray[np.float64], psd: NDArray[np.float64], nominal: float
) -> float:
    """Median over sites of the level within 1 Hz of the line against its flanks, dB."""
    flank = np.median(psd[:, _flanks(freqs, nominal)], axis=1)
    alive = flank > 0
    middle = np.abs(freqs - nominal) <= 1.0
    level = psd[alive][:, middle].mean(axis=1) / flank[alive]
    return float(np.median(10 * np.log10(level + 1e-12))) if alive.any() else 0.0


def _flanks(freqs: NDArray[np.float64], nominal: float) -> NDArray[np.bool_]:
    return (np.abs(freqs - nominal) >= 2.5) & (np.abs(freqs - nominal) <= 6)
