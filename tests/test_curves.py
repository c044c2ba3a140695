"""The model as steps of features and pairs: edges, exact sums, and refusing damage."""

import copy
import hashlib
import json
import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from artifactlens.curves import (
    MODEL_VERSION,
    Curve,
    Head,
    Model,
    Table,
    load_model,
    logistic,
)
from artifactlens.errors import ModelError
from artifactlens.evidence import explain, values_at
from artifactlens.features import FeatureTable
from artifactlens.features.catalogue import FEATURE_NAMES, MEASURED, feature_table_sha256
from artifactlens.kinds import KIND_NAMES


def body():
    """A small model: three curves and a pair per kind."""
    rng = np.random.default_rng(4)
    heads = {}
    for kind in KIND_NAMES:
        curves = {}
        for name in ("swing", "step_rise", "slope"):
            edges = np.sort(rng.choice(np.arange(-30, 60), 4, replace=False) + 0.5)
            curves[name] = {
                "edges": edges.tolist(),
                "values": rng.normal(size=5).round(3).tolist(),
                "missing": -0.25,
            }
        heads[kind] = {
            "base": -2.0,
            "curves": curves,
            "pairs": [
                {
                    "features": ["slope", "step"],
                    "edges": [[-1.5], [10.5, 20.5]],
                    "values": rng.normal(size=(3, 4)).round(3).tolist(),
                }
            ],
            "calibration": {"slope": 1.5, "offset": 0.5},
            "sure": 0.9,
            "doubtful": 0.4,
        }
    return {
        "model_version": MODEL_VERSION,
        "feature_table_sha256": feature_table_sha256(),
        "name": "small",
        "heads": heads,
        "training": {"corpora": ["invented"], "seed": 4},
    }


def written(tmp_path, content):
    path = tmp_path / "model.json"
    path.write_text(content if isinstance(content, str) else json.dumps(content))
    return path


def table_of(values, usual=None):
    values = np.asarray(values, dtype=np.float32)
    n_epochs, n_sites = values.shape[1:]
    return FeatureTable(
        values=values,
        usual=np.zeros((len(MEASURED), n_sites), np.float32) if usual is None else usual,
        pace=np.zeros((n_epochs, n_sites, 10), np.float16),
        step_at=np.zeros((n_epochs, n_sites), np.float16),
        front_at=np.zeros(n_epochs, np.float16),
        segment=np.zeros(n_epochs, np.int64),
    )


# One curve -----------------------------------------------------------------------------


def test_steps_are_closed_on_the_right():
    curve = Curve(np.array([0.0, 1.0]), np.array([10.0, 20.0, 30.0]), -1.0)
    just = np.nextafter
    x = np.array([-np.inf, -5, 0.0, just(0.0, 1), 0.5, 1.0, just(1.0, 2), 99, np.inf])
    np.testing.assert_array_equal(curve(x), [10, 10, 10, 20, 20, 20, 30, 30, 30])


def test_what_is_missing_has_its_own_value_and_any_shape_will_do():
    curve = Curve(np.array([0.0]), np.array([1.0, 2.0]), -7.0)
    found = curve(np.array([[np.nan, -1.0], [1.0, np.nan]]))
    np.testing.assert_array_equal(found, [[-7, 1], [2, -7]])
    assert curve(np.float64("nan")) == -7.0
    assert curve(np.zeros((0, 3))).shape == (0, 3)


def test_a_curve_without_edges_is_a_constant():
    curve = Curve(np.zeros(0), np.array([3.0]), -1.0)
    np.testing.assert_array_equal(curve(np.array([-9.0, 9.0, np.nan])), [3, 3, -1])


def test_float32_measurements_meet_float64_edges_as_the_numbers_they_are():
    # float32(0.1) is 0.100000001...: it lies above an edge at 0.1.
    curve = Curve(np.array([0.1]), np.array([0.0, 1.0]), 0.0)
    assert curve(np.array([np.float32(0.1)]))[0] == 1.0
    assert curve(np.array([0.1]))[0] == 0.0


# A pair --------------------------------------------------------------------------------


