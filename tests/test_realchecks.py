"""Checks of a model on real recordings: their arithmetic by hand, then the recordings."""

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from artifactlens.curves import load_model
from artifactlens.demo import DEMO_SITES
from artifactlens.errors import RecordingError
from artifactlens.kinds import KIND_NAMES
from artifactlens.pipeline import measure_recording
from artifactlens.recording import from_array, open_recording
from artifactlens.result import Flag
from artifactlens.training.corpora import absence, gestures, page_readings
from artifactlens.training.corpora.page_readings import ANY, PLAIN, Reading
from artifactlens.training.realchecks import (
    agreement,
    gestures_check,
    judged,
    lookalike_seconds,
    readings,
    witness,
)
from artifactlens.training.realchecks.agreement import NO, NOT_CALLED, YES
from artifactlens.training.realchecks.picture import picture


def flags_of(*bits):
    return np.array(bits, dtype=bool)


# --- agreement


def test_kappa_of_a_hand_worked_table():
    # 4 both yes, 3 both no, 2 and 1 apart: observed .7, expected .6*.5 + .4*.5 = .5
    one = flags_of(1, 1, 1, 1, 1, 1, 0, 0, 0, 0)
    other = flags_of(1, 1, 1, 1, 0, 0, 0, 0, 0, 1)
    assert agreement.kappa(one, other) == pytest.approx((0.7 - 0.5) / 0.5)


def test_kappa_is_one_for_the_same_calls_and_unknown_where_nothing_varies():
    calls = flags_of(1, 0, 1)
    assert agreement.kappa(calls, calls) == 1
    assert math.isnan(agreement.kappa(flags_of(1, 1), flags_of(1, 1)))
    assert math.isnan(agreement.kappa(flags_of(), flags_of()))


def test_auc_counts_the_pairs_and_halves_ties():
    # pairs: .9 beats both; .5 beats .1 and ties .5: (1 + 1 + 1 + .5) / 4
    assert agreement.auc(np.array([0.9, 0.5]), np.array([0.5, 0.1])) == pytest.approx(0.875)
    assert math.isnan(agreement.auc(np.array([0.9]), np.array([])))


@given(
    st.lists(st.integers(0, 5), min_size=1, max_size=12),
    st.lists(st.integers(0, 5), min_size=1, max_size=12),
)
def test_auc_is_the_share_of_pairs_in_the_right_order(yes, no):
    pairs = [(y > n) + 0.5 * (y == n) for y in yes for n in no]
    found = agreement.auc(np.array(yes, dtype=float), np.array(no, dtype=float))
    assert found == pytest.approx(np.mean(pairs))


def test_the_limit_at_95_percent_leaves_one_of_twenty_above_it():
    no = np.arange(20) / 100  # 19 of 20 do not exceed .18
    yes = np.array([0.17, 0.18, 0.185, 0.5])
    assert agreement.found_at(yes, no, 0.95) == 0.5
    assert agreement.found_at(yes, no, 1.0) == 0.25


def test_a_separation_leaves_out_what_is_not_called_or_has_no_score():
    truth = np.array([YES, YES, NO, NO, NOT_CALLED, YES], dtype=np.int8)
    score = np.array([0.9, 0.2, 0.1, 0.6, 0.9, np.nan])
    found = agreement.separation(truth, score, {"sure": score > 0.5})
    assert (found.yes, found.no, found.left_out) == (2, 2, 2)
    assert found.auc == pytest.approx(0.75)
    assert found.found == {"sure": 0.5}
    assert found.false == {"sure": 0.5}
    assert found.kappa == {"sure": 0.0}
    assert "2 yes, 2 no, 2 left out; AUC 0.750" in agreement.separation_text("x", found)


# --- judged


def test_the_highest_site_counts_and_no_site_is_no_score():
    rows = np.array([[0.1, np.nan, 0.7], [np.nan] * 3])
    np.testing.assert_array_equal(judged.highest(rows), [0.7, np.nan])


