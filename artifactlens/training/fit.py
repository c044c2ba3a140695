"""Fit, calibrate and set the operating points of the four heads."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from artifactlens.curves import logistic
from artifactlens.features.catalogue import FEATURE_NAMES
from artifactlens.kinds import KIND_NAMES
from artifactlens.training.compilation import Compiled, compile_forest
from artifactlens.training.evaluation.metrics import per_second
from artifactlens.training.examples import CLEAN, PRESENT, Examples

if TYPE_CHECKING:
    from sklearn.ensemble import HistGradientBoostingClassifier

HEAD_FEATURES: dict[str, tuple[str, ...]] = {
    "eye": (
        "swing", "swing_rise", "step_crest", "slow_power", "fast_share", "spread", "isolation",
        "front_swing", "front_swing_rise", "side_swing", "front_rhythm", "eye_swing",
        "eye_span", "eye_match",
    ),
    "muscle": (
        "step_crest", "step_alone", "burst", "burst_even", "burst_rise", "beta_power",
        "fast_power", "fast_alone", "fast_lead", "high_power", "fast_over_beta",
        "high_over_fast", "slope", "fast_share", "beta_peak", "isolation", "mains_ratio",
    ),
    "pop": (
        "swing", "swing_rise", "step", "step_rise", "step_crest", "step_alone", "step_stays",
        "slow_power", "slope", "fast_share", "spread", "isolation", "fast_rise",
    ),
    "mains": (
        "mains_steady", "mains_level", "mains_harmonic",
    ),
}  # fmt: skip
"""A head sees only what its kind acts on: what else differs in training is chance. Departures
from the median of three seconds are no eye movement by themselves, and continuous muscle does
not rise above a site's usual: both were left out after a look at the natural recording
``eegmmidb_s001``, at next to no cost in simulation."""

RISING: dict[str, tuple[str, ...]] = {
    "eye": ("front_swing", "eye_swing", "eye_span", "eye_match"),
    "muscle": (
        "slope", "fast_share", "fast_alone", "fast_lead", "fast_over_beta", "high_over_fast",
        "burst_rise",
    ),
    "pop": ("step", "step_rise", "step_crest", "step_alone"),
    "mains": ("mains_steady", "mains_level", "mains_harmonic"),
}  # fmt: skip
"""Features of which more can only speak for the kind: the score must not fall with them."""

PAIRS: dict[str, tuple[tuple[str, str], ...]] = {
    "eye": (),
    "muscle": (),
    "pop": (),
    "mains": (),
}
"""Features of one head that may act together beyond what each says alone."""

FOLDS = 5
"""People are dealt into so many folds; each is scored by heads that saw none of it."""

SURE_SPECIFICITY = {"eye": 0.995, "muscle": 0.995, "pop": 0.999, "mains": 0.999}
DOUBTFUL_SPECIFICITY = {"eye": 0.97, "muscle": 0.97, "pop": 0.995, "mains": 0.995}
"""Share of clean held-out seconds that stay unmarked at every site. The backgrounds hold
remains of real eye movements and muscle, so a stricter point for these two would be set by
mislabelled seconds; nothing like a pop or mains remains in them."""

LEAST_SURE, LEAST_DOUBTFUL = 0.5, 0.2


@dataclass(frozen=True, slots=True)
class FittedHead:
    """One head before it is written: curves, pairs, calibration and operating points."""

    kind: str
    compiled: Compiled
    slope: float
    offset: float
    sure: float
    doubtful: float

    def probability(self, features: NDArray[np.floating]) -> NDArray[np.float64]:
        """Calibrated probability of rows in the order of ``FEATURE_NAMES``."""
        return logistic(self.offset + self.slope * self.compiled.decision(features))


def fit_forest(
    kind: str,
    examples: Examples,
    *,
    interactions: bool = False,
    leave_out: frozenset[str] = frozenset(),
    seed: int = 0,
) -> tuple[HistGradientBoostingClassifier, NDArray[np.intp]]:
    """Boosted forest of one kind; returns it with the columns that it sees.

    ``interactions`` lets a tree use any features: the comparison, never shipped. Else a
    branch uses one feature, or two of ``PAIRS``.
    """
    from sklearn.ensemble import HistGradientBoostingClassifier

    truth = examples.truth[:, KIND_NAMES.index(kind)]
    known = truth >= 0
    # What none of the recordings carries, as a band beyond their low-pass, cannot be learnt.
    measured = np.asarray(np.isfinite(examples.features[known]).any(axis=0))
    names = [
        name
        for name in HEAD_FEATURES[kind]
        if name not in leave_out and measured[FEATURE_NAMES.index(name)]
    ]
    columns = np.array([FEATURE_NAMES.index(name) for name in names])
    together = [[k] for k in range(len(names))] + [
        [names.index(first), names.index(second)]
        for first, second in PAIRS[kind]
        if first in names and second in names
    ]
    forest = HistGradientBoostingClassifier(
        learning_rate=0.08,
        max_iter=300,
        max_leaf_nodes=8,
        min_samples_leaf=60,
        l2_regularization=5.0,
        max_bins=128,
        early_stopping=False,
        random_state=seed,
        interaction_cst=None if interactions else together,
        monotonic_cst=[int(name in RISING[kind]) for name in names],
    )
    forest.fit(
        examples.features[known][:, columns].astype(np.float64),
        truth[known],
    )
    return forest, columns


def deal(groups: NDArray[Any], folds: int = FOLDS) -> NDArray[np.intp]:
    """Fold of every row, 0 to ``folds - 1``; the rows of a person (or group) are all in one.

    People are dealt in the order of their names, so the folds depend on nothing else.
    """
    _, number = np.unique(groups, return_inverse=True)
    return np.asarray(number % folds)


@dataclass(frozen=True, slots=True)
class FoldForests:
    """One forest per fold, each made without the groups of its fold.

    ``fold_of`` maps a group (a person, as a rule) to its fold; ``forests`` maps a fold to
    its forest and the columns that it sees.
    """

    fold_of: dict[Any, int]
    forests: dict[int, tuple[HistGradientBoostingClassifier, NDArray[np.intp]]]

    def decision(
        self, features: NDArray[np.floating], groups: NDArray[Any]
    ) -> NDArray[np.float64]:
        """Log-odds of rows by the forest that saw nothing of their group, (n_rows,).

        A group that none of the forests saw is scored by the first.
        """
        fold = np.array([self.fold_of.get(group, 0) for group in groups.tolist()])
        decision = np.full(len(features), np.nan)
        for number, (forest, columns) in self.forests.items():
            rows = fold == number
            if rows.any():
                seen = features[rows][:, columns].astype(np.float64)
                decision[rows] = forest.decision_function(seen)
        return decision


def fit_folds(
    kind: str,
    examples: Examples,
    *,
    interactions: bool = False,
    groups: NDArray[Any] | None = None,
    folds: int = FOLDS,
    seed: int = 0,
) -> FoldForests:
    """A forest per fold; ``groups`` (n_rows,) stay together: people, if not given."""
    of_row = examples.person if groups is None else groups
    fold = deal(of_row, folds)
    forests = {
        int(number): fit_forest(
            kind, examples.subset(fold != number), interactions=interactions, seed=seed
        )
        for number in np.unique(fold)
    }
    names, first = np.unique(of_row, return_index=True)
    return FoldForests(
        dict(zip(names.tolist(), fold[first].tolist(), strict=True)), forests
    )


def fit_head(
    kind: str, examples: Examples, held_out: NDArray[np.float64], seed: int = 0
) -> FittedHead:
    """Fit on everybody; calibrate and set operating points on held-out scores.

    Parameters
    ----------
    kind : str
    examples : Examples
    held_out : array, shape (n_rows,)
        Scores by :class:`FoldForests`; NaN where a row must not set calibration and
        operating points.
    """
    forest, columns = fit_forest(kind, examples, seed=seed)
    check = examples.features[::7][:, columns]
    compiled = compile_forest(forest, _with_missing(check)).on_columns(columns)
    used = np.isfinite(held_out)
    setting, decision = examples.subset(used), held_out[used]
    truth = setting.truth[:, KIND_NAMES.index(kind)]
    slope, offset = calibrate(decision[truth >= 0], truth[truth >= 0])
    probability = logistic(offset + slope * decision)
    worst = clean_seconds(setting, kind, probability)
    sure = _threshold(worst, SURE_SPECIFICITY[kind], LEAST_SURE)
    doubtful = min(_threshold(worst, DOUBTFUL_SPECIFICITY[kind], LEAST_DOUBTFUL), sure)
    return FittedHead(kind, compiled, slope, offset, sure, doubtful)


def _with_missing(rows: NDArray[np.floating]) -> NDArray[np.float64]:
    """Rows plus copies with one feature missing in turn: NaN must compile exactly too."""
    copies = rows[: 20 * rows.shape[1]].astype(np.float64)
    index = np.arange(len(copies))
    copies[index, index % rows.shape[1]] = np.nan
    return np.concatenate([rows.astype(np.float64), copies])


def calibrate(
    decision: NDArray[np.float64], truth: NDArray[np.int8]
) -> tuple[float, float]:
    """Slope and offset of a logistic fit to held-out scores (Platt 1999).

    Platt's smoothed targets keep the slope finite where both classes separate.
    """
    from scipy.optimize import minimize

    n_present, n_clean = int((truth == PRESENT).sum()), int((truth == CLEAN).sum())
    target = np.where(
        truth == PRESENT, (n_present + 1) / (n_present + 2), 1 / (n_clean + 2)
    )

    def loss(parameters: NDArray[np.float64]) -> float:
        score = parameters[0] * decision + parameters[1]
        return float(np.mean(np.logaddexp(0, score) - target * score))

    fitted = minimize(
        loss,
        np.array([1.0, 0.0]),
        method="Nelder-Mead",
        options={"xatol": 1e-6, "fatol": 1e-10, "maxiter": 2000},
    )
    slope, offset = (float(value) for value in fitted.x)
    return max(slope, 1e-3), offset


def clean_seconds(
    examples: Examples, kind: str, probability: NDArray[np.float64]
) -> NDArray[np.float64]:
    """Highest probability over the sites of every second that is clean of the kind."""
    seconds = per_second(examples, kind, probability)
    return seconds.highest[seconds.truth == CLEAN]


def _threshold(worst: NDArray[np.float64], specificity: float, least: float) -> float:
    limit = float(np.quantile(worst, specificity)) if len(worst) else 0.5
    return float(np.clip(limit + 1e-6, least, 0.999))


def model_body(
    heads: list[FittedHead], name: str, training: dict[str, Any]
) -> dict[str, Any]:
    """The model as plain JSON values; floats keep every digit."""
    from artifactlens.curves import MODEL_VERSION
    from artifactlens.features.catalogue import feature_table_sha256

    return {
        "model_version": MODEL_VERSION,
        "name": name,
        "feature_table_sha256": feature_table_sha256(),
        "training": training,
        "heads": {
            head.kind: {
                "base": head.compiled.base,
                "calibration": {"slope": head.slope, "offset": head.offset},
                "sure": head.sure,
                "doubtful": head.doubtful,
                "curves": {
                    FEATURE_NAMES[column]: {
                        "edges": curve.edges.tolist(),
                        "values": curve.values.tolist(),
                        "missing": curve.missing,
                    }
                    for column, curve in head.compiled.curves.items()
                },
                "pairs": [
                    {
                        "features": [FEATURE_NAMES[first], FEATURE_NAMES[second]],
                        "edges": [table.rows.tolist(), table.columns.tolist()],
                        "values": table.values.tolist(),
                    }
                    for (first, second), table in head.compiled.pairs.items()
                ],
            }
            for head in heads
        },
    }
