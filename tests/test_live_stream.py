"""LSL streams: headers, the grid, and real streams on this machine's loopback."""

import signal
import subprocess
import sys
import threading
import time
from contextlib import contextmanager
from xml.sax.saxutils import escape

import edfio
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from artifactlens.errors import OptionError, StreamError
from artifactlens.frames import build_frame
from artifactlens.live import inlet as inlet_module
from artifactlens.live import lsl_client, lsl_link
from artifactlens.live import replay as replay_module
from artifactlens.live.inlet import Assembler, Changed, Gone, Inlet, Samples, read_facts
from artifactlens.live.replay import replay
from artifactlens.recording import Segment, from_array, open_recording

# ------------------------------------------------------------------------------ header


def header(*channels, rest=""):
    """A header with one dict of fields per channel."""
    body = "".join(
        "<channel>"
        + "".join(f"<{key}>{escape(value)}</{key}>" for key, value in channel.items())
        + "</channel>"
        for channel in channels
    )
    return f"<info><desc><channels>{body}</channels>{rest}</desc></info>"


def facts_of(xml, n_channels, rate=250.0):
    return read_facts(xml, name="amp", sampling_rate=rate, n_channels=n_channels)


def test_a_whole_header_is_read_by_the_convention():
    xml = header(
        {"label": "Fp1", "type": "EEG", "unit": "microvolts", "impedance": "4.5"},
        {"label": "Vert", "type": "EOG", "unit": "mV", "impedance": "12"},
        {"label": "Pz", "type": "", "unit": "V"},
        rest="<reference><label>A1</label><label>A2</label></reference>",
    )
    facts = facts_of(xml, 3)
    assert facts.labels == ("Fp1", "Vert", "Pz")
    assert facts.types == ("eeg", "eog", None)
    assert facts.scale_to_uv.tolist() == [1.0, 1e3, 1e6]
    assert facts.reference == "A1, A2"
    np.testing.assert_array_equal(facts.impedances_kohm, [4.5, 12.0, np.nan])
    assert facts.set_aside == ()
    assert facts.sampling_rate == 250.0


@pytest.mark.parametrize("xml", ["<info><desc/></info>", "<info/>", "", "<info", "\ud800"])
def test_a_header_without_a_description_is_accepted(xml):
    facts = facts_of(xml, 2)
    assert facts.labels == ("Ch 1", "Ch 2")
    assert facts.types == (None, None)
    assert facts.scale_to_uv.tolist() == [1.0, 1.0]
    assert np.isnan(facts.impedances_kohm).all()
    assert facts.reference is None


def test_a_description_of_another_channel_count_names_the_channels_that_there_are():
    two = header({"label": "Fp1"}, {"label": " "})
    assert facts_of(two, 3).labels == ("Fp1", "Ch 2", "Ch 3")
    assert facts_of(two, 1).labels == ("Fp1",)


@pytest.mark.parametrize(
    ("unit", "microvolts"),
    [
        ("uV", 1.0),
        ("microvolts", 1.0),
        ("\u00b5V", 1.0),  # micro sign
        ("\u03bcV", 1.0),  # Greek mu
        ("MicroVolt", 1.0),
        ("micro volts", 1.0),
        ("", 1.0),
        ("unknown", 1.0),
        ("V", 1e6),
        ("volts", 1e6),
        ("mV", 1e3),
        ("nV", 1e-3),
        ("nanovolts", 1e-3),
    ],
)
def test_units_are_understood_in_their_spellings(unit, microvolts):
    assert facts_of(header({"unit": unit}), 1).scale_to_uv[0] == microvolts


def test_what_is_no_voltage_is_set_aside_with_its_reason_and_its_row():
    facts = facts_of(
        header(
            {"label": "TRIG", "type": "Trigger"},
            {"label": "Cz", "type": "EEG", "unit": "uV"},
            {"label": "T", "unit": "celsius"},
            {"label": "Aux", "type": "AUX", "unit": "uV"},
        ),
        4,
    )
    assert facts.labels == ("Cz", "Aux")
    assert facts.types == ("eeg", "misc")
    assert facts.rows.tolist() == [1, 3]
    assert facts.set_aside == (
        ("TRIG", "typed 'Trigger' by the stream"),
        ("T", "its unit 'celsius' is not a voltage"),
    )


