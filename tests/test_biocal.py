"""The biological calibration as a self-test: words, verdicts of hand-made answers, privacy."""

import dataclasses
import itertools

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from signals import SITES, bump, noise, referential, step, ten_twenty

from artifactlens.advice import CAUSES, SIGNS
from artifactlens.errors import SitesError
from artifactlens.frames import build_frame
from artifactlens.prefilter import Filters
from artifactlens.recording import Segment, from_array, open_recording
from artifactlens.simulation import eye, muscle
from artifactlens.simulation.scene import Scene
from artifactlens.sitecare.biocal import Task, calibrate, respond, steps
from artifactlens.sitecare.biocal_answers import VERDICTS
from artifactlens.sitecare.biocal_words import (
    KINDS,
    LONGEST_SECONDS,
    UNNAMED,
    announced,
    protocol_tasks,
    task_words,
)
from artifactlens.sites import site_position

RATE = 256.0
SECONDS = 40
N = int(SECONDS * RATE)

# What each site shows of a blink and of gaze to the right, 1 at Fp1/Fp2 and at F8: about
# what the simulation gives against the back of the head.
BLINK = {
    "Fp1": 1.0,
    "Fp2": 1.0,
    "F7": 0.4,
    "F8": 0.4,
    "F3": 0.3,
    "Fz": 0.3,
    "F4": 0.3,
    "Cz": 0.1,
}
RIGHT = {"F8": 1.0, "F7": -1.0, "T8": 0.35, "T7": -0.35, "F4": 0.27, "F3": -0.27, "Fp2": 0.3,
         "Fp1": -0.3}  # fmt: skip
TEMPLES = ("F7", "T7", "F8", "T8")
CHAINS = (
    "Fp1 F7 T7 P7 O1",
    "Fp2 F8 T8 P8 O2",
    "Fp1 F3 C3 P3 O1",
    "Fp2 F4 C4 P4 O2",
    "Fz Cz Pz",
)
DOUBLE_BANANA = tuple(
    f"{a}-{b}" for chain in CHAINS for a, b in itertools.pairwise(chain.split())
)

BLINKS = (10.0, 0.0, "eye blinks")
LOOK_RIGHT = (20.0, 0.0, "look right")
LOOK_LEFT = (26.0, 0.0, "L gaze")
CLENCH = (32.0, 0.0, "clench jaw")


def spread(weights, wave):
    return np.outer([weights.get(site, 0.0) for site in SITES], wave)


def blinks(size=150.0):
    return spread(BLINK, sum(bump(N, RATE, 11.0 + 1.2 * k, size) for k in range(4)))


def gaze(second, size, held=1.5):
    return spread(RIGHT, step(N, RATE, second, size) - step(N, RATE, second + held, size))


def clench(sites=TEMPLES, rms_uv=30.0):
    inside = (np.arange(N) >= 32.5 * RATE) & (np.arange(N) < 34.5 * RATE)
    fast = noise(len(SITES), N, RATE, exponent=0.0, rms_uv=rms_uv, seed=5)
    return fast * inside * np.isin(SITES, sites)[:, None]


def answered(**options):
    """Background with right answers to all of it."""
    data = ten_twenty(SECONDS, RATE, rms_uv=6.0, seed=3, **options)
    return data + blinks() + gaze(20.7, 60.0) + gaze(26.6, -60.0) + clench()


def judged(data, *annotations, labels=SITES, **options):
    recording = dataclasses.replace(
        referential(data, RATE, labels, **options), annotations=annotations
    )
    return calibrate(
        recording, build_frame(recording.labels, recording.types, recording.positions)
    )


def bipolar(data, names=DOUBLE_BANANA):
    pairs = [name.split("-") for name in names]
    row = SITES.index
    made = np.stack([data[row(first)] - data[row(second)] for first, second in pairs])
    return from_array(made, RATE, list(names))


def exchanged(data, first, second):
    order = list(range(len(SITES)))
    a, b = SITES.index(first), SITES.index(second)
    order[a], order[b] = b, a
    return data[order]


