"""Lateral gaze as a self-test: to the right makes F8 positive and F7 negative.

The eyes are dipoles, cornea positive; left and right saccades are equal and inverted (Lins
et al. 1993; Picton et al. 2000). Amplifiers lose the level that is held, so movements are
judged, not positions: the first one goes to the named side, the way home is its opposite.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from artifactlens.sitecare.biocal_answers import LATE_SECONDS, Answer, Look, Suspect
from artifactlens.sitecare.biocal_traces import Array

MOVE_UV = 20.0
"""Least movement at a temple (common practice); 25 degrees give about 60 (our simulation)."""

NOISE_FACTOR = 3.5
ANSWER_SHARE = 0.25
"""A side answers from this share of the other side's movement on."""

BLINK_AT_TEMPLES = 0.4
"""A blink at F7/F8 over that at the poles (one recorded adult: 38 and 40 %)."""

TEMPLE_SHARE = 0.5
"""Sites stand for a temple from this share of the largest lateral map on."""

FIRST_SHARE = 0.4
"""Movements count from this share of the largest one on."""

REST_SHARE = 0.3
"""The other sites confirm a movement from this share of it on."""

FIRST_TRACK_RATIO, TRACK_RATIO, MIRRORED_RATIO = 0.5, 1.5, 3.0
"""How much farther the eyes go to the named side than to the other, to have answered, if they
went there first and if not; and to the other side, to be called mirrored."""

ANSWER_UV, SURE = 15.0, 2.5
"""Least movement that counts at one temple, and the standard errors it exceeds."""

SILENT_SHARE = 0.35
"""A temple that moves by more than this share of the other is not silent."""

PLAIN_UV = 30.0
"""Movement from which a lead is blamed plainly, and at all for the wrong way."""

UNASKED_COUNT = 3
"""Movements that were not asked for, before a lead is blamed by them."""

RESTLESS = 2.0
"""A temple so many times as restless as the other takes no part in finding movements."""

SETTLED_S = 1.5
"""So long after the announcement before, a movement may still belong to that."""

CHECKS_SILENT = (
    "check the lead and its head box input",
    "check placement and label",
    "re-prep, then ask for gaze to both sides again",
)
CHECKS_EXCHANGED = (
    "check placement of both leads",
    "check their head box inputs and labels",
    "then ask for gaze to both sides again",
)
CHECKS_OTHER_WAY = (
    "ask again and watch which way the eyes go",
    "check that left and right are not exchanged throughout",
    "check the head box inputs",
)
CHECKS_ASK = ("ask for the gaze again and watch the eyes", "then check the temple leads")


@dataclass(frozen=True, slots=True, eq=False)
class _Sides:
    """Movements at the temples: ``left``, ``right`` (n_moments,) microvolt, without blinks.

    ``blink`` is what was taken off for a blink, ``rest`` what the other sites say of the
    movement of the right temple, NaN without such sites. ``quiet_left`` and ``quiet_right``
    are their usual levels, ``rows`` the strongest site of both temples.
    """

    left: Array
    right: Array
    blink: Array
    rest: Array
    quiet_left: float
    quiet_right: float
    rows: tuple[int, int]

    @property
    def half(self) -> Array:
        """Half of right minus left: to the right where positive, blinks cancel."""
        return (self.right - self.left) / 2


class _Seen(NamedTuple):
    """Movements that were found: samples, directions (+1 to the right), typical sizes."""

    at: NDArray[np.intp]
    way: Array
    left: float
    right: float
    limit_left: float
    limit_right: float


def judge_gaze(look: Look) -> Answer:
    """What was seen of gaze to a side, or from side to side."""
    sides = _sides(look)
    if sides is None:
        return Answer("cannot tell", (), _why_not(look))
    time = look.traces.time
    within = (time >= look.task.onset - 0.2) & (time <= look.task.end)
    seen = _movements(look, sides, within)
    rows = sides.rows
    if seen is None:
        return _nothing(look, rows)
    values = np.zeros(len(look.places.frame.sites))
    turn = -1.0 if look.task.kind == "gaze left" else 1.0
    values[list(rows)] = turn * seen.left, turn * seen.right
    answers = -seen.left >= seen.limit_left, seen.right >= seen.limit_right
    weak, strong = sorted((abs(seen.left), abs(seen.right)))
    if all(answers) and weak >= ANSWER_SHARE * strong:
        return _opposite(look, sides, seen, values)
    same = (seen.left >= seen.limit_left and answers[1]) or (
        -seen.right >= seen.limit_right and answers[0]
    )
    if same and weak >= ANSWER_SHARE * strong:
        return _same_sign(look, rows, values)
    return _one_side(look, sides, seen, values)


