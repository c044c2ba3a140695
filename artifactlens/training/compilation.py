"""Compile a boosted forest into step curves and tables of pairs, exactly."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

from artifactlens.curves import Curve, Table, step_of
from artifactlens.errors import ModelError
from artifactlens.training.purification import purify

if TYPE_CHECKING:
    from sklearn.ensemble import HistGradientBoostingClassifier

LARGEST_DIFFERENCE = 1e-9


@dataclass(frozen=True, slots=True)
class Compiled:
    """Base score, one curve per used feature index and one table per used pair of them.

    Log-odds before calibration. Where the forest has pairs, a curve holds what its feature
    says alone, averaged over the partners that it was met with. A constraint that the
    score must not fall with a feature then holds for the *sum* of its curve and tables,
    not for the curve by itself.
    """

    base: float
    curves: dict[int, Curve]
    pairs: dict[tuple[int, int], Table] = field(default_factory=dict)

    def decision(self, features: NDArray[np.floating]) -> NDArray[np.float64]:
        """The forest's decision function, from curves and tables alone, shape (n_rows,)."""
        total = np.full(len(features), self.base)
        for column, curve in self.curves.items():
            total += curve(features[:, column])
        for (first, second), table in self.pairs.items():
            total += table(features[:, first], features[:, second])
        return total

    def on_columns(self, columns: NDArray[np.intp]) -> Compiled:
        """The same for rows in which feature ``k`` of the forest is ``columns[k]``."""
        return Compiled(
            self.base,
            {int(columns[k]): curve for k, curve in self.curves.items()},
            {(int(columns[j]), int(columns[k])): t for (j, k), t in self.pairs.items()},
        )


def compile_forest(
    forest: HistGradientBoostingClassifier, check_on: NDArray[np.floating]
) -> Compiled:
    """Curves and tables that reproduce ``forest.decision_function``.

    Parameters
    ----------
    forest : fitted binary classifier
        Trained so that no branch uses more than two features: ``interaction_cst`` lists
        every feature by itself, and the pairs.
    check_on : array, shape (n_rows, n_features)
        Rows, NaN and ties included, on which both must agree. Their distribution also
        parts what a pair says together from what each feature says alone.

    Raises
    ------
    ModelError
        If a branch uses three features, or both disagree by more than 1e-9 anywhere.
    """
    leaves: dict[tuple[int, ...], list[_Leaf]] = {}
    base = float(np.ravel(forest._baseline_prediction)[0])
    for (tree,) in forest._predictors:
        for leaf in _leaves(tree.nodes):
            # By leaf, not by tree: with overlapping pairs a tree may use three features.
            used = tuple(sorted({split.feature for split in leaf.path}))
            leaves.setdefault(used, []).append(leaf)
    most = max(map(len, leaves), default=0)
    if most > 2:
        raise ModelError(
            f"Only branches of one or two features compile; one uses {most}.",
            "Train with interaction_cst that lists single features and pairs.",
        )
    rows = np.asarray(check_on, dtype=np.float64)
    base += sum(leaf.value for leaf in leaves.pop((), []))
    curves: dict[int, Curve] = {}
    pairs: dict[tuple[int, int], Table] = {}
    for used in sorted(leaves, key=len):
        edges, values = _sum_of_leaves(used, leaves[used])
        if len(used) == 1:
            curves[used[0]] = Curve(edges[0], values[:-1], float(values[-1]))
            continue
        first, second = used
        counts = np.zeros(values.shape, dtype=np.intp)
        np.add.at(
            counts,
            (step_of(edges[0], rows[:, first]), step_of(edges[1], rows[:, second])),
            1,
        )
        parts = purify(values, counts)
        base += parts.mean
        curves[first] = _with_steps(curves.get(first), edges[0], parts.rows)
        curves[second] = _with_steps(curves.get(second), edges[1], parts.columns)
        pairs[first, second] = Table(edges[0], edges[1], parts.pure)
    compiled = Compiled(base, dict(sorted(curves.items())), dict(sorted(pairs.items())))
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


class _Split(NamedTuple):
    """One turn on the way to a leaf: to the left at or below the edge, or not."""

    feature: int
    edge: float
    missing_left: bool
    left: bool


class _Leaf(NamedTuple):
    value: float
    path: tuple[_Split, ...]


def _leaves(
    nodes: NDArray[Any], index: int = 0, path: tuple[_Split, ...] = ()
) -> Iterator[_Leaf]:
    node = nodes[index]
    if node["is_leaf"]:
        yield _Leaf(float(node["value"]), path)
        return
    for side in ("left", "right"):
        split = _Split(
            int(node["feature_idx"]),
            float(node["num_threshold"]),
            bool(node["missing_go_to_left"]),
            side == "left",
        )
        yield from _leaves(nodes, int(node[side]), (*path, split))


def _sum_of_leaves(
    features: tuple[int, ...], leaves: list[_Leaf]
) -> tuple[list[NDArray[np.float64]], NDArray[np.float64]]:
    """Edges of each feature, and the values on their steps, the missing last."""
    found: dict[int, set[float]] = {feature: set() for feature in features}
    for leaf in leaves:
        for split in leaf.path:
            found[split.feature].add(split.edge)
    # A split on "missing or not" has its edge at infinity: no finite value lies beyond.
    edges = [np.array(sorted(found[feature] - {np.inf})) for feature in features]
    probes = [np.concatenate([edge, [np.inf, np.nan]]) for edge in edges]
    values = np.zeros([len(probe) for probe in probes])
    for leaf in leaves:
        inside = [np.ones(len(probe), dtype=bool) for probe in probes]
        for split in leaf.path:
            axis = features.index(split.feature)
            at = probes[axis]
            goes_left = np.where(np.isnan(at), split.missing_left, at <= split.edge)
            inside[axis] &= goes_left == split.left
        values[np.ix_(*inside)] += leaf.value
    return edges, values


def _with_steps(
    curve: Curve | None, edges: NDArray[np.float64], steps: NDArray[np.float64]
) -> Curve:
    """A curve plus steps between other edges, that of the missing last."""
    if curve is None:
        return Curve(edges, steps[:-1], float(steps[-1]))
    union = np.union1d(curve.edges, edges)
    probes = np.append(union, np.inf)
    return Curve(
        union,
        curve(probes) + steps[step_of(edges, probes)],
        curve.missing + float(steps[-1]),
    )