def without(data, site, rms_uv=8.0):
    """The lead of a site carries only noise of its own."""
    lost = data.copy()
    lost[SITES.index(site)] = noise(1, N, RATE, rms_uv=rms_uv, seed=9)[0]
    return lost


def verdicts(calibration):
    return [response.verdict for response in calibration.responses]


EVERYTHING = (BLINKS, LOOK_RIGHT, LOOK_LEFT, CLENCH)


# Words


@pytest.mark.parametrize(
    ("text", "kind"),
    [
        ("blink", "blink"),
        ("Eye Blinks x5", "blink"),
        ("PAT BLINKING", "blink"),
        ("look left", "gaze left"),
        ("LOOKS TO THE RIGHT", "gaze right"),
        ("Eyes right", "gaze right"),
        ("gaze R", "gaze right"),
        ("L gaze", "gaze left"),
        ("left lateral gaze", "gaze left"),
        ("eyes moved to her left", "gaze left"),
        ("look left/right", "gaze"),
        ("eyes L-R", "gaze"),
        ("look left, look right", "gaze"),
        ("Lateral eye movements", "gaze"),
        ("horizontal gaze", "gaze"),
        ("eyes side to side", "gaze"),
        ("Jaw clench", "jaw"),
        ("bite down", "jaw"),
        ("grit teeth", "jaw"),
        ("BIOCAL", UNNAMED),
        ("biological calibration", UNNAMED),
        ("Bio-cal start", UNNAMED),
    ],
)
def test_trade_words_announce_their_task(text, kind):
    assert task_words(text) == kind


@pytest.mark.parametrize(
    "text",
    [
        "",
        "eyes open",
        "eyes closed, right arm moving",
        "look right hand",
        "left eye patched",
        "asked to relax jaw",
        "don't blink",
        "no blinking",
        "eyes deviated right",
        "gaze deviation to left",
        "sz: eyes left",
        "jaw twitching",
        "tongue bite",
        "blinker off",
        "outlook left",
        "calibration of amplifiers",
    ],
)
def test_signs_of_illness_opposites_and_parts_of_words_announce_nothing(text):
    assert task_words(text) is None


letters = st.text(alphabet="abcdefghijklmnopqrstuvwxyz", min_size=1, max_size=6)
marks = st.sampled_from([" ", "  ", "-", ", ", ": ", "/", "_ ", "\t"])


@given(st.sampled_from(["eye blinks", "look left", "gaze right", "jaw clench"]), st.data())
def test_case_and_punctuation_do_not_matter(text, data):
    raised = "".join(
        letter.upper() if data.draw(st.booleans()) else letter for letter in text
    )
    spaced = raised.replace(" ", data.draw(marks))
    assert task_words(f"{data.draw(marks)}{spaced}{data.draw(marks)}") == task_words(text)


@given(letters, letters)
def test_only_whole_words_count(before, after):
    assert task_words(f"{before}blink{after}q") is None
    assert task_words(f"q{before}clench") is None


@given(
    st.lists(
        st.tuples(
            st.floats(0, 500),
            st.floats(0, 60),
            st.one_of(
                st.sampled_from(["blink", "look left", "biocal", "X", "jaw"]), st.text()
            ),
        ),
        max_size=12,
    )
)
def test_announced_tasks_are_in_order_inside_the_recording_and_short(annotations):
    tasks = announced(annotations, 300.0)
    assert list(tasks) == sorted(tasks, key=lambda task: task.onset)
    for task in tasks:
        assert task.kind in KINDS
        assert 0 <= task.onset < 300.0
        assert task.duration > 0
        assert task.end <= 300.0 + 1e-6
        assert task.duration <= LONGEST_SECONDS or not task.timed


def test_a_task_ends_with_the_next_annotation_or_its_own_duration_or_after_15_seconds():
    texts = [(10.0, 0.0, "blink"), (14.0, 0.0, "X"), (20.0, 3.0, "jaw"), (50.0, 0.0, "jaw")]
    assert [task.duration for task in announced(texts, 100.0)] == [4.0, 3.0, 15.0]


