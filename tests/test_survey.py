"""The first look: mains, notch, low-pass, average reference, amplitude."""

import dataclasses

import numpy as np
import pytest
from signals import SITES, noise, referential, row, sine, ten_twenty

from artifactlens.frames import build_frame
from artifactlens.prefilter import Filters
from artifactlens.recording import Segment, from_array
from artifactlens.survey import STRETCH_SECONDS, STRETCHES, survey

SECONDS = 40
CHANCE_40_S = 14 / np.sqrt(10)
"""What is taken off the height of a line in 40 s, ten stretches of 4 s: 4.4 dB."""


def look(data, rate=256.0, line_frequency=None, labels=None, **options):
    if labels is None:
        recording = referential(data, rate, **options)
    else:
        recording = from_array(data, rate, labels, **options)
    frame = build_frame(recording.labels, recording.types, recording.positions)
    return survey(recording, frame, line_frequency)


def eeg(rate=256.0, exponent=1.0, seed=3, seconds=SECONDS, amplifier_uv=1.0):
    """Noise that falls with frequency until it meets an amplifier's white floor."""
    brain = ten_twenty(seconds, rate, seed=seed, exponent=exponent)
    return brain + noise(19, brain.shape[1], rate, exponent=0, rms_uv=amplifier_uv, seed=9)


def low_passed(data, rate, hz, order=4):
    from scipy.signal import butter, sosfilt

    filtered = sosfilt(butter(order, hz, fs=rate, output="sos"), data, axis=1)
    return filtered + noise(19, data.shape[1], rate, exponent=0, rms_uv=0.05, seed=10)


# Mains ---------------------------------------------------------------------------------


@pytest.mark.parametrize("rate", [256.0, 500.0])
@pytest.mark.parametrize("hz", [49.5, 49.8, 50.0, 50.3, 50.5, 59.4, 59.7, 60.0, 60.6])
def test_mains_is_found_within_1_percent_of_50_or_60_hz(rate, hz):
    # EN 50160: within 1 % for 99.5 % of the year. Bins are half a hertz apart.
    data = eeg(rate)
    data[row("O2")] += sine(data.shape[1], rate, hz, 3.0)
    found = look(data, rate)
    assert found.line_frequency == pytest.approx(hz, abs=0.3)
    assert found.line_found_db > 8 - CHANCE_40_S
    assert found.notch is None


def test_the_height_of_mains_is_that_of_its_strongest_site():
    data = eeg(exponent=0, amplifier_uv=1e-3)
    n = data.shape[1]
    data[row("C3")] += sine(n, 256.0, 50.0, 20.0)
    data[row("C4")] += sine(n, 256.0, 50.0, 5.0)
    # Two-second Hann window: a peak of a^2/2 / (1.5 bins x 0.5 Hz) over 100 uV^2 / 128 Hz,
    # each potential less 1/20. The flanks are those of the noisiest tenth of the time,
    # which stand up to 2.5 dB above the mean.
    expected = 10 * np.log10((0.95 * 20 - 0.05 * 5) ** 2 / 2 / 0.75 / (0.95 * 100 / 128))
    expected -= CHANCE_40_S
    assert expected - 2.5 < look(data).line_found_db < expected + 0.5


def test_a_given_line_frequency_is_the_only_one_looked_for():
    data = eeg()
    data[row("O2")] += sine(data.shape[1], 256.0, 60.0, 20.0)
    assert look(data).line_frequency == 60.0
    told = look(data, line_frequency=50.0)
    assert told.line_frequency == 50.0
    assert told.line_found_db < 3 - CHANCE_40_S


def test_without_mains_none_is_found_in_a_minute_and_the_frequency_is_nominal():
    found = look(eeg())
    assert found.line_found_db < 3 - CHANCE_40_S
    assert found.line_frequency in (50.0, 60.0)


def test_what_chance_adds_falls_with_the_root_of_the_number_of_stretches():
    # The same four seconds again and again have the same height in every stretch.
    stretch = noise(19, 4 * 256, 256.0, exponent=0, rms_uv=5.0)
    found = [look(np.tile(stretch, k)).line_found_db for k in (1, 4, 16, 40, 60)]
    # Of 60 stretches 40 are read.
    expected = found[0] + 14 - 14 / np.sqrt([1, 4, 16, 40, 40])
    np.testing.assert_allclose(found, expected, atol=1e-3)


