"""A watch: its state through losses, failures and a calibration, scripted and over real LSL."""

from __future__ import annotations

import subprocess
import sys
import threading
import time
from contextlib import contextmanager
from dataclasses import replace

import numpy as np
import pytest
from signals import SITES, bump, noise, row, step

from artifactlens.errors import SitesError, StreamError
from artifactlens.live import watching
from artifactlens.live.inlet import Changed, Gone, Samples
from artifactlens.live.replay import replay
from artifactlens.live.session import Session
from artifactlens.live.state import NOTHING_YET
from artifactlens.live.stream_header import StreamFacts
from artifactlens.live.watching import Watch
from artifactlens.recording import from_array
from artifactlens.sitecare.biocal import steps
from artifactlens.sitecare.biocal_words import protocol_tasks

RATE = 128
LABELS = tuple(f"{site}-REF" for site in SITES)


def facts_of(sites=SITES, rate=float(RATE), kohm=()):
    n = len(sites)
    return StreamFacts(
        name="amp",
        sampling_rate=rate,
        labels=tuple(f"{site}-REF" for site in sites),
        types=(None,) * n,
        scale_to_uv=np.ones(n),
        reference=None,
        impedances_kohm=np.array([dict(kohm).get(site, np.nan) for site in sites]),
        set_aside=(),
        rows=np.arange(n),
    )


def pieces_of(uv, begin, seconds=1.0, at=1000.0):
    """Samples from second ``begin`` on, as an inlet gives them."""
    size = round(seconds * RATE)
    times = at + np.arange(uv.shape[1]) / RATE
    return [
        Samples(uv[:, low : low + size].astype(np.float32), times[low : low + size])
        for low in range(int(begin * RATE), uv.shape[1], size)
    ]


class ScriptedInlet:
    """Gives what the test has put into ``coming``, one list a call; errors are raised."""

    def __init__(self, facts):
        self.facts, self.coming, self.entered = facts, [], False

    def __call__(self, name, *, wait_seconds):
        return self

    def __enter__(self):
        self.entered = True
        return self

    def __exit__(self, *_):
        self.entered = False

    def pull(self, timeout):
        if not self.coming:
            return []
        found = self.coming.pop(0)
        if isinstance(found, Exception):
            raise found
        return found


@pytest.fixture
def scripted(monkeypatch):
    """Function that gives a scripted inlet and a watch that listens to it."""

    def make(facts=None, **options):
        inlet = ScriptedInlet(facts or facts_of())
        monkeypatch.setattr(watching, "Inlet", inlet)
        return inlet, Watch(line_frequency=50.0, **options)

    return make


@pytest.fixture(scope="module")
def eeg(quiet_eeg):
    made = quiet_eeg(70, float(RATE), seed=2)
    return lambda seconds: made[:, : int(seconds * RATE)].copy()


def take(watch, inlet, pieces):
    """Let a watch take in pieces one by one; the states that it went through."""
    inlet.coming = [[piece] for piece in pieces]
    states = []
    while inlet.coming:
        watch.step()
        states.append(watch.state())
    return states


def named(state, verdict="re-prep"):
    return [entry.subject for entry in state.result.advice if entry.verdict == verdict]


# ---------------------------------------------------------------------------- scripted


def test_the_phases_and_times_of_a_stream_are_told(scripted, eeg):
    inlet, watch = scripted()
    assert watch.state() == NOTHING_YET
    with watch:
        assert inlet.entered
        assert (watch.state().phase, watch.state().stream) == ("gathering", "amp")
        states = take(watch, inlet, pieces_of(eeg(8), 0))
        watch.step()  # nothing came
        after = watch.state()
        assert replace(after, silent=0.0) == replace(states[-1], silent=0.0)
        assert 0 <= states[-1].silent < after.silent
        assert after.setup_left == pytest.approx(122.0)
    assert not inlet.entered
    assert [state.phase for state in states] == ["gathering"] * 4 + ["watching"] * 4
    assert [state.seconds for state in states] == pytest.approx(np.arange(1.0, 9.0))
    assert all(state.result is None for state in states[:4])
    assert [state.result.recording.duration for state in states[4:]] == [5, 6, 7, 8]
    assert states[3].delay is None
    assert 0 < states[-1].delay <= states[-1].slowest < 5