def test_a_calibration_without_named_tasks_opens_a_stretch_for_each():
    loose = announced([(5.0, 0.0, "Biocal")], 300.0)
    assert [task.kind for task in loose] == ["blink", "gaze", "jaw"]
    assert not any(task.timed for task in loose)
    named = announced([(5.0, 0.0, "Biocal"), (9.0, 0.0, "blink")], 300.0)
    assert [(task.kind, task.timed) for task in named] == [("blink", True)]


def test_the_protocol_is_short_starts_with_rest_and_names_its_tasks():
    assert steps()[0].kind is None
    assert sum(step.seconds for step in steps()) <= 60
    tasks = protocol_tasks(100.0)
    assert {task.kind for task in tasks} == {"blink", "gaze left", "gaze right", "jaw"}
    assert tasks[0].onset == 100.0 + steps()[0].seconds
    assert all(a.end <= b.onset for a, b in itertools.pairwise(tasks))


# Right answers


def test_right_answers_are_as_expected_and_no_lead_is_suspect():
    found = judged(answered(), *EVERYTHING)
    assert verdicts(found) == ["as expected"] * 4
    assert found.faults == ()
    blink, right = found.responses[:2]
    assert blink.sites == ("Fp1", "Fp2") or blink.sites == ("Fp2", "Fp1")
    assert right.sites == ("F7", "F8")
    assert "F8 +" in right.sentence
    assert "F7 -" in right.sentence
    assert right.sentence.startswith("0:00:20 gaze right: as expected")


def test_the_size_of_a_blink_is_that_of_its_peak():
    sentence = judged(answered(), BLINKS).sentences[0]
    said = float(sentence.split("Fp1 +")[1].split(" uV")[0])
    assert said == pytest.approx(150.0, rel=0.15)


def test_the_double_banana_tells_the_same():
    recording = dataclasses.replace(bipolar(answered()), annotations=EVERYTHING)
    frame = build_frame(recording.labels, recording.types, recording.positions)
    found = calibrate(recording, frame)
    assert verdicts(found) == ["as expected"] * 4
    assert found.faults == ()


def test_old_names_are_understood_and_kept():
    old = {"T7": "T3", "T8": "T4", "P7": "T5", "P8": "T6"}
    labels = [old.get(site, site) for site in SITES]
    found = judged(without(answered(), "T7"), CLENCH, labels=labels)
    assert found.faults[0].sites == ("T3",)


@pytest.mark.parametrize("gain", [0.5, 2.0, 3.0])
def test_gain_changes_no_verdict(gain):
    for data in (answered(), exchanged(answered(), "F7", "F8"), without(answered(), "Fp1")):
        plain, scaled = judged(data, *EVERYTHING), judged(gain * data, *EVERYTHING)
        assert verdicts(plain) == verdicts(scaled)
        assert [fault.sites for fault in plain.faults] == [
            fault.sites for fault in scaled.faults
        ]


def test_a_common_disturbance_of_the_reference_changes_no_verdict():
    data = answered() + noise(1, N, RATE, rms_uv=40.0, seed=8)
    assert verdicts(judged(data, *EVERYTHING)) == ["as expected"] * 4


def test_a_note_typed_after_the_blinks_still_finds_them():
    found = judged(answered(), (16.0, 2.0, "blinks"))
    assert verdicts(found) == ["as expected"]
    assert "before it was noted" in found.sentences[0]


# Blinks


@pytest.mark.parametrize("site", ["Fp1", "Fp2"])
def test_a_pole_without_deflection_is_named(site):
    found = judged(without(answered(), site), BLINKS)
    assert verdicts(found) == ["one side missing"]
    (fault,) = found.faults
    assert (fault.cause, fault.sign, fault.sites) == ("site", "no response", (site,))
    assert fault.plain
    assert fault.checks[0].startswith("check the lead")


