"""Impedances: tables as people keep them, BIDS, and what a BrainVision header states."""

import math
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from artifactlens.demo import DEMO_SITES
from artifactlens.errors import ImpedanceError
from artifactlens.frames import build_frame
from artifactlens.impedances import (
    impedances_of,
    parse_impedances,
    read_impedances,
    read_table,
)
from artifactlens.recording import from_array, open_recording

SITES = st.sampled_from([*DEMO_SITES, "FT9", "CP5", "A1", "Ref", "Gnd", "E101"])
KOHM = st.floats(0, 999, allow_nan=False).map(lambda value: round(value, 3))
TABLES = st.dictionaries(SITES, KOHM, min_size=1)


def frame_of(*labels):
    return build_frame(labels, [None] * len(labels), None)


WHOLE_HEAD = frame_of(*(f"EEG {site}-REF" for site in DEMO_SITES))


def recording_of(*labels):
    return from_array(np.zeros((len(labels), 300)), 100.0, labels)


# ---------------------------------------------------------------- the table


@pytest.mark.parametrize(
    ("name", "text"),
    [
        ("z.tsv", "Fp1\t4.2\nT3\t11\n"),
        ("z.csv", "Fp1,4.2\nT3,11\n"),
        ("z.csv", "site;impedance\nFp1;4,2\nT3;11\n"),  # a decimal comma
        ("z.csv", '"Fp1","4.2"\r\n"T3","11"\r\n'),
        ("z.txt", "Fp1 4.2\nT3    11"),
        ("z.txt", "Fp1, 4.2\nT3, 11"),
        ("z.txt", "# after capping\n\nFp1 4,2\n\nT3 11\n"),
        ("z.tsv", "site\tkohm\nFp1\t4.2\nT3\t11\n"),
        ("z.tsv", "site\timpedance (k\u03a9)\nFp1\t4.2\nT3\t11\n"),
        ("z.csv", "site,impedance [Ohm]\nFp1,4200\nT3,11e3\n"),
        ("z.csv", "site,\u2126\nFp1,4200\nT3,11000\n"),
        ("z.tsv", "impedance_kohm\tname\n4.2\tFp1\n11\tT3\n"),
        ("sub-1_electrodes.tsv", "name\tx\ty\tz\timpedance\nFp1\t1\t2\t3\t4.2\n"
         "F3\t1\t2\t3\tn/a\nT3\t1\t2\t3\t11\n"),
        ("sub-1_electrodes.txt", "name x y z impedance\nFp1 1 2 3 4.2\nT3 1 2 3 11\n"),
    ],
)  # fmt: skip
def test_a_table_is_read_however_it_is_kept(name, text):
    assert parse_impedances(text, name) == pytest.approx({"Fp1": 4.2, "T3": 11.0})


def test_a_label_may_hold_blanks_where_blanks_stand_between_the_columns():
    assert parse_impedances("EEG T3-REF 4.2\nEEG C3-REF 5\n", "z.txt") == {
        "EEG T3-REF": 4.2, "EEG C3-REF": 5.0,
    }  # fmt: skip


@pytest.mark.parametrize("written", ["open", "OL", "inf", "Inf", "\u221e"])
@pytest.mark.parametrize("others", ["C3\t5", "C3\t>5", "C3\t> 5"])
def test_the_end_of_the_scale_is_its_number_and_an_open_site_has_none(written, others):
    for text in (f"O1\t{written}\n{others}\n", f"{others}\nlead 1\t{written}\n"):
        assert parse_impedances(text, "z.tsv") == {"C3": 5.0}