def test_a_stall_of_many_seconds_is_made_up_for_in_one_state(scripted, eeg):
    uv = eeg(44)
    for moment in (11.3, 17.2, 23.9, 29.4):
        uv[row("P3")] += step(uv.shape[1], RATE, moment, 200.0, 0.5)
    inlet, watch = scripted()
    with watch:
        inlet.coming = [pieces_of(uv, 0, 4.0)]
        watch.step()
        assert watch.state().seconds == pytest.approx(44.0)
        assert watch.state().result.recording.duration == 44.0
        assert named(watch.state()) == ["P3"]


def test_what_may_wait_is_done_once_the_state_is_out(scripted, eeg, monkeypatch):
    inlet, watch = scripted()
    settled = []
    monkeypatch.setattr(Session, "settle", lambda _: settled.append(watch.state().seconds))
    with watch:
        take(watch, inlet, pieces_of(eeg(8), 0))
    assert settled[-1] == 8.0


def test_a_loss_is_told_and_the_source_taken_back_with_new_impedances(
    scripted, eeg, monkeypatch
):
    now = [0.0]
    monkeypatch.setattr(watching.time, "monotonic", lambda: now[0])
    inlet, watch = scripted(facts_of(kohm={"P3": 40.0, "O1": 3.0}), impedances={"O1": 5.0})

    def kohm():
        sites = watch.state().result.sites
        return {s.site: s.impedance_kohm for s in sites if s.impedance_kohm is not None}

    with watch:
        now[0] = 12.0
        take(watch, inlet, pieces_of(eeg(10), 0))
        assert kohm() == {"P3": 40.0, "O1": 5.0}
        before = watch.state().result
        (lost,) = take(watch, inlet, [Gone(1010.0)])
        assert (lost.phase, lost.outages) == ("lost", 1)
        assert lost.marked_now == {}
        assert lost.result is before
        assert lost.notes == ("The source was lost at 0:00:10.",)
        now[0] = 42.0
        (back,) = take(watch, inlet, [Changed(facts_of(kohm={"P3": 4.0, "O1": 3.0}))])
        assert back.phase == "watching"
        assert back.notes[-1] == "The source came back at 0:00:10."
        take(watch, inlet, pieces_of(eeg(6), 0, at=5.0))
        assert watch.state().seconds == pytest.approx(46.0)
        assert kohm() == {"P3": 4.0, "O1": 5.0}
        assert watch.state().result.recording.duration == 46.0


def test_a_source_that_pauses_is_told_as_silent_even_while_the_watch_is_stuck(
    scripted, eeg, monkeypatch
):
    now = [50.0]
    monkeypatch.setattr(watching.time, "monotonic", lambda: now[0])
    inlet, watch = scripted()
    with watch:
        assert watch.state().silent == 0.0
        now[0] = 54.0
        assert watch.state().silent == 4.0  # nothing came yet
        pieces = pieces_of(eeg(6), 0)
        take(watch, inlet, pieces)
        assert watch.state().silent == 0.0
        now[0] = 66.5
        take(watch, inlet, pieces[-1:])  # sent twice: nothing new
        assert watch.state().silent == 12.5
        take(watch, inlet, [Gone(1.0)])
        assert watch.state().silent == 0.0  # and said in its own words


def test_a_break_too_long_to_fill_is_counted_unless_it_is_an_outage(scripted, eeg):
    inlet, watch = scripted()
    with watch:
        take(watch, inlet, pieces_of(eeg(6), 0))
        (state, *_) = take(watch, inlet, pieces_of(eeg(2), 0, at=1010.0))
        assert (state.breaks, state.outages, state.filled) == (1, 0, 0)
        back = [Gone(1.0), Changed(facts_of()), *pieces_of(eeg(2), 0, at=1050.0)]
        state = take(watch, inlet, back)[-1]
        assert (state.breaks, state.outages) == (1, 1)
        state = take(watch, inlet, pieces_of(eeg(1), 0, at=1080.0))[-1]
        assert (state.breaks, state.outages) == (2, 1)


@pytest.mark.parametrize(
    ("given", "told"),
    [({"P3": 4.0, "E9": 1.0}, False), ({"E9": 1.0}, True), ({}, False)],
)
def test_impedances_of_no_site_of_the_stream_are_told(scripted, given, told):
    _, watch = scripted(impedances=given)
    with watch:
        notes = watch.state().notes
    assert ["None of the impedances given (E9)" in note for note in notes] == [True] * told


