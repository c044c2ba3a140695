"""Reading recordings: formats, units, pieces, gaps, filters, and what bad files say."""

from __future__ import annotations

import os
import tracemalloc
from datetime import datetime
from pathlib import Path

import edfio
import mne
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from artifactlens.edf_header import microvolts_per, parse_tals
from artifactlens.errors import RecordingError
from artifactlens.recording import (
    Filters,
    Recording,
    Segment,
    from_array,
    from_raw,
    open_recording,
    parse_prefilter,
)

CORPORA = Path(
    os.environ.get(
        "ARTIFACTLENS_CORPORA",
        Path(__file__).resolve().parents[1].parent / "shared" / "corpora",
    )
)
UNSTATED = Filters(None, None, None)


def compose(
    path: Path,
    signals: list[dict],
    *,
    n_records: int,
    seconds: str = "1",
    reserved: str = "",
    tals: list[bytes] | None = None,
    tal_bytes: int = 64,
    width: int = 2,
    promised: int | None = None,
    patient: str = "X X X X",
    start: str = "01.02.0313.14.15",
) -> Path:
    """Write an EDF (with 3-byte samples a BDF) byte by byte, without the code under test.

    A signal is a dict of ``stored`` (integers, n_records * per_record) and header fields.
    """
    base = {2: "EDF", 3: "BDF"}[width]
    signals = [
        {
            "label": "Fp1",
            "unit": "uV",
            "low": -3276.8,
            "high": 3276.7,
            "dlow": -32768,
            "dhigh": 32767,
            "prefilter": "",
            **signal,
            "bytes": np.ascontiguousarray(signal["stored"], dtype="<i4")
            .view(np.uint8)
            .reshape(n_records, -1, 4)[:, :, :width]
            .reshape(n_records, -1),
        }
        for signal in signals
    ]
    if tals is not None:
        padded = b"".join(tal.ljust(tal_bytes, b"\x00") for tal in tals)
        signals.append(
            {
                "label": f"{base} Annotations",
                "unit": "",
                "low": -1,
                "high": 1,
                "dlow": -32768,
                "dhigh": 32767,
                "prefilter": "",
                "bytes": np.frombuffer(padded, np.uint8).reshape(n_records, tal_bytes),
            }
        )

    def field(value: object, size: int) -> bytes:
        raw = value if isinstance(value, bytes) else str(value).encode("latin-1")
        assert len(raw) <= size, raw
        return raw.ljust(size)

    header = [
        b"0       " if width == 2 else b"\xffBIOSEMI",
        field(patient, 80),
        field("Startdate X X X X", 80),
        field(start, 16),
        field(256 * (len(signals) + 1), 8),
        field(reserved, 44),
        field(n_records if promised is None else promised, 8),
        field(seconds, 8),
        field(len(signals), 4),
    ]
    for key, size in (
        ("label", 16),
        (None, 80),
        ("unit", 8),
        ("low", 8),
        ("high", 8),
        ("dlow", 8),
        ("dhigh", 8),
        ("prefilter", 80),
        ("per_record", 8),
        (None, 32),
    ):
        for signal in signals:
            per_record = signal["bytes"].shape[1] // width
            value = {**signal, None: "", "per_record": per_record}[key]
            header.append(field(value, size))
    records = np.concatenate([signal["bytes"] for signal in signals], axis=1)
    path.write_bytes(b"".join(header) + records.tobytes())
    return path


def stored(n: int, seed: int = 0, bits: int = 16) -> np.ndarray:
    limit = 2 ** (bits - 1)
    values = np.random.default_rng(seed).integers(-limit, limit, n)
    values[:2] = -limit, limit - 1  # the extremes as well
    return values


def keeper(onset: float | str, *more: bytes) -> bytes:
    return f"+{onset}\x14\x14\x00".encode() + b"".join(more)


def whole(recording: Recording) -> np.ndarray:
    return recording.read(0, recording.n_samples)


# ---------------------------------------------------------------- samples, exactly

LAYOUTS = [(256, "1", 7), (10, "0.1", 60), (321, "1.28", 6), (77, "0.3", 9), (199, "1", 5)]


