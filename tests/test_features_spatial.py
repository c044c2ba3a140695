"""Spread, isolation and frontal polarity: hand-worked fields and the sign of the eye."""

import dataclasses

import numpy as np
import pytest
from signals import SITES, batch_of, bump, noise, referential, row, ten_twenty

from artifactlens.features import spatial
from artifactlens.frames import build_frame
from artifactlens.pipeline import measure_recording
from artifactlens.sites import site_position

RATE = 256.0
LINE = {"line_frequency": 50.0}


def leads_of(labels):
    return spatial.eye_leads(build_frame(labels, [None] * len(labels), None))


LEADS = leads_of([f"{site}-REF" for site in SITES])
VERTICAL, LATERAL = LEADS.maps[:, :19]


def names(mask):
    return {SITES[index] for index in np.flatnonzero(mask[:19])}


def at_second(field, second=5.5, seconds=12, width=0.3, seed=0):
    """A recording whose potentials follow ``field`` around a second, on weak noise."""
    n = int(seconds * RATE)
    data = ten_twenty(seconds, seed=seed, rms_uv=1.0, exponent=2)
    return data + np.outer(field, bump(n, RATE, second, 1.0, width))


def table_of(data, **options):
    return measure_recording(referential(data, **options), **LINE).table


def against_behind(field):
    return field - field[LEADS.behind[:19]].mean()


def scaled(field, size):
    """The field with this size at the frontal poles (or F8 against F7)."""
    if field is VERTICAL:
        return size * field / against_behind(field)[LEADS.front[:19]].mean()
    return size * field / (field[row("F8")] - field[row("F7")])


def dipole(source, moment):
    """V = p.r / r^3 of a current dipole at 10-20 sites, 150 uV where it is largest."""
    away = np.array([site_position(site) for site in SITES]) - source
    field = away @ moment / np.linalg.norm(away, axis=1) ** 3
    return 150 * field / np.abs(field).max()


OCCIPITAL = dipole([0.0, -0.06, 0.02], [0.0, -1.0, 0.3])
"""Radial, 6 cm behind the centre of the head."""


# Which sites see the eyes --------------------------------------------------------------


def test_eye_leads_of_the_10_20_system():
    assert names(LEADS.front) == {"Fp1", "Fp2"}
    assert names(LEADS.left) == {"F7"}
    assert names(LEADS.right) == {"F8"}
    assert names(LEADS.behind) == {"P7", "P3", "Pz", "P4", "P8", "O1", "O2"}
    assert names(LEADS.row) == {"F3", "Fz", "F4"}
    assert names(LEADS.near) == {"Fp1", "Fp2", "F7", "F3", "Fz", "F4", "F8"}
    assert LEADS.front_row == "frontal poles"


def test_the_reference_and_unplaced_sites_are_no_eye_leads():
    leads = leads_of(["Fp1-Cz", "Fp2-Cz", "O1-Cz", "O2-Cz", "Pz-Cz"])
    assert not np.any([leads.front[-1], leads.behind[-1], leads.left[-1], leads.right[-1]])
    unplaced = leads_of(["one", "two", "three"])
    assert not np.any([unplaced.front, unplaced.behind, unplaced.left, unplaced.right])
    assert np.isnan(unplaced.maps).all()


def test_without_frontal_poles_the_frontal_sites_serve():
    leads = leads_of([f"{s}-REF" for s in ("F7", "F3", "Fz", "F4", "F8", "Cz", "O1", "O2")])
    assert leads.front_row == "frontal sites"
    assert leads.front.sum() >= 3
    assert not leads.front[5:].any()
    # There is no row between them and the sites behind.
    np.testing.assert_array_equal(leads.row, leads.behind)


def test_without_sites_behind_the_central_ones_serve():
    labels = ("Fp1", "Fp2", "C3", "Cz", "C4")
    leads = leads_of([f"{site}-REF" for site in labels])
    np.testing.assert_array_equal(leads.behind[:5], [False, False, True, True, True])
    # Two sites in front are too few to fit the eyes to: all of the head is.
    np.testing.assert_array_equal(leads.near, [True] * 5 + [False])


