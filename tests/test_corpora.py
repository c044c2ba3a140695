"""Readers of labelled corpora: formats, the rule from derivations to sites, people."""

import itertools
import math

import edfio
import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from signals import noise

from artifactlens.errors import LabelsError, RecordingError
from artifactlens.kinds import KIND_NAMES
from artifactlens.pipeline import measure_recording
from artifactlens.recording import Filters, Segment, from_array, open_recording
from artifactlens.training.corpora import (
    absence,
    bids_folder,
    eegmat,
    eegmmidb,
    gestures,
    labelled,
    page_readings,
    sample_60eeg,
    spans,
    tuh_artifacts,
    tuh_events,
)
from artifactlens.training.corpora.derivations import TCP_MONTAGE, clean_elsewhere, pairs_of
from artifactlens.training.corpora.labelled import Label, LabelledRecording
from artifactlens.training.corpora.readers import READERS
from artifactlens.training.corpora.truth import (
    cover,
    examples_of,
    judged_kinds,
    seconds_of,
    truth_of,
)
from artifactlens.training.examples import CLEAN, PRESENT, UNKNOWN

EYE, MUSCLE, POP, MAINS = (KIND_NAMES.index(kind) for kind in KIND_NAMES)

TUH_SITES = ["FP1", "FP2", "F3", "F4", "C3", "C4", "P3", "P4", "O1", "O2", "F7", "F8", "T3",
             "T4", "T5", "T6", "A1", "A2", "FZ", "CZ", "PZ"]  # fmt: skip
TUH_LABELS = [f"EEG {site}-REF" for site in TUH_SITES]

PATIENT = "MCH-0234567 F 02-MAY-1951 Haagse_Harry"
"""The patient field of the EDF+ specification's own example."""


def measured_noise(labels, seconds=6, sfreq=128.0, **options):
    data = noise(len(labels), int(seconds * sfreq), sfreq)
    return measure_recording(from_array(data, sfreq, labels, **options))


@pytest.fixture(scope="module")
def referential():
    return measured_noise(TUH_LABELS)


def told(labels, measured, kind="muscle", montage=TCP_MONTAGE):
    """Per second: sites present, and sites clean, as the recording spells them."""
    truth = truth_of(labels, measured, montage)[KIND_NAMES.index(kind)]
    sites = np.array(measured.frame.sites)
    return [(set(sites[row == PRESENT]), set(sites[row == CLEAN])) for row in truth]


def marks(*channels, onset=1.0, end=2.0, kind="muscle", state="present"):
    return [Label(kind, onset, end, (channel,), state) for channel in channels]


# From labels to seconds ------------------------------------------------------------------


@pytest.mark.parametrize(
    ("onset", "end", "held"),
    [
        (1.0, 2.0, [1]),
        (1.0, 1.0 + 1 / 3, [1]),
        (1.5, 2.32, [1]),  # 0.5 and 0.32 s: the second is too little
        (1.5, 2.34, [1, 2]),
        (1.0, 1.1, [1]),  # shorter than a third, but all of it is here
        (1.8, 2.1, [1]),  # 0.2 and 0.1 s: where its middle is
        (1.7, 3.4, [2, 3]),
        (-9.0, 0.4, [0]),
        (5.9, 60.0, []),
        (7.0, 8.0, []),
        (0.0, math.inf, [0, 1, 2, 3, 4, 5]),
    ],
)
def test_a_second_is_present_from_a_third_or_with_the_middle_of_a_label(onset, end, held):
    lies = cover([Label("eye", onset, end, (), "present")], np.arange(6.0))
    assert np.flatnonzero(lies.held).tolist() == held


def test_labels_that_overlap_count_once():
    twice = [Label("eye", 1.0, 1.3, (), "present")] * 2  # 0.3 s, not 0.6 s
    rest = [Label("eye", 3.0, 3.6, (), "clean"), Label("eye", 3.4, 4.0, (), "clean")]
    share = cover([*twice, *rest], np.arange(6.0))
    assert np.flatnonzero(share.whole).tolist() == [3]
    assert np.flatnonzero(share.touched).tolist() == [1, 3]
    assert cover(twice, np.array([0.95])).held.tolist() == [True]  # its middle
    assert cover(twice, np.array([1.2])).held.tolist() == [False]  # 0.1 s of it


@given(
    st.lists(st.tuples(st.integers(-30, 90), st.integers(0, 40)), max_size=12),
)
def test_cover_is_what_counting_tenths_gives(spans):
    labels = [Label("eye", a / 10, (a + n) / 10, (), "present") for a, n in spans]
    tenths = np.zeros((6, 10), bool)
    for a, n in spans:
        inside = np.arange(max(a, 0), min(a + n, 60))
        tenths.ravel()[inside[inside >= 0]] = True
    counted = tenths.sum(axis=1)
    middles = {math.floor((2 * a + n) / 20) for a, n in spans}
    lies = cover(labels, np.arange(6.0))
    assert lies.whole.tolist() == (counted == 10).tolist()
    held = [count >= 4 or second in middles for second, count in enumerate(counted)]
    assert lies.held.tolist() == held
    assert lies.touched.tolist() == [h or c > 0 for h, c in zip(held, counted, strict=True)]


def test_present_overrules_clean_and_unknown_overrules_present(referential):
    labels = [
        Label("muscle", 0.0, 4.5, (), "clean"),
        Label("muscle", 1.0, 1.5, ("T3",), "present"),
        Label("muscle", 1.9, 2.1, ("F7",), "present"),  # middle in second 2, touches 1
        Label("muscle", 3.2, 3.3, ("O1",), "unknown"),
    ]
    scalp = {site for site in TUH_SITES if site not in ("A1", "A2")}
    assert told(labels, referential) == [
        (set(), scalp),
        ({"T3"}, scalp - {"T3", "F7"}),
        ({"F7"}, scalp - {"F7"}),
        (set(), scalp - {"O1"}),
        (set(), set()),  # half a second of clean is no clean second
        (set(), set()),
    ]


def test_kinds_that_no_label_names_are_unknown(referential):
    labels = [Label("eye", 0, 6, (), "clean"), Label("brain", 0, 6, (), "present", "spsw")]
    truth = truth_of(labels, referential)
    assert (truth[[MUSCLE, POP, MAINS]] == UNKNOWN).all()
    assert (truth[EYE, :, :19] == CLEAN).any()


def test_a_reference_has_no_truth(referential):
    (reference,) = np.flatnonzero(np.array(referential.frame.roles) == "reference")
    truth = truth_of([Label("eye", 0, 6, (), "clean")], referential)
    assert (truth[:, :, reference] == UNKNOWN).all()


def test_seconds_follow_the_gaps_of_a_recording():
    segments = [Segment(0, 256, 0.0), Segment(256, 256, 10.5)]
    measured = measured_noise(TUH_LABELS, 4, segments=segments)
    labels = marks("T3", onset=11.5, end=12.5)
    assert [present for present, _ in told(labels, measured)] == [set()] * 3 + [{"T3"}]


