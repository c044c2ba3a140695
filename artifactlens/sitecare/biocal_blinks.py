"""Blinks as a self-test: the frontal poles become positive, the more so the nearer the eyes.

100 to 300 microvolt at Fp1/Fp2 for 200 to 400 ms, F3/F4 30 to 50 % of it (common practice);
the lid slides over the cornea, which is positive (Lins et al. 1993; Picton et al. 2000).
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from artifactlens.sitecare.biocal_answers import Answer, Look, Suspect, strongest_first
from artifactlens.sitecare.biocal_traces import Array

BLINK_UV = 30.0
"""Least deflection of the poles: half blinks have about as much (common practice)."""

SITE_UV = 20.0
"""Least deflection that counts at one site (common practice)."""

NOISE_FACTOR = 4.0
"""How far a blink exceeds the quiet level."""

SEEN_SHARE = 0.25
"""Sites take part in finding blinks from this share of the largest on."""

ANSWER_SHARE = 0.3
"""A site answers from this share of what is expected there on: heads differ."""

NEGATIVE_SHARE = 0.5
"""The same for the reverse, which a restless lead may show by chance."""

PLAIN_UV = 50.0
"""Blinks from this size on blame a lead plainly; smaller ones may be frontal slow waves."""

UNASKED_UV, UNASKED_COUNT = 80.0, 3
"""Size and number of blinks that were not asked for, before a lead is blamed by them."""

MOST_BLINKS = 8

CHECKS_SILENT = (
    "check the lead and its head box input",
    "check placement and label",
    "re-prep, then ask for blinks again",
)
CHECKS_NEGATIVE = (
    "check placement and label of the lead",
    "check its head box input",
    "then the montage",
)
CHECKS_INVERTED = (
    "check the polarity of the recording and its export",
    "check that front and back of the montage are not exchanged",
)
CHECKS_ASK = ("ask for the blinks again and watch the lids", "then check the frontal leads")


def judge_blinks(look: Look) -> Answer:
    """What was seen of blinks that were asked for."""
    places, traces = look.places, look.traces
    bumps = traces.bumps()
    seen = np.isfinite(bumps).any(axis=1) & places.usable
    targets = np.flatnonzero(places.leads.front & seen)
    if not len(targets):
        return Answer("cannot tell", (), _why_not(look))
    near = np.flatnonzero(seen & (places.blink >= SEEN_SHARE))
    near = np.union1d(near, targets)
    expected = np.maximum(places.blink, SEEN_SHARE)
    common = np.median(bumps[near] / expected[near, None], axis=0)
    at, late = _moments(look, common)
    rows = tuple(int(row) for row in targets)
    if not len(at):
        return _nothing(look, rows)
    noise = look.quiet(bumps)
    values = np.median(bumps[:, at], axis=1)
    limit = np.maximum(SITE_UV, 3 * 1.25 * noise / np.sqrt(len(at)))
    normal = expected * abs(float(np.median(common[at])))
    toward = np.abs(values) >= np.maximum(limit, ANSWER_SHARE * normal)
    if np.median(common[at]) < 0:
        return _inverted(
            look, targets[toward[targets] & (values[targets] < 0)], values, len(at)
        )
    positive = toward & (values > 0)
    reverse = toward & (-values >= np.maximum(1.3 * limit, NEGATIVE_SHARE * normal))
    sound = strongest_first(targets[positive[targets]], values)
    negative = strongest_first(targets[reverse[targets]], values)
    mute = ~positive & ~reverse & (limit <= 0.6 * normal)
    silent = tuple(int(row) for row in targets[mute[targets]])
    suspects = []
    # At no known time, frontal slow waves of the brain may pass for blinks.
    size = float(np.median(common[at]))
    large = size >= UNASKED_UV and len(at) >= UNASKED_COUNT
    sure = bool(sound) and (large or (look.task.timed and size >= PLAIN_UV))
    number = "one blink" if len(at) == 1 else f"{len(at)} blinks"
    if negative:
        suspects.append(
            Suspect(
                "placement", "mirrored", negative, sure and len(at) > 1,
                f"negative in {number} ({look.measured(negative, values)}) where the frontal "
                "poles become positive", CHECKS_NEGATIVE,
            )
        )  # fmt: skip
    if silent:
        other = _elsewhere(look, seen, values, near)
        instead = f", while {look.measured(other, values)}" if other else ""
        suspects.append(
            Suspect(
                "site", "no response", silent, sure,
                f"no deflection in {number} of {size:.0f} uV that other "
                f"frontal sites show{instead}", CHECKS_SILENT,
            )
        )  # fmt: skip
    if negative:
        clause = (
            f"{look.measured(negative, values)} where a positive deflection is expected"
        )
        return Answer("mirrored", negative, clause, sound, tuple(suspects))
    if silent:
        verdict = "one side missing" if sound else "missing"
        rest = f"; {look.measured(sound, values)}" if sound else ""
        clause = f"no deflection at {look.names(silent)}{rest}"
        return Answer(verdict, silent, clause, sound, tuple(suspects))
    if not sound:
        return Answer("cannot tell", rows, "the frontal sites are too restless to see them")
    lone = " (before it was noted)" if late else ""
    clause = f"{look.measured(sound, values)} against the sites behind{lone}"
    return Answer("as expected", sound, clause, sound)


def _moments(look: Look, common: Array) -> tuple[NDArray[np.intp], bool]:
    """Samples at which the frontal sites have their largest common bumps."""
    limit = max(BLINK_UV, NOISE_FACTOR * float(look.quiet(common[None])[0]))
    for mask, late in ((look.within, False), (look.before, True)):
        inside = np.where(mask(look.traces.time), np.nan_to_num(common), 0.0)
        up, down = inside.max(initial=0.0), -inside.min(initial=0.0)
        # A flank is half as deep as its blink is high: the larger sign is the blink's.
        signed = inside if up >= 0.7 * down else -inside
        largest = float(signed.max(initial=0.0))
        if largest >= limit:
            return _peaks(signed, max(limit, 0.5 * largest), look.traces.slow_rate), late
    return np.array([], np.intp), False


def _peaks(signal: Array, height: float, rate: float) -> NDArray[np.intp]:
    from scipy.signal import find_peaks

    padded = np.pad(signal, 1)  # a peak may lie at the edge of the task
    peaks, found = find_peaks(padded, height=height, distance=max(1, round(0.3 * rate)))
    order = np.argsort(-found["peak_heights"], kind="stable")[:MOST_BLINKS]
    return np.sort(peaks[order]) - 1


def _nothing(look: Look, rows: tuple[int, ...]) -> Answer:
    clause = f"no blink is seen at {look.names(rows)}"
    if not look.task.timed:
        return Answer("missing", rows, clause)
    reason = f"blinks were asked for, none is seen at {look.names(rows)}"
    asked = Suspect("patient", "no response", rows, False, reason, CHECKS_ASK)
    return Answer("missing", rows, clause, suspects=(asked,))


def _inverted(look: Look, rows: NDArray[np.intp], values: Array, count: int) -> Answer:
    """All frontal sites become negative: no single lead does that."""
    negative = strongest_first(rows, values)
    if not negative or count < 2 or not look.task.timed:
        targets = tuple(int(row) for row in np.flatnonzero(look.places.leads.front))
        return Answer("cannot tell", targets, "only negative deflections are seen in front")
    clause = f"{look.measured(negative, values)} where positive deflections are expected"
    suspect = Suspect(
        "placement", "mirrored", negative, False,
        f"{count} blinks are negative at all frontal sites", CHECKS_INVERTED,
    )  # fmt: skip
    return Answer("mirrored", negative, clause, suspects=(suspect,))


def _elsewhere(
    look: Look, seen: NDArray[np.bool_], values: Array, near: NDArray[np.intp]
) -> tuple[int, ...]:
    """The site farther back that moves like a frontal one: its label may be exchanged."""
    back = np.flatnonzero(seen & (look.places.blink < SEEN_SHARE))
    back = np.setdiff1d(back, near)
    if not len(back):
        return ()
    row = int(back[np.argmax(values[back])])
    largest = float(np.max(np.nan_to_num(values[near])))
    return (row,) if values[row] >= max(2 * SITE_UV, 0.6 * largest) else ()


def _why_not(look: Look) -> str:
    if not look.places.leads.front.any():
        return "there is no frontal site"
    if not (look.places.leads.front & look.places.usable).any():
        return (
            "the frontal sites have nothing behind them in their chain to be compared with"
        )
    return "the frontal sites have no whole signal there"
