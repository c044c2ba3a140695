"""Samples of an EDF or BDF file: which channels can be judged, and any stretch of them."""

from __future__ import annotations

import math
from collections import Counter
from dataclasses import dataclass
from functools import lru_cache
from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from artifactlens.edf_header import Channel, Records

_FARTHEST_RATE = 8  # an electrode is resampled by this factor at most
_KERNEL_HALF_WIDTH = 16  # samples of the slower rate
_KERNEL_BETA = 6.2  # Kaiser window, stop band at about -63 dB


@dataclass(frozen=True)
class Selection:
    """The channels of one file that can be judged, at one sampling rate.

    ``runs`` are the uninterrupted stretches: first record, number of records, onset in
    seconds. Channels of another rate than ``per_record`` are resampled when read.
    """

    records: Records
    channels: tuple[Channel, ...]
    per_record: int
    runs: tuple[tuple[int, int, float], ...]
    set_aside: tuple[tuple[str, str], ...]
    notes: tuple[str, ...]

    def rate(self, channel: Channel) -> float:
        """Sampling rate at which the channel is stored, hertz."""
        return channel.per_record / self.records.record_seconds

    def read(self, start: int, stop: int) -> NDArray[np.float32]:
        """Samples ``start`` to ``stop`` of all channels, (n_channels, n), microvolt."""
        out = np.empty((len(self.channels), stop - start), dtype=np.float32)
        if stop == start:
            return out
        margin = max(self._margin(channel) for channel in self.channels)
        first = max(start // self.per_record - margin, 0)
        last = min(-(-stop // self.per_record) + margin, self.records.n_records)
        block = self.records.block(first, last)
        origin = first * self.per_record
        for row, channel in zip(out, self.channels, strict=True):
            stored = _stored(block, channel)
            if channel.per_record == self.per_record:
                piece = stored[start - origin : stop - origin].astype(np.float64)
            else:
                piece = self._resampled(stored, channel, first, start, stop)
            row[:] = piece * channel.gain + channel.offset
        return out

    def _margin(self, channel: Channel) -> int:
        """Records needed on either side to resample the channel."""
        if channel.per_record == self.per_record:
            return 0
        taps = _kernel(channel.per_record, self.per_record)[2].shape[1]
        return int(-(-taps // (2 * channel.per_record))) + 1

    def _resampled(
        self, stored: NDArray[np.int32], channel: Channel, first: int, start: int, stop: int
    ) -> NDArray[np.float64]:
        """The channel at the rate of the others.

        Each output sample depends on its own index alone, so that any partition into
        blocks gives the same values. At the ends of a run the outermost sample stands
        in for those beyond.
        """
        up, down, weights = _kernel(channel.per_record, self.per_record)
        index = np.arange(start, stop, dtype=np.int64)
        nearest, phase = np.divmod(index * down, up)
        run_first = np.array([run[0] for run in self.runs])
        run_stop = run_first + [run[1] for run in self.runs]
        run = np.searchsorted(run_first * self.per_record, index, side="right") - 1
        low = run_first[run] * channel.per_record
        high = run_stop[run] * channel.per_record - 1
        half = weights.shape[1] // 2
        out = np.zeros(index.size)
        for tap in range(weights.shape[1]):
            source = np.clip(nearest + (tap + 1 - half), low, high)
            out += stored[source - first * channel.per_record] * weights[phase, tap]
        return out


def select(records: Records) -> Selection:
    """Choose what can be judged: voltages, at the rate of most electrodes."""
    from artifactlens.sites import parse_label

    usable = [channel for channel in records.channels if not channel.fault]
    electrodes = [c for c in usable if parse_label(c.label).role != "other"]
    pool = electrodes or usable
    rates = Counter(channel.per_record for channel in pool)
    # Of two rates that are equally frequent the higher one loses nothing.
    per_record = max(rates, key=lambda count: (rates[count], count), default=0)
    kept_rate = per_record / records.record_seconds
    kept, set_aside, notes = [], [], []
    for channel in records.channels:
        rate = channel.per_record / records.record_seconds
        if channel.fault:
            set_aside.append((channel.label, channel.fault))
            continue
        if channel.per_record != per_record:
            ratio = channel.per_record / per_record
            if (
                channel not in electrodes
                or not 1 / _FARTHEST_RATE <= ratio <= _FARTHEST_RATE
            ):
                reason = f"sampled at {rate:g} Hz, the EEG at {kept_rate:g} Hz"
                set_aside.append((channel.label, reason))
                continue
            notes.append(_resampling_note(channel.label, rate, kept_rate))
        kept.append(channel)
    unitless = [channel.label for channel in kept if not channel.unit]
    if unitless:
        notes.append(f"No unit is stated for {listing(unitless)}: taken as microvolt.")
    runs, time_notes = _runs(records, kept_rate)
    return Selection(
        records=records,
        channels=tuple(kept),
        per_record=per_record,
        runs=runs,
        set_aside=tuple(set_aside),
        notes=(*_length_notes(records), *time_notes, *notes),
    )


def listing(labels: list[str], limit: int = 6) -> str:
    """Names for a sentence, the first few of many."""
    shown = ", ".join(labels[:limit])
    return f"{shown} and {len(labels) - limit} more" if len(labels) > limit else shown


def clock(seconds: float) -> str:
    """A duration for a sentence: 12:31, 1:02:03, or 4.5 s below a minute."""
    if seconds < 60:
        return f"{seconds:.4g} s"
    minutes, rest = divmod(math.floor(seconds + 0.5), 60)
    hours, minutes = divmod(minutes, 60)
    return f"{hours}:{minutes:02d}:{rest:02d}" if hours else f"{minutes}:{rest:02d}"


def _runs(
    records: Records, rate: float
) -> tuple[tuple[tuple[int, int, float], ...], tuple[str, ...]]:
    """Uninterrupted stretches of records, and what there is to say of their times.

    A record begins a new run if it starts later than the one before it ends, by more than
    half a sample or 2 ms: stated onsets are rounded.
    """
    index = np.arange(records.n_records)
    known = np.isfinite(records.onsets)
    delay = records.onsets - index * records.record_seconds
    delay[0] = 0.0
    delay = delay[np.maximum.accumulate(np.where(known, index, 0))]
    tolerance = max(0.5 / rate, 0.002) if rate else 0.002
    step = np.diff(delay)
    if not records.format.endswith("+D"):
        odd = int(np.count_nonzero(np.abs(step) > tolerance))
        note = (
            f"The file calls itself continuous, but {odd} of its data records state "
            "another time; all were taken as following one another."
        )
        return ((0, records.n_records, 0.0),), (note,) if odd else ()
    backwards = int(np.count_nonzero(step < -tolerance))
    delay = np.maximum.accumulate(delay)
    first = np.concatenate([[0], np.flatnonzero(np.diff(delay) > tolerance) + 1])
    lengths = np.diff(np.append(first, records.n_records))
    onset = np.round(delay[first] + first * records.record_seconds, 9)
    notes = []
    if first.size > 1:
        lost = float(delay[-1])
        many = "gap" if first.size == 2 else "gaps"
        notes.append(f"The recording has {first.size - 1} {many}, {clock(lost)} in all.")
    if backwards:
        notes.append(
            "Data records that state a time before the end of the record before them: "
            f"{backwards}; taken as following it directly."
        )
    runs = zip(first.tolist(), lengths.tolist(), onset.tolist(), strict=True)
    return tuple(runs), tuple(notes)


def _length_notes(records: Records) -> tuple[str, ...]:
    held = clock(records.n_records * records.record_seconds)
    stated = clock(records.promised * records.record_seconds)
    if records.promised < 0:
        return (
            f"The header leaves the length open, as in a recording that was not closed; "
            f"triaged the {held} that the file holds.",
        )
    if records.n_records < records.promised:
        return (
            f"The file ends after {held} of the {stated} its header promises; "
            "triaged as far as it goes.",
        )
    if records.n_records > records.promised:
        return (
            f"The file holds {held}, its header states {stated}; all of it was triaged.",
        )
    return ()


def _resampling_note(label: str, rate: float, kept_rate: float) -> str:
    if rate < kept_rate:
        return (
            f"{label} is sampled at {rate:g} Hz and was interpolated to {kept_rate:g} Hz: "
            "fast activity there cannot be judged."
        )
    return f"{label} is sampled at {rate:g} Hz and was brought to {kept_rate:g} Hz."


def _stored(block: NDArray[np.uint8], channel: Channel) -> NDArray[np.int32]:
    """Stored integers of one channel from the bytes of whole records, one row."""
    part = block[:, channel.column : channel.column + channel.per_record].reshape(
        -1, block.shape[2]
    )
    if block.shape[2] == 2:
        return part.view("<i2").reshape(-1).astype(np.int32)
    padded = np.zeros((part.shape[0], 4), dtype=np.uint8)
    padded[:, 1:] = part
    signed: NDArray[np.int32] = padded.view("<i4").reshape(-1) >> 8  # keeps the sign
    return signed


@lru_cache(maxsize=16)
def _kernel(own: int, kept: int) -> tuple[int, int, NDArray[np.float64]]:
    """Windowed-sinc weights from ``own`` to ``kept`` samples per record.

    Returns
    -------
    up, down : int
        Output sample n lies at input position n * down / up.
    weights : array, shape (up, taps)
        One row per phase, each of sum 1.
    """
    common = math.gcd(own, kept)
    up, down = kept // common, own // common
    cutoff = 1.0 if own < kept else 0.9 * kept / own
    half = math.ceil(_KERNEL_HALF_WIDTH / cutoff)
    distance = np.arange(1 - half, half + 1) - np.arange(up)[:, None] / up
    window = np.i0(_KERNEL_BETA * np.sqrt(np.clip(1 - (distance / half) ** 2, 0, None)))
    weights = np.sinc(cutoff * distance) * window
    return up, down, weights / weights.sum(axis=1, keepdims=True)
