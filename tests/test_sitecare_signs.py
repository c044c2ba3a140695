"""The log of what electrodes show: sums by hand, stretches, forgetting, mains and levels."""

import dataclasses
import tracemalloc

import numpy as np
import pytest
from care import CONDITIONS, frame_of, measured
from signals import SITES, batch_of, ten_twenty

from artifactlens.sitecare.placement import PlaceMoments
from artifactlens.sitecare.signs import (
    FADE_PER_EPOCH,
    LONGEST_LOG,
    STRETCH_SECONDS,
    SignKeeper,
    Signs,
    signs_of,
)

N_SITES, N_CHANNELS, RATE = 3, 2, 200.0


def signs(n, *, ok=True, seed=0):
    """Signs of n epochs, each a little different."""
    rng = np.random.default_rng(seed)
    channels = rng.random((3, n, N_CHANNELS)) < 0.3
    return Signs(
        ok=np.broadcast_to(ok, (n, N_SITES)).copy(),
        flat=channels[0],
        missing=channels[1],
        clipped=channels[2],
        level=rng.normal(size=(n, 2, N_SITES)).astype(np.float32),
        hum=rng.normal(size=(n, N_SITES)).astype(np.complex64),
    )


def places(n):
    """Sums over n epochs."""
    ones = np.ones((N_SITES, N_SITES))
    return PlaceMoments(2.0 * n * ones, float(n) * ones)


def cut(whole, part):
    chosen = np.zeros(len(whole.ok), dtype=bool)
    chosen[part] = True
    return whole.at(chosen)


def covariances(values):
    """One (3, 3) matrix for each number."""
    return np.multiply.outer(np.asarray(values, np.float32), np.ones((3, 3), np.float32))


def kept(onset, values=None, *, ok=True, n_epochs=100, size=None):
    """A keeper that was given these epochs, ``size`` at a time."""
    onset = np.asarray(onset, dtype=float)
    values = np.ones(len(onset)) if values is None else values
    whole, matrices = signs(len(onset), ok=ok), covariances(values)
    matrices = np.where(whole.ok[:, :, None] & whole.ok[:, None], matrices, np.float32(0))
    keeper = SignKeeper(n_epochs, N_SITES)
    size = size or len(onset)
    for low in range(0, len(onset), size):
        part = slice(low, low + size)
        n = len(onset[part])
        keeper.add(onset[part], cut(whole, part), matrices[part], places(n))
    return keeper


def equal(one, other):
    for name in Signs.__slots__:
        np.testing.assert_array_equal(getattr(one.signs, name), getattr(other.signs, name))
    for name in ("onset", "stretch", "begin", "end"):
        np.testing.assert_array_equal(getattr(one, name), getattr(other, name))
    np.testing.assert_allclose(one.covariance, other.covariance, rtol=1e-6)
    np.testing.assert_allclose(one.places.total, other.places.total)
    np.testing.assert_allclose(one.places.seconds, other.places.seconds)


# Sums over stretches -------------------------------------------------------------------


@pytest.mark.parametrize("size", [1, 3, 7, 10, 32, 47])
def test_no_sum_depends_on_how_many_epochs_come_at_once(size):
    rng = np.random.default_rng(5)
    onset, values, ok = np.arange(47.0), rng.random(47), rng.random((47, N_SITES)) < 0.8
    equal(kept(onset, values, ok=ok, size=size).log(), kept(onset, values, ok=ok).log())


@pytest.mark.parametrize("size", [1, 7, 100])
def test_no_sign_of_a_recording_depends_on_the_batch(size):
    channels = ten_twenty(25.0, RATE, seed=3)
    channels[4, 900:1500] = np.nan
    one, other = (measured(channels, batch_epochs=k).log for k in (size, 32))
    np.testing.assert_array_equal(one.signs.ok, other.signs.ok)
    np.testing.assert_array_equal(one.signs.missing, other.signs.missing)
    np.testing.assert_allclose(one.signs.level, other.signs.level, atol=1e-3)
    np.testing.assert_allclose(one.signs.hum, other.signs.hum, atol=1e-3)
    np.testing.assert_allclose(one.covariance, other.covariance, rtol=1e-3, atol=1e-2)
    np.testing.assert_allclose(one.places.total, other.places.total, rtol=1e-3, atol=1e-3)


def test_covariance_is_the_mean_over_the_seconds_in_which_both_sites_were_there():
    """0, 1, ... 9: all ten have the mean 4.5, the first five of them 2."""
    ok = np.ones((10, N_SITES), dtype=bool)
    ok[5:, 1] = False
    ok[:, 2] = False
    (found,) = kept(np.arange(10.0), np.arange(10.0), ok=ok).log().covariance
    assert found[0, 0] == pytest.approx(4.5)
    assert found[0, 1] == found[1, 0] == found[1, 1] == pytest.approx(2.0)
    assert np.isnan(found[2]).all()
    assert np.isnan(found[:, 2]).all()


