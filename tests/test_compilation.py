"""The forest as curves and pairs: exact, and purified of what one feature says alone."""

import math
from types import SimpleNamespace

import numpy as np
import pytest
from sklearn.ensemble import HistGradientBoostingClassifier
from threadpoolctl import threadpool_limits

from artifactlens.errors import ModelError
from artifactlens.training.compilation import compile_forest
from artifactlens.training.purification import purify


@pytest.fixture(scope="module", autouse=True)
def one_thread():
    """Small forests on a busy machine: threads that wait for each other take a minute."""
    with threadpool_limits(1):
        yield


def forest_on(x, y, **options):
    chosen = {
        "max_iter": 60, "max_leaf_nodes": 8, "min_samples_leaf": 10, "max_bins": 64,
        "early_stopping": False, "random_state": 0, "interaction_cst": "no_interactions",
    } | options  # fmt: skip
    return HistGradientBoostingClassifier(**chosen).fit(x, y)


def awkward(seed, n=900):
    """Plain, tied, constant, often missing, and only-missing-tells columns."""
    rng = np.random.default_rng(seed)
    x = np.stack(
        [
            rng.normal(size=n),
            np.round(rng.normal(size=n), 1),
            np.full(n, 3.0),
            rng.standard_cauchy(n),
            np.full(n, 7.0),
        ],
        axis=1,
    )
    x[rng.random(n) < 0.3, 3] = np.nan
    x[rng.random(n) < 0.2, 4] = np.nan
    score = x[:, 0] + x[:, 1] ** 2 - 1 + np.where(np.isnan(x[:, 3]), 1.0, np.sign(x[:, 3]))
    score += np.where(np.isnan(x[:, 4]), 2.0, 0.0)
    # What no sum of single features gives: a product, and a product with a missing one.
    score += x[:, 0] * x[:, 1] + np.where(np.isnan(x[:, 3]), x[:, 1], 0.0)
    return x, (score + rng.normal(size=n) > 0.5).astype(int)


SINGLE = [[k] for k in range(5)]
OVERLAPPING = [[0, 1], [1, 3], [3, 4]]


def around(edges):
    """Every edge, next to it on both sides, beyond all of them, and missing."""
    return np.concatenate(
        [
            edges,
            np.nextafter(edges, np.inf),
            np.nextafter(edges, -np.inf),
            [np.inf, -np.inf, np.nan],
        ]
    )


@pytest.mark.parametrize("pairs", [[], OVERLAPPING])
@pytest.mark.parametrize("seed", range(3))
def test_curves_and_pairs_give_the_decision_of_the_forest(seed, pairs):
    x, y = awkward(seed)
    monotone = [1, 0, 0, 1, 0] if seed == 1 else None
    forest = forest_on(x, y, monotonic_cst=monotone, interaction_cst=SINGLE + pairs)
    compiled = compile_forest(forest, x)
    assert set(compiled.pairs) == set(map(tuple, pairs))

    hard = [x, np.full((1, 5), np.nan), np.full((1, 5), np.inf), np.full((1, 5), -np.inf)]
    for column, curve in compiled.curves.items():
        rows = np.repeat(x[:1], len(around(curve.edges)), axis=0)
        rows[:, column] = around(curve.edges)
        hard.append(rows)
    for (first, second), table in compiled.pairs.items():
        places = np.meshgrid(around(table.rows), around(table.columns))
        rows = np.repeat(x[1:2], places[0].size, axis=0)
        rows[:, first], rows[:, second] = places[0].ravel(), places[1].ravel()
        hard.append(rows)
    rows = np.concatenate(hard)
    np.testing.assert_allclose(
        compiled.decision(rows), forest.decision_function(rows), rtol=0, atol=1e-9
    )


def test_a_tree_of_three_features_compiles_if_its_branches_use_two():
    rng = np.random.default_rng(8)
    x = rng.normal(size=(1200, 3))
    score = 3 * np.sign(x[:, 1]) + 3 * np.where(x[:, 1] > 0, x[:, 0], x[:, 2])
    y = (score + rng.normal(size=1200) > 0).astype(int)
    pairs = [[0], [1], [2], [0, 1], [1, 2]]
    forest = forest_on(x, y, interaction_cst=pairs)
    used = [
        set(tree.nodes["feature_idx"][tree.nodes["is_leaf"] == 0])
        for (tree,) in forest._predictors
    ]
    assert {0, 1, 2} in used
    compiled = compile_forest(forest, x)
    assert set(compiled.pairs) == {(0, 1), (1, 2)}
    fresh = rng.normal(size=(5000, 3))
    np.testing.assert_allclose(
        compiled.decision(fresh), forest.decision_function(fresh), rtol=0, atol=1e-9
    )


