"""Bootstrap over people: how far measures would move had others been recorded.

Cells of one person are alike, so people are drawn with replacement and bring all their
cells (Efron and Tibshirani 1993, chapter 8). Drawing a person twice is counting the cells
double: everything is sorted once, and a resample is a reweighting.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from artifactlens.errors import OptionError
from artifactlens.kinds import KIND_NAMES
from artifactlens.training.evaluation.metrics import (
    CleanRate,
    Measures,
    PersonCounts,
    Scores,
    Truth,
    calibration_bins,
    count_clean,
    known_cells,
    measure_scores,
    per_second,
    rank_scores,
    rate_of,
)
from artifactlens.training.examples import CLEAN, PRESENT, Examples

Array = NDArray[np.float64]

FEWEST_PEOPLE = 3
LEAST_USABLE = 0.9
"""Share of resamples in which a measure must exist (both classes drawn) for an interval."""

RANKED = ("auc", "average_precision", "sensitivity_95", "sensitivity_99")
RATES = ("flags_sure", "flags_doubtful", "seconds_sure", "seconds_doubtful")


class Interval(NamedTuple):
    """The middle 95 % of the resamples (percentile interval)."""

    low: float
    high: float


Intervals = dict[str, Interval | None]
"""Per name of a measure; None where too many resamples lack one of the classes."""


@dataclass(frozen=True, slots=True)
class Evaluation:
    """All that a row of the main table says of one kind.

    ``interval`` and ``clean_interval`` are None with fewer than three people; their keys
    are field names of ``measures`` and ``clean``. ``n_people`` have known cells,
    ``n_clean_people`` clean seconds.
    """

    kind: str
    sure: float
    doubtful: float
    n_people: int
    n_clean_people: int
    measures: Measures
    interval: Intervals | None
    clean: CleanRate
    clean_interval: Intervals | None


def evaluate_kind(
    examples: Examples,
    kind: str,
    score: Scores,
    sure: float,
    doubtful: float,
    *,
    resamples: int = 300,
    seed: int = 0,
) -> Evaluation:
    """Measures of cells and of clean seconds with their intervals.

    Parameters
    ----------
    examples : Examples
    kind : str
    score : array, shape (n_rows,)
        Calibrated probability, NaN where the kind was not judged.
    sure, doubtful : float
        The operating points, as probabilities.
    resamples, seed : int
    """
    truth = examples.truth[:, KIND_NAMES.index(kind)]
    counts = count_clean(per_second(examples, kind, score), sure, doubtful)
    with_cells = np.unique(examples.person[known_cells(score, truth)])
    return Evaluation(
        kind=kind,
        sure=sure,
        doubtful=doubtful,
        n_people=len(with_cells),
        n_clean_people=int((counts.seconds > 0).sum()),
        measures=measure_scores(score, truth, sure, doubtful),
        interval=bootstrap_measures(
            score, truth, examples.person, sure, doubtful, resamples=resamples, seed=seed
        ),
        clean=rate_of(counts),
        clean_interval=bootstrap_rate(counts, resamples=resamples, seed=seed),
    )


class RankedCells:
    """Cells of one kind, sorted once so that people can be weighted many times.

    Parameters
    ----------
    score : array, shape (n_cells,)
    truth : array, shape (n_cells,)
        1 present, 0 clean; at least one of each.
    who : array of int, shape (n_cells,)
        Index of the cell's person.
    n_people : int
    """

    def __init__(
        self, score: Scores, truth: Truth, who: NDArray[np.intp], n_people: int
    ) -> None:
        order = np.argsort(-score, kind="stable")
        descending, is_present = score[order], truth[order] == PRESENT
        present, clean = descending[is_present], descending[~is_present]
        self._present_who, self._clean_who = who[order][is_present], who[order][~is_present]
        # Only scores of present cells are steps of the precision-recall curve.
        last = np.flatnonzero(np.append(present[1:] != present[:-1], True))
        self._group_end = last
        above = np.searchsorted(-clean, -present, side="left")
        self._clean_to_group = np.searchsorted(-clean, -present[last], side="right")
        # Present cells strictly above each clean score, for limits at clean scores.
        self._present_above = np.searchsorted(-present, -clean, side="left")
        not_below = self._clean_to_group[np.searchsorted(last, np.arange(len(present)))]
        self._wins = self._pairs_won(above, not_below, n_people)

    def _pairs_won(
        self, above: NDArray[np.intp], not_below: NDArray[np.intp], n_people: int
    ) -> Array:
        """Pairs (present of p, clean of q) in the right order, ties half: (n_people, n_people).

        The AUC is the share of such pairs (Hanley and McNeil 1982): bilinear in the weights.
        ``above`` and ``not_below`` count clean cells so placed to each present cell.
        """
        wins = np.empty((n_people, n_people))
        for other in range(n_people):
            theirs = np.append(0, np.cumsum(self._clean_who == other))
            won = theirs[-1] - 0.5 * (theirs[above] + theirs[not_below])
            wins[:, other] = np.bincount(self._present_who, won, minlength=n_people)
        return wins

    def auc(self, weights: Array) -> Array:
        """Area under the ROC curve for every row of ``weights`` (n_resamples, n_people)."""
        n_people = weights.shape[1]
        n_present = weights @ np.bincount(self._present_who, minlength=n_people)
        n_clean = weights @ np.bincount(self._clean_who, minlength=n_people)
        won = np.einsum("rp,pq,rq->r", weights, self._wins, weights)
        with np.errstate(invalid="ignore", divide="ignore"):
            return np.asarray(won / (n_present * n_clean))

    def average_precision(self, weights: Array) -> float:
        """Mean precision over the present cells, ``weights`` (n_people,); NaN if none."""
        found = np.cumsum(weights[self._present_who])[self._group_end]
        clean = np.append(0.0, np.cumsum(weights[self._clean_who]))[self._clean_to_group]
        if not found[-1]:
            return float("nan")
        marked = np.maximum(found + clean, np.finfo(float).tiny)
        return float(np.sum(np.diff(found, prepend=0.0) * found / marked) / found[-1])

    def sensitivity_at(self, weights: Array, specificity: Array) -> Array:
        """As ``metrics.sensitivity_at`` with ``weights`` (n_people,); NaN without a class."""
        found = np.append(0.0, np.cumsum(weights[self._present_who]))
        clean = np.cumsum(weights[self._clean_who])
        if not found[-1] or not clean[-1]:
            return np.full(len(specificity), np.nan)
        # Clean weight that may lie above the limit; the limit is the first beyond it.
        spare = clean[-1] - np.ceil(specificity * clean[-1] - 1e-9)
        at = np.searchsorted(clean, spare, side="right")
        return np.asarray(found[self._present_above[at]] / found[-1])


def draw_people(n_people: int, resamples: int, seed: int) -> Array:
    """How often each person is drawn, shape (resamples, n_people); rows sum to n_people.

    Raises
    ------
    OptionError
        If there are too few resamples for 2.5 % at either end.
    """
    if resamples < 40:
        raise OptionError(
            f"A 95 % interval needs 40 resamples or more; given were {resamples}.",
            "Take 200 to 500.",
        )
    rng = np.random.default_rng(seed)
    return rng.multinomial(n_people, np.full(n_people, 1 / n_people), resamples).astype(
        float
    )


def bootstrap_measures(
    score: Scores,
    truth: Truth,
    person: NDArray[np.str_],
    sure: float,
    doubtful: float,
    *,
    resamples: int = 300,
    seed: int = 0,
) -> Intervals | None:
    """Intervals of all measures but the counts; None with fewer than three people.

    The bins of the calibration error stay those of the whole set.

    Parameters
    ----------
    score, truth : array, shape (n_rows,)
        As for ``metrics.measure_scores``.
    person : array, shape (n_rows,)
    sure, doubtful : float
    resamples, seed : int
    """
    known = known_cells(score, truth)
    people, who = np.unique(person[known], return_inverse=True)
    if len(people) < FEWEST_PEOPLE:
        return None
    weights = draw_people(len(people), resamples, seed)
    found = _resampled(
        np.asarray(score[known], dtype=np.float64),
        truth[known],
        who.ravel(),
        weights,
        (sure, doubtful),
    )
    return {name: _middle(values) for name, values in found.items()}


def _resampled(
    score: Array,
    truth: Truth,
    who: NDArray[np.intp],
    weights: Array,
    limits: tuple[float, float],
) -> dict[str, Array]:
    """Every measure for every row of ``weights``, NaN where a class was not drawn."""
    n_people = weights.shape[1]

    def total(values: NDArray[np.generic]) -> Array:
        return weights @ np.bincount(who, weights=values, minlength=n_people)

    nothing = np.full(len(weights), np.nan)
    n_present, n_clean = total(truth == PRESENT), total(truth == CLEAN)
    both = np.where((n_present > 0) & (n_clean > 0), 1.0, np.nan)
    found: dict[str, Array] = {"prevalence": n_present / (n_present + n_clean)}
    if (truth == PRESENT).any() and (truth == CLEAN).any():
        cells = RankedCells(score, truth, who, n_people)
        at = np.array(
            [cells.sensitivity_at(row, np.array([0.95, 0.99])) for row in weights]
        )
        precision = np.array([cells.average_precision(row) for row in weights])
        found |= dict(
            zip(RANKED, (cells.auc(weights), both * precision, *at.T), strict=True)
        )
    else:
        found |= dict.fromkeys(RANKED, nothing)
    with np.errstate(invalid="ignore"):
        for name, limit in zip(("sure", "doubtful"), limits, strict=True):
            hit = total((truth == PRESENT) & (score >= limit)) / n_present
            kept = total((truth == CLEAN) & (score < limit)) / n_clean
            found[f"sensitivity_{name}"], found[f"specificity_{name}"] = hit, kept
            found[f"balanced_accuracy_{name}"] = (hit + kept) / 2
    mass = n_present + n_clean
    found["brier"] = both * total((score - truth) ** 2) / mass
    bins, n_bins = calibration_bins(score)
    excess = np.bincount(
        who * n_bins + bins, weights=score - truth, minlength=n_people * n_bins
    ).reshape(n_people, n_bins)
    found["calibration_error"] = both * np.abs(weights @ excess).sum(axis=1) / mass
    return found


def bootstrap_rate(
    counts: PersonCounts, *, resamples: int = 300, seed: int = 0
) -> Intervals | None:
    """Intervals of what :class:`CleanRate` gives per hour; None below three people."""
    some = counts.seconds > 0
    if some.sum() < FEWEST_PEOPLE:
        return None
    weights = draw_people(int(some.sum()), resamples, seed)
    seconds = weights @ counts.seconds[some]
    return {
        name: _middle(3600 * (weights @ getattr(counts, name)[some]) / seconds)
        for name in RATES
    }


def auc_difference(
    first: Scores,
    second: Scores,
    truth: Truth,
    person: NDArray[np.str_],
    *,
    resamples: int = 300,
    seed: int = 0,
) -> tuple[float | None, Interval | None]:
    """AUC of ``first`` less AUC of ``second`` on cells that both judge, same resamples.

    The interval is None with fewer than three people.
    """
    shared = known_cells(first, truth) & known_cells(second, truth)
    truth = truth[shared]
    one, other = (
        rank_scores(first[shared], truth).auc,
        rank_scores(second[shared], truth).auc,
    )
    if one is None or other is None:
        return None, None
    people, who = np.unique(person[shared], return_inverse=True)
    if len(people) < FEWEST_PEOPLE:
        return one - other, None
    weights = draw_people(len(people), resamples, seed)
    areas = [
        RankedCells(np.asarray(score[shared], float), truth, who.ravel(), len(people)).auc(
            weights
        )
        for score in (first, second)
    ]
    return one - other, _middle(areas[0] - areas[1])


def _middle(values: Array) -> Interval | None:
    usable = values[np.isfinite(values)]
    if len(usable) < LEAST_USABLE * len(values):
        return None
    low, high = np.quantile(usable, [0.025, 0.975])
    return Interval(float(low), float(high))
