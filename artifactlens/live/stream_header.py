"""What the header of an LSL stream says of its channels, as far as it says anything."""

from __future__ import annotations

import math
import re
from dataclasses import dataclass, field
from xml.etree import ElementTree

import numpy as np
from numpy.typing import NDArray

from artifactlens.errors import StreamError

__all__ = ["StreamFacts", "read_facts"]

_TYPES = {
    "eeg": "eeg",
    "eog": "eog",
    "ecg": "ecg",
    "ekg": "ecg",
    "emg": "emg",
    # Says nothing: the label decides, as in a file that states no types.
    "": None,
    "exg": None,
}
_NOT_A_VOLTAGE = re.compile(
    r"trig\w*|markers?|stim\w*|events?|status|counter|sampnum|time\w*|quality|battery"
)
_VOLTAGE = re.compile(r"(micro|milli|nano|[u\u03bcmn])?\s*v(?:olts?)?")
_MICROVOLTS = {
    None: 1e6,
    "milli": 1e3,
    "m": 1e3,
    "micro": 1.0,
    "u": 1.0,
    "\u03bc": 1.0,
    "nano": 1e-3,
    "n": 1e-3,
}
_UNSTATED = frozenset({"", "-", "n/a", "na", "none", "null", "unknown", "unspecified"})
_IMPEDANCE = re.compile(r"([0-9]*\.?[0-9]+(?:e[+-]?[0-9]+)?)\s*(k|m)?\s*(ohms?|\u03c9)?")
_SMALLEST_OHM = 200.0
_LEAST_OHM = 20.0
_LONGEST_LABEL = 80


@dataclass(frozen=True, eq=False)
class StreamFacts:
    """A stream of scalp voltages.

    Attributes
    ----------
    name : str
        The stream's own name.
    sampling_rate : float, hertz
        Nominal.
    labels : tuple of str, length n_channels
        As the stream spells them; "Ch 3" for the third channel if it has none.
    types : tuple
        ``eeg``, ``eog``, ``ecg``, ``emg`` or ``misc``; None where none is stated.
    scale_to_uv : array, shape (n_channels,)
        What a value is multiplied by to give microvolt.
    reference : str or None
        As stated; several are joined by a comma.
    impedances_kohm : array, shape (n_channels,), kilo-ohm
        As stated when the header was written; NaN where none is.
    set_aside : tuple of (label, reason)
        Channels of the stream that hold no voltage; they have no label above.
    rows : array, shape (n_channels,)
        Place of each channel in a sample of the stream.
    """

    name: str
    sampling_rate: float
    labels: tuple[str, ...]
    types: tuple[str | None, ...]
    scale_to_uv: NDArray[np.float64] = field(repr=False)
    reference: str | None
    impedances_kohm: NDArray[np.float64] = field(repr=False)
    set_aside: tuple[tuple[str, str], ...]
    rows: NDArray[np.intp] = field(repr=False)

    def same_layout(self, other: StreamFacts) -> bool:
        """Whether samples of both may be put into one and the same table."""
        mine, theirs = (
            (f.sampling_rate, f.labels, f.types, f.reference) for f in (self, other)
        )
        return mine == theirs and np.array_equal(self.scale_to_uv, other.scale_to_uv)


