"""A recording: its channels in microvolt, read in pieces, never altered."""

from __future__ import annotations

import math
from collections import Counter
from collections.abc import Callable, Sequence
from dataclasses import dataclass, field, replace
from datetime import datetime
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import ArrayLike, NDArray

from artifactlens.edf_header import COPY_AGAIN, open_records
from artifactlens.edf_records import listing, select
from artifactlens.errors import RecordingError
from artifactlens.mne_raw import open_raw, select_raw
from artifactlens.prefilter import UNSTATED, Filters, parse_prefilter

if TYPE_CHECKING:
    import mne

__all__ = [
    "READABLE_SUFFIXES",
    "Filters",
    "Recording",
    "Segment",
    "from_array",
    "from_raw",
    "open_recording",
    "parse_prefilter",
]

_EDF_SUFFIXES = (".edf", ".bdf", ".rec")
_MNE_FORMATS = {
    ".vhdr": "BrainVision",
    ".ahdr": "BrainVision",
    ".set": "EEGLAB",
    ".fif": "FIF",
    ".fif.gz": "FIF",
    ".gdf": "GDF",
    ".cnt": "CNT",
    ".cdt": "CDT",
    ".mff": "MFF",
    ".nedf": "NEDF",
    ".nxe": "NXE",
    ".lay": "LAY",
    ".eeg": "EEG",
    ".data": "DATA",
}
READABLE_SUFFIXES = frozenset({*_EDF_SUFFIXES, *_MNE_FORMATS})
"""Endings of the files that :func:`open_recording` takes, in small letters."""

# Files that accompany another one, which is the one to give.
_COMPANIONS = {".eeg": ".vhdr", ".vmrk": ".vhdr", ".dat": ".vhdr", ".fdt": ".set"}


@dataclass(frozen=True, slots=True)
class Segment:
    """An uninterrupted stretch.

    ``start`` is its first stored sample, ``n_samples`` its length, ``onset`` its seconds
    from the start of the recording, gaps included.
    """

    start: int
    n_samples: int
    onset: float


@dataclass(frozen=True, eq=False)
class Recording:
    """One recording, opened.

    Attributes
    ----------
    labels : tuple of str, length n_channels
        Channels that :meth:`read` gives, in the file's own spelling.
    types : tuple
        ``eeg``, ``eog``, ``ecg``, ``emg`` or ``misc``; None where the format states none.
    sampling_rate : float, hertz
    n_samples : int
        Stored samples per channel.
    segments : tuple of Segment
    filters : tuple of Filters, one per channel
    positions : array, shape (n_channels, 3), metres
        Digitised electrode positions in head coordinates, NaN where unknown.
    annotations : tuple of (onset in seconds, duration in seconds, text)
    start : datetime or None
        Needed to write marks that open beside the file; never shown.
    set_aside : tuple of (label, reason)
    notes : tuple of str
        Sentences for a person.
    impedances_kohm : dict of str to float
        By the electrode names of the file, where it states them.
    """

    name: str
    path: Path | None = field(repr=False)
    format: str
    labels: tuple[str, ...]
    types: tuple[str | None, ...] = field(repr=False)
    sampling_rate: float
    n_samples: int
    segments: tuple[Segment, ...]
    filters: tuple[Filters, ...] = field(repr=False)
    positions: NDArray[np.float64] = field(repr=False)
    annotations: tuple[tuple[float, float, str], ...] = field(repr=False)
    start: datetime | None = field(repr=False)
    set_aside: tuple[tuple[str, str], ...]
    notes: tuple[str, ...]
    _read: Callable[[int, int], NDArray[np.float32]] = field(repr=False)
    impedances_kohm: dict[str, float] = field(default_factory=dict, repr=False)

    @property
    def duration(self) -> float:
        """End of the last segment, seconds from the start."""
        last = self.segments[-1]
        return last.onset + last.n_samples / self.sampling_rate

    def read(self, start: int, stop: int) -> NDArray[np.float32]:
        """Samples ``start`` up to but without ``stop``.

        Returns
        -------
        array, shape (n_channels, stop - start), microvolt
            Missing samples stay NaN.

        Raises
        ------
        RecordingError
            If the samples lie outside the recording or its file has gone.
        """
        if not 0 <= start <= stop <= self.n_samples:
            raise RecordingError(
                f"Samples {start} to {stop} were asked for; the recording has "
                f"{self.n_samples}.",
                "Ask for samples within the recording.",
            )
        return self._read(start, stop)


