"""The flags as an EDF+ file that holds annotations only and opens beside the recording.

Written from the EDF+ specification (Kemp & Olivan 2003, Clin Neurophysiol 114:1755;
edfplus.info); a file without ordinary signals has data records of duration 0.
"""

from __future__ import annotations

import re
from collections.abc import Mapping
from datetime import datetime

from artifactlens.export.one_line import one_line
from artifactlens.kinds import KINDS
from artifactlens.result import Flag, Result

CAUTION_TEXT = "artifactlens marks: a technical aid, not a medical device; see report"

# Header fields and their bytes, in the order of the EDF specification; all but the first
# row are per signal, and this file has one.
_RECORDING_FIELDS = (8, 80, 80, 8, 8, 8, 44, 8, 8, 4)
_SIGNAL_FIELDS = (16, 80, 8, 8, 8, 8, 8, 80, 8, 32)
_HEADER_BYTES = sum(_RECORDING_FIELDS) + sum(_SIGNAL_FIELDS)
# A data record is recommended not to exceed this (Kemp et al. 1992, Electroencephalogr
# Clin Neurophysiol 82:391).
_RECORD_BYTES = 61440
_MONTHS = (
    "JAN",
    "FEB",
    "MAR",
    "APR",
    "MAY",
    "JUN",
    "JUL",
    "AUG",
    "SEP",
    "OCT",
    "NOV",
    "DEC",
)
_MARK_TEXTS = {kind.name: kind.mark_text for kind in KINDS}


def marks_edf(
    result: Result, *, start: datetime | None, channels: Mapping[str, str | None]
) -> bytes:
    """The flags as annotations of an EDF+C file without ordinary signals.

    A flag gives one annotation per site that a channel carries, tied to it as
    ``text@@label``; a flag without such a site gives one that is tied to none. A caution
    stands at the start. The patient field identifies nobody.

    Parameters
    ----------
    result : Result
        Only its flags are read.
    start : datetime or None
        Start of the recording, so that both files share one clock. None, or a date that
        EDF cannot hold (it holds 1985 to 2084), leaves the date unknown.
    channels : mapping of str to str or None
        Site to the full label of the channel that carries it.

    Returns
    -------
    bytes
    """
    # EDF+: the header has whole seconds only; the first time-keeping annotation adds the
    # fraction, and all onsets count from the header's second.
    offset = 0 if start is None else start.microsecond
    tals = [tal_bytes(offset, None, CAUTION_TEXT)]
    tals += [
        tal_bytes(onset + offset, duration, text)
        for onset, duration, text in _marks(result, channels)
    ]
    records = _records(tals, tal_bytes(offset, None, ""))
    return _header(start, len(records), len(records[0])) + b"".join(records)


def _marks(
    result: Result, channels: Mapping[str, str | None]
) -> list[tuple[int, int, str]]:
    """Onset and duration in microseconds (to the millisecond) and text, each event once."""
    events = {
        (
            round(flag.onset * 1000) * 1000,
            max(round(flag.duration * 1000), 1) * 1000,
            text,
        )
        for flag in result.flags
        for text in _texts(flag, channels)
    }
    return sorted(events)


def _texts(flag: Flag, channels: Mapping[str, str | None]) -> list[str]:
    text = _MARK_TEXTS[flag.kind]
    labels = (_link_label(channels.get(site) or "") for site in flag.sites)
    return [f"{text}@@{label}" for label in labels if label] or [text]


def _link_label(label: str) -> str:
    # A second "@@" would end the label early for a reader that splits there.
    return re.sub("@{2,}", "@", one_line(label))


def tal_bytes(onset: int, duration: int | None, *texts: str) -> bytes:
    r"""A time-stamped annotation list: ``+onset[\x15duration]\x14text\x14...\x00``.

    ``onset`` and ``duration`` in microseconds.
    """
    stamp = ("-" if onset < 0 else "+") + _seconds(abs(onset))
    if duration is not None:
        stamp += f"\x15{_seconds(duration)}"
    return "\x14".join((stamp, *texts, "\x00")).encode()


def _seconds(microseconds: int) -> str:
    whole, fraction = divmod(microseconds, 1_000_000)
    return f"{whole}.{fraction:06d}".rstrip("0").rstrip(".")


def _records(tals: list[bytes], time_keeper: bytes) -> list[bytes]:
    """Data records of one length, each begun by the time-keeper; no list crosses two."""
    records = [bytearray(time_keeper)]
    for tal in tals:
        if len(records[-1]) + len(tal) > _RECORD_BYTES:
            records.append(bytearray(time_keeper))
        records[-1] += tal
    size = max(len(record) for record in records)
    size += size % 2  # a sample has two bytes
    return [bytes(record.ljust(size, b"\x00")) for record in records]


def _header(start: datetime | None, n_records: int, record_bytes: int) -> bytes:
    """The header of 256 + 256 bytes, printable ASCII."""
    if start is not None and 1985 <= start.year <= 2084:
        day = f"{start:%d.%m.%y}"
        startdate = f"{start.day:02d}-{_MONTHS[start.month - 1]}-{start.year}"
    else:
        day, startdate = "01.01.85", "X"
    fields = (
        "0",
        "X X X X",  # patient: code, sex, birthdate and name unknown
        f"Startdate {startdate} X X artifactlens",
        day,
        "00.00.00" if start is None else f"{start:%H.%M.%S}",
        str(_HEADER_BYTES),
        "EDF+C",
        str(n_records),
        "0",  # duration of a data record
        "1",  # number of signals
        "EDF Annotations",
        "",  # transducer
        "",  # dimension
        "-1",
        "1",
        "-32768",
        "32767",
        "",  # prefiltering
        str(record_bytes // 2),
        "",
    )
    widths = (*_RECORDING_FIELDS, *_SIGNAL_FIELDS)
    return "".join(map(str.ljust, fields, widths)).encode("ascii")
