"""The header of an EDF or BDF file, and the times its data records state.

Layout after Kemp et al. (1992), Electroencephalogr Clin Neurophysiol 82:391 and, for EDF+,
Kemp & Olivan (2003), Clin Neurophysiol 114:1755. BDF is the same with 3-byte samples.
The header is parsed here because the place of the annotation signals inside a data
record is needed for the times of EDF+D, and because BDF has to stay on disk as well.
Nothing that identifies a person is kept.
"""

from __future__ import annotations

import math
import re
from dataclasses import dataclass
from datetime import datetime, timedelta
from typing import TYPE_CHECKING

import numpy as np

from artifactlens.errors import RecordingError

if TYPE_CHECKING:
    from pathlib import Path

    from numpy.typing import NDArray

MAGIC = {b"0       ": ("EDF", 2), b"\xffBIOSEMI": ("BDF", 3)}
COPY_AGAIN = "Copy or export the recording again."

_SIGNAL_FIELDS = {
    "label": 16,
    "transducer": 80,
    "unit": 8,
    "physical_min": 8,
    "physical_max": 8,
    "digital_min": 8,
    "digital_max": 8,
    "prefilter": 80,
    "per_record": 8,
    "reserved": 32,
}
_TIME_KEEPER = re.compile(rb"([+-]\d+(?:\.\d*)?)\x14\x14")
_VOLT = re.compile(r"(?P<prefix>.*?)\s*v(?:olts?)?", re.IGNORECASE)
_SHORTEST, _LONGEST = 1e-6, 1e6  # plausible durations of a data record, seconds
_LARGEST = 1e20  # bound of a plausible scale, microvolt
_LATEST = 1e9  # plausible onset of a data record, seconds
_RECORDS_AT_ONCE = 4096  # bounds the memory of the pass over the annotations


@dataclass(frozen=True, slots=True)
class Channel:
    """One ordinary signal.

    ``column`` is its first sample inside a data record; microvolt = gain * stored +
    offset. ``fault`` says why it cannot be used, and is empty otherwise.
    """

    label: str
    unit: str
    prefilter: str
    per_record: int
    column: int
    gain: float
    offset: float
    fault: str


@dataclass(frozen=True)
class Records:
    """The data records of one file.

    ``onsets`` (n_records,) are the seconds from the start of the first record that the
    time-keeping annotations state, NaN where there is none; ``width`` the bytes of a
    sample; ``promised`` the number of records in the header, -1 if left open.
    """

    path: Path
    format: str
    width: int
    header_bytes: int
    record_samples: int
    record_seconds: float
    n_records: int
    promised: int
    channels: tuple[Channel, ...]
    start: datetime | None
    onsets: NDArray[np.float64]
    annotations: tuple[tuple[float, float, str], ...]

    def block(self, first: int, stop: int) -> NDArray[np.uint8]:
        """Bytes of the records ``first`` to ``stop``, (records, record_samples, width).

        Read, not mapped: a file that shrinks under a map ends the process.
        """
        shape = (stop - first, self.record_samples, self.width)
        record_bytes = self.record_samples * self.width
        try:
            raw = np.fromfile(
                self.path,
                dtype=np.uint8,
                count=math.prod(shape),
                offset=self.header_bytes + first * record_bytes,
            )
        except OSError:
            raw = np.empty(0, dtype=np.uint8)
        if raw.size != math.prod(shape):
            raise RecordingError(
                f"{self.path.name} was moved, shortened or disconnected while it was read.",
                "See that the file stays in its place, then triage it again.",
            )
        return raw.reshape(shape)