def open_recording(path: str | Path) -> Recording:
    """Open a recording; no signal is read yet.

    EDF, EDF+, BDF and BDF+ are read in place, other formats by way of mne.

    Raises
    ------
    RecordingError
        If there is no such file, or it holds no scalp EEG that can be read.
    """
    path = Path(path)
    suffix = ".fif.gz" if path.name.lower().endswith(".fif.gz") else path.suffix.lower()
    _check_file(path, suffix)
    if suffix in _EDF_SUFFIXES:
        return _from_edf(path)
    if suffix not in _MNE_FORMATS:
        raise RecordingError(
            f"{path.name} has a suffix that no reader is known for.",
            "Give an EDF, EDF+, BDF, BrainVision (.vhdr), EEGLAB (.set) or FIF file.",
        )
    called = _MNE_FORMATS[suffix]
    recording = from_raw(open_raw(path, called), path.name[: -len(suffix)])
    return replace(recording, path=path, format=called)


def from_raw(raw: mne.io.BaseRaw, name: str = "raw") -> Recording:
    """Take over an mne Raw, loaded or not; channels marked bad are kept.

    Raises
    ------
    RecordingError
        If it has no channel in volt, or no samples.
    """
    chosen = select_raw(raw, name)
    return _checked(
        Recording(
            name=name,
            path=None,
            format="mne Raw",
            labels=chosen.labels,
            types=chosen.types,
            sampling_rate=float(raw.info["sfreq"]),
            n_samples=int(raw.n_times),
            segments=tuple(Segment(*run) for run in chosen.runs),
            filters=(Filters(chosen.high_pass, chosen.low_pass, None),)
            * len(chosen.labels),
            positions=chosen.positions,
            annotations=chosen.annotations,
            start=chosen.start,
            set_aside=chosen.set_aside,
            notes=chosen.notes,
            _read=chosen.read,
            impedances_kohm=chosen.impedances_kohm,
        )
    )


def from_array(
    data_uv: ArrayLike,
    sampling_rate: float,
    labels: Sequence[str],
    *,
    segments: Sequence[Segment] | None = None,
    positions: ArrayLike | None = None,
    filters: Sequence[Filters] | None = None,
    name: str = "array",
    types: Sequence[str | None] | None = None,
) -> Recording:
    """Take over samples in memory.

    Parameters
    ----------
    data_uv : array, shape (n_channels, n_samples), microvolt
        NaN marks missing samples.
    sampling_rate : float
        Hertz.
    labels : sequence of str
        One per channel.
    segments : sequence of Segment
        Uninterrupted stretches; all samples are one if not given.
    positions : array, shape (n_channels, 3), metres
        In head coordinates; NaN where unknown.
    filters : sequence of Filters
        One per channel.
    name : str
        What the recording is called in results.
    types : sequence
        One per channel, as in :class:`Recording`.

    Raises
    ------
    RecordingError
        If the shapes or the sampling rate do not fit.
    """
    data = np.asarray(data_uv)
    if data.ndim != 2 or data.dtype.kind not in "iuf" or not 0 < sampling_rate < math.inf:
        raise RecordingError(
            "Samples need an array of numbers (channels, samples) and a rate above 0 Hz; "
            f"given were shape {data.shape}, type {data.dtype} and {sampling_rate:g} Hz.",
            "Give one row per channel, in microvolt.",
        )
    no_places = np.full((len(data), 3), np.nan)
    places = no_places if positions is None else np.array(positions, dtype=np.float64)
    per_channel = {
        "labels": len(labels),
        "positions": places.size / 3,
        "filters": len(data) if filters is None else len(filters),
        "types": len(data) if types is None else len(types),
    }
    wrong = [what for what, count in per_channel.items() if count != len(data)]
    if wrong:
        raise RecordingError(
            f"There are {len(data)} channels, but not as many {' and '.join(wrong)}.",
            "Give one for each channel.",
        )
    stretches = tuple(segments or (Segment(0, data.shape[1], 0.0),))
    if any(not 0 <= s.start < s.start + s.n_samples <= data.shape[1] for s in stretches):
        raise RecordingError(
            f"A segment is empty or lies outside the {data.shape[1]} samples given.",
            "Give segments that hold at least one of the samples.",
        )

    def read(start: int, stop: int) -> NDArray[np.float32]:
        return np.array(data[:, start:stop], dtype=np.float32, order="C")

    return _checked(
        Recording(
            name=name,
            path=None,
            format="array",
            labels=tuple(labels),
            types=(None,) * len(data) if types is None else tuple(types),
            sampling_rate=float(sampling_rate),
            n_samples=data.shape[1],
            segments=stretches,
            filters=(UNSTATED,) * len(data) if filters is None else tuple(filters),
            positions=places.reshape(-1, 3),
            annotations=(),
            start=None,
            set_aside=(),
            notes=(),
            _read=read,
        )
    )


