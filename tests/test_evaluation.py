"""Measures, intervals, tables and figures of the evidence: by hand and against scikit-learn."""

import dataclasses
import re
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from sklearn.metrics import average_precision_score, brier_score_loss, roc_auc_score

import artifactlens
from artifactlens.errors import OptionError
from artifactlens.features.catalogue import FEATURE_NAMES
from artifactlens.kinds import KIND_NAMES
from artifactlens.training.evaluation import conditions, figures, tables
from artifactlens.training.evaluation.ablation import Ablation
from artifactlens.training.evaluation.intervals import (
    Interval,
    RankedCells,
    auc_difference,
    bootstrap_measures,
    bootstrap_rate,
    draw_people,
    evaluate_kind,
)
from artifactlens.training.evaluation.metrics import (
    PersonCounts,
    calibration_bins,
    calibration_error,
    clean_rate,
    count_clean,
    measure_scores,
    per_second,
    rank_scores,
    rate_of,
    recordings_of,
    sensitivity_at,
)
from artifactlens.training.examples import CLEAN, PRESENT, UNKNOWN, Examples, join
from artifactlens.training.situation import Background, draw_situation

EYE, MUSCLE, POP, MAINS = range(4)
NAN = float("nan")


def examples(truth, *, swing=10.0, **columns):
    """Rows with this truth of every kind; a constant usual swing unless told otherwise."""
    n = len(truth)
    features = np.zeros((n, len(FEATURE_NAMES)), np.float32)
    features[:, FEATURE_NAMES.index("swing")] = swing
    values = {
        "features": features,
        "truth": np.repeat(np.asarray(truth, np.int8)[:, None], 4, axis=1),
        "person": np.full(n, "p"),
        "second": np.arange(n),
        "origin": np.full(n, "simulated: x"),
        "condition": np.full(n, ""),
        "strength": np.zeros((n, 4), np.float32),
        "look_alike": np.full(n, ""),
    }
    return Examples(**values | {name: np.asarray(value) for name, value in columns.items()})


def drawn(n=2000, n_people=6, seed=0, digits=2):
    """Scores with ties, truth that follows them, and people who differ."""
    rng = np.random.default_rng(seed)
    who = rng.integers(0, n_people, n)
    truth = (rng.random(n) < 0.1 + 0.05 * who).astype(np.int8)
    score = np.round(1 / (1 + np.exp(2 - 2.5 * truth - rng.normal(size=n))), digits)
    return score, truth, who


# Measures of cells ---------------------------------------------------------------------


def test_measures_by_hand():
    truth = np.array([0, 0, 0, 0, 1, 1, -1, 1], np.int8)
    score = np.array([0.1, 0.2, 0.3, 0.6, 0.4, 0.9, 0.9, NAN])
    found = measure_scores(score, truth, sure=0.6, doubtful=0.3)
    # The last row was not judged, the one before is unknown.
    assert (found.n_present, found.n_clean) == (2, 4)
    assert found.prevalence == pytest.approx(1 / 3)
    assert found.auc == pytest.approx(7 / 8)  # of 2 x 4 pairs only (0.4, 0.6) is wrong
    # Ranks of the present: 1 and 3, so precision 1/1 and 2/3.
    assert found.average_precision == pytest.approx((1 + 2 / 3) / 2)
    # Only the limit 0.6 leaves 95 % of four clean unmarked; 0.9 lies above it.
    assert (found.sensitivity_95, found.sensitivity_99) == (0.5, 0.5)
    assert (found.sensitivity_sure, found.specificity_sure) == (0.5, 0.75)  # 0.6 is marked
    assert found.balanced_accuracy_sure == pytest.approx(0.625)
    assert (found.sensitivity_doubtful, found.specificity_doubtful) == (1.0, 0.5)
    assert found.balanced_accuracy_doubtful == pytest.approx(0.75)
    brier = (0.01 + 0.04 + 0.09 + 0.36 + 0.36 + 0.01) / 6
    assert found.brier == pytest.approx(brier)
    # Six cells, each in a bin of its own: the mean distance from the truth.
    assert found.calibration_error == pytest.approx((0.1 + 0.2 + 0.3 + 0.6 + 0.6 + 0.1) / 6)