def test_a_forest_of_one_pair_is_the_table_worked_out_by_hand():
    """Two trees by hand: f = 1 where a > 0 and b > 0, and b > 2 alone adds 4."""
    kinds = [("feature_idx", int), ("num_threshold", float), ("missing_go_to_left", bool),
             ("left", int), ("right", int), ("is_leaf", bool), ("value", float)]  # fmt: skip
    both = np.array([(0, 0.0, True, 1, 2, False, 0), (0, 0, 0, 0, 0, True, 0.0),
                     (1, 0.0, False, 3, 4, False, 0), (0, 0, 0, 0, 0, True, 0.0),
                     (0, 0, 0, 0, 0, True, 1.0)], dtype=kinds)  # fmt: skip
    alone = np.array([(1, 2.0, True, 1, 2, False, 0), (0, 0, 0, 0, 0, True, 0.0),
                      (0, 0, 0, 0, 0, True, 4.0)], dtype=kinds)  # fmt: skip
    # Each sign of a with each sign of b, equally often: only the 2 x 2 table is met.
    x = np.array([[-1, -1], [-1, 1], [1, -1], [1, 1]] * 10_000, dtype=float)
    by_hand = SimpleNamespace(
        _baseline_prediction=np.array([[-3.0]]),
        _predictors=[(SimpleNamespace(nodes=both),), (SimpleNamespace(nodes=alone),)],
        decision_function=lambda rows: -3.0 + (rows > 0).all(axis=1) + 4 * (rows[:, 1] > 2),
    )
    compiled = compile_forest(by_hand, x)
    table = compiled.pairs[0, 1]
    np.testing.assert_array_equal((table.rows, table.columns), [[0.0], [0.0]])
    # The mean of 0 0 / 0 1 is 1/4, its rows lie 1/4 below and above, and so do its columns.
    np.testing.assert_allclose(
        table.values[:2, :2], [[0.25, -0.25], [-0.25, 0.25]], atol=1e-4
    )
    assert compiled.base == pytest.approx(-3 + 0.25, abs=1e-4)
    np.testing.assert_allclose(compiled.curves[0].values, [-0.25, 0.25], atol=1e-4)
    np.testing.assert_array_equal(compiled.curves[1].edges, [0.0, 2.0])
    np.testing.assert_allclose(compiled.curves[1].values, [-0.25, 0.25, 4.25], atol=1e-4)
    # Missing: a goes to the left of 0, b to the right of it.
    nan = np.nan
    rows = np.array([[nan, 1], [1, nan], [nan, nan], [-1, nan], [1, 3.0]])
    np.testing.assert_allclose(compiled.decision(rows), [-3, -2, -3, -3, 2], atol=1e-12)


def test_a_pair_holds_nothing_that_one_of_its_features_says_alone():
    x, y = awkward(2)
    forest = forest_on(x, y, interaction_cst=SINGLE + OVERLAPPING)
    compiled = compile_forest(forest, x)
    for (first, second), table in compiled.pairs.items():
        found = table(x[:, first], x[:, second])
        assert np.abs(found).max() > 0.1
        for axis, (column, edges) in enumerate(
            ((first, table.rows), (second, table.columns))
        ):
            step = np.searchsorted(edges, x[:, column])
            step[np.isnan(x[:, column])] = len(edges) + 1
            total = np.bincount(step, found, minlength=len(edges) + 2)
            # Every cell has the weight of one row, shared by all cells, besides its own.
            total += table.values.sum(axis=1 - axis) / table.values.size
            np.testing.assert_allclose(total, 0, atol=1e-9)


