"""From when to when something was so, and whether it was put right."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from artifactlens.epochs import median_of_known
from artifactlens.sitecare.evidence import Evidence, Finding

SETTLED_SECONDS = 20.0
"""What has been away for so long, to the end, is over."""

COMES_BACK_SECONDS = 60.0
LONGEST_WAIT_SECONDS = 600.0
"""What comes and goes is over only after this, or after four of its usual pauses if they are
longer, and at the latest after ten minutes."""

HANDLED_SECONDS = 15.0
"""A fault that stops within this time of somebody's touch was put right by it."""

HANDLED_UV = 300.0
HANDLED_RATIO = 6.0


def stretches(evidence: Evidence, finding: Finding) -> tuple[tuple[float, float], ...]:
    """Bounds in seconds of the times when a finding held, pauses it is allowed bridged."""
    log = evidence.log
    begin, end = log.begin[finding.held], log.end[finding.held]
    if not len(begin):
        return ()
    pause = _pause(finding, begin, end)
    first = np.concatenate([[True], begin[1:] - end[:-1] > pause])
    last = np.concatenate([first[1:], [True]])
    return tuple(
        (round(float(a), 2), round(float(b), 2))
        for a, b in zip(begin[first], end[last], strict=True)
    )


def state(evidence: Evidence, finding: Finding) -> str:
    """Whether it is "present" at the end, was "cured" by somebody's hand, or is "past"."""
    if finding.standing:
        return "present"
    log = evidence.log
    begin, end = log.begin[finding.held], log.end[finding.held]
    known_end = log.end[finding.known | finding.held]
    if not len(end):
        return "past"
    away = float(known_end[-1] - end[-1])
    if finding.lasting:
        over = away >= SETTLED_SECONDS
    else:
        over = away >= min(_pause(finding, begin, end), LONGEST_WAIT_SECONDS)
    if not over:
        return "present"
    return "cured" if _handled(evidence, finding, float(end[-1])) else "past"


def is_a_hand(evidence: Evidence, finding: Finding, group: list[Finding]) -> bool:
    """Whether pops and swings are only somebody's hand, which ended another fault there.

    ``group`` holds all findings of the site.
    """
    if finding.lasting or not finding.held.any():
        return False
    log = evidence.log
    first, last = log.begin[finding.held][0], log.end[finding.held][-1]
    ends = [
        log.end[other.held][-1]
        for other in group
        if other.lasting and other.plain and other.held.sum() > 1
    ]
    reach = HANDLED_SECONDS + float(np.median(log.end - log.begin))
    return any(first >= end - reach and last <= end + reach for end in ends)


def _pause(finding: Finding, begin: NDArray[np.float64], end: NDArray[np.float64]) -> float:
    if finding.lasting or len(begin) < 2:
        return SETTLED_SECONDS if finding.lasting else COMES_BACK_SECONDS
    gaps = np.maximum(begin[1:] - end[:-1], 0)
    return float(max(COMES_BACK_SECONDS, 4 * np.median(gaps)))


def _handled(evidence: Evidence, finding: Finding, stopped: float) -> bool:
    """Whether the electrode was touched when it stopped: a great swing there, or a loss."""
    log = evidence.log
    near = np.abs(log.onset + 0.5 - stopped) <= HANDLED_SECONDS
    if not near.any() or not finding.rows:
        return False
    rows = list(finding.rows)
    swing = evidence.swing[near].astype(np.float64)
    usual = median_of_known(evidence.swing[:, rows])
    with np.errstate(invalid="ignore"):
        touched = (swing[:, rows] > HANDLED_UV) & (swing[:, rows] > HANDLED_RATIO * usual)
    # A lead that was flat comes back by a hand as well; a hole in the stream is no hand.
    elsewhere = log.signs.ok[near].any(axis=1, keepdims=True)
    lost = ~log.signs.ok[near][:, rows] & elsewhere
    return bool(touched.any() or lost.any())