@pytest.mark.parametrize("only", [CLEAN, PRESENT])
def test_a_missing_class_gives_no_number(only):
    found = measure_scores(np.array([0.2, 0.8]), np.full(2, only, np.int8), 0.5, 0.3)
    both = [
        "auc", "average_precision", "sensitivity_95", "sensitivity_99", "brier",
        "calibration_error", "balanced_accuracy_sure", "balanced_accuracy_doubtful",
    ]  # fmt: skip
    assert [getattr(found, name) for name in both] == [None] * len(both)
    own, other = "sensitivity", "specificity"
    if only == CLEAN:
        own, other = other, own
    assert getattr(found, f"{own}_sure") == 0.5
    assert getattr(found, f"{other}_sure") is None
    assert found.prevalence == float(only)


def test_no_cell_gives_no_number_at_all():
    found = measure_scores(np.full(3, NAN), np.array([0, 1, -1], np.int8), 0.5, 0.3)
    values = dataclasses.asdict(found)
    assert (values.pop("n_present"), values.pop("n_clean")) == (0, 0)
    assert set(values.values()) == {None}


def test_area_precision_and_brier_are_those_of_the_library():
    score, truth, _ = drawn()
    found = measure_scores(score, truth, 0.5, 0.3)
    assert found.auc == roc_auc_score(truth, score)
    assert found.average_precision == average_precision_score(truth, score)
    assert found.brier == brier_score_loss(truth, score)


def test_scores_of_other_rows_are_refused():
    with pytest.raises(OptionError, match=r"shape \(3,\) for 2 cells"):
        rank_scores(np.zeros(3), np.zeros(2, np.int8))


def test_sensitivity_leaves_at_least_the_stated_share_of_clean_unmarked():
    clean = np.arange(20) / 20  # 0.00 ... 0.95
    present = np.array([0.0, 0.9, 0.925, 0.95, 0.97])
    # 95 % of 20 are 19: the limit is 0.90, and what equals it is not found.
    assert sensitivity_at(present, clean, [0.95])[0] == pytest.approx(3 / 5)
    assert sensitivity_at(present, clean, [0.951])[0] == pytest.approx(1 / 5)
    assert sensitivity_at(present, clean, [1.0, 0.05]).tolist() == pytest.approx([0.2, 0.8])


def test_calibration_error_by_hand():
    # 30 cells, 15 bins of two: probability 0.02 k twice, truth one of the two from k = 10 on.
    step = np.repeat(np.arange(15), 2)
    score = 0.02 * step + 0.001 * np.tile([0, 1], 15)
    truth = ((step >= 10) & (np.arange(30) % 2 == 0)).astype(np.int8)
    expected = np.mean(
        [abs(0.02 * k + 0.0005 - (0.5 if k >= 10 else 0.0)) for k in range(15)]
    )
    assert calibration_error(score, truth) == pytest.approx(expected)


def test_calibration_error_does_not_depend_on_the_order_of_equal_scores():
    score = np.array([0.1] * 40 + [0.7] * 20)
    truth = np.array([1] * 4 + [0] * 36 + [1] * 5 + [0] * 15, np.int8)
    # Two bins: 0.1 holds a tenth as stated, 0.7 only a quarter: 20/60 of 0.45.
    assert calibration_error(score, truth) == pytest.approx(0.45 / 3)
    order = np.random.default_rng(0).permutation(60)
    assert calibration_error(score[order], truth[order]) == pytest.approx(0.45 / 3)


def test_calibration_bins_hold_alike_many_cells():
    score = np.random.default_rng(1).random(1501)
    bins, n_bins = calibration_bins(score)
    counts = np.bincount(bins)
    assert n_bins == len(counts) == 15
    assert counts.min() >= 100
    assert counts.max() <= 101
    assert score[bins == 0].max() < score[bins == 1].min()


# Seconds and recordings ----------------------------------------------------------------