def test_a_stream_without_any_voltage_is_refused():
    with pytest.raises(StreamError, match="its unit 'lux' is not a voltage"):
        facts_of(header({"label": "Light", "unit": "lux"}), 1)


def test_the_frame_takes_labels_and_types_as_the_stream_gives_them():
    facts = facts_of(
        header({"label": "Fp1"}, {"label": "Fp2"}, {"label": "Left", "type": "EOG"}), 3
    )
    frame = build_frame(facts.labels, facts.types, None)
    assert frame.channel[:2] == ("Fp1", "Fp2")
    assert frame.set_aside == (("Left", "typed eog by the file (kept as witness)"),)


@pytest.mark.parametrize(
    ("stated", "kilo_ohms"),
    [
        (["4", "11.5", "60"], [4, 11.5, 60]),
        (["4000", "11500", "600"], [4, 11.5, 0.6]),
        (["150", "4000", "6000"], [0.15, 4, 6]),  # a bridge in a stream of ohms
        (["5", "7", "999"], [5, 7, 999]),  # a lead that is off in one of kilo-ohms
        (["5", "999", "999"], [5, 999, 999]),
        (["999", "999", "999"], [np.nan] * 3),
        (["4.5 kOhm", "700 ohms", "1 M\u03a9"], [4.5, 0.7, 1000]),
        (["-1", "0", "n/a"], [np.nan] * 3),
        (["", "nan", "1e999"], [np.nan] * 3),
    ],
)
def test_impedances_come_out_in_kilo_ohm_or_not_at_all(stated, kilo_ohms):
    facts = facts_of(header(*({"impedance": text} for text in stated)), 3)
    np.testing.assert_allclose(facts.impedances_kohm, kilo_ohms)


TEXT = st.text(st.characters(blacklist_categories=("Cs", "Cc")), max_size=100)


@given(
    st.lists(
        st.dictionaries(st.sampled_from(["label", "type", "unit", "impedance"]), TEXT),
        max_size=4,
    ),
    st.integers(1, 5),
)
@settings(max_examples=60, deadline=None)
def test_any_header_is_read_or_refused(channels, n_channels):
    try:
        facts = facts_of(header(*channels), n_channels)
    except StreamError:
        stated = [c for c in channels[:n_channels] if c.get("unit") or c.get("type")]
        assert len(stated) == n_channels  # a channel that says nothing is a voltage
        return
    n = len(facts.labels)
    assert n + len(facts.set_aside) == n_channels
    assert len(facts.types) == len(facts.scale_to_uv) == len(facts.rows) == n
    assert all(label and label.isprintable() and len(label) <= 80 for label in facts.labels)
    assert (facts.scale_to_uv > 0).all()
    assert not (facts.impedances_kohm <= 0).any()


@given(st.text(max_size=60))
@settings(max_examples=40, deadline=None)
def test_any_text_in_place_of_a_header_gives_unnamed_channels(text):
    assert facts_of(text, 1).labels == ("Ch 1",)


def test_a_layout_is_the_same_if_samples_mean_the_same():
    mine = facts_of(header({"label": "Cz", "impedance": "4"}), 1)
    assert mine.same_layout(facts_of(header({"label": "Cz", "impedance": "9"}), 1))
    assert not mine.same_layout(facts_of(header({"label": "Cz", "unit": "mV"}), 1))
    assert not mine.same_layout(facts_of(header({"label": "Pz"}), 1))
    assert not mine.same_layout(facts_of(header({"label": "Cz"}), 1, rate=500.0))


# -------------------------------------------------------------------------------- grid


def piece(indices, rate, noise=0.0, at=100.0):
    """Samples whose two channels tell which one each is."""
    indices = np.asarray(indices)
    uv = np.stack([indices, -indices]).astype(np.float32)
    return Samples(uv, at + (indices + noise) / rate)