def test_the_covariance_of_a_recording_is_that_of_its_slow_traces():
    """A sine of 4 Hz has the variance a^2 / 2; with half of itself the covariance a^2 / 4."""
    wave = np.sin(2 * np.pi * 4 * np.arange(round(12 * RATE)) / RATE)
    data = np.zeros((3, len(wave)))
    data[0], data[1] = 10.0 * wave, 5.0 * wave
    _, covariance, _ = signs_of(batch_of(data, RATE), frame_of(), conditions())
    assert covariance.shape == (10, 3, 3)
    # Means over blocks of 4 samples take off (pi 4 / 50)^2 / 3 of the variance.
    np.testing.assert_allclose(covariance[:, 0, 0], 50.0, rtol=0.03)
    np.testing.assert_allclose(covariance[:, 0, 1], 25.0, rtol=0.03)
    np.testing.assert_allclose(covariance[:, 2], 0.0, atol=1e-5)


# Stretches -----------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("seconds", "bounds"),
    [
        (24, [(0, 10), (10, 24)]),
        (25, [(0, 10), (10, 20), (20, 25)]),
        (30, [(0, 10), (10, 20), (20, 30)]),
        (4, [(0, 4)]),
    ],
)
def test_a_short_rest_is_told_with_the_stretch_before_it(seconds, bounds):
    log = kept(np.arange(float(seconds))).log()
    assert list(zip(log.begin, log.end, strict=True)) == bounds
    assert len(log) == len(bounds)
    for number, (begin, end) in enumerate(bounds):
        assert ((log.onset >= begin) & (log.onset < end) == (log.stretch == number)).all()


def test_a_short_rest_weighs_by_its_seconds():
    """Ten seconds of 1 and four of 8: (10 + 32) / 14 = 3."""
    log = kept(np.arange(14.0), [1.0] * 10 + [8.0] * 4).log()
    np.testing.assert_allclose(log.covariance, 3.0)


def test_a_rest_behind_a_gap_stands_alone():
    onset = [*range(12), 40, 41, 42]
    log = kept(onset).log()
    assert list(zip(log.begin, log.end, strict=True)) == [(0, 12), (40, 43)]
    assert log.stretch.tolist() == [0] * 12 + [1] * 3


def test_a_gap_within_a_stretch_parts_nothing():
    log = kept([0, 1, 2, 7.5, 8.5, 10, 11, 12, 13, 14, 15]).log()
    assert list(zip(log.begin, log.end, strict=True)) == [(0, 9.5), (10, 16)]


def test_the_mean_leaves_out_what_is_not_known():
    log = kept(np.arange(20.0)).log()
    values = np.arange(20.0)
    values[[0, 1, 2, 3, 4, 5, 6, 7]] = np.nan
    np.testing.assert_array_equal(log.mean(values), [8.5, 14.5])
    values[:10] = np.nan
    np.testing.assert_array_equal(log.mean(values), [np.nan, 14.5])
    np.testing.assert_array_equal(log.mean(values > 14), [0.0, 0.5])
    np.testing.assert_array_equal(log.total(np.ones((20, 2))), [[10, 10], [10, 10]])


def test_the_first_stretches_are_those_of_a_shorter_recording():
    values = np.arange(36.0)
    first = kept(values, values).log().first(2)
    whole = kept(values[:20], values[:20]).log()
    assert len(first) == 2
    for name in ("onset", "stretch", "begin", "end", "covariance"):
        np.testing.assert_array_equal(getattr(first, name), getattr(whole, name))
    assert len(first.signs.ok) == 20


# Forgetting ----------------------------------------------------------------------------


@pytest.mark.parametrize("size", [1, 8, 32])
@pytest.mark.parametrize("before", [0.0, 10.0, 17.0, 25.0, 33.0])
def test_what_is_forgotten_is_gone_to_the_second(size, before):
    """The epochs kept are those of the tables beside the log, which forget second by second."""
    values = np.arange(45.0)
    keeper = kept(values, values, size=size)
    keeper.forget(before)
    log = keeper.log()
    np.testing.assert_array_equal(log.onset, values[values >= before])
    assert log.begin[0] == before
    np.testing.assert_array_equal(log.signs.level, signs(45).level[int(before) :])
    # A stretch that is cut through keeps the covariance of all its seconds.
    whole = kept(values, values).log().covariance
    np.testing.assert_allclose(log.covariance, whole[-len(log) :])