def test_a_pair_is_read_from_its_table_worked_out_by_hand():
    nan, just = np.nan, np.nextafter
    #                        second <= 5, beyond, missing
    values = np.array([[1.0, 2.0, 3.0], [4.0, 5.0, 6.0], [7.0, 8.0, 9.0]])
    table = Table(np.array([0.0]), np.array([5.0]), values)
    for first, second, expected in (
        (-1.0, 0.0, 1), (0.0, 5.0, 1), (-1.0, 6.0, 2), (0.0, just(5.0, 6), 2), (-1.0, nan, 3),
        (1.0, 5.0, 4), (just(0.0, 1), 0.0, 4), (1.0, 6.0, 5), (np.inf, np.inf, 5), (9.0, nan, 6),
        (nan, 4.0, 7), (nan, -np.inf, 7), (nan, 6.0, 8), (nan, nan, 9),
    ):  # fmt: skip
        assert table(np.array(first), np.array(second)) == expected


def test_a_pair_takes_measurements_of_any_shape_and_may_have_no_edges():
    table = Table(np.zeros(0), np.array([1.0, 2.0]), np.arange(8.0).reshape(2, 4))
    x = np.array([[3.0, np.nan, -3.0], [np.nan, 0.0, 0.0]], dtype=np.float32)
    y = np.array([[1.0, 1.5, 2.0], [np.nan, np.nan, 2.5]], dtype=np.float32)
    np.testing.assert_array_equal(table(x, y), [[0, 5, 1], [7, 3, 2]])
    assert table(np.zeros((0, 3)), np.zeros((0, 3))).shape == (0, 3)


# The model -----------------------------------------------------------------------------

VALUES = st.sampled_from([-3.0, -1.0, 0.0, 0.5, 1.0, 2.5, float("nan"), float("inf")])
EDGES = st.lists(
    st.sampled_from([-3.0, -1.0, 0.0, 0.5, 0.75, 2.5]), unique=True, max_size=5
).map(sorted)
NAMES = ("swing", "swing_rise", "step", "slope", "spread")
PAIRS = (("swing", "step"), ("slope", "swing_rise"), ("spread", "slope"))


@st.composite
def models(draw):
    heads = []
    for kind in KIND_NAMES:
        curves = {}
        for name in draw(st.sets(st.sampled_from(NAMES))):
            edges = draw(EDGES)
            steps = st.floats(-5, 5, allow_nan=False)
            values = draw(st.lists(steps, min_size=len(edges) + 1, max_size=len(edges) + 1))
            curves[name] = Curve(np.array(edges, float), np.array(values), draw(steps))
        pairs = {}
        for pair in draw(st.sets(st.sampled_from(PAIRS), max_size=2)):
            rows, columns = (np.array(draw(EDGES), float) for _ in pair)
            shape = len(rows) + 2, len(columns) + 2
            seed = draw(st.integers(0, 99))
            values = np.random.default_rng(seed).normal(size=shape, scale=3)
            pairs[pair] = Table(rows, columns, values)
        heads.append(Head(kind, draw(st.floats(-5, 5)), curves, 0.9, 0.5, pairs))
    return Model("drawn", "", tuple(heads), {})