def test_a_second_is_present_at_any_site_and_clean_only_at_all():
    rows = examples(
        [CLEAN, CLEAN, CLEAN, PRESENT, CLEAN, UNKNOWN, UNKNOWN],
        second=[3, 1, 3, 1, 2, 2, 5],
        person=["a", "b", "a", "b", "c", "c", "d"],
    )
    found = per_second(rows, "eye", np.array([0.2, 0.9, 0.4, 0.1, NAN, 0.3, NAN]))
    assert found.second.tolist() == [1, 2, 3, 5]
    assert found.person.tolist() == ["b", "c", "a", "d"]
    assert found.truth.tolist() == [PRESENT, UNKNOWN, CLEAN, UNKNOWN]
    np.testing.assert_array_equal(found.highest, [0.9, 0.3, 0.4, NAN])


def recording(n_seconds, swing, person="p", condition="c"):
    """One recording of clean seconds at two sites with these usual swings."""
    n = 2 * n_seconds
    rise = np.linspace(-6, 12, n).astype(np.float32)
    made = examples(
        [CLEAN] * n,
        second=np.arange(n) // 2,
        person=np.full(n, person),
        condition=np.full(n, condition),
    )
    usual = np.tile(np.asarray(swing, float), n_seconds)
    made.features[:, FEATURE_NAMES.index("swing")] = usual * 10 ** (rise / 20)
    made.features[:, FEATURE_NAMES.index("swing_rise")] = rise
    return made


def test_recordings_are_told_by_their_usual_swings():
    rows = join([recording(5, (20, 30)), recording(4, (21, 31)), recording(3, (21, 31))])
    # The third has the same person, condition and usual values: nothing tells it apart.
    assert recordings_of(rows).tolist() == [0] * 5 + [1] * 7


@pytest.mark.parametrize("change", ["person", "condition", "origin"])
def test_recordings_are_told_by_their_words(change):
    second = recording(2, (20, 30))
    second = dataclasses.replace(second, **{change: np.full(4, "real: other")})
    assert recordings_of(join([recording(3, (20, 30)), second])).tolist() == [0, 0, 0, 1, 1]


def test_a_lost_site_does_not_end_a_recording():
    rows = recording(6, (20, 30))
    rows = rows.subset(~((rows.second == 2) & (np.arange(12) % 2 == 1)))
    assert recordings_of(rows).tolist() == [0] * 6


def test_flags_per_hour_by_hand():
    first, second = recording(8, (20, 30)), recording(4, (25, 40))
    rows = join([first, second])
    score = np.full(24, 0.1)

    def mark(at, value):
        score[2 * at] = value

    for at in (1, 2):  # two seconds, one flag
        mark(at, 0.9)
    for at in (5, 6):  # second 6 is not clean: two marks around it do not touch
        mark(at, 0.9)
    mark(7, 0.9)
    rows.truth[12, EYE] = PRESENT
    mark(8, 0.9)  # the first second of the other recording: a flag of its own
    mark(10, 0.5)  # doubtful only
    found = clean_rate(rows, "eye", score, sure=0.8, doubtful=0.4)
    # 12 seconds less one: 11 clean. Sure: {1, 2}, {5}, {7}, {8}; doubtful: {10} as well.
    assert found.seconds == 11
    assert found.flags_sure == pytest.approx(4 * 3600 / 11)
    assert found.seconds_sure == pytest.approx(5 * 3600 / 11)
    assert found.flags_doubtful == pytest.approx(5 * 3600 / 11)
    assert found.seconds_doubtful == pytest.approx(6 * 3600 / 11)


def test_a_missing_second_parts_two_flags():
    rows = recording(5, (20, 30))
    rows = rows.subset(rows.second != 2)
    found = count_clean(per_second(rows, "pop", np.full(8, 0.9)), 0.5, 0.5)
    assert found.flags_sure.tolist() == [2]
    assert found.seconds_sure.tolist() == [4]