@pytest.mark.parametrize(
    ("facts", "words"),
    [
        (facts_of(SITES[:8]), "with 8 channels, it had 19"),
        (facts_of(rate=256.0), "with other channels or another sampling rate"),
        (facts_of(SITES[::-1]), "with other channels or another sampling rate"),
    ],
)
def test_a_source_that_comes_back_as_another_is_watched_anew(scripted, eeg, facts, words):
    uv = eeg(8)
    uv[:, 200:250] = np.nan
    times = 1000.0 + np.arange(uv.shape[1]) / RATE
    there = np.delete(np.arange(uv.shape[1]), np.arange(200, 250))
    inlet, watch = scripted()
    with watch:
        take(watch, inlet, [Samples(uv[:, there].astype(np.float32), times[there])])
        assert watch.state().filled == 50
        (back,) = take(watch, inlet, [Changed(facts)])
        assert (back.phase, back.result, back.seconds) == ("gathering", None, 0.0)
        assert back.notes == (
            f"The source came back at 0:00:08 {words}; the watch began anew.",
        )
        other = eeg(8)[: len(facts.labels)]
        times = 2000.0 + np.arange(other.shape[1]) / facts.sampling_rate
        take(watch, inlet, [Samples(other.astype(np.float32), times)])
        seconds = other.shape[1] // facts.sampling_rate
        assert watch.state().seconds == seconds
        assert watch.state().filled == 50
        assert watch.state().phase == ("watching" if seconds > 4 else "gathering")


def test_a_layout_that_cannot_be_watched_is_told_and_the_next_one_waited_for(scripted, eeg):
    inlet, watch = scripted()
    with watch:
        take(watch, inlet, pieces_of(eeg(8), 0))
        one = facts_of(("Cz",))
        take(watch, inlet, [Gone(1.0), Changed(one), *pieces_of(eeg(8)[:1], 0, at=9.0)])
        state = watch.state()
        assert (state.phase, state.result, state.marked_now) == ("refused", None, {})
        assert (state.silent, state.setup_left) == (0.0, None)
        assert "came back with 1 channels, it had 19: At least 2 EEG" in state.notes[-1]
        take(watch, inlet, [Gone(2.0), Changed(facts_of()), *pieces_of(eeg(8), 0, at=50.0)])
        state = watch.state()
        assert (state.phase, state.seconds, state.outages) == ("watching", 8.0, 2)
        assert "with 19 channels, it had 1; the watch began anew" in state.notes[-1]


def test_a_stream_that_cannot_be_watched_at_first_is_let_go(scripted):
    inlet, watch = scripted(facts_of(("Cz",)))
    with pytest.raises(SitesError, match="At least 2 EEG channels"), watch:
        pass
    assert not inlet.entered


def test_a_failure_of_judging_is_told_and_the_watch_goes_on(scripted, eeg, monkeypatch):
    inlet, watch = scripted()
    pieces = pieces_of(eeg(24), 0)
    with watch:
        take(watch, inlet, pieces[:8])
        with monkeypatch.context() as patch:
            patch.setattr(Session, "result", lambda *_: 1 / 0)
            (failed,) = take(watch, inlet, pieces[8:9])
        assert (failed.phase, failed.result) == ("gathering", None)
        assert failed.notes == (
            "At 0:00:09 judging failed (ZeroDivisionError); the watch began anew.",
        )
        states = take(watch, inlet, pieces[9:])
        assert [state.phase for state in states] == ["gathering"] * 4 + ["watching"] * 11
        assert watch.failure is None


def test_a_watch_that_fails_again_and_again_stops_and_says_so(scripted, eeg, monkeypatch):
    inlet, watch = scripted()
    pieces = pieces_of(eeg(40), 0)
    with watch:
        take(watch, inlet, pieces[:6])
        monkeypatch.setattr(Session, "result", lambda *_: 1 / 0)
        inlet.coming = [*([piece] for piece in pieces[6:]), EOFError("went on")]
        with pytest.raises(ZeroDivisionError):
            watch.run(threading.Event())
    assert isinstance(watch.failure, ZeroDivisionError)
    assert (watch.state().phase, watch.state().silent) == ("stopped", 0.0)
    assert watch.state().marked_now == {}
    assert sum("judging failed" in note for note in watch.state().notes) == 2
    assert watch.state().notes[-1] == (
        "The watch has stopped at 0:00:05 by a failure of its own (ZeroDivisionError); "
        "start it again."
    )


