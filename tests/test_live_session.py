"""A stream through the stages second by second, without LSL: what comes is made up here."""

from __future__ import annotations

import pickle

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from signals import SITES, row, sine, step

from artifactlens.curves import load_model
from artifactlens.errors import OptionError, SamplingRateError, SitesError, StreamError
from artifactlens.features.catalogue import MEASURED
from artifactlens.kinds import KIND_NAMES
from artifactlens.live import session as session_module
from artifactlens.live.session import Session
from artifactlens.live.stream_grid import Stretch
from artifactlens.live.stream_header import StreamFacts
from artifactlens.live.usual import PRIOR_EPOCHS, leaning_usual
from artifactlens.live.windows import RawWindow, Rolling, Seconds
from artifactlens.pipeline import measure_recording, triage
from artifactlens.recording import from_array
from artifactlens.sitecare.biocal import Calibration, LeadFault, Response

MODEL = load_model()
RATE = 128.0
FEW = ("Fp1", "Fp2", "C3", "C4", "P3", "P4", "O1", "O2")


def layout(sites=SITES, rate=RATE, *, suffix="-REF", types=None):
    n = len(sites)
    return StreamFacts(
        name="amp",
        sampling_rate=rate,
        labels=tuple(f"{site}{suffix}" for site in sites),
        types=types or (None,) * n,
        scale_to_uv=np.ones(n),
        reference=None,
        impedances_kohm=np.full(n, np.nan),
        set_aside=(),
        rows=np.arange(n),
    )


def session_of(sites=SITES, rate=RATE, **options):
    options = {"line_frequency": 50.0} | options
    return Session(layout(sites, rate), MODEL, **options)


def feed(session, uv, *, segment=0, at=1000.0, seconds=1.0, settle=True):
    """Hand over a segment in even pieces, as a watch does; epochs that were judged."""
    rate = session.layout.sampling_rate
    size, done = max(1, round(seconds * rate)), 0
    for low in range(0, uv.shape[1], size):
        piece = uv[:, low : low + size].astype(np.float32)
        done += session.add(Stretch(segment, low, at + low / rate, piece))
        if settle:
            session.settle()
    return done


def named(result, verdict="re-prep"):
    return [entry.subject for entry in result.advice if entry.verdict == verdict]


def entry_of(result, subject):
    (entry,) = [entry for entry in result.advice if entry.subject == subject]
    return entry


@pytest.fixture(scope="module")
def eeg(quiet_eeg):
    """Function of seconds and rate: background at 19 sites that may be written into."""
    made = {}

    def get(seconds, rate=RATE, seed=1):
        if (seconds, rate, seed) not in made:
            made[seconds, rate, seed] = quiet_eeg(seconds, rate, seed=seed)
        return made[seconds, rate, seed].copy()

    return get


def with_pops(uv, moments, site="P3", rate=RATE, size=150.0):
    for moment in moments:
        uv[row(site)] += step(uv.shape[1], rate, moment, size, 0.5)
    return uv


def few(uv):
    return uv[[SITES.index(site) for site in FEW]]


# ----------------------------------------------------------------------------- windows


@given(st.lists(st.one_of(st.integers(0, 40), st.just("restart")), max_size=30), st.data())
@settings(max_examples=150, deadline=None)
def test_a_raw_window_holds_the_last_samples_as_a_list_would(actions, data):
    window = RawWindow(2, 8.0, 1.25)  # keeps 10
    held, size = [], window._data.nbytes
    for action in actions:
        if action == "restart":
            window.restart()
            held = []
            continue
        new = np.arange(len(held), len(held) + action, dtype=np.float32)
        window.add(np.stack([new, -new]))
        held += list(new)
        assert window.end == len(held)
        assert min(len(held), 10) <= window.end - window.first <= 20
        start = data.draw(st.integers(-5, len(held) + 5))
        stop = data.draw(st.integers(start, len(held) + 9))
        kept = [
            value for value in held[max(start, 0) : max(stop, 0)] if value >= window.first
        ]
        np.testing.assert_array_equal(window.piece(start, stop), [kept, [-v for v in kept]])
    assert window._data.nbytes == size


