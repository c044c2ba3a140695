"""What is said of the scores of one kind: of cells, and of seconds that are clean."""

from __future__ import annotations

from dataclasses import asdict, dataclass
from typing import NamedTuple

import numpy as np
from numpy.typing import ArrayLike, NDArray

from artifactlens.errors import OptionError
from artifactlens.features.amplitude import SMALL_UV
from artifactlens.features.catalogue import FEATURE_NAMES
from artifactlens.kinds import KIND_NAMES
from artifactlens.training.examples import CLEAN, PRESENT, UNKNOWN, Examples

Scores = NDArray[np.floating]
Truth = NDArray[np.int8]

CALIBRATION_BINS = 15
SAME_USUAL_DB = 1e-3
"""What rounding of float32 may do to a usual value; two recordings differ by more."""


@dataclass(frozen=True, slots=True)
class Ranking:
    """How well scores of any unit tell present from clean cells of one kind.

    ``sensitivity_95`` is the share of present cells above the lowest limit that leaves at
    least 95 % of the clean cells of the same set unmarked. ``average_precision`` depends on
    ``prevalence``, the share of present among the known cells. None where a class that a
    measure needs has no cell.
    """

    n_present: int
    n_clean: int
    prevalence: float | None
    auc: float | None
    average_precision: float | None
    sensitivity_95: float | None
    sensitivity_99: float | None


@dataclass(frozen=True, slots=True)
class Measures(Ranking):
    """The ranking, and what calibrated probabilities and operating points add.

    A cell is marked from the operating point on (>=). Balanced accuracy is the mean of
    sensitivity and specificity. ``brier`` is the mean squared difference of probability and
    truth (Brier 1950). ``calibration_error`` is the expected calibration error: cells in 15
    bins of equal mass (equal scores share a bin), mean over cells of
    |mean probability - share present| of their bin (Naeini et al. 2015).
    """

    sensitivity_sure: float | None
    specificity_sure: float | None
    balanced_accuracy_sure: float | None
    sensitivity_doubtful: float | None
    specificity_doubtful: float | None
    balanced_accuracy_doubtful: float | None
    brier: float | None
    calibration_error: float | None


@dataclass(frozen=True, slots=True)
class Seconds:
    """One row per second, in order of ``second``; every array has shape (n_seconds,).

    ``truth`` is present where any site has it, clean where every site is, else unknown.
    ``highest`` is the highest score over the sites, NaN where none was judged.
    ``recording`` numbers the recordings from 0.
    """

    second: NDArray[np.int64]
    person: NDArray[np.str_]
    recording: NDArray[np.int64]
    look_alike: NDArray[np.str_]
    truth: Truth
    highest: NDArray[np.float64]


class PersonCounts(NamedTuple):
    """What is counted on each person's clean seconds; every array has shape (n_people,)."""

    person: NDArray[np.str_]
    seconds: NDArray[np.int64]
    flags_sure: NDArray[np.int64]
    flags_doubtful: NDArray[np.int64]
    seconds_sure: NDArray[np.int64]
    seconds_doubtful: NDArray[np.int64]


@dataclass(frozen=True, slots=True)
class CleanRate:
    """False marks on ``seconds`` that are clean of the kind at every site.

    Per hour of clean record; None where there is none. A run of marked seconds of one
    recording is one flag, whatever its sites.
    """

    seconds: int
    flags_sure: float | None
    flags_doubtful: float | None
    seconds_sure: float | None
    seconds_doubtful: float | None


def known_cells(score: Scores, truth: Truth) -> NDArray[np.bool_]:
    """Cells that count: truth known and the kind judged, shape (n_rows,).

    Raises
    ------
    OptionError
        If there is not one score per cell.
    """
    if np.shape(score) != np.shape(truth):
        raise OptionError(
            f"One score per cell is needed; there are scores of shape {np.shape(score)} "
            f"for {len(truth)} cells.",
            "Give the scores of exactly these examples.",
        )
    return np.asarray((truth != UNKNOWN) & ~np.isnan(score), dtype=bool)


def split_scores(score: Scores, truth: Truth) -> tuple[Scores, Scores]:
    """Scores of the present and of the clean cells; unknown and not judged are dropped."""
    known = known_cells(score, truth)
    return score[known & (truth == PRESENT)], score[known & (truth == CLEAN)]