@pytest.mark.parametrize(
    ("text", "problem", "remedy"),
    [
        ("", "holds no rows", "two columns"),
        ("Fp1\n", "Row 1 of z.tsv needs a site and an impedance; it has 1", "two columns"),
        ("Fp1\t4\t5\n", "it has 3 columns", "two columns"),
        ("site\tkohm\n", "needs a column of impedances and rows below", "two columns"),
        ("name\tx\ty\nFp1\t1\t2\n", "needs a column of impedances", "electrodes.tsv"),
        ("Fp1\tgood\nF3\t4\n", "given was 'good'", "plain numbers"),
        ("F3\t4\nFp1\t-3\n", "Row 2 of z.tsv needs an impedance of 0 or more", "plain"),
        ("F3\t>>9\nF4\t3\n", "given was '>>9'", "plain numbers"),
        ("site;ohm\nFp1;4,200\n", "given was '4,200'", "plain numbers"),
        ("site\tMOhm\nFp1\t1\n", "ohm or kohm; its header says 'MOhm'", "Convert"),
        ("Fp1\t4200\nF3\t5100\nF4\t900\n", "too much for kilo-ohm", "State the unit"),
        ("T3\t4\nT7\t9\n", "two values for T7: 4 and 9 kilo-ohm", "one row per site"),
        ('a\t"4\nF3\t5', "quoted cell", "quotes"),
    ],
)
def test_what_cannot_be_read_is_told_with_what_to_do(text, problem, remedy):
    with pytest.raises(ImpedanceError) as caught:
        parse_impedances(text, "z.tsv")
    assert problem in caught.value.problem
    assert remedy in caught.value.remedy


@settings(deadline=None)
@given(TABLES, st.sampled_from([("\t", "z.tsv"), (",", "z.csv"), (";", "z.csv"), (" ", "z")]),
       st.sampled_from([None, "kOhm", "k\u03a9", "impedance [ohm]"]))  # fmt: skip
def test_whatever_is_written_reads_back(table, form, unit):
    separator, name = form
    scale = 1000 if unit is not None and "k" not in unit else 1
    if separator == " " and unit is not None:
        unit = unit.replace(" ", "_")
    lines = [] if unit is None else [f"site{separator}{unit}"]
    lines += [f"{site}{separator}{value * scale!r}" for site, value in table.items()]
    read = parse_impedances("\n".join(lines), name)
    assert list(read) == list(table)
    assert list(read.values()) == pytest.approx(list(table.values()), rel=1e-12)


@settings(deadline=None)
@given(st.text(), st.sampled_from(["z.tsv", "z.csv", "z"]))
def test_any_text_is_read_or_refused_in_plain_words(text, name):
    try:
        read, refusal = parse_impedances(text, name), None
    except ImpedanceError as error:
        read, refusal = {}, error
    assert refusal is None or (refusal.problem.endswith(".") and refusal.remedy)
    assert all(math.isfinite(value) and value >= 0 for value in read.values())


CELLS = ["Fp1", "T3", "4.2", ">4.2", "OL", "n/a", "name", "impedance", "kohm", "ohm", "-1"]
CELLS += ['"', "", "x"]


@settings(deadline=None)
@given(st.lists(st.lists(st.sampled_from(CELLS), max_size=4), max_size=5))
def test_any_mixture_of_likely_cells_gives_its_numbers_or_is_refused(rows):
    try:
        read = parse_impedances("\n".join("\t".join(row) for row in rows), "z.tsv")
    except ImpedanceError:
        read = {}
    assert {round(value, 9) for value in read.values()} <= {4.2, 0.0042}


# ---------------------------------------------------------------- where they come from


def test_the_table_given_comes_before_bids_and_bids_before_the_file(tmp_path):
    recording = brainvision(tmp_path, "sub-01_task-rest_eeg", "Fp1:         7")
    assert read_impedances(recording) == {"Fp1": 7.0}
    beside = tmp_path / "sub-01_electrodes.tsv"
    beside.write_text("name\tx\ty\tz\timpedance\nFp1\t1\t1\t1\t6\n")
    assert read_impedances(recording) == {"Fp1": 6.0}
    given = tmp_path / "given.tsv"
    given.write_text("Fp1 5")
    assert read_impedances(recording, given) == {"Fp1": 5.0}