def test_eye_maps_are_symmetric_and_lateral_ones_change_sign():
    mirror = {"F7": "F8", "F3": "F4", "T7": "T8", "C3": "C4", "P3": "P4"}
    for left, right in mirror.items():
        assert VERTICAL[row(left)] == pytest.approx(VERTICAL[row(right)], rel=0.1)
        assert LATERAL[row(left)] == pytest.approx(-LATERAL[row(right)], rel=0.1)
    assert VERTICAL[row("Fp1")] == pytest.approx(VERTICAL[row("Fp2")], rel=0.1)
    assert LATERAL[row("F8")] == LATERAL.max()
    assert LATERAL[row("F7")] == LATERAL.min()
    assert abs(LATERAL[row("Cz")]) < 0.05 * LATERAL[row("F8")]
    assert set(np.argsort(VERTICAL)[-2:]) == {row("Fp1"), row("Fp2")}


# Smoothing and covariance --------------------------------------------------------------


def test_slow_traces_are_block_means_at_about_50_a_second():
    # 256 Hz: blocks of 5 samples, 51 of them. Mean of 0..4 is 2, of 5..9 is 7.
    slow = spatial.slow_traces(batch_of(np.arange(3 * 256.0)[None], RATE))
    assert slow.shape == (1, 3, 51)
    np.testing.assert_allclose(slow[0, 0], 2 + 5 * np.arange(51), rtol=1e-5)
    np.testing.assert_allclose(slow[0, 1, :2], [258, 263], rtol=1e-5)


def test_covariance_is_that_of_the_own_second():
    slow = np.random.default_rng(1).normal(size=(4, 5, 50)).astype(np.float32)
    slow[:, 0] += 100
    found = spatial.field_covariance(slow)
    assert found.shape == (3, 4, 4)
    np.testing.assert_allclose(found[1], np.cov(slow[:, 2], bias=True), atol=1e-5)


# Spread --------------------------------------------------------------------------------


def test_spread_of_one_electrode_is_0_and_of_a_common_signal_1():
    alone = np.diag([9.0, 1e-6, 1e-6, 1e-6])[None].astype(np.float32)
    assert spatial.field_spread(alone)[0, 0] == 0
    shared = np.ones((1, 4, 4), dtype=np.float32)
    np.testing.assert_array_equal(spatial.field_spread(shared), 1)


def test_spread_counts_sites_that_follow_with_three_tenths_of_its_size_of_either_sign():
    # Site 0 has variance 100; others follow with 0.9, -0.5, 0.29 and 0 of its size, the
    # last with a variance of its own.
    follow = np.array([1.0, 0.9, -0.5, 0.29, 0.0])
    covariance = 100 * np.outer(follow, follow)[None].astype(np.float32)
    covariance[0, 4, 4] = 25.0
    assert spatial.field_spread(covariance)[0, 0] == pytest.approx(2 / 4)
    # Seen from the third: 1, 0.9 and 0.29 over 0.5 all exceed 0.3.
    assert spatial.field_spread(covariance)[2, 0] == pytest.approx(3 / 4)
    # Without that variance it is no site that could have followed.
    covariance[0, 4, 4] = 0.0
    assert spatial.field_spread(covariance)[0, 0] == pytest.approx(2 / 3)
    assert spatial.field_spread(covariance)[2, 0] == pytest.approx(3 / 3)


def test_spread_of_a_site_without_variance_is_not_measured():
    found = spatial.field_spread(np.diag([1.0, 0.0])[None].astype(np.float32))
    assert found[0, 0] == 0
    assert np.isnan(found[1, 0])


def test_an_artifact_at_one_site_has_no_spread_in_a_whole_recording():
    # Others follow with -1/19 of it, the mean of the frame.
    data = ten_twenty(8, rms_uv=1.0)
    data[row("P3")] += noise(1, 8 * 256, RATE, exponent=2, rms_uv=200, seed=3)[0]
    table = table_of(data)
    np.testing.assert_array_equal(table.column("spread")[:, row("P3")], 0)
    assert np.median(table.column("isolation")[:, row("P3")]) > -3