def test_failures_far_apart_do_not_stop_a_watch(scripted, eeg, monkeypatch):
    monkeypatch.setattr(watching, "FAILURES_SECONDS", 7.0)
    inlet, watch = scripted()
    with watch:
        for _ in range(4):
            take(watch, inlet, pieces_of(eeg(8), 0))
            with monkeypatch.context() as patch:
                patch.setattr(Session, "add", lambda *_: 1 / 0)
                take(watch, inlet, pieces_of(eeg(1), 0))
        assert sum("judging failed" in note for note in watch.state().notes) == 4


def test_an_inlet_that_fails_ends_the_run_with_its_error(scripted, eeg):
    inlet, watch = scripted(calibration=True)
    problem = StreamError("The client gave up.", "Start it again.")
    with watch:
        take(watch, inlet, pieces_of(eeg(8), 0))
        assert watch.state().prompt is not None
        inlet.coming = [problem]
        with pytest.raises(StreamError, match="gave up"):
            watch.run(threading.Event())
    assert watch.failure is problem
    assert watch.state().prompt is None
    assert "has stopped at 0:00:08 by a failure of its own" in watch.state().notes[-1]


# ------------------------------------------------------------------------- calibration

BLINK = {"Fp1": 1.0, "Fp2": 1.0, "F7": 0.4, "F8": 0.4, "F3": 0.3, "Fz": 0.3, "F4": 0.3}
RIGHT = {"F8": 1.0, "F7": -1.0, "T8": 0.35, "T7": -0.35, "F4": 0.27, "F3": -0.27}


def answers(n, begun):
    """What the leads show of a patient who does as told, (19, n)."""
    made = np.zeros((len(SITES), n))

    def spread(weights, wave):
        return np.outer([weights.get(site, 0.0) for site in SITES], wave)

    for task in protocol_tasks(begun):
        if task.kind == "blink":
            for k in range(5):
                made += spread(BLINK, bump(n, RATE, task.onset + 1 + 1.3 * k, 150.0))
        elif task.kind.startswith("gaze"):
            size = 60.0 if task.kind == "gaze right" else -60.0
            turned = step(n, RATE, task.onset + 0.6, size) - step(n, RATE, task.end, size)
            made += spread(RIGHT, turned)
        else:
            fast = noise(len(SITES), n, RATE, exponent=0.0, rms_uv=30.0, seed=5)
            inside = np.zeros(n)
            inside[int((task.onset + 0.5) * RATE) : int((task.end - 0.5) * RATE)] = 1
            temples = np.isin(SITES, ("F7", "F8", "T7", "T8"))
            made += fast * inside * temples[:, None]
    return made


def requests(states):
    """The requests in the order in which they came, and how long each was shown."""
    shown = [(s.prompt.step, s.prompt.words) for s in states if s.prompt is not None]
    return list(dict.fromkeys(shown)), len(shown)


def test_a_calibration_is_led_through_and_its_answers_judged(scripted, eeg):
    protocol = steps()
    uv = eeg(64)
    uv += answers(uv.shape[1], 6.0)
    uv[row("F7")] = noise(1, uv.shape[1], RATE, rms_uv=8.0, seed=9)[0]
    inlet, watch = scripted(calibration=True)
    with watch:
        states = take(watch, inlet, pieces_of(uv, 0, 2.0))
    asked, count = requests(states)
    assert asked == [(number, line.words) for number, line in enumerate(protocol, 1)]
    assert 2 * count == sum(line.seconds for line in protocol)
    first = next(state.prompt for state in states if state.prompt)
    assert (first.left, first.steps) == (protocol[0].seconds, len(protocol))
    judged = [state for state in states if state.result and state.result.setup]
    assert judged[0].result.setup.responses == ()
    responses = states[-1].result.setup.responses
    assert len(responses) == len(protocol_tasks(0.0))
    assert "blink: as expected" in responses[0]
    (entry,) = [
        e for e in states[-1].result.advice if "F7" in e.sites and e.cause == "site"
    ]
    assert "F7" in [e.subject for e in states[-1].result.advice if e.verdict == "re-prep"]
    assert "no " in entry.reason or "without" in entry.reason


def test_a_patient_who_does_nothing_is_asked_again_and_no_lead_is_blamed(scripted, eeg):
    inlet, watch = scripted(calibration=True)
    with watch:
        take(watch, inlet, pieces_of(eeg(55), 0, 5.0))
        state = watch.state()
    assert len(state.result.setup.responses) == len(protocol_tasks(0.0))
    assert all("missing" in sentence for sentence in state.result.setup.responses)
    assert named(state) == []
    asked = [entry for entry in state.result.advice if entry.verdict == "ask"]
    assert asked
    assert {entry.cause for entry in asked} == {"patient"}


