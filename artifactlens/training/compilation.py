"""Compile a boosted forest whose trees each use one feature into step curves, exactly."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from artifactlens.curves import Curve
from artifactlens.errors import ModelError

if TYPE_CHECKING:
    from sklearn.ensemble import HistGradientBoostingClassifier

LARGEST_DIFFERENCE = 1e-9


@dataclass(frozen=True, slots=True)
class Compiled:
    """Base score and one curve per used feature index, in log-odds before calibration."""

    base: float
    curves: dict[int, Curve]

    def decision(self, features: NDArray[np.floating]) -> NDArray[np.float64]:
        """The forest's decision function, from the curves alone, shape (n_rows,)."""
        total = np.full(len(features), self.base)
        for column, curve in self.curves.items():
            total += curve(features[:, column])
        return total


def compile_forest(
    forest: HistGradientBoostingClassifier, check_on: NDArray[np.floating]
) -> Compiled:
    """Step curves that reproduce ``forest.decision_function``.

    Parameters
    ----------
    forest : fitted binary classifier, trained with ``interaction_cst="no_interactions"``
    check_on : array, shape (n_rows, n_features)
        Rows, NaN and ties included, on which both must agree.

    Raises
    ------
    ModelError
        If a tree uses two features, or both disagree by more than 1e-9 anywhere.
    """
    steps: dict[int, list[tuple[list[float], list[float], float]]] = {}
    base = float(np.ravel(forest._baseline_prediction)[0])
    for (tree,) in forest._predictors:
        nodes = tree.nodes
        inner = nodes[nodes["is_leaf"] == 0]
        used = np.unique(inner["feature_idx"])
        if len(used) > 1:
            raise ModelError(
                f"Only trees of one feature compile to curves; one uses {len(used)}.",
                'Train with interaction_cst="no_interactions".',
            )
        if not len(used):
            base += float(nodes[0]["value"])
            continue
        steps.setdefault(int(used[0]), []).append(_tree_steps(nodes))
    curves = {column: _sum_of_steps(parts) for column, parts in sorted(steps.items())}
    compiled = Compiled(base, curves)
    rows = np.asarray(check_on, dtype=np.float64)
    difference = np.abs(compiled.decision(rows) - forest.decision_function(rows)).max(
        initial=0
    )
    if not difference <= LARGEST_DIFFERENCE:
        raise ModelError(
            f"Curves and forest must agree to {LARGEST_DIFFERENCE:g}; they differ by "
            f"{difference:.3g}.",
            "Do not ship this model; check the version of scikit-learn.",
        )
    return compiled


def _tree_steps(nodes: NDArray[Any]) -> tuple[list[float], list[float], float]:
    """Edges, values between them, and the value of a missing measurement."""

    def walk(index: int) -> tuple[list[float], list[float]]:
        node = nodes[index]
        if node["is_leaf"]:
            return [], [float(node["value"])]
        left_edges, left_values = walk(int(node["left"]))
        right_edges, right_values = walk(int(node["right"]))
        edge = float(node["num_threshold"])
        return [*left_edges, edge, *right_edges], [*left_values, *right_values]

    index = 0
    while not nodes[index]["is_leaf"]:
        side = "left" if nodes[index]["missing_go_to_left"] else "right"
        index = int(nodes[index][side])
    edges, values = walk(0)
    return edges, values, float(nodes[index]["value"])


def _sum_of_steps(parts: list[tuple[list[float], list[float], float]]) -> Curve:
    edges = np.unique(np.concatenate([np.array(part[0]) for part in parts]))
    # A split on "missing or not" has its edge at infinity: no finite value lies beyond.
    finite = edges[np.isfinite(edges)]
    probes = np.append(finite, np.inf)
    values = np.zeros(len(probes))
    for tree_edges, tree_values, _ in parts:
        place = np.searchsorted(np.array(tree_edges), probes, side="left")
        values += np.array(tree_values)[place]
    return Curve(finite, values, float(sum(part[2] for part in parts)))