def plain_flag(kind, onset, duration, *sites):
    return Flag(
        1, onset, duration, kind, sites, 0.9, 2.2, -3.0, sites[0], onset, (), "", "A sentence."
    )  # fmt: skip


def judged_by_hand(probability, flags):
    """Judged with two sites; ``probability`` (n_epochs, 2) for every kind."""
    rows = np.array(probability)
    return judged.Judged(
        onset=np.arange(float(len(rows))),
        probability=np.repeat(rows[None], len(KIND_NAMES), axis=0),
        sites=("T3", "Cz"),
        canonical=("T7", "Cz"),
        flags=flags,
        limits={
            "sure": dict.fromkeys(KIND_NAMES, 0.8),
            "doubtful": dict.fromkeys(KIND_NAMES, 0.5),
        },
    )


def test_flags_mark_their_sites_only_and_own_scores_need_no_flag():
    seen = judged_by_hand(
        [[0.9, 0.1], [0.6, 0.1], [np.nan, 0.85]],
        {"sure": (plain_flag("muscle", 0.2, 1.5, "T3"),), "doubtful": ()},
    )
    assert seen.flagged("sure", "muscle").tolist() == [True, True, False]
    assert seen.flagged("sure", "muscle", np.array([1])).tolist() == [False] * 3
    assert seen.flagged("sure", "eye").tolist() == [False] * 3
    cells = seen.flagged_cells("sure", "muscle")
    assert cells.tolist() == [[True, False], [True, False], [False, False]]
    assert seen.reached("sure", "muscle").tolist() == [True, False, True]
    assert seen.reached("doubtful", "muscle").tolist() == [True, True, True]
    np.testing.assert_array_equal(seen.second_score("eye"), [0.9, 0.6, 0.85])


# --- witness

SECOND = np.linspace(0, 2 * np.pi, 200, endpoint=False)


def second(uv, phase=0.0):
    return uv * np.sin(2 * SECOND + phase)


def test_leads_on_either_side_of_the_eye_call_by_swing_and_sign():
    one = np.stack([second(40), second(80), second(19), second(30), second(200)])
    other = np.stack([second(-40), second(-10), second(0), second(-10), second(100)])
    # apart: 160 opposed, 180 opposed, 38, 80 opposed, 200 but in phase
    assert witness.opposed(one, other).tolist() == [YES, YES, NO, NOT_CALLED, NOT_CALLED]


def test_the_limits_of_the_witness_are_exclusive():
    one, flat = np.stack([second(20), second(60)]), np.zeros((2, 200))
    assert np.ptp(one, axis=1) == pytest.approx([40, 120], abs=0.01)
    tight = witness.opposed(one - 0.5 * one, -0.5 * one, eye_uv=119.9, no_eye_uv=40.1)
    assert tight.tolist() == [NO, YES]
    assert witness.opposed(one, flat, eye_uv=121, no_eye_uv=39).tolist() == [-1, -1]


def test_a_field_that_moves_both_leads_alike_is_common_and_never_an_eye():
    one = np.stack([second(100), second(100), second(20), second(100)])
    other = np.stack([second(85), second(-80), second(20), second(100, phase=1.4)])
    # in phase, opposed, in phase but 40 uV, correlation cos(1.4) = .17
    assert witness.together(one, other).tolist() == [True, False, False, False]
    assert witness.opposed(one, other)[0] == NO


def test_an_offset_of_a_lead_changes_nothing():
    one, other = second(50)[None], second(-50)[None]
    assert witness.opposed(one + 500, other - 500).tolist() == [YES]
    assert witness.covariance(one + 500, other - 500) == pytest.approx([-1250])


def test_a_single_eye_channel_calls_by_its_swing():
    lead = np.stack([second(100), second(10), second(40)])
    assert witness.single_lead(lead).tolist() == [YES, NO, NOT_CALLED]