@given(
    st.lists(
        st.one_of(*[st.just("append")] * 3, st.integers(1, 3), st.integers(-3, -1)),
        max_size=60,
    )
)
@settings(max_examples=150, deadline=None)
def test_rolling_columns_are_the_last_rows_as_a_list_would_have_them(actions):
    rolling, held = Rolling(3), []
    for number, action in enumerate(actions):
        if action == "append":
            rolling.append({"a": np.array([number, 1]), "b": np.float32(number)})
            held = [*held, [[number, 1], number]][-3:]
        elif action > 0:
            rolling.drop(action)
            held = held[action:]
        elif -action <= len(held):
            rolling.rewrite(action, {"b": np.float32(-number)})
            held[action][1] = -number
        assert len(rolling) == len(held)
        if held:
            assert rolling.column("a").tolist() == [pair[0] for pair in held]
            assert rolling.column("b").tolist() == [pair[1] for pair in held]
            assert rolling._columns["a"].shape == (6, 2)


@given(
    st.lists(st.tuples(st.integers(0, 50), st.floats(-1e4, 1e4), st.booleans()), min_size=1)
)
@settings(max_examples=100, deadline=None)
def test_the_time_of_a_stream_never_steps_back(breaks):
    seconds = Seconds(1, 10.0, 2.0)
    before, stamp = 0.0, 500.0
    for number, (samples, jump, away) in enumerate(breaks):
        stamp += jump
        if away:
            seconds.come_back(3.0)
        seconds.begin_segment(Stretch(number, 0, stamp, np.zeros((1, samples), np.float32)))
        expected = before + 3.0 if away else before + max(jump, 0.0) * (number > 0)
        assert seconds.now == pytest.approx(expected, abs=1e-6)
        seconds.add(np.zeros((1, samples), np.float32))
        assert seconds.whole == samples // 10
        before, stamp = seconds.now, stamp + samples / 10


def test_young_usual_values_lean_on_the_head_by_a_sites_own_seconds():
    values = np.zeros((len(MEASURED), 30, 4), dtype=np.float32)
    slope = MEASURED.index("slope")
    values[slope, :, 1] = 8.0
    values[:, 10:, 1] = np.nan
    values[slope, :, 3] = 100.0  # a reference
    values[:, :, 2] = np.nan
    usual = leaning_usual(values, np.array([True, True, True, False]))[slope]
    head = 4.0  # median of the sites' own 0 and 8
    ten, thirty = 10 / (10 + PRIOR_EPOCHS), 30 / (30 + PRIOR_EPOCHS)
    expected = [head * (1 - thirty), 8 * ten + head * (1 - ten), head, 100 * thirty + 1.0]
    np.testing.assert_allclose(usual, expected, rtol=1e-6)


# ------------------------------------------------------------------------------ pieces


@pytest.fixture(scope="module")
def broken_stream(eeg):
    """Two segments at 8 sites with pops and missing samples, and what they lead to."""
    uv = few(with_pops(eeg(18, 100.0), (6.3, 9.6, 11.2, 15.7), rate=100.0))
    uv[2, 850:900] = np.nan
    parts = uv[:, :940], uv[:, 940:]

    def play(sizes):
        session = session_of(FEW, 100.0, line_frequency=None)
        done = 0
        for segment, part in enumerate(parts):
            low = 0
            for size in [*sizes, *[500] * 50]:
                piece = part[:, low : low + size].astype(np.float32)
                if not piece.shape[1]:
                    break
                at = 50.0 + 20.0 * segment + low / 100
                done += session.add(Stretch(segment, low, at, piece))
                low += size
        return done, session

    return play


def outcome(session):
    evidence = session.evidence()
    return evidence.probability, evidence.swing, evidence.step_rise, evidence.log.onset


@pytest.fixture(scope="module")
def by_seconds(broken_stream):
    return broken_stream([100] * 40)