@pytest.mark.parametrize("met", ["all", "diagonal", "two blocks", "none"])
def test_purified_rows_and_columns_have_mean_zero_and_the_sum_stays(met):
    rng = np.random.default_rng(5)
    values = rng.normal(size=(40, 30)) + np.arange(40)[:, None] - np.arange(30) / 3 + 2
    counts = rng.poisson(20, values.shape)
    if met == "diagonal":  # both features nearly the same
        counts[np.abs(np.subtract.outer(np.arange(40), np.arange(30))) > 1] = 0
    elif met == "two blocks":  # nothing but cells never met joins them
        counts[:20, 15:] = counts[20:, :15] = 0
    elif met == "none":
        counts[:] = 0
    parts = purify(values, counts)
    weight = counts + 1 / counts.size
    size = np.abs(parts.pure).max()
    for axis in (0, 1):
        means = np.average(parts.pure, axis=axis, weights=weight)
        assert np.abs(means).max() < 1e-9 * size
    of_row, of_column = weight.sum(axis=1), weight.sum(axis=0)
    assert abs(np.average(parts.rows, weights=of_row)) < 1e-9
    assert abs(np.average(parts.columns, weights=of_column)) < 1e-9
    again = parts.pure + parts.rows[:, None] + parts.columns + parts.mean
    np.testing.assert_allclose(again, values, rtol=0, atol=1e-10)


def test_what_is_a_sum_of_both_features_leaves_no_pair():
    rows, columns = np.arange(6.0), np.array([3.0, -1.0, 2.0, 7.0])
    parts = purify(rows[:, None] + columns, np.arange(24).reshape(6, 4))
    np.testing.assert_allclose(parts.pure, 0, atol=1e-12)
    np.testing.assert_allclose(np.diff(parts.rows), np.diff(rows), atol=1e-12)
    np.testing.assert_allclose(np.diff(parts.columns), np.diff(columns), atol=1e-12)


def test_a_score_that_must_not_fall_does_not_though_a_curve_of_a_pair_may():
    rng = np.random.default_rng(6)
    x = rng.normal(size=(1500, 2))
    x[:, 1] -= x[:, 0]  # going together, so that what each says alone is hard to part
    score = np.where(x[:, 1] > 0, 3.0, 0.2) * x[:, 0]
    y = (score + rng.normal(size=1500) > 0).astype(int)
    forest = forest_on(x, y, monotonic_cst=[1, 0], interaction_cst=[[0], [1], [0, 1]])
    compiled = compile_forest(forest, x)
    table = compiled.pairs[0, 1]
    rising = np.unique(np.concatenate([table.rows, compiled.curves[0].edges, [9.0]]))
    assert np.diff(compiled.curves[0].values).min() < 0
    for partner in (*table.columns, np.inf, np.nan):
        rows = np.stack([rising, np.full(len(rising), partner)], axis=1)
        assert np.diff(compiled.decision(rows)).min() > -1e-9


def test_a_split_on_missing_or_not_has_no_finite_edge():
    x, y = awkward(0)
    forest = forest_on(x, y)
    nodes = np.concatenate([tree.nodes for (tree,) in forest._predictors])
    split = nodes[(nodes["is_leaf"] == 0) & (nodes["feature_idx"] == 4)]
    assert np.isinf(split["num_threshold"]).all()
    assert len(split)
    curve = compile_forest(forest, x).curves[4]
    assert curve.edges.shape == (0,)
    assert curve.missing > curve.values[0] + 1  # missing speaks for it, by construction

    paired = forest_on(x, y, interaction_cst=[*SINGLE, [3, 4]])
    table = compile_forest(paired, x).pairs[3, 4]
    assert table.columns.shape == (0,)
    assert table.values.shape == (len(table.rows) + 2, 2)


def test_a_constant_feature_makes_no_curve():
    x, y = awkward(0)
    assert set(compile_forest(forest_on(x, y), x).curves) == {0, 1, 3, 4}


def test_trees_without_a_split_go_into_the_base():
    x = np.zeros((40, 2))
    y = np.array([0, 0, 0, 1] * 10)
    compiled = compile_forest(forest_on(x, y), x)
    assert compiled.curves == compiled.pairs == {}
    assert compiled.base == pytest.approx(math.log(1 / 3), abs=1e-6)


def test_a_forest_with_interactions_of_three_is_refused():
    rng = np.random.default_rng(3)
    x = rng.normal(size=(600, 3))
    y = (x[:, 0] * x[:, 1] * x[:, 2] > 0).astype(int)
    with pytest.raises(ModelError, match="one uses 3"):
        compile_forest(forest_on(x, y, interaction_cst=None), x)


def test_curves_that_differ_from_the_forest_are_refused():
    x, y = awkward(0)
    forest = forest_on(x, y)
    altered = SimpleNamespace(
        _baseline_prediction=forest._baseline_prediction,
        _predictors=forest._predictors,
        decision_function=lambda rows: forest.decision_function(rows) + 1e-6,
    )
    with pytest.raises(ModelError, match="must agree to 1e-09"):
        compile_forest(altered, x)