def laid_out(assembler, pieces):
    """What the assembler gives, joined per segment; checks that nothing overlaps."""
    segments = {}
    for samples in pieces:
        for stretch in assembler.add(samples):
            parts = segments.setdefault(stretch.segment, [])
            assert stretch.start == sum(part.shape[1] for part in parts)
            assert stretch.uv.dtype == np.float32
            parts.append(stretch.uv)
    assert list(segments) == list(range(len(segments)))
    return [np.concatenate(parts, axis=1) for parts in segments.values()]


@st.composite
def drop_patterns(draw):
    """Rate, indices of the samples that came, their stamp errors, ends of the pieces."""
    rate = draw(st.sampled_from([100.0, 256.0, 1000.0]))
    runs = draw(
        st.lists(
            st.tuples(st.integers(1, 150), st.integers(0, int(2 * rate) - 1)),
            min_size=1,
            max_size=12,
        )
    )
    present = np.concatenate([np.r_[np.ones(n), np.zeros(m)] for n, m in runs])
    indices = np.flatnonzero(present)
    rng = np.random.default_rng(draw(st.integers(0, 2**32)))
    noise = rng.uniform(-1, 1, len(indices)) * draw(st.sampled_from([0.0, 0.01, 0.15]))
    ends = np.sort(rng.integers(0, len(indices), draw(st.integers(0, 20))))
    return rate, indices, noise, ends


@given(drop_patterns())
@settings(max_examples=60, deadline=None)
def test_every_sample_lands_on_its_place_and_drop_outs_are_missing(pattern):
    rate, indices, noise, ends = pattern
    assembler = Assembler(rate, 2)
    pieces = [
        piece(part, rate, error)
        for part, error in zip(np.split(indices, ends), np.split(noise, ends), strict=True)
    ]
    (grid,) = laid_out(assembler, pieces)
    expected = np.full((2, indices[-1] + 1), np.nan, dtype=np.float32)
    expected[:, indices] = indices, -indices
    np.testing.assert_array_equal(grid, expected)
    assert assembler.filled == np.isnan(expected[0]).sum()
    assert assembler.discarded == 0


@given(
    st.lists(st.tuples(st.integers(0, 130), st.integers(1, 60)), min_size=1, max_size=12)
)
@settings(max_examples=60, deadline=None)
def test_what_comes_twice_or_too_late_is_discarded_and_nothing_is_reordered(chunks):
    assembler = Assembler(100.0, 2)
    sent = [np.arange(start, start + n) for start, n in chunks]
    (grid,) = laid_out(assembler, [piece(indices, 100.0) for indices in sent])
    expected, taken = [], sent[0][0]
    for indices in sent:
        for index in indices:
            if index >= taken:
                expected += [np.nan] * (index - taken) + [index]
                taken = index + 1
    np.testing.assert_array_equal(grid[0], np.array(expected, dtype=np.float32))
    assert assembler.discarded == sum(map(len, sent)) - np.isfinite(expected).sum()


@pytest.mark.parametrize(
    ("missing", "n_segments"), [(199, 1), (200, 1), (201, 2), (9e6, 2)]
)
def test_two_seconds_are_filled_and_more_is_a_break(missing, n_segments):
    both = np.r_[np.arange(50), np.arange(50) + 50 + int(missing)]
    assembler = Assembler(100.0, 2)
    grids = laid_out(assembler, [piece(both, 100.0)])
    assert len(grids) == n_segments
    assert assembler.breaks == n_segments - 1
    assert sum(grid.shape[1] for grid in grids) == 100 + (missing if n_segments == 1 else 0)
    np.testing.assert_array_equal(grids[-1][0, -50:], both[50:])


def test_a_clock_that_steps_far_back_begins_a_segment():
    assembler = Assembler(100.0, 2)
    grids = laid_out(
        assembler,
        [piece(np.arange(50), 100.0), piece(np.arange(50, 90), 100.0, at=20.0)],
    )
    assert [grid.shape[1] for grid in grids] == [50, 40]
    assert (assembler.discarded, assembler.breaks) == (0, 1)