def test_what_all_sites_share_is_the_references_and_spreads_everywhere():
    data = ten_twenty(8, rms_uv=1.0, exponent=2)
    data += noise(1, 8 * 256, RATE, exponent=2, rms_uv=100, seed=3)
    spread = np.median(table_of(data).column("spread"), axis=0)
    assert spread[19] == 0  # the reference: others follow with 1/19
    assert spread[:19].min() > 0.9


# Isolation -----------------------------------------------------------------------------

PAIR = np.array([[0, 1], [1, 0]], dtype=np.float32)


@pytest.mark.parametrize(
    ("r", "decibel"),
    [(0.0, 0.0), (0.9, 10 * np.log10(0.19)), (0.5, 10 * np.log10(0.75)), (-0.9, 0.0),
     (1.0, -30.0)],
)  # fmt: skip
def test_isolation_is_what_correlation_leaves(r, decibel):
    covariance = np.array([[[4.0, 2 * 3 * r], [2 * 3 * r, 9.0]]], dtype=np.float32)
    found = spatial.isolation(covariance, PAIR)
    np.testing.assert_allclose(found[:, 0], decibel, atol=1e-3)


def test_isolation_of_nine_tenths_of_shared_power_is_minus_10_decibel():
    r = np.sqrt(0.9)
    covariance = np.array([[[1.0, r], [r, 1.0]]], dtype=np.float32)
    np.testing.assert_allclose(spatial.isolation(covariance, PAIR), -10, atol=1e-3)


def test_isolation_compares_with_the_weighted_mean_of_the_neighbours():
    rng = np.random.default_rng(5)
    slow = rng.normal(size=(3, 3, 50)).astype(np.float32)
    weights = np.array([[0, 0.25, 0.75], [1, 0, 0], [1, 0, 0]], dtype=np.float32)
    found = spatial.isolation(spatial.field_covariance(slow), weights)
    mean = 0.25 * slow[1, 1] + 0.75 * slow[2, 1]
    r = np.corrcoef(slow[0, 1], mean)[0, 1]
    expected = 10 * np.log10(1 - max(0, r) ** 2)
    assert found[0, 0] == pytest.approx(expected, abs=1e-3)


def test_isolation_is_about_0_for_independent_noise_and_low_for_a_shared_field():
    apart = table_of(ten_twenty(20, exponent=0)).column("isolation")
    assert -0.5 < np.median(apart) <= 0
    together = ten_twenty(20, rms_uv=1.0, exponent=2)
    front_to_back = np.array([site_position(site)[1] for site in SITES])
    wave = noise(1, 20 * 256, RATE, exponent=2, rms_uv=30, seed=9)
    shared = table_of(together + front_to_back[:, None] / 0.1 * wave).column("isolation")
    # At the vertex, where the field changes sign, it is small.
    assert np.median(shared[:, row("Fp1")]) < -10
    assert np.median(shared[:, row("O1")]) < -10


def shared_signal():
    return ten_twenty(8, rms_uv=1.0, exponent=2) + noise(
        1, 8 * 256, RATE, exponent=2, rms_uv=100, seed=3
    )


def test_a_site_without_live_neighbours_has_no_isolation():
    data = shared_signal()
    data[[row("T7"), row("F3"), row("P3"), row("Cz")]] = 0
    assert np.isnan(table_of(data).column("isolation")[:, row("C3")]).all()


def test_spread_is_a_share_of_the_live_sites():
    data = shared_signal()
    data[:10] = 0
    spread = table_of(data).column("spread")[:, 10:19]
    assert np.median(spread) > 0.9


# Frontal polarity: cornea positive (Picton et al. 2000) ----------------------------------


def test_a_blink_makes_the_frontal_poles_positive_by_its_size():
    table = table_of(at_second(scaled(VERTICAL, 150.0)))
    found = table.column("front_vertical")[:, 0]
    assert found[5] == pytest.approx(150.0, abs=8.0)
    assert np.abs(np.delete(found, 5)).max() < 20.0
    assert abs(table.column("front_lateral")[5, 0]) < 20.0
    assert table.front_at[5] == pytest.approx(0.5, abs=0.06)