@given(st.lists(st.integers(1, 500), max_size=12))
@settings(max_examples=5, deadline=None)
def test_no_result_depends_on_how_samples_are_cut(broken_stream, by_seconds, sizes):
    done, session = broken_stream(sizes)
    assert done == by_seconds[0] == 9 + 8
    for mine, other in zip(outcome(session), outcome(by_seconds[1]), strict=True):
        np.testing.assert_array_equal(mine, other)
    assert session.result() == by_seconds[1].result()


def test_samples_one_by_one_and_a_stall_of_many_seconds_come_to_the_same(
    broken_stream, by_seconds
):
    for sizes in ([1] * 940, [3200]):
        done, session = broken_stream(sizes)
        assert done == 17  # every second is judged, however many come at once
        assert session.result() == by_seconds[1].result()


def test_whether_settling_is_left_to_the_next_second_makes_no_difference(eeg):
    uv = few(eeg(14, 100.0))
    kept = []
    for settle in (True, False):
        session = session_of(FEW, 100.0)
        feed(session, uv[:, :1000], settle=settle)
        feed(session, uv[:, 1000:], settle=settle, segment=1, at=1020.0)
        session.settle()
        kept.append(session)
    np.testing.assert_array_equal(outcome(kept[0])[0], outcome(kept[1])[0])
    assert kept[0].result() == kept[1].result()


# ------------------------------------------------------- the same as for a whole recording


@pytest.mark.parametrize("rate", [250.0, 160.0, 128.0, 333.3])
def test_a_stream_is_judged_as_the_whole_recording_is(quiet_eeg, rate):
    uv = quiet_eeg(32, rate, seed=5, blinks_at=(9.0, 21.0, 27.0))
    uv = with_pops(uv, (12.4, 15.3, 23.7, 30.1), rate=rate).astype(np.float32)
    session = session_of(rate=rate)
    assert feed(session, uv, seconds=0.77) == 32
    live = session.evidence()
    recording = from_array(uv, rate, session.layout.labels)
    whole = triage(recording, line_frequency=50.0)
    offline = whole.scores.probability
    np.testing.assert_allclose(live.log.onset, whole.scores.onset, atol=1e-9)
    np.testing.assert_array_equal(np.isnan(live.probability), np.isnan(offline))
    for kind, head in enumerate(MODEL.heads):
        mine, other = live.probability[kind] >= head.sure, offline[kind] >= head.sure
        assert (mine == other).mean() >= 0.99, head.kind
        if head.kind in ("eye", "pop"):
            assert other.any(), head.kind
    away = np.abs(live.probability - offline)[:, -15:]
    assert np.nanmax(away) < 0.1
    assert np.nanmean(away) < 0.002
    # What is measured is the same but for the last second, which has nothing behind it yet;
    # where a second is no whole number of samples, the one before may lie a sample apart.
    table = measure_recording(recording, line_frequency=50.0).table
    for name in ("swing", "step", "fast_power", "mains_ratio"):
        np.testing.assert_allclose(
            getattr(live, name)[:-1], table.column(name)[:-1], rtol=1e-3, atol=0.05
        )
    assert named(session.result()) == named(whole) == ["P3"]


def test_marks_of_the_last_second_are_told_by_kind(eeg):
    uv = with_pops(eeg(24), (20.5,), size=300.0)
    session = session_of()
    feed(session, uv[:, : int(21 * RATE)])
    assert session.marked_now()["pop"] == ("P3",)
    feed(session, uv[:, int(21 * RATE) :], at=1021.0)
    assert set(session.marked_now()) == set(KIND_NAMES)
    assert not any(session.marked_now().values())


# ------------------------------------------------------------------------------- begins


def test_before_five_seconds_nothing_is_judged_and_then_all_five_are(eeg):
    uv = eeg(5)
    session = session_of()
    assert feed(session, uv[:, :639]) == 0
    assert session.seconds == 0
    assert session.now == pytest.approx(639 / 128)
    assert session.marked_now() == {}
    with pytest.raises(
        StreamError, match="needs 5 seconds of the stream; there are 4 whole"
    ):
        session.result()
    assert session.add(Stretch(0, 639, 1004.99, uv[:, 639:].astype(np.float32))) == 5
    assert session.seconds == 5.0
    assert session.result().setup is None
    assert session.evidence().log.onset.tolist() == [0, 1, 2, 3, 4]