def test_a_pole_exchanged_with_the_back_names_where_its_blink_went():
    (fault,) = judged(exchanged(answered(), "Fp1", "O1"), BLINKS).faults
    assert fault.sites == ("Fp1",)
    assert "O1 +" in fault.reason


def test_a_pole_that_turns_negative_is_mirrored():
    data = ten_twenty(SECONDS, RATE, rms_uv=6.0, seed=3)
    waves = blinks()
    waves[SITES.index("Fp1")] *= -1
    found = judged(data + waves, BLINKS)
    assert verdicts(found) == ["mirrored"]
    (fault,) = found.faults
    assert (fault.cause, fault.sign, fault.sites) == ("placement", "mirrored", ("Fp1",))


def test_a_whole_inverted_recording_asks_for_its_polarity():
    (fault,) = judged(-answered(), BLINKS).faults
    assert fault.sign == "mirrored"
    assert set(fault.sites) == {"Fp1", "Fp2"}
    assert "polarity" in fault.checks[0]


def test_without_any_blink_the_patient_is_asked_first():
    found = judged(ten_twenty(SECONDS, RATE, rms_uv=6.0), BLINKS)
    assert verdicts(found) == ["missing"]
    (fault,) = found.faults
    assert (fault.cause, fault.sign, fault.plain) == ("patient", "no response", False)
    assert fault.checks[0].startswith("ask for the blinks again")


# Gaze


def test_exchanged_temples_are_mirrored_and_plain_as_the_sites_around_disagree():
    found = judged(exchanged(answered(), "F7", "F8"), LOOK_RIGHT, LOOK_LEFT)
    assert verdicts(found) == ["mirrored", "mirrored"]
    (fault,) = found.faults
    assert (fault.cause, fault.sign, fault.sites) == ("placement", "mirrored", ("F7", "F8"))
    assert fault.plain
    assert len(fault.stretches) == 2


def test_a_patient_who_looks_the_other_way_is_no_plain_fault():
    data = ten_twenty(SECONDS, RATE, rms_uv=6.0, seed=3) + gaze(20.7, -60.0)
    (fault,) = judged(data, LOOK_RIGHT).faults
    assert fault.sign == "mirrored"
    assert not fault.plain
    assert fault.checks[0].startswith("ask again and watch")


@pytest.mark.parametrize("site", ["F7", "F8"])
def test_a_silent_temple_is_named(site):
    found = judged(without(answered(), site), LOOK_RIGHT, LOOK_LEFT)
    assert verdicts(found) == ["one side missing"] * 2
    (fault,) = found.faults
    assert (fault.cause, fault.sign, fault.sites) == ("site", "no response", (site,))
    assert fault.plain


def test_the_same_sign_at_both_temples_points_to_placement():
    data = ten_twenty(SECONDS, RATE, rms_uv=6.0, seed=3)
    same = gaze(20.7, 60.0)
    same[SITES.index("F7")] *= -0.8
    found = judged(data + same, LOOK_RIGHT)
    assert verdicts(found) == ["mirrored"]
    assert "the same sign at both" in found.sentences[0]
    assert set(found.faults[0].sites) == {"F7", "F8"}


def test_without_a_named_side_only_opposite_signs_are_checked():
    text = (20.0, 0.0, "lateral eye movements")
    for data in (answered(), exchanged(answered(), "F7", "F8")):
        assert verdicts(judged(data, text)) == ["as expected"]


def test_eyes_that_had_moved_before_the_note_are_not_called_mirrored():
    late = (
        21.2,
        0.0,
        "look right",
    )  # typed while the eyes are there: only the way home is left
    assert verdicts(judged(answered(), late)) == ["cannot tell"]
    assert judged(answered(), late).faults == ()


def test_a_blink_with_the_saccade_changes_nothing():
    data = answered() + spread(
        BLINK, bump(N, RATE, 20.75, 180.0) + bump(N, RATE, 26.6, 180.0)
    )
    assert verdicts(judged(data, LOOK_RIGHT, LOOK_LEFT)) == ["as expected"] * 2