@pytest.mark.parametrize(
    ("table", "taken"),
    [
        ("sub-01_ses-2_electrodes.tsv", True),
        ("sub-01_ses-2_space-CapTrak_electrodes.tsv", True),
        ("sub-01_ses-2_task-rest_run-1_electrodes.tsv", True),
        ("sub-01_ses-2_task-other_electrodes.tsv", False),
        ("sub-01_ses-2_run-2_electrodes.tsv", False),
        ("sub-01_ses-1_electrodes.tsv", False),
        ("sub-01_electrodes.tsv", False),
        ("sub-02_ses-2_electrodes.tsv", False),
    ],
)
def test_a_bids_table_is_taken_if_it_is_of_the_same_session(
    write_edf, tmp_path, table, taken
):
    path = tmp_path / "sub-01_ses-2_task-rest_run-1_eeg.edf"
    write_edf(path, np.ones((2, 256)), 256, ["Fp1", "Fp2"])
    (tmp_path / table).write_text("name\tx\ty\tz\timpedance\nFp1\t1\t1\t1\t6\n")
    assert read_impedances(open_recording(path)) == ({"Fp1": 6.0} if taken else {})


@pytest.mark.parametrize(
    "text",
    [
        "name\tx\ty\tz\nFp1\t1\t1\t1\n",
        "name\tx\ty\tz\timpedance\nFp1\t1\t1\t1\tn/a\n",
        "name\tx\ty\tz\timpedance\nFp1\t1\t1\t1\thigh\n",
    ],
)
def test_a_bids_table_without_impedances_leaves_those_of_the_file(tmp_path, text):
    recording = brainvision(tmp_path, "sub-01_eeg", "Fp1:         7")
    (tmp_path / "sub-01_electrodes.tsv").write_text(text)
    assert read_impedances(recording) == {"Fp1": 7.0}


@pytest.mark.parametrize(
    ("unit", "value"), [("kOhm", 5.0), ("k\u03a9", 5.0), ("Ohm", 0.005), ("MOhm", None)]
)
def test_a_brainvision_header_gives_its_impedances_in_kilo_ohm(tmp_path, unit, value):
    recording = brainvision(tmp_path, "night", "Fp1:    5", "Fp2: Out of Range!", unit=unit)
    assert recording.impedances_kohm == ({} if value is None else {"Fp1": value})


def test_of_a_passive_pair_the_first_is_the_electrode_and_ref_and_ground_are_kept(tmp_path):
    recording = brainvision(
        tmp_path, "night", "+Fp1:     5", "-Fp1:     9", "Ref:      2", "Gnd:      3"
    )
    assert recording.impedances_kohm == {"Fp1": 5.0, "Ref": 2.0, "Gnd": 3.0}


def test_a_recording_that_states_none_has_none(write_edf, tmp_path):
    path = write_edf(tmp_path / "night.edf", np.ones((2, 256)), 256, ["Fp1", "Fp2"])
    assert read_impedances(open_recording(path)) == {}


def brainvision(folder: Path, stem, *lines, unit="kOhm"):
    """A BrainVision recording whose header ends with a table of impedances."""
    import pybv

    pybv.write_brainvision(
        data=np.random.default_rng(1).standard_normal((2, 512)) * 1e-5,
        sfreq=256,
        ch_names=["Fp1", "Fp2"],
        fname_base=stem,
        folder_out=folder,
    )
    header = folder / f"{stem}.vhdr"
    with header.open("a", encoding="utf-8") as file:
        file.write(f"Impedance [{unit}] at 10:11:12 :\n")
        file.write("\n".join(lines) + "\n")
    return open_recording(header)


def test_a_table_is_read_whatever_recording_it_is_of(tmp_path):
    path = tmp_path / "z.csv"
    path.write_text("E201,4\n", encoding="utf-8-sig")
    assert read_table(path) == {"E201": 4.0}


@pytest.mark.parametrize(
    ("make", "problem"),
    [
        (lambda path: None, "could not be opened"),
        (lambda path: path.mkdir(), "could not be opened"),
        (lambda path: path.write_bytes(b"Fp1\x00\x01\x02"), "holds something else"),
        (lambda path: path.write_bytes(b"Fp1\t4\n" * 200_000), "holds something else"),
        (
            lambda path: path.write_bytes("Fp1\t4 k\u03a9".encode("utf-16-le")),
            "something else",
        ),
        (lambda path: path.write_bytes(b"Fp1\t4\xb5"), "not text in UTF-8"),
        (lambda path: path.write_text("X7\t4\nRef\t2"), "needs to name sites of the recor"),
        (lambda path: path.write_text("Fp1\tn/a"), "it has values for none"),
        (
            lambda path: path.write_text("Fp1-F3\t4"),
            "the recording has channels EEG Fp1-REF",
        ),
    ],
)
def test_a_given_table_that_is_of_no_use_is_told(tmp_path, make, problem):
    path = tmp_path / "z.tsv"
    make(path)
    with pytest.raises(ImpedanceError) as caught:
        read_impedances(recording_of("EEG Fp1-REF", "EEG F3-REF"), path)
    assert problem in caught.value.problem
    assert caught.value.remedy