def test_seconds_in_which_the_kind_was_not_judged_do_not_count():
    rows = recording(4, (20, 30))
    score = np.repeat([0.9, NAN, 0.9, 0.1], 2)
    score[1] = NAN  # one site judged is enough
    found = clean_rate(rows, "eye", score, 0.5, 0.5)
    assert found.seconds == 3
    assert found.flags_sure == pytest.approx(2 * 3600 / 3)


def test_no_clean_second_gives_no_rate():
    found = clean_rate(examples([PRESENT, UNKNOWN]), "eye", np.ones(2), 0.5, 0.5)
    assert dataclasses.astuple(found) == (0, None, None, None, None)


# Bootstrap over people -----------------------------------------------------------------


@pytest.mark.parametrize("seed", range(3))
def test_a_reweighting_is_the_library_with_weights(seed):
    score, truth, who = drawn(seed=seed, digits=1 + seed)
    cells = RankedCells(score, truth, who, 6)
    weights = draw_people(6, 40, seed)[:12]
    weights[0] = 1
    areas = cells.auc(weights)
    for row, area in zip(weights, areas, strict=True):
        of_cell = row[who]
        assert area == pytest.approx(
            roc_auc_score(truth, score, sample_weight=of_cell), abs=1e-12
        )
        assert cells.average_precision(row) == pytest.approx(
            average_precision_score(truth, score, sample_weight=of_cell), abs=1e-12
        )
        # A weight is a repetition: the same as the plain measure of the repeated cells.
        times = of_cell.astype(int)
        plain = sensitivity_at(
            np.repeat(score[truth == 1], times[truth == 1]),
            np.repeat(score[truth == 0], times[truth == 0]),
            [0.95, 0.99],
        )
        np.testing.assert_allclose(cells.sensitivity_at(row, np.array([0.95, 0.99])), plain)


def test_one_of_everyone_gives_the_measures_themselves():
    from artifactlens.training.evaluation.intervals import _resampled

    score, truth, who = drawn()
    plain = measure_scores(score, truth, 0.5, 0.3)
    again = _resampled(score, truth, who, np.ones((1, 6)), (0.5, 0.3))
    assert len(again) == 13  # everything but the two counts
    for name, value in again.items():
        assert value[0] == pytest.approx(getattr(plain, name), abs=1e-12), name


def test_people_without_cells_of_a_class_make_no_area():
    score = np.array([0.1, 0.9, 0.4])
    cells = RankedCells(score, np.array([0, 1, 0], np.int8), np.array([0, 1, 2]), 3)
    assert np.isnan(cells.auc(np.array([[3.0, 0.0, 0.0]]))[0])
    assert np.isnan(cells.average_precision(np.array([3.0, 0.0, 0.0])))
    assert np.isnan(cells.sensitivity_at(np.array([0.0, 3.0, 0.0]), np.array([0.95]))[0])


def test_an_interval_lies_around_the_measure_and_is_wider_where_people_differ():
    rng = np.random.default_rng(3)
    who = np.repeat(np.arange(8), 400)
    truth = (np.arange(3200) % 4 == 0).astype(np.int8)
    person = np.char.add("p", who.astype(str))

    def interval(spread):
        skill = 1.5 + spread * np.linspace(-1, 1, 8)
        score = 1 / (1 + np.exp(1 - skill[who] * truth - rng.normal(size=3200)))
        found = bootstrap_measures(score, truth, person, 0.5, 0.3)["auc"]
        assert found.low < rank_scores(score, truth).auc < found.high
        return found.high - found.low

    assert interval(1.4) > 2 * interval(0.0)


def test_the_interval_of_a_share_by_hand():
    # Four people, one clean second each, two of them marked: the share of marked seconds in
    # a resample is binomial(4, 1/2) / 4, whose 2.5 % and 97.5 % points are 0 and 1.
    counts = PersonCounts(
        np.array(["a", "b", "c", "d"]), np.ones(4, int), np.array([1, 1, 0, 0]),
        np.ones(4, int), np.array([1, 1, 0, 0]), np.ones(4, int),
    )  # fmt: skip
    found = bootstrap_rate(counts, resamples=500)
    assert rate_of(counts).flags_sure == 1800
    assert found["flags_sure"] == (0.0, 3600.0)
    assert found["flags_doubtful"] == (3600.0, 3600.0)  # alike in everyone