def test_blinks_alone_are_no_gaze():
    data = ten_twenty(SECONDS, RATE, rms_uv=6.0, seed=3)
    data += spread(BLINK, bump(N, RATE, 21.0, 180.0) + bump(N, RATE, 22.6, 180.0))
    assert verdicts(judged(data, LOOK_RIGHT)) == ["missing"]


# Jaw


def test_a_temporal_lead_that_shows_no_muscle_is_named():
    found = judged(without(answered(), "T8"), CLENCH)
    assert verdicts(found) == ["one side missing"]
    assert found.faults[0].sites == ("T8",)


def test_a_clench_on_one_side_only_asks_the_patient():
    data = ten_twenty(SECONDS, RATE, rms_uv=6.0, seed=3) + clench(("F7", "T7"))
    found = judged(data, CLENCH)
    assert verdicts(found) == ["one side missing"]
    (fault,) = found.faults
    assert (fault.cause, set(fault.sites)) == ("patient", {"F8", "T8"})


def test_fast_power_everywhere_is_no_clench():
    data = ten_twenty(SECONDS, RATE, rms_uv=6.0, seed=3) + clench(SITES)
    assert verdicts(judged(data, CLENCH)) == ["cannot tell"]


def test_a_lead_silent_to_gaze_and_jaw_is_one_plain_fault_with_both_reasons():
    found = judged(without(answered(), "F7"), LOOK_RIGHT, LOOK_LEFT, CLENCH)
    (fault,) = [fault for fault in found.faults if fault.cause == "site"]
    assert fault.sites == ("F7",)
    assert fault.plain
    assert "gaze" in fault.reason
    assert "clench" in fault.reason


# What cannot be told


def test_few_sites_tell_nothing():
    rows = [SITES.index(site) for site in ("Fp1", "F8", "O1")]
    found = judged(answered()[rows], *EVERYTHING, labels=("Fp1", "F8", "O1"))
    assert verdicts(found) == ["cannot tell"] * 4
    assert "3 sites are too few" in found.sentences[0]


def test_without_frontal_and_temporal_sites_nothing_is_said_of_them():
    labels = ("C3", "Cz", "C4", "P3", "Pz", "P4", "O1", "O2")
    rows = [SITES.index(site) for site in labels]
    found = judged(answered()[rows], *EVERYTHING, labels=labels)
    assert verdicts(found) == ["cannot tell"] * 4
    assert found.faults == ()
    assert "no frontal site" in found.sentences[0]
    assert "temple" in found.sentences[1]


def test_eight_sites_tell_blinks_and_jaw_but_no_gaze():
    labels = ("Fp1", "Fp2", "C3", "C4", "T7", "T8", "O1", "O2")
    rows = [SITES.index(site) for site in labels]
    found = judged(answered()[rows], *EVERYTHING, labels=labels)
    assert verdicts(found) == ["as expected", "cannot tell", "cannot tell", "as expected"]


TEN_TEN = (
    "Fp1 Fpz Fp2 AF7 AF3 AFz AF4 AF8 F7 F5 F3 F1 Fz F2 F4 F6 F8 FT7 FC5 FC3 FC1 FCz FC2 FC4 "
    "FC6 FT8 T7 C5 C3 C1 Cz C2 C4 C6 T8 TP7 CP5 CP3 CP1 CPz CP2 CP4 CP6 TP8 P7 P5 P3 P1 Pz P2 "
    "P4 P6 P8 PO7 PO3 POz PO4 PO8 O1 Oz O2"
)


