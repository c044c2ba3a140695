"""What a family of features is worth: the forest fitted again without it."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np

from artifactlens.features.catalogue import FEATURES
from artifactlens.kinds import KIND_NAMES
from artifactlens.training.evaluation.metrics import rank_scores
from artifactlens.training.examples import Examples
from artifactlens.training.fit import HEAD_FEATURES, fit_forest

FAMILIES = (
    "field spread", "frontal polarity", "spectral slope", "line frequency", "isolation",
    "muscle power", "steepness", "amplitude",
)  # fmt: skip
"""The six families of the model card, the steepness of steps, and what remains."""


class Ablation(NamedTuple):
    """One forest fitted without ``left_out``.

    ``auc`` is that of the validation cells; None where nothing was left out because the
    head does not see the family (the forest is then the full one), or where the validation
    set lacks a class.
    """

    kind: str
    family: str | None
    left_out: tuple[str, ...]
    auc: float | None


def features_of(family: str) -> tuple[str, ...]:
    """Names of the features of a family; every feature belongs to exactly one.

    Steepness holds the ``step`` features, whatever family the feature table shows them in.
    """
    return tuple(
        feature.name
        for feature in FEATURES
        if family == ("steepness" if feature.name.startswith("step") else feature.family)
    )


def ablate(
    kind: str,
    training: Examples,
    validation: Examples,
    family: str | None,
    *,
    seed: int = 0,
) -> Ablation | None:
    """Fit the additive forest without a family and rank the validation cells with it.

    Parameters
    ----------
    kind : str
    training, validation : Examples
        Of different people.
    family : str or None
        One of ``FAMILIES``; None leaves nothing out: the AUC to compare with.
    seed : int

    Returns
    -------
    Ablation or None
        None if the head sees nothing but this family.
    """
    seen = HEAD_FEATURES[kind]
    names = () if family is None else features_of(family)
    left_out = tuple(name for name in seen if name in names)
    if len(left_out) == len(seen):
        return None
    if family is not None and not left_out:
        return Ablation(kind, family, (), None)
    forest, columns = fit_forest(kind, training, leave_out=frozenset(left_out), seed=seed)
    score = forest.decision_function(validation.features[:, columns].astype(np.float64))
    truth = validation.truth[:, KIND_NAMES.index(kind)]
    return Ablation(kind, family, left_out, rank_scores(score, truth).auc)
