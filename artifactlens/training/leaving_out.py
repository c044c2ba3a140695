"""Models that saw nothing of somebody, to be checked on that somebody."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from artifactlens.curves import Model, model_from
from artifactlens.kinds import KIND_NAMES
from artifactlens.training.fit import FittedHead, fit_folds, fit_head, model_body
from artifactlens.training.gathering import Gathered

LABELLED_KINDS = ("eye", "muscle")
"""Kinds with real labels: the others are learnt from simulation alone."""

FOLDS = 2


def heads_without(
    gathered: Gathered, rows: NDArray[np.bool_], kinds: tuple[str, ...] = LABELLED_KINDS
) -> dict[str, FittedHead]:
    """Heads made from some rows only, calibration and operating points included.

    Parameters
    ----------
    gathered : Gathered
    rows : array, shape (n_rows,), bool
        What they may see. Where none of them may set calibration and operating points, all
        do.
    kinds : tuple of str
    """
    examples, setting = gathered.examples.subset(rows), gathered.setting[rows]
    if not setting.any():
        setting = np.ones(len(examples), dtype=bool)
    # With one person alone nobody is left to hold out: seconds are dealt instead.
    alone = len(np.unique(examples.person)) == 1
    groups = examples.second if alone else examples.person
    heads = {}
    for kind in kinds:
        forests = fit_folds(kind, examples, groups=groups, folds=FOLDS)
        decision = forests.decision(examples.features, groups)
        heads[kind] = fit_head(kind, examples, np.where(setting, decision, np.nan))
    return heads


def as_model(heads: dict[str, FittedHead]) -> Model:
    """The four heads as the tool uses them."""
    return model_from(
        model_body([heads[kind] for kind in KIND_NAMES], "left-out", {}), "left-out"
    )