@pytest.mark.parametrize("seed", range(4))
def test_strong_mains_is_found_in_four_seconds_all_the_same(seed):
    data = ten_twenty(4, seed=seed)
    data[row("O2")] += sine(data.shape[1], 256.0, 60.0, 20.0)
    found = look(data, filters=[Filters(0.5, 70.0, 60.0)] * 19)
    assert found.line_frequency == 60.0
    assert found.line_found_db > 6


@pytest.mark.parametrize("seconds", [2, 4])
def test_the_noise_of_a_short_recording_is_no_mains_that_overrides_the_header(seconds):
    stated = [Filters(0.5, 70.0, 50.0)] * 19
    found = [
        look(ten_twenty(seconds, seed=seed), filters=stated).line_found_db
        for seed in range(5)
    ]
    assert max(found) < 6  # 6 dB: "a line that stands out is there, whatever the header"


def test_the_noise_of_ten_seconds_does_not_move_the_line_off_its_nominal_frequency():
    found = {look(ten_twenty(10, seed=seed)).line_frequency for seed in range(6)}
    assert found <= {50.0, 60.0}


def test_mains_for_most_of_the_time_is_found_and_dropouts_do_not_matter():
    data = eeg()
    data[row("O2")] += sine(data.shape[1], 256.0, 60.0, 10.0)
    data[:, 5 * 256 : 15 * 256] = np.nan
    data[:, 20 * 256 : 25 * 256] = 0.0
    found = look(data)
    assert found.line_frequency == 60.0
    assert found.line_found_db > 8


def test_mains_for_a_tenth_of_the_time_decides_between_50_and_60():
    found = []
    for seed in range(100, 108):
        data = ten_twenty(80, seed=seed)
        burst = sine(data.shape[1], 256.0, 60.0, 20.0)
        burst[8 * 256 :] = 0
        data[row("C3")] += burst
        found.append(look(data).line_frequency)
    assert set(found) == {60.0}


@pytest.mark.parametrize("rate", [100.0, 106.0])
def test_mains_above_what_the_rate_carries_is_not_looked_for(rate):
    found = look(ten_twenty(20, rate), rate)
    assert np.isnan(found.line_found_db)
    assert found.line_frequency == 50.0


@pytest.mark.parametrize(("rate", "hz"), [(107.0, 50.0), (110.0, 50.5), (127.0, 60.0)])
def test_mains_three_hertz_below_nyquist_is_looked_for(rate, hz):
    data = ten_twenty(20, rate)
    data[row("O2")] += sine(data.shape[1], rate, hz, 10.0)
    found = look(data, rate)
    assert found.line_frequency == pytest.approx(hz, abs=0.3)
    assert found.line_found_db > 6


def test_mains_at_60_hz_in_a_recording_at_128_hz_is_not_taken_for_50():
    data = ten_twenty(SECONDS, 128.0)
    data += np.linspace(-1, 1, 19)[:, None] * sine(data.shape[1], 128.0, 60.0, 20.0)
    assert look(data, 128.0).line_frequency == pytest.approx(60.0, abs=0.6)


# Notch ---------------------------------------------------------------------------------


def test_a_notch_is_read_from_the_header():
    found = look(eeg(), filters=[Filters(0.5, 70.0, 60.0)] * 19)
    assert (found.notch, found.notch_source) == (60.0, "header")
    assert (found.high_pass, found.low_pass) == (0.5, 70.0)
    assert found.low_pass_source == "header"


@pytest.mark.parametrize("rate", [256.0, 500.0])
@pytest.mark.parametrize("hz", [50.0, 60.0])
@pytest.mark.parametrize("quality", [10, 30])
def test_a_notch_is_measured_by_its_dip(rate, hz, quality):
    from scipy.signal import filtfilt, iirnotch

    data = filtfilt(*iirnotch(hz, quality, fs=rate), eeg(rate, seconds=60), axis=1)
    found = look(data, rate)
    assert (found.notch, found.notch_source) == (hz, "measured")
    assert found.line_frequency == hz
    assert found.low_pass_source == "sampling rate"


@pytest.mark.parametrize(("dip_db", "notch"), [(4.0, None), (9.0, 50.0)])
def test_a_dip_is_a_notch_from_6_decibel(dip_db, notch):
    data = eeg()
    spectrum = np.fft.rfft(data, axis=1)
    freqs = np.fft.rfftfreq(data.shape[1], 1 / 256.0)
    spectrum[:, np.abs(freqs - 50) < 2] *= 10 ** (-dip_db / 20)
    assert look(np.fft.irfft(spectrum, data.shape[1], axis=1)).notch == notch