def test_a_stream_keeps_the_last_minutes_only():
    keeper = SignKeeper(None, N_SITES)
    one, matrix = signs(1), covariances([1.0])
    sizes = []
    tracemalloc.start()
    for second in range(3000):
        keeper.add(np.array([float(second)]), one, matrix, places(1))
        keeper.forget(max(second - 599.0, 0.0))
        if second in (1200, 2999):
            sizes.append(tracemalloc.get_traced_memory()[0])
    tracemalloc.stop()
    assert len(keeper.log().onset) == 600
    assert len(keeper.log()) in (60, 61)
    assert sizes[1] < 1.1 * sizes[0]


def test_in_a_stream_what_tells_of_places_fades():
    keeper = SignKeeper(None, N_SITES)
    for second in range(3):
        keeper.add(np.array([float(second)]), signs(1), covariances([1.0]), places(1))
    expected = 1 + FADE_PER_EPOCH + FADE_PER_EPOCH**2
    np.testing.assert_allclose(keeper.log().places.seconds, expected)
    np.testing.assert_allclose(keeper.log().places.total, 2 * expected)
    assert 0.99 < FADE_PER_EPOCH < 1
    recording = kept(np.arange(3.0), size=1).log().places
    np.testing.assert_allclose(recording.seconds, 3.0)


# Size ----------------------------------------------------------------------------------


@pytest.mark.parametrize(("hours", "n_sites"), [(0.5, 19), (24, 19), (24, 64), (48, 256)])
def test_however_long_the_recording_its_covariances_stay_small(hours, n_sites):
    seconds = int(3600 * hours)
    keeper = SignKeeper(seconds, n_sites)
    stretches = np.ceil(seconds / keeper.stretch_seconds)
    assert stretches * n_sites**2 * 4 <= LONGEST_LOG
    assert keeper.stretch_seconds == int(keeper.stretch_seconds)


def test_stretches_are_as_short_as_they_are_meant_where_there_is_room():
    assert SignKeeper(1800, 19).stretch_seconds == STRETCH_SECONDS
    assert SignKeeper(None, 256).stretch_seconds == STRETCH_SECONDS
    assert SignKeeper(24 * 3600, 256).stretch_seconds > STRETCH_SECONDS


# Mains and levels ----------------------------------------------------------------------


def conditions(**changes):
    return dataclasses.replace(CONDITIONS, **changes)


@pytest.mark.parametrize(("size", "phase"), [(1.0, 0.0), (7.0, 0.8), (30.0, -2.5)])
def test_the_hum_is_the_amplitude_and_phase_of_the_line(size, phase):
    """a cos(2 pi f t + p) over whole turns of the line has a exp(ip), by the Hann window."""
    time = np.arange(round(6 * RATE)) / RATE
    data = np.zeros((2, len(time)))
    data[0] = size * np.cos(2 * np.pi * 50 * time + phase)
    data[1] = 20 * np.cos(2 * np.pi * 10 * time) + 15.0
    found, _, _ = signs_of(batch_of(data, RATE), frame_of(), conditions())
    np.testing.assert_allclose(found.hum[:, 0], size * np.exp(1j * phase), atol=1e-4 * size)
    assert np.abs(found.hum[:, 1]).max() < 1e-3


def test_without_mains_in_the_band_there_is_no_hum():
    data = np.cos(2 * np.pi * 50 * np.arange(round(6 * RATE)) / RATE)[None]
    batch = batch_of(data, RATE)
    notched = conditions(notch=50.0, notch_source="measured")
    slow = conditions(low_pass=35.0, line_found_db=0.0)
    for given in (notched, slow):
        found, _, _ = signs_of(batch, frame_of(), given)
        assert found.hum.shape == (4, 1)
        assert not found.hum.any()


def test_levels_are_the_means_of_half_seconds():
    """A ramp of 4 uV/s passes k + 1 and k + 3 uV in the middle of its half seconds."""
    n = round(6 * RATE)
    ramp = 4.0 * (np.arange(n) + 0.5) / RATE
    found, _, _ = signs_of(batch_of(ramp[None], RATE), frame_of(), conditions())
    assert found.level.shape == (4, 2, 1)
    expected = 4.0 * np.arange(1, 5)[:, None] + [1.0, 3.0]
    np.testing.assert_allclose(found.level[:, :, 0], expected, rtol=1e-5)


def test_the_newest_epochs_of_a_batch_are_those_of_the_whole_batch():
    batch = batch_of(ten_twenty(8.0, RATE), RATE)
    whole, covariance, _ = signs_of(batch, frame_of(), conditions())
    newest, last, moments = signs_of(batch, frame_of(), conditions(), newest=2)
    for name in Signs.__slots__:
        np.testing.assert_array_equal(getattr(newest, name), getattr(whole, name)[-2:])
    np.testing.assert_array_equal(last, covariance[-2:])
    np.testing.assert_array_equal(moments.seconds, np.full((len(SITES), len(SITES)), 2.0))