def test_a_clock_is_seen_to_step_back_behind_a_repeat_in_the_same_piece():
    assembler = Assembler(100.0, 2)
    repeat, anew = piece(np.arange(45, 50), 100.0), piece(np.arange(40), 100.0, at=20.0)
    both = Samples(
        np.concatenate([repeat.uv, anew.uv], axis=1), np.r_[repeat.times, anew.times]
    )
    grids = laid_out(assembler, [piece(np.arange(50), 100.0), both])
    assert [grid.shape[1] for grid in grids] == [50, 40]
    assert assembler.discarded == 5


def test_samples_without_a_time_are_discarded():
    assembler = Assembler(100.0, 2)
    samples = piece(np.arange(10), 100.0)
    samples.times[[0, 4]] = np.nan
    (grid,) = laid_out(assembler, [samples])
    np.testing.assert_array_equal(grid[0], [1, 2, 3, np.nan, 5, 6, 7, 8, 9])
    assert (assembler.discarded, assembler.filled) == (2, 1)
    assert assembler.add(Samples(np.empty((2, 0), np.float32), np.empty(0))) == []


def test_chunks_stamped_on_arrival_lose_nothing_once_their_jitter_is_known():
    rng = np.random.default_rng(7)
    assembler = Assembler(250.0, 2)
    jitter = rng.uniform(0, 8, 1200)  # samples: up to 32 ms late
    pieces = [
        piece(np.arange(25 * k, 25 * k + 25), 250.0, late) for k, late in enumerate(jitter)
    ]
    early = laid_out(assembler, pieces[:50])
    lost = assembler.filled + assembler.discarded
    assert lost < 50
    late = [s.uv[0] for samples in pieces[50:] for s in assembler.add(samples)]
    np.testing.assert_array_equal(np.diff(np.concatenate(late)), 1.0)
    assert len(early) == 1
    assert assembler.filled + assembler.discarded == lost


@pytest.mark.parametrize("parts_per_million", [-800, -100, 100, 800])
def test_a_source_off_its_nominal_rate_runs_without_holes(parts_per_million):
    assembler = Assembler(250.0, 2)
    actual = 250.0 * (1 + parts_per_million * 1e-6)
    end = np.nan
    for start in range(0, 250 * 120, 50):
        (stretch,) = assembler.add(piece(np.arange(start, start + 50), actual))
        assert stretch.uv.shape[1] == 50
        end = stretch.time + 50 / actual
    assert end == pytest.approx(100.0 + 250 * 120 / actual, abs=1 / 250)
    assert assembler.filled == assembler.discarded == 0


def test_a_wrong_nominal_rate_is_learnt():
    assembler = Assembler(1000.0, 2)
    pieces = [piece(np.arange(k, k + 100), 998.0) for k in range(0, 90_000, 100)]
    laid_out(assembler, pieces[:600])
    holes = assembler.filled
    assert 0 < holes < 60  # of the 120 ms that the source falls behind in a minute
    for samples in pieces[600:]:
        assembler.add(samples)
    assert (assembler.filled, assembler.discarded) == (holes, 0)


def test_a_piece_of_other_channels_is_refused():
    assembler = Assembler(100.0, 3)
    with pytest.raises(StreamError, match="needs 3 channels"):
        assembler.add(piece(np.arange(5), 100.0))
    with pytest.raises(StreamError, match="above 0 Hz"):
        Assembler(0.0, 3)


# ------------------------------------------------------------------------ real streams

SOURCE = """
import sys, time
import numpy as np, pylsl
name, source_id, n, rate = sys.argv[1], sys.argv[2], int(sys.argv[3]), float(sys.argv[4])
outlet = pylsl.StreamOutlet(pylsl.StreamInfo(name, "EEG", n, rate, "float32", source_id))
origin, k = pylsl.local_clock(), 0
print("up", flush=True)
while True:
    m = 5 + k % 17  # irregular chunks
    index = np.arange(k, k + m, dtype=np.float32)
    outlet.push_chunk(np.repeat(index[:, None], n, axis=1), origin + (k + m - 1) / rate)
    k += m
    time.sleep(max(origin + k / rate - pylsl.local_clock(), 0))
"""