@pytest.mark.parametrize("exponent", [0, 1, 2, 3])
def test_no_notch_is_measured_where_there_is_none(exponent):
    assert look(eeg(exponent=exponent)).notch is None


def test_what_a_notch_leaves_of_strong_mains_is_no_notch():
    from scipy.signal import filtfilt, iirnotch

    data = eeg()
    data += np.linspace(-1, 1, 19)[:, None] * sine(data.shape[1], 256.0, 50.5, 400.0)
    data = filtfilt(*iirnotch(50.0, 30, fs=256.0), data, axis=1)
    found = look(data)
    assert found.notch is None
    assert found.line_found_db > 6


# Low-pass ------------------------------------------------------------------------------


@pytest.mark.parametrize("rate", [256.0, 500.0])
@pytest.mark.parametrize("hz", [35.0, 45.0, 70.0])
@pytest.mark.parametrize("exponent", [1.0, 2.0])
def test_a_fourth_order_low_pass_is_measured(rate, hz, exponent):
    found = look(low_passed(eeg(rate, exponent), rate, hz), rate)
    assert found.low_pass_source == "measured"
    assert 0.8 * hz <= found.low_pass <= 1.25 * hz


@pytest.mark.parametrize(("rate", "hz"), [(256.0, 35.0), (500.0, 45.0), (500.0, 70.0)])
def test_a_measured_low_pass_lies_within_a_quarter_of_its_corner(rate, hz):
    found = look(low_passed(eeg(rate), rate, hz), rate)
    assert found.low_pass == pytest.approx(hz, rel=0.25)


@pytest.mark.parametrize("rate", [128.0, 256.0, 500.0, 1000.0])
@pytest.mark.parametrize("exponent", [0.0, 1.0, 2.0])
def test_no_low_pass_is_measured_on_brain_noise_over_an_amplifiers_floor(rate, exponent):
    found = look(eeg(rate, exponent), rate)
    assert (found.low_pass, found.low_pass_source) == (rate / 2, "sampling rate")


@pytest.mark.parametrize("rate", [256.0, 500.0])
def test_no_low_pass_is_measured_on_a_steep_background(rate):
    # 1/f^3 falls by 30 log10(1.35 / 0.9) = 5.3 dB where a low-pass must fall by 10.
    found = look(ten_twenty(SECONDS, rate, exponent=3), rate)
    assert (found.low_pass, found.low_pass_source) == (rate / 2, "sampling rate")


def test_mains_and_its_harmonics_are_no_roll_off():
    data = eeg(500.0)
    for harmonic in (1, 2, 3):
        data[row("C3")] += sine(data.shape[1], 500.0, 50.0 * harmonic, 80.0 / harmonic)
        data[row("C4")] -= sine(data.shape[1], 500.0, 50.0 * harmonic, 80.0 / harmonic)
    assert look(data, 500.0).low_pass == 250.0


def test_what_is_measured_overrides_a_header_that_claims_more():
    data = low_passed(eeg(), 256.0, 35.0)
    found = look(data, filters=[Filters(None, 100.0, None)] * 19)
    assert found.low_pass_source == "measured"
    assert found.low_pass < 90
    told = look(data, filters=[Filters(None, 30.0, None)] * 19)
    assert (told.low_pass, told.low_pass_source) == (30.0, "header")


@pytest.mark.parametrize(("stated", "source"), [(45.0, "header"), (70.0, "measured")])
def test_a_header_that_claims_a_little_more_than_is_measured_is_believed(stated, source):
    # A steep low-pass at 35 Hz is measured near 36 Hz: 0.8 of 45 Hz, 0.5 of 70 Hz.
    data = low_passed(eeg(), 256.0, 35.0, order=8)
    found = look(data, filters=[Filters(None, stated, None)] * 19)
    assert found.low_pass_source == source
    expected = 45.0 if source == "header" else 36.0
    assert found.low_pass == pytest.approx(expected, abs=1.5)


@pytest.mark.parametrize(
    ("stated", "low_pass", "source"),
    [
        ([70.0] * 19, 70.0, "header"),
        ([70.0] * 12 + [300.0] * 7, 70.0, "header"),
        ([70.0] * 5 + [300.0] * 14, 128.0, "sampling rate"),
        ([300.0] * 19, 128.0, "sampling rate"),
        ([None] * 19, 128.0, "sampling rate"),
    ],
)
def test_a_low_pass_never_lies_above_nyquist(stated, low_pass, source):
    found = look(eeg(), filters=[Filters(None, value, None) for value in stated])
    assert (found.low_pass, found.low_pass_source) == (low_pass, source)