def test_looking_down_makes_the_frontal_poles_negative():
    table = table_of(at_second(scaled(VERTICAL, -80.0)))
    assert table.column("front_vertical")[5, 0] == pytest.approx(-80.0, abs=8.0)


@pytest.mark.parametrize("size", [120.0, -120.0])
def test_gaze_to_the_right_makes_f8_positive_and_f7_negative_and_left_is_its_inverse(size):
    data = at_second(scaled(LATERAL, size))
    middle = int(5.5 * RATE)
    assert np.sign(data[row("F8"), middle]) == np.sign(size)
    assert np.sign(data[row("F7"), middle]) == -np.sign(size)
    table = table_of(data)
    assert table.column("front_lateral")[5, 0] == pytest.approx(size, abs=8.0)
    assert abs(table.column("front_vertical")[5, 0]) < 25.0


def test_frontal_polarity_is_the_same_number_at_every_site_of_a_second():
    table = table_of(at_second(scaled(VERTICAL, 100.0)))
    for name in ("front_vertical", "front_lateral", "front_rhythm", "front_swing",
                 "side_swing", "eye_match", "eye_span"):  # fmt: skip
        column = table.column(name)
        np.testing.assert_array_equal(column, np.broadcast_to(column[:, :1], column.shape))


def test_the_deflection_of_each_site_is_its_field_against_the_sites_behind():
    field = scaled(VERTICAL, 150.0)
    found = table_of(at_second(field)).column("eye_reach")[5, :19]
    np.testing.assert_allclose(found, np.abs(against_behind(field)), atol=10.0)
    assert set(np.argsort(found)[-2:]) == {row("Fp1"), row("Fp2")}


def test_what_fits_the_eyes_is_all_of_a_blink():
    field = scaled(VERTICAL, 150.0)
    table = table_of(at_second(field))
    np.testing.assert_allclose(
        table.column("eye_part")[5, :19], np.abs(against_behind(field)), atol=10.0
    )
    # The reference has no place on the head.
    assert np.isnan(table.column("eye_part")[:, 19]).all()


@pytest.mark.parametrize("size", [150.0, -60.0])
def test_what_fits_the_eyes_is_large_at_the_poles_and_little_behind(size):
    found = table_of(at_second(scaled(VERTICAL, size))).column("eye_part")[5]
    poles = [row("Fp1"), row("Fp2")]
    np.testing.assert_allclose(found[poles], abs(size), atol=8.0)
    assert np.delete(found[:19], poles).max() < 0.25 * abs(size)
    assert found[LEADS.behind[:20]].max() < 0.05 * abs(size)


def test_what_fits_the_eyes_counts_against_the_sites_behind():
    # Without noise, and on top of what all sites share, the fit is exact.
    field = scaled(VERTICAL, 150.0) + 0.3 * scaled(LATERAL, 100.0)
    slow = np.zeros((20, 3, 51), dtype=np.float32)
    slow[:19, 1] = np.outer(field + 40.0, bump(51, 51.0, 0.5, 1.0))
    found = spatial.frontal_polarity(slow, np.ones((20, 3), dtype=bool), LEADS)
    expected = np.abs(against_behind(field))
    np.testing.assert_allclose(found.part[:19, 0], expected, rtol=0.01, atol=0.1)


def test_little_of_an_occipital_field_fits_the_eyes():
    table = table_of(at_second(OCCIPITAL))
    part, reach = table.column("eye_part")[5, :19], table.column("eye_reach")[5, :19]
    assert reach[row("O2")] > 80
    assert part[row("O2")] < 2
    # Frontal sites move with it against the sites behind, but not as the eyes would.
    assert np.all(part < 0.65 * reach + 2)