@pytest.fixture(scope="module")
def with_eye_leads(quiet_eeg):
    """80 s with blinks at 30.3 and 70.3 s and a frontal slow wave at 75 s, Pg1 and Pg2."""
    rate = 128.0
    data = quiet_eeg(80, rate, blinks_at=(30.3, 70.3))
    quiet = quiet_eeg(80, rate)
    front = DEMO_SITES.index("Fp1")
    blink = data[front] - quiet[front]
    time = np.arange(data.shape[1]) / rate
    wave = 80 * np.sin(2 * np.pi * 2 * time) * ((time >= 75) & (time < 77))
    data[[DEMO_SITES.index(name) for name in ("Fp1", "Fp2", "F3", "F4")]] += wave
    below, above = quiet[front] - 0.5 * blink + wave, quiet[front] + blink + wave
    labels = [f"EEG {name}-REF" for name in (*DEMO_SITES, "Pg1", "Pg2")]
    recording = from_array(np.vstack([data, below, above]), rate, labels)
    return measure_recording(recording)


def test_the_eye_leads_are_never_among_the_sites_that_are_judged(with_eye_leads):
    assert len(with_eye_leads.frame.channels) == len(DEMO_SITES)
    assert not {"Pg1", "Pg2"} & set(with_eye_leads.frame.sites)


def test_the_witness_calls_a_blink_but_no_frontal_slow_wave_and_no_calibration(
    with_eye_leads,
):
    truth, common = witness.clinical_witness(with_eye_leads)
    assert np.flatnonzero(truth == YES).tolist() == [70]
    assert truth[30] == NOT_CALLED
    assert (truth[75:77] != YES).all()
    assert common[75:77].all()
    assert not common[:60].any()


def test_the_second_witness_takes_a_scalp_site_and_calls_the_same_blink(with_eye_leads):
    truth, _ = witness.clinical_witness(with_eye_leads, with_scalp=True)
    assert np.flatnonzero(truth == YES).tolist() == [70]


def test_a_recording_without_eye_leads_is_refused(quiet_eeg):
    labels = [f"EEG {name}-REF" for name in DEMO_SITES]
    measured = measure_recording(from_array(quiet_eeg(4, 128.0), 128.0, labels))
    with pytest.raises(RecordingError, match="A channel Pg1 is needed"):
        witness.clinical_witness(measured)
    with pytest.raises(RecordingError, match="An EOG channel is needed"):
        witness.eog_check(load_model(), measured)


# --- readings


def row(reader, kind, onset, end, sites="", confidence="sure"):
    return Reading("r.edf", reader, kind, onset, end, tuple(sites.split("|")), confidence)


def both_pages():
    return [row(reader, "page", 0.0, 10.0) for reader in ("first", "second")]


def test_marks_unite_rows_of_a_reader_and_ask_for_confidence_and_site():
    rows = [
        row("first", "eye", 0.2, 0.6),
        row("first", "eye", 2.95, 3.5, "Fp1", "doubtful"),
        row("second", "eye", 1.0, 2.0, "Fp1"),
    ]
    onset = np.arange(5.0)
    assert page_readings.marked(rows, onset, {"eye"}, PLAIN).tolist() == [
        [True, False, False, False, False],
        [False, True, False, False, False],
    ]
    assert page_readings.marked(rows, onset, {"eye"}, ANY)[0].tolist() == [1, 0, 0, 1, 0]
    cells = readings.marked_cells(rows, onset, {"eye"}, ANY, ("Fp1", "Cz"))
    assert cells.shape == (2, 5, 2)
    assert cells[0, :, 0].tolist() == [False, False, False, True, False]
    assert not cells[:, :, 1].any()


def test_only_whole_seconds_of_pages_that_both_read_count():
    rows = [*both_pages(), row("first", "page", 10.0, 20.0), row("second", "page", 20, 25)]
    page = page_readings.page_numbers(rows, np.arange(25.0))
    assert (page[:10] == 0).all()
    assert (page[10:] == -1).all()