def test_a_byte_order_mark_is_no_part_of_the_first_site(tmp_path):
    path = tmp_path / "z.tsv"
    path.write_text("Fp1\t4\n", encoding="utf-8-sig")
    assert read_impedances(recording_of("Fp1", "F3"), path) == {"Fp1": 4.0}


# ---------------------------------------------------------------- the sites they belong to


@pytest.mark.parametrize(
    "name", ["T3", "T7", "t7", "EEG T3", "EEG T3-REF", "T7-LE", " T3."]
)
def test_one_electrode_has_many_spellings(name):
    frame = frame_of("EEG Fp1-REF", "EEG T3-REF")
    found = impedances_of(frame, {name: 4.0})
    np.testing.assert_array_equal(found, [np.nan, 4.0, np.nan])


def test_ref_is_the_reference_where_there_is_one():
    frame = frame_of("Fp1-REF", "F3-REF")
    np.testing.assert_array_equal(
        impedances_of(frame, {"Ref": 2.0, "F3": 3.0}), [np.nan, 3, 2]
    )
    named = frame_of("Fp1-A1", "F3-A1")
    np.testing.assert_array_equal(impedances_of(named, {"A1": 6.0, "Ref": 2.0})[-1], 6.0)
    np.testing.assert_array_equal(impedances_of(named, {"REF": 2.0})[-1], 2.0)
    two = frame_of("Fp1-A1", "F3-A1", "Fp2-A2", "F4-A2")
    assert np.isnan(impedances_of(two, {"Ref": 2.0})).all()


def test_sites_solved_from_derivations_have_their_own_and_pairs_have_none():
    frame = frame_of("Fp1-F7", "F7-T3")
    found = impedances_of(frame, {"F7": 3.0, "F7-T3": 9.0, "Gnd": 1.0})
    np.testing.assert_array_equal(found, [np.nan, 3.0, np.nan])
    assert frame.sites == ("Fp1", "F7", "T3")


def test_sites_that_no_system_knows_are_found_by_their_names():
    frame = frame_of("lead 0", "lead 1", "lead 2")
    found = impedances_of(frame, {"Lead 1": 3.0})
    assert found[frame.sites.index("lead 1")] == 3.0
    assert np.isfinite(found).sum() == 1


def test_nothing_known_is_not_zero():
    assert np.isnan(impedances_of(frame_of("Fp1", "F3"), {})).all()


@settings(deadline=None)
@given(TABLES)
def test_every_site_gets_the_value_of_its_own_row(table):
    found = dict(zip(WHOLE_HEAD.sites, impedances_of(WHOLE_HEAD, table), strict=True))
    for site in DEMO_SITES:
        np.testing.assert_equal(found[site], table.get(site, np.nan))
    np.testing.assert_equal(found["reference"], table.get("Ref", np.nan))


def test_triage_shows_what_lies_beside_a_recording_as_sites_does(tmp_path):
    """A BIDS electrodes.tsv: 23 kilo-ohm at P3."""
    import shutil

    from artifactlens.demo import write_demo
    from artifactlens.pipeline import triage

    folder = tmp_path / "sub-01" / "eeg"
    folder.mkdir(parents=True)
    recording = folder / "sub-01_task-rest_eeg.edf"
    shutil.copy(write_demo(tmp_path), recording)
    table = "name\tx\ty\tz\timpedance\nP3\tn/a\tn/a\tn/a\t23\n"
    (folder / "sub-01_electrodes.tsv").write_text(table, encoding="utf-8")
    known = {row.site: row.impedance_kohm for row in triage(recording).sites}
    assert known["P3"] == 23
    assert known["P4"] is None
