"""How good scores are, per kind, as a table."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from artifactlens.kinds import KIND_NAMES
from artifactlens.training.examples import CLEAN, PRESENT, Examples
from artifactlens.training.fit import clean_seconds


def sensitivity_at(
    score: NDArray[np.float64], truth: NDArray[np.int8], specificity: float
) -> float:
    """Share of present cells above the score that ``specificity`` of clean cells stay under."""
    limit = np.quantile(score[truth == CLEAN], specificity)
    return float((score[truth == PRESENT] > limit).mean())


def check_table(
    examples: Examples,
    scores: dict[str, NDArray[np.float64]],
    marks: dict[str, tuple[float, float]],
    other: dict[str, NDArray[np.float64]] | None = None,
) -> str:
    """Per kind: cells, AUC, sensitivity at 95 and 99 % specificity, flagged clean minutes.

    Parameters
    ----------
    examples : Examples
    scores : dict of array, shape (n_rows,)
        Calibrated probability per kind.
    marks : dict of (sure, doubtful)
    other : dict of array, shape (n_rows,), optional
        Scores of the full forest, for its AUC beside.
    """
    from sklearn.metrics import roc_auc_score

    lines = [
        f"{'kind':7s}{'present':>9s}{'clean':>9s}{'AUC':>7s}{'full AUC':>9s}"
        f"{'sens@95':>9s}{'sens@99':>9s}"
        f"{'clean s':>9s}{'sure/min':>9s}{'doubt/min':>10s}{'sens sure':>10s}"
    ]
    for number, kind in enumerate(KIND_NAMES):
        truth = examples.truth[:, number]
        known = truth >= 0
        score = scores[kind]
        auc = roc_auc_score(truth[known], score[known])
        full = (
            f"{roc_auc_score(truth[known], other[kind][known]):.4f}"
            if other and kind in other
            else "-"
        )
        worst = clean_seconds(examples, kind, score)
        sure, doubtful = marks[kind]
        present = truth == PRESENT
        lines.append(
            f"{kind:7s}{present.sum():9d}{(truth == CLEAN).sum():9d}{auc:7.4f}{full:>9s}"
            f"{sensitivity_at(score, truth, 0.95):9.3f}{sensitivity_at(score, truth, 0.99):9.3f}"
            f"{len(worst):9d}{60 * (worst >= sure).mean():9.3f}"
            f"{60 * (worst >= doubtful).mean():10.3f}{(score[present] >= sure).mean():10.3f}"
        )
    return "\n".join(lines)