@pytest.fixture
def patient(monkeypatch):
    """Wait for a second stream as long as it takes on this way of finding streams."""
    monkeypatch.setattr(lsl_link, "_SETTLE_SECONDS", 0.7)


@contextmanager
def running_source(name, source_id, n_channels, rate=250):
    process = subprocess.Popen(
        [sys.executable, "-c", SOURCE, name, source_id, str(n_channels), str(rate)],
        stdout=subprocess.PIPE,
    )
    try:
        assert process.stdout.readline().strip() == b"up"
        yield process
    finally:
        process.kill()
        process.wait()
        process.stdout.close()


@contextmanager
def in_background(function, *args, **options):
    """Run it in a thread that must have ended well within the block or 3 s after."""
    errors = []

    def run():
        try:
            function(*args, **options)
        except Exception as error:  # to be shown by the test itself
            errors.append(error)

    thread = threading.Thread(target=run)
    thread.start()
    try:
        yield thread
    finally:
        thread.join(3.0)
    assert not thread.is_alive()
    assert errors == []


def pull_until(inlet, enough, seconds=4.0):
    """Pieces up to the one that is enough; no pull may take longer than it was told."""
    pieces = []
    last = time.monotonic() + seconds
    while time.monotonic() < last:
        begun = time.monotonic()
        pieces += inlet.pull(0.05)
        assert time.monotonic() - begun < 1.0  # a slow machine
        if any(enough(piece) for piece in pieces):
            return pieces
    raise AssertionError(f"not seen in {seconds} s: {pieces}")


def pull_samples(inlet, n):
    """At least n samples as one (uv, times), unless the stream ends before."""
    pieces, got = [], 0
    last = time.monotonic() + 4.0
    while got < n and time.monotonic() < last:
        new = [p for p in inlet.pull(0.2) if isinstance(p, Samples)]
        pieces += new
        got += sum(len(p.times) for p in new)
    uv = np.concatenate([p.uv for p in pieces], axis=1)
    return uv, np.concatenate([p.times for p in pieces])


def test_an_edf_file_arrives_bit_by_bit_at_twenty_times_its_speed(lsl, tmp_path):
    rng = np.random.default_rng(1)
    signals = [
        edfio.EdfSignal(
            rng.normal(0, 30, 30 * 256),
            256,
            label=f"EEG {site}-A1",
            physical_dimension="uV",
        )
        for site in ("Fp1", "Fp2", "Cz")
    ]
    path = tmp_path / "Doe^Jane.edf"
    edfio.Edf(signals).write(path)
    recording = open_recording(path)
    told = []
    with (
        in_background(
            replay,
            recording,
            name="edf",
            speed=20,
            wait_for_consumer=5,
            progress=lambda *pair: told.append(pair),
        ),
        Inlet("edf", wait_seconds=3) as inlet,
    ):
        uv, times = pull_samples(inlet, recording.n_samples)
    assert inlet.facts.labels == recording.labels
    assert inlet.facts.types == (None,) * 3
    assert inlet.facts.reference == "A1"
    assert inlet.facts.sampling_rate == 256
    np.testing.assert_array_equal(uv, recording.read(0, recording.n_samples))
    np.testing.assert_allclose(np.diff(times), 1 / 256, atol=2e-4)
    assert (times[-1] - times[0]) == pytest.approx(30 - 1 / 256, abs=1e-3)
    assert told[-1] == (30.0, 30.0)
    assert told == sorted(told)