# Reference and amplitude ---------------------------------------------------------------


def test_an_average_reference_is_measured():
    data = eeg()
    assert not look(data).average_reference
    assert look(data - data.mean(axis=0)).average_reference


def test_an_average_reference_is_measured_beside_a_flat_channel_and_electrode_offsets():
    data = eeg()
    data -= data.mean(axis=0)
    offsets = 500 * np.random.default_rng(1).normal(size=(19, 1))
    assert look(data + offsets).average_reference
    assert look(np.vstack([data, np.zeros((1, data.shape[1]))]), labels=[
        *(f"{site}-REF" for site in SITES), "A1-REF"]).average_reference  # fmt: skip


def test_amplitude_is_the_robust_deviation_of_the_median_channel():
    data = noise(19, SECONDS * 256, 256.0, exponent=0, rms_uv=12.0)
    data[:3] *= 100
    data[:, ::50] += 3000  # artifacts in 2 % of the samples
    assert look(data).amplitude_uv == pytest.approx(12.0, rel=0.06)


@pytest.mark.parametrize("factor", [1e-6, 1e-3, 1e3])
def test_amplitude_tells_a_unit_mistake(factor):
    found = look(factor * ten_twenty(20))
    assert found.amplitude_uv == pytest.approx(10 * factor, rel=0.1)


def test_the_level_of_each_channel_is_its_usual_median():
    data = noise(19, 20 * 256, 256.0, exponent=0, rms_uv=2.0)
    levels = np.linspace(-900, 900, 19)
    data += levels[:, None]
    data[3, : 8 * 256] = np.nan  # two of five stretches
    data[4, : 4 * 256] += 5000.0  # one of five
    data[5] = np.nan
    found = look(data).levels_uv
    expected = np.where(np.arange(19) == 5, 0, levels)
    np.testing.assert_allclose(found, expected, atol=0.5)


# Little or nothing to see --------------------------------------------------------------


@pytest.mark.parametrize("value", [np.nan, 0.0, 42.0])
def test_a_recording_without_signal_gives_what_the_rate_carries_and_nan(value):
    found = look(np.full((19, 20 * 256), value))
    assert (found.low_pass, found.low_pass_source) == (128.0, "sampling rate")
    assert np.isnan([found.amplitude_uv, found.line_found_db]).all()
    assert found.notch is None
    assert not found.average_reference
    assert not found.levels_uv.any()


@pytest.mark.parametrize("n_samples", [1, 7, 8, 63, 64, 200, 256])
def test_a_very_short_recording_is_looked_at(n_samples):
    found = look(ten_twenty(2)[:, :n_samples])
    assert found.sampling_rate == 256.0
    assert found.low_pass == 128.0
    assert np.isnan(found.amplitude_uv) == (n_samples < 8)


def test_one_live_channel_of_an_average_reference_solves_no_site_and_no_filter():
    data = np.zeros((19, 20 * 256))
    data[4] = ten_twenty(20)[4]
    found = look(data, labels=[f"{site}-AVG" for site in SITES])
    assert (found.low_pass, found.low_pass_source) == (128.0, "sampling rate")
    assert found.amplitude_uv == pytest.approx(10, rel=0.2)


def test_channels_that_are_dead_leave_the_others_to_be_looked_at():
    data = eeg()
    data[:9] = np.nan
    data[row("O2")] += sine(data.shape[1], 256.0, 60.0, 5.0)
    found = look(data)
    assert found.line_frequency == 60.0
    assert found.line_found_db > 8


@pytest.mark.parametrize("broken", [False, True])
def test_a_long_recording_is_looked_at_in_a_bounded_number_of_short_stretches(broken):
    rate, n_samples, read = 50.0, 3 * 3600 * 50, []

    def note(start, stop):
        read.append((start, stop))
        return np.zeros((2, stop - start), dtype=np.float32)

    third = n_samples // 3
    segments = [Segment(0, third, 0.0), Segment(third, 2 * third, 4000.0)]
    silent = np.broadcast_to(np.float32(0), (2, n_samples))
    recording = dataclasses.replace(
        from_array(silent, rate, ["Fp1", "O2"], segments=segments if broken else None),
        _read=note,
    )
    survey(recording, build_frame(recording.labels, recording.types, None))
    assert 0 < len(read) <= STRETCHES
    assert all(stop - start <= STRETCH_SECONDS * rate for start, stop in read)
    assert min(start for start, _ in read) < 0.05 * n_samples
    assert max(stop for _, stop in read) > 0.9 * n_samples