def test_a_stream_of_short_pieces_with_breaks_is_judged_after_five_seconds_too(eeg):
    session, uv = session_of(), eeg(4)
    assert feed(session, uv, segment=0) == 0
    assert feed(session, uv[:, : int(2 * RATE)], segment=1, at=1010.0) == 2
    assert session.evidence().log.onset.tolist() == [10.0, 11.0]


@pytest.mark.parametrize(
    ("facts", "options", "error", "words"),
    [
        (layout(("Cz",)), {}, SitesError, "At least 2 EEG channels"),
        (layout(("Cz", "Pz"), types=("eog", "misc")), {}, SitesError, "0 of 2 channels"),
        (
            layout(rate=10.0),
            {},
            SamplingRateError,
            "at least 25 samples a second; .* has 10",
        ),
        (layout(), {"minutes": 0.1}, OptionError, "0.5 to 1440 minutes; given were 0.1"),
        (layout(), {"minutes": float("nan")}, OptionError, "given were nan"),
    ],
)
def test_what_cannot_be_watched_is_refused_at_once(facts, options, error, words):
    with pytest.raises(error, match=words):
        Session(facts, MODEL, **options)


def test_the_slowest_stream_that_is_taken_is_judged_without_complaint(eeg):
    session = session_of(rate=25.0)
    assert feed(session, eeg(40, 25.0), seconds=0.5) == 40
    verdicts = {entry.kind: entry.verdict for entry in session.result().assessable}
    assert verdicts["pop"] == verdicts["muscle"] == "no"


def test_a_stream_against_the_average_is_recognised(eeg):
    uv = eeg(12)
    session = session_of()
    assert session.frame.montage == "referential"
    feed(session, uv - uv.mean(axis=0))
    assert session.frame.montage == "average"
    assert session.result().recording.montage == "average"
    assert len(session.result().sites) == len(SITES)
    assert session.evidence().log.onset.tolist() == list(range(12))


def test_impedances_are_found_by_label_or_site_and_may_be_told_later(eeg):
    session = session_of(impedances_kohm={"P3-REF": 4.0, "Cz": 12.5, "ref": 7.0})
    feed(session, eeg(8))

    def known():
        sites = {entry.site: entry.impedance_kohm for entry in session.result().sites}
        return {name: kohm for name, kohm in sites.items() if kohm is not None}

    assert known() == {"P3": 4.0, "Cz": 12.5, "reference": 7.0}
    session.tell_impedances({"P3": 30.0})
    assert known() == {"P3": 30.0}


# ------------------------------------------------------------------------ no signal yet


@pytest.mark.parametrize(("nothing", "averaged"), [(0.0, True), (np.nan, False)])
def test_a_stream_that_begins_with_nothing_is_judged_once_a_signal_is_there(
    eeg, nothing, averaged
):
    uv = with_pops(eeg(44) + 2000.0, (26.3, 31.6, 37.2, 41.9))
    if averaged:
        uv -= uv.mean(axis=0)
    uv[:, : int(20 * RATE)] = nothing
    session = session_of(line_frequency=None)
    feed(session, uv[:, : int(20 * RATE)])
    told = session.result()
    sign = "flat" if nothing == 0 else "lost"
    assert [(entry.cause, entry.sign) for entry in told.advice] == [("ground", sign)]
    assert {site.verdict for site in told.sites} == {"cannot tell"}
    assert not any(session.marked_now().values())
    feed(session, uv[:, int(20 * RATE) :], at=1020.0)
    result = session.result()
    assert session.frame.montage == ("average" if averaged else "referential")
    assert named(result) == ["P3"]
    verdicts = {site.site: site.verdict for site in result.sites}
    assert verdicts["P3"] == "re-prep"
    assert verdicts["C4"] == "leave"
    assert not any(a.verdict == "no" for a in result.assessable if a.kind in ("eye", "pop"))