def test_fewer_than_three_people_have_no_interval():
    score, truth, who = drawn(n_people=2)
    person = np.char.add("p", who.astype(str))
    assert bootstrap_measures(score, truth, person, 0.5, 0.3) is None
    # People count only where they have a judged cell of known truth.
    person[:50] = "p9"
    truth[:50] = UNKNOWN
    assert bootstrap_measures(score, truth, person, 0.5, 0.3) is None
    difference, interval = auc_difference(score, score, truth, person)
    assert (difference, interval) == (0.0, None)


def test_a_class_held_by_one_person_has_no_interval():
    # Of four people only one has present cells: a third of the resamples lack them.
    person = np.repeat(["a", "b", "c", "d"], 50)
    truth = np.zeros(200, np.int8)
    truth[:10] = 1
    score = np.random.default_rng(0).random(200)
    found = bootstrap_measures(score, truth, person, 0.5, 0.3)
    assert found["auc"] is None
    assert found["sensitivity_sure"] is None
    assert isinstance(found["specificity_sure"], Interval)


def test_the_same_seed_gives_the_same_interval():
    score, truth, who = drawn()
    person = np.char.add("p", who.astype(str))
    first = bootstrap_measures(score, truth, person, 0.5, 0.3, seed=4)
    order = np.random.default_rng(0).permutation(len(score))
    again = bootstrap_measures(score[order], truth[order], person[order], 0.5, 0.3, seed=4)
    for name, value in first.items():
        assert value == pytest.approx(again[name], abs=1e-12), name
    assert bootstrap_measures(score, truth, person, 0.5, 0.3, seed=5) != first


def test_too_few_resamples_are_refused():
    with pytest.raises(OptionError, match="given were 20"):
        draw_people(6, 20, 0)


def test_a_difference_of_areas_is_taken_on_shared_cells_and_shared_resamples():
    score, truth, who = drawn(digits=6)
    person = np.char.add("p", who.astype(str))
    worse = score + np.random.default_rng(1).normal(size=len(score)) * 0.3
    worse[::5] = NAN
    kept = ~np.isnan(worse)
    difference, interval = auc_difference(score, worse, truth, person)
    assert difference == pytest.approx(
        roc_auc_score(truth[kept], score[kept]) - roc_auc_score(truth[kept], worse[kept])
    )
    assert 0 < interval.low < difference < interval.high
    assert auc_difference(score, score, truth, person)[1] == (0.0, 0.0)


# Conditions ----------------------------------------------------------------------------

BACKGROUND = Background(
    person="p", sites=tuple("abcdefghijklmnopqrs"), potentials=np.zeros((19, 1)), sfreq=500.0,
    reference_sites=("A1", "A2"), kept_to_hz=45.0, notch_hz=50.0, origin="x",
)  # fmt: skip


@given(st.integers(0, 2**32 - 1))
@settings(max_examples=60, deadline=None)
def test_the_words_of_a_situation_are_read_back(seed):
    situation = draw_situation(BACKGROUND, np.random.default_rng(seed))
    found = conditions.parse_condition(situation.words())
    assert found.rate == situation.sfreq
    assert found.low_pass == situation.low_pass
    assert found.notch == situation.notch
    assert found.montage == situation.montage
    assert found.sites == situation.n_sites
    assert (found.bandwidth == "as recorded") == (not situation.extended)
    assert (found.bandwidth == "full") == (situation.extended and not situation.low_pass)


@pytest.mark.parametrize(
    "words", ["", "256 Hz", "256 Hz; high; notch none; ears; 19 sites"]
)
def test_other_words_are_no_condition(words):
    assert conditions.parse_condition(words) is None


WORDS = np.array(
    [
        "500 Hz; low-pass none; notch 50.0; ears; 19 sites",
        "128 Hz; low-pass 40.0; notch none; bipolar; 8 sites",
        "250 Hz; as recorded; notch none; ears; 19 sites",
        "",
        "250 Hz; low-pass 100.0; notch none; Cz; 19 sites",
    ]
)