@settings(max_examples=80, deadline=None)
@given(model=models(), data=st.data())
def test_scores_are_the_base_plus_curves_and_pairs_and_contributions_add_up(model, data):
    n_epochs, n_sites = data.draw(st.integers(1, 4)), data.draw(st.integers(1, 3))
    values = np.zeros((len(MEASURED), n_epochs, n_sites), dtype=np.float32)
    for name in set(NAMES) & set(MEASURED):
        values[MEASURED.index(name)] = np.reshape(
            data.draw(
                st.lists(VALUES, min_size=n_epochs * n_sites, max_size=n_epochs * n_sites)
            ),
            (n_epochs, n_sites),
        )
    table = table_of(np.where(np.isinf(values) & (values < 0), 0, values))
    scores = model.scores(table)
    assert scores.shape == (4, n_epochs, n_sites)
    for row, head in enumerate(model.heads):
        expected = np.full((n_epochs, n_sites), head.base)
        for name, curve in head.curves.items():
            column = table.column(name)
            for epoch in range(n_epochs):
                for site in range(n_sites):
                    x = float(column[epoch, site])
                    step = sum(edge < x for edge in curve.edges)
                    expected[epoch, site] += (
                        curve.missing if math.isnan(x) else curve.values[step]
                    )
        for names, pair in head.pairs.items():
            for cell in np.ndindex(n_epochs, n_sites):
                steps = []
                for name, edges in zip(names, (pair.rows, pair.columns), strict=True):
                    x = float(table.column(name)[cell])
                    steps.append(
                        len(edges) + 1 if math.isnan(x) else sum(e < x for e in edges)
                    )
                expected[cell] += pair.values[*steps]
        np.testing.assert_allclose(scores[row], expected, atol=1e-9)
        epochs, sites = (cell.ravel() for cell in np.indices((n_epochs, n_sites)))
        explained = explain(
            model, head.kind, values_at(table, epochs, sites), no_usual(n_sites), sites
        )
        total = [head.base + sum(part.log_odds for part in parts) for parts in explained]
        np.testing.assert_allclose(total, scores[row].ravel(), atol=1e-9)
        for parts in explained:
            assert sorted(part.feature for part in parts) == sorted(
                [*head.curves, *map("+".join, head.pairs)]
            )


def no_usual(n_sites):
    return {name: np.full(n_sites, np.nan, np.float32) for name in FEATURE_NAMES}


def test_equal_contributions_stand_in_the_order_of_the_feature_table():
    def curve(value):
        return Curve(np.array([0.0]), np.array([0.0, value]), 0.5)

    # Written in another order; slope adds as much as swing, and spread more.
    curves = {"slope": curve(-2.0), "swing": curve(2.0), "spread": curve(3.0)}
    heads = tuple(Head(kind, 0.0, curves, 0.9, 0.5) for kind in KIND_NAMES)
    (parts,) = explain(
        Model("one", "", heads, {}),
        "pop",
        {name: np.array([1.0]) for name in FEATURE_NAMES},
        no_usual(1),
        np.array([0]),
    )
    found = [(part.feature, part.log_odds) for part in parts]
    assert found == [("spread", 3.0), ("swing", 2.0), ("slope", -2.0)]


def test_logistic_is_exact_and_does_not_overflow():
    x = np.array([0.0, math.log(3), -math.log(3), 800.0, -800.0, np.inf, -np.inf])
    np.testing.assert_allclose(logistic(x), [0.5, 0.75, 0.25, 1, 0, 1, 0], atol=1e-12)
    assert np.isnan(logistic(np.array([np.nan])))[0]


# Loading -------------------------------------------------------------------------------


def test_a_model_is_loaded_with_its_calibration_worked_in(tmp_path):
    raw = body()
    path = written(tmp_path, raw)
    model = load_model(path)
    assert model.name == "small"
    assert model.sha256 == hashlib.sha256(path.read_bytes()).hexdigest()
    assert model.training == raw["training"]
    assert [head.kind for head in model.heads] == list(KIND_NAMES)
    for head in model.heads:
        entry = raw["heads"][head.kind]
        assert head.base == 0.5 + 1.5 * -2.0
        assert (head.sure, head.doubtful) == (0.9, 0.4)
        for name, curve in head.curves.items():
            np.testing.assert_array_equal(curve.edges, entry["curves"][name]["edges"])
            np.testing.assert_allclose(
                curve.values, 1.5 * np.array(entry["curves"][name]["values"])
            )
            assert curve.missing == 1.5 * -0.25
        ((names, pair),) = head.pairs.items()
        assert names == ("slope", "step")
        (written_pair,) = entry["pairs"]
        np.testing.assert_array_equal(pair.rows, written_pair["edges"][0])
        np.testing.assert_array_equal(pair.columns, written_pair["edges"][1])
        np.testing.assert_array_equal(pair.values, 1.5 * np.array(written_pair["values"]))


def test_a_head_may_have_no_pair(tmp_path):
    raw = changed(("heads", "pop", "pairs"), [])
    assert [len(head.pairs) for head in load_model(written(tmp_path, raw)).heads] == [
        1,
        1,
        0,
        1,
    ]