def test_what_fits_the_eyes_is_not_told_where_a_site_is_lost_or_too_few_are_left():
    data = at_second(scaled(VERTICAL, 150.0))
    data[row("F3"), 5 * 256 : 6 * 256] = np.nan
    found = table_of(data).column("eye_part")[5, :19]
    assert np.isnan(found[row("F3")])
    assert np.delete(found, row("F3"))[0] == pytest.approx(150.0, abs=8.0)
    few = [row(site) for site in ("Fp1", "Fp2", "O1")]
    alone = referential(data[few], labels=("Fp1", "Fp2", "O1"))
    assert np.isnan(measure_recording(alone, **LINE).table.column("eye_part")).all()


def test_frontal_deflection_against_usual_is_in_decibel_over_its_median():
    table = table_of(at_second(scaled(VERTICAL, 200.0)))
    size = np.fmax(
        np.abs(table.column("front_vertical")[:, 0]),
        np.abs(table.column("front_lateral")[:, 0]),
    )
    expected = 20 * np.log10(size / np.median(size))
    np.testing.assert_allclose(table.column("front_rise")[:, 0], expected, atol=1e-3)


@pytest.mark.parametrize("mixture", [(1, 0), (0, 1), (1, 1), (-1, 0.5)])
def test_the_field_of_the_eye_maps_is_explained_by_them(mixture):
    field = mixture[0] * scaled(VERTICAL, 150.0) + mixture[1] * scaled(LATERAL, 150.0)
    assert table_of(at_second(field)).column("eye_match")[5, 0] > 0.97


def test_an_occipital_dipole_is_hardly_explained_by_the_eyes():
    assert table_of(at_second(OCCIPITAL)).column("eye_match")[5, 0] < 0.3


def test_a_temporal_dipole_fits_worse_than_a_blink():
    temporal = dipole([-0.06, 0.01, 0.0], [-1.0, 0.0, 0.2])
    assert table_of(at_second(temporal)).column("eye_match")[5, 0] < 0.6


def test_frontal_rhythm_is_the_autocorrelation_at_its_period():
    # A sine of 2.5 Hz repeats after 0.4 s; 2.6 of 3 seconds then overlap: 0.87.
    n = 12 * 256
    wave = np.sin(2 * np.pi * 2.5 * np.arange(n) / RATE)
    data = ten_twenty(12, rms_uv=0.5) + np.outer(scaled(VERTICAL, 80.0), wave)
    found = table_of(data).column("front_rhythm")[2:-2, 0]
    np.testing.assert_allclose(found, 2.6 / 3, atol=0.03)


def test_one_blink_is_no_rhythm():
    table = table_of(at_second(scaled(VERTICAL, 150.0), width=0.25))
    assert table.column("front_rhythm")[5, 0] < 0.3


def test_eyes_are_not_measured_without_frontal_or_posterior_sites():
    for sites in (("P3", "Pz", "P4", "O1", "O2"), ("Fp1", "Fp2")):
        data = ten_twenty(5)[: len(sites)]
        table = measure_recording(referential(data, labels=sites), **LINE).table
        assert np.isnan(table.column("front_vertical")).all()


def test_context_beyond_an_end_is_mirrored_and_a_blink_at_the_end_is_found():
    table = table_of(at_second(scaled(VERTICAL, 150.0), second=11.6))
    assert table.column("front_vertical")[11, 0] == pytest.approx(150.0, abs=10.0)


# The swing within a second -------------------------------------------------------------


def at_sites(sizes, wave, seconds=7):
    """Potentials of these sizes times a wave (n_samples,) on hardly any noise."""
    data = ten_twenty(seconds, rms_uv=0.1)
    for site, size in sizes.items():
        data[row(site)] += size * wave
    return data


def triangle(second=3.5, seconds=7, base=0.4):
    """Up to 1 at this second and back, 0.2 s each."""
    away = np.abs(np.arange(int(seconds * RATE)) / RATE - second)
    return np.maximum(0, 1 - away / (base / 2))


