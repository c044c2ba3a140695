"""Other methods on the same data: on rows of features, and on invented signals."""

import numpy as np
import pytest
import sklearn.ensemble  # noqa: F401 - only libraries loaded by then obey one_thread
from signals import SITES, bump, referential, ten_twenty
from threadpoolctl import threadpool_limits

from artifactlens.epochs import epoch_grid
from artifactlens.features.catalogue import FEATURE_NAMES, FEATURES
from artifactlens.recording import Filters, Segment, from_array
from artifactlens.training.evaluation import baselines
from artifactlens.training.evaluation.ablation import FAMILIES, ablate, features_of
from artifactlens.training.evaluation.metrics import marked_shares, rank_scores
from artifactlens.training.examples import UNKNOWN, Examples
from artifactlens.training.fit import HEAD_FEATURES

EYE, MUSCLE, POP, MAINS = range(4)
RATE = 256.0


@pytest.fixture(scope="module", autouse=True)
def one_thread():
    """Small forests on a busy machine: threads that wait for each other take a minute."""
    with threadpool_limits(1):
        yield


def examples(features, truth, kind):
    n = len(truth)
    known = np.full((n, 4), UNKNOWN, dtype=np.int8)
    known[:, kind] = truth
    return Examples(
        features=np.asarray(features, np.float32),
        truth=known,
        person=np.full(n, "p"),
        second=np.arange(n),
        origin=np.full(n, "simulated: x"),
        condition=np.full(n, ""),
        strength=np.zeros((n, 4), np.float32),
        look_alike=np.full(n, ""),
    )


def column(name):
    return FEATURE_NAMES.index(name)


def learnable(names, n=600, seed=0, kind=MUSCLE):
    """Rows of noise on which the kind follows from the sum of these features."""
    rng = np.random.default_rng(seed)
    features = rng.normal(size=(n, len(FEATURE_NAMES))).astype(np.float32)
    score = features[:, [column(name) for name in names]].sum(axis=1)
    return examples(features, (score > 0).astype(np.int8), kind)


def auc_of(score, rows, kind):
    return rank_scores(score, rows.truth[:, kind]).auc


# On rows -------------------------------------------------------------------------------


def test_the_limit_reads_the_peak_to_peak_swing():
    features = np.zeros((4, len(FEATURE_NAMES)), np.float32)
    features[:, column("swing")] = [40, 100, 99.5, 250]
    score = baselines.swing_of(features)
    assert score.tolist() == [40, 100, 99.5, 250]
    found = marked_shares(score[[1, 2]], score[[0, 3]], baselines.SWING_LIMIT_UV)
    assert found == (0.5, 0.5)  # 100 uV is marked, 99.5 is not


def test_logistic_regression_learns_a_sum_and_sees_only_its_features():
    rows = learnable(["slope", "burst"])
    score = baselines.fit_logistic("muscle", rows)
    fresh = learnable(["slope", "burst"], seed=1)
    assert auc_of(score(fresh.features), fresh, MUSCLE) > 0.98
    unseen = [name for name in FEATURE_NAMES if name not in HEAD_FEATURES["muscle"]]
    altered = fresh.features.copy()
    altered[:, [column(name) for name in unseen]] = 1e6
    np.testing.assert_array_equal(score(altered), score(fresh.features))


def test_logistic_regression_bears_missing_values_and_learns_from_them():
    rows = learnable(["slope"])
    rows.features[:, column("high_power")] = np.nan  # nowhere measured
    # Missing here tells the truth: neither value nor median does.
    rows.features[:, column("slope")] = np.where(rows.truth[:, MUSCLE] == 1, np.nan, 0.5)
    score = baselines.fit_logistic("muscle", rows)
    assert auc_of(score(rows.features), rows, MUSCLE) == 1.0
    never = rows.features.copy()
    never[:, column("burst")] = np.nan  # missing only later
    assert np.isfinite(score(never)).all()


def test_logistic_regression_takes_no_more_cells_than_told_and_the_same_again():
    rows = learnable(["slope"], n=2000)
    few = [
        baselines.fit_logistic("muscle", rows, most=100, seed=seed)(rows.features)
        for seed in (0, 0, 1)
    ]
    np.testing.assert_array_equal(few[0], few[1])
    assert not np.allclose(few[0], few[2])
    whole = baselines.fit_logistic("muscle", rows)(rows.features)
    assert auc_of(whole, rows, MUSCLE) >= auc_of(few[0], rows, MUSCLE)


def test_the_forest_with_interactions_finds_what_no_sum_can():
    rng = np.random.default_rng(2)
    features = rng.normal(size=(900, len(FEATURE_NAMES))).astype(np.float32)
    first, second = column("swing"), column("isolation")  # free to rise and fall, for pop
    truth = (features[:, first] * features[:, second] > 0).astype(np.int8)
    rows = examples(features, truth, POP)
    assert auc_of(baselines.fit_interactions("pop", rows)(features), rows, POP) > 0.95
    assert auc_of(baselines.fit_logistic("pop", rows)(features), rows, POP) < 0.7