def test_a_calibration_begins_again_where_samples_are_missing(scripted, eeg):
    inlet, watch = scripted(calibration=True)
    with watch:
        take(watch, inlet, pieces_of(eeg(20), 0))
        assert watch.state().prompt.step == 3
        states = take(watch, inlet, pieces_of(eeg(6), 0, at=1090.0))
        assert states[0].prompt.step == 1
        assert states[-1].notes == (
            "Samples were missing: the calibration begins once more.",
        )


def test_a_calibration_that_cannot_be_judged_is_not_asked_for_again(
    scripted, eeg, monkeypatch
):
    monkeypatch.setattr(watching, "steps", lambda: steps()[:1])
    monkeypatch.setattr(watching, "respond", lambda *_, **__: 1 / 0)
    inlet, watch = scripted(calibration=True)
    with watch:
        states = take(watch, inlet, pieces_of(eeg(20), 0))
    assert [state.prompt is not None for state in states] == [False] * 4 + [True] * 5 + [
        False
    ] * 11
    assert states[-1].notes == (
        "At 0:00:12 judging failed (ZeroDivisionError); the watch began anew.",
    )
    assert states[-1].phase == "watching"


def test_a_calibration_is_asked_for_again_when_other_channels_come(scripted, eeg):
    inlet, watch = scripted(calibration=True)
    with watch:
        take(watch, inlet, pieces_of(eeg(56), 0, 8.0))
        assert watch.state().result.setup.responses != ()
        others = [Changed(facts_of(SITES[:8])), *pieces_of(eeg(12)[:8], 0, at=2000.0)]
        take(watch, inlet, others)
        assert watch.state().prompt.step == 2
        assert (
            watch.state().result.setup is None or not watch.state().result.setup.responses
        )


# --------------------------------------------------------------------------- real streams

SOURCE = """
import sys
import numpy as np
from artifactlens.live.replay import replay
from artifactlens.recording import from_array
path, name, rate, speed, *labels = sys.argv[1:]
recording = from_array(np.load(path), float(rate), labels)
replay(recording, name=name, speed=float(speed), wait_for_consumer=20.0, loop=True)
"""


@contextmanager
def source(path, name, labels, speed=10):
    """A replay of saved samples in another process, which may be killed."""
    words = [sys.executable, "-c", SOURCE, str(path), name, str(RATE), str(speed), *labels]
    process = subprocess.Popen(words)
    try:
        yield process
    finally:
        process.kill()
        process.wait()


@contextmanager
def running(watch):
    """Run a watch in a thread, which must end soon after it is told to."""
    stop, errors = threading.Event(), []

    def run():
        try:
            watch.run(stop)
        except Exception as error:  # shown by the test itself
            errors.append(error)

    thread = threading.Thread(target=run)
    thread.start()
    try:
        yield thread
    finally:
        stop.set()
        begun = time.monotonic()
        thread.join(5.0)
        ended = time.monotonic() - begun
    assert not thread.is_alive()
    assert errors == []
    assert watch.failure is None
    assert ended < 1.5  # a pull and a second's judging, on a slow machine


def until(watch, reached, seconds=20.0):
    """The states seen up to the first one that fits; asked for from this thread."""
    states = []
    last = time.monotonic() + seconds
    while time.monotonic() < last:
        state = watch.state()
        if not states or state != states[-1]:
            states.append(state)
        if reached(state):
            return states
        time.sleep(0.01)
    raise AssertionError(f"not reached in {seconds} s: {states[-1]}")


@pytest.fixture
def empty_home(tmp_path, monkeypatch):
    """A home and working directory of its own."""
    monkeypatch.setenv("HOME", str(tmp_path))
    monkeypatch.setenv("TMPDIR", str(tmp_path))
    monkeypatch.chdir(tmp_path)
    return tmp_path


@pytest.fixture(scope="module")
def popping(quiet_eeg):
    uv = quiet_eeg(44, float(RATE), seed=4)
    for moment in np.arange(4.3, 44, 5.1):
        uv[row("P3")] += step(uv.shape[1], RATE, moment, 200.0, 0.5)
    return uv.astype(np.float32)