def test_a_head_box_unplugged_for_a_while_does_not_undo_what_is_known(eeg, monkeypatch):
    monkeypatch.setattr(session_module, "SURVEY_SECONDS", 15)
    rate = 160
    uv = eeg(56, 160.0)
    uv += sine(uv.shape[1], rate, 60.0, 8.0)
    uv[:, 12 * rate : 50 * rate] = 0.0
    session = session_of(rate=160.0, line_frequency=None)
    for begin, until in ((0, 12), (12, 50), (50, 56)):
        feed(session, uv[:, begin * rate : until * rate], at=1000.0 + begin)
        assert round(session.result().recording.line_frequency) == 60, until
        assert not any("amplitudes" in a.reason for a in session.result().assessable)
    assert np.isfinite(session.evidence().probability[0, -5:, : len(SITES)]).all()


def test_the_line_frequency_of_a_place_stays_when_mains_goes(eeg, monkeypatch):
    monkeypatch.setattr(session_module, "SURVEY_SECONDS", 15)
    uv = eeg(56, 160.0)
    uv[:, : 12 * 160] += sine(12 * 160, 160.0, 60.0, 8.0)
    uv += sine(
        uv.shape[1], 160.0, 50.0, 0.15
    )  # would be the higher one, but no certain one
    session = session_of(rate=160.0, line_frequency=None)
    feed(session, uv)
    assert round(session.result().recording.line_frequency) == 60


# ------------------------------------------------------------------------------- breaks


def test_after_an_outage_times_are_those_of_the_stream(eeg):
    uv = with_pops(eeg(40), (21.2, 26.4, 31.3, 36.1))
    session = session_of()
    cut = int(10.5 * RATE)
    feed(session, uv[:, :cut])
    feed(session, uv[:, cut:], segment=1, at=1300.0)
    evidence = session.evidence()
    expected = [*np.arange(10.0), *np.arange(300.0, 329.0)]
    np.testing.assert_allclose(evidence.log.onset, expected, atol=1e-9)
    assert session.seconds == pytest.approx(329.0)
    assert session.now == pytest.approx(329.5)
    moments = [moment for moment, rows in evidence.pops if row("P3") in rows]
    shifted = np.array((21.2, 26.4, 31.3, 36.1)) - 10.5 + 300.0
    np.testing.assert_allclose(moments, shifted, atol=0.1)
    assert entry_of(session.result(), "P3").stretches[0][0] >= 300.0


def test_a_clock_that_steps_back_loses_no_time_and_later_breaks_are_measured(eeg):
    uv, session = eeg(10), session_of()
    feed(session, uv, segment=0, at=1000.0)
    feed(session, uv, segment=1, at=20.0)
    feed(session, uv, segment=2, at=35.0)
    expected = [*np.arange(20.0), *np.arange(25.0, 35.0)]
    np.testing.assert_allclose(session.evidence().log.onset, expected, atol=1e-9)


def test_a_source_that_was_away_comes_back_by_this_computers_clock(eeg):
    uv, session = eeg(10), session_of()
    feed(session, uv, segment=0, at=1000.0)
    session.come_back(4.0)
    feed(session, uv, segment=1, at=9e8)  # started anew on another machine
    feed(session, uv, segment=2, at=9e8 + 16.0)
    expected = [*np.arange(10.0), *np.arange(14.0, 24.0), *np.arange(30.0, 40.0)]
    np.testing.assert_allclose(session.evidence().log.onset, expected, atol=1e-6)


# ---------------------------------------------------------------------- the last minutes


def test_what_is_older_than_the_minutes_asked_for_is_forgotten(eeg):
    uv = with_pops(eeg(62), (6.3, 13.6, 20.2, 26.7))
    session = session_of(minutes=0.5)
    feed(session, uv[:, : int(30 * RATE)])
    assert named(session.result()) == ["P3"]
    feed(session, uv[:, int(30 * RATE) :], at=1030.0)
    assert session.evidence().log.onset.tolist() == list(np.arange(32.0, 62.0))
    assert session.result().advice == ()