@pytest.mark.parametrize(
    ("aspect", "expected"),
    [
        ("bandwidth", {"as recorded": [2], "low-pass": [1, 4], "full": [0]}),
        ("low-pass", {"as recorded": [2], "40 Hz": [1], "100 Hz": [4], "none": [0]}),
        ("notch", {"50 Hz": [0], "none": [1, 2, 4]}),
        ("montage", {"Cz": [4], "bipolar": [1], "ears": [0, 2]}),
        ("sites", {"8 sites": [1], "19 sites": [0, 2, 4]}),
        ("sampling rate", {"128 Hz": [1], "250 Hz": [2, 4], "500 Hz": [0]}),
    ],
)
def test_rows_are_grouped_in_order_and_none_is_lost(aspect, expected):
    found = conditions.groups_by(aspect, WORDS)
    assert {name: np.flatnonzero(rows).tolist() for name, rows in found.items()} == {
        **expected,
        "not stated": [3],
    }
    assert list(found) == [*expected, "not stated"]


def test_an_unknown_aspect_is_refused():
    with pytest.raises(OptionError, match="asked for was 'moon'"):
        conditions.groups_by("moon", WORDS)


# Tables --------------------------------------------------------------------------------


def table_rows(text):
    lines = [line for line in text.splitlines() if line.startswith("|")]
    return [[cell.strip() for cell in line.strip("|").split(" | ")] for line in lines]