# Without a family ----------------------------------------------------------------------


def test_every_feature_belongs_to_one_family():
    names = [name for family in FAMILIES for name in features_of(family)]
    assert sorted(names) == sorted(feature.name for feature in FEATURES)
    assert "step_stays" in features_of("steepness")
    assert features_of("isolation") == ("isolation",)


def test_leaving_out_what_tells_costs_and_leaving_out_what_does_not_is_free():
    training, validation = (
        learnable(["isolation"], n=400, seed=seed, kind=POP) for seed in (0, 1)
    )
    full = ablate("pop", training, validation, None)
    without = ablate("pop", training, validation, "isolation")
    assert full.left_out == ()
    assert full.auc > 0.97
    assert without.left_out == ("isolation",)
    assert without.auc < 0.65


def test_a_head_without_any_feature_left_is_no_forest():
    rows = learnable(["mains_level"], kind=MAINS)
    assert ablate("mains", rows, rows, "line frequency") is None


def test_a_family_that_the_head_does_not_see_costs_no_forest():
    rows = learnable(["mains_level"], kind=MAINS)
    assert ablate("mains", rows, rows, "field spread") == (
        "mains",
        "field spread",
        (),
        None,
    )


# On signals ----------------------------------------------------------------------------

SECONDS = 24


@pytest.fixture(scope="module")
def plain():
    return ten_twenty(SECONDS, RATE, seed=5)


def with_burst(data, second, *, size=15.0, rate=RATE):
    """White noise of this rms for 0.6 s from a fifth into the second, at all sites."""
    rng = np.random.default_rng(9)
    start, n = round((second + 0.2) * rate), round(0.6 * rate)
    changed = data.copy()
    changed[:, start : start + n] += size * rng.normal(size=(len(data), n))
    return changed


def test_a_burst_has_the_highest_muscle_score(plain):
    score = baselines.muscle_zscore_seconds(referential(with_burst(plain, 10)))
    assert score.shape == (SECONDS,)
    assert score.argmax() == 10
    assert score[10] > 4  # the limit that the function proposes
    assert np.delete(score, [9, 10, 11]).max() < 2


def test_the_muscle_score_is_the_one_that_mne_gives(plain):
    import mne
    from mne.preprocessing import annotate_muscle_zscore

    data = with_burst(plain, 10)
    data -= np.median(data, axis=1, keepdims=True)
    info = mne.create_info(list(SITES), RATE, "eeg")
    raw = mne.io.RawArray(1e-6 * data, info, verbose="error")
    _, trace = annotate_muscle_zscore(raw, filter_freq=(30, 70), verbose="error")
    score = baselines.muscle_zscore_seconds(referential(data), low_pass=70.0)
    expected = trace.reshape(SECONDS, -1).max(axis=1)
    np.testing.assert_allclose(score, expected, rtol=1e-3, atol=1e-4)  # float32 samples


def test_the_muscle_score_knows_the_low_pass_of_the_header(plain):
    data = with_burst(plain, 10)
    stated = referential(data, filters=[Filters(None, 45.0, None)] * len(SITES))
    np.testing.assert_array_equal(
        baselines.muscle_zscore_seconds(stated),
        baselines.muscle_zscore_seconds(referential(data), low_pass=45.0),
    )


def test_mains_that_comes_and_goes_is_taken_out_where_its_frequency_is_told(plain):
    at = np.arange(plain.shape[1]) / RATE
    hum = 20 * np.sin(2 * np.pi * 50 * at) * ((at >= 6) & (at < 12))
    recording = referential(with_burst(plain, 18) + hum)
    assert 5 <= baselines.muscle_zscore_seconds(recording, low_pass=70.0).argmax() <= 12
    told = baselines.muscle_zscore_seconds(recording, low_pass=70.0, line_frequency=50.0)
    assert told.argmax() == 18


@pytest.mark.parametrize(
    ("rate", "low_pass", "band"),
    [
        (512.0, None, (110.0, 140.0)),
        (512.0, 140.0, (110.0, 140.0)),
        (512.0, 100.0, (30.0, 100.0)),
        (256.0, None, (30.0, 0.45 * 256)),
        (128.0, None, (30.0, 0.45 * 128)),
        (500.0, 35.0, (30.0, 35.0)),
        (500.0, 34.0, None),
        (70.0, None, None),
    ],
)
def test_the_muscle_band_is_what_rate_and_low_pass_carry(rate, low_pass, band):
    assert baselines.muscle_band(rate, low_pass) == band


def test_the_muscle_score_is_unknown_where_the_band_is_not_carried(plain):
    score = baselines.muscle_zscore_seconds(referential(plain), low_pass=30.0)
    assert np.isnan(score).all()
    assert score.shape == (SECONDS,)