@pytest.mark.parametrize(
    ("sizes", "swing"),
    [
        ({"Fp1": 100, "Fp2": 100}, 100),
        ({"Fp1": -100, "Fp2": -100}, 100),
        ({"Fp1": 100}, 50),
        # What the row behind the poles shares is no swing of the poles; a third of the row
        # takes a third off.
        ({"Fp1": 100, "Fp2": 100, "F3": 100, "Fz": 100, "F4": 100}, 0),
        ({"Fp1": 100, "Fp2": 100, "Fz": 60}, 80),
        ({"O1": 100, "O2": 100, "T7": 100}, 0),
    ],
)
def test_frontal_swing_is_that_of_the_poles_against_the_row_behind_them(sizes, swing):
    found = table_of(at_sites(sizes, triangle())).column("front_swing")
    # Means of 5 samples, over which the triangle moves by 10 uV, take its tip off: at most
    # (2 + 2 + 4 + 4) / 5 = 2.4 uV of 100.
    np.testing.assert_allclose(found[3], swing, atol=0.024 * max(swing, 1) + 0.5)
    assert np.delete(found, 3, axis=0).max() < 0.6


def test_frontal_swing_against_usual_is_in_decibel_over_its_median():
    table = table_of(at_second(scaled(VERTICAL, 100.0)))
    swing = table.column("front_swing")[:, 0]
    found = table.column("front_swing_rise")[:, 0]
    np.testing.assert_allclose(found, 20 * np.log10(swing / np.median(swing)), atol=1e-3)
    assert found.argmax() == 5


@pytest.mark.parametrize(
    ("sizes", "swing"),
    [
        ({"F7": -30, "F8": 30}, 60),
        ({"F7": 30, "F8": -30}, 60),
        ({"F8": 45}, 45),
        ({"F7": 30, "F8": 30, "Fp1": 80, "T7": 50}, 0),
    ],
)
def test_swing_between_the_temples_is_that_of_their_difference(sizes, swing):
    after = (np.arange(7 * 256) >= 3.5 * 256).astype(float)
    found = table_of(at_sites(sizes, after)).column("side_swing")
    np.testing.assert_allclose(found[3], swing, atol=0.8)
    assert np.delete(found, 3, axis=0).max() < 0.8


# What fits the eyes over the second, without noise ---------------------------------------


def polarity_of(fields_and_waves, n_slow=50, lost=()):
    """Polarity of the middle of three seconds: fields (19,) times waves (3 n_slow,)."""
    slow = np.zeros((20, 3, n_slow), dtype=np.float32)
    for field, wave in fields_and_waves:
        slow[:19] += np.outer(field, wave).reshape(19, 3, n_slow)
    ok = np.ones((20, 3), dtype=bool)
    ok[list(lost)] = False
    slow[list(lost)] = 0
    return spatial.frontal_polarity(slow, ok, LEADS)


TIME = np.arange(150) / 50.0 - 1
"""Seconds since the start of the middle one."""
BLINK = np.where(np.abs(TIME - 0.5) < 0.15, np.cos(np.pi * (TIME - 0.5) / 0.3) ** 2, 0)


def other_field():
    """A field that no mixture of the eye maps explains at all, of mean zero."""
    maps = np.stack([VERTICAL, LATERAL, np.ones(19)])
    field = np.cos(np.arange(19.0))
    return field - maps.T @ np.linalg.lstsq(maps.T, field, rcond=None)[0]


@pytest.mark.parametrize("mixture", [(120.0, 0.0), (0.0, 90.0), (-60.0, 40.0)])
def test_eye_swing_is_how_far_the_eyes_move_each_site(mixture):
    field = scaled(VERTICAL, mixture[0]) + scaled(LATERAL, mixture[1])
    found = polarity_of([(field, BLINK), (np.ones(19), 30 * np.sin(9 * TIME))])
    expected = np.abs(against_behind(field)) * np.ptp(BLINK)
    np.testing.assert_allclose(found.swing[:19, 0], expected, atol=0.02)
    assert np.isnan(found.swing[19]).all()  # the reference has no place
    largest = expected.max()
    assert expected[LEADS.behind[:19]].max() < 0.1 * largest
    if not mixture[1]:
        assert found.swing[:2, 0].mean() == pytest.approx(120.0, abs=0.1)