def test_a_site_that_the_recording_cannot_have_is_told(referential):
    with pytest.raises(LabelsError, match=r"Fp11.*as the recording does"):
        truth_of(marks("Fp11"), referential)
    truth = truth_of(marks("FT9"), referential)  # a site, but none of this recording
    assert (truth == UNKNOWN).all()


def test_channels_without_10_20_names_are_found_by_their_label():
    measured = measured_noise(["EEG 001", "EEG 002", "EEG 003"])
    truth = truth_of(marks("EEG 002"), measured)[MUSCLE, 1]
    assert truth.tolist().count(PRESENT) == 1
    assert truth[1] == PRESENT


def test_a_flag_touches_a_second_by_a_tenth_and_not_by_less():
    onset = np.arange(4.0)
    begin, end = np.array([0.95, 1.9]), np.array([2.05, 3.1])
    found = spans.touched(begin, end, onset)
    assert found.tolist() == [[False, True, False, False], [False, True, True, True]]


def test_an_interval_shorter_than_a_tenth_touches_its_own_second_only():
    found = spans.touched(np.array([1.97]), np.array([2.0]), np.arange(4.0))
    assert found.tolist() == [[False, True, False, False]]
    assert spans.touched(np.zeros(0), np.zeros(0), np.arange(4.0)).shape == (0, 4)


def test_a_second_lies_in_a_window_by_its_middle():
    inside = spans.within([(0.4, 1.5), (3.0, 3.6)], np.arange(5.0))
    assert inside.tolist() == [True, False, False, True, False]
    assert not spans.within([], np.arange(5.0)).any()


@given(st.lists(st.booleans(), max_size=20).map(lambda bits: np.array(bits, dtype=bool)))
def test_runs_hold_what_a_mask_holds_and_do_not_meet(mask):
    found = spans.runs(mask)
    places = [place for start, stop in found for place in range(start, stop)]
    assert places == np.flatnonzero(mask).tolist()
    assert all(stop < after for (_, stop), (after, _) in itertools.pairwise(found))


# From derivations to sites ---------------------------------------------------------------


@pytest.mark.parametrize(
    ("channels", "present"),
    [
        (["A1-T3"], {"A1"}),  # end of a chain: T3 shows nothing in T3-T5
        (["FP1-F7"], set()),  # both have another derivation without it
        (["FP1-F7", "F7-T3"], {"F7"}),
        (["F7-FP1", "T3-F7"], {"F7"}),  # whichever end is written first
        (["FP1-F7", "FP1-F3", "FP2-F8", "FP2-F4"], {"FP1", "FP2"}),  # a blink
        (["FP1-F7", "F7-T3", "T3-T5"], {"F7", "T3"}),
        (["T5-O1", "P3-O1"], {"O1"}),
        (["F7-T3", "T3-T5", "T3-C3", "A1-T3"], {"T3"}),
    ],
)
def test_a_site_is_present_that_two_derivations_share_or_that_ends_a_chain(
    referential, channels, present
):
    assert told(marks(*channels), referential)[1] == (present, set())


def test_a_lone_chain_names_its_first_site():
    labels = ["Fp1-F7", "F7-T3", "T3-T5", "T5-O1"]
    measured = measured_noise(labels)
    assert told(marks("Fp1-F7"), measured, montage=())[1] == ({"Fp1"}, set())
    assert told(marks("F7-T3"), measured, montage=())[1] == (set(), set())
    assert told(marks("T3-T5", "T5-O1"), measured, montage=())[1] == ({"T5"}, set())


def test_derivations_of_two_kinds_do_not_add_up(referential):
    labels = [*marks("FP1-F7"), *marks("F7-T3", kind="eye")]
    assert told(labels, referential)[1] == (set(), set())


def test_derivations_at_two_times_do_not_add_up(referential):
    labels = [*marks("FP1-F7"), *marks("F7-T3", onset=3, end=4)]
    assert told(labels, referential) == [(set(), set())] * 6


def test_a_derivation_with_too_little_of_the_label_does_not_free_its_sites(referential):
    labels = [*marks("A1-T3"), *marks(*_at("T3"), onset=1.7, end=2.8)]
    # In second 1 every other derivation of T3 holds 0.3 s: A1-T3 cannot be told apart.
    assert told(labels, referential)[1] == (set(), set())


def _at(site):
    return [name for name in TCP_MONTAGE if site in name.split("-") and name != "A1-T3"]


def test_undecided_ends_are_not_clean(referential):
    labels = [Label("muscle", 0, 6, (), "clean"), *marks("FP1-F7")]
    present, clean = told(labels, referential)[1]
    assert present == set()
    assert {"FP1", "F7"} & clean == set()
    assert {"O1", "T4"} <= clean


def test_clean_derivations_make_a_site_clean_if_all_of_it_are(referential):
    labels = marks("FP1-F7", "FP1-F3", "F7-T3", state="clean")
    assert told(labels, referential)[1] == (set(), {"FP1", "F7"})


