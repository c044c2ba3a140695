"""What an mne Raw holds that can be judged, read in pieces in microvolt."""

from __future__ import annotations

import re
import warnings
from dataclasses import dataclass, field
from datetime import datetime, timedelta
from itertools import pairwise
from typing import TYPE_CHECKING

import numpy as np

from artifactlens.edf_records import listing
from artifactlens.errors import RecordingError

if TYPE_CHECKING:
    from pathlib import Path

    import mne
    from numpy.typing import NDArray

KEPT_TYPES = {
    "eeg": "eeg",
    "eog": "eog",
    "ecg": "ecg",
    "emg": "emg",
    "bio": "misc",
    "misc": "misc",
}
_UNIT_VOLT, _COORD_HEAD = 107, 4  # FIFF_UNIT_V and FIFFV_COORD_HEAD of the FIF format
_KILO_OHM = {"kohm": 1.0, "kω": 1.0, "ohm": 1e-3, "ω": 1e-3}
_CUT = re.compile(r"(bad |edge )?boundary|new segment/.*", re.IGNORECASE)


@dataclass(frozen=True)
class RawSelection:
    """The channels of an mne Raw that are voltages.

    ``picks`` are their indices; ``positions`` (n_channels, 3) metres, head coordinates;
    ``runs`` the uninterrupted stretches: first sample, number of samples, onset in
    seconds; ``high_pass`` and ``low_pass`` hertz or None; ``impedances_kohm`` those that
    the file states.
    """

    raw: mne.io.BaseRaw
    name: str
    picks: tuple[int, ...]
    labels: tuple[str, ...]
    types: tuple[str, ...]
    positions: NDArray[np.float64]
    runs: tuple[tuple[int, int, float], ...]
    high_pass: float | None
    low_pass: float | None
    annotations: tuple[tuple[float, float, str], ...]
    start: datetime | None
    set_aside: tuple[tuple[str, str], ...]
    notes: tuple[str, ...]
    impedances_kohm: dict[str, float] = field(default_factory=dict)

    def read(self, start: int, stop: int) -> NDArray[np.float32]:
        """Samples ``start`` to ``stop``, (n_channels, n), microvolt."""
        if start == stop:  # mne refuses an empty stretch at the end
            return np.empty((len(self.picks), 0), dtype=np.float32)
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")
            try:
                volts = self.raw.get_data(
                    picks=list(self.picks), start=start, stop=stop, verbose="error"
                )
            except (OSError, ValueError, RuntimeError):
                raise RecordingError(
                    f"{self.name} could not be read from sample {start} to {stop}.",
                    "See that its files are whole and stay in their place.",
                ) from None
        return np.ascontiguousarray(volts * 1e6, dtype=np.float32)


def open_raw(path: Path, called: str) -> mne.io.BaseRaw:
    """Open a file by way of mne, without its samples; ``called`` names the format.

    Raises
    ------
    RecordingError
        If mne cannot read it, whatever the reason.
    """
    import mne

    with warnings.catch_warnings():
        warnings.simplefilter("ignore")  # what they tell is looked at in select_raw
        try:
            return mne.io.read_raw(path, preload=False, verbose="error")
        except Exception as error:
            # A damaged file may raise anything. The cause is cut off: it may quote the
            # header, and with it a person.
            raise RecordingError(
                f"{path.name} could not be read as {called}: {_first_line(error, path)}",
                "Check that the recording is continuous, whole and beside its companion "
                "files; exporting it as EDF+ may help.",
            ) from None