def rank_scores(score: Scores, truth: Truth) -> Ranking:
    """Measures of order alone, for scores of any unit.

    Parameters
    ----------
    score : array, shape (n_rows,)
        NaN where the kind was not judged.
    truth : array, shape (n_rows,)
        1 present, 0 clean, -1 unknown.
    """
    from sklearn.metrics import average_precision_score, roc_auc_score

    present, clean = split_scores(score, truth)
    n_known = len(present) + len(clean)
    prevalence = len(present) / n_known if n_known else None
    if not len(present) or not len(clean):
        return Ranking(len(present), len(clean), prevalence, None, None, None, None)
    both = np.concatenate([present, clean])
    labels = np.repeat([1, 0], [len(present), len(clean)])
    found = sensitivity_at(present, clean, [0.95, 0.99])
    return Ranking(
        n_present=len(present),
        n_clean=len(clean),
        prevalence=prevalence,
        auc=float(roc_auc_score(labels, both)),
        average_precision=float(average_precision_score(labels, both)),
        sensitivity_95=float(found[0]),
        sensitivity_99=float(found[1]),
    )


def measure_scores(score: Scores, truth: Truth, sure: float, doubtful: float) -> Measures:
    """All measures of calibrated probabilities of one kind.

    Parameters
    ----------
    score, truth
        As for :func:`rank_scores`.
    sure, doubtful : float
        The operating points, as probabilities.
    """
    from sklearn.metrics import brier_score_loss

    ranking = rank_scores(score, truth)
    present, clean = split_scores(score, truth)
    brier = error = None
    if len(present) and len(clean):
        both = np.concatenate([present, clean])
        labels = np.repeat([1, 0], [len(present), len(clean)])
        brier = float(brier_score_loss(labels, both))
        error = calibration_error(both, labels.astype(np.int8))
    at_sure = marked_shares(present, clean, sure)
    at_doubtful = marked_shares(present, clean, doubtful)
    return Measures(
        **asdict(ranking),
        sensitivity_sure=at_sure[0],
        specificity_sure=at_sure[1],
        balanced_accuracy_sure=_mean(*at_sure),
        sensitivity_doubtful=at_doubtful[0],
        specificity_doubtful=at_doubtful[1],
        balanced_accuracy_doubtful=_mean(*at_doubtful),
        brier=brier,
        calibration_error=error,
    )


def marked_shares(
    present: Scores, clean: Scores, limit: float
) -> tuple[float | None, float | None]:
    """Sensitivity and specificity when cells are marked from ``limit`` on."""
    return (
        float((present >= limit).mean()) if len(present) else None,
        float((clean < limit).mean()) if len(clean) else None,
    )


def _mean(first: float | None, second: float | None) -> float | None:
    return None if first is None or second is None else (first + second) / 2


def sensitivity_at(
    present: Scores, clean: Scores, specificity: ArrayLike
) -> NDArray[np.float64]:
    """Share of present cells above the lowest limit that leaves so many clean unmarked.

    The limit is the smallest clean score that at least ``specificity`` of the clean scores
    do not exceed (the inverse of their distribution function, no interpolation), and only
    cells *above* it are found: ties with clean cells never help.

    Parameters
    ----------
    present, clean : array, shape (n,), at least one cell each
    specificity : array, shape (n_points,), 0 to 1

    Returns
    -------
    array, shape (n_points,)
    """
    ordered = np.sort(clean)
    # A share such as 0.95 * 20 must count as 19, not as 19.000000000000004.
    rank = np.ceil(np.asarray(specificity) * len(ordered) - 1e-9).astype(np.int64)
    limit = ordered[np.clip(rank - 1, 0, len(ordered) - 1)]
    below = np.searchsorted(np.sort(present), limit, side="right")
    return np.asarray((len(present) - below) / len(present), dtype=np.float64)