def open_records(path: Path) -> Records:
    """Header and record times of an EDF or BDF file; no signal is read.

    Raises
    ------
    RecordingError
        If the file is no EDF or BDF, is damaged or holds no signal.
    """
    general, header = _header(path)
    base, width = MAGIC[general[:8]]
    n_signals = len(header) // 256
    header_bytes = 256 * (n_signals + 1)
    seconds, promised = _number(_text(general[244:252])), _count(general[236:244])
    fields = _signal_fields(header, n_signals)
    counts = [_count(text.encode()) for text in fields["per_record"]]
    per_record = [count for count in counts if count is not None and count >= 0]
    if (
        n_signals < 1
        or _count(general[184:192]) != header_bytes
        or seconds is None
        or seconds > _LONGEST
        or promised is None
        or len(per_record) < n_signals
    ):
        raise RecordingError(
            f"The header of {path.name} is damaged: the lengths it states do not fit.",
            COPY_AGAIN,
        )
    places = np.concatenate([[0], np.cumsum(per_record)]).tolist()
    is_annotation = [text == f"{base} Annotations" for text in fields["label"]]
    if all(is_annotation):
        raise RecordingError(
            f"{path.name} holds annotations only, no signal.",
            "Give the file that holds the EEG itself.",
        )
    if seconds < _SHORTEST:
        raise RecordingError(
            f"The header of {path.name} states data records of {seconds:g} s; "
            "without their duration the sampling rate is unknown.",
            "Export the recording again with data records of, for example, 1 s.",
        )
    record_bytes = places[-1] * width
    n_records = (path.stat().st_size - header_bytes) // record_bytes if record_bytes else 0
    if n_records < 1:
        raise RecordingError(
            f"{path.name} holds a header but not one whole data record.",
            "Check that the recording was closed properly and copied whole.",
        )
    reserved = _text(general[192:236])[:5]
    bands = [
        (places[i] * width, places[i + 1] * width)
        for i in range(n_signals)
        if is_annotation[i] and per_record[i]
    ]
    onsets, annotations = _times(path, header_bytes, (n_records, record_bytes), bands)
    shift = float(onsets[0]) if math.isfinite(onsets[0]) else 0.0
    return Records(
        path=path,
        format=reserved if reserved in (f"{base}+C", f"{base}+D") else base,
        width=width,
        header_bytes=header_bytes,
        record_samples=places[-1],
        record_seconds=seconds,
        n_records=n_records,
        promised=int(promised),
        channels=tuple(
            _channel(
                {name: column[i] for name, column in fields.items()},
                per_record[i],
                places[i],
            )
            for i in range(n_signals)
            if not is_annotation[i]
        ),
        start=_start(general[168:184], shift),
        onsets=onsets - shift,
        annotations=tuple(
            sorted((onset - shift, length, text) for onset, length, text in annotations)
        ),
    )


def microvolts_per(unit: str) -> float | None:
    """Microvolts in one unit of a header; None if it is no voltage.

    An empty unit counts as microvolt. So does any one odd character before the V: the
    micro sign is written in many encodings.
    """
    if not unit:
        return 1.0
    match = _VOLT.fullmatch(unit)
    if match is None:
        return None
    prefix = match["prefix"].lower()
    known = {
        "": 1e6,
        "m": 1e3,
        "milli": 1e3,
        "u": 1.0,
        "micro": 1.0,
        "n": 1e-3,
        "nano": 1e-3,
    }
    if prefix in known:
        return known[prefix]
    is_odd = len(prefix) == 1 and (prefix == "?" or not prefix.isascii())
    return 1.0 if is_odd else None


def parse_tals(raw: bytes) -> list[tuple[float, float, tuple[str, ...]]]:
    """Time-stamped annotation lists: (onset, duration or 0, texts), without empty texts."""
    tals = []
    for chunk in raw.split(b"\x00"):
        head, *texts = chunk.split(b"\x14")
        onset, _, length = head.partition(b"\x15")
        seconds, duration = _number(_text(onset)), _number(_text(length) or "0")
        if (
            texts
            and onset[:1] in (b"+", b"-")
            and seconds is not None
            and duration is not None
        ):
            tals.append((seconds, duration, tuple(_text(text) for text in texts if text)))
    return tals


def _header(path: Path) -> tuple[bytes, bytes]:
    """The general part, 256 bytes, and that of the signals, 256 bytes each."""
    with path.open("rb") as file:
        general = file.read(256)
        if general[:8] not in MAGIC:
            raise RecordingError(
                f"{path.name} does not begin like an EDF or BDF file.",
                "Check that it was exported as EDF, EDF+ or BDF and copied whole.",
            )
        stated = max(_count(general[252:256]) or 0, 0)
        header = file.read(256 * stated)
    if len(general) < 256 or len(header) < 256 * stated:
        raise RecordingError(f"{path.name} ends inside its header.", COPY_AGAIN)
    return general, header


