"""Cut the traces that a page shows beside a flag, as derivations in display filters."""

from __future__ import annotations

from collections.abc import Iterable
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from artifactlens.epochs import finite_rows
from artifactlens.page.traces import TraceWindow

if TYPE_CHECKING:
    from artifactlens.frames import Frame
    from artifactlens.recording import Recording
    from artifactlens.result import Flag

DOUBLE_BANANA: tuple[tuple[str, str], ...] = (
    ("Fp1", "F7"), ("F7", "T7"), ("T7", "P7"), ("P7", "O1"),
    ("Fp2", "F8"), ("F8", "T8"), ("T8", "P8"), ("P8", "O2"),
    ("Fp1", "F3"), ("F3", "C3"), ("C3", "P3"), ("P3", "O1"),
    ("Fp2", "F4"), ("F4", "C4"), ("C4", "P4"), ("P4", "O2"),
    ("Fz", "Cz"), ("Cz", "Pz"),
)  # fmt: skip
"""Longitudinal bipolar montage (ACNS guideline 3), common practice."""

LOW_HZ, HIGH_HZ = 1.0, 70.0
MARGIN_SECONDS = 2.0
LONGEST_SECONDS = 10.0
MOST_OTHERS = 6
MOST_INVOLVED = 10


def closeups(
    recording: Recording, frame: Frame, flags: Iterable[Flag]
) -> list[TraceWindow]:
    """The traces around each flag; none where the recording has no signal.

    The involved derivations come first, then those of their neighbours and a few others.
    Long flags are shown around their driving moment.
    """
    # Inverting the incidence takes longer than all the rest, and is nearly always the same.
    solved: dict[bytes, NDArray[np.float32]] = {}
    found = [_closeup(recording, frame, flag, solved) for flag in flags]
    return [window for window in found if window is not None]


def _closeup(
    recording: Recording, frame: Frame, flag: Flag, solved: dict[bytes, NDArray[np.float32]]
) -> TraceWindow | None:
    rate = recording.sampling_rate
    low, high = flag.onset - 1.5, flag.end + 1.5
    if high - low > LONGEST_SECONDS:
        low = max(low, flag.moment - LONGEST_SECONDS / 2)
        high = low + LONGEST_SECONDS
    segment = next(
        (
            entry
            for entry in recording.segments
            if entry.onset <= flag.moment <= entry.onset + entry.n_samples / rate
        ),
        None,
    )
    if segment is None:
        return None
    shift = segment.start - round(segment.onset * rate)
    first = max(segment.start, round((low - MARGIN_SECONDS) * rate) + shift)
    stop = min(
        segment.start + segment.n_samples, round((high + MARGIN_SECONDS) * rate) + shift
    )
    data = recording.read(first, stop)[frame.channels]
    good = finite_rows(data)
    if stop - first < 8 or not good.any():
        return None
    pattern = good.tobytes()
    if pattern not in solved:
        solved[pattern] = frame.matrix(good)
    matrix = solved[pattern]
    solvable = finite_rows(matrix)
    sites = np.where(solvable[:, None], matrix, np.float32(0)) @ np.where(
        good[:, None], data, np.float32(0)
    )
    labels, traces, involved, montage = _derivations(frame, flag, sites, solvable)
    if not labels:
        return None
    shown_first = max(first, round(low * rate) + shift)
    shown = slice(
        shown_first - first,
        max(shown_first - first + 1, round(high * rate) + shift - first),
    )
    top = min(HIGH_HZ, rate / 2)
    return TraceWindow(
        flag=flag.number,
        onset=segment.onset + (shown_first - segment.start) / rate,
        sampling_rate=rate,
        labels=labels,
        data_uv=display_filter(traces, rate)[:, shown],
        involved=involved,
        description=f"{montage}, {LOW_HZ:g}-{top:g} Hz",
    )


def display_filter(traces: NDArray[np.float32], rate: float) -> NDArray[np.float32]:
    """Second-order Butterworth magnitude at 1 and 70 Hz, applied without phase shift."""
    import scipy.fft

    n = traces.shape[1]
    level = traces.mean(axis=1, keepdims=True)
    # Mirrored ends keep the periodic transform from seeing a jump.
    mirrored = np.concatenate([traces - level, (traces - level)[:, ::-1]], axis=1)
    freqs = scipy.fft.rfftfreq(2 * n, 1 / rate)
    with np.errstate(divide="ignore"):
        gain = 1 / np.sqrt(1 + (LOW_HZ / freqs) ** 4) / np.sqrt(1 + (freqs / HIGH_HZ) ** 4)
    filtered = scipy.fft.irfft(scipy.fft.rfft(mirrored, axis=1) * gain, 2 * n, axis=1)
    return np.ascontiguousarray(filtered[:, :n], dtype=np.float32)


def _derivations(
    frame: Frame, flag: Flag, sites: NDArray[np.float32], solvable: NDArray[np.bool_]
) -> tuple[tuple[str, ...], NDArray[np.float32], tuple[bool, ...], str]:
    at = {
        name: index
        for index, name in enumerate(frame.canonical)
        if name is not None and solvable[index] and frame.roles[index] != "reference"
    }
    # The strongest site first, so that it is never among those left out.
    ordered = sorted(flag.sites, key=lambda name: name != flag.strongest_site)
    wanted = [
        index
        for name in ordered
        for index, site in enumerate(frame.sites)
        if site == name and solvable[index]
    ]
    pairs = [(at[a], at[b]) for a, b in DOUBLE_BANANA if a in at and b in at]
    pairs = [(a, b) for a, b in pairs if frame.chain[a] == frame.chain[b]]
    reached = {index for pair in pairs for index in pair}
    rank = {index: place for place, index in enumerate(wanted)}
    last = len(wanted)
    touching = [pair for pair in pairs if pair[0] in rank or pair[1] in rank]
    touching.sort(key=lambda pair: min(rank.get(index, last) for index in pair))
    chosen: list[tuple[int, int | None]] = [*touching]
    chosen += [(index, None) for index in wanted if index not in reached]
    chosen = chosen[:MOST_INVOLVED]
    n_involved = len(chosen)
    others = [pair for pair in pairs if pair not in chosen]
    beside = np.asarray(frame.near[wanted].any(axis=0))
    others.sort(key=lambda pair: not (beside[pair[0]] or beside[pair[1]]))
    chosen += others[:MOST_OTHERS]
    if not others:
        rest = [i for i in range(len(frame.sites)) if solvable[i] and i not in wanted]
        chosen += [(index, None) for index in rest[:: max(1, len(rest) // MOST_OTHERS)]][
            :MOST_OTHERS
        ]
    labels = tuple(
        f"{frame.sites[a]}-{'Av' if b is None else frame.sites[b]}" for a, b in chosen
    )
    rows = [sites[a] if b is None else sites[a] - sites[b] for a, b in chosen]
    bipolar = any(b is not None for _, b in chosen)
    average = any(b is None for _, b in chosen)
    montage = " and ".join(
        word
        for word, used in (("double banana", bipolar), ("average reference", average))
        if used
    )
    data = np.stack(rows) if rows else np.zeros((0, sites.shape[1]), dtype=np.float32)
    return labels, data, tuple(k < n_involved for k in range(len(chosen))), montage