def select_raw(raw: mne.io.BaseRaw, name: str) -> RawSelection:
    """Choose the channels in volt, those marked bad included."""
    picks: list[int] = []
    set_aside: list[tuple[str, str]] = []
    kinds = raw.get_channel_types()
    for index, (label, kind) in enumerate(zip(raw.ch_names, kinds, strict=True)):
        reason = _why_aside(kind, raw.info["chs"][index]["unit"])
        if reason:
            set_aside.append((label, reason))
        else:
            picks.append(index)
    rate, first = float(raw.info["sfreq"]), float(raw.first_time)
    low_pass, high_pass = raw.info["lowpass"], raw.info["highpass"]
    marked = [raw.ch_names[i] for i in picks if raw.ch_names[i] in raw.info["bads"]]
    runs = _runs(raw)
    notes = []
    if marked:
        notes.append(f"Marked bad in the file, triaged all the same: {listing(marked)}.")
    if len(runs) > 1:
        notes.append(f"The recording is cut into {len(runs)} uninterrupted stretches.")
    started = raw.info["meas_date"]
    if started is not None:
        started = started.replace(tzinfo=None) + timedelta(seconds=first)
    return RawSelection(
        raw=raw,
        name=name,
        picks=tuple(picks),
        labels=tuple(raw.ch_names[i] for i in picks),
        types=tuple(KEPT_TYPES[kinds[i]] for i in picks),
        positions=np.array([_position(raw, i, kinds[i]) for i in picks]).reshape(-1, 3),
        runs=runs,
        high_pass=float(high_pass) if high_pass else None,
        # mne puts the Nyquist frequency where no low-pass is stated
        low_pass=float(low_pass) if low_pass and low_pass < 0.999 * rate / 2 else None,
        annotations=tuple(
            (onset - first, length, text) for onset, length, text in _annotations(raw)
        ),
        start=started,
        set_aside=tuple(set_aside),
        notes=tuple(notes),
        impedances_kohm=_impedances(raw),
    )


def _impedances(raw: mne.io.BaseRaw) -> dict[str, float]:
    """Impedances by electrode, kilo-ohm; mne keeps those of a BrainVision header."""
    table = getattr(raw, "impedances", None)
    found = {}
    for name, entry in table.items() if isinstance(table, dict) else ():
        factor = _KILO_OHM.get(str(entry.get("imp_unit", "")).lower())
        value = float(entry.get("imp", np.nan))
        # A passive pair is written as +name and -name: the first is the electrode.
        if factor is not None and np.isfinite(value) and not name.startswith("-"):
            found[name.removeprefix("+").strip()] = value * factor
    return found


def _why_aside(kind: str, unit: int) -> str:
    """Why a channel is not read; empty if it is."""
    if kind == "stim":
        return "a trigger channel, not a voltage"
    if kind in ("seeg", "ecog", "dbs"):
        return "an intracranial channel, not scalp EEG"
    if kind not in KEPT_TYPES:
        return f"a channel of type {kind}, not EEG"
    return "" if unit == _UNIT_VOLT else "its unit is not a voltage"


def _position(raw: mne.io.BaseRaw, index: int, kind: str) -> NDArray[np.float64]:
    channel = raw.info["chs"][index]
    place = np.array(channel["loc"][:3], dtype=np.float64)
    is_known = kind == "eeg" and channel["coord_frame"] == _COORD_HEAD and place.any()
    return place if is_known else np.full(3, np.nan)


def _annotations(raw: mne.io.BaseRaw) -> list[tuple[float, float, str]]:
    """Onset in the clock of the Raw, duration (0 where unknown), text."""
    marks = raw.annotations
    return [
        (float(onset), float(length) if np.isfinite(length) else 0.0, str(text))
        for onset, length, text in zip(
            marks.onset, marks.duration, marks.description, strict=True
        )
    ]


def _runs(raw: mne.io.BaseRaw) -> tuple[tuple[int, int, float], ...]:
    """Stretches between cuts; samples that the recorder skipped belong to none.

    Onsets count stored samples: a boundary does not tell reliably how much was cut out.
    """
    rate, n_samples = float(raw.info["sfreq"]), int(raw.n_times)
    edges, skipped = {0, n_samples}, []
    for onset, length, text in _annotations(raw):
        begin = round((onset - raw.first_time) * rate)
        end = begin + round(length * rate)
        begin, end = (min(max(edge, 0), n_samples) for edge in (begin, end))
        if text == "BAD_ACQ_SKIP":
            skipped.append((begin, end))
            edges |= {begin, end}
        elif _CUT.fullmatch(text):
            edges.add(begin)
    return tuple(
        (begin, end - begin, begin / rate)
        for begin, end in pairwise(sorted(edges))
        if not any(low <= begin and end <= high for low, high in skipped)
    )


def _first_line(error: Exception, path: Path) -> str:
    """The first line of a foreign message without paths and without what it quotes."""
    text = (str(error).strip() or type(error).__name__).splitlines()[0]
    for place in (path, path.absolute(), path.absolute().parent):
        text = text.replace(str(place), "the file")
    text = re.sub(r"(['\"`]).*?\1", "(...)", text)
    text = re.sub(r"\S*[/\\]\S*", "(...)", text)
    return f"{text[:200].rstrip(' .')}."