@pytest.mark.parametrize("lost", [None, "Fp2", "F8"])
def test_many_sites_and_simulated_eyes(lost):
    sites = TEN_TEN.split()
    scene = Scene(np.array([site_position(site) for site in sites]), N, RATE)
    rng = np.random.default_rng(4)
    data = noise(len(sites), N, RATE, rms_uv=6.0, seed=2)
    data += eye.blinks(scene, rng, [11.0, 12.4, 13.6]).potentials
    data += eye.saccade(scene, 20.7, right_deg=25.0).potentials
    data += eye.saccade(scene, 26.7, right_deg=-25.0).potentials
    data += muscle.contraction(scene, rng, "temporalis", 32.5, 2.0, rms_uv=40.0).potentials
    if lost:
        data[sites.index(lost)] = noise(1, N, RATE, rms_uv=8.0, seed=9)[0]
    found = judged(data, *EVERYTHING, labels=sites)
    named = {fault.sites for fault in found.faults if fault.plain}
    assert named == ({(lost,)} if lost else set())
    if lost != "Fp2":
        assert found.responses[0].verdict == "as expected"
    if lost is None:
        assert verdicts(found)[1:3] == ["as expected"] * 2


def test_chain_ends_alone_are_not_compared():
    names = ("Fp1-F7", "Fp2-F8", "T7-P7", "T8-P8", "C3-P3", "C4-P4")
    recording = dataclasses.replace(
        bipolar(answered(), names), annotations=(BLINKS, LOOK_RIGHT)
    )
    frame = build_frame(recording.labels, recording.types, recording.positions)
    found = calibrate(recording, frame)
    assert verdicts(found) == ["cannot tell"] * 2
    assert "in their chain" in found.sentences[0]


def test_a_low_pass_below_muscle_leaves_the_jaw_untold():
    found = judged(answered(), CLENCH, filters=[Filters(0.5, 15.0, None)] * 19)
    assert verdicts(found) == ["cannot tell"]
    assert "above 20 Hz" in found.sentences[0]


def test_lost_samples_are_not_called_a_lead_fault():
    data = answered()
    data[SITES.index("F8"), int(20 * RATE) :] = np.nan
    found = judged(data, LOOK_RIGHT)
    assert verdicts(found) == ["cannot tell"]
    assert found.faults == ()


def test_a_task_within_a_gap_cannot_be_told():
    half = N // 2
    found = judged(
        answered(), (25.0, 5.0, "blink"),
        segments=[Segment(0, half, 0.0), Segment(half, half, 40.0)],
    )  # fmt: skip
    assert verdicts(found) == ["cannot tell"]
    assert "missing there" in found.sentences[0]


def test_a_task_after_a_gap_is_read_at_its_place():
    half = N // 2
    found = judged(
        answered(), (40.0, 5.0, "look right"),
        segments=[Segment(0, half, 0.0), Segment(half, half, 40.0)],
    )  # fmt: skip
    assert verdicts(found) == ["as expected"]


# When nothing is announced


def test_without_announcement_nothing_is_said():
    found = judged(answered(), (3.0, 0.0, "eyes open"), (9.0, 0.0, "drowsy"))
    assert found.responses == ()
    assert found.faults == ()


def test_asked_for_without_announcement_the_first_minutes_are_searched():
    recording = referential(answered(), RATE)
    frame = build_frame(recording.labels, recording.types, recording.positions)
    found = calibrate(recording, frame, asked=True)
    assert [response.task for response in found.responses] == ["blink", "gaze", "jaw"]
    assert verdicts(found) == ["as expected"] * 3
    assert "0:00:00 to 0:00:40" in found.sentences[0]


def test_asked_for_in_vain_is_said_and_no_lead_is_blamed():
    recording = referential(ten_twenty(SECONDS, RATE, rms_uv=6.0), RATE)
    frame = build_frame(recording.labels, recording.types, recording.positions)
    found = calibrate(recording, frame, asked=True)
    assert verdicts(found) == ["missing"] * 3
    assert found.faults == ()


def test_what_nobody_asked_for_blames_no_lead_by_half_a_sign():
    data = ten_twenty(SECONDS, RATE, rms_uv=6.0, seed=3) + clench(("F7", "T7"))
    recording = referential(data, RATE)
    frame = build_frame(recording.labels, recording.types, recording.positions)
    found = calibrate(recording, frame, asked=True)
    assert found.responses[2].verdict == "cannot tell"
    assert found.faults == ()