def test_calibrated_scores_are_slope_times_raw_scores_plus_offset(tmp_path):
    raw = body()
    plain = copy.deepcopy(raw)
    for entry in plain["heads"].values():
        entry["calibration"] = {"slope": 1.0, "offset": 0.0}
    values = np.random.default_rng(1).normal(size=(len(MEASURED), 6, 3), scale=30)
    values[:, 2, 1] = np.nan
    table = table_of(values)
    calibrated = load_model(written(tmp_path, raw)).scores(table)
    uncalibrated = load_model(written(tmp_path, plain)).scores(table)
    np.testing.assert_allclose(calibrated, 1.5 * uncalibrated + 0.5, atol=1e-12)


def changed(path, value):
    """A model body in which the entry at ``path`` has another value."""
    raw = body()
    entry = raw
    for key in path[:-1]:
        entry = entry[key]
    if value is KeyError:
        del entry[path[-1]]
    else:
        entry[path[-1]] = value
    return raw


SWING = ("heads", "eye", "curves", "swing")
PAIR = ("heads", "eye", "pairs", 0)


def a_pair(*features):
    return {"features": list(features), "edges": [[], []], "values": [[0, 0], [0, 0]]}


@pytest.mark.parametrize(
    ("path", "value", "words"),
    [
        (("model_version",), 1, "reads models of version 2; the file has version 1"),
        (("model_version",), "2", "the file has version '2'"),
        (("feature_table_sha256",), "0" * 64, "another feature table"),
        (("feature_table_sha256",), None, "another feature table"),
        ((*SWING, "edges"), [1, 2, 2, 3], "swing needs rising edges"),
        ((*SWING, "edges"), [1, 3, 2, 4], "swing needs rising edges"),
        ((*SWING, "edges"), [1, 2, 3], "one value more than edges"),
        ((*SWING, "edges"), [[1], [2], [3], [4]], "swing needs rising edges"),
        ((*SWING, "values"), [1, 2, 3, 4, 5, 6], "one value more than edges"),
        ((*SWING, "values"), [1, 2, float("nan"), 4, 5], "swing holds a number that is not"),
        ((*SWING, "values"), [1, 2, float("inf"), 4, 5], "swing holds a number that is not"),
        ((*SWING, "edges"), [1, 2, 3, float("inf")], "swing holds a number that is not"),
        ((*SWING, "edges"), [1, 2, float("nan"), 4], "swing holds a number that is not"),
        ((*SWING, "missing"), float("nan"), "swing holds a number that is not"),
        ((*SWING, "missing"), None, "damaged"),
        ((*SWING, "missing"), KeyError, "damaged: 'missing'"),
        ((*SWING, "values"), "abc", "damaged"),
        ((*SWING, "values"), [1, 2, "x", 4, 5], "damaged"),
        ((*SWING, "values"), [1, 2, 10**400, 4, 5], "damaged"),
        ((*PAIR, "edges"), [[1], [2, 2]], "slope and step needs rising edges"),
        ((*PAIR, "edges"), [[float("inf")], [1, 2]], "slope and step holds a number that is not"),
        ((*PAIR, "edges"), [[1], [1, float("nan")]], "slope and step holds a number that is not"),
        ((*PAIR, "edges"), [[2, 1], [1]], "slope and step needs rising edges"),
        ((*PAIR, "edges"), [[1, 2], [1]], "two rows and two columns more"),
        ((*PAIR, "edges"), [[[1]], [1, 2]], "slope and step needs rising edges"),
        ((*PAIR, "edges"), [[1]], "damaged"),
        ((*PAIR, "edges"), [[1], [1, 2], [3]], "damaged"),
        ((*PAIR, "values"), [[0] * 4] * 2, "two rows and two columns more"),
        ((*PAIR, "values"), [[0] * 3] * 3, "two rows and two columns more"),
        ((*PAIR, "values"), [0] * 12, "two rows and two columns more"),
        ((*PAIR, "values"), [[0] * 4, [0] * 3, [0] * 4], "damaged"),
        ((*PAIR, "values"), [[0] * 4] * 2 + [[0, 0, 0, None]], "holds a number that is not"),
        ((*PAIR, "values"), [[0] * 4] * 2 + [[0, 0, 0, float("inf")]], "number that is not"),
        ((*PAIR, "values"), KeyError, "damaged: 'values'"),
        ((*PAIR, "features"), ["slope"], "damaged"),
        ((*PAIR, "features"), ["slope", "step", "swing"], "damaged"),
        ((*PAIR, "features"), ["slope", "sneeze"], "unknown feature 'sneeze'"),
        ((*PAIR, "features"), [["slope"], "step"], "unknown feature"),
        ((*PAIR, "features"), ["slope", "slope"], "slope is paired with itself"),
        (("heads", "eye", "pairs"), [a_pair("step", "swing")] * 2, "step and swing stands twice"),
        (("heads", "eye", "pairs"), [a_pair("step", "swing"), a_pair("swing", "step")],
         "swing and step stands twice"),
        (("heads", "eye", "pairs"), {}, "pairs are not a list"),
        (("heads", "eye", "pairs"), [1], "damaged"),
        (("heads", "eye", "pairs"), KeyError, "damaged: 'pairs'"),
        (("heads", "pop"), KeyError, "damaged: 'pop'"),
        (("heads",), KeyError, "damaged: 'heads'"),
        (("heads",), [], "damaged"),
        (("heads", "pop", "curves", "sneeze"), {"edges": [], "values": [0], "missing": 0},
         "unknown features .'sneeze'."),
        (("heads", "pop", "sure"), 0.3, "pop are not 0 < doubtful <= sure < 1"),
        (("heads", "pop", "sure"), 1.0, "pop are not 0 < doubtful <= sure < 1"),
        (("heads", "pop", "doubtful"), 0.0, "pop are not 0 < doubtful <= sure < 1"),
        (("heads", "pop", "doubtful"), float("nan"), "pop are not 0 < doubtful <= sure"),
        (("heads", "pop", "base"), float("nan"), "calibration of pop is not finite"),
        (("heads", "pop", "base"), float("inf"), "calibration of pop is not finite"),
        (("heads", "pop", "calibration", "slope"), 0, "calibration of pop is not finite"),
        (("heads", "pop", "calibration", "slope"), -1, "finite and rising"),
        (("heads", "pop", "calibration", "offset"), float("nan"), "not finite"),
        (("heads", "pop", "calibration"), KeyError, "damaged: 'calibration'"),
        (("training",), KeyError, "damaged: 'training'"),
        (("name",), KeyError, "damaged: 'name'"),
    ],
)  # fmt: skip
def test_damage_is_refused_in_words(tmp_path, path, value, words):
    broken = written(tmp_path, changed(path, value))
    with pytest.raises(ModelError, match=words) as caught:
        load_model(broken)
    assert caught.value.remedy


@pytest.mark.parametrize("text", ["", "{", "[1, 2]", "null", '"model"', "PK\x03\x04", "{}"])
def test_what_is_no_model_is_refused_in_words(tmp_path, text):
    with pytest.raises(ModelError, match="damaged"):
        load_model(written(tmp_path, text))


def test_bytes_that_are_no_text_are_refused_in_words(tmp_path):
    path = tmp_path / "model.json"
    path.write_bytes(b"\x80\x04\x95\xff\xfe")
    with pytest.raises(ModelError, match="damaged"):
        load_model(path)


def test_json_nested_without_end_is_refused_in_words(tmp_path):
    with pytest.raises(ModelError, match="damaged"):
        load_model(written(tmp_path, "[" * 200_000))


def test_a_missing_file_is_told_with_what_to_do(tmp_path):
    with pytest.raises(ModelError, match="cannot be read") as caught:
        load_model(tmp_path / "nowhere.json")
    assert "nowhere.json" in caught.value.problem
    assert "Install artifactlens again" in caught.value.remedy


def test_a_folder_is_no_model(tmp_path):
    with pytest.raises(ModelError, match="cannot be read"):
        load_model(tmp_path)
