"""Cerebral patterns that a kind can be mistaken for, named when their signs are present."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from typing import NamedTuple

Values = Mapping[str, float | None]


class Sign(NamedTuple):
    """A measured sign of a look-alike: when it holds, the words stand on the flag."""

    kind: str
    words: str
    holds: Callable[[Values], bool]


def _above(name: str, limit: float) -> Callable[[Values], bool]:
    return lambda values: (value := values.get(name)) is not None and value > limit


def _below(name: str, limit: float) -> Callable[[Values], bool]:
    return lambda values: (value := values.get(name)) is not None and value < limit


SIGNS: tuple[Sign, ...] = (
    Sign(
        "eye",
        "frontal rhythmic delta activity: the deflection repeats every 0.3-0.6 s",
        _above("front_rhythm", 0.45),
    ),
    Sign(
        "eye",
        "frontal slow waves: the field fits eye dipoles poorly",
        _below("eye_match", 0.5),
    ),
    Sign(
        "muscle",
        "beta activity or spindles: one narrow peak at 12-30 Hz",
        _above("beta_peak", 8.0),
    ),
    Sign(
        "muscle",
        "fast cerebral activity: the spectrum falls as that of the brain does",
        _below("slope", -1.2),
    ),
    Sign(
        "pop",
        "a focal spike or sharp wave: the step does not stay",
        _below("step_stays", 0.15),
    ),
    Sign(
        "pop",
        "a focal discharge: other sites take part in the field",
        _above("spread", 0.35),
    ),
    Sign(
        "mains",
        "fast activity near the line frequency: it stands little above its flanks",
        _below("mains_steady", 4.0),
    ),
)


def look_alike(kind: str, values: Values) -> str:
    """The look-alikes whose signs are present, joined by semicolons; empty if none are."""
    return "; ".join(
        sign.words for sign in SIGNS if sign.kind == kind and sign.holds(values)
    )