def test_missing_values_and_gaps_of_a_recording_arrive_as_such(lsl, monkeypatch):
    monkeypatch.setattr(replay_module, "_LONGEST_PAUSE_SECONDS", 0.3)
    data = np.arange(3000, dtype=np.float32).reshape(2, 1500)
    data[1, 700:720] = np.nan
    recording = from_array(
        data, 500, ["Cz", "E"], types=["eeg", "eog"],
        segments=[Segment(0, 800, 3.0), Segment(800, 700, 34.6)],
    )  # fmt: skip
    with (
        in_background(replay, recording, name="gap", speed=10, wait_for_consumer=5),
        Inlet("gap", wait_seconds=3) as inlet,
    ):
        uv, times = pull_samples(inlet, 1500)
    np.testing.assert_array_equal(uv, data)
    assert inlet.facts.types == ("eeg", "eog")
    steps = np.diff(times)
    assert steps[799] == pytest.approx(30.0 + 1 / 500, abs=2e-4)
    np.testing.assert_allclose(np.delete(steps, 799), 1 / 500, atol=2e-4)
    grids = laid_out(Assembler(500, 2), [Samples(uv, times)])
    assert [grid.shape[1] for grid in grids] == [800, 700]


def test_a_loop_goes_on_in_even_steps_until_it_is_stopped(lsl):
    recording = from_array(np.arange(100.0)[np.newaxis], 200, ["Cz"])
    stop = threading.Event()
    options = {"name": "loop", "loop": True, "stop": stop, "wait_for_consumer": 5}
    with in_background(replay, recording, **options):
        try:
            with Inlet("loop", wait_seconds=3) as inlet:
                uv, times = pull_samples(inlet, 150)
        finally:
            stop.set()
    np.testing.assert_array_equal(uv[0], np.arange(uv.shape[1]) % 100)
    np.testing.assert_allclose(np.diff(times), 1 / 200, atol=2e-4)


def test_a_replay_keeps_its_pace(lsl):
    recording = from_array(np.zeros((1, 400)), 200, ["Cz"])
    begun = time.monotonic()
    replay(recording, name="pace", speed=2.5)
    assert 0.8 <= time.monotonic() - begun < 1.6


def test_a_replay_tells_nothing_of_the_patient_or_the_file(lsl):
    stop = threading.Event()
    ids = []
    for name, seconds in (("Doe Jane 1970", 1), ("other", 1), ("Doe Jane 1970", 2)):
        recording = from_array(np.zeros((1, 100 * seconds)), 100, ["Cz"], name=name)
        stop.clear()
        with in_background(replay, recording, name="private", loop=True, stop=stop):
            try:
                (found,) = lsl.resolve_byprop("name", "private", 1, 3.0)
                xml = lsl.StreamInlet(found).info(3.0).as_xml()
            finally:
                stop.set()
        assert "<label>Cz</label>" in xml
        assert not [word for word in ("Doe", "Jane", "1970") if word in xml]
        ids.append(found.source_id())
    assert ids[0] == ids[1] != ids[2]


@pytest.mark.parametrize(
    ("options", "words"),
    [
        ({"speed": 0}, "Speed and chunks must be above 0"),
        ({"speed": float("inf")}, "Speed and chunks must be above 0"),
        ({"chunk_seconds": -1}, "Speed and chunks must be above 0"),
        ({"name": " "}, "needs a name"),
    ],
)
def test_a_replay_that_cannot_be_is_refused(options, words):
    recording = from_array(np.zeros((1, 100)), 100, ["Cz"])
    with pytest.raises(OptionError, match=words):
        replay(recording, **options)


@pytest.mark.parametrize(
    ("source_id", "n_channels", "rate"), [("k-1", 3, 250), ("renewed", 5, 500)]
)
def test_a_killed_source_is_found_again(lsl, source_id, n_channels, rate):
    with (
        running_source("amp k", "k-1", 3) as first,
        Inlet("amp k", wait_seconds=3) as inlet,
    ):
        before = inlet.facts
        uv, times = pull_samples(inlet, 50)
        np.testing.assert_array_equal(np.diff(uv[0]), 1)
        np.testing.assert_allclose(np.diff(times), 1 / 250, atol=2e-4)
        assert abs(times[-1] - lsl.local_clock()) < 0.5
        first.kill()
        gone = pull_until(inlet, lambda p: isinstance(p, Gone))
        assert abs(gone[-1].at - lsl.local_clock()) < 0.5
        assert inlet.pull(0.05) == []
        with running_source("amp k", source_id, n_channels, rate):
            back = pull_until(inlet, lambda p: isinstance(p, Samples))
            assert [type(p) for p in back] == [Changed, Samples]
            assert back[0].facts is inlet.facts
            assert inlet.facts.sampling_rate == rate
            assert inlet.facts.same_layout(before) == (n_channels == 3)
            assert back[1].uv.shape == (n_channels, len(back[1].times))


