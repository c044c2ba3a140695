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


def test_without_sites_behind_the_central_ones_serve():
    labels = ("Fp1", "Fp2", "C3", "Cz", "C4")
    leads = leads_of([f"{site}-REF" for site in labels])
    np.testing.assert_array_equal(leads.behind[:5], [False, False, True, True, True])


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
    for name in ("front_vertical", "front_lateral", "front_rhythm", "eye_match"):
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