def test_eye_swing_does_not_see_what_only_the_back_of_the_head_does():
    field = np.where(LEADS.near[:19], 0.0, 80.0 * np.cos(np.arange(19)))
    found = polarity_of([(scaled(VERTICAL, 50.0), BLINK), (field, np.sin(30 * TIME))])
    alone = polarity_of([(scaled(VERTICAL, 50.0), BLINK)])
    # The maps are fitted to the front half, in which nothing else moves.
    np.testing.assert_allclose(found.swing[:19], alone.swing[:19], atol=0.05)


@pytest.mark.parametrize(
    ("ratio", "share"), [(0, 1), (1, 1 / 2), (3, 1 / 4), (99, 1 / 100)]
)
def test_eye_span_is_the_share_of_the_power_over_the_second(ratio, share):
    eyes, other = scaled(VERTICAL, 80.0) + scaled(LATERAL, 50.0), other_field()
    eyes = eyes - eyes.mean()
    other *= np.sqrt(ratio * (eyes @ eyes) / (other @ other))
    # Sines of whole cycles a second: as much power in each, and medians of zero.
    found = polarity_of(
        [(eyes, np.sin(4 * np.pi * TIME + 0.1)), (other, np.sin(6 * np.pi * TIME + 0.1))]
    )
    assert found.span[0] == pytest.approx(share, abs=0.004)


def test_moments_without_any_field_take_nothing_off():
    # Between blinks nothing moves at all: 0 of 0 is explained there.
    assert (BLINK[50:100] == 0).any()
    found = polarity_of([(scaled(VERTICAL, 100.0), BLINK)])
    assert found.span[0] == pytest.approx(1, abs=1e-4)
    silent = polarity_of([(np.zeros(19), BLINK)])
    assert np.isnan(silent.span).all()
    np.testing.assert_array_equal(silent.swing[:19], 0)


def test_eye_span_tells_a_second_of_the_eyes_from_a_posterior_rhythm():
    found = table_of(at_second(scaled(VERTICAL, 150.0))).column("eye_span")[:, 0]
    assert found[5] > 0.98
    assert np.delete(found, 5).max() < 0.3
    alpha = np.sin(2 * np.pi * 10 * np.arange(12 * 256) / RATE)
    data = ten_twenty(12, rms_uv=1.0, exponent=2) + np.outer(OCCIPITAL / 3, alpha)
    assert table_of(data).column("eye_span").max() < 0.1


def test_eye_agree_is_1_where_a_site_does_what_the_eyes_predict():
    field = scaled(VERTICAL, 150.0)
    found = polarity_of([(field, BLINK)])
    # d p / max(d, p)^2 with d = p, but for the floor of 0.05 uV: 1 / (1 + (0.05 / d)^2).
    size = against_behind(field)
    np.testing.assert_allclose(found.agree[:19, 0], 1 / (1 + (0.05 / size) ** 2), atol=0.01)
    assert np.isnan(found.agree[19]).all()


def test_eye_agree_is_negative_at_a_site_that_moves_the_other_way():
    field = scaled(VERTICAL, 150.0)
    field[row("F3")] *= -1
    found = polarity_of([(field, BLINK)])
    agree, d, p = (values[:19, 0] for values in (found.agree, found.reach, found.part))
    assert agree[row("F3")] < -0.5
    assert agree[[row("Fp1"), row("Fp2"), row("F4")]].min() > 0.8
    # Its size is the smaller over the larger of what is there and what is predicted.
    large = (d > 3) & (p > 3)
    assert large.sum() > 5
    ratio = np.minimum(d, p)[large] / np.maximum(d, p)[large]
    np.testing.assert_allclose(np.abs(agree[large]), ratio, atol=2e-3)


def test_eye_agree_is_small_where_a_site_moves_far_more_than_predicted():
    field = scaled(VERTICAL, 150.0)
    field[row("T8")] += 400.0
    found = polarity_of([(field, BLINK)])
    assert abs(found.agree[row("T8"), 0]) < 0.3
    assert found.reach[row("T8"), 0] > 350