def _text(raw: bytes) -> str:
    """A field in ASCII, as the specification asks, or in what is found instead."""
    try:
        return raw.decode("utf-8").strip(" \x00")
    except UnicodeDecodeError:
        return raw.decode("latin-1").strip(" \x00")


def _number(text: str) -> float | None:
    try:
        value = float(text.replace(",", "."))
    except ValueError:
        return None
    return value if math.isfinite(value) else None


def _count(raw: bytes) -> int | None:
    text = _text(raw)
    return int(text) if re.fullmatch(r"-?[0-9]{1,8}", text) else None


def _signal_fields(header: bytes, n_signals: int) -> dict[str, list[str]]:
    fields, place = {}, 0
    for name, size in _SIGNAL_FIELDS.items():
        ends = [place + size * (i + 1) for i in range(n_signals)]
        fields[name] = [_text(header[end - size : end]) for end in ends]
        place += size * n_signals
    return fields


def _channel(fields: dict[str, str], per_record: int, column: int) -> Channel:
    names = ("physical_min", "physical_max", "digital_min", "digital_max")
    limits = [_number(fields[name]) for name in names]
    scale = microvolts_per(fields["unit"])
    gain = offset = math.nan
    fault = ""
    if fields["label"].lower() in ("status", "trigger"):
        fault = "a trigger channel, not a voltage"
    elif scale is None:
        fault = f"its unit {fields['unit']} is not a voltage"
    elif per_record == 0:
        fault = "it holds no samples"
    elif None in limits:
        fault = "the header does not state its range as numbers"
    else:
        low, high, stored_low, stored_high = (value or 0.0 for value in limits)
        if high == low:
            fault = "its physical minimum and maximum are equal in the header"
        elif stored_high == stored_low:
            fault = "its digital minimum and maximum are equal in the header"
        else:
            gain = scale * (high - low) / (stored_high - stored_low)
            offset = scale * low - gain * stored_low
            if not max(abs(gain), abs(offset)) < _LARGEST:
                fault = "the range stated in the header is beyond any voltage"
    return Channel(
        label=fields["label"],
        unit=fields["unit"],
        prefilter=fields["prefilter"],
        per_record=per_record,
        column=column,
        gain=gain,
        offset=offset,
        fault=fault,
    )


def _start(raw: bytes, shift: float) -> datetime | None:
    """Start of the first record from the dd.mm.yy and hh.mm.ss fields."""
    numbers = re.findall(r"\d{1,2}", _text(raw[:8])) + re.findall(
        r"\d{1,2}", _text(raw[8:])
    )
    if len(numbers) != 6:
        return None
    day, month, year, hour, minute, second = map(int, numbers)
    year += 1900 if year >= 85 else 2000  # the clipping date of EDF+
    try:
        return datetime(year, month, day, hour, minute, second) + timedelta(seconds=shift)
    except (ValueError, OverflowError):
        return None


def _times(
    path: Path, header_bytes: int, shape: tuple[int, int], bands: list[tuple[int, int]]
) -> tuple[NDArray[np.float64], list[tuple[float, float, str]]]:
    """Onsets of the data records and all annotations, seconds from the header's start.

    ``bands`` are the byte columns of the annotation signals; only the first of them keeps
    the time.
    """
    onsets = np.full(shape[0], np.nan)
    annotations: list[tuple[float, float, str]] = []
    stored = np.memmap(path, dtype=np.uint8, mode="r", offset=header_bytes, shape=shape)
    for number, (left, right) in enumerate(bands):
        for first in range(0, shape[0], _RECORDS_AT_ONCE):
            raw = stored[first : first + _RECORDS_AT_ONCE, left:right].tobytes()
            width = right - left
            for i in range(len(raw) // width):
                record = raw[i * width : (i + 1) * width]
                keeper = _TIME_KEEPER.match(record) if number == 0 else None
                if keeper is not None:
                    onsets[first + i] = float(keeper[1])
                if not record[keeper.end() if keeper else 0 :].strip(b"\x00"):
                    continue  # most records hold nothing else
                annotations += [
                    (onset, duration, text)
                    for onset, duration, texts in parse_tals(record)
                    for text in texts
                ]
    onsets[~(np.abs(onsets) < _LATEST)] = np.nan
    return onsets, annotations