def read_facts(
    xml: str, *, name: str, sampling_rate: float, n_channels: int
) -> StreamFacts:
    """Read a header; of what the convention offers, everything may be missing or wrong.

    The places are those of the XDF meta-data for EEG, which LSL refers to:
    ``desc/channels/channel/{label,unit,type,impedance}`` and ``desc/reference/label``.
    Nothing else is looked at, least of all ``desc/subject``.

    Without a unit a value is taken as microvolt, the unit that the convention recommends.
    For impedances it leaves the unit open, see :func:`_kilo_ohms`.

    Parameters
    ----------
    xml : str
        The whole header. Text that is no XML counts as a header without a description.
    name : str
        Of the stream.
    sampling_rate : float
        Nominal, hertz.
    n_channels : int
        Values in each sample. Descriptions beyond are ignored, missing ones are empty.

    Raises
    ------
    StreamError
        If no channel holds a voltage.
    """
    try:
        root = ElementTree.fromstring(xml)
    except (ElementTree.ParseError, ValueError):  # ValueError: a lone surrogate
        root = ElementTree.Element("info")
    entries = root.findall("desc/channels/channel")[:n_channels]
    entries += [ElementTree.Element("channel")] * (n_channels - len(entries))
    labels = [
        _clean(entry.findtext("label")) or f"Ch {number}"
        for number, entry in enumerate(entries, 1)
    ]
    given_types = [_clean(entry.findtext("type")) for entry in entries]
    units = [_clean(entry.findtext("unit")) for entry in entries]
    scales = [_microvolts(unit) for unit in units]
    impedances = _kilo_ohms([_clean(entry.findtext("impedance")) for entry in entries])
    kept: list[int] = []
    aside: list[tuple[str, str]] = []
    for row, (label, given, unit) in enumerate(
        zip(labels, given_types, units, strict=True)
    ):
        if _NOT_A_VOLTAGE.fullmatch(given.casefold()):
            aside.append((label, f"typed {given!r} by the stream"))
        elif scales[row] is None:
            aside.append((label, f"its unit {unit!r} is not a voltage"))
        else:
            kept.append(row)
    if not kept:
        raise StreamError(
            f"The stream {name!r} has no channel that holds a voltage "
            f"({aside[0][0]}: {aside[0][1]}).",
            "Name another stream, or have its header state the unit microvolts.",
        )
    references = [_clean(e.text) for e in root.findall("desc/reference/label")]
    return StreamFacts(
        name=name,
        sampling_rate=float(sampling_rate),
        labels=tuple(labels[row] for row in kept),
        types=tuple(_TYPES.get(given_types[row].casefold(), "misc") for row in kept),
        scale_to_uv=np.array([scales[row] for row in kept], dtype=np.float64),
        reference=", ".join(filter(None, references)) or None,
        impedances_kohm=impedances[kept],
        set_aside=tuple(aside),
        rows=np.array(kept, dtype=np.intp),
    )


def _clean(text: str | None) -> str:
    """One line of printable text, of bounded length."""
    printable = "".join(c if c.isprintable() else " " for c in text or "")
    return " ".join(printable.split())[:_LONGEST_LABEL]


def _microvolts(unit: str) -> float | None:
    """Microvolts in one unit; None for what is not a voltage."""
    plain = unit.casefold()  # makes the micro sign a Greek mu, too
    if plain in _UNSTATED:
        return 1.0
    found = _VOLTAGE.fullmatch(plain)
    return _MICROVOLTS[found[1]] if found else None


def _kilo_ohms(texts: list[str]) -> NDArray[np.float64]:
    """Impedances as stated, in kilo-ohm.

    A unit beside the number holds. Bare numbers have one unit for the whole stream. From
    200 on they are ohm, below kilo-ohm (common practice: hardly an electrode on skin has
    less than 200 ohm, and one of 200 kilo-ohm is off). With numbers on both sides the
    median decides, but a number below 20 shows that they are kilo-ohm. Several bare
    numbers from 200 on that are all the same are the device's word for "open" or "not
    measured" in a unit that cannot be told: NaN, since 999 kilo-ohm read as 999 ohm would
    call an electrode good that is off.

    Returns
    -------
    array, shape (n_channels,), kilo-ohm
        NaN where nothing usable is stated; 0 and negative numbers are not.
    """
    values = np.full(len(texts), np.nan)
    bare = np.zeros(len(texts), dtype=bool)
    for number, text in enumerate(texts):
        found = _IMPEDANCE.fullmatch(text.casefold())
        if not found or not 0 < float(found[1]) < math.inf:
            continue
        values[number] = float(found[1])
        if found[2]:
            values[number] *= {"k": 1.0, "m": 1e3}[found[2]]
        elif found[3]:
            values[number] /= 1e3
        else:
            bare[number] = True
    numbers = values[bare]
    if not numbers.size or np.median(numbers) < _SMALLEST_OHM or numbers.min() < _LEAST_OHM:
        return values
    same = numbers.size > 1 and np.ptp(numbers) == 0
    values[bare] = np.nan if same else numbers / 1e3
    return values