def test_a_doubtful_or_single_mark_is_not_called():
    plain = np.array([[1, 1, 0, 0, 1], [1, 0, 0, 0, 1]], dtype=bool)
    anything = np.array([[1, 1, 0, 1, 1], [1, 0, 0, 0, 1]], dtype=bool)
    read = flags_of(1, 1, 1, 1, 0)
    truth = readings.agreed(plain, anything, read)
    assert truth.tolist() == [YES, NOT_CALLED, NO, NOT_CALLED, NOT_CALLED]


def test_a_site_named_once_is_named_for_its_whole_page_only():
    named = np.zeros((6, 2), dtype=bool)
    named[1, 0] = named[5, 1] = True
    page = np.array([0, 0, 0, 1, 1, -1])
    spread = readings.on_whole_page(named, page)
    assert spread[:, 0].tolist() == [True, True, True, False, False, False]
    assert spread[:, 1].tolist() == [False] * 5 + [True]


def test_a_run_is_scored_where_both_readings_agree(monkeypatch):
    rows = [
        *both_pages(),
        *[row(reader, "muscle", 0.0, 4.0, "T7") for reader in ("first", "second")],
        row("first", "muscle", 4.0, 5.0, "T7", "doubtful"),
        row("first", "muscle", 6.0, 7.0, "T7"),
        *[row(reader, "brain", 8.0, 10.0, "Cz") for reader in ("first", "second")],
    ]
    at_temple = plain_flag("muscle", 0.0, 3.0, "T3")
    probability = np.full((10, 2), 0.1)
    probability[:3, 0] = 0.9
    seen = judged_by_hand(
        probability,
        {
            "sure": (at_temple,),
            "doubtful": (at_temple, plain_flag("muscle", 8.0, 1.0, "Cz")),
        },
    )  # fmt: skip
    monkeypatch.setattr(readings, "judge_recording", lambda measured, model: seen)
    found = readings.readings_check(load_model(), {"r.edf": None}, {"r.edf": rows})
    # yes 0-3; 4 is doubtful to one, 6 marked by one: left out; no 5, 7, 8, 9
    muscle = found.seconds["muscle"]
    assert (muscle.yes, muscle.no, muscle.left_out) == (4, 4, 2)
    assert muscle.found == {"sure": 0.75, "doubtful": 0.75, "at .5": 0.75}
    assert muscle.false == {"sure": 0.0, "doubtful": 0.25, "at .5": 0.0}
    # kappa of the readings on all but second 4: first 0-3 and 6, second 0-3
    expected = 5 / 9 * 4 / 9 + 4 / 9 * 5 / 9
    assert found.agreement["muscle"].seconds == 9
    assert found.agreement["muscle"].readings == pytest.approx(
        (8 / 9 - expected) / (1 - expected)
    )
    # T7 is named on the page, so only Cz gives clean cells
    cells = found.cells["muscle"]
    assert (cells.yes, cells.no) == (4, 10)
    assert cells.false == {"sure": 0.0, "doubtful": 0.1, "at .5": 0.0}
    assert found.artifact_free == 2
    assert found.cerebral_seconds.count["muscle"] == 2
    assert found.cerebral_seconds.flagged["muscle"]["doubtful"] == 0.5
    assert found.cerebral_cells.count["eye"] == 2
    assert found.cerebral_cells.flagged["muscle"]["sure"] == 0.0
    assert "not human, not expert" in found.text().splitlines()[0]


# --- look-alike seconds


def test_seizure_seconds_are_no_slowing_and_the_calibration_is_nothing():
    windows = {
        "spike-wave seizures": [(70.0, 72.0)],
        "hyperventilation slowing": [(68.0, 74.0)],
    }
    masks = lookalike_seconds.pattern_masks(windows, np.arange(80.0))
    assert np.flatnonzero(masks["spike-wave seizures"]).tolist() == [70, 71]
    assert np.flatnonzero(masks["hyperventilation slowing"]).tolist() == [68, 69, 72, 73]
    elsewhere = np.flatnonzero(masks[lookalike_seconds.ELSEWHERE]).tolist()
    assert elsewhere == [*range(60, 68), *range(74, 80)]


