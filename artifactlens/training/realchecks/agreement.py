"""How well scores and marks agree with a truth of yes, no and not called."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

YES, NO, NOT_CALLED = 1, 0, -1
"""What a truth array (int8) holds."""

SPECIFICITY = 0.95


@dataclass(frozen=True, slots=True)
class Separation:
    """How far a score, and the marks made from it, tell yes from no.

    ``yes``, ``no`` and ``left_out`` count the truth; cells without a score are left out.
    ``auc`` is that of the score, ``found_at_95`` the share of yes above a limit that 95 %
    of no do not exceed. Per way of marking: ``found`` the share of yes marked, ``false``
    the share of no marked, ``kappa`` Cohen's. NaN where a class is empty.
    """

    yes: int
    no: int
    left_out: int
    auc: float
    found_at_95: float
    found: dict[str, float]
    false: dict[str, float]
    kappa: dict[str, float]


def separation(
    truth: NDArray[np.int8],
    score: NDArray[np.floating],
    marked: Mapping[str, NDArray[np.bool_]],
) -> Separation:
    """Compare a score and marks with a truth.

    Parameters
    ----------
    truth : array of any shape
        YES, NO or NOT_CALLED.
    score : array, same shape
        NaN where there is none.
    marked : mapping to bool arrays, same shape
        Ways of marking, for example "sure" and "doubtful".
    """
    yes = (truth == YES) & ~np.isnan(score)
    no = (truth == NO) & ~np.isnan(score)
    called = yes | no
    return Separation(
        yes=int(yes.sum()),
        no=int(no.sum()),
        left_out=int(truth.size - called.sum()),
        auc=auc(score[yes], score[no]),
        found_at_95=found_at(score[yes], score[no], SPECIFICITY),
        found={name: share(mark[yes]) for name, mark in marked.items()},
        false={name: share(mark[no]) for name, mark in marked.items()},
        kappa={name: kappa(yes[called], mark[called]) for name, mark in marked.items()},
    )


def share(mask: NDArray[np.bool_]) -> float:
    """The mean of a mask, NaN if it is empty."""
    return float(mask.mean()) if mask.size else math.nan


def auc(yes: NDArray[np.floating], no: NDArray[np.floating]) -> float:
    """Chance that a random yes scores above a random no, ties by half; NaN if one is empty.

    By the rank sum: (R - n (n + 1) / 2) / (n m) (Hanley & McNeil 1982, Radiology 143:29).
    """
    from scipy.stats import rankdata

    n, m = len(yes), len(no)
    if not n or not m:
        return math.nan
    ranks = rankdata(np.concatenate([yes, no]))[:n]
    return float((ranks.sum() - n * (n + 1) / 2) / (n * m))


def found_at(
    yes: NDArray[np.floating], no: NDArray[np.floating], specificity: float
) -> float:
    """Share of yes above the lowest score that at least ``specificity`` of no do not exceed."""
    if not len(yes) or not len(no):
        return math.nan
    # The rounding keeps 0.95 * 20 at 19 whatever binary fractions make of it.
    rank = max(math.ceil(round(specificity * len(no), 9)), 1)
    return share(yes > np.sort(no)[rank - 1])


def kappa(one: NDArray[np.bool_], other: NDArray[np.bool_]) -> float:
    """Cohen's kappa (1960, Educ Psychol Meas 20:37) of two calls of the same cells.

    (observed - expected) / (1 - expected) agreement; NaN where both always say the same
    one thing, or there is nothing to compare.
    """
    if not one.size:
        return math.nan
    observed = float((one == other).mean())
    a, b = float(one.mean()), float(other.mean())
    expected = a * b + (1 - a) * (1 - b)
    return math.nan if expected >= 1 else (observed - expected) / (1 - expected)


def separation_text(name: str, found: Separation) -> str:
    """One separation in plain lines."""
    lines = [
        f"{name}: {found.yes} yes, {found.no} no, {found.left_out} left out; "
        f"AUC {found.auc:.3f}, found at 95 % specificity {found.found_at_95:.3f}"
    ]
    lines += [
        f"  {mark}: found {found.found[mark]:.3f}, false {found.false[mark]:.4f}, "
        f"kappa {found.kappa[mark]:.3f}"
        for mark in found.found
    ]
    return "\n".join(lines)