def calibration_bins(
    score: Scores, n_bins: int = CALIBRATION_BINS
) -> tuple[NDArray[np.intp], int]:
    """Bin of every cell, bins of equal mass; equal scores share one.

    Returns
    -------
    array, shape (n_rows,), and the number of bins
        Fewer than ``n_bins`` where many scores are equal.
    """
    ordered = np.sort(score)
    last = -(-np.arange(1, n_bins) * len(ordered) // n_bins) - 1
    edges = np.unique(ordered[np.clip(last, 0, None)])
    place = np.searchsorted(edges, score, side="left")
    used, bins = np.unique(place, return_inverse=True)
    return bins.ravel(), len(used)


def calibration_error(score: Scores, truth: Truth) -> float:
    """Expected calibration error in bins of equal mass; see :class:`Measures`.

    Parameters
    ----------
    score : array, shape (n_rows,), at least one row
        Probabilities.
    truth : array, shape (n_rows,)
        1 present, 0 clean.
    """
    bins, n_bins = calibration_bins(score)
    # Of a bin, count * |mean score - share present| is |sum of (score - truth)|.
    excess = np.bincount(bins, weights=np.asarray(score, float) - truth, minlength=n_bins)
    return float(np.abs(excess).sum() / len(score))


def per_second(examples: Examples, kind: str, score: Scores) -> Seconds:
    """Truth and highest score of every second.

    Parameters
    ----------
    examples : Examples
    kind : str
    score : array, shape (n_rows,)
        NaN where the kind was not judged.
    """
    truth = examples.truth[:, KIND_NAMES.index(kind)]
    known_cells(score, truth)
    order, starts = _second_starts(examples)
    present = np.logical_or.reduceat((truth == PRESENT)[order], starts)
    clean = np.logical_and.reduceat((truth == CLEAN)[order], starts)
    first = order[starts]
    return Seconds(
        second=examples.second[first],
        person=examples.person[first],
        recording=recordings_of(examples),
        look_alike=examples.look_alike[first],
        truth=np.where(present, PRESENT, np.where(clean, CLEAN, UNKNOWN)).astype(np.int8),
        highest=np.fmax.reduceat(np.asarray(score, dtype=np.float64)[order], starts),
    )


def _second_starts(examples: Examples) -> tuple[NDArray[np.intp], NDArray[np.intp]]:
    order = np.argsort(examples.second, kind="stable")
    starts = np.flatnonzero(np.diff(examples.second[order], prepend=-1))
    return order, starts


def recordings_of(examples: Examples) -> NDArray[np.int64]:
    """Number of the recording of every second, shape (n_seconds,), in order of second.

    ``Examples`` keep no such number. A recording ends where person, origin or condition
    change, and where no site can have kept its usual swing (the feature ``swing`` less
    ``swing_rise``, one value per recording and site): then both the lowest and the highest
    over the sites are others. Gaps within a recording are not known here.
    """
    order, starts = _second_starts(examples)
    if not len(starts):
        return np.zeros(0, dtype=np.int64)
    first = order[starts]
    changes = np.zeros(len(first), dtype=bool)
    for words in (examples.person, examples.origin, examples.condition):
        changes[1:] |= words[first[1:]] != words[first[:-1]]
    swing = examples.features[order, FEATURE_NAMES.index("swing")].astype(np.float64)
    rise = examples.features[order, FEATURE_NAMES.index("swing_rise")].astype(np.float64)
    usual = 20 * np.log10(np.maximum(swing, SMALL_UV)) - rise
    # NaN compares as no difference: what was not measured tells nothing.
    lowest, highest = np.fmin.reduceat(usual, starts), np.fmax.reduceat(usual, starts)
    changes[1:] |= (np.abs(np.diff(lowest)) > SAME_USUAL_DB) & (
        np.abs(np.diff(highest)) > SAME_USUAL_DB
    )
    return np.cumsum(changes).astype(np.int64)


def count_clean(seconds: Seconds, sure: float, doubtful: float) -> PersonCounts:
    """Clean, marked and flagged seconds of every person."""
    judged = ~np.isnan(seconds.highest)
    counted = (seconds.truth == CLEAN) & judged
    people, who = np.unique(seconds.person, return_inverse=True)
    who = who.ravel()

    def per_person(chosen: NDArray[np.bool_]) -> NDArray[np.int64]:
        return np.bincount(who[chosen], minlength=len(people)).astype(np.int64)

    marked = [counted & (seconds.highest >= limit) for limit in (sure, doubtful)]
    begins = []
    for mark in marked:
        goes_on = np.zeros(len(mark), dtype=bool)
        goes_on[1:] = (
            mark[1:]
            & mark[:-1]
            & (np.diff(seconds.second) == 1)
            & (np.diff(seconds.recording) == 0)
        )
        begins.append(mark & ~goes_on)
    return PersonCounts(
        people,
        per_person(counted),
        per_person(begins[0]),
        per_person(begins[1]),
        per_person(marked[0]),
        per_person(marked[1]),
    )


def clean_rate(
    examples: Examples, kind: str, score: Scores, sure: float, doubtful: float
) -> CleanRate:
    """Flags and marked seconds per hour of record that is clean at every site."""
    return rate_of(count_clean(per_second(examples, kind, score), sure, doubtful))


def rate_of(counts: PersonCounts) -> CleanRate:
    """Counts of all people together, per hour."""
    seconds = int(counts.seconds.sum())
    per_hour = [
        3600 * int(count.sum()) / seconds if seconds else None for count in counts[2:]
    ]
    return CleanRate(seconds, *per_hour)
