"""From rows to a model: held-out folds, heads, calibration, operating points, the file."""

import dataclasses
import json
import math
from types import SimpleNamespace

import numpy as np
import pytest
import sklearn.ensemble  # noqa: F401 - only libraries loaded by then obey one_thread
from rows import EYE, POP, examples, table_of
from threadpoolctl import threadpool_limits

from artifactlens.curves import Curve, Head, Model, Table, load_model, logistic
from artifactlens.features.catalogue import FEATURE_NAMES, MEASURED
from artifactlens.kinds import KIND_NAMES
from artifactlens.training import fit as fitting
from artifactlens.training.compilation import compile_forest
from artifactlens.training.examples import (
    CLEAN,
    PRESENT,
    UNKNOWN,
    from_table,
    join,
)
from artifactlens.training.fit import (
    DOUBTFUL_SPECIFICITY,
    FOLDS,
    HEAD_FEATURES,
    LEAST_DOUBTFUL,
    LEAST_SURE,
    PAIRS,
    RISING,
    SURE_SPECIFICITY,
    _threshold,
    calibrate,
    clean_seconds,
    deal,
    fit_folds,
    fit_forest,
    fit_head,
    model_body,
)


@pytest.fixture(scope="module", autouse=True)
def one_thread():
    """Small forests on a busy machine: threads that wait for each other take a minute."""
    with threadpool_limits(1):
        yield


