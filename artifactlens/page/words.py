"""How the page writes times, numbers and names that come from a file."""

from __future__ import annotations

import math
import re
from collections.abc import Sequence

LONGEST_NAME = 24
"""Characters of a name shown in running text; files may hold names of any length."""

_BLANK = re.compile("[\t\n\r\x0b\x0c\u2028\u2029]+")
# Controls, lone surrogates and marks that turn the direction of writing: shown as U+FFFD,
# so that a name can neither break the file nor reorder the words beside it.
_UNPRINTABLE = re.compile(
    "[\x00-\x08\x0e-\x1f\x7f-\x9f\u200e\u200f\u202a-\u202e\u2066-\u2069\ufeff\ufffe\uffff"
    "\ud800-\udfff]"
)


def clean(text: str) -> str:
    """Text that can stand in a page: blanks for line ends, U+FFFD for unprintables."""
    return _UNPRINTABLE.sub("\ufffd", _BLANK.sub(" ", text))


def cut(text: str, longest: int = LONGEST_NAME) -> str:
    """The text, or its beginning and an ellipsis, at most ``longest`` characters."""
    text = clean(text)
    return text if len(text) <= longest else text[: longest - 1].rstrip() + "…"


def names(sites: Sequence[str], most: int = 6) -> str:
    """Site names in a row, the last ones counted: ``'Fp1, Fp2 and 3 more'``."""
    shown = ", ".join(cut(site, 16) for site in sites[:most])
    return shown if len(sites) <= most else f"{shown} and {len(sites) - most} more"


def clock(seconds: float) -> str:
    """Time from the start of the recording as hours, minutes, seconds: ``'0:17:41'``."""
    whole = math.floor(seconds + 1e-6)
    return f"{whole // 3600}:{whole // 60 % 60:02d}:{whole % 60:02d}"


def span(seconds: float) -> str:
    """A length of time in words: ``'45 s'``, ``'29 min 42 s'``, ``'24 h'``."""
    whole = round(seconds)
    if whole < 120:
        return f"{plain(seconds)} s"
    if whole < 3 * 3600:
        parts = ((whole // 60, "min"), (whole % 60, "s"))
    else:
        minutes = round(seconds / 60)
        parts = ((minutes // 60, "h"), (minutes % 60, "min"))
    return " ".join(f"{count} {unit}" for count, unit in parts if count)


def plain(value: float) -> str:
    """One decimal at most, none where it would be zero: ``'2'``, ``'2.5'``."""
    return f"{value:.1f}".removesuffix(".0").replace("-", "−")


def number(value: float | None, absent: str = "–") -> str:
    """Three significant digits with a true minus sign, never an exponent below 10^9."""
    if value is None or not math.isfinite(value):
        return absent
    size = abs(value)
    if size >= 1e9 or 0 < size < 1e-4:
        return f"{value:.2e}".replace("-", "−")
    decimals = 0 if size >= 99.95 else 1 if size >= 9.995 else 2 if size >= 0.1 else 4
    text = f"{value:.{decimals}f}"
    if "." in text:
        text = text.rstrip("0").rstrip(".")
    return "0" if text in ("-0", "0") else text.replace("-", "−")


def signed(value: float, decimals: int = 2) -> str:
    """A number that always shows its sign, such as a weight in log-odds: ``'+3.10'``."""
    return f"{value:+.{decimals}f}".replace("-", "−")


def per_hundred(share: float) -> str:
    """A share (0 to 1) as a count out of 100; small shares never round to nothing."""
    if share <= 0:
        return "none"
    if share < 0.01:
        return "below 1"
    if 0.99 < share < 1:
        return "above 99"
    return f"{100 * share:.0f}"