@contextmanager
def replayed(uv, name, speed):
    stop = threading.Event()
    recording = from_array(uv, RATE, LABELS)
    options = {"name": name, "speed": speed, "loop": True, "wait_for_consumer": 10.0}
    thread = threading.Thread(
        target=replay, args=(recording,), kwargs=options | {"stop": stop}
    )
    thread.start()
    try:
        yield
    finally:
        stop.set()
        thread.join(5.0)


def test_a_site_that_pops_in_a_stream_is_named_and_nothing_is_written(
    lsl, popping, empty_home
):
    watch = Watch("pops", wait_seconds=5.0)
    with replayed(popping, "pops", 14.0), watch, running(watch):
        states = until(watch, lambda state: state.seconds > 42)
    phases = list(dict.fromkeys(state.phase for state in states))
    assert phases in (["gathering", "watching"], ["watching"])
    times = [state.seconds for state in states]
    assert times == sorted(times)
    last = states[-1]
    assert last.stream == "pops"
    assert last.result.recording.format == "LSL stream"
    assert last.result.recording.duration >= 41
    assert (last.outages, last.filled, last.notes) == (0, 0, ())
    assert named(last) == ["P3"]
    assert last.result.advice[0].sites == ("P3",)
    assert "P3" in dict(last.result.setup.unfit)
    assert list(empty_home.iterdir()) == []


def test_a_source_that_is_killed_and_started_again_is_watched_on(lsl, popping, tmp_path):
    path = tmp_path / "popping.npy"
    np.save(path, popping)
    with source(path, "killed", LABELS) as first:
        watch = Watch("killed", wait_seconds=10.0)
        with watch, running(watch):
            until(watch, lambda state: state.seconds > 15)
            first.kill()
            lost = until(watch, lambda state: state.phase == "lost")[-1]
            assert lost.result is not None
            assert [note[:23] for note in lost.notes] == ["The source was lost at "]
            with source(path, "killed", LABELS):
                back = until(watch, lambda state: state.seconds > lost.seconds + 14)[-1]
    assert (back.phase, back.outages) == ("watching", 1)
    assert back.notes[1].startswith("The source came back at 0:00:")
    assert back.result.recording.duration > lost.seconds + 12
    assert named(back) == ["P3"]


def test_a_source_that_comes_back_with_fewer_channels_is_watched_anew(
    lsl, popping, tmp_path
):
    np.save(tmp_path / "all.npy", popping)
    np.save(tmp_path / "few.npy", popping[:16])
    with source(tmp_path / "all.npy", "fewer", LABELS) as first:
        watch = Watch("fewer", wait_seconds=10.0)
        with watch, running(watch):
            until(watch, lambda state: state.seconds > 8)
            first.kill()
            until(watch, lambda state: state.phase == "lost")
            with source(tmp_path / "few.npy", "fewer", LABELS[:16]):
                back = until(watch, lambda s: s.phase == "watching" and s.outages == 1)
    anew, last = next(s for s in back if s.phase == "gathering"), back[-1]
    assert (anew.result, anew.prompt) == (None, None)
    assert "with 16 channels, it had 19; the watch began anew." in last.notes[-1]
    assert {site.site for site in last.result.sites} == {*SITES[:16], "reference"}
    assert last.seconds < 20


def test_a_calibration_is_prompted_at_the_pace_of_the_stream(lsl, popping):
    watch = Watch("asked", wait_seconds=5.0, calibration=True)
    background = np.concatenate([popping, popping], axis=1)
    background[row("P3")] = background[row("Pz")]
    with replayed(background[:, : 66 * RATE], "asked", 13.0), watch, running(watch):
        states = until(
            watch, lambda s: s.result and s.result.setup and s.result.setup.responses
        )
    asked, _ = requests(states)
    steps_seen = [number for number, _ in asked]
    assert steps_seen == sorted(steps_seen)
    assert {words for _, words in asked} >= {"Blink five times"}
    assert len(steps_seen) > len(steps()) / 2
    assert any("missing" in sentence for sentence in states[-1].result.setup.responses)


def test_a_watch_ends_soon_when_its_source_is_silent(lsl):
    info = lsl.StreamInfo("silent", "EEG", 4, 100, "float32", "s")
    labels = info.desc().append_child("channels")
    for site in ("C3", "C4", "P3", "P4"):
        labels.append_child("channel").append_child_value("label", site)
    outlet = lsl.StreamOutlet(info)
    watch = Watch("silent", wait_seconds=3.0)
    with watch, running(watch):
        time.sleep(0.3)
        assert watch.state().phase == "gathering"
    del outlet