def several(n_people=4, seed=0, source="simulated"):
    score, truth, who = drawn(800, n_people, seed, digits=4)
    order = np.argsort(who, kind="stable")
    score, truth, who = score[order], truth[order], who[order]
    strength = np.where(truth[:, None] == 1, np.array([40, 3, 90, 2.0]), 0)
    rows = examples(
        truth, second=np.arange(800) // 2, person=np.char.add("p", who.astype(str)),
        origin=np.full(800, f"{source}: x"), condition=WORDS[np.arange(800) // 2 % 3],
        strength=strength.astype(np.float32),
        look_alike=np.where(np.arange(800) // 2 % 4 == 0, "spindles", ""),
    )  # fmt: skip
    return rows, dict.fromkeys(KIND_NAMES, score), dict.fromkeys(KIND_NAMES, (0.7, 0.4))


def test_every_table_says_simulated_or_real_and_the_sizes():
    for source, word in (("simulated", "SIMULATED"), ("real", "REAL")):
        rows, scores, marks = several(source=source)
        one = evaluate_kind(rows, "eye", scores["eye"], *marks["eye"], resamples=40)
        for text in (
            tables.main_table(rows, [one]),
            tables.condition_table(rows, scores, marks, "montage"),
            tables.strength_table(rows, scores, marks),
            tables.look_alike_table(rows, scores, marks),
            tables.baseline_table(rows, []),
            tables.ablation_table(rows, {"eye": 0.9}, {}),
        ):
            assert text.startswith(f"**{word}. ")
            assert "800 cells, 400 seconds," in text.splitlines()[0]
            assert "4 people" in text.splitlines()[0]
            assert len({len(row) for row in table_rows(text)}) == 1


def test_simulated_and_real_never_share_a_table():
    mixed = join([several()[0], several(source="real")[0]])
    with pytest.raises(OptionError, match="these are real and simulated"):
        tables.caption(mixed, "All")


def test_the_main_table_by_hand():
    rows, scores, marks = several()
    one = evaluate_kind(rows, "eye", scores["eye"], *marks["eye"], resamples=60)
    text = tables.main_table(rows, [one])
    found = dict(row for row in table_rows(text))
    low, high = one.interval["auc"]
    assert found["ROC AUC"] == f"{one.measures.auc:.4f} [{low:.4f}, {high:.4f}]"
    assert re.fullmatch(r"0\.\d{3} \[0\.\d{3}, 0\.\d{3}\]", found["sensitivity, sure"])
    assert found["present cells"] == str((rows.truth[:, EYE] == PRESENT).sum())
    assert found["people"] == "4"
    assert "bootstrap over 4 people; with so few people" in text


def test_one_person_has_numbers_but_no_interval():
    rows, scores, marks = several(n_people=1)
    one = evaluate_kind(rows, "eye", scores["eye"], *marks["eye"])
    assert one.interval is None
    assert one.clean_interval is None
    text = tables.main_table(rows, [one])
    assert "1 person, no interval." in text
    assert "[" not in text


def test_the_table_by_condition_holds_the_measures_of_each_part():
    rows, scores, marks = several()
    found = table_rows(tables.condition_table(rows, scores, marks, "montage"))[2:]
    assert [row[0] for row in found] == ["bipolar"] * 4 + ["ears"] * 4
    part = np.char.find(rows.condition, "bipolar") >= 0
    auc = roc_auc_score(rows.truth[part, EYE], scores["eye"][part])
    assert found[0][1] == "eye"
    assert found[0][5] == f"{auc:.4f}"


def test_a_kind_that_is_not_judged_in_a_condition_has_no_row():
    rows, scores, marks = several()
    scores = scores | {
        "mains": np.where(np.char.find(rows.condition, "bipolar") >= 0, NAN, 0.5)
    }
    found = table_rows(tables.condition_table(rows, scores, marks, "montage"))[2:]
    assert ["bipolar", "mains"] not in [row[:2] for row in found]
    assert ["ears", "mains"] in [row[:2] for row in found]


def test_rows_by_size_by_hand():
    truth = [PRESENT] * 7 + [CLEAN]
    strength = np.zeros((8, 4), np.float32)
    strength[:, EYE] = [29, 30, 49, 50, 500, NAN, 60, 60]
    score = np.array([0.1, 0.9, 0.5, 0.9, 0.9, 0.5, NAN, 0.9])
    found = tables.strength_rows(examples(truth, strength=strength), "eye", score, 0.8, 0.4)
    assert [row[:4] for row in found] == [
        ("under 30", 1, 0.0, 0.0),
        ("30 to 50", 2, 0.5, 1.0),
        ("50 to 100", 1, 1.0, 1.0),
        ("200 and more", 1, 1.0, 1.0),
        ("not known", 1, 0.0, 1.0),
    ]
    # The one clean cell scores 0.9: the pair of 0.9 and 0.9 is half in order.
    assert [row.ranking.auc for row in found] == [0.0, 0.25, 0.5, 0.5, 0.0]
    assert {row.ranking.n_clean for row in found} == {1}
    assert [row.ranking.n_present for row in found] == [row.n_present for row in found]


def test_look_alikes_by_hand():
    rows = examples(
        [CLEAN, CLEAN, CLEAN, CLEAN, CLEAN, PRESENT, CLEAN, CLEAN],
        second=np.arange(8) // 2,
        look_alike=np.repeat(["spindles", "spindles", "spindles", ""], 2),
    )
    score = np.array([0.9, 0.1, 0.5, 0.1, 0.9, 0.9, 0.1, 0.1])
    text = tables.look_alike_table(rows, {"muscle": score}, {"muscle": (0.8, 0.4)})
    # Second 2 holds a muscle cell: its seconds do not count, its clean cell does.
    assert table_rows(text)[2:] == [
        ["muscle", "spindles", "2", "0.500", "1.000", "5", "0.4000", "0.6000"],
        ["muscle", "none (for comparison)", "1", "0.000", "0.000", "2", "0.0000", "0.0000"],
    ]


def test_comparisons_show_what_can_be_told():
    rows, scores, _ = several()
    ranking = rank_scores(scores["eye"], rows.truth[:, EYE])
    text = tables.baseline_table(
        rows,
        [
            tables.Comparison("eye", "this tool", "cells", ranking),
            tables.Comparison(
                "eye", "peak|to|peak", "cells", ranking, "100 uV", 0.5, 0.25, 0.0123,
                Interval(-0.01, 0.02),
            ),
        ],
    )  # fmt: skip
    first, second = table_rows(text)[2:]
    assert first[-2:] == ["-", "-"]
    assert second[1] == "peak/to/peak"
    assert second[-2:] == [
        "100 uV: sensitivity 0.500, specificity 0.250",
        "+0.0123 [-0.0100, +0.0200]",
    ]


def test_ablations_show_the_change():
    rows, _, _ = several()
    text = tables.ablation_table(
        rows,
        {"eye": 0.95, "mains": 0.9},
        {
            ("eye", "isolation"): Ablation("eye", "isolation", ("isolation",), 0.94),
            ("eye", "line frequency"): Ablation("eye", "line frequency", (), None),
            ("mains", "line frequency"): None,
        },
    )
    found = {row[0]: row[1:] for row in table_rows(text)[2:]}
    assert found["none (ROC AUC)"] == ["0.9500", "0.9000"]
    assert found["isolation"] == ["-0.0100", "-"]
    assert found["line frequency"] == ["not seen", "all it sees"]
    assert len(found) == 9


# Figures -------------------------------------------------------------------------------


def draw_reliability():
    rows, scores, _ = several()
    return figures.reliability_figure(rows, {"eye": scores["eye"], "pop": scores["pop"]})


def draw_strength():
    rows, scores, marks = several()
    return figures.strength_figure(rows, {"mains": scores["mains"]}, marks)


def draw_roc():
    rows, scores, _ = several()
    truth = rows.truth[:, EYE]
    other = {"peak-to-peak limit": (1 - scores["eye"], truth)}
    return figures.roc_figure({"eye": (scores["eye"], truth)}, {"eye": other}, "SIMULATED")


@pytest.mark.parametrize(
    ("draw", "texts"),
    [
        (draw_reliability, ["SIMULATED", "eye movement or blink", "electrode pop",
                            "share present", "stated probability", "cells"]),
        (draw_strength, ["SIMULATED", "mains interference", "uV amplitude", "1.5 to 3",
                         "n = ", "sure", "doubtful", "sensitivity"]),
        (draw_roc, ["SIMULATED", "this tool", "peak-to-peak limit", "sensitivity",
                    "share of clean marked"]),
    ],
)  # fmt: skip
def test_a_figure_has_its_words_and_the_same_bytes_again(draw, texts):
    svg = draw()
    words = " ".join(re.findall(r"<text[^>]*>([^<]*)", svg))
    for text in texts:
        assert text in words
    assert svg == draw()
    assert not re.search(r"<dc:date>|20\d\d-\d\d", svg)


def test_methods_differ_in_dashes_and_markers_not_in_colour_alone():
    assert len({line for line, _ in figures.OTHER_LINES}) == len(figures.OTHER_LINES)
    assert len({marker for _, marker in figures.OTHER_LINES} - {"o"}) == len(
        figures.OTHER_LINES
    )


def test_more_methods_than_can_be_told_apart_are_refused():
    ranked = (np.array([0.1, 0.9]), np.array([0, 1], np.int8))
    others = {"eye": {f"method {k}": ranked for k in range(6)}}
    with pytest.raises(OptionError, match="given were 6"):
        figures.roc_figure({"eye": ranked}, others, "REAL")


def test_the_colours_are_those_of_the_page():
    css = (Path(artifactlens.__file__).parent / "page" / "report.css").read_text()
    light = css.split("@media")[0]
    assert {
        kind: re.search(rf"--{kind}: (#\w+)", light)[1] for kind in KIND_NAMES
    } == figures.KIND_COLOURS


def test_reliability_by_hand():
    score = np.array([0.0, 0.06, 0.5, 0.5, 1.0])
    stated, share, counts = figures.reliability(
        score, np.array([False, True, True, False, True])
    )
    # Bins are a fifteenth wide: 0 and 0.06 share the first, 1 goes into the last.
    assert stated.tolist() == pytest.approx([0.03, 0.5, 1.0])
    assert share.tolist() == [0.5, 0.5, 1.0]
    assert counts.tolist() == [2, 2, 1]