def test_flags_inside_windows_are_counted_and_listed():
    seen = judged_by_hand(
        np.full((80, 2), 0.1),
        {
            "sure": (plain_flag("muscle", 70.2, 1.5, "T3"), plain_flag("eye", 65.0, 1.0, "Cz")),
            "doubtful": (),
        },
    )  # fmt: skip
    notes = [(70.0, "SZ START"), (74.0, "SZ END")]
    check = lookalike_seconds.lookalike_check(load_model(), None, notes, seen)
    seizure = check.patterns[0]
    assert (seizure.pattern, seizure.seconds) == ("spike-wave seizures", 4)
    assert seizure.shares["muscle"] == {"sure": 0.5, "doubtful": 0.0}
    assert seizure.cells["muscle"] == {"sure": 0.25, "doubtful": 0.0}
    assert seizure.own["any"] == {"sure": 0.0, "doubtful": 0.0}
    assert seizure.shares["any"]["sure"] == 0.5
    assert check.patterns[-1].seconds == 16
    (inside,) = check.flags["sure"]
    assert (inside.kind, inside.onset, inside.sites) == ("muscle", 70.2, ("T3",))
    assert "muscle at T3, 0.90. A sentence." in check.text()


def test_a_picture_is_to_scale_with_the_negative_up(with_eye_leads):
    figure = picture(with_eye_leads.recording, 70.3, ("Fp1",))
    axes = figure.axes[0]
    names = [label.get_text() for label in axes.get_yticklabels()]
    assert names[:2] == ["Fp1-F7", "F7-T3"]
    assert names[-2:] == ["EEG Pg1-REF", "EEG Pg2-REF"]
    assert axes.get_xlim() == pytest.approx((66.3, 76.3))
    assert axes.get_position().width * figure.get_size_inches()[0] * 25.4 == pytest.approx(
        300
    )
    traces = dict(zip(names, axes.get_lines(), strict=False))
    time, drawn = traces["Fp1-F7"].get_data()
    near = (time > 70.2) & (time < 70.8)
    # A blink makes Fp1 positive: the trace goes down, by 100 to 200 uV at 7 uV/mm.
    assert drawn[near].min() < -10
    assert -drawn[near].min() > 2 * drawn[near].max()
    assert traces["Fp1-F7"].get_linewidth() > traces["F7-T3"].get_linewidth()


# --- gestures


def test_the_instruction_alone_is_the_label():
    gesture = np.array(["hardblink", "smile", "neutral", "tongue", "scrunch"])
    eye = gestures_check.instructed_truth("eye", gesture)
    muscle = gestures_check.instructed_truth("muscle", gesture)
    assert eye.tolist() == [YES, NOT_CALLED, NO, NOT_CALLED, NOT_CALLED]
    assert muscle.tolist() == [NOT_CALLED, YES, NO, NOT_CALLED, YES]


def test_copies_of_rest_are_judged_but_not_counted():
    rng = np.random.default_rng(3)
    stored = {name: np.zeros((0, 96, 4)) for name in gestures.GESTURES}
    stored["smile"] = rng.normal(0, 40, (3, 96, 4))
    stored["neutral"] = rng.normal(100, 10, (12, 96, 4))
    session = gestures.Session(("F3", "F4", "C3", "C4"), 64.0, stored)
    measured = measure_recording(gestures.as_recording(session))
    chunks = gestures.gesture_chunks(session)
    assert len(measured.grid) == len(chunks.name) == 3 + 5 * 12
    check = gestures_check.gestures_check(load_model(), measured, chunks)
    assert check.counts == {"smile": 3, "neutral": 12}
    assert (check.kinds["muscle"].yes, check.kinds["muscle"].no) == (3, 12)
    assert check.kinds["eye"].yes == 0
    assert math.isnan(check.kinds["eye"].auc)
    assert "One person, one session" in check.text()