def learnable(n=1500, seed=0, kind=EYE, together=0.0):
    """Rows of six people on which two features that the head of a kind sees tell it.

    ``together`` weighs what only both of them tell.
    """
    rng = np.random.default_rng(seed)
    features = rng.normal(size=(n, len(FEATURE_NAMES))).astype(np.float32)
    features[rng.random(features.shape) < 0.05] = np.nan
    seen = [FEATURE_NAMES.index(name) for name in HEAD_FEATURES[KIND_NAMES[kind]][:2]]
    known = np.nan_to_num(features[:, seen])
    score = known.sum(axis=1) * 2 - 1 + together * known.prod(axis=1)
    truth = (rng.random(n) < logistic(score.astype(float))).astype(np.int8)
    person = np.char.add("p", (np.arange(n) // 3 % 6).astype(str))
    return examples(
        truth, kind=kind, features=features, second=np.arange(n) // 3, person=person
    )


# Folds of people -----------------------------------------------------------------------


def test_people_are_dealt_in_the_order_of_their_names():
    names = np.array(["g", "a", "c", "b", "f", "d", "e", "a", "g"])
    np.testing.assert_array_equal(deal(names), [1, 0, 2, 1, 0, 3, 4, 0, 1])
    np.testing.assert_array_equal(deal(names, 3), [0, 0, 2, 1, 2, 0, 1, 0, 0])


def test_folds_depend_on_the_names_alone():
    rng = np.random.default_rng(0)
    names = np.char.add("person-", rng.integers(10, 40, 300).astype(str))
    usual = dict(zip(names.tolist(), deal(names).tolist(), strict=True))
    assert set(usual.values()) == set(range(FOLDS))
    np.testing.assert_array_equal(deal(names), [usual[name] for name in names])
    # Neither the order of the rows nor how many a person has changes anything.
    other = rng.permutation(np.concatenate([names, names[:70], names[:5]]))
    np.testing.assert_array_equal(deal(other), [usual[name] for name in other])


class Remembering:
    """A forest that says of each row whether it saw its person, the row's first number."""

    def __init__(self, people):
        self.people = people

    def decision_function(self, rows):
        return np.isin(rows[:, 0], self.people).astype(float)


def remembered(monkeypatch, numbers, **options):
    """Fold forests that remember, on rows of the person of each number."""
    features = np.zeros((len(numbers), len(FEATURE_NAMES)))
    features[:, 0] = numbers
    rows = examples(
        np.zeros(len(numbers)), features=features, second=np.arange(len(numbers)),
        person=[f"person-{number:02d}" for number in numbers],
    )  # fmt: skip

    def fit_forest(kind, examples, **_):
        return Remembering(np.unique(examples.features[:, 0])), np.array([0])

    monkeypatch.setattr(fitting, "fit_forest", fit_forest)
    return rows, fit_folds("eye", rows, **options)


@pytest.mark.parametrize("folds", [2, 5])
def test_nobody_is_scored_by_a_forest_that_saw_them(monkeypatch, folds):
    numbers = np.random.default_rng(3).integers(0, 13, 200)
    rows, forests = remembered(monkeypatch, numbers, folds=folds)
    np.testing.assert_array_equal(forests.decision(rows.features, rows.person), 0)
    # And each forest saw everybody else.
    assert len(forests.forests) == folds
    for fold, (forest, _) in forests.forests.items():
        others = {n for n in range(13) if forests.fold_of[f"person-{n:02d}"] != fold}
        assert set(forest.people) == others
        assert others < set(range(13))


def test_new_rows_of_a_person_are_scored_by_the_forest_that_left_them_out(monkeypatch):
    rows, forests = remembered(monkeypatch, np.arange(10))
    chosen = rows.subset(np.isin(np.arange(10), [8, 3, 7]))
    twice = join([chosen, chosen])
    np.testing.assert_array_equal(forests.decision(twice.features, twice.person), 0)
    # Somebody of whom no forest knows is scored by the first, which saw all but 0 and 5.
    strangers = np.full(10, "nobody")
    found = forests.decision(rows.features, strangers)
    np.testing.assert_array_equal(found, [0, 1, 1, 1, 1, 0, 1, 1, 1, 1])


def test_other_groups_than_people_stay_together_too(monkeypatch):
    rows, forests = remembered(monkeypatch, np.arange(12) // 2, groups=np.arange(12) // 2)
    np.testing.assert_array_equal(forests.decision(rows.features, np.arange(12) // 2), 0)
    assert forests.fold_of == {0: 0, 1: 1, 2: 2, 3: 3, 4: 4, 5: 0}


def test_what_is_true_of_one_person_alone_is_not_learnt_of_them():
    # Each of ten people is always or never present, told by a number of their own.
    rng = np.random.default_rng(1)
    number = np.repeat(np.arange(10), 120)
    always = rng.permutation(np.arange(10) % 2)
    features = np.zeros((len(number), len(FEATURE_NAMES)))
    features[:, FEATURE_NAMES.index("swing")] = number
    rows = examples(always[number], features=features,
                    person=np.char.add("p", number.astype(str)))  # fmt: skip
    forest, columns = fit_forest("eye", rows)
    seen = forest.decision_function(rows.features[:, columns].astype(float))
    assert ((seen > 0) == (always[number] == 1)).all()
    decision = fit_folds("eye", rows).decision(rows.features, rows.person)
    assert ((decision > 0) == (always[number] == 1)).mean() < 0.8


# Heads ---------------------------------------------------------------------------------


def held_out_of(rows):
    return fit_folds("eye", rows, folds=2).decision(rows.features, rows.person)


@pytest.fixture(scope="module")
def fitted():
    """A head with the rows and the held-out scores that it was made from."""
    rows = learnable()
    held_out = held_out_of(rows)
    return SimpleNamespace(
        rows=rows, held_out=held_out, head=fit_head("eye", rows, held_out)
    )


@pytest.fixture(scope="module")
def head(fitted):
    return fitted.head


EYE_PAIR = HEAD_FEATURES["eye"][:2]


@pytest.fixture(scope="module")
def paired_head():
    with pytest.MonkeyPatch.context() as patch:
        patch.setitem(fitting.PAIRS, "eye", (EYE_PAIR,))
        rows = learnable(together=3.0)
        return fit_head("eye", rows, held_out_of(rows))


@pytest.mark.parametrize("kind", KIND_NAMES)
def test_heads_name_features_of_the_table_once_and_rise_with_some_of_them(kind):
    own = HEAD_FEATURES[kind]
    assert len(set(own)) == len(own)
    assert set(own) <= set(FEATURE_NAMES)
    assert set(RISING[kind]) <= set(own)
    assert {name for pair in PAIRS[kind] for name in pair} <= set(own)


def test_a_score_never_falls_with_what_can_only_speak_for_the_kind():
    rows = learnable()
    falling = FEATURE_NAMES.index("front_swing")
    assert "front_swing" in RISING["eye"]
    # By these rows alone the kind would go with little of it.
    rows.features[:, falling] = np.where(rows.truth[:, EYE] == PRESENT, -1, 1)
    forest, columns = fit_forest("eye", rows)
    compiled = compile_forest(forest, rows.features[::9, columns]).on_columns(columns)
    for column, curve in compiled.curves.items():
        if FEATURE_NAMES[column] in RISING["eye"]:
            assert (np.diff(curve.values) >= 0).all(), FEATURE_NAMES[column]
    used = compiled.curves[FEATURE_NAMES.index(HEAD_FEATURES["eye"][0])]
    assert np.ptp(used.values) > 1


def test_a_head_without_pairs_has_none(head):
    assert head.compiled.pairs == {}


def test_a_pair_that_is_asked_for_finds_what_only_both_tell(head, paired_head):
    (pair,) = paired_head.compiled.pairs
    assert sorted(FEATURE_NAMES[column] for column in pair) == sorted(EYE_PAIR)
    columns = {FEATURE_NAMES[column] for column in paired_head.compiled.curves}
    assert set(EYE_PAIR) <= columns <= set(HEAD_FEATURES["eye"])
    # True table: 3 a b; both far on one side speak for it, on opposite sides against it.
    table = paired_head.compiled.pairs[pair]
    ends = np.array([1.2, -1.2])
    assert table(ends, ends).mean() > 0.5
    assert table(ends, -ends).mean() < -0.5


def test_a_pair_of_a_feature_left_out_is_left_out(monkeypatch):
    monkeypatch.setitem(fitting.PAIRS, "eye", (EYE_PAIR,))
    rows = learnable(together=3.0)
    forest, columns = fit_forest("eye", rows, leave_out=frozenset(EYE_PAIR[:1]))
    assert compile_forest(forest, rows.features[:, columns]).pairs == {}


def test_a_head_uses_only_the_features_of_its_kind(head):
    names = {FEATURE_NAMES[column] for column in head.compiled.curves}
    assert names <= set(HEAD_FEATURES["eye"])
    assert set(HEAD_FEATURES["eye"][:2]) <= names


def test_operating_points_keep_the_stated_share_of_clean_seconds_unmarked(fitted):
    head = fitted.head
    probability = logistic(head.offset + head.slope * fitted.held_out)
    worst = clean_seconds(fitted.rows, "eye", probability)
    assert len(worst) > 100
    for point, share in (
        (head.sure, SURE_SPECIFICITY["eye"]),
        (head.doubtful, DOUBTFUL_SPECIFICITY["eye"]),
    ):
        # The quantile lies between two of so many values: at most these are above.
        assert (worst >= point).sum() <= math.ceil((1 - share) * (len(worst) - 1))
    assert LEAST_DOUBTFUL <= head.doubtful <= head.sure < 1
    assert head.sure >= LEAST_SURE


def test_rows_without_a_held_out_score_teach_but_set_nothing(fitted):
    rows, held_out = fitted.rows, fitted.held_out
    silent = rows.person == "p1"
    found = fit_head("eye", rows, np.where(silent, np.nan, held_out))
    # The forest is made from everybody all the same...
    assert found.compiled.base == fitted.head.compiled.base
    for column, curve in fitted.head.compiled.curves.items():
        np.testing.assert_array_equal(found.compiled.curves[column].values, curve.values)
    # ... and calibration and operating points from the others alone.
    others = rows.subset(~silent)
    slope, offset = calibrate(held_out[~silent], others.truth[:, EYE])
    assert (found.slope, found.offset) == (slope, offset)
    assert (slope, offset) != (fitted.head.slope, fitted.head.offset)
    worst = clean_seconds(others, "eye", logistic(offset + slope * held_out[~silent]))
    assert found.sure == _threshold(worst, SURE_SPECIFICITY["eye"], LEAST_SURE)


def test_rows_of_unknown_truth_calibrate_nothing(fitted):
    unknown = np.arange(len(fitted.rows)) % 4 == 0
    truth = fitted.rows.truth.copy()
    truth[unknown, EYE] = UNKNOWN
    rows = dataclasses.replace(fitted.rows, truth=truth)
    found = fit_head("eye", rows, fitted.held_out)
    expected = calibrate(fitted.held_out[~unknown], truth[~unknown, EYE])
    assert (found.slope, found.offset) == expected


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
