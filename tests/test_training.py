"""Training: exact compilation, truth by hand, conditions that tell nothing, kept-out people."""

import dataclasses
import importlib.util
import json
import math
from pathlib import Path
from types import SimpleNamespace

import joblib
import numpy as np
import pytest
from scipy.signal import butter, sosfiltfilt, welch
from scipy.stats import chi2_contingency
from signals import SITES, bump, noise, row, sine, step, ten_twenty
from sklearn.ensemble import HistGradientBoostingClassifier
from threadpoolctl import threadpool_limits

from artifactlens.curves import Curve, Head, Model, Table, load_model, logistic
from artifactlens.epochs import epoch_grid
from artifactlens.errors import ModelError, RecordingError
from artifactlens.features import FeatureTable
from artifactlens.features.catalogue import FEATURE_NAMES, MEASURED
from artifactlens.frames import build_frame
from artifactlens.kinds import KIND_NAMES
from artifactlens.recording import from_array
from artifactlens.simulation import brain, eye
from artifactlens.simulation.scene import Scene
from artifactlens.sites import site_position
from artifactlens.training import fit as fitting
from artifactlens.training import simulated
from artifactlens.training.compilation import compile_forest
from artifactlens.training.corpora import backgrounds as read_corpora
from artifactlens.training.examples import (
    CLEAN,
    PRESENT,
    UNKNOWN,
    Examples,
    from_table,
    join,
)
from artifactlens.training.fit import (
    DOUBTFUL_SPECIFICITY,
    HEAD_FEATURES,
    LEAST_DOUBTFUL,
    LEAST_SURE,
    SURE_SPECIFICITY,
    _threshold,
    calibrate,
    clean_seconds,
    fit_forest,
    fit_head,
    model_body,
)
from artifactlens.training.labels import label_cells
from artifactlens.training.purification import purify
from artifactlens.training.report import check_table, sensitivity_at
from artifactlens.training.situation import (
    Background,
    Recorder,
    Situation,
    as_recording,
    draw_situation,
    in_montage,
)

SCRIPT = Path(__file__).resolve().parents[1] / "scripts" / "train.py"
EYE, MUSCLE, POP, MAINS = range(4)
PLAIN = Situation(
    sfreq=256.0, extended=True, low_pass=None, notch=None, line=50.0, high_pass=None,
    montage="ears", n_sites=19, header=True,
)  # fmt: skip
AS_RECORDED = dataclasses.replace(PLAIN, extended=False)


@pytest.fixture(scope="module", autouse=True)
def one_thread():
    """Small forests on a busy machine: threads that wait for each other take a minute."""
    with threadpool_limits(1):
        yield


@pytest.fixture(scope="module")
def train():
    """scripts/train.py as a module."""
    spec = importlib.util.spec_from_file_location("train", SCRIPT)
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    return module


def examples(truth, *, kind=EYE, features=None, **columns):
    """Rows with this truth of one kind; everything else is plain or as given."""
    n = len(truth)
    known = np.full((n, 4), UNKNOWN, dtype=np.int8)
    known[:, kind] = truth
    values = {
        "features": np.zeros((n, len(FEATURE_NAMES)), np.float32)
        if features is None
        else np.asarray(features, np.float32),
        "truth": known,
        "person": np.full(n, "p"),
        "second": np.arange(n),
        "origin": np.full(n, "simulated: x"),
        "condition": np.full(n, ""),
        "strength": np.zeros((n, 4), np.float32),
        "look_alike": np.full(n, ""),
    }
    return Examples(**values | {name: np.asarray(value) for name, value in columns.items()})


def table_of(values):
    values = np.asarray(values, dtype=np.float32)
    n_epochs, n_sites = values.shape[1:]
    return FeatureTable(
        values=values,
        usual=np.zeros((len(MEASURED), n_sites), np.float32),
        segment=np.zeros(n_epochs, np.int64),
        pace=np.zeros((n_epochs, n_sites, 10), np.float16),
        step_at=np.zeros((n_epochs, n_sites), np.float16),
        front_at=np.zeros(n_epochs, np.float16),
    )


# The forest as curves and pairs ---------------------------------------------------------


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


# A model from rows to file -------------------------------------------------------------