@settings(deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(source=st.sampled_from(sorted({n for p in pairs_of(TCP_MONTAGE) for n in p})))
def test_what_one_electrode_does_is_called_at_this_electrode_alone(referential, source):
    channels = [f"{a}-{b}" for a, b in pairs_of(TCP_MONTAGE) if source in (a, b)]
    truth = truth_of(marks(*channels), referential, TCP_MONTAGE)[MUSCLE, 1]
    found = np.flatnonzero(truth == PRESENT)
    assert [referential.frame.canonical[row] for row in found] == [source]


def test_sites_far_from_all_labels_are_clean_while_these_last(referential):
    labels = marks("FP1-F7", "F7-T3", onset=1.0, end=3.5)
    beside = clean_elsewhere(labels, TCP_MONTAGE)
    assert {(label.onset, label.end) for label in beside} == {(1.0, 3.5)}
    seconds = told([*labels, *beside], referential)
    # Touched are FP1, F7 and T3; F3, C3, T5, A1 and FP2 are neighbours of one of them.
    assert seconds[1] == seconds[2]
    present, clean = seconds[1]
    assert present == {"F7"}
    assert clean == {"P3", "O1", "O2", "P4", "C4", "F8", "T4", "T6", "F4", "CZ", "A2"}
    assert seconds[3] == ({"F7"}, set())  # half a second
    assert seconds[0] == seconds[4] == (set(), set())  # unlabelled is not clean


def test_nothing_is_clean_beside_a_label_on_all_derivations(referential):
    term = Label("muscle", 2.0, 3.0, (), "present")
    labels = [*marks("FP1-F7", "F7-T3", onset=1.0, end=4.0), term]
    beside = clean_elsewhere(labels, TCP_MONTAGE)
    assert {(label.onset, label.end) for label in beside} == {(1.0, 2.0), (3.0, 4.0)}
    seconds = told([*labels, *beside], referential)
    assert [bool(clean) for _, clean in seconds] == [False, True, False, True, False, False]
    assert seconds[2] == ({"F7"}, set())


def test_a_label_on_all_derivations_is_of_the_second_and_of_no_site(referential):
    labels = [
        Label("eye", 0.0, 6.0, (), "clean"),
        Label("eye", 1.0, 2.4, (), "present"),
        Label("eye", 4.1, 4.2, (), "unknown"),
    ]
    seconds = told(labels, referential, "eye")
    assert [bool(clean) for _, clean in seconds] == [True, False, False, True, False, True]
    assert not any(present for present, _ in seconds)
    by_second = [CLEAN, PRESENT, PRESENT, CLEAN, UNKNOWN, CLEAN]
    assert seconds_of(labels, "eye", 6).tolist() == by_second
    assert seconds_of(labels, "muscle", 2).tolist() == [UNKNOWN, UNKNOWN]
    late = seconds_of(labels, "eye", 2, np.array([0.5, 3.0]))
    assert late.tolist() == [PRESENT, CLEAN]


def test_short_labels_at_several_sites_do_not_make_a_second():
    labels = [
        Label("pop", 0.8 + 0.1 * k, 1.2 + 0.1 * k, (site,), "present")
        for k, site in enumerate(("F7", "F8"))  # 0.2 and 0.3 s of second 1, middle 1.0, 1.1
    ]
    early = [
        Label("pop", 0.2, 1.2, ("F7",), "present"),
        Label("pop", 0.3, 1.3, ("F8",), "present"),
    ]
    assert seconds_of(labels, "pop", 3).tolist() == [UNKNOWN, PRESENT, UNKNOWN]
    assert seconds_of(early, "pop", 3).tolist() == [PRESENT, UNKNOWN, UNKNOWN]


def test_examples_carry_person_origin_and_the_pattern_of_the_second():
    data = noise(4, 6 * 128, 128.0)
    recording = from_array(data, 128.0, ["Fp1", "Fp2", "C3", "O1"])
    given_labels = (
        Label("eye", 1.0, 2.0, ("Fp1",), "present"),
        Label("brain", 3.0, 4.0, (), "present", "spsw"),
        Label("brain", 5.0, 6.0, (), "unknown", "doubt"),
    )
    found = examples_of(
        LabelledRecording("c", "c-1", "r", lambda: recording, given_labels, 50.0)
    )
    assert set(found.person) == {"c-1"}
    assert set(found.origin) == {"real: c"}
    assert set(found.second[found.look_alike == "spsw"]) == {3}
    assert set(found.look_alike) == {"", "spsw"}
    assert found.second[found.truth[:, EYE] == PRESENT].tolist() == [1]
    assert np.isnan(found.strength).all()


def test_what_the_recording_does_not_let_one_judge_is_unknown():
    kept = [Filters(None, 20.0, None)] * 4  # nothing of muscle is left below 20 Hz
    recording = from_array(
        noise(4, 6 * 128, 128.0), 128.0, ["Fp1", "Fp2", "C3", "O1"], filters=kept
    )
    labels = tuple(
        Label(kind, *span, ("Fp1",), state)
        for kind in ("eye", "muscle")
        for *span, state in ((0.0, 2.0, "present"), (3.0, 6.0, "clean"))
    )
    one = LabelledRecording("c", "c-1", "r", lambda: recording, labels, 50.0)
    found = examples_of(one)
    assert set(found.truth[:, EYE]) == {PRESENT, CLEAN, UNKNOWN}
    assert (found.truth[:, MUSCLE] == UNKNOWN).all()
    judged = judged_kinds(measure_recording(recording, line_frequency=50.0))
    assert (judged[EYE], judged[MUSCLE]) == (True, False)


# The corpora of Temple University Hospital -----------------------------------------------

HEADER = """\
# version = csv_v1.0.0
# bname = aaaaaaju_s005_t000
# duration = 10.00 secs
# montage_file = montage.txt
#
channel,start_time,stop_time,label,confidence
"""


def write_edf(path, labels=TUH_LABELS, seconds=8, sfreq=128, patient=PATIENT):
    path.parent.mkdir(parents=True, exist_ok=True)
    data = noise(len(labels), seconds * sfreq, float(sfreq))
    signals = [
        edfio.EdfSignal(row, sfreq, label=label, physical_dimension="uV")
        for row, label in zip(data, labels, strict=True)
    ]
    code, sex, _, name = patient.split()
    edf = edfio.Edf(signals, patient=edfio.Patient(code=code, sex=sex, name=name))
    edf.write(path)
    return path


def tuar(folder, rows, stem="aaaaaaju_s005_t000", inside="edf/01_tcp_ar"):
    path = write_edf(folder / inside / f"{stem}.edf")
    path.with_suffix(".csv").write_text(HEADER + rows, encoding="utf-8")
    return path


def test_tuh_artifacts_are_read_with_their_joined_words(tmp_path):
    rows = """\
FP1-F7,1.0000,3.0000,eyem_musc,1.0000
F7-T3,1.0000,3.0000,musc,0.9000
T5-O1,4.0000,5.0000,musc_elec,1.0000
P3-O1,4.0000,5.0000,elpp,1.0000
TERM,6.0000,7.0000,chew,1.0000
C3-P3,7.0000,8.0000,null,1.0000
C3-P3,7.0000,8.0000,bckg,1.0000
C3-P3,7.0000,8.0000,fnsz,1.0000
"""
    tuar(tmp_path, rows)
    write_edf(tmp_path / "edf" / "aaaaaaju_s006_t000.edf")  # no CSV
    (found,) = READERS["tuh_artifacts"](tmp_path)
    assert tuh_artifacts.unlabelled(tmp_path) == ["aaaaaaju_s006_t000.edf"]
    assert (found.person, found.name) == ("tuh-aaaaaaju", "aaaaaaju_s005_t000")
    assert [label for label in found.labels if label.state == "present"] == [
        Label("eye", 1.0, 3.0, ("FP1-F7",), "present", "eyem_musc"),
        Label("muscle", 1.0, 3.0, ("FP1-F7",), "present", "eyem_musc"),
        Label("muscle", 1.0, 3.0, ("F7-T3",), "present", "musc"),
        Label("muscle", 4.0, 5.0, ("T5-O1",), "present", "musc_elec"),
        Label("pop", 4.0, 5.0, ("T5-O1",), "present", "musc_elec"),
        Label("pop", 4.0, 5.0, ("P3-O1",), "present", "elpp"),
        Label("muscle", 6.0, 7.0, (), "present", "chew"),
        Label("other", 7.0, 8.0, ("C3-P3",), "present", "fnsz"),
    ]
    measured = measure_recording(found.open(), line_frequency=found.line_frequency)
    assert [present for present, _ in told(found.labels, measured)] == [
        set(), {"F7"}, {"F7"}, set(), set(), set(), set(), set(),
    ]  # fmt: skip
    pops = told(found.labels, measured, "pop")
    assert pops[4][0] == {"O1"}
    assert "FP2" in pops[4][1]
    assert seconds_of(found.labels, "muscle", 8).tolist() == [-1, 1, 1, -1, 1, -1, 1, -1]
    assert (examples_of(found).truth[:, MAINS] == UNKNOWN).all()


def test_a_montage_without_ears_makes_no_ear_clean(tmp_path):
    for stem, inside in (
        ("aaaaaaaa_s001_t000", "01_tcp_ar"),
        ("aaaaaaab_s001_t000", "03_tcp_ar_a"),
    ):
        tuar(tmp_path, "FP1-F7,1,3,musc,1\n", stem, inside)
    with_ears, without = READERS["tuh_artifacts"](tmp_path)
    clean = [{site for label in each.labels if label.state == "clean" for site in label.channels}
             for each in (with_ears, without)]  # fmt: skip
    assert clean[0] - clean[1] == {"A2"}
    assert set(with_ears.montage) - set(without.montage) == {"A1-T3", "T4-A2"}


@pytest.mark.parametrize(
    ("row", "told_of"),
    [
        ("FP1-F7,1.0,2.0", r"line 7: 5 cells are needed; given were 3"),
        ("FP1-F7,one,2.0,musc,1", r"line 7: start_time needs seconds .*'one'"),
        ("FP1-F7,1.0,nan,musc,1", r"line 7: stop_time needs seconds .*'nan'"),
        ("FP1-F7,-1.0,2.0,musc,1", r"line 7: start_time needs seconds .*'-1.0'"),
        ("FP1-F7,3.0,2.0,musc,1", r"line 7: a label needs to end after its start"),
        (
            "FP1,1.0,2.0,musc,1",
            r"line 7: channel needs a derivation such as FP1-F7, or TERM",
        ),
    ],
)
def test_a_malformed_tuh_artifact_row_is_told_with_its_line(tmp_path, row, told_of):
    tuar(tmp_path, f"{row}\n")
    with pytest.raises(LabelsError, match=rf"aaaaaaju_s005_t000\.csv, {told_of}") as raised:
        READERS["tuh_artifacts"](tmp_path)
    assert raised.value.remedy
    assert "Haagse" not in str(raised.value)


@pytest.mark.parametrize(
    ("text", "told_of"),
    [("", "it has none"), ("# version = csv_v1.0.0\n", "it has none"),
     ("a,b\n", r"line 1: .*missing are channel, start_time, stop_time, label")],
)  # fmt: skip
def test_a_csv_without_its_header_row_is_told(text, told_of):
    with pytest.raises(LabelsError, match=told_of):
        tuh_artifacts.parse(text, "x.csv")


CENTIS = st.integers(0, 10**6).map(lambda n: n / 100)
SPANS = st.tuples(CENTIS, CENTIS).map(sorted)


@given(
    st.lists(
        st.builds(
            lambda channel, span, label: tuh_artifacts.Annotation(channel, *span, label),
            st.sampled_from([*TCP_MONTAGE, "TERM"]),
            SPANS,
            st.lists(
                st.sampled_from([*tuh_artifacts.KIND_OF, "null", "seiz"]),
                min_size=1,
                max_size=3,
            ).map("_".join),
        )
    ),
    st.sampled_from(["\n", "\r\n"]),
)
def test_any_tuh_artifact_rows_are_read_as_written(rows, line_end):
    text = HEADER + "".join(
        f"{row.channel},{row.start:.4f},{row.stop:.4f},{row.label},1.0000\n" for row in rows
    )
    assert tuh_artifacts.parse(text.replace("\n", line_end), "x.csv") == rows


@given(st.text(max_size=80))
def test_any_text_is_read_or_refused_with_a_remedy(text):
    for parse in (tuh_artifacts.parse, tuh_events.parse, bids_folder.parse):
        try:
            parse(text, "x")
        except LabelsError as error:
            assert error.remedy  # noqa: PT017 - the other outcome is fine too


def test_people_of_tuh_artifacts_are_told_by_the_file_name(tmp_path):
    tuar(tmp_path, "", "somebody")
    with pytest.raises(LabelsError, match=r"somebody\.edf needs to start like aaaaaaju"):
        READERS["tuh_artifacts"](tmp_path)


def test_tuh_events_are_read_with_their_places_in_the_montage(tmp_path):
    stem = tmp_path / "train" / "aaaaaaar" / "aaaaaaar_00000001"
    write_edf(stem.with_suffix(".edf"))
    rows = "0,1.0,2.0,4\n1,1.0,2.0,4\n21,2.5,3.5,1\n8,4,5,3\n8,5,6,2\n8,6,7,5\n8,7,8,6\n"
    stem.with_suffix(".rec").write_text(rows, encoding="utf-8")
    other = tmp_path / "eval" / "032" / "bckg_032_a_"
    write_edf(other.with_suffix(".edf"))
    other.with_suffix(".rec").write_text("0,1,2,6\n", encoding="utf-8")
    anonymous, found = READERS["tuh_events"](tmp_path)
    assert found.labels == (
        Label("eye", 1.0, 2.0, ("FP1-F7",), "present", "eyem"),
        Label("eye", 1.0, 2.0, ("F7-T3",), "present", "eyem"),
        Label("brain", 2.5, 3.5, ("P4-O2",), "present", "spsw"),
        Label("brain", 4.0, 5.0, ("A1-T3",), "present", "pled"),
        Label("brain", 5.0, 6.0, ("A1-T3",), "present", "gped"),
        Label("other", 6.0, 7.0, ("A1-T3",), "present", "artf"),
        Label("other", 7.0, 8.0, ("A1-T3",), "present", "bckg"),
    )
    assert (found.person, anonymous.person) == ("tuh-aaaaaaar", "tuh-events-032")
    measured = measure_recording(found.open())
    truth = truth_of(found.labels, measured, found.montage)
    assert not (truth == CLEAN).any()
    assert told(found.labels, measured, "eye")[1] == ({"F7"}, set())
    assert (truth[MUSCLE:] == UNKNOWN).all()


@pytest.mark.parametrize(
    ("row", "told_of"),
    [
        ("0,1,2", "channel,start,stop,code are needed; given were 3 cells"),
        ("22,1,2,6", "channel needs a whole number from 0 to 21; given was '22'"),
        ("1.5,1,2,6", "channel needs a whole number"),
        ("0,1,2,7", "code needs a whole number from 1 to 6"),
        ("0,x,2,6", "start needs seconds"),
        ("0,3,2,6", "to end after its start"),
    ],
)
def test_a_malformed_event_is_told_with_its_line(row, told_of):
    with pytest.raises(LabelsError, match=rf"x\.rec, line 2: .*{told_of}") as raised:
        tuh_events.parse(f"0,1,2,6\n{row}\n", "x.rec")
    assert raised.value.remedy


@given(
    st.lists(
        st.builds(
            lambda channel, span, code: tuh_events.Event(channel, *span, code),
            st.integers(0, 21),
            SPANS,
            st.integers(1, 6),
        )
    )
)
def test_any_events_are_read_as_written(events):
    text = "".join(f"{e.channel},{e.start:.2f},{e.stop:.2f},{e.code}\n" for e in events)
    assert tuh_events.parse(text, "x.rec") == events


@pytest.mark.parametrize("corpus", ["tuh_artifacts", "tuh_events", "bids"])
def test_a_folder_without_labels_is_refused(tmp_path, corpus):
    path = write_edf(tmp_path / "sub-01" / "eeg" / "sub-01_task-rest_eeg.edf")
    with pytest.raises(LabelsError, match=rf"1 recordings without \({path.name}"):
        READERS[corpus](tmp_path)


@pytest.mark.parametrize("corpus", READERS)
def test_an_absent_folder_is_named_by_every_reader(tmp_path, corpus):
    with pytest.raises(RecordingError, match=corpus):
        READERS[corpus](tmp_path / "none")


# A user's own recordings -----------------------------------------------------------------

EVENTS = """\
onset\tduration\ttrial_type\tchannel
0.5\t0.4\teye\tFp1|Fp2
1.0\t1.0\tmuscle\tFP1-F7|F7-T3
2.0\t1.0\tpop\tn/a
3\t2\tclean_mains\tn/a
5\t1\tclean\tO1
6\t1\tstimulus\t
n/a\tn/a\tresponse\tbutton
6.5\t0\tstimulus\tn/a
"""


def own(folder, events=EVENTS, name="sub-01/eeg/sub-01_task-rest"):
    path = write_edf(folder / f"{name}_eeg.edf")
    path.with_name(f"{path.stem.removesuffix('_eeg')}_events.tsv").write_text(
        events, encoding="utf-8"
    )
    return path


def test_own_recordings_are_read_with_their_events(tmp_path):
    home = tmp_path / "sleep-lab"
    own(home)
    own(home, EVENTS, "sub-02/ses-a/eeg/sub-02_ses-a_task-rest")
    write_edf(home / "sub-03" / "eeg" / "sub-03_task-rest_eeg.edf")
    (home / "sub-01" / "eeg" / "sub-01_task-rest_eeg.json").write_text(
        "{}", encoding="utf-8"
    )
    first, second = READERS["bids"](home)
    assert bids_folder.unlabelled(home) == ["sub-03_task-rest_eeg.edf"]
    assert (first.person, second.person) == ("sleep-lab-sub-01", "sleep-lab-sub-02")
    assert first.labels == second.labels
    assert first.labels[:4] == (
        Label("eye", 0.5, 0.9, ("Fp1", "Fp2"), "present", "eye"),
        Label("muscle", 1.0, 2.0, ("FP1-F7", "F7-T3"), "present", "muscle"),
        Label("pop", 2.0, 3.0, (), "present", "pop"),
        Label("mains", 3.0, 5.0, (), "clean", "clean_mains"),
    )
    assert first.labels[4:] == tuple(
        Label(kind, 5.0, 6.0, ("O1",), "clean", "clean") for kind in KIND_NAMES
    )
    assert [note.split(" in ")[0] for note in first.notes] == [
        "1 rows of trial_type 'response'",
        "2 rows of trial_type 'stimulus'",
    ]
    measured = measure_recording(first.open())
    assert told(first.labels, measured, "eye", ())[0] == ({"FP1", "FP2"}, set())
    assert told(first.labels, measured, "muscle", ())[1] == ({"F7"}, set())
    assert told(first.labels, measured, "pop", ())[5] == (set(), {"O1"})
    assert seconds_of(first.labels, "pop", 3).tolist() == [UNKNOWN, UNKNOWN, PRESENT]


@pytest.mark.parametrize(
    ("row", "told_of"),
    [
        ("n/a\t1\teye\tFp1", "onset needs seconds from the start of the recording"),
        ("-1\t1\teye\tFp1", "onset needs seconds"),
        ("1\tn/a\teye\tFp1", "duration needs seconds"),
        ("1\t0\teye\tFp1", "a label needs a duration above 0 s"),
        ("1\t1\teye", "4 cells are needed; given were 3"),
        ("1\t1\teye\tFp1||F7", "no letters"),
        (
            "1\t1\teye\tFp1-Fq7",
            "sites or derivations of the 10-20 system; given was 'Fp1-Fq7'",
        ),
    ],
)
def test_a_bad_event_row_is_told_with_file_and_line(tmp_path, row, told_of):
    own(tmp_path, f"onset\tduration\ttrial_type\tchannel\n1\t1\teye\tn/a\n{row}\n")
    with pytest.raises(
        LabelsError, match=rf"sub-01_task-rest_events\.tsv, line 3: .*{told_of}"
    ) as raised:
        READERS["bids"](tmp_path)
    assert raised.value.remedy


def test_events_without_their_columns_are_told():
    with pytest.raises(LabelsError, match="missing are duration, trial_type"):
        bids_folder.parse("onset\tvalue\n1\t2\n", "x_events.tsv")


@given(
    st.lists(
        st.tuples(
            CENTIS,
            st.integers(1, 10**5).map(lambda n: n / 100),
            st.sampled_from(KIND_NAMES),
            st.sampled_from(["", "clean_"]),
            st.lists(st.sampled_from([*TUH_SITES, *TCP_MONTAGE]), max_size=3),
        )
    ),
    st.text(
        st.characters(exclude_characters="\t\n\r", exclude_categories=["Cs"]), max_size=5
    ),
)
def test_any_events_of_a_user_are_read_as_written(rows, comment):
    text = "onset\tcomment\tduration\ttrial_type\tchannel\n" + "".join(
        f"{onset}\t{comment}\t{duration}\t{clean}{kind}\t{'|'.join(sites) or 'n/a'}\n"
        for onset, duration, kind, clean, sites in rows
    )
    labels, ignored = bids_folder.parse(text, "x_events.tsv")
    assert not ignored
    assert [(x.onset, x.end, x.kind, x.state, x.channels) for x in labels] == [
        (onset, onset + duration, kind, "clean" if clean else "present", tuple(sites))
        for onset, duration, kind, clean, sites in rows
    ]


def test_formats_of_own_recordings_are_those_of_bids_that_can_be_opened():
    assert sorted(bids_folder.SUFFIXES) == [".bdf", ".edf", ".set", ".vhdr"]


def test_no_identity_of_a_header_reaches_person_labels_or_errors(tmp_path):
    tuar(tmp_path / "tuar", "FP1-F7,1,2,musc,1\n")
    own(tmp_path / "own")
    stem = tmp_path / "tuev" / "aaaaaaar_00000001"
    write_edf(stem.with_suffix(".edf"))
    stem.with_suffix(".rec").write_text("0,1,2,4\n", encoding="utf-8")
    for corpus, folder in (
        ("tuh_artifacts", "tuar"),
        ("bids", "own"),
        ("tuh_events", "tuev"),
    ):
        (found,) = READERS[corpus](tmp_path / folder)
        assert b"Haagse_Harry" in found.open().path.read_bytes()[:256]
        written = f"{found} {found.labels} {found.notes} {set(examples_of(found).person)}"
        for secret in ("Haagse", "0234567", "MCH"):
            assert secret not in written
        with pytest.raises(LabelsError) as raised:
            truth_of(marks("Zq9"), measure_recording(found.open()))
        assert "Haagse" not in str(raised.value)


# The corpora at hand, invented -------------------------------------------------------------


def test_recordings_of_eegmat_are_clean_of_all_and_opened_late(tmp_path):
    for name in ("Subject07_1", "Subject07_2", "Subject30_2", "notes"):
        (tmp_path / f"{name}.edf").touch()  # an empty file cannot be opened
    found = READERS["eegmat"](tmp_path)
    assert [one.person for one in found] == ["eegmat-07", "eegmat-07", "eegmat-30"]
    assert {(label.kind, label.state, label.channels) for label in found[0].labels} == {
        (kind, "clean", ()) for kind in KIND_NAMES
    }
    with pytest.raises(RecordingError, match="empty"):
        found[0].open()


READINGS = """\
recording reader kind onset end sites confidence comment
S001R01.edf first page 0.0 8.0 - - -
S001R01.edf second page 0.0 8.0 - - -
S001R01.edf first page 8.0 10.0 - - -
S001R01.edf first eye 1.2 1.6 Fp1|Fp2 sure -
S001R01.edf second eye 1.3 2.1 Fp1 probable -
S001R01.edf first eye 4.0 4.5 Fp1 doubtful -
S001R01.edf second eye 4.0 4.5 Fp1 sure -
S001R01.edf first muscle 5.0 7.0 T3|F7 sure -
S001R01.edf second muscle 6.0 7.0 T3 sure -
S001R01.edf first muscle 3.0 4.0 T3|F7 sure -
S001R01.edf second muscle 3.0 4.0 T3|F7 sure -
S001R01.edf second muscle 3.2 3.4 F7 doubtful -
S001R01.edf first pop 2.0 2.5 O1 sure -
S001R01.edf second pop 2.1 2.6 O1|F7 probable -
S001R01.edf first sway 7.0 7.5 F7 sure -
S001R01.edf second brain 0.0 1.0 O1 sure alpha
S001R01.edf first brain 0.5 1.0 generalized doubtful mu
"""


@pytest.fixture
def read_pages(tmp_path):
    lines = [line.replace(" ", "\t").replace("-", "") for line in READINGS.splitlines()]
    (tmp_path / "readings.tsv").write_text("\n".join(lines) + "\n", encoding="utf-8")
    for number in (1, 2):  # of the second no page was read
        write_edf(
            tmp_path / f"S001R0{number}.edf",
            ["Fp1.", "F7..", "T7..", "O1..", "Af7."],
            10,
            160,
        )
    return tmp_path


def test_pages_are_called_only_where_both_readers_are_sure(read_pages):
    (found,) = READERS["eegmmidb_s001"](read_pages)
    assert (found.person, found.name) == ("eegmmidb-001", "S001R01")
    measured = measure_recording(found.open(), line_frequency=found.line_frequency)
    truth = truth_of(found.labels, measured, found.montage)
    cells = {
        (kind, value): set(map(tuple, np.argwhere(truth[kind] == value).tolist()))
        for kind in (EYE, MUSCLE, POP)
        for value in (CLEAN, PRESENT)
    }  # fmt: skip

    def everywhere(*seconds):
        # No page showed AF7, the last: nothing is known of it.
        return {(second, site) for second in seconds for site in range(4)}

    # Eye: both mark second 1; 2 is marked by one alone, 4 doubted by one; pages end at 8 s.
    assert cells[EYE, PRESENT] == {(1, 0)}
    assert cells[EYE, CLEAN] == everywhere(0, 3, 5, 6, 7)
    # Muscle: both name T7 in 3 and 6; F7 is doubted in 3 by one of them.
    assert cells[MUSCLE, PRESENT] == {(3, 2), (6, 2)}
    assert cells[MUSCLE, CLEAN] == everywhere(0, 1, 2, 4, 7)
    # Pop: a sway in 7 may be one.
    assert cells[POP, PRESENT] == {(2, 3)}
    assert cells[POP, CLEAN] == everywhere(0, 1, 3, 4, 5, 6)
    assert (truth[MAINS] == UNKNOWN).all()
    assert [label for label in found.labels if label.kind == "brain"] == [
        Label("brain", 0.0, 1.0, ("O1",), "present", "alpha"),
        Label("brain", 0.5, 1.0, page_readings.PAGE_SITES, "unknown", "mu"),
    ]


def test_readings_name_sites_of_the_page_by_todays_names(read_pages):
    rows = page_readings.readings(read_pages)["S001R01.edf"]
    assert {row.sites for row in rows if row.kind == "muscle"} == {
        ("F7", "T7"), ("T7",), ("F7",),
    }  # fmt: skip
    assert {row.sites for row in rows if row.kind == "page"} == {()}
    assert rows[-1].sites == page_readings.PAGE_SITES


def test_a_page_shows_the_nineteen_sites_of_the_10_20_system():
    assert len(page_readings.PAGE_SITES) == 19


def test_a_malformed_reading_is_told_with_its_line(read_pages):
    path = read_pages / "readings.tsv"
    lines = path.read_text(encoding="utf-8").splitlines()
    for change in (
        ("first", "third"), ("eye", "eyes"), ("1.2", "x"), ("Fp1", "AF7"), ("sure", "")
    ):  # fmt: skip
        assert change[0] in lines[4]
        path.write_text(
            "\n".join([*lines[:4], lines[4].replace(*change)]), encoding="utf-8"
        )
        with pytest.raises(LabelsError, match=r"readings\.tsv, line 5"):
            page_readings.readings(read_pages)
    path.unlink()
    with pytest.raises(LabelsError, match=r"readings\.tsv"):
        page_readings.readings(read_pages)


SITES_14 = ["AF3", "F7", "F3", "FC5", "T7", "P7", "O1", "O2", "P8", "T8", "FC6", "F4", "F8",
            "AF4"]  # fmt: skip


@pytest.fixture(scope="module")
def faces(tmp_path_factory):
    """Invented chunks: blinks at AF3 and F7, a smile at T7, all else as when neutral.

    When neutral, every site but the posterior ones swings by 5 to 15 uV (60th percentile 11,
    90th 14) and carries 30 Hz of 2 to 4 uV (3.2 and 3.8).
    """
    folder = tmp_path_factory.mktemp("faces")
    rng = np.random.default_rng(5)
    t = np.arange(384)[None, :, None] / 256
    sign = np.tile([1.0, -1.0], 7)  # so that the median over sites is about 0
    stored = {"ch_names": np.array(SITES_14), "sfreq": np.array(256.0)}
    for gesture in gestures.GESTURES:
        n = 40 if gesture == "neutral" else 24
        slow_uv = rng.permuted(np.tile(np.linspace(5, 15, n)[:, None], 14), axis=0)
        fast_uv = rng.permuted(np.tile(np.linspace(2, 4, n)[:, None], 14), axis=0)
        slow_uv[:, 5:9] = 0.0
        if gesture == "hardblink":
            slow_uv[:, :2] = 100.0
            slow_uv[:5, :2] = 6.0  # five chunks in which the blink did not come off
            slow_uv[:, 2] = 20.0  # much for the site, but below 30 uV
            slow_uv[:, 12] = 8.0
        if gesture == "smile":
            fast_uv[:, 4] = 12.0
            fast_uv[:, 9] = 3.5
            fast_uv[:, 0] = 2.5
        stored[gesture] = (
            slow_uv[:, None] / 2 * np.sin(2 * np.pi * 2 * t)
            + sign * fast_uv[:, None] * np.sin(2 * np.pi * 30 * t)
            + 0.1 * rng.standard_normal((n, 384, 14))
        )
    np.savez(folder / gestures.FILE, **stored)
    return folder


def test_a_site_shows_a_gesture_by_all_its_chunks_together(faces):
    states = gestures.site_states(gestures.load(faces))
    blink = dict(zip(SITES_14, states["hardblink", "eye"], strict=True))
    assert {site for site, state in blink.items() if state == "present"} == {"AF3", "F7"}
    assert blink["F3"] == "unknown"
    assert blink["F8"] == "clean"
    smile = dict(zip(SITES_14, states["smile", "muscle"], strict=True))
    assert {site for site, state in smile.items() if state == "present"} == {"T7"}
    assert (smile["T8"], smile["AF3"]) == ("unknown", "clean")
    assert set(states) == {
        (g, kind) for g, kinds in gestures.GESTURES.items() for kind in kinds
    }


def test_every_chunk_of_a_gesture_has_the_same_truth(faces):
    (found,) = READERS["gestures_one_person"](faces)
    chunks = gestures.gesture_chunks(gestures.load(faces))
    by_text = {}
    for label in found.labels:
        key = (label.text, label.kind, label.state, label.channels)
        by_text.setdefault(key, []).append(label.onset)
    for (name, *_), onsets in by_text.items():
        own = np.flatnonzero((chunks.name == name) & ~chunks.is_copy)
        assert onsets == (own * gestures.PACE).tolist()
    kinds = {
        name: {key[1] for key in by_text if key[0] == name} for name in gestures.GESTURES
    }
    assert kinds["tongue"] == set()
    assert kinds["eyebrows"] == kinds["scrunch"] == kinds["smile"] == {"muscle"}
    assert kinds["hardblink"] == {"eye"}
    assert {key[1:] for key in by_text if key[0] == "neutral"} == {
        ("eye", "clean", ()),
        ("muscle", "clean", ()),
    }


def test_each_chunk_is_one_epoch_its_middle_second(faces):
    session = gestures.load(faces)
    recording = gestures.as_recording(session)
    chunks = gestures.gesture_chunks(session)
    assert len(recording.segments) == len(chunks.name) == 8 * 24 + 5 * 40
    number = int(np.flatnonzero(chunks.name == "smile")[3])
    stored = session.chunks["smile"][3]
    start = recording.segments[number].start
    kept = recording.read(start, start + 256)[4]
    assert kept == pytest.approx(stored[64:320, 4] - stored[:, 4].mean(), abs=1e-4)
    assert recording.segments[number].onset == number * gestures.PACE
    copies = np.flatnonzero(chunks.is_copy)
    assert len(copies) == 4 * 40
    assert set(chunks.name[copies]) == {"neutral"}
    (found,) = READERS["gestures_one_person"](faces)
    labelled_epochs = {label.onset / gestures.PACE for label in found.labels}
    assert not labelled_epochs & set(copies.tolist())
    assert set(chunks.block[copies]) == set(
        chunks.block[(chunks.name == "neutral") & ~chunks.is_copy]
    )


def test_blocks_are_cut_where_chunks_do_not_overlap():
    rng = np.random.default_rng(3)
    long = rng.standard_normal((12 * 300 + 384, 2))
    joined = np.stack([long[300 * k : 300 * k + 384] for k in range(12)])
    apart = rng.standard_normal((14, 384, 2))
    blocks = gestures._blocks(np.concatenate([joined, apart])).tolist()
    assert blocks == [0] * 12 + [1] * 14  # 12 overlap; a last block of 4 would be too small
    assert gestures._blocks(apart[:4]).tolist() == [0] * 4
    endless = np.stack([long[30 * k : 30 * k + 384] for k in range(45)])
    assert np.bincount(gestures._blocks(endless)).tolist() == [30, 15]


def test_gestures_that_cannot_be_read_are_told(tmp_path):
    with pytest.raises(LabelsError, match=r"session1\.npz"):
        READERS["gestures_one_person"](tmp_path)
    np.savez(tmp_path / gestures.FILE, sfreq=256.0, ch_names=np.array(SITES_14))
    whole = (tmp_path / gestures.FILE).read_bytes()
    for stored in (whole, whole[:-9], b""):  # no gesture in it; cut off; empty
        (tmp_path / gestures.FILE).write_bytes(stored)
        with pytest.raises(LabelsError, match="hardblink"):
            READERS["gestures_one_person"](tmp_path)


def test_windows_follow_the_notes():
    notes = [
        (39.65, "vertex-waves"),
        (65.0, "R spike"),
        (100.0, "SZ END"),
        (200.0, "HV slowing"),
        (220.0, "SZ START"),
        (224.0, "SZ END"),
        (300.0, "HV END"),
        (310.0, "?"),
        (400.0, "SZ START"),
    ]
    windows = absence.documented_windows(notes)
    assert windows["spike-wave seizures"] == [(220.0, 224.0)]
    assert windows["hyperventilation slowing"] == [(190.0, 300.0)]
    assert windows["vertex waves"] == []
    assert windows["spikes"] == [(60.0, 66.0)]
    assert windows["sleep spindles"] == []


def test_the_first_minute_and_flashes_are_unknown_and_a_seizure_names_its_seconds():
    noted = [
        (39.65, "vertex-waves"),
        (64.0, "spikes"),
        (502.29, "C4"),
        (1057.76, "PHOTO 2Hz"),
        (1348.26, "HV slowing"),
        (1380.51, "SZ START"),
        (1384.25, "SZ END"),
        (1490.63, "HV END"),
    ]
    found = absence.labels_of(noted)
    early = [label for label in found if label.onset == 0]
    assert {label.kind for label in early} == {*KIND_NAMES, "brain"}
    assert {(label.end, label.state) for label in early} == {(60, "unknown")}
    patterns = [(x.text, x.onset, x.end, x.state) for x in found if x.onset > 0]
    assert patterns == [
        ("photic stimulation", 1057.76, 1067.76, "unknown"),
        ("spikes", 60.0, 65.0, "present"),
        ("hyperventilation slowing", 1338.26, 1490.63, "present"),
        ("spike-wave seizures", 1380.51, 1384.25, "present"),
    ]
    assert all(label.kind == "brain" for label in found if label.onset > 0)


def test_notes_are_read_line_by_line(tmp_path):
    path = tmp_path / "notes.tsv"
    path.write_text('onset_s\ttext\n1.5\tL>R  EFD\n2\t"a ""b"""\n', encoding="utf-8")
    assert absence.notes(path) == [(1.5, "L>R EFD"), (2.0, 'a "b"')]
    path.write_text("onset_s\ttext\nlate\tspike\n", encoding="utf-8")
    with pytest.raises(LabelsError, match=r"notes\.tsv, line 2: onset_s"):
        absence.notes(path)
    path.write_text("1.5\tspike\n", encoding="utf-8")
    with pytest.raises(
        LabelsError, match=r"notes\.tsv, line 1: 2 cells are needed, .* onset_s, text"
    ):
        absence.notes(path)


def test_the_eye_channel_alone_tells_the_seconds():
    sfreq = 200.0
    t = np.arange(int(12 * sfreq)) / sfreq
    trace = 40.0 + 15 * np.sin(2 * np.pi * 1.0 * t)
    trace -= 200 * np.exp(-0.5 * ((t - 3.5) / 0.07) ** 2)
    trace += 45 * np.exp(-0.5 * ((t - 7.5) / 0.07) ** 2)  # too small
    ((start, end),) = sample_60eeg.deflections(trace, sfreq)
    # 200 exp(-x^2/2) falls to about 25 at x = 2.04, 0.143 s, give or take the slow wave.
    assert (start, end) == (pytest.approx(3.36, abs=0.03), pytest.approx(3.64, abs=0.03))
    data = np.stack([trace, *noise(2, len(t), sfreq)])
    recording = from_array(data, sfreq, ["EOG", "Cz", "Pz"], types=["eog", "eeg", "eeg"])
    (label,) = sample_60eeg.labels_of(recording)
    assert (label.kind, label.channels, label.state) == ("eye", (), "present")
    assert np.flatnonzero(seconds_of([label], "eye", 12) == PRESENT).tolist() == [3]
    with pytest.raises(LabelsError, match="channel of type EOG"):
        sample_60eeg.labels_of(from_array(data, sfreq, ["Fz", "Cz", "Pz"]))


def test_every_reader_is_in_the_table_by_its_corpus():
    names = {eegmat.CORPUS, eegmmidb.CORPUS, gestures.CORPUS, absence.CORPUS, sample_60eeg.CORPUS,
             tuh_artifacts.CORPUS, tuh_events.CORPUS, bids_folder.CORPUS}  # fmt: skip
    assert names == set(READERS)


def test_labels_that_are_no_text_are_told(tmp_path):
    path = tmp_path / "x.csv"
    path.write_bytes(b"\xff\xfe\x00")
    with pytest.raises(LabelsError, match=r"x\.csv needs to be UTF-8"):
        labelled.read_text(path)


# With the recordings -----------------------------------------------------------------------


def corpus(corpora, name):
    if not (corpora / name).is_dir():
        pytest.skip(f"the corpus {name} is not there")
    return corpora / name


@pytest.mark.corpora
def test_the_sizes_of_the_corpora_are_those_of_their_cards(corpora):
    session = gestures.load(corpus(corpora, "gestures_one_person"))
    chunks = gestures.gesture_chunks(session)
    counts = {
        name: int((chunks.name[~chunks.is_copy] == name).sum())
        for name in gestures.GESTURES
    }
    assert counts == {
        "hardblink": 88, "lookleft": 97, "lookright": 108, "bitelowerlip": 61, "smile": 109,
        "eyebrows": 102, "scrunch": 90, "tongue": 77, "neutral": 127,
    }  # fmt: skip
    rows = page_readings.readings(corpus(corpora, "eegmmidb_s001"))
    pages = [row for own in rows.values() for row in own if row.kind == "page"]
    assert [
        sum(row.reader == reader for row in pages) for reader in page_readings.READERS
    ] == [
        74,
        74,
    ]
    assert len(READERS["eegmmidb_s001"](corpora / "eegmmidb_s001")) == 14
    found = READERS["eegmat"](corpus(corpora, "eegmat"))
    assert (len(found), len({one.person for one in found})) == (48, 36)


@pytest.mark.corpora
def test_the_instruction_reaches_the_sites_where_it_is_expected(corpora):
    session = gestures.load(corpus(corpora, "gestures_one_person"))
    states = gestures.site_states(session)
    at = {key: dict(zip(session.sites, own, strict=True)) for key, own in states.items()}
    assert all(
        at["hardblink", "eye"][site] == "present" for site in ("AF3", "F7", "F8", "AF4")
    )
    assert at["hardblink", "eye"]["O1"] != "present"
    for gesture in ("smile", "bitelowerlip"):
        assert all(at[gesture, "muscle"][site] == "present" for site in ("T7", "T8"))


@pytest.mark.corpora
def test_copies_of_rest_bring_usual_values_near_those_of_rest(corpora, monkeypatch):
    session = gestures.load(corpus(corpora, "gestures_one_person"))
    few = session._replace(chunks={name: own[::12] for name, own in session.chunks.items()})
    rest = few._replace(
        chunks={
            name: own if name == "neutral" else own[:0] for name, own in few.chunks.items()
        }
    )

    def usual(chosen, times):
        monkeypatch.setattr(gestures, "NEUTRAL_TIMES", times)
        recording = gestures.as_recording(chosen)
        return measure_recording(recording, line_frequency=60.0).table.usual[:, :14]

    neutral, once, laid = usual(rest, 1), usual(few, 1), usual(few, 5)
    known = np.isfinite(neutral + once + laid).all(axis=1)
    away = [np.median(np.abs(own - neutral)[known], axis=1) for own in (once, laid)]
    assert known.sum() > 10
    assert (away[1] < away[0]).all()
    assert np.median(away[1] / away[0]) < 0.6


@pytest.mark.corpora
def test_the_witness_tells_four_blinks(corpora):
    (found,) = READERS["sample_60eeg"](corpus(corpora, "sample_60eeg"))
    assert [int(label.onset) for label in found.labels] == [0, 2, 3, 14]
    assert np.flatnonzero(seconds_of(found.labels, "eye", 23) == PRESENT).tolist() == [
        0,
        2,
        3,
        14,
    ]


@pytest.mark.corpora
def test_noted_seizures_hold_the_large_bursts(corpora):
    (found,) = READERS["clinical_absence"](corpus(corpora, "clinical_absence"))
    noted = [label for label in found.labels if label.text == absence.SEIZURES]
    assert len(noted) == 3
    recording = open_recording(corpora / "clinical_absence" / "absence.edf")
    rate = int(recording.sampling_rate)
    row = recording.labels.index("EEG Fz-REF")
    for label in noted:
        start = int(label.onset) - 6
        trace = recording.read(start * rate, (start + 22) * rate)[row].reshape(-1, rate)
        large = start + np.flatnonzero(np.ptp(trace, axis=1) > 400)
        assert len(large) >= 3
        assert label.onset <= large[0] + 1
        assert large[-1] <= label.end