def test_blinks_are_found_in_their_seconds_at_either_polarity(plain):
    for sign in (1, -1):
        data = plain.copy()
        for second in (5.5, 12.4, 20.6):
            data[:2] += sign * bump(data.shape[1], RATE, second, 400)
        found = baselines.blink_peak_seconds(referential(data))
        blinks = np.isin(np.arange(SECONDS), [5, 12, 20])
        assert found.found[blinks].all()
        # The rebound of the filter beside a blink is a peak to the method as well.
        beside = np.isin(np.arange(SECONDS), [4, 6, 11, 13, 19, 21])
        assert not found.found[~(blinks | beside)].any()
        assert found.peak_uv[blinks].min() > 200
        assert found.peak_uv[~blinks].max() < 100


def test_the_seconds_found_are_those_of_the_events_that_mne_gives(plain):
    import mne
    from mne.preprocessing import find_eog_events

    data = plain.copy()
    data[:2] += bump(data.shape[1], RATE, 12.4, 400)
    data -= np.median(data, axis=1, keepdims=True)
    raw = mne.io.RawArray(
        1e-6 * data[:2], mne.create_info(["Fp1", "Fp2"], RATE, "eeg"), verbose="error"
    )
    events = find_eog_events(raw, ch_name=["Fp1", "Fp2"], verbose="error")[:, 0]
    found = baselines.blink_peak_seconds(referential(data)).found
    assert set(np.flatnonzero(found)) == set(events // 256)


def test_blinks_are_looked_for_at_the_forehead_alone(plain):
    data = plain.copy()
    data[SITES.index("O1")] += bump(data.shape[1], RATE, 12.5, 800)
    assert baselines.blink_peak_seconds(referential(data)).peak_uv[12] < 100
    behind = referential(data[7:], labels=SITES[7:])
    found = baselines.blink_peak_seconds(behind)
    assert not found.found.any()
    assert np.isnan(found.peak_uv).all()


def test_derivations_count_by_their_first_input(plain):
    data = plain[:3].copy()
    data[1] += bump(data.shape[1], RATE, 12.5, 400)
    recording = from_array(data, RATE, ["F7-T3", "Fp1-F7", "T3-T5"])
    found = baselines.blink_peak_seconds(recording)
    assert found.found[12]
    assert found.peak_uv.argmax() == 12
    assert found.peak_uv[12] > 3 * np.delete(found.peak_uv, 12).max()


def test_fewer_than_twenty_seconds_have_no_score():
    short = referential(ten_twenty(19, RATE))
    assert np.isnan(baselines.muscle_zscore_seconds(short)).all()
    assert np.isnan(baselines.blink_peak_seconds(short).peak_uv).all()


@pytest.mark.parametrize("rate", [100.0, 128.0, 160.0, 200.0, 500.0])
def test_twenty_seconds_are_enough_at_any_rate(rate):
    recording = referential(ten_twenty(20, rate), rate)
    assert np.isfinite(
        baselines.muscle_zscore_seconds(recording, line_frequency=60.0)
    ).all()
    assert np.isfinite(baselines.blink_peak_seconds(recording).peak_uv).all()


def test_missing_and_flat_channels_leave_the_others_judged(plain):
    data = with_burst(plain, 10)
    data[3] = np.nan
    data[4] = 7.0
    data[5, : 5 * 256] = np.nan
    data[:, 15 * 256 : 16 * 256] = np.nan
    score = baselines.muscle_zscore_seconds(referential(data))
    assert np.nanargmax(score) == 10
    assert np.flatnonzero(np.isnan(score)).tolist() == [15]
    blinks = baselines.blink_peak_seconds(referential(data))
    assert np.flatnonzero(np.isnan(blinks.peak_uv)).tolist() == [15]
    assert not blinks.found[15]


def test_a_recording_without_signal_has_no_score(plain):
    for nothing in (np.full_like(plain, np.nan), np.zeros_like(plain)):
        assert np.isnan(baselines.muscle_zscore_seconds(referential(nothing))).all()
        assert np.isnan(baselines.blink_peak_seconds(referential(nothing)).peak_uv).all()


def test_scores_lie_on_the_grid_of_a_recording_with_gaps(plain):
    segments = [Segment(0, 2600, 0.0), Segment(2600, plain.shape[1] - 2600, 100.0)]
    data = plain.copy()
    data[:2] += bump(data.shape[1], RATE, 2600 / 256 + 4.5, 400)
    recording = referential(data, segments=segments)
    grid = epoch_grid(recording)
    found = baselines.blink_peak_seconds(recording)
    assert found.peak_uv.shape == baselines.muscle_zscore_seconds(recording).shape
    assert found.peak_uv.shape == (len(grid),)
    assert grid.onset[found.peak_uv.argmax()] == 104.0
    assert found.found[grid.onset == 104.0].all()
    assert not found.found[(grid.onset < 103) | (grid.onset > 105)].any()


def test_scorers_give_one_number_per_row():
    rows = learnable(["slope"], n=200)
    for scorer in (
        baselines.fit_logistic("muscle", rows),
        baselines.fit_interactions("muscle", rows),
        baselines.swing_of,
    ):
        assert scorer(rows.features).shape == (200,)
        assert scorer(rows.features).dtype == np.float64