def learnable(n=1500, seed=0, kind=EYE, together=0.0):
    """Rows on which the kind follows from two of the features that its head sees.

    ``together`` weighs what only both of them tell.
    """
    rng = np.random.default_rng(seed)
    features = rng.normal(size=(n, len(FEATURE_NAMES))).astype(np.float32)
    features[rng.random(features.shape) < 0.05] = np.nan
    seen = [FEATURE_NAMES.index(name) for name in HEAD_FEATURES[KIND_NAMES[kind]][:2]]
    known = np.nan_to_num(features[:, seen])
    score = known.sum(axis=1) * 2 - 1 + together * known.prod(axis=1)
    truth = (rng.random(n) < logistic(score.astype(float))).astype(np.int8)
    return examples(truth, kind=kind, features=features, second=np.arange(n) // 3)


@pytest.fixture(scope="module")
def head():
    return fit_head("eye", learnable(), learnable(seed=1))


EYE_PAIR = HEAD_FEATURES["eye"][:2]


@pytest.fixture(scope="module")
def paired_head():
    with pytest.MonkeyPatch.context() as patch:
        patch.setitem(fitting.PAIRS, "eye", (EYE_PAIR,))
        return fit_head("eye", learnable(together=3.0), learnable(seed=1, together=3.0))


def test_a_head_without_pairs_has_none(head):
    assert head.compiled.pairs == {}


def test_a_pair_that_is_asked_for_finds_what_only_both_tell(head, paired_head):
    (pair,) = paired_head.compiled.pairs
    assert sorted(FEATURE_NAMES[column] for column in pair) == sorted(EYE_PAIR)
    columns = {FEATURE_NAMES[column] for column in paired_head.compiled.curves}
    assert set(EYE_PAIR) <= columns <= set(HEAD_FEATURES["eye"])
    # True table: 3 a b; both far on one side speak for it, on opposite sides against it.
    table = paired_head.compiled.pairs[pair]
    ends = np.array([1.5, -1.5])
    assert (table(ends, ends) > 0.5).all()
    assert (table(ends, -ends) < -0.5).all()


def test_a_pair_of_a_feature_left_out_is_left_out(monkeypatch):
    monkeypatch.setitem(fitting.PAIRS, "eye", (EYE_PAIR,))
    rows = learnable(together=3.0)
    forest, columns = fit_forest("eye", rows, leave_out=frozenset(EYE_PAIR[:1]))
    assert compile_forest(forest, rows.features[:, columns]).pairs == {}


def test_a_head_uses_only_the_features_of_its_kind(head):
    names = {FEATURE_NAMES[column] for column in head.compiled.curves}
    assert names <= set(HEAD_FEATURES["eye"])
    assert set(HEAD_FEATURES["eye"][:2]) <= names


def test_operating_points_keep_the_stated_share_of_clean_seconds_unmarked(head):
    validation = learnable(seed=1)
    worst = clean_seconds(validation, "eye", head.probability(validation.features))
    assert len(worst) > 100
    for point, share in (
        (head.sure, SURE_SPECIFICITY["eye"]),
        (head.doubtful, DOUBTFUL_SPECIFICITY["eye"]),
    ):
        # The quantile lies between two of so many values: at most these are above.
        assert (worst >= point).sum() <= math.ceil((1 - share) * (len(worst) - 1))
    assert LEAST_DOUBTFUL <= head.doubtful <= head.sure < 1
    assert head.sure >= LEAST_SURE


def test_held_out_probabilities_are_calibrated(head):
    fresh = learnable(n=6000, seed=2)
    p, truth = head.probability(fresh.features), fresh.truth[:, EYE]
    for low, high in ((0.05, 0.3), (0.3, 0.7), (0.7, 0.95)):
        inside = (p >= low) & (p < high)
        assert inside.sum() > 300
        assert abs(p[inside].mean() - truth[inside].mean()) < 0.06


def test_a_model_written_and_read_scores_bit_for_bit_alike(head, paired_head, tmp_path):
    rng = np.random.default_rng(7)
    heads = [
        dataclasses.replace(
            chosen,
            kind=kind,
            slope=chosen.slope * (1 + number / 7),
            offset=chosen.offset - number / 3,
        )
        for number, (kind, chosen) in enumerate(
            zip(KIND_NAMES, (head, paired_head) * 2, strict=True)
        )
    ]
    path = tmp_path / "model.json"
    path.write_text(json.dumps(model_body(heads, "small", {}), allow_nan=False))
    read = load_model(path)

    def scaled(entry):
        return {
            FEATURE_NAMES[column]: Curve(
                curve.edges, entry.slope * curve.values, entry.slope * curve.missing
            )
            for column, curve in entry.compiled.curves.items()
        }

    def scaled_pairs(entry):
        return {
            tuple(FEATURE_NAMES[column] for column in columns): Table(
                table.rows, table.columns, entry.slope * table.values
            )
            for columns, table in entry.compiled.pairs.items()
        }

    direct = Model(
        "small",
        "",
        tuple(
            Head(
                entry.kind,
                entry.offset + entry.slope * entry.compiled.base,
                scaled(entry),
                entry.sure,
                entry.doubtful,
                scaled_pairs(entry),
            )
            for entry in heads
        ),
        {},
    )
    for one, other in zip(read.heads, direct.heads, strict=True):
        assert one.base == other.base
        assert list(one.curves) == list(other.curves)
        for name, curve in one.curves.items():
            assert curve.edges.tobytes() == other.curves[name].edges.tobytes()
            assert curve.values.tobytes() == other.curves[name].values.tobytes()
            assert curve.missing == other.curves[name].missing
        assert list(one.pairs) == list(other.pairs)
        for names, pair in one.pairs.items():
            for array in ("rows", "columns", "values"):
                assert (
                    getattr(pair, array).tobytes()
                    == getattr(other.pairs[names], array).tobytes()
                )
    assert [len(one.pairs) for one in read.heads] == [0, 1, 0, 1]
    values = rng.normal(size=(len(MEASURED), 50, 6))
    values[rng.random(values.shape) < 0.05] = np.nan
    table = table_of(values)
    scores = read.scores(table)
    assert scores.tobytes() == direct.scores(table).tobytes()
    assert [(h.sure, h.doubtful) for h in read.heads] == [
        (entry.sure, entry.doubtful) for entry in heads
    ]

    # And the score is that of training, rows in another order of summation.
    truth = np.zeros((4, 50, 6), np.int8)
    rows = from_table(
        table, truth, truth.astype(np.float32), person="p", origin="x"
    ).features
    known = np.isfinite(table.values[0])
    for number, entry in enumerate(heads):
        np.testing.assert_allclose(
            logistic(scores[number][known]), entry.probability(rows), atol=1e-12
        )


# Calibration and operating points ------------------------------------------------------


def test_calibration_by_hand():
    # Platt (1999): the targets of 4 present and 4 clean are 5/6 and 1/6. One of four present
    # at score 0 makes a mean target of (5/6 + 3/6) / 4 = 1/3, three of four at 1 make 2/3;
    # the line through logit(1/3) = -ln 2 and logit(2/3) = ln 2:
    decision = np.repeat([0.0, 1.0], 4)
    truth = np.array([1, 0, 0, 0, 1, 1, 1, 0], np.int8)
    slope, offset = calibrate(decision, truth)
    assert slope == pytest.approx(2 * math.log(2), abs=1e-4)
    assert offset == pytest.approx(-math.log(2), abs=1e-4)


def test_calibration_recovers_a_known_logistic():
    rng = np.random.default_rng(5)
    decision = rng.normal(size=40_000) * 2
    truth = (rng.random(40_000) < logistic(1.7 * decision - 0.6)).astype(np.int8)
    slope, offset = calibrate(decision, truth)
    # The standard errors are about 0.02.
    assert slope == pytest.approx(1.7, abs=0.06)
    assert offset == pytest.approx(-0.6, abs=0.06)


def test_calibration_of_separable_scores_is_finite():
    # All ten present at +1, all ten clean at -1: targets 11/12 and 1/12, so logit ln 11.
    decision, truth = np.repeat([1.0, -1.0], 10), np.repeat([1, 0], 10).astype(np.int8)
    slope, offset = calibrate(decision, truth)
    assert slope == pytest.approx(math.log(11), abs=1e-3)
    assert offset == pytest.approx(0, abs=1e-3)


def test_calibration_never_turns_a_score_round():
    slope, offset = calibrate(
        np.repeat([-1.0, 1.0], 10), np.repeat([1, 0], 10).astype(np.int8)
    )
    assert slope == 1e-3
    assert math.isfinite(offset)


def test_a_clean_second_is_clean_at_every_site():
    truth = [CLEAN, CLEAN, CLEAN, PRESENT, CLEAN, UNKNOWN, CLEAN]
    second = [4, 2, 4, 2, 9, 9, 11]  # not in order: 2 has a present, 9 an unknown cell
    found = clean_seconds(
        examples(truth, second=second),
        "eye",
        np.array([0.1, 0.2, 0.7, 0.9, 0.3, 0.3, 0.4]),
    )
    np.testing.assert_array_equal(found, [0.7, 0.4])


def test_clean_of_one_kind_says_nothing_of_another():
    rows = examples([CLEAN, PRESENT], second=[0, 1])
    assert len(clean_seconds(rows, "eye", np.array([0.5, 0.5]))) == 1
    assert len(clean_seconds(rows, "pop", np.array([0.5, 0.5]))) == 0


def test_thresholds_by_hand():
    worst = np.array([0.8, 0.0, 0.6, 0.2, 0.4])
    # The 75 % quantile of five values is the fourth; the threshold lies just above.
    assert _threshold(worst, 0.75, 0.2) == pytest.approx(0.6 + 1e-6, abs=1e-12)
    assert (worst < _threshold(worst, 0.75, 0.2)).mean() == 0.8
    assert _threshold(worst, 0.25, 0.5) == 0.5  # never below the least
    assert _threshold(np.full(5, 0.9999), 0.5, 0.5) == 0.999  # nor out of reach
    assert _threshold(np.zeros(0), 0.99, 0.2) == pytest.approx(0.5, abs=1e-5)


# The check by hand ---------------------------------------------------------------------


def test_sensitivity_at_a_specificity_by_hand():
    truth = np.array([CLEAN] * 5 + [PRESENT] * 4 + [UNKNOWN], np.int8)
    score = np.array([0.0, 0.1, 0.2, 0.3, 0.4, 0.25, 0.3, 0.35, 0.9, 0.99])
    # Four fifths of the clean lie at or below the 75 % quantile 0.3: above are 0.35, 0.9.
    assert sensitivity_at(score, truth, 0.75) == 0.5


def test_check_table_by_hand():
    truth = np.zeros((8, 4), np.int8)
    truth[[1, 5], :] = PRESENT
    truth[7, :] = UNKNOWN
    rows = dataclasses.replace(
        examples(np.zeros(8, np.int8)),
        truth=truth,
        second=np.array([0, 0, 1, 1, 2, 2, 3, 3]),
    )
    score = np.array([0.1, 0.8, 0.2, 0.6, 0.3, 0.4, 0.9, 0.9])
    # Pairs of present 0.8, 0.4 and clean 0.1 0.2 0.6 0.3 0.9: 4 + 3 of 10 in order. Only
    # second 1 is clean at both sites, worst 0.6; above sure (0.7) lies one of two present.
    text = check_table(
        rows,
        dict.fromkeys(KIND_NAMES, score),
        dict.fromkeys(KIND_NAMES, (0.7, 0.5)),
        {"pop": 1 - score},
    )
    table = {line.split()[0]: line.split() for line in text.splitlines()[1:]}
    assert list(table) == list(KIND_NAMES)
    assert table["eye"][1:5] == ["2", "5", "0.7000", "-"]
    assert table["pop"][4] == "0.3000"
    # 95 % of the five clean scores lie below 0.84, 99 % below 0.888: no present one above.
    assert table["eye"][5:7] == ["0.000", "0.000"]
    assert table["eye"][7:] == ["1", "0.000", "60.000", "0.500"]


# Rows ----------------------------------------------------------------------------------


def test_rows_are_cells_with_a_signal_and_seconds_stay_apart():
    values = np.ones((len(MEASURED), 3, 2))
    values[MEASURED.index("spread")] = np.arange(6).reshape(3, 2)
    values[:, 1, 0] = np.nan  # no signal there
    truth = np.zeros((4, 3, 2), np.int8)
    truth[POP, 2, 1] = PRESENT
    made = from_table(
        table_of(values), truth, np.full(truth.shape, 5, np.float32), person="p", origin="o",
        look_alike=np.array(["", "mu", ""]),
    )  # fmt: skip
    np.testing.assert_array_equal(made.features[:, FEATURE_NAMES.index("spread")],
                                  [0, 1, 3, 4, 5])  # fmt: skip
    np.testing.assert_array_equal(made.second, [0, 0, 1, 2, 2])
    np.testing.assert_array_equal(made.truth[:, POP], [0, 0, 0, 0, PRESENT])
    np.testing.assert_array_equal(made.look_alike, ["", "", "mu", "", ""])
    both = join([made, made])
    np.testing.assert_array_equal(both.second, [0, 0, 1, 2, 2, 3, 3, 4, 5, 5])
    assert len(both.subset(both.truth[:, POP] == PRESENT)) == 2


# Truth by hand -------------------------------------------------------------------------

SECONDS, RATE = 8, 256.0
N = round(SECONDS * RATE)


def labelled(montage, fields, *, names=SITES, situation=PLAIN, quiet=None):
    """Truth and strength of these fields, {kind: {site or "ears": trace}}, over noise."""
    situation = dataclasses.replace(situation, montage=montage)
    quiet = ten_twenty(SECONDS, RATE)[: len(names)] if quiet is None else quiet
    electrodes = {}
    for kind, traces in fields.items():
        field = np.zeros((len(names) + 1, N))
        for site, trace in traces.items():
            field[len(names) if site == "ears" else names.index(site)] = trace
        electrodes[kind] = field
    channels = quiet + sum(field[:-1] - field[-1] for field in electrodes.values())
    data, labels, reference = in_montage(
        situation, channels, names, np.random.default_rng(0)
    )
    recording = from_array(data.astype(np.float32), RATE, labels)
    frame = build_frame(recording.labels, recording.types, recording.positions)
    grid = epoch_grid(recording)
    truth, strength = label_cells(
        frame, grid.start, grid.n_samples, RATE, names, electrodes, quiet, situation,
        reference,
    )  # fmt: skip
    return SimpleNamespace(truth=truth, strength=strength, sites=frame.sites, frame=frame)


def cells(found, kind, value):
    """(second, site) of all cells with this truth."""
    seconds, sites = np.nonzero(found.truth[kind] == value)
    return {(int(s), found.sites[r]) for s, r in zip(seconds, sites, strict=True)}


@pytest.mark.parametrize("montage", ["ears", "average", "bipolar", "Cz"])
def test_a_pop_of_one_electrode_is_the_truth_of_that_site_alone(montage):
    pop = step(N, RATE, 3.5, 200.0)
    found = labelled(montage, {"pop": {"F3": pop}})
    assert cells(found, POP, PRESENT) == {(3, "F3")}
    assert cells(found, POP, UNKNOWN) == set()
    assert found.strength[POP, 3, found.sites.index("F3")] == pytest.approx(200)
    assert set(found.sites) - {"reference"} >= set(SITES) - {"Cz"}


def test_a_pop_of_the_linked_reference_is_the_truth_of_the_reference_alone():
    found = labelled("ears", {"pop": {"ears": step(N, RATE, 3.5, 200.0)}})
    assert cells(found, POP, PRESENT) == {(3, "reference")}
    assert cells(found, POP, UNKNOWN) == set()


def test_a_pop_at_cz_is_the_truth_of_the_reference_where_cz_is_the_reference():
    found = labelled("Cz", {"pop": {"Cz": step(N, RATE, 3.5, 200.0)}})
    assert cells(found, POP, PRESENT) == {(3, "reference")}
    assert found.frame.canonical[found.sites.index("reference")] == "Cz"


@pytest.mark.parametrize("montage", ["average", "bipolar", "Cz"])
def test_a_pop_of_the_ears_is_nowhere_where_the_ears_cancel(montage):
    found = labelled(montage, {"pop": {"ears": step(N, RATE, 3.5, 200.0)}})
    assert cells(found, POP, PRESENT) == set()


def test_a_pop_in_a_system_reference_recording_is_the_truth_of_its_site():
    found = labelled("system", {"pop": {"Fz": step(N, RATE, 3.5, 200.0)}})
    assert cells(found, POP, PRESENT) == {(3, "Fz")}


def test_pops_are_called_by_their_size_and_tail():
    # tau 0.5 s: what is left in the next second is unknown while it moves by 15 uV or more.
    found = labelled(
        "ears",
        {
            "pop": {
                "C3": step(N, RATE, 2.5, 200.0, tau=0.5),
                "P3": step(N, RATE, 2.5, 10.0),
                "O1": step(N, RATE, 2.5, 3.0),
            }
        },
        quiet=np.zeros((19, N)),
    )
    assert cells(found, POP, PRESENT) == {(2, "C3")}
    # 200 e^-1 = 74 at 3.0 s falls by 64, e^-3 of 200 = 10 by 9; 10 uV are no clear case.
    assert cells(found, POP, UNKNOWN) == {(3, "C3"), (2, "P3")}


def test_a_pop_within_the_usual_steps_is_not_present():
    quiet = np.zeros((19, N))
    quiet[row("C3")] = sine(N, RATE, 30.0, 50.0)  # 16 ms of 30 Hz: steps near 100 uV
    found = labelled("ears", {"pop": {"C3": step(N, RATE, 3.5, 120.0)}}, quiet=quiet)
    assert cells(found, POP, PRESENT) == set()
    assert cells(found, POP, UNKNOWN) == {(3, "C3")}


def test_mains_at_one_electrode_is_the_truth_of_that_site():
    sizes = {"O2": 10.0, "C3": 2.1, "C4": 1.4, "P3": 1.1, "P4": 0.9}
    found = labelled(
        "ears", {"mains": {site: sine(N, RATE, 50.0, size) for site, size in sizes.items()}}
    )
    every = range(SECONDS)
    present, unknown = cells(found, MAINS, PRESENT), cells(found, MAINS, UNKNOWN)
    assert present == {(second, site) for second in every for site in ("O2", "C3")}
    assert unknown == {(second, site) for second in every for site in ("C4", "P3")}
    size = found.strength[MAINS, :, found.sites.index("O2")]
    np.testing.assert_allclose(size, 10.0, rtol=1e-3)  # amplitude: half of peak to peak


def test_mains_under_strong_fast_activity_is_not_present():
    quiet = noise(19, N, RATE, exponent=0.0, rms_uv=100.0)
    # 100 uV rms over 128 Hz put 78 uV^2 into each hertz, 4 uV of mains 8 uV^2 in all.
    found = labelled("ears", {"mains": {"O2": sine(N, RATE, 50.0, 4.0)}}, quiet=quiet)
    assert cells(found, MAINS, PRESENT) == set()


def test_only_the_line_frequency_of_the_situation_counts_as_mains():
    found = labelled("ears", {"mains": {"O2": sine(N, RATE, 60.0, 10.0)}})
    assert cells(found, MAINS, PRESENT) == set()


def test_a_blink_is_the_truth_of_the_sites_that_it_moves():
    where = [site_position(name) for name in (*SITES, "A1", "A2")]
    blink = 100 * eye.blink_wave(np.arange(N) / RATE, 3.4, 0.3)
    field = np.outer(eye.blink_map(np.array(where)), blink)
    at = dict(zip(SITES, field[:-2], strict=True)) | {"ears": field[-2:].mean(axis=0)}
    found = labelled("ears", {"eye": at})
    present, clean = cells(found, EYE, PRESENT), cells(found, EYE, CLEAN)
    assert {(3, "Fp1"), (3, "Fp2")} <= present
    assert {site for _, site in present} <= {"Fp1", "Fp2", "F7", "F8", "F3", "F4", "Fz"}
    assert {(3, site) for site in ("C3", "Cz", "C4", "P3", "Pz", "P4", "O1", "O2")} <= clean
    # The truth is the size of the field, against the sites behind, site by site.
    behind = np.mean([at[site] for site in ("P3", "Pz", "P4", "O1", "O2")], axis=0)
    size = {
        "reference" if site == "ears" else site: np.ptp(trace - behind)
        for site, trace in at.items()
    }
    weak = {(3, site) for site, value in size.items() if 10 <= value < 30}
    assert weak
    assert cells(found, EYE, UNKNOWN) == weak
    for number, site in enumerate(found.sites):
        assert found.strength[EYE, 3, number] == pytest.approx(size[site], rel=1e-5)


def test_eye_is_called_from_30_and_clean_below_10_microvolt():
    sizes = {"Fp1": 31.0, "Fp2": 29.0, "F7": 11.0, "F8": 9.0}
    found = labelled(
        "ears", {"eye": {site: bump(N, RATE, 3.5, size) for site, size in sizes.items()}}
    )
    assert cells(found, EYE, PRESENT) == {(3, "Fp1")}
    assert cells(found, EYE, UNKNOWN) == {(3, "Fp2"), (3, "F7")}


def test_muscle_is_judged_against_the_fast_activity_of_the_site():
    quiet = np.stack([sine(N, RATE, 20.0, 4.0)] * 19)
    quiet -= quiet.mean(axis=0)
    quiet[row("T7")] += sine(N, RATE, 20.0, 4.0)
    quiet[row("T8")] -= sine(N, RATE, 20.0, 4.0)
    # So T7 and T8 have 4 / sqrt 2 = 2.83 uV rms above 15 Hz and 0.3 is added: 3.13. Present
    # from 3.91, clean below 1.10; everywhere else present from 0.375, clean below 0.105.
    during = (np.arange(N) >= round(3.2 * RATE)) & (np.arange(N) < round(3.8 * RATE))
    burst = np.where(during, sine(N, RATE, 40.0, math.sqrt(2)), 0)  # rms 1
    found = labelled(
        "ears",
        {"muscle": {"T7": 4.3 * burst, "T8": 2.0 * burst, "F7": 0.5 * burst,
                    "O1": 0.05 * burst}},
        quiet=quiet,
    )  # fmt: skip
    assert cells(found, MUSCLE, PRESENT) == {(3, "T7"), (3, "F7")}
    assert cells(found, MUSCLE, UNKNOWN) == {(3, "T8")}
    assert found.strength[MUSCLE, 3, found.sites.index("T7")] == pytest.approx(
        4.3, rel=0.06
    )


def test_slow_activity_is_no_muscle():
    found = labelled("ears", {"muscle": {"T7": sine(N, RATE, 10.0, 50.0)}})
    assert cells(found, MUSCLE, PRESENT) == set()


def test_kinds_that_were_not_put_in_are_unknown_everywhere():
    found = labelled("ears", {"pop": {"F3": step(N, RATE, 3.5, 200.0)}})
    assert (found.truth[[EYE, MUSCLE, MAINS]] == UNKNOWN).all()
    assert np.isnan(found.strength[[EYE, MUSCLE, MAINS]]).all()
    assert (found.truth[POP] != UNKNOWN).all()


# Conditions tell nothing of the label --------------------------------------------------


def invented(seconds=12.0, sfreq=200.0, *, kept_to_hz=45.0, seed=0, person="invented-00"):
    """A background of cortical sources; with ``kept_to_hz`` low-passed there (-40 dB at 60)."""
    places = np.array([site_position(name) for name in SITES])
    scene = Scene(places, round(seconds * sfreq), sfreq)
    rng = np.random.default_rng(seed)
    field = brain.background(scene, rng).potentials.astype(np.float64)
    field += 0.2 * rng.standard_normal(field.shape)
    if kept_to_hz is not None:
        field = sosfiltfilt(butter(8, kept_to_hz, fs=sfreq, output="sos"), field, axis=1)
    return Background(
        person=person, sites=SITES, potentials=field, sfreq=sfreq,
        reference_sites=("A1", "A2"), kept_to_hz=kept_to_hz,
        notch_hz=None if kept_to_hz is None else 50.0, origin="invented",
    )  # fmt: skip


def same(one, other):
    return all(
        np.array_equal(
            getattr(one, name),
            getattr(other, name),
            equal_nan=getattr(one, name).dtype.kind == "f",
        )
        for name in Examples.__dataclass_fields__
    )


def test_a_copy_depends_on_its_seed_alone():
    background = invented()
    np.random.seed(1)  # the global state must not matter
    first = simulated.simulate(background, 11)
    np.random.seed(2)
    assert same(first, simulated.simulate(background, 11))
    assert not same(first, simulated.simulate(background, 12))
    assert set(first.person) == {"invented-00"}
    assert set(first.origin) == {"simulated: invented"}


@pytest.mark.parametrize("backend", ["threading", "loky"])
def test_copies_do_not_depend_on_the_number_of_workers(train, backend):
    backgrounds = [
        invented(seconds=8.0, seed=k, person=f"invented-{k:02d}") for k in (0, 1)
    ]
    alone = train.copies(backgrounds, 2, 500, 1, kinds=("pop", "mains"))
    with joblib.parallel_config(backend=backend):
        together = train.copies(backgrounds, 2, 500, 2, kinds=("pop", "mains"))
    assert same(alone, together)
    assert len(np.unique(alone.second)) == 2 * 2 * 8
    assert (alone.truth[:, [EYE, MUSCLE]] == UNKNOWN).all()


def draws(count, background, seed):
    """Conditions, and which kinds were put in, as simulate draws them."""
    places = np.array([site_position(name) for name in ("Fp1", "C4", "O2", "A1", "A2")])
    scene = Scene(places, 1280, 128.0)
    conditions, put_in = [], []
    for number in range(count):
        rng = np.random.default_rng(seed + number)
        conditions.append(draw_situation(background, rng))
        put_in.append(
            [
                bool(
                    simulated.draw_artifact(kind, scene, rng, conditions[-1].line, 2).any()
                )
                for kind in KIND_NAMES
            ]
        )
    return conditions, np.array(put_in)


@pytest.fixture(scope="module")
def drawn():
    background = Background(
        "p", SITES, np.zeros((19, 0)), 500.0, ("A1", "A2"), 45.0, 50.0, "invented"
    )
    return draws(400, background, 70_000)


@pytest.mark.parametrize(
    "condition",
    ["sfreq", "extended", "low_pass", "notch", "line", "high_pass", "montage", "n_sites",
     "header"],
)  # fmt: skip
@pytest.mark.parametrize("kind", range(4), ids=KIND_NAMES)
def test_conditions_tell_nothing_of_what_is_put_in(drawn, condition, kind):
    conditions, put_in = drawn
    values = np.array([str(getattr(entry, condition)) for entry in conditions])
    names, place = np.unique(values, return_inverse=True)
    assert len(names) > 1
    counts = np.zeros((len(names), 2))
    np.add.at(counts, (place, put_in[:, kind].astype(int)), 1)
    assert chi2_contingency(counts).pvalue > 0.001


def test_kinds_are_put_in_independently_of_each_other(drawn):
    _, put_in = drawn
    share = put_in.mean(axis=0)
    # Six in ten; a few eye draws come out empty (0.3 x 0.3 x 0.8 x 0.8 of them).
    np.testing.assert_allclose(share, [0.6 * (1 - 0.0576), 0.6, 0.6, 0.6], atol=0.08)
    off_diagonal = np.corrcoef(put_in.T)[np.triu_indices(4, 1)]
    assert np.abs(off_diagonal).max() < 4 / math.sqrt(len(put_in))


def test_a_background_of_full_bandwidth_is_always_taken_as_such():
    background = Background(
        "p", SITES, np.zeros((19, 0)), 160.0, ("A1", "A2"), None, None, "invented"
    )
    rng = np.random.default_rng(0)
    found = [draw_situation(background, rng) for _ in range(50)]
    assert all(entry.extended and entry.sfreq <= 160 for entry in found)
    assert all(
        entry.low_pass is None or entry.low_pass < entry.sfreq / 2 for entry in found
    )


def test_mains_that_is_in_a_background_by_nature_is_not_judged():
    background = Background(
        "p", SITES, np.zeros((19, 0)), 160.0, ("A1", "A2"), None, None, "x", line_hz=60.0
    )
    rng = np.random.default_rng(0)
    assert {draw_situation(background, rng).line for _ in range(50)} == {50.0}


def power_in(data, sfreq, low, high):
    freqs, psd = welch(data, sfreq, nperseg=round(sfreq), axis=-1)
    return psd[..., (freqs >= low) & (freqs <= high)].mean()


def test_artifact_falls_no_less_than_the_background_that_it_is_put_into():
    rng = np.random.default_rng(0)
    white = rng.standard_normal((4, 20_000)) * 40
    background = invented(sfreq=500.0)
    through_own = sosfiltfilt(butter(8, 45.0, fs=500.0, output="sos"), white, axis=1)
    recorder = Recorder(
        dataclasses.replace(AS_RECORDED, sfreq=500.0), background, background.sfreq
    )
    through_recorder = recorder(white)
    for low, high in ((60, 80), (80, 120), (120, 200)):
        kept = power_in(through_recorder, 500, low, high)
        assert kept <= max(power_in(through_own, 500, low, high), 1e-12)
    # And below the low-pass nothing is lost, or the artifact would be another one.
    assert power_in(through_recorder, 500, 5, 38) == pytest.approx(
        power_in(white, 500, 5, 38), rel=0.02
    )


def test_the_notch_of_the_background_acts_on_the_artifact_too():
    background = invented(sfreq=500.0)._replace(kept_to_hz=90.0)
    hum = sine(20_000, 500.0, 50.0, 30.0)[None]
    recorder = Recorder(dataclasses.replace(AS_RECORDED, sfreq=500.0), background, 500.0)
    middle = slice(2500, 17_500)
    assert np.abs(recorder(hum)[:, middle]).max() < 0.01
    # What was recorded has been through it before.
    assert np.abs(recorder(hum, own=True)[:, middle]).max() == pytest.approx(30, rel=0.01)
    extended = dataclasses.replace(PLAIN, sfreq=500.0)
    passed = Recorder(extended, background, 500.0)(hum)
    assert np.abs(passed[:, middle]).max() == pytest.approx(30, rel=0.01)


def test_muscle_put_into_a_low_passed_copy_leaves_nothing_above(monkeypatch):
    seen = []
    measure = simulated.measure_recording

    def spy(recording, **options):
        seen.append(recording)
        return measure(recording, **options)

    def strong(kind, scene, rng, line, n_refs):
        return 40 * rng.standard_normal((scene.n_sites, scene.n_samples))

    monkeypatch.setattr(simulated, "measure_recording", spy)
    monkeypatch.setattr(simulated, "draw_artifact", strong)
    monkeypatch.setattr(
        simulated, "draw_situation",
        lambda background, rng: dataclasses.replace(AS_RECORDED, sfreq=200.0),
    )  # fmt: skip
    monkeypatch.setattr(
        simulated, "draw_look_alikes",
        lambda scene, rng: (np.zeros((scene.n_sites, scene.n_samples)), []),
    )  # fmt: skip
    background = invented(sfreq=200.0)
    made = simulated.simulate(background, 3, kinds=("muscle",))
    (recording,) = seen
    data = recording.read(0, recording.n_samples)
    assert (made.truth[:, MUSCLE] == PRESENT).mean() > 0.9
    fall = 10 * np.log10(power_in(data, 200, 62, 95) / power_in(data, 200, 25, 40))
    assert (
        fall < -40
    )  # sosfiltfilt of order 8 keeps -40 dB at 60 Hz of what it lets through
    assert {entry.low_pass for entry in recording.filters} == {45.0}
    assert {entry.notch for entry in recording.filters} == {50.0}


def test_a_header_states_the_filters_or_nothing():
    background = invented(seconds=2.0)
    silent = np.zeros((2, 400), np.float32) + np.arange(400)
    for header in (True, False):
        situation = dataclasses.replace(
            PLAIN, sfreq=200.0, low_pass=70.0, notch=60.0, high_pass=0.3, header=header
        )
        made = as_recording(
            silent, ["Fp1-LE", "Fp2-LE"], situation, Recorder(situation, background, 200.0)
        )
        (stated,) = set(made.filters)
        assert (stated.high_pass, stated.low_pass, stated.notch) == (
            (0.3, 70.0, 60.0) if header else (None, None, None)
        )


# People --------------------------------------------------------------------------------


class Opened:
    """Stands for open_recording: remembers what was asked for, gives invented signal."""

    def __init__(self):
        self.paths = []

    def __call__(self, path):
        self.paths.append(Path(path))
        data = noise(3, 100 * 62, 100.0)
        return from_array(data, 100.0, ["EEG Fp1", "EEG C3", "EEG O1"])


def stub_simulate(background, seed, **options):
    return examples(
        [CLEAN], person=[background.person], origin=[f"simulated: {background.origin}"]
    )


@pytest.fixture
def corpora_without_signal(tmp_path):
    for person in range(36):
        for run in (1, 2):
            (tmp_path / "eegmat").mkdir(exist_ok=True)
            (tmp_path / "eegmat" / f"Subject{person:02d}_{run}.edf").touch()
    for name in ("eegmmidb_s001", "gestures_one_person", "clinical_absence"):
        (tmp_path / name).mkdir()
    (tmp_path / "eegmmidb_s001" / "S001R01.edf").touch()
    (tmp_path / "clinical_absence" / "absence.edf").touch()
    return tmp_path


def gathered(train, monkeypatch, root, opened):
    monkeypatch.setattr(read_corpora, "open_recording", opened)
    monkeypatch.setattr(train, "READERS", dict.fromkeys(train.READERS, lambda folder: []))
    monkeypatch.setattr(train, "simulate", stub_simulate)
    return train.gather(root, 1)


def test_reserved_people_are_not_opened(train, monkeypatch, corpora_without_signal):
    opened = Opened()
    gathered(train, monkeypatch, corpora_without_signal, opened)
    subjects = {path.name[:9] for path in opened.paths if path.parent.name == "eegmat"}
    assert subjects == {f"Subject{person:02d}" for person in range(30)}
    assert {path.parent.name for path in opened.paths} == {"eegmat", "eegmmidb_s001"}


def test_validation_people_are_not_training_people(
    train, monkeypatch, corpora_without_signal
):
    training, validation = gathered(train, monkeypatch, corpora_without_signal, Opened())
    assert set(validation.person) == {f"eegmat-{person:02d}" for person in range(24, 30)}
    assert set(training.person) & set(validation.person) == set()
    assert len(set(training.person)) == 25  # 24 people and the one of eegmmidb


def test_seeds_of_training_and_validation_copies_differ(
    train, monkeypatch, corpora_without_signal
):
    seeds = []

    def simulate(background, seed, **options):
        seeds.append(seed)
        return stub_simulate(background, seed)

    monkeypatch.setattr(read_corpora, "open_recording", Opened())
    monkeypatch.setattr(train, "READERS", dict.fromkeys(train.READERS, lambda folder: []))
    monkeypatch.setattr(train, "simulate", simulate)
    train.gather(corpora_without_signal, 1)
    assert len(seeds) == len(set(seeds))


def test_an_absent_corpus_is_named(train, tmp_path):
    with pytest.raises(RecordingError, match="eegmat"):
        train.gather(tmp_path, 1)


# With the recordings -------------------------------------------------------------------


@pytest.mark.corpora
def test_artifact_falls_no_less_than_eegmat_does(corpora):
    (background, *_) = read_corpora.mental_arithmetic(corpora / "eegmat", range(1))
    rate = background.sfreq
    recorder = Recorder(dataclasses.replace(AS_RECORDED, sfreq=rate), background, rate)
    white = np.random.default_rng(0).standard_normal((4, 20_000))
    gain = power_in(recorder(white), rate, 62, 90) / power_in(white, rate, 62, 90)
    own = power_in(background.potentials, rate, 62, 90)
    below = power_in(background.potentials, rate, 30, 38)
    # Without any filter scalp power falls from 34 to 76 Hz by (76 / 34)^2.9 (floor.py).
    assert gain <= own / below * (76 / 34) ** 2.9


@pytest.mark.corpora
def test_training_opens_no_reserved_recording_of_the_corpora(train, monkeypatch, corpora):
    opened = []
    opens = read_corpora.open_recording

    def remember(path):
        opened.append(Path(path))
        return opens(path)

    training, validation = gathered(train, monkeypatch, corpora, remember)
    assert opened
    reserved = {f"Subject{person}" for person in range(30, 36)}
    assert not {path.name[:9] for path in opened} & reserved
    assert "clinical_absence" not in {path.parent.name for path in opened}
    assert set(training.person) & set(validation.person) == set()