def _sides(look: Look) -> _Sides | None:
    places, traces = look.places, look.traces
    moves = traces.moves()
    alive = np.isfinite(moves).any(axis=1) & places.usable
    strong = np.abs(places.lateral) >= TEMPLE_SHARE
    groups = [
        np.flatnonzero(mask & alive & strong)
        for mask in (places.leads.left, places.leads.right)
    ]
    if not all(len(group) for group in groups):
        return None
    poles = np.flatnonzero(
        places.leads.front & alive & ~np.isin(np.arange(len(moves)), np.concatenate(groups))
    )
    blink = np.zeros(moves.shape[1])
    if len(poles):
        blink = BLINK_AT_TEMPLES * np.median(moves[poles], axis=0)
    left, right = (np.median(moves[group], axis=0) for group in groups)
    main = [int(group[np.argmax(np.abs(places.lateral[group]))]) for group in groups]
    others = alive & (np.abs(places.lateral) >= 0.05)
    others[np.concatenate(groups)] = False
    weight = places.lateral[others]
    rest = np.full(moves.shape[1], np.nan)
    if (weight > 0).any() and (weight < 0).any():
        rest = (
            weight @ (moves[others] - np.median(moves[others], axis=0)) / np.sum(weight**2)
        )
    quiet = look.quiet(np.stack([left - blink, right - blink]))
    return _Sides(
        left - blink, right - blink, blink, rest, float(quiet[0]), float(quiet[1]),
        (main[0], main[1]),
    )  # fmt: skip


def _movements(look: Look, sides: _Sides, when: NDArray[np.bool_]) -> _Seen | None:
    """Find the movements: where a temple, or their difference, moves beyond its quiet level."""
    from scipy.signal import find_peaks

    quiet = sides.quiet_left, sides.quiet_right
    limits = [max(MOVE_UV, NOISE_FACTOR * level) for level in quiet]
    half_quiet = float(look.quiet(sides.half[None])[0])
    half_limit = max(0.5 * MOVE_UV, NOISE_FACTOR * half_quiet)
    # A blink that is taken off leaves a rest at either side: no movement of its own.
    both = np.stack([sides.left, sides.right])
    clear = np.abs(sides.blink) <= 0.5 * np.abs(both).max(axis=0)
    alone = np.where(clear, np.abs(both) / np.array(limits)[:, None], 0.0)
    half = np.abs(sides.half) / half_limit
    size, sign = (
        (alone[0], -sides.left)
        if quiet[1] > RESTLESS * quiet[0]
        else (alone[1], sides.right)
        if quiet[0] > RESTLESS * quiet[1]
        else (half, sides.half)
    )
    inside = np.where(when, size, 0.0)
    if not np.nanmax(inside, initial=0.0) >= 1:
        size, sign = alone.max(axis=0), sides.half
        inside = np.where(when, size, 0.0)
    largest = float(np.nanmax(inside, initial=0.0))
    if largest < 1:
        return None
    # Peaks of the whole trace: what rises towards the edge belongs to the next task.
    at, _ = find_peaks(
        np.nan_to_num(size),
        height=max(FIRST_SHARE * largest, 0.5),
        distance=max(1, round(0.25 * look.traces.slow_rate)),
    )
    at = at[when[at]]
    if not len(at):
        return None
    way = np.where(sign[at] >= 0, 1.0, -1.0)
    left, right = (float(np.median(way * trace[at])) for trace in (sides.left, sides.right))
    spread = SURE * 1.25 / np.sqrt(len(at))
    answer_limits = [max(ANSWER_UV, spread * level) for level in quiet]
    return _Seen(at, way, left, right, answer_limits[0], answer_limits[1])


def _opposite(look: Look, sides: _Sides, seen: _Seen, values: Array) -> Answer:
    """Both temples move against each other: the named way, or its reverse."""
    rows = sides.rows
    measured = look.measured(rows, values)
    if look.task.kind == "gaze":
        return Answer(
            "as expected", rows, f"{measured} or the reverse, opposite signs", rows
        )
    named = -1.0 if look.task.kind == "gaze left" else 1.0
    track = np.concatenate([[0.0], np.cumsum(named * sides.half[seen.at])])
    towards, away = float(track.max()), -float(track.min())
    # The way home may look larger than the way out: amplifiers lose what is held.
    ratio = FIRST_TRACK_RATIO if track[1] > 0 else TRACK_RATIO
    if towards >= ratio * away:
        return Answer("as expected", rows, measured, rows)
    values = -values
    measured = look.measured(rows, values)
    if away < MIRRORED_RATIO * towards:
        return Answer("cannot tell", rows, "the eyes went to both sides")
    size = (seen.right - seen.left) / 2
    if _came_early(look, sides, named, size):
        return Answer("cannot tell", rows, "the eyes had moved before it was noted")
    if size < PLAIN_UV:
        return Answer("cannot tell", rows, f"{measured}, too small to tell a side")
    confirmed = float(np.median(seen.way * sides.rest[seen.at]))
    names = look.names(rows)
    if np.isfinite(confirmed) and confirmed <= -REST_SHARE * size:
        reason = (
            f"{look.task.kind} gave {measured}, the reverse of what is expected and of what "
            "the sites around show"
        )
        suspect = Suspect("placement", "mirrored", rows, True, reason, CHECKS_EXCHANGED)
    elif np.isfinite(confirmed) and confirmed >= REST_SHARE * size:
        reason = (
            f"{look.task.kind} gave {measured}, and the sites around agree: the eyes went the "
            "other way, or left and right are exchanged"
        )
        suspect = Suspect("placement", "mirrored", rows, False, reason, CHECKS_OTHER_WAY)
    else:
        reason = f"{look.task.kind} gave {measured}, the reverse of what is expected"
        suspect = Suspect("placement", "mirrored", rows, False, reason, CHECKS_EXCHANGED)
    clause = f"{measured} where the reverse is expected at {names}"
    return Answer("mirrored", rows, clause, suspects=(suspect,))