def test_a_rhythm_that_does_not_follow_the_frontal_deflection_is_no_reach():
    field = scaled(VERTICAL, 150.0)
    at_c3 = np.zeros(19)
    at_c3[row("C3")] = 60.0
    # A raised cosine of 0.3 s holds nothing of 2 / 0.3 Hz: the regression on it is 0.
    found = polarity_of([(field, BLINK), (at_c3, np.sin(2 * np.pi * 2 / 0.3 * TIME))])
    np.testing.assert_allclose(found.reach[:19, 0], np.abs(against_behind(field)), atol=0.5)
    # What does follow it counts, in proportion.
    found = polarity_of([(field, BLINK), (at_c3, BLINK / 2)])
    expected = abs(against_behind(field)[row("C3")] + 30.0)
    assert found.reach[row("C3"), 0] == pytest.approx(expected, abs=0.1)


def test_reach_looks_no_further_than_four_tenths_of_a_second():
    poles = np.where(LEADS.front[:19], 150.0, 0.0)
    at_c3 = np.zeros(19)
    at_c3[row("C3")] = 100.0
    # The poles move twice, 0.34 or 0.45 s apart, and C3 with the second time alone.
    for apart, follows in ((0.34, True), (0.45, False)):
        again = np.where(np.abs(TIME - 0.5 - apart) < 0.03, 0.6, 0.0)
        found = polarity_of([(poles, BLINK), (poles, again), (at_c3, again)])
        reach = found.reach[row("C3"), 0]
        assert reach > 10 if follows else reach < 1e-3


@pytest.mark.parametrize("site", ["C3", "O1", "F7"])
def test_losing_a_site_leaves_what_the_eyes_do_at_the_others(site):
    field = scaled(VERTICAL, 120.0)
    whole, holed = (polarity_of([(field, BLINK)], lost=lost) for lost in ((), [row(site)]))
    others = np.delete(np.arange(19), row(site))
    assert np.isnan(holed.swing[row(site)]).all()
    assert np.isnan(holed.agree[row(site)]).all()
    assert holed.span[0] == pytest.approx(1, abs=1e-4)
    # "Behind" is another mean where one of those sites is lost: up to 1 uV of 120.
    np.testing.assert_allclose(holed.swing[others], whole.swing[others], atol=0.1)
    np.testing.assert_allclose(holed.reach[others], whole.reach[others], atol=1.0)
    np.testing.assert_allclose(holed.front_swing, whole.front_swing, rtol=1e-6)
    if site == "F7":
        assert np.isnan(holed.side_swing).all()
    else:
        np.testing.assert_allclose(holed.side_swing, whole.side_swing, atol=1e-4)


# Sites that come and go ----------------------------------------------------------------


def test_one_frontal_pole_serves_where_the_other_is_lost():
    data = at_second(scaled(VERTICAL, 150.0))
    data[row("Fp1"), 5 * 256 : 6 * 256] = np.nan
    assert table_of(data).column("front_vertical")[5, 1] == pytest.approx(150.0, abs=15.0)


def test_a_blink_beside_a_second_without_frontal_sites_is_measured():
    data = at_second(scaled(VERTICAL, 150.0))
    data[:2, 4 * 256 : 5 * 256] = np.nan
    assert table_of(data).column("front_vertical")[5, 5] == pytest.approx(150.0, abs=15.0)


def test_losing_a_frontal_pole_with_an_electrode_offset_is_no_blink():
    data = at_second(scaled(VERTICAL, 0.0))
    data[row("Fp1")] += 1000.0  # a recording without a high-pass
    data[row("Fp1"), 5 * 256 : 6 * 256] = np.nan
    assert np.nanmax(np.abs(table_of(data).column("front_vertical"))) < 50.0


def test_polarity_of_a_batch_does_not_touch_sites_that_are_not_there():
    batch = batch_of(np.random.default_rng(2).normal(size=(20, 5 * 256)), RATE)
    ok = batch.ok.copy()
    ok[row("C3"), 2] = False
    slow = spatial.slow_traces(dataclasses.replace(batch, ok=ok))
    found = spatial.frontal_polarity(slow, ok, LEADS)
    assert np.isnan(found.reach[row("C3"), 1])
    assert np.isfinite(np.delete(found.reach, row("C3"), axis=0)).all()