def _check_file(path: Path, suffix: str) -> None:
    """Raise a plain error for what can be told from outside."""
    try:
        is_directory = path.is_dir()
        is_empty = not is_directory and not _first_byte(path)
        whole = path.with_suffix(_COMPANIONS[suffix]) if suffix in _COMPANIONS else path
        is_part = whole != path and whole.exists()
    except FileNotFoundError:
        raise RecordingError(
            f"There is no file {path.name} at the place given.",
            "Check the path for typing errors.",
        ) from None
    except PermissionError:
        raise RecordingError(
            f"{path.name} may not be read by this user.",
            "Ask for read permission or copy it.",
        ) from None
    except (OSError, ValueError):
        raise RecordingError(
            f"{path.name} could not be opened.", "Check the path and the disk it is on."
        ) from None
    if is_directory and suffix != ".mff":  # the one format here that is a directory
        raise RecordingError(f"{path.name} is a directory.", "Give one recording file.")
    if is_part:
        raise RecordingError(
            f"{path.name} is only a part of {whole.name}.", f"Give {whole.name}."
        )
    if is_empty:
        raise RecordingError(f"{path.name} is empty (0 bytes).", COPY_AGAIN)


def _first_byte(path: Path) -> bytes:
    with path.open("rb") as file:
        return file.read(1)


def _from_edf(path: Path) -> Recording:
    try:
        records = open_records(path)
    except OSError:
        raise RecordingError(f"{path.name} could not be read.", COPY_AGAIN) from None
    chosen = select(records)
    rate = chosen.per_record / records.record_seconds
    filters = []
    for channel in chosen.channels:
        stated = parse_prefilter(channel.prefilter)
        if (
            channel.per_record < chosen.per_record
        ):  # nothing above its own Nyquist frequency
            nyquist = chosen.rate(channel) / 2
            stated = replace(stated, low_pass=min(stated.low_pass or nyquist, nyquist))
        filters.append(stated)
    return _checked(
        Recording(
            name=path.stem,
            path=path,
            format=records.format,
            labels=tuple(channel.label for channel in chosen.channels),
            types=(None,) * len(chosen.channels),
            sampling_rate=rate,
            n_samples=records.n_records * chosen.per_record,
            segments=tuple(
                Segment(first * chosen.per_record, count * chosen.per_record, onset)
                for first, count, onset in chosen.runs
            ),
            filters=tuple(filters),
            positions=np.full((len(chosen.channels), 3), np.nan),
            annotations=records.annotations,
            start=records.start,
            set_aside=chosen.set_aside,
            notes=chosen.notes,
            _read=chosen.read,
        )
    )


def _checked(recording: Recording) -> Recording:
    """Refuse a recording without channels or samples; note labels given twice."""
    if not recording.labels:
        reasons = [f"{label}: {reason}" for label, reason in recording.set_aside]
        detail = f" ({listing(reasons, 3)})" if reasons else ""
        raise RecordingError(
            f"{recording.name} has no channel that holds a scalp voltage{detail}.",
            "Give a scalp EEG whose channels have the unit uV, mV, nV or V.",
        )
    if not recording.n_samples or not recording.segments:
        raise RecordingError(f"{recording.name} holds no samples.", COPY_AGAIN)
    counts = Counter(recording.labels)
    repeated = [label for label, count in counts.items() if count > 1]
    if not repeated:
        return recording
    note = f"More than one channel is called {listing(repeated)}."
    return replace(recording, notes=(*recording.notes, note))