@pytest.fixture(scope="module")
def layouts(tmp_path_factory) -> list[Recording]:
    """Files of odd rates and record durations; each has a slower and a faster electrode."""
    folder = tmp_path_factory.mktemp("layouts")
    recordings = []
    for number, (per_record, seconds, n_records) in enumerate(LAYOUTS):
        counts = [per_record] * 3 + [max(per_record // 2, 1), per_record * 2]
        signals = [
            {"label": label, "stored": stored(count * n_records, seed)}
            for seed, (label, count) in enumerate(
                zip(("Fp1", "Fp2", "Cz", "O1", "O2"), counts, strict=True)
            )
        ]
        path = compose(
            folder / f"{number}.edf", signals, n_records=n_records, seconds=seconds
        )
        recordings.append(open_recording(path))
    return recordings


@pytest.mark.parametrize("number", range(len(LAYOUTS)))
def test_every_stored_sample_is_read_at_its_place(layouts, number):
    per_record, seconds, n_records = LAYOUTS[number]
    recording = layouts[number]
    assert recording.n_samples == per_record * n_records
    assert recording.sampling_rate == pytest.approx(per_record / float(seconds), rel=1e-12)
    assert recording.duration == pytest.approx(n_records * float(seconds), rel=1e-12)
    for channel in range(3):
        expected = (stored(per_record * n_records, channel) * 0.1).astype(np.float32)
        np.testing.assert_allclose(
            whole(recording)[channel], expected, rtol=1e-6, atol=1e-4
        )


@given(data=st.data(), number=st.integers(0, len(LAYOUTS) - 1))
@settings(max_examples=60, deadline=None)
def test_any_partition_into_blocks_gives_the_samples_of_one_read(layouts, data, number):
    recording = layouts[number]
    n = recording.n_samples
    cuts = sorted(data.draw(st.lists(st.integers(0, n), max_size=12)))
    pieces = [
        recording.read(start, stop)
        for start, stop in zip([0, *cuts], [*cuts, n], strict=True)
    ]
    assert all(piece.dtype == np.float32 and piece.flags.c_contiguous for piece in pieces)
    np.testing.assert_array_equal(np.concatenate(pieces, axis=1), whole(recording))


@pytest.mark.parametrize("bounds", [(-1, 5), (5, 4), (0, 10**9)])
def test_reads_outside_the_recording_are_refused(layouts, bounds):
    with pytest.raises(RecordingError, match="the recording has 1792") as error:
        layouts[0].read(*bounds)
    assert error.value.remedy == "Ask for samples within the recording."


def test_a_short_read_of_a_long_file_takes_little_memory(tmp_path):
    n = 256 * 2000
    for width in (2, 3):
        path = compose(
            tmp_path / f"{width}.edf",
            [{"label": label, "stored": stored(n)} for label in ("Fp1", "Fp2", "Cz", "Oz")],
            n_records=2000,
            width=width,
        )
        tracemalloc.start()
        piece = open_recording(path).read(256 * 1000, 256 * 1010)
        peak = tracemalloc.get_traced_memory()[1]
        tracemalloc.stop()
        assert piece.shape == (4, 2560)
        assert peak < path.stat().st_size / 10


def test_a_file_shortened_after_opening_is_told_in_plain_words(tmp_path):
    path = compose(tmp_path / "a.edf", [{"stored": stored(1000)}], n_records=10)
    recording = open_recording(path)
    path.write_bytes(path.read_bytes()[:1500])
    with pytest.raises(RecordingError) as error:
        whole(recording)
    assert error.value.problem == (
        "a.edf was moved, shortened or disconnected while it was read."
    )
    path.unlink()
    with pytest.raises(RecordingError, match="was moved"):
        whole(recording)


# ---------------------------------------------------------------- header


def test_header_and_annotations_agree_with_an_independent_reader(tmp_path):
    signals = [
        edfio.EdfSignal(
            np.linspace(-90, 90, 1280),
            128,
            label=label,
            physical_dimension="uV",
            physical_range=(-100, 120),
            prefiltering="HP:0.1Hz LP:30Hz N:50Hz",
        )
        for label in ("EEG Fp1", "EEG Cz", "EEG O2")
    ]
    edfio.Edf(
        signals,
        starttime=datetime(2020, 1, 1, 11, 12, 13, 250000).time(),
        annotations=[
            edfio.EdfAnnotation(1.5, None, "Augen geöffnet"),
            edfio.EdfAnnotation(0.25, 2.5, "eyes closed"),
            edfio.EdfAnnotation(9.75, 0.0, "end"),
        ],
    ).write(tmp_path / "plain.edf")
    recording = open_recording(tmp_path / "plain.edf")
    theirs = edfio.read_edf(tmp_path / "plain.edf")
    assert (recording.name, recording.format, recording.path) == (
        "plain",
        "EDF+C",
        tmp_path / "plain.edf",
    )
    assert recording.labels == theirs.labels
    assert recording.sampling_rate == 128
    assert recording.filters == (Filters(0.1, 30.0, 50.0),) * 3
    assert recording.types == (None,) * 3
    assert recording.annotations == tuple(
        (mark.onset, mark.duration or 0.0, mark.text) for mark in theirs.annotations
    )
    assert recording.start == datetime(1985, 1, 1, 11, 12, 13, 250000)
    assert np.isnan(recording.positions).all()
    assert recording.segments == (Segment(0, 1280, 0.0),)
    assert recording.notes == ()
    data = np.stack([signal.data for signal in theirs.signals])
    np.testing.assert_allclose(whole(recording), data, rtol=1e-6, atol=1e-5)


def test_labels_keep_the_spelling_of_the_file_and_doubles_are_noted(tmp_path):
    labels = [b"Fc5.", b"EEG T3-REF", "Fp1 ä".encode("latin-1"), "Cz µ".encode(), b"Fc5."]
    path = compose(
        tmp_path / "a.edf",
        [{"label": label, "stored": stored(100)} for label in labels],
        n_records=1,
    )
    recording = open_recording(path)
    assert recording.labels == ("Fc5.", "EEG T3-REF", "Fp1 ä", "Cz µ", "Fc5.")
    assert recording.notes == ("More than one channel is called Fc5..",)


@pytest.mark.parametrize(
    ("unit", "scale"),
    [
        (b"uV", 1),
        (b"UV", 1),
        (b"\xb5V", 1),
        (b"\xc2\xb5V", 1),
        (b"\xce\xbcV", 1),
        (b"\xe6V", 1),
        (b"?V", 1),
        (b"microV", 1),
        (b"uVolts", 1),
        (b"mV", 1e3),
        (b"MV", 1e3),
        (b"nV", 1e-3),
        (b"V", 1e6),
        (b"Volt", 1e6),
    ],
)
def test_every_spelling_of_a_voltage_gives_the_same_microvolts(tmp_path, unit, scale):
    path = compose(
        tmp_path / "a.edf",
        [{"stored": stored(100), "unit": unit, "low": -3276.8, "high": 3276.7}],
        n_records=1,
    )
    recording = open_recording(path)
    np.testing.assert_allclose(whole(recording)[0], stored(100) * 0.1 * scale, rtol=1e-6)
    assert recording.notes == ()


@pytest.mark.parametrize(
    "unit", ["%", "bpm", "degC", "mmHg", "uV^2", "kV", "dB", "mVs", "µ°V"]
)
def test_a_unit_that_is_no_voltage_is_not_scaled(unit):
    assert microvolts_per(unit) is None


def test_channels_that_cannot_be_judged_are_set_aside_with_their_reason(tmp_path):
    odd = [
        {"label": "SpO2", "unit": "%"},
        {"label": "Status"},
        {"label": "Fp2", "low": 0, "high": 0},
        {"label": "F3", "dlow": 5, "dhigh": 5},
        {"label": "F4", "low": "abc"},
        {"label": "F7", "low": "-1e300", "high": "1e300"},
    ]
    path = compose(
        tmp_path / "a.edf",
        [
            {"stored": stored(100), **signal}
            for signal in [{"label": "Cz", "unit": ""}, *odd]
        ],
        n_records=1,
    )
    recording = open_recording(path)
    assert recording.labels == ("Cz",)
    assert recording.notes == ("No unit is stated for Cz: taken as microvolt.",)
    assert recording.set_aside == (
        ("SpO2", "its unit % is not a voltage"),
        ("Status", "a trigger channel, not a voltage"),
        ("Fp2", "its physical minimum and maximum are equal in the header"),
        ("F3", "its digital minimum and maximum are equal in the header"),
        ("F4", "the header does not state its range as numbers"),
        ("F7", "the range stated in the header is beyond any voltage"),
    )
    np.testing.assert_allclose(whole(recording)[0], stored(100) * 0.1, rtol=1e-6)


def test_a_reversed_or_shifted_physical_range_is_followed(tmp_path):
    digital = {"stored": [-100, 0, 100], "dlow": -100, "dhigh": 100}
    path = compose(
        tmp_path / "a.edf",
        [
            {"label": "Fp1", "low": 50, "high": -50, **digital},
            {"label": "Fp2", "low": 400, "high": 600, **digital},
        ],
        n_records=1,
    )
    np.testing.assert_allclose(whole(open_recording(path)), [[50, 0, -50], [400, 500, 600]])


def test_the_start_of_the_header_is_kept_and_an_impossible_one_is_none(tmp_path):
    signals = [{"stored": stored(100)}]
    path = compose(tmp_path / "a.edf", signals, n_records=1)
    assert open_recording(path).start == datetime(2003, 2, 1, 13, 14, 15)
    for start in ("01.02.8513.14.15", "32.13.9925.61.61", "xx.xx.xxyy.yy.yy"):
        path = compose(tmp_path / "a.edf", signals, n_records=1, start=start)
        year = 1985 if "85" in start else None
        assert open_recording(path).start == (year and datetime(year, 2, 1, 13, 14, 15))


# ---------------------------------------------------------------- sampling rates


def test_a_slow_channel_that_is_no_electrode_is_set_aside(tmp_path):
    counts = {"Fp1": 256, "Fp2": 256, "SpO2 raw": 1}
    path = compose(
        tmp_path / "a.edf",
        [{"label": label, "stored": stored(count * 4)} for label, count in counts.items()],
        n_records=4,
    )
    recording = open_recording(path)
    assert recording.labels == ("Fp1", "Fp2")
    assert recording.set_aside == (("SpO2 raw", "sampled at 1 Hz, the EEG at 256 Hz"),)


def test_the_rate_of_most_electrodes_counts_not_that_of_most_channels(tmp_path):
    counts = {"Fp1": 200, "Fp2": 200, "Light": 50, "Sound": 50, "Resp": 50}
    path = compose(
        tmp_path / "a.edf",
        [{"label": label, "stored": stored(count * 4)} for label, count in counts.items()],
        n_records=4,
    )
    recording = open_recording(path)
    assert recording.sampling_rate == 200
    assert [label for label, _ in recording.set_aside] == ["Light", "Sound", "Resp"]


@pytest.mark.parametrize(
    ("own", "tone"), [(128, 10.0), (128, 40.0), (512, 40.0), (200, 40.0)]
)
def test_an_electrode_of_another_rate_is_brought_to_the_rate_of_the_others(
    tmp_path, own, tone
):
    counts = {"Fp1": own, "Fp2": 256, "Cz": 256}
    signals = []
    for label, count in counts.items():
        time = np.arange(count * 10) / count
        wave = np.rint(10_000 * np.sin(2 * np.pi * tone * time + 0.3)).astype(int)
        signals.append({"label": label, "stored": wave})
    path = compose(tmp_path / "a.edf", signals, n_records=10)
    recording = open_recording(path)
    assert recording.labels == ("Fp1", "Fp2", "Cz")
    assert recording.sampling_rate == 256
    ours, truth, _ = whole(recording)
    inside = slice(256, -256)  # a kernel's reach from the ends
    np.testing.assert_allclose(ours[inside], truth[inside], atol=0.005 * 1000)
    if own < 256:
        assert recording.notes == (
            f"Fp1 is sampled at {own} Hz and was interpolated to 256 Hz: fast activity "
            "there cannot be judged.",
        )
        assert recording.filters[0] == Filters(None, own / 2, None)
    else:
        assert recording.notes == ("Fp1 is sampled at 512 Hz and was brought to 256 Hz.",)
        assert recording.filters[0] == UNSTATED


def test_what_the_kept_rate_cannot_carry_is_not_folded_into_it(tmp_path):
    fast = np.rint(10_000 * np.sin(2 * np.pi * 200 * np.arange(5120) / 512)).astype(int)
    signals = [{"label": "Fp1", "stored": fast}]
    signals += [{"label": label, "stored": stored(2560)} for label in ("C3", "C4")]
    recording = open_recording(compose(tmp_path / "a.edf", signals, n_records=10))
    assert recording.sampling_rate == 256
    assert np.abs(whole(recording)[0, 256:-256]).max() < 0.005 * 1000


def test_an_electrode_of_a_rate_too_far_from_the_others_is_set_aside(tmp_path):
    counts = {"Fp1": 10, "Fp2": 256, "Cz": 256, "O1": 4096}
    path = compose(
        tmp_path / "a.edf",
        [{"label": label, "stored": stored(count)} for label, count in counts.items()],
        n_records=1,
    )
    recording = open_recording(path)
    assert recording.labels == ("Fp2", "Cz")
    assert recording.set_aside == (
        ("Fp1", "sampled at 10 Hz, the EEG at 256 Hz"),
        ("O1", "sampled at 4096 Hz, the EEG at 256 Hz"),
    )


def test_interpolation_lowers_a_stated_low_pass_and_never_raises_it(tmp_path):
    counts = {"Fp1": (100, "LP:70Hz"), "Fp2": (100, "LP:30Hz"), "C3": (256, "LP:70Hz")}
    signals = [
        {"label": label, "stored": stored(count), "prefilter": text}
        for label, (count, text) in counts.items()
    ]
    signals += [{"label": label, "stored": stored(256)} for label in ("C4", "O1")]
    recording = open_recording(compose(tmp_path / "a.edf", signals, n_records=1))
    low_pass = [filters.low_pass for filters in recording.filters]
    assert low_pass == [50.0, 30.0, 70.0, None, None]


def test_resampling_does_not_reach_across_a_gap(tmp_path):
    level = np.repeat([1000, -1000], 100)  # the level changes at the gap
    signals = [{"label": "Fp1", "stored": level}]
    signals += [{"label": label, "stored": np.repeat(level, 2)} for label in ("C3", "C4")]
    path = compose(
        tmp_path / "a.edf",
        signals,
        n_records=2,
        reserved="EDF+D",
        tals=[keeper(0), keeper(60)],
    )
    samples = whole(open_recording(path))
    np.testing.assert_allclose(samples[0], samples[1], atol=1e-3)


# ---------------------------------------------------------------- EDF+ times


def test_the_example_of_the_edf_plus_specification_is_28_bytes_and_two_annotations():
    # Kemp & Olivan (2003), Clin Neurophysiol 114:1755; edfplus.info
    tal = b"+180\x14Lights off\x14Close door\x14\x00"
    assert len(tal) == 28
    assert parse_tals(tal) == [(180.0, 0.0, ("Lights off", "Close door"))]


def test_annotations_are_read_from_all_annotation_signals_whatever_their_encoding(tmp_path):
    tals = [
        keeper(0, b"+0.5\x152.5\x14blink\x14\x00", b"nonsense\x00"),
        keeper(1, "+1.25\x14Augen ge\xf6ffnet\x14\x00".encode("latin-1")),
    ]
    path = compose(
        tmp_path / "a.edf",
        [{"stored": stored(200)}],
        n_records=2,
        reserved="EDF+C",
        tals=tals,
    )
    assert open_recording(path).annotations == (
        (0.5, 2.5, "blink"),
        (1.25, 0.0, "Augen geöffnet"),
    )


@given(
    st.lists(
        st.tuples(
            st.integers(-(10**7), 10**7).map(lambda ms: ms / 1000),
            st.integers(0, 10**6).map(lambda ms: ms / 1000),
            st.text(
                st.characters(blacklist_categories=("Cs", "Cc")), min_size=1, max_size=20
            ).filter(lambda text: text == text.strip()),
        ),
        max_size=5,
    )
)
@settings(max_examples=50, deadline=None)
def test_written_annotation_lists_are_read_back(marks):
    raw = b"".join(
        f"{onset:+.3f}\x15{duration:.3f}\x14{text}\x14\x00".encode()
        for onset, duration, text in marks
    )
    assert parse_tals(raw) == [
        (onset, duration, (text,)) for onset, duration, text in marks
    ]


@given(st.binary(max_size=200))
@settings(max_examples=100, deadline=None)
def test_annotation_lists_of_any_bytes_give_finite_times(raw):
    assert all(
        np.isfinite([onset, duration]).all() for onset, duration, _ in parse_tals(raw)
    )


def interrupted(
    path: Path, onsets: list[str], *, seconds="1", reserved="EDF+D", n=100, **more
):
    return open_recording(
        compose(
            path,
            [
                {"label": label, "stored": stored(n * len(onsets))}
                for label in ("Fp1", "Fp2")
            ],
            n_records=len(onsets),
            seconds=seconds,
            reserved=reserved,
            tals=[keeper(onset) for onset in onsets],
            **more,
        )
    )


def test_gaps_of_edf_plus_d_split_the_recording_and_count_in_time(tmp_path):
    recording = interrupted(tmp_path / "a.edf", ["0", "1", "2", "100", "101", "200.5"])
    assert recording.format == "EDF+D"
    assert recording.segments == (
        Segment(0, 300, 0.0),
        Segment(300, 200, 100.0),
        Segment(500, 100, 200.5),
    )
    assert recording.duration == 201.5
    assert recording.notes == ("The recording has 2 gaps, 3:16 in all.",)
    np.testing.assert_allclose(whole(recording)[0], stored(600) * 0.1, rtol=1e-6, atol=1e-4)


def test_times_count_from_the_first_record_also_with_a_fraction_of_a_second(tmp_path):
    path = compose(
        tmp_path / "a.edf",
        [{"stored": stored(200)}],
        n_records=2,
        reserved="EDF+D",
        tals=[keeper("0.25", b"+0.75\x14blink\x14\x00"), keeper("5.25")],
    )
    recording = open_recording(path)
    assert [segment.onset for segment in recording.segments] == [0.0, 5.0]
    assert recording.annotations == ((0.5, 0.0, "blink"),)
    assert recording.start == datetime(2003, 2, 1, 13, 14, 15, 250000)


def test_rounded_record_times_are_no_gaps(tmp_path):
    onsets = [f"{i / 3:.3f}" for i in range(40)]
    recording = interrupted(tmp_path / "a.edf", onsets, seconds="0.333333", n=10)
    assert recording.segments == (Segment(0, 400, 0.0),)
    assert recording.notes == ()


def test_a_record_without_a_readable_time_follows_the_one_before(tmp_path):
    path = compose(
        tmp_path / "a.edf",
        [{"stored": stored(400)}],
        n_records=4,
        reserved="EDF+D",
        tals=[keeper(0), b"", keeper(20), b"garbage"],
    )
    recording = open_recording(path)
    assert recording.segments == (Segment(0, 200, 0.0), Segment(200, 200, 20.0))


def test_a_record_that_states_an_earlier_time_follows_the_one_before_and_is_noted(tmp_path):
    recording = interrupted(tmp_path / "a.edf", ["0", "1", "0.5", "10"])
    assert recording.segments == (Segment(0, 300, 0.0), Segment(300, 100, 10.0))
    assert recording.notes[1] == (
        "Data records that state a time before the end of the record before them: 1; taken "
        "as following it directly."
    )


def test_a_stray_earlier_time_between_regular_ones_makes_no_gap(tmp_path):
    recording = interrupted(tmp_path / "a.edf", ["0", "1", "0.5", "3"])
    assert recording.segments == (Segment(0, 400, 0.0),)


def test_only_the_first_annotation_signal_keeps_the_time(tmp_path):
    first = b"".join(keeper(onset).ljust(16, b"\x00") for onset in (0, 1))
    path = compose(
        tmp_path / "a.edf",
        [
            {"stored": stored(200)},
            {"label": "EDF Annotations", "stored": np.frombuffer(first, "<i2")},
        ],
        n_records=2,
        reserved="EDF+D",
        tals=[b"+0.5\x14blink\x14\x00", b"+50\x14\x14\x00"],
    )
    recording = open_recording(path)
    assert recording.segments == (Segment(0, 200, 0.0),)
    assert recording.annotations == ((0.5, 0.0, "blink"),)


def test_a_file_that_calls_itself_continuous_is_taken_so_and_odd_times_are_noted(tmp_path):
    recording = interrupted(tmp_path / "a.edf", ["0", "1", "50", "51"], reserved="EDF+C")
    assert recording.segments == (Segment(0, 400, 0.0),)
    assert recording.notes == (
        "The file calls itself continuous, but 1 of its data records state another time; "
        "all were taken as following one another.",
    )


@given(
    lengths=st.lists(st.integers(1, 5), min_size=1, max_size=8),
    gaps=st.lists(st.integers(1, 10**5), min_size=8, max_size=8),
    duration=st.sampled_from(["1", "0.1", "1.28", "0.5"]),
)
@settings(max_examples=40, deadline=None)
def test_segments_are_those_that_were_written(tmp_path_factory, lengths, gaps, duration):
    onset, onsets, expected, first = 0.0, [], [], 0
    for length, gap in zip(lengths, gaps, strict=False):
        expected.append((first * 10, length * 10, pytest.approx(onset, abs=1e-6)))
        onsets += [f"{onset + i * float(duration):.6f}" for i in range(length)]
        onset += length * float(duration) + gap / 10
        first += length
    path = tmp_path_factory.mktemp("gaps") / "a.edf"
    recording = interrupted(path, onsets, seconds=duration, n=10)
    found = [(part.start, part.n_samples, part.onset) for part in recording.segments]
    assert found == expected


# ---------------------------------------------------------------- truncated files


@pytest.mark.parametrize("kept_records", [900, 751, 1])
def test_a_truncated_file_is_read_as_far_as_it_goes(tmp_path, kept_records):
    path = compose(tmp_path / "a.edf", [{"stored": stored(1800 * 10)}], n_records=1800)
    path.write_bytes(path.read_bytes()[: 512 + kept_records * 20 + 7])  # and a piece
    recording = open_recording(path)
    assert recording.n_samples == kept_records * 10
    assert recording.duration == kept_records
    held = {900: "15:00", 751: "12:31", 1: "1 s"}[kept_records]
    assert recording.notes == (
        f"The file ends after {held} of the 30:00 its header promises; triaged as far as "
        "it goes.",
    )
    expected = stored(18000)[: kept_records * 10] * 0.1
    np.testing.assert_allclose(whole(recording)[0], expected, rtol=1e-6, atol=1e-4)


def test_a_recording_that_was_not_closed_is_noted(tmp_path):
    path = compose(tmp_path / "a.edf", [{"stored": stored(40)}], n_records=4, promised=-1)
    assert open_recording(path).notes == (
        "The header leaves the length open, as in a recording that was not closed; triaged "
        "the 4 s that the file holds.",
    )


def test_records_beyond_the_stated_number_are_read_and_noted(tmp_path):
    path = compose(tmp_path / "a.edf", [{"stored": stored(40)}], n_records=4, promised=3)
    recording = open_recording(path)
    assert recording.n_samples == 40
    assert recording.notes == (
        "The file holds 4 s, its header states 3 s; all of it was triaged.",
    )


# ---------------------------------------------------------------- BDF


def test_bdf_reads_24_bit_samples_as_written_and_as_mne_reads_them(tmp_path):
    n = 256 * 4
    signals = [
        {
            "label": label,
            "stored": stored(n, seed, bits=24),
            "low": -262144,
            "high": 262143,
            "dlow": -8388608,
            "dhigh": 8388607,
        }
        for seed, label in enumerate(("Fp1", "Fp2"))
    ]
    status = {"label": "Status", "stored": np.zeros(n), "unit": "Boolean"}
    path = compose(
        tmp_path / "a.bdf", [*signals, status], n_records=4, width=3, reserved="24BIT"
    )
    recording = open_recording(path)
    assert (recording.format, recording.labels) == ("BDF", ("Fp1", "Fp2"))
    assert recording.set_aside == (("Status", "a trigger channel, not a voltage"),)
    steps = np.stack([stored(n, i, 24) for i in range(2)]) + 8388608
    expected = -262144 + steps * (524287 / 16777215)
    np.testing.assert_allclose(whole(recording), expected, rtol=1e-6, atol=0.02)
    theirs = mne.io.read_raw_bdf(path, verbose="error").get_data(picks=[0, 1]) * 1e6
    np.testing.assert_allclose(whole(recording), theirs, rtol=1e-6, atol=1e-3)


def test_bdf_plus_annotations_and_gaps_are_read(tmp_path):
    path = compose(
        tmp_path / "a.bdf",
        [{"stored": stored(200)}],
        n_records=2,
        width=3,
        reserved="BDF+D",
        tals=[keeper(0), keeper(9, b"+9.5\x14blink\x14\x00")],
        tal_bytes=63,
    )
    recording = open_recording(path)
    assert recording.format == "BDF+D"
    assert recording.segments == (Segment(0, 100, 0.0), Segment(100, 100, 9.0))
    assert recording.annotations == ((9.5, 0.0, "blink"),)


# ---------------------------------------------------------------- other formats


def noise_uv(n_channels: int = 3, n_samples: int = 1000) -> np.ndarray:
    return np.random.default_rng(1).normal(0, 30, (n_channels, n_samples))


def test_brainvision_is_read_as_mne_reads_it(tmp_path):
    import pybv

    pybv.write_brainvision(
        data=noise_uv() * 1e-6,
        sfreq=250,
        ch_names=["Fp1", "Cz", "EOG"],
        fname_base="a",
        folder_out=tmp_path,
        resolution=0.1,
        unit="µV",
        events=[{"onset": 500, "duration": 1, "description": 7, "type": "Stimulus"}],
    )
    recording = open_recording(tmp_path / "a.vhdr")
    assert (recording.name, recording.format) == ("a", "BrainVision")
    assert recording.labels == ("Fp1", "Cz", "EOG")
    assert recording.sampling_rate == 250
    assert recording.filters[0] == UNSTATED
    np.testing.assert_allclose(whole(recording), noise_uv(), atol=0.0501)
    theirs = mne.io.read_raw_brainvision(tmp_path / "a.vhdr", verbose="error").get_data()
    np.testing.assert_allclose(whole(recording), theirs * 1e6, rtol=1e-6)
    assert (2.0, "Stimulus/S  7") in [
        (onset, text) for onset, _, text in recording.annotations
    ]
    for part in ("a.eeg", "a.vmrk"):
        with pytest.raises(RecordingError) as error:
            open_recording(tmp_path / part)
        assert error.value.problem == f"{part} is only a part of a.vhdr."
        assert error.value.remedy == "Give a.vhdr."


def test_eeglab_is_read_as_mne_reads_it_and_boundaries_split_it(tmp_path):
    from eeglabio.raw import export_set

    export_set(
        str(tmp_path / "a.set"),
        noise_uv() * 1e-6,
        250,
        ["Fp1", "Cz", "O1"],
        annotations=[["boundary", "blink"], np.array([2.0, 3.0]), np.array([0.5, 0.1])],
    )
    recording = open_recording(tmp_path / "a.set")
    assert (recording.format, recording.labels) == ("EEGLAB", ("Fp1", "Cz", "O1"))
    np.testing.assert_allclose(whole(recording), noise_uv(), rtol=1e-5, atol=1e-3)
    assert recording.segments == (Segment(0, 500, 0.0), Segment(500, 500, 2.0))
    assert recording.notes == ("The recording is cut into 2 uninterrupted stretches.",)


@pytest.fixture
def raw() -> mne.io.RawArray:
    info = mne.create_info(
        ["Fp1", "Cz", "O1", "EOG", "ECG", "Trigger", "MEG1", "Depth", "Breath"],
        250.0,
        ["eeg", "eeg", "eeg", "eog", "ecg", "stim", "mag", "seeg", "resp"],
    )
    raw = mne.io.RawArray(noise_uv(9) * 1e-6, info, first_samp=500, verbose="error")
    raw.set_montage("standard_1020", on_missing="ignore", verbose="error")
    raw.info["bads"] = ["Cz"]
    raw.set_meas_date(datetime.fromisoformat("2001-02-03T04:05:06+00:00"))
    return raw


@pytest.mark.parametrize("preload", [True, False])
def test_fif_keeps_positions_types_and_bad_channels(tmp_path, raw, preload):
    raw.save(tmp_path / "a_raw.fif", verbose="error")
    if preload:
        again = mne.io.read_raw(tmp_path / "a_raw.fif", preload=True, verbose="error")
        recording = from_raw(again, "a_raw")
        assert (recording.format, recording.path) == ("mne Raw", None)
    else:
        recording = open_recording(tmp_path / "a_raw.fif")
        assert (recording.format, recording.path) == ("FIF", tmp_path / "a_raw.fif")
    assert recording.name == "a_raw"
    assert recording.labels == ("Fp1", "Cz", "O1", "EOG", "ECG")
    assert recording.types == ("eeg", "eeg", "eeg", "eog", "ecg")
    assert recording.set_aside == (
        ("Trigger", "a trigger channel, not a voltage"),
        ("MEG1", "a channel of type mag, not EEG"),
        ("Depth", "an intracranial channel, not scalp EEG"),
        ("Breath", "a channel of type resp, not EEG"),
    )
    assert recording.notes == ("Marked bad in the file, triaged all the same: Cz.",)
    np.testing.assert_allclose(whole(recording), noise_uv(9)[:5], rtol=1e-5, atol=1e-4)
    assert recording.read(1000, 1000).shape == (5, 0)
    montage = raw.get_montage().get_positions()
    assert montage["coord_frame"] == "head"
    np.testing.assert_allclose(recording.positions[0], montage["ch_pos"]["Fp1"], atol=1e-6)
    assert recording.positions[0, 1] > 0.05  # metres, towards the nose
    assert np.isnan(recording.positions[3:]).all()
    assert recording.filters[0] == UNSTATED  # mne says 0 and Nyquist
    assert recording.start == datetime(2001, 2, 3, 4, 5, 8)  # 500 samples later


def test_filters_that_mne_knows_are_taken_over(raw):
    with raw.info._unlock():
        raw.info["highpass"], raw.info["lowpass"] = 0.5, 40.0
    assert from_raw(raw).filters == (Filters(0.5, 40.0, None),) * 5


def test_a_position_at_the_origin_means_unknown(raw):
    raw.info["chs"][0]["loc"][:3] = 0
    known = np.isfinite(from_raw(raw).positions).all(axis=1)
    assert known.tolist() == [False, True, True, False, False]


@pytest.mark.parametrize("dated", [True, False])
def test_skipped_acquisition_and_edges_split_an_mne_raw(raw, dated):
    if not dated:
        raw.set_meas_date(None)
    marks = mne.Annotations(
        [1.0, 3.0, 3.2], [0.5, 0.0, 0.1], ["BAD_ACQ_SKIP", "EDGE boundary", "blink"]
    )
    raw.set_annotations(marks)  # onsets count from the first sample
    recording = from_raw(raw)
    assert recording.segments == (
        Segment(0, 250, 0.0),
        Segment(375, 375, 1.5),
        Segment(750, 250, 3.0),
    )
    assert [(round(onset, 9), text) for onset, _, text in recording.annotations] == [
        (1.0, "BAD_ACQ_SKIP"),
        (3.0, "EDGE boundary"),
        (3.2, "blink"),
    ]


def test_concatenated_raws_are_split_where_they_were_joined(raw):
    joined = mne.concatenate_raws([raw.copy(), raw.copy()], verbose="error")
    assert from_raw(joined).segments == (Segment(0, 1000, 0.0), Segment(1000, 1000, 4.0))


def test_an_mne_raw_without_a_voltage_is_refused(raw):
    with pytest.raises(RecordingError) as error:
        from_raw(raw.copy().pick(["MEG1", "Trigger"]), "x")
    assert error.value.problem == (
        "x has no channel that holds a scalp voltage (MEG1: a channel of type mag, not "
        "EEG, Trigger: a trigger channel, not a voltage)."
    )
    assert error.value.remedy.startswith("Give a scalp EEG")


# ---------------------------------------------------------------- arrays


def test_an_array_is_taken_over_and_missing_samples_stay_missing():
    data = noise_uv()
    data[1, 10:20] = np.nan
    recording = from_array(data, 250, ["Fp1", "Cz", "O1"], types=["eeg", None, "eog"])
    assert (recording.name, recording.format, recording.path) == ("array", "array", None)
    assert recording.types == ("eeg", None, "eog")
    assert recording.segments == (Segment(0, 1000, 0.0),)
    piece = recording.read(5, 25)
    assert piece.flags.c_contiguous
    np.testing.assert_array_equal(piece, data[:, 5:25].astype(np.float32))
    piece[:] = 0  # a caller's changes do not reach the recording
    np.testing.assert_array_equal(recording.read(5, 25), data[:, 5:25].astype(np.float32))


def test_an_array_may_bring_segments_positions_and_filters():
    segments = (Segment(0, 400, 0.0), Segment(400, 600, 90.0))
    recording = from_array(
        noise_uv(2),
        200.0,
        ["Fp1", "Fp2"],
        segments=segments,
        positions=np.eye(3)[:2],
        filters=[Filters(0.5, 70.0, None), UNSTATED],
        name="live",
    )
    assert recording.segments == segments
    assert recording.duration == 93.0
    np.testing.assert_array_equal(recording.positions, np.eye(3)[:2])
    assert recording.filters[0].high_pass == 0.5


@pytest.mark.parametrize(
    ("change", "problem"),
    [
        ({"data_uv": np.zeros(5)}, r"shape \(5,\)"),
        ({"data_uv": np.array([["a", "b"]])}, "type <U1"),
        ({"sampling_rate": 0.0}, "and 0 Hz"),
        ({"sampling_rate": float("nan")}, "and nan Hz"),
        ({"labels": ["Fp1"]}, r"There are 2 channels, but not as many labels\."),
        ({"filters": []}, "not as many filters"),
        ({"types": ["eeg"]}, "not as many types"),
        ({"positions": np.zeros((2, 2))}, "not as many positions"),
        ({"segments": [Segment(0, 101, 0.0)]}, "outside the 100 samples"),
        ({"segments": [Segment(0, 0, 0.0)]}, "is empty"),
    ],
)
def test_arrays_that_do_not_fit_are_refused(change, problem):
    given = {
        "data_uv": np.zeros((2, 100)),
        "sampling_rate": 100.0,
        "labels": ["Fp1", "Fp2"],
    }
    with pytest.raises(RecordingError, match=problem) as error:
        from_array(**{**given, **change})
    assert error.value.remedy


# ---------------------------------------------------------------- filters in words


@pytest.mark.parametrize(
    ("text", "expected"),
    [
        ("HP:0.1Hz LP:75Hz N:50Hz", (0.1, 75.0, 50.0)),  # EDF specification
        ("HP:0.500000Hz LP:45.000000Hz RF:50Hz", (0.5, 45.0, 50.0)),
        ("HP:0Hz LP:0Hz N:0Hz", (None, None, None)),
        ("HP: DC", (None, None, None)),
        ("HP:DC LP:100Hz", (None, 100.0, None)),
        ("BP 0.5-70", (0.5, 70.0, None)),
        ("BP:1Hz - 40Hz N:60Hz", (1.0, 40.0, 60.0)),
        ("BP:0-70Hz", (None, 70.0, None)),
        ("TC:0.3s", (0.5305, None, None)),  # 1 / (2 pi tau)
        ("TC 1", (0.1592, None, None)),
        ("Time constant 300 ms, LP 70 Hz", (0.5305, 70.0, None)),
        ("HP:0.3s LP:70Hz", (0.5305, 70.0, None)),
        ("HP:0,5HzLP:70HzN:50Hz", (0.5, 70.0, 50.0)),
        ("high-pass 0.16 Hz; low-pass 0.07 kHz; Notch=60", (0.16, 70.0, 60.0)),
        ("LFF 1 HFF 70", (1.0, 70.0, None)),
        ("LF 1Hz HF 70Hz", (1.0, 70.0, None)),
        ("LP:5s", (None, None, None)),
        ("HP:70Hz LP:5Hz N:50Hz", (None, None, 50.0)),
        ("Butterworth N=4 HP:0.5Hz", (0.5, None, None)),
        ("Notch: off", (None, None, None)),
        ("none", (None, None, None)),
        ("HP:1e999Hz", (None, None, None)),
        ("HP:-1Hz", (None, None, None)),
        ("", (None, None, None)),
    ],
)
def test_filters_are_read_from_what_recorders_write(text, expected):
    filters = parse_prefilter(text)
    found = (filters.high_pass, filters.low_pass, filters.notch)
    assert found == tuple(value and pytest.approx(value, abs=5e-5) for value in expected)


FRAGMENTS = [
    "HP",
    "LP",
    "N",
    "TC",
    "BP",
    ":",
    " ",
    "-",
    ".",
    ",",
    "0",
    "5e",
    "9" * 30,
    "Hz",
]
FRAGMENTS += ["s", "ms", "kHz", "\x00", "²", "٣"]


@given(
    st.one_of(
        st.text(max_size=80),
        st.lists(
            st.sampled_from(FRAGMENTS),
            max_size=20,
        ).map("".join),
    )
)
@settings(max_examples=200, deadline=None)
def test_any_filter_text_gives_positive_frequencies_or_none(text):
    filters = parse_prefilter(text)
    for value in (filters.high_pass, filters.low_pass, filters.notch):
        assert value is None or 0 < value < float("inf")


# ---------------------------------------------------------------- bad files


def error_of(path: Path) -> tuple[str, str]:
    with pytest.raises(RecordingError) as error:
        open_recording(path)
    return error.value.problem, error.value.remedy


def good(path: Path, **changes) -> Path:
    return compose(path, [{"stored": stored(100)}], n_records=1, **changes)


def test_a_missing_file_is_told(tmp_path):
    assert error_of(tmp_path / "a.edf") == (
        "There is no file a.edf at the place given.",
        "Check the path for typing errors.",
    )


def test_a_directory_is_told(tmp_path):
    (tmp_path / "a.edf").mkdir()
    assert error_of(tmp_path / "a.edf") == (
        "a.edf is a directory.",
        "Give one recording file.",
    )


@pytest.mark.parametrize("name", ["a.edf", "a.bdf", "a.set", "a.vhdr", "a_raw.fif"])
def test_an_empty_file_is_told(tmp_path, name):
    (tmp_path / name).touch()
    assert error_of(tmp_path / name) == (
        f"{name} is empty (0 bytes).",
        "Copy or export the recording again.",
    )


def test_a_file_without_read_permission_is_told(tmp_path, monkeypatch):
    path = good(tmp_path / "a.edf")

    def refuse(*_args, **_kwargs):
        raise PermissionError(13, "Permission denied")

    monkeypatch.setattr(Path, "open", refuse)
    assert error_of(path) == (
        "a.edf may not be read by this user.",
        "Ask for read permission or copy it.",
    )


def test_a_path_that_no_file_can_have_is_told():
    problem, remedy = error_of(Path("a\x00.edf"))
    assert problem.endswith("could not be opened.")
    assert remedy == "Check the path and the disk it is on."


def test_random_bytes_are_told(tmp_path):
    path = tmp_path / "a.edf"
    path.write_bytes(np.random.default_rng(0).bytes(5000))
    assert error_of(path) == (
        "a.edf does not begin like an EDF or BDF file.",
        "Check that it was exported as EDF, EDF+ or BDF and copied whole.",
    )


@pytest.mark.parametrize("length", [20, 255, 256, 400, 511])
def test_a_file_that_ends_inside_its_header_is_told(tmp_path, length):
    path = good(tmp_path / "a.edf")
    path.write_bytes(path.read_bytes()[:length])
    assert error_of(path) == (
        "a.edf ends inside its header.",
        "Copy or export the recording again.",
    )


@pytest.mark.parametrize("length", [512, 600])
def test_a_header_without_a_whole_data_record_is_told(tmp_path, length):
    path = good(tmp_path / "a.edf")
    path.write_bytes(path.read_bytes()[:length])
    assert error_of(path) == (
        "a.edf holds a header but not one whole data record.",
        "Check that the recording was closed properly and copied whole.",
    )


def test_a_file_of_annotations_alone_is_told(tmp_path):
    path = tmp_path / "a.edf"
    edfio.Edf([], annotations=[edfio.EdfAnnotation(1, None, "Lights off")]).write(path)
    assert error_of(path) == (
        "a.edf holds annotations only, no signal.",
        "Give the file that holds the EEG itself.",
    )


def test_records_without_a_duration_are_told(tmp_path):
    problem, remedy = error_of(good(tmp_path / "a.edf", seconds="0"))
    assert problem == (
        "The header of a.edf states data records of 0 s; without their duration the "
        "sampling rate is unknown."
    )
    assert remedy == "Export the recording again with data records of, for example, 1 s."


@pytest.mark.parametrize(
    ("place", "value"),
    [
        (184, b"9999    "),
        (236, b"many    "),
        (244, b"nan     "),
        (252, b"0   "),
        (472, b"-5      "),
    ],
)
def test_lengths_that_do_not_fit_are_told(tmp_path, place, value):
    path = good(tmp_path / "a.edf")
    content = bytearray(path.read_bytes())
    content[place : place + len(value)] = value
    path.write_bytes(bytes(content))
    assert error_of(path) == (
        "The header of a.edf is damaged: the lengths it states do not fit.",
        "Copy or export the recording again.",
    )


def test_a_file_without_any_voltage_is_told(tmp_path):
    path = compose(tmp_path / "a.edf", [{"stored": stored(9), "unit": "%"}], n_records=1)
    assert error_of(path) == (
        "a has no channel that holds a scalp voltage (Fp1: its unit % is not a voltage).",
        "Give a scalp EEG whose channels have the unit uV, mV, nV or V.",
    )


@pytest.mark.parametrize("name", ["a.docx", "a", "a.csv"])
def test_an_unknown_suffix_is_told(tmp_path, name):
    (tmp_path / name).write_bytes(b"x")
    assert error_of(tmp_path / name) == (
        f"{name} has a suffix that no reader is known for.",
        "Give an EDF, EDF+, BDF, BrainVision (.vhdr), EEGLAB (.set) or FIF file.",
    )


@pytest.mark.parametrize(
    ("name", "called"),
    [
        ("a.vhdr", "BrainVision"),
        ("a.set", "EEGLAB"),
        ("a_raw.fif", "FIF"),
        ("a_raw.fif.gz", "FIF"),
        ("a.gdf", "GDF"),
        ("a.cnt", "CNT"),
        ("a.lay", "LAY"),
        ("a.eeg", "EEG"),
    ],
)
def test_what_mne_cannot_read_is_told_without_its_path(tmp_path, name, called):
    folder = tmp_path / "Jane Roe"
    folder.mkdir()
    (folder / name).write_bytes(np.random.default_rng(0).bytes(3000))
    problem, remedy = error_of(folder / name)
    assert problem.startswith(f"{name} could not be read as {called}: ")
    assert "Roe" not in problem
    assert str(tmp_path) not in problem
    assert remedy.startswith("Check that the recording is continuous, whole")


def test_an_mff_folder_without_content_is_told(tmp_path):
    (tmp_path / "a.mff").mkdir()
    assert error_of(tmp_path / "a.mff")[0].startswith("a.mff could not be read as MFF: ")


def test_a_brainvision_header_without_its_data_is_told(tmp_path):
    import pybv

    pybv.write_brainvision(
        data=noise_uv() * 1e-6,
        sfreq=250,
        ch_names=["Fp1", "Cz", "O1"],
        fname_base="a",
        folder_out=tmp_path,
    )
    (tmp_path / "a.eeg").unlink()
    problem, remedy = error_of(tmp_path / "a.vhdr")
    assert problem.startswith("a.vhdr could not be read as BrainVision: ")
    assert str(tmp_path) not in problem
    assert "companion files" in remedy


@given(
    changes=st.lists(
        st.tuples(
            st.one_of(st.integers(168, 255), st.integers(256, 1023)),
            st.sampled_from(b"0123456789 -.,+eEnaif\x00\xff\xb5"),
        ),
        max_size=6,
    ),
    length=st.one_of(st.none(), st.integers(0, 1600)),
)
@settings(max_examples=150, deadline=None)
def test_a_damaged_header_gives_a_recording_or_a_plain_error(
    tmp_path_factory, changes, length
):
    path = tmp_path_factory.getbasetemp() / "damaged.edf"
    signals = [{"label": label, "stored": stored(100)} for label in ("Fp1", "Fp2")]
    compose(
        path,
        signals,
        n_records=2,
        reserved="EDF+D",
        tals=[keeper(0), keeper(7)],
        tal_bytes=32,
    )
    content = bytearray(path.read_bytes())
    for place, value in changes:
        content[place] = value
    path.write_bytes(bytes(content[:length]))
    try:
        recording = open_recording(path)
        samples = whole(recording)
    except RecordingError as refusal:
        sentences = [refusal.problem, refusal.remedy]
    else:
        sentences = [recording.name]
        assert samples.shape == (len(recording.labels), recording.n_samples)
        assert np.isfinite(samples).all()
        assert recording.duration > 0
    assert all(sentences)


# ---------------------------------------------------------------- privacy


def test_nothing_that_identifies_a_person_is_kept_or_shown(tmp_path):
    patient = "MCH-0234567 F 02-MAY-1951 Jane_Roe"
    path = good(
        tmp_path / "a.edf",
        patient=patient,
        reserved="EDF+C",
        tals=[keeper(0, b"+0.5\x14Jane Roe blinks\x14\x00")],
        promised=9,
    )
    recording = open_recording(path)
    shown = f"{recording!r} {recording.notes} {recording.set_aside}"
    for part in ("Roe", "0234567", "1951", "2003", "blinks", str(tmp_path)):
        assert part not in shown
    assert recording.annotations == ((0.5, 0.0, "Jane Roe blinks"),)
    kept = {name: value for name, value in vars(recording).items() if name != "annotations"}
    assert "Jane_Roe" not in repr(kept)
    for place, value in ((184, b"1"), (244, b"-"), (252, b"9")):
        content = bytearray(path.read_bytes())
        content[place : place + 1] = value
        path.with_name("b.edf").write_bytes(bytes(content))
        with pytest.raises(RecordingError) as error:
            open_recording(path.with_name("b.edf"))
        assert "Roe" not in str(error.value)
        assert error.value.__cause__ is None


def test_what_mne_quotes_from_a_header_is_left_out(tmp_path, monkeypatch):
    path = tmp_path / "a.gdf"
    path.write_bytes(b"x")

    def fail(*_args, **_kwargs):
        raise ValueError(f"could not convert 'Jane Roe' of {path} to float\nJane Roe again")

    monkeypatch.setattr(mne.io, "read_raw", fail)
    assert error_of(path)[0] == (
        "a.gdf could not be read as GDF: could not convert (...) of the file to float."
    )


# ---------------------------------------------------------------- real recordings


@pytest.mark.corpora
@pytest.mark.parametrize(
    ("name", "n_channels"),
    [
        ("eegmat/Subject00_1.edf", 21),
        ("clinical_absence/absence.edf", 26),
        ("eegmmidb_s001/S001R01.edf", 64),
        ("sample_60eeg/sample_eeg_raw.fif", 61),
    ],
)
def test_real_recordings_are_read_as_mne_reads_them(name, n_channels):
    path = CORPORA / name
    if not path.exists():
        pytest.skip(f"{name} is not in the folder that ARTIFACTLENS_CORPORA names")
    recording = open_recording(path)
    theirs = mne.io.read_raw(path, verbose="error")
    assert len(recording.labels) == n_channels
    assert recording.n_samples == theirs.n_times
    assert recording.sampling_rate == theirs.info["sfreq"]
    n = min(recording.n_samples, 50_000)
    expected = theirs.get_data(picks=list(recording.labels), stop=n) * 1e6
    np.testing.assert_allclose(recording.read(0, n), expected, rtol=1e-6, atol=1e-4)
    assert not recording.notes
