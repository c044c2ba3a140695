"""One-second epochs: the grid, the batches, the context, and the faults of channels."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from signals import noise, referential, row, ten_twenty

from artifactlens.epochs import (
    CLIPPED_SHARE,
    batches,
    epoch_grid,
    median_of_known,
    windows_of,
)
from artifactlens.features.catalogue import MEASURED
from artifactlens.frames import build_frame
from artifactlens.pipeline import measure_recording
from artifactlens.recording import Segment, from_array


def grid_of(n_samples, rate, segments=None):
    return epoch_grid(
        from_array(np.zeros((2, n_samples)), rate, ["Fp1", "O2"], segments=segments)
    )


def batches_of(recording, batch_epochs=32):
    frame = build_frame(recording.labels, recording.types, recording.positions)
    return list(batches(recording, frame, epoch_grid(recording), batch_epochs))


def single_batch(recording):
    (batch,) = batches_of(recording, 1000)
    return batch


# The grid ------------------------------------------------------------------------------


def test_whole_rate_gives_back_to_back_epochs_and_leaves_out_the_rest():
    grid = grid_of(256 * 3 + 255, 256.0)
    np.testing.assert_array_equal(grid.start, [0, 256, 512])
    np.testing.assert_array_equal(grid.onset, [0.0, 1.0, 2.0])
    assert grid.n_samples == 256


@pytest.mark.parametrize(
    ("rate", "n", "starts"),
    [
        # k x 600.6 = 600.6, 1201.2, 1801.8, 2402.4: rounded
        (600.6, 600, [0, 601, 1201, 1802, 2402]),
        # k x 499.9 = 499.9, 999.8, 1499.7, 1999.6
        (499.9, 499, [0, 500, 1000, 1500, 2000]),
    ],
)
def test_broken_rate_keeps_epochs_on_whole_seconds(rate, n, starts):
    grid = grid_of(round(5 * rate), rate)
    assert grid.n_samples == n
    np.testing.assert_array_equal(grid.start, starts)
    np.testing.assert_allclose(grid.onset, np.arange(5), atol=0.5 / rate)


def test_an_hour_at_a_broken_rate_does_not_drift_from_whole_seconds():
    samples = np.broadcast_to(np.float32(0), (2, int(499.9 * 3600)))
    grid = epoch_grid(from_array(samples, 499.9, ["Fp1", "O2"]))
    assert len(grid) == 3600
    np.testing.assert_allclose(grid.onset, np.arange(3600), atol=0.5 / 499.9 + 1e-9)


def test_each_segment_starts_its_own_grid_and_short_ones_give_none():
    # 2.5 s, a gap of 4 s, 0.9 s, a gap, then exactly 1 s, at 100 Hz.
    segments = [Segment(0, 250, 0.0), Segment(250, 90, 6.5), Segment(340, 100, 9.25)]
    grid = grid_of(440, 100.0, segments)
    np.testing.assert_array_equal(grid.start, [0, 100, 340])
    np.testing.assert_array_equal(grid.onset, [0.0, 1.0, 9.25])
    np.testing.assert_array_equal(grid.segment, [0, 0, 2])


@settings(max_examples=200, deadline=None)
@given(
    rate=st.floats(10, 2000),
    lengths=st.lists(st.integers(1, 9000), min_size=1, max_size=4),
)
def test_epochs_lie_within_their_segment_do_not_overlap_and_leave_less_than_one(
    rate, lengths
):
    begin = np.concatenate([[0], np.cumsum(lengths)])
    segments = [
        Segment(int(a), length, 10.0 * k + a / rate)
        for k, (a, length) in enumerate(zip(begin, lengths, strict=False))
    ]
    grid = grid_of(int(begin[-1]), rate, segments)
    n = grid.n_samples
    assert n == int(rate + 1e-9)
    for number, segment in enumerate(segments):
        starts = grid.start[grid.segment == number] - segment.start
        assert np.all(starts >= 0)
        assert np.all(starts + n <= segment.n_samples)
        assert np.all(np.diff(starts) >= n)
        assert np.all(np.diff(starts) <= n + 1)
        # The next whole second would not fit.
        assert round(len(starts) * rate) + n > segment.n_samples
        onset = grid.onset[grid.segment == number] - segment.onset
        np.testing.assert_allclose(onset, np.arange(len(starts)), atol=0.5 / rate + 1e-9)


def test_windows_are_the_samples_from_each_start():
    signal = np.arange(20, dtype=np.float32).reshape(2, 10)
    back_to_back = windows_of(signal, np.array([1, 4]), 3)
    np.testing.assert_array_equal(back_to_back[1], [[11, 12, 13], [14, 15, 16]])
    assert np.shares_memory(back_to_back, signal)
    apart = windows_of(signal, np.array([0, 5]), 3)
    np.testing.assert_array_equal(apart[0], [[0, 1, 2], [5, 6, 7]])


def test_a_median_leaves_out_what_is_not_known():
    nan = np.nan
    values = np.array(
        [[1, nan, nan, 9], [3, 2, nan, nan], [8, 5, nan, nan], [4, 1, nan, 9]]
    )
    np.testing.assert_array_equal(
        median_of_known(values.astype(np.float32)), [3.5, 2, nan, 9]
    )


# Batches -------------------------------------------------------------------------------


@pytest.mark.parametrize("rate", [100.0, 250.0, 256.0, 499.9, 600.6])
@pytest.mark.parametrize("size", [1, 7, 100])
def test_any_batch_size_gives_the_same_signal_sample_for_sample(rate, size):
    recording = referential(ten_twenty(9.3, rate), rate)
    whole, parts = single_batch(recording), batches_of(recording, size)
    assert [part.first for part in parts] == list(range(0, 9, size))
    assert sum(len(part) for part in parts) == len(whole) == 9
    for part in parts:
        chosen = slice(part.first, part.first + len(part) + 2)
        np.testing.assert_array_equal(part.ok, whole.ok[:, chosen])
        positions = whole.starts[chosen]
        np.testing.assert_array_equal(part.starts, positions - positions[0])
        length = part.sites_uv.shape[1]
        np.testing.assert_allclose(
            part.sites_uv,
            whole.sites_uv[:, positions[0] : positions[0] + length],
            atol=1e-5,  # float32 rounding of a sum of 19 products
        )


@pytest.mark.parametrize("rate", [256.0, 600.6])
@pytest.mark.parametrize("size", [1, 7, 100])
def test_any_batch_size_gives_the_same_measures_up_to_float32_rounding(rate, size):
    recording = referential(ten_twenty(12.4, rate, seed=5), rate)
    usual = measure_recording(recording).table
    other = measure_recording(recording, batch_epochs=size).table
    for name, expected, found in zip(MEASURED, usual.values, other.values, strict=True):
        np.testing.assert_allclose(found, expected, rtol=2e-6, atol=1e-5, err_msg=name)
    np.testing.assert_array_equal(other.pace, usual.pace)
    np.testing.assert_array_equal(other.step_at, usual.step_at)
    np.testing.assert_array_equal(other.front_at, usual.front_at)


def test_the_usual_level_is_taken_off_each_channel_before_the_mean_of_the_frame():
    data = ten_twenty(4, 100.0)
    levels = np.linspace(-900, 900, 19).astype(np.float32)
    data[row("C3"), 100:200] = np.nan
    data[row("O1"), 200:300] = levels[row("O1")]
    recording = referential(data + levels[:, None], 100.0)
    frame = build_frame(recording.labels, recording.types, recording.positions)
    (found,) = batches(recording, frame, epoch_grid(recording), 1000, levels)
    expected = single_batch(referential(data, 100.0))
    np.testing.assert_allclose(found.sites_uv, expected.sites_uv, atol=1e-3)
    # What is flat or missing is so on its own level.
    np.testing.assert_array_equal(np.argwhere(found.missing), [[row("C3"), 1]])
    np.testing.assert_array_equal(np.argwhere(found.flat), [[row("O1"), 2]])
    np.testing.assert_array_equal(found.ok, expected.ok)


def test_no_batch_crosses_a_gap():
    rate = 100.0
    segments = [Segment(0, 500, 0.0), Segment(500, 300, 9.0)]
    recording = referential(ten_twenty(8, rate), rate, segments=segments)
    found = batches_of(recording, 32)
    assert [(batch.first, len(batch)) for batch in found] == [(0, 5), (5, 3)]
    for batch in found:
        np.testing.assert_array_equal(batch.inside[[0, -1]], False)
        assert batch.inside[1:-1].all()


def test_measures_beside_a_gap_do_not_see_the_other_side():
    rate = 128.0
    data = ten_twenty(10, rate, seed=2)
    segments = [Segment(0, 640, 0.0), Segment(640, 640, 30.0)]
    changed = data.copy()
    changed[:, 640:] = ten_twenty(5, rate, seed=3, rms_uv=80.0)
    # Line and filters are found over the whole recording, so fix what can be fixed.
    first = measure_recording(
        referential(data, rate, segments=segments), line_frequency=50.0
    ).table.values[:, :5]
    second = measure_recording(
        referential(changed, rate, segments=segments), line_frequency=50.0
    ).table.values[:, :5]
    # So are the usual levels, which are taken off: that leaves rounding in float32.
    for name in ("swing", "step", "step_stays", "slow_power", "slope", "front_vertical"):
        index = MEASURED.index(name)
        np.testing.assert_allclose(
            first[index], second[index], rtol=2e-6, atol=5e-5, err_msg=name
        )


def test_context_beyond_an_end_is_the_mirrored_signal():
    rate = 50.0
    recording = referential(ten_twenty(3, rate), rate)
    batch = single_batch(recording)
    assert batch.sites_uv.shape[1] == 5 * 50
    np.testing.assert_array_equal(
        batch.sites_uv[:, :50], batch.sites_uv[:, 50:100][:, ::-1]
    )
    np.testing.assert_array_equal(
        batch.sites_uv[:, -50:], batch.sites_uv[:, -100:-50][:, ::-1]
    )


def test_mirrored_context_does_not_count_in_the_spectrum():
    # The first second alone, cut out, has no real context on either side.
    rate = 256.0
    data = ten_twenty(1, rate)
    alone = measure_recording(referential(data, rate), line_frequency=50.0)
    sites = data - np.append(data, np.zeros((1, 256)), axis=0).mean(axis=0)
    window = np.hanning(257)[:-1]
    density = 2 * np.abs(np.fft.rfft(sites * window, axis=1)) ** 2
    density /= rate * np.sum(window**2)
    expected = 10 * np.log10(density[:, 18:31].mean(axis=1) + 1e-6)
    found = alone.table.column("beta_power")[0, :19]
    np.testing.assert_allclose(found, expected, atol=1e-3)


def test_a_rest_shorter_than_a_second_serves_as_context_before_anything_is_mirrored():
    rate = 100.0
    data = ten_twenty(2.4, rate)
    batch = single_batch(referential(data, rate))
    assert not batch.inside[-1]
    sites = data - np.append(data, np.zeros((1, 240)), axis=0).mean(axis=0)
    np.testing.assert_allclose(batch.sites_uv[:19, 300:340], sites[:, 200:], atol=1e-4)


# Faults --------------------------------------------------------------------------------


def test_nan_in_one_channel_blanks_only_its_own_cells():
    rate = 128.0
    data = ten_twenty(10, rate, seed=4)
    whole = measure_recording(referential(data, rate), line_frequency=50.0).table
    data[row("C3"), 4 * 128 + 3 : 6 * 128 - 3] = np.nan
    holed = measure_recording(referential(data, rate), line_frequency=50.0).table
    for name, before, after in zip(MEASURED, whole.values, holed.values, strict=True):
        expected = np.isnan(before)  # no position of the reference, no second harmonic
        expected[4:6, row("C3")] = True
        np.testing.assert_array_equal(np.isnan(after), expected, err_msg=name)


def test_nan_in_one_channel_moves_the_others_only_by_the_change_of_the_mean():
    rate = 128.0
    data = ten_twenty(6, rate, seed=4)
    holed = data.copy()
    holed[row("C3"), 2 * 128 : 3 * 128] = np.nan
    before, after = (single_batch(referential(x, rate)) for x in (data, holed))
    inside = slice(3 * 128, 4 * 128)  # epoch 2 behind one second of context
    others = np.delete(np.arange(20), row("C3"))
    moved = after.sites_uv[others] - before.sites_uv[others]
    # 20 potentials of mean zero (19 sites and the reference, at 0 before) become 19.
    total = data[:, 2 * 128 : 3 * 128].sum(axis=0)
    less = total - data[row("C3"), 2 * 128 : 3 * 128]
    expected = np.broadcast_to(total / 20 - less / 19, moved[:, inside].shape)
    np.testing.assert_allclose(moved[:, inside], expected, atol=1e-4)
    np.testing.assert_array_equal(np.delete(moved, np.r_[inside], axis=1), 0)
    assert not after.ok[row("C3"), 3]
    assert after.ok.sum() == after.ok.size - 1


def test_a_nan_between_two_epochs_of_a_broken_rate_blanks_one_cell_and_no_other_site():
    rate = 600.6
    data = ten_twenty(4, rate)
    data[row("F3"), 600] = np.nan  # epochs 0 and 1 hold samples 0-599 and 601-1200
    batch = single_batch(referential(data, rate))
    assert np.isfinite(batch.sites_uv).all()
    assert not batch.ok[row("F3")].all()
    assert np.delete(batch.ok, row("F3"), axis=0).all()


def test_infinite_samples_count_as_missing():
    data = ten_twenty(3, 100.0)
    data[row("Cz"), 120:180] = np.inf
    data[row("Pz"), 120:180] = -np.inf
    data[row("O1"), 110] = np.inf
    batch = single_batch(referential(data, 100.0))
    found = np.argwhere(batch.missing)
    np.testing.assert_array_equal(found, [[row("Cz"), 1], [row("Pz"), 1], [row("O1"), 1]])
    assert np.isfinite(batch.sites_uv).all()


def test_an_epoch_that_is_infinite_throughout_counts_as_missing():
    data = ten_twenty(3, 100.0)
    data[row("Cz"), 100:200] = np.inf
    batch = single_batch(referential(data, 100.0))
    np.testing.assert_array_equal(np.argwhere(batch.missing), [[row("Cz"), 1]])


def test_a_flat_channel_is_told_and_leaves_the_mean_of_the_others():
    rate = 100.0
    data = ten_twenty(5, rate, seed=6)
    data[row("T8")] = 700.0  # flat on an offset, not on zero
    batch = single_batch(referential(data, rate))
    assert batch.flat[row("T8")].all()
    assert batch.flat.sum() == 5
    others = np.delete(data, row("T8"), axis=0)
    expected = others - np.append(others, np.zeros((1, 500)), axis=0).mean(axis=0)
    found = np.delete(batch.sites_uv[:19], row("T8"), axis=0)[:, 100:600]
    np.testing.assert_allclose(found, expected, atol=1e-4)
    np.testing.assert_array_equal(batch.sites_uv[row("T8")], 0)


@pytest.mark.parametrize(("swing", "flat"), [(0.15, True), (0.25, False)])
def test_a_channel_is_flat_below_a_swing_of_a_fifth_of_a_microvolt(swing, flat):
    data = ten_twenty(3, 100.0)
    data[row("Fz")] = 5 + swing * (np.arange(300) % 2)
    batch = single_batch(referential(data, 100.0))
    np.testing.assert_array_equal(batch.flat[row("Fz")], flat)


def test_an_amplifiers_own_noise_is_not_flat():
    rate = 256.0
    data = ten_twenty(4, rate)
    data[row("Fz")] = noise(1, 1024, rate, exponent=0, rms_uv=0.1)[0]
    batch = single_batch(referential(data, rate))
    assert not batch.flat.any()


def test_clipping_is_told_where_a_large_swing_stays_at_its_extreme():
    rate = 256.0
    data = ten_twenty(4, rate)
    wave = 300 * np.sin(2 * np.pi * 2 * np.arange(1024) / rate)
    data[row("F7")] = np.clip(wave, -1000, 200)
    data[row("F8")] = wave
    batch = single_batch(referential(data, rate))
    np.testing.assert_array_equal(batch.clipped[row("F7")], True)
    assert batch.clipped.sum() == 4
    share = np.mean(data[row("F7")] == 200)
    assert share > CLIPPED_SHARE


def test_a_small_swing_at_its_extreme_is_not_called_clipped():
    data = ten_twenty(4, 256.0)
    data[row("F7")] = np.clip(data[row("F7")], -5, 5)
    assert not single_batch(referential(data)).clipped.any()
