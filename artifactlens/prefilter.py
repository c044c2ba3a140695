"""What a recorder's filters are, from the free text in which EDF headers state them."""

from __future__ import annotations

import math
import re
from dataclasses import dataclass, replace

_NUMBER = r"\d*[.,]?\d+(?:e[+-]?\d+)?"
_UNIT = r"k?hz|m?s(?:ec)?\b"
_NAMES = ("high_pass", "time_constant", "low_pass", "notch")
_LOWEST_NOTCH = 15.0  # hertz; a smaller N is the order of a filter
_FLAGS = re.IGNORECASE | re.ASCII
# LF and HF are the "low filter" and "high filter" of an EEG machine (common practice):
# they name the frequencies that are cut. A name may follow the z of Hz without a space.
_FILTER = re.compile(
    r"(?<![a-y])(?:"
    r"(?P<high_pass>hpf?|high[ -]?pass|low[ -]?cut|lff?)"
    r"|(?P<time_constant>tc|time[ -]?constant)"
    r"|(?P<low_pass>lpf?|low[ -]?pass|high[ -]?cut|hff?)"
    r"|(?P<notch>n|notch|rf)"
    rf")\s*[:=]?\s*(?P<number>{_NUMBER})\s*(?P<unit>{_UNIT})?",
    _FLAGS,
)
_BAND = re.compile(
    rf"(?<![a-y])(?:bp|band[ -]?pass)\s*[:=]?\s*(?P<high_pass>{_NUMBER})\s*(?:hz)?"
    rf"\s*(?:-|to)\s*(?P<low_pass>{_NUMBER})",
    _FLAGS,
)


@dataclass(frozen=True, slots=True)
class Filters:
    """Filters of one channel as its header states them, hertz; None = not stated."""

    high_pass: float | None
    low_pass: float | None
    notch: float | None


UNSTATED = Filters(None, None, None)


def parse_prefilter(text: str) -> Filters:
    """Filters from a text such as ``HP:0.1Hz LP:75Hz N:50Hz`` (EDF specification).

    Understood are high-pass, low-pass and notch under their usual short names, a band
    (``BP 0.5-70``), frequencies in Hz or kHz, and time constants in s or ms, which stand
    for a high-pass at 1 / (2 pi tau). 0 means not stated; so do a high-pass and a
    low-pass that leave nothing between them.
    """
    stated: dict[str, float] = {}
    for match in _BAND.finditer(text):
        for name in ("high_pass", "low_pass"):
            stated.setdefault(name, _number(match[name]))
    for match in _FILTER.finditer(text):
        name = next(name for name in _NAMES if match[name])
        unit = (match["unit"] or ("s" if name == "time_constant" else "hz")).lower()
        value = _number(match["number"]) * (1000 if unit == "khz" else 1)
        if "z" not in unit:  # seconds
            seconds = value / (1000 if unit.startswith("ms") else 1)
            is_high_pass = name in ("time_constant", "high_pass") and seconds > 0
            value = 1 / (2 * math.pi * seconds) if is_high_pass else 0.0
        if name == "notch" and value < _LOWEST_NOTCH:
            continue
        stated.setdefault("high_pass" if name == "time_constant" else name, value)
    known = {name: value for name, value in stated.items() if 0 < value < math.inf}
    filters = Filters(known.get("high_pass"), known.get("low_pass"), known.get("notch"))
    if filters.high_pass and filters.low_pass and filters.high_pass >= filters.low_pass:
        return replace(filters, high_pass=None, low_pass=None)
    return filters


def _number(number: str) -> float:
    return float(number.replace(",", "."))