# --- the recordings themselves


@pytest.mark.corpora
def test_eye_leads_and_notes_of_the_clinical_recording(corpora):
    folder = corpora / "clinical_absence"
    if not folder.is_dir():
        pytest.skip("the corpus clinical_absence is not there")
    measured = measure_recording(open_recording(folder / "absence.edf"))
    model = load_model()
    seen = judged.judge_recording(measured, model)
    alone, with_site = witness.clinical_check(model, measured, seen)
    # The eye leads by themselves: no model takes part in these counts.
    assert (alone.separation.yes, alone.separation.no) == (558, 302)
    assert (with_site.separation.yes, with_site.separation.no) == (413, 392)
    assert alone.separation.auc > 0.9
    notes = absence.notes(folder / "notes.tsv")
    check = lookalike_seconds.lookalike_check(model, measured, notes, seen)
    seconds = {entry.pattern: entry.seconds for entry in check.patterns}
    assert seconds["spike-wave seizures"] == 15
    # 14 notes of spikes and discharges, counted by hand in notes.tsv; none in the calibration.
    assert len(absence.documented_windows(notes)["spikes"]) == 14
    assert all(flag.end > 60 for flag in check.flags["doubtful"])


@pytest.mark.corpora
def test_the_eog_channel_of_the_sample_shows_its_four_blinks(corpora):
    path = corpora / "sample_60eeg" / "sample_eeg_raw.fif"
    if not path.is_file():
        pytest.skip("the corpus sample_60eeg is not there")
    found = witness.eog_check(load_model(), measure_recording(open_recording(path)))
    assert found.separation.yes == 4
    assert found.separation.auc > 0.9


@pytest.mark.corpora
def test_two_readings_of_one_run(corpora):
    folder = corpora / "eegmmidb_s001"
    if not folder.is_dir():
        pytest.skip("the corpus eegmmidb_s001 is not there")
    rows = page_readings.readings(folder)
    name = "S001R01.edf"
    runs = {name: measure_recording(open_recording(folder / name))}
    found = readings.readings_check(load_model(), runs, rows)
    assert found.seconds["eye"].yes > 10
    assert found.agreement["eye"].readings > 0.5
    # Muscle runs through all of this run: no second of it is clean to either reading.
    assert found.seconds["muscle"].no == 0
    assert found.seconds["muscle"].yes > 40


@pytest.mark.corpora
def test_the_readers_agree_as_their_card_says(corpora):
    folder = corpora / "eegmmidb_s001"
    if not folder.is_dir():
        pytest.skip("the corpus eegmmidb_s001 is not there")
    onset = np.arange(200.0)
    runs = page_readings.readings(folder).values()
    # Kappa .77 and .88 over 60 of the 74 pages (data_cards/eegmmidb_s001.md).
    for kind, stated in (("eye", 0.77), ("muscle", 0.88)):
        calls = [
            page_readings.marked(rows, onset, {kind}, PLAIN)[
                :, page_readings.page_numbers(rows, onset) >= 0
            ]
            for rows in runs
        ]
        found = agreement.kappa(*np.concatenate(calls, axis=1))
        assert found == pytest.approx(stated, abs=0.05)


@pytest.mark.corpora
def test_gestures_of_one_person(corpora):
    folder = corpora / "gestures_one_person"
    if not folder.is_dir():
        pytest.skip("the corpus gestures_one_person is not there")
    session = gestures.load(folder)
    few = session._replace(chunks={name: own[::8] for name, own in session.chunks.items()})
    measured = measure_recording(gestures.as_recording(few))
    chunks = gestures.gesture_chunks(few)
    found = gestures_check.gestures_check(load_model(), measured, chunks)
    assert (found.kinds["eye"].yes, found.kinds["eye"].no) == (38, 16)
    assert (found.kinds["muscle"].yes, found.counts["tongue"]) == (47, 10)
    assert found.kinds["muscle"].auc > 0.8