def test_what_was_before_a_long_break_is_forgotten_by_time(eeg):
    uv = with_pops(eeg(30), (6.3, 11.6, 15.2, 18.7))
    session = session_of(minutes=1.0)
    feed(session, uv[:, : int(20 * RATE)])
    feed(session, uv[:, int(20 * RATE) :], segment=1, at=4600.0)
    np.testing.assert_allclose(session.evidence().log.onset, np.arange(3600.0, 3610.0))
    assert session.result().advice == ()


def test_usual_values_follow_when_the_minutes_are_full(eeg):
    uv = eeg(84)
    uv[:, int(35 * RATE) :] *= 4
    session = session_of(minutes=0.5)
    feed(session, uv)
    rise = np.median(session.evidence().step_rise[:, : len(SITES)])
    assert abs(rise) < 2.0  # decibel; 12 if what was usual at first went on to count


def test_memory_does_not_grow_with_the_stream(eeg):
    uv = few(eeg(75, 32.0))
    session, sizes = session_of(FEW, 32.0, minutes=0.5), []
    for times in (2, 4):  # the window of samples is full after 64 s
        while session.now < 37 * times:
            piece = uv[:, : 37 * 32]
            feed(session, piece, at=1000.0 + session.now)
        session.result()
        sizes.append(len(pickle.dumps(session)))
    assert sizes[1] == pytest.approx(sizes[0], rel=0.01)


# --------------------------------------------------------------------------- the setup


@pytest.mark.parametrize(("minutes", "whole"), [(10.0, 130.0), (0.5, 30.0)])
def test_how_long_the_setup_is_still_looked_at_is_counted_down(eeg, minutes, whole):
    session = session_of(FEW, 100.0, minutes=minutes)
    assert session.setup_left == whole
    uv = np.random.default_rng(8).normal(0, 10, (len(FEW), 3200)).astype(np.float32)
    for second in range(32):
        session.add(Stretch(0, 100 * second, 9.0 + second, uv[:, 100 * second :][:, :100]))
        if session.seconds:
            session.result()
        left = whole - second - 1
        assert session.setup_left == (pytest.approx(left) if left > 0 else None)


def test_the_setup_is_settled_after_two_minutes(eeg):
    uv = few(eeg(150, 100.0))
    for moment in np.arange(131.3, 150, 3.7):
        uv[FEW.index("P3")] += step(uv.shape[1], 100.0, moment, 200.0, 0.5)
    session, setups = session_of(FEW, 100.0), {}
    for second in range(150):
        piece = uv[:, second * 100 : (second + 1) * 100].astype(np.float32)
        if session.add(Stretch(0, second * 100, 60.0 + second, piece)) and second % 10 == 9:
            setups[second + 1] = session.result().setup
        session.settle()
    assert setups[60].seconds == 60.0
    assert setups[140].seconds == 120.0
    assert "P3" in setups[140].fit
    assert setups[150] == setups[140]
    assert named(session.result()) == ["P3"]


def test_a_short_memory_settles_the_setup_before_the_start_is_forgotten(eeg):
    uv = with_pops(eeg(46), np.arange(31.2, 46, 3.3))
    session = session_of(minutes=0.5)
    feed(session, uv[:, : int(30 * RATE)])
    at_start = session.result().setup
    assert at_start.seconds == 30.0
    assert "P3" in at_start.fit
    feed(session, uv[:, int(30 * RATE) :], at=1030.0)
    assert named(session.result()) == ["P3"]
    assert session.result().setup == at_start


# ------------------------------------------------------------------------------- faults


def flat_from(uv, second):
    uv[row("P3"), int(second * RATE) :] = 17.0
    return uv


def hum_from(uv, second):
    since = slice(int(second * RATE), None)
    uv[row("P3"), since] += sine(uv.shape[1], RATE, 50.0, 25.0)[since]
    return uv