def test_announced_tasks_go_before_the_search():
    recording = dataclasses.replace(referential(answered(), RATE), annotations=(BLINKS,))
    frame = build_frame(recording.labels, recording.types, recording.positions)
    assert [r.task for r in calibrate(recording, frame, asked=True).responses] == ["blink"]


def test_only_the_stretches_around_the_tasks_are_read():
    asked = []
    recording = dataclasses.replace(referential(answered(), RATE), annotations=(BLINKS,))
    read = recording._read

    def spied(start, stop):
        asked.append((start / RATE, stop / RATE))
        return read(start, stop)

    recording = dataclasses.replace(recording, _read=spied)
    calibrate(
        recording, build_frame(recording.labels, recording.types, recording.positions)
    )
    ((start, stop),) = asked
    assert 3.9 <= start <= 10.0
    assert 25.0 <= stop <= 26.1


# Privacy and contract


@settings(max_examples=15, deadline=None)
@given(st.text(alphabet="BCDGHJKQVXZ", min_size=5, max_size=12))
def test_no_text_of_an_annotation_reaches_an_output(secret):
    texts = [(onset, length, f"{text} {secret}") for onset, length, text in EVERYTHING]
    for data in (answered(), without(answered(), "Fp1")):
        found = judged(data, *texts)
        assert len(found.responses) == 4
        assert secret not in repr(found)
        assert "clench jaw" not in repr(found)


def test_words_of_outputs_are_those_of_the_contract():
    cases = (without(answered(), "F7"), exchanged(answered(), "F7", "F8"), 0 * answered())
    for data in cases:
        found = judged(data + ten_twenty(SECONDS, RATE, rms_uv=0.1), *EVERYTHING)
        assert {response.verdict for response in found.responses} <= set(VERDICTS)
        assert {fault.cause for fault in found.faults} <= set(CAUSES)
        assert {fault.sign for fault in found.faults} <= {"no response", "mirrored"} & set(
            SIGNS
        )
        assert all(fault.checks for fault in found.faults)


def test_live_the_same_tasks_give_the_same_verdicts_on_another_clock():
    recording = referential(answered(), RATE)
    frame = build_frame(recording.labels, recording.types, recording.positions)
    sites = frame.matrix() @ recording.read(0, N)[frame.channels]
    tasks = [
        Task("blink", 1010.0, 8.0), Task("gaze right", 1020.0, 5.0),
        Task("gaze left", 1026.0, 5.0), Task("jaw", 1032.0, 4.0),
    ]  # fmt: skip
    found = respond(sites, RATE, frame, tasks, start=1000.0)
    assert verdicts(found) == ["as expected"] * 4
    assert found.responses[0].onset == 1010.0


def test_live_rows_must_fit_the_frame():
    recording = referential(answered(), RATE)
    frame = build_frame(recording.labels, recording.types, recording.positions)
    with pytest.raises(SitesError, match="20 sites"):
        respond(np.zeros((19, 100)), RATE, frame, [])


@pytest.mark.parametrize("rate", [128.0, 500.0, 1000.0])
def test_the_sampling_rate_changes_no_verdict(rate):
    from scipy.signal import resample_poly

    data = resample_poly(answered(), int(rate), int(RATE), axis=1)
    recording = dataclasses.replace(referential(data, rate), annotations=EVERYTHING)
    frame = build_frame(recording.labels, recording.types, recording.positions)
    assert verdicts(calibrate(recording, frame)) == ["as expected"] * 4


@pytest.mark.corpora
@pytest.mark.parametrize("name", ["Subject12_2.edf", "Subject13_2.edf"])
def test_recordings_without_calibration_blame_no_lead(corpora, name):
    recording = open_recording(corpora / "eegmat" / name)
    frame = build_frame(recording.labels, recording.types, recording.positions)
    assert calibrate(recording, frame).responses == ()
    found = calibrate(recording, frame, asked=True)
    assert len(found.responses) == 3
    assert found.faults == ()