def test_of_two_others_with_the_same_name_neither_is_taken(lsl, patient):
    def outlet(source_id):
        info = lsl.StreamInfo("twin", "EEG", 1, 100, "float32", source_id)
        return lsl.StreamOutlet(info)

    first = outlet("a")
    with Inlet("twin", wait_seconds=3) as inlet:
        others = [outlet("b"), outlet("c")]
        del first
        pull_until(inlet, lambda p: isinstance(p, Gone))
        last = time.monotonic() + 0.9
        while time.monotonic() < last:
            assert inlet.pull(0.1) == []
        back = outlet("a")
        pieces = pull_until(inlet, lambda p: isinstance(p, Changed))
        assert len(pieces) == 1
        del others, back


@pytest.mark.skipif(not hasattr(signal, "SIGSTOP"), reason="needs to halt a process")
def test_a_source_that_falls_silent_and_leaves_the_network_is_gone(lsl, monkeypatch):
    monkeypatch.setattr(inlet_module, "_SILENT_SECONDS", 0.3)
    monkeypatch.setattr(inlet_module, "SEARCH_SECONDS", 0.5)
    monkeypatch.setattr(lsl_link, "SEARCH_SECONDS", 0.5)
    with (
        running_source("amp s", "s-1", 2) as process,
        Inlet("amp s", wait_seconds=3) as inlet,
    ):
        pull_samples(inlet, 50)
        process.send_signal(signal.SIGSTOP)
        pull_until(inlet, lambda p: isinstance(p, Gone))
        process.send_signal(signal.SIGCONT)
        back = pull_until(inlet, lambda p: isinstance(p, Samples))
        assert sum(isinstance(p, Changed) for p in back) == 1


def test_a_source_that_only_pauses_is_not_gone(lsl, monkeypatch):
    monkeypatch.setattr(inlet_module, "_SILENT_SECONDS", 0.1)
    monkeypatch.setattr(inlet_module, "SEARCH_SECONDS", 0.3)
    info = lsl.StreamInfo("pause", "EEG", 1, 100, "float32", "p")
    outlet = lsl.StreamOutlet(info)
    with Inlet("pause", wait_seconds=3) as inlet:
        last = time.monotonic() + 1.2
        while time.monotonic() < last:
            assert inlet.pull(0.1) == []
        outlet.push_chunk(np.ones((10, 1), np.float32), lsl.local_clock())
        uv, _ = pull_samples(inlet, 10)
    assert uv.shape == (1, 10)


@pytest.mark.parametrize(
    ("sent_as", "unit", "factor"),
    [("int16", "nV", 1e-3), ("double64", "V", 1e6), ("int32", None, 1.0)],
)
def test_numbers_of_any_format_and_unit_arrive_in_microvolt(lsl, sent_as, unit, factor):
    info = lsl.StreamInfo("format", "EEG", 2, 100, sent_as, sent_as)
    if unit is not None:
        channels = info.desc().append_child("channels")
        for kind, label in (("trigger", "T"), ("EEG", "Oz")):
            channel = channels.append_child("channel")
            channel.append_child_value("label", label)
            channel.append_child_value("type", kind)
            channel.append_child_value("unit", unit)
    outlet = lsl.StreamOutlet(info)
    values = np.array([[7, 0], [7, -32768], [7, 12345]], dtype=np.float64)
    with Inlet("format", wait_seconds=3) as inlet:
        outlet.push_chunk(values, lsl.local_clock())
        uv, _ = pull_samples(inlet, 3)
    wanted = values.T if unit is None else values[:, 1:].T
    assert inlet.facts.labels == (("Ch 1", "Ch 2") if unit is None else ("Oz",))
    np.testing.assert_array_equal(uv, (wanted * factor).astype(np.float32))