@pytest.mark.parametrize(
    ("fault", "sign"),
    [
        (flat_from, "flat"),
        (hum_from, "mains"),
    ],
)
def test_a_fault_that_begins_is_named_within_half_a_minute(eeg, fault, sign):
    uv = fault(eeg(52), 22.0).astype(np.float32)
    session = session_of(line_frequency=None)
    feed(session, uv[:, : int(22 * RATE)])
    assert named(session.result()) == []
    feed(session, uv[:, int(22 * RATE) :], at=1022.0)
    entry = entry_of(session.result(), "P3")
    assert entry.verdict == "re-prep"
    assert entry.sign == sign
    assert entry.stretches[0][0] >= 20.0 - 1e-6  # stretches of ten seconds


def test_a_fault_that_ends_under_somebodys_hand_is_cured(eeg):
    uv, here, rate = flat_from(eeg(82), 10.0), row("P3"), int(RATE)
    uv[here, 44 * rate :] = eeg(82)[here, 44 * rate :]
    hands = slice(40 * rate, 44 * rate)
    uv[here, hands] += 800 * np.hanning(4 * rate) * np.sin(np.linspace(0, 40, 4 * rate))
    session = session_of()
    feed(session, uv[:, : 38 * rate])
    assert named(session.result()) == ["P3"]
    feed(session, uv[:, 38 * rate :], at=1038.0)
    entry = entry_of(session.result(), "P3")
    assert (entry.verdict, entry.sign, entry.state) == ("watch", "flat", "cured")
    assert 40.0 <= entry.stretches[-1][1] <= 50.0
    (site,) = [site for site in session.result().sites if site.site == "P3"]
    assert site.verdict == "watch"


def test_missing_samples_count_as_missing_and_leave_the_other_sites_judged(eeg):
    uv = eeg(40)
    uv[row("P3"), int(20 * RATE) : int(35 * RATE) : 7] = np.nan
    uv[:, int(37.2 * RATE) : int(37.4 * RATE)] = np.nan
    session = session_of()
    feed(session, uv)
    missing = session.evidence().log.signs.missing.mean(axis=0)
    assert missing[row("P3")] == pytest.approx(16 / 40)
    assert missing[row("O1")] == pytest.approx(1 / 40)
    assert [entry.subject for entry in session.result().advice if entry.sign == "lost"] == [
        "P3"
    ]
    known = np.isfinite(session.evidence().probability[KIND_NAMES.index("pop")])
    assert not known[20:35, row("P3")].any()
    assert known[20:35, row("O1")].all()
    assert not known[37].any()


def test_recent_sites_are_solved_from_the_channels_that_are_there(eeg):
    uv = eeg(10).astype(np.float32)
    uv[row("P3"), 300:400] = np.nan
    uv[:, 500:520] = np.nan
    session = session_of()
    feed(session, uv)
    sites, start = session.recent_sites()
    lost = np.isnan(sites)
    assert start == 0.0
    assert sites.shape == (len(session.frame.sites), uv.shape[1])
    assert lost[row("P3"), 300:400].all()
    assert lost[:, 500:520].all()
    assert lost.sum() == 100 + 20 * len(sites)
    difference = sites[row("O1")] - sites[row("Cz")]
    expected = uv[row("O1")] - uv[row("Cz")]
    np.testing.assert_allclose(difference, expected, atol=1e-3)


def test_answers_of_the_patient_stay_as_the_minutes_go_on(eeg):
    session, uv = session_of(minutes=0.5), eeg(45)
    fault = LeadFault(
        cause="site", sign="no response", sites=("F7",), plain=True, stretches=((6.0, 9.0),),
        reason="F7 does not see the eyes turn", checks=("check the lead",),
    )  # fmt: skip
    response = Response("gaze left", 6.0, "one side missing", ("F7",), "0:00:06 nothing.")
    answers = Calibration((response,), (fault,))
    feed(session, uv[:, : int(12 * RATE)])
    for until in (12, 30, 45):
        feed(
            session,
            uv[:, int(session.now * RATE) : until * int(RATE)],
            at=1000 + session.now,
        )
        result = session.result(answers)
        assert session.seconds == until
        assert entry_of(result, "F7").sign == "no response", until
        if result.setup is not None:
            assert result.setup.responses == ("0:00:06 nothing.",)
    assert named(session.result()) == []