def _came_early(look: Look, sides: _Sides, named: float, size: float) -> bool:
    """Whether the eyes went the named way just before: then the way home is what is seen."""
    time = look.traces.time
    first = max(look.since + SETTLED_S, look.task.onset - LATE_SECONDS)
    early = (time >= first) & (time < look.task.onset - 0.2)
    if not early.any():
        return False
    return float(np.nan_to_num(named * sides.half[early]).max()) >= 0.5 * size


def _same_sign(look: Look, rows: tuple[int, int], values: Array) -> Answer:
    reason = (
        f"{look.names(rows)} move alike with gaze ({look.measured(rows, values)}), where "
        "opposite signs are expected: one sits elsewhere or a label is exchanged"
    )
    suspect = Suspect("placement", "mirrored", rows, False, reason, CHECKS_EXCHANGED)
    clause = f"{look.measured(rows, values)}, the same sign at both"
    return Answer("mirrored", rows, clause, suspects=(suspect,))


def _one_side(look: Look, sides: _Sides, seen: _Seen, values: Array) -> Answer:
    """One temple moves, the other does not: the silent one is suspect if the rest agrees."""
    left, right = sides.rows
    sizes = {left: abs(seen.left), right: abs(seen.right)}
    limits = {left: seen.limit_left, right: seen.limit_right}
    moving = max(sizes, key=lambda row: sizes[row] / limits[row])
    silent = left if moving == right else right
    size = sizes[moving]
    if (
        size < limits[moving]
        or limits[silent] > 0.8 * size
        or sizes[silent] > SILENT_SHARE * size
    ):
        return Answer("cannot tell", sides.rows, "the temples are too restless to see it")
    confirmed = float(np.median(seen.way * sides.rest[seen.at]))
    agreed = bool(np.isfinite(confirmed) and confirmed >= REST_SHARE * size)
    repeated = look.task.timed and len(seen.at) > 1
    clause = f"{look.measured((moving,), values)}, but {look.measured((silent,), values)}"
    if not agreed and not repeated:
        return Answer("cannot tell", sides.rows, f"{clause}, and no other site confirms it")
    reason = (
        f"no deflection with gaze ({look.measured((silent,), values)}) where "
        f"{look.measured((moving,), values)}"
    )
    enough = 1 if look.task.timed else UNASKED_COUNT
    plain = agreed and size >= PLAIN_UV and len(seen.at) >= enough
    suspect = Suspect("site", "no response", (silent,), plain, reason, CHECKS_SILENT)
    return Answer("one side missing", (silent,), clause, (moving,), (suspect,))


def _nothing(look: Look, rows: tuple[int, int]) -> Answer:
    early = _movements_before(look)
    if early:
        return Answer("cannot tell", rows, "the eyes moved before it was noted, not after")
    clause = f"no lateral movement is seen at {look.names(rows)}"
    if not look.task.timed:
        return Answer("missing", rows, clause)
    reason = f"gaze to a side was asked for, none is seen at {look.names(rows)}"
    suspect = Suspect("patient", "no response", rows, False, reason, CHECKS_ASK)
    return Answer("missing", rows, clause, suspects=(suspect,))


def _movements_before(look: Look) -> bool:
    sides = _sides(look)
    return (
        sides is not None
        and _movements(look, sides, look.before(look.traces.time)) is not None
    )


def _why_not(look: Look) -> str:
    leads, usable = look.places.leads, look.places.usable
    lacking = [
        side
        for side, mask in (("left", leads.left), ("right", leads.right))
        if not mask.any()
    ]
    if lacking:
        return f"there is no site at the {' and the '.join(lacking)} temple in front"
    if not ((leads.left & usable).any() and (leads.right & usable).any()):
        return "the temples have nothing in their chain to be compared with"
    return "the temples have no whole signal there"