def test_what_is_not_pulled_is_kept_for_half_a_minute_only(lsl, monkeypatch):
    monkeypatch.setattr(lsl_link, "BUFFER_SECONDS", 2)
    outlet = lsl.StreamOutlet(lsl.StreamInfo("full", "EEG", 64, 100, "float32", "f"))
    with Inlet("full", wait_seconds=3) as inlet:
        for second in range(100):
            values = np.full((100, 64), second, dtype=np.float32)
            outlet.push_chunk(values, 1000.0 + second)
            time.sleep(0.005)
        time.sleep(0.3)
        uv, _ = pull_samples(inlet, 100)
        while new := inlet.pull(0.0):
            uv = np.concatenate([uv, *(p.uv for p in new)], axis=1)
    assert uv[0, -1] == 99
    assert uv.shape[1] < 1000


def test_a_clock_that_does_not_answer_leaves_the_stamps_as_they_are(lsl, monkeypatch):
    monkeypatch.setattr(lsl_link, "_CLOCK_SECONDS", 0.1)

    def unanswered(inlet, timeout):
        time.sleep(timeout)
        raise lsl.util.TimeoutError

    monkeypatch.setattr(lsl.StreamInlet, "time_correction", unanswered)
    outlet = lsl.StreamOutlet(lsl.StreamInfo("mute", "EEG", 1, 100, "float32", "m"))
    with Inlet("mute", wait_seconds=3) as inlet:
        outlet.push_chunk(np.zeros((3, 1), np.float32), 55.02)
        _, times = pull_samples(inlet, 3)
    np.testing.assert_allclose(times, [55.0, 55.01, 55.02], atol=1e-9)


@pytest.mark.parametrize(
    ("rate", "sent_as", "words"),
    [(0, "float32", "has no sampling rate"), (100, "string", "carries text")],
)
def test_streams_that_are_not_even_numbers_are_refused(lsl, rate, sent_as, words):
    outlet = lsl.StreamOutlet(lsl.StreamInfo("odd", "EEG", 1, rate, sent_as, sent_as))
    with pytest.raises(StreamError, match=f"'odd' {words}"):
        Inlet("odd", wait_seconds=3).__enter__()
    del outlet


def test_without_the_stream_the_error_names_those_that_there_are(lsl):
    outlet = lsl.StreamOutlet(lsl.StreamInfo("keys", "Markers", 1, 0, "string", "m"))
    with pytest.raises(StreamError, match=r"'nobody' was found.*'keys' \(Markers, 1 ch"):
        Inlet("nobody", wait_seconds=0.5).__enter__()
    with pytest.raises(StreamError, match=r"of type EEG was found.*artifactlens replay"):
        Inlet(wait_seconds=0.5).__enter__()
    del outlet


def test_of_several_streams_one_must_be_named_and_the_type_serves_as_a_name(lsl, patient):
    first = lsl.StreamOutlet(lsl.StreamInfo("one", "EEG", 1, 100, "float32", "1"))
    with Inlet(wait_seconds=3) as inlet:
        assert inlet.facts.name == "one"
    second = lsl.StreamOutlet(lsl.StreamInfo("two", "eeg", 1, 100, "float32", "2"))
    with pytest.raises(StreamError, match=r"There are 2 LSL streams of type EEG: .*'two'"):
        Inlet(wait_seconds=3).__enter__()
    with Inlet("two", wait_seconds=3) as inlet:
        assert inlet.facts.name == "two"
    del first, second


def test_an_inlet_serves_only_inside_its_context(lsl):
    outlet = lsl.StreamOutlet(lsl.StreamInfo("ctx", "EEG", 1, 100, "float32", "c"))
    with Inlet("ctx", wait_seconds=3) as inlet:
        assert inlet.pull(0.0) == []
    with pytest.raises(StreamError, match="not connected"):
        inlet.pull(0.0)
    del outlet


def test_without_the_client_the_error_says_what_to_install(monkeypatch):
    lsl_client.load_client.cache_clear()
    monkeypatch.setitem(sys.modules, "pylsl", None)
    with pytest.raises(StreamError, match=r"pip install 'artifactlens\[live\]'"):
        Inlet().__enter__()
