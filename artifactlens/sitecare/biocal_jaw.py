"""A jaw clench as a self-test: fast power rises at both temples, hardly at the midline.

Scalp muscle exceeds the EEG above 20 Hz, the more the farther from the vertex (Whitham et
al. 2007; Goncharova et al. 2003, from memory).
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from artifactlens.sitecare.biocal_answers import Answer, Look, Suspect
from artifactlens.sitecare.biocal_traces import Array

CLENCH_DB = 8.0
"""Rise that the temples have in common in a clench (our own choice)."""

RISE_DB = 6.0
"""Rise from which a site answers (our own choice)."""

SILENT_DB = 3.0
"""Rise up to which a site is silent; what lies between tells nothing (our own choice)."""

STRONG_DB = 12.0
"""A clench that rises less than this at its strongest site does not reach all sites."""

CLENCH_UV = 2.0
"""Amplitude of 20 to 44 Hz that a clench adds at least (common practice)."""

MIDLINE_DB = 6.0
"""How far what is added at a temple exceeds what is added at the midline."""

CHECKS_SILENT = (
    "check the lead and its head box input",
    "check placement and label",
    "re-prep, then ask to clench the jaw again",
)
CHECKS_ONE_SIDE = (
    "ask to clench on both sides and feel the temples",
    "check the leads of that side and their inputs",
)
CHECKS_ASK = ("ask to clench the jaw again and feel the temples",)
_SMOOTH = 3


def judge_jaw(look: Look) -> Answer:
    """What was seen of a clench that was asked for."""
    traces = look.traces
    if not traces.power.shape[1]:
        return Answer("cannot tell", (), "the recording carries too little above 20 Hz")
    known = np.isfinite(traces.power).all(axis=1) & (traces.power > 0).all(axis=1)
    sides = [np.flatnonzero(mask & known) for mask in _temples(look)]
    if not all(len(side) for side in sides):
        words = [
            word
            for word, side in zip(("left", "right"), sides, strict=True)
            if not len(side)
        ]
        clause = f"there is no site with a signal at the {' and the '.join(words)} temple"
        return Answer("cannot tell", (), clause)
    decibel = np.full_like(traces.power, np.nan)
    decibel[known] = 10 * np.log10(traces.power[known])
    usual = np.quantile(decibel, 0.3, axis=1)
    rise = _smoothed(decibel - usual[:, None])
    temples = np.concatenate(sides)
    at = _moment(
        look, np.median(rise[temples], axis=0), [rise[side].max(axis=0) for side in sides]
    )
    everyone = tuple(int(row) for row in temples)
    if at is None:
        return _nothing(look, everyone)
    values = rise[:, at]
    quiet = 10 ** (usual / 10)
    excess = _smoothed(traces.power)[:, at] - quiet
    middle = np.flatnonzero(_midline(look) & known)
    loudest = float(np.max(excess[temples]))
    added = max(float(np.median(excess[middle])), 0.0) if len(middle) else 0.0
    if loudest < 10 ** (MIDLINE_DB / 10) * added:
        clause = "power above 20 Hz rises at the midline as well"
        return Answer("cannot tell", everyone, clause)
    answers = (values >= RISE_DB) & (excess >= CLENCH_UV**2)
    silent = (values <= SILENT_DB) & (quiet <= loudest / 4)
    return _compare(look, sides, answers, silent, values)


def _temples(look: Look) -> tuple[NDArray[np.bool_], NDArray[np.bool_]]:
    """Sites over the jaw's muscles, by direction: F7, T7 and their likes."""
    x, y, z = look.places.direction.T
    scalp = np.array(look.places.frame.roles) == "site"
    with np.errstate(invalid="ignore"):
        beside = scalp & (y >= -0.15) & (y <= 0.75) & (z <= 0.2)
        return beside & (x <= -0.6), beside & (x >= 0.6)


def _midline(look: Look) -> NDArray[np.bool_]:
    x, _, z = look.places.direction.T
    scalp = np.array(look.places.frame.roles) == "site"
    with np.errstate(invalid="ignore"):
        return np.asarray(scalp & (np.abs(x) < 0.3) & (z > 0.5))


def _smoothed(values: Array) -> Array:
    """Mean over three windows, about a second."""
    padded = np.pad(values, ((0, 0), (1, 1)), mode="edge")
    return np.asarray((padded[:, :-2] + padded[:, 1:-1] + padded[:, 2:]) / _SMOOTH)


def _moment(look: Look, common: Array, sides: list[Array]) -> int | None:
    """When the temples rise most, first in the task's time, then shortly before it."""
    time = look.traces.hop_time
    for mask in (look.within(time), look.before(time)):
        if mask.any():
            for trace in (common, np.maximum(*sides)):
                inside = np.where(mask, trace, -np.inf)
                best = int(np.argmax(inside))
                if inside[best] >= CLENCH_DB:
                    return best
    return None


def _compare(
    look: Look,
    sides: list[NDArray[np.intp]],
    answers: NDArray[np.bool_],
    quiet: NDArray[np.bool_],
    values: Array,
) -> Answer:
    sound = [tuple(int(row) for row in side[answers[side]]) for side in sides]
    silent = [tuple(int(row) for row in side[quiet[side]]) for side in sides]
    heard = sound[0] + sound[1]
    if not heard:
        return _nothing(look, tuple(int(row) for side in sides for row in side))
    shown = (heard + silent[0] + silent[1])[:6]
    levels = (
        ", ".join(f"{look.name(row)} {values[row]:+.0f} dB" for row in shown)
        + " above 20 Hz"
    )
    if all(sound):
        number = 0 if silent[0] else 1
        lacking = silent[number]
        weak = float(np.max(values[sides[number]])) < STRONG_DB
        if not lacking or all(silent) or weak:
            return Answer("as expected", heard, levels, heard)
        reason = f"no rise with a clench that both temples show ({levels})"
        suspect = Suspect("site", "no response", lacking, False, reason, CHECKS_SILENT)
        return Answer("one side missing", lacking, levels, heard, (suspect,))
    lacking = silent[0] if sound[1] else silent[1]
    if not lacking:
        return Answer("cannot tell", heard, f"{levels}, on one side only")
    alone = len(sides[0] if sound[1] else sides[1]) == 1
    reason = f"a clench is seen on the other side only ({levels})"
    suspect = Suspect(
        "site" if alone else "patient", "no response", lacking, False, reason,
        CHECKS_SILENT if alone else CHECKS_ONE_SIDE,
    )  # fmt: skip
    suspects = (suspect,) if look.task.timed else ()
    clause = f"{levels}: one side only"
    return Answer("one side missing", lacking, clause, heard, suspects)


def _nothing(look: Look, rows: tuple[int, ...]) -> Answer:
    clause = "no clench is seen at the temples"
    if not look.task.timed:
        return Answer("missing", rows, clause)
    suspect = Suspect(
        "patient", "no response", rows, False,
        "a jaw clench was asked for, none is seen at the temples", CHECKS_ASK,
    )  # fmt: skip
    return Answer("missing", rows, clause, suspects=(suspect,))
