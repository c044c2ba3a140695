"""Recording conditions and their groups, read back from the words of an example."""

from __future__ import annotations

import re
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from artifactlens.errors import OptionError

NOT_STATED = "not stated"

_WORDS = re.compile(
    r"(?P<rate>[\d.]+) Hz; (?P<band>as recorded|low-pass (?:none|[\d.]+)); "
    r"notch (?P<notch>none|[\d.]+); (?P<montage>\w+); (?P<sites>\d+) sites"
)

BANDWIDTHS = ("as recorded", "low-pass", "full")


class Condition(NamedTuple):
    """What ``Situation.words()`` says; frequencies in hertz, None where there is no filter.

    ``bandwidth`` is "as recorded" (the background's own, its floor not extended),
    "low-pass" (``low_pass`` was applied to an extended background) or "full".
    """

    rate: float
    bandwidth: str
    low_pass: float | None
    notch: float | None
    montage: str
    sites: int


def parse_condition(words: str) -> Condition | None:
    """Read the words back; None for words that ``Situation`` did not write."""
    match = _WORDS.fullmatch(words)
    if match is None:
        return None
    band = match["band"]
    low_pass = None if band == "as recorded" else _hertz(band.removeprefix("low-pass "))
    bandwidth = (
        band if band == "as recorded" else "full" if low_pass is None else "low-pass"
    )
    return Condition(
        float(match["rate"]),
        bandwidth,
        low_pass,
        _hertz(match["notch"]),
        match["montage"],
        int(match["sites"]),
    )


def _hertz(text: str) -> float | None:
    return None if text == "none" else float(text)


ASPECTS = ("bandwidth", "low-pass", "notch", "montage", "sites", "sampling rate")


def groups_by(aspect: str, condition: NDArray[np.str_]) -> dict[str, NDArray[np.bool_]]:
    """Rows of each value of one aspect of the conditions, in a sensible order.

    Parameters
    ----------
    aspect : str
        One of ``ASPECTS``.
    condition : array, shape (n_rows,)
        The words; those that cannot be read back form the last group, "not stated".

    Returns
    -------
    dict of array, shape (n_rows,)
        Every row is in exactly one group; no group is empty.

    Raises
    ------
    OptionError
        If the aspect is unknown.
    """
    if aspect not in ASPECTS:
        raise OptionError(
            f"A condition has {', '.join(ASPECTS)}; asked for was {aspect!r}.",
            "Name one of these.",
        )
    texts, which = np.unique(condition, return_inverse=True)
    values = [_value(aspect, parse_condition(str(text))) for text in texts]
    return {
        value[1]: np.isin(
            which.ravel(), [k for k, own in enumerate(values) if own == value]
        )
        for value in sorted(set(values))
    }


def _value(aspect: str, condition: Condition | None) -> tuple[float, str]:
    """Place in the order, and label."""
    if condition is None:
        return np.inf, NOT_STATED
    if aspect == "bandwidth":
        return float(BANDWIDTHS.index(condition.bandwidth)), condition.bandwidth
    if aspect == "low-pass":
        if condition.bandwidth == "as recorded":
            return -1.0, "as recorded"
        return _filter(condition.low_pass)
    if aspect == "notch":
        return _filter(condition.notch)
    if aspect == "montage":
        return 0.0, condition.montage
    if aspect == "sites":
        return float(condition.sites), f"{condition.sites} sites"
    return condition.rate, f"{condition.rate:g} Hz"


def _filter(hertz: float | None) -> tuple[float, str]:
    return (1e9, "none") if hertz is None else (hertz, f"{hertz:g} Hz")
