"""The outputs beside a recording: tables, scores, EDF+ marks and the whole folder."""

from __future__ import annotations

import csv
import dataclasses
import errno
import io
import json
import os
import stat
import tempfile
import zipfile
from datetime import datetime
from pathlib import Path

import edfio
import mne
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from result_factory import PAIR, make_result

from artifactlens.advice import CAUSES, SITE_VERDICTS, Advice
from artifactlens.errors import OutputError, ResultError
from artifactlens.export.atomic import probe_folder, write_atomically, write_together
from artifactlens.export.flags_table import flags_columns_json, flags_tsv
from artifactlens.export.folder import (
    SITES_FILES,
    TRIAGE_FILES,
    prepared_folder,
    write_all,
    write_sites,
)
from artifactlens.export.marks import CAUTION_TEXT, marks_edf, tal_bytes
from artifactlens.export.one_line import one_line
from artifactlens.export.scores import scores_npz
from artifactlens.export.sites_table import sites_columns_json, sites_tsv
from artifactlens.kinds import KIND_NAMES
from artifactlens.result import CAUTION, Result

FLAG_HEADER = (
    "flag\tonset\tduration\tkind\tsites\tprobability\tdriver\tdriver_value\tdriver_unit\t"
    "driver_usual\tevidence\tlook_alike\tsentence"
)
FLAG_COLUMNS = FLAG_HEADER.split("\t")
SITE_HEADER = (
    "site\tchannel\trole\tseconds_judged\teye_share\tmuscle_share\tpop_share\tmains_share\t"
    "pops_per_minute\tmains_uv\tmains_db\tisolation_db\tfault\tverdict\tcause\twhy\tadvice\t"
    "impedance_kohm"
)
SITE_COLUMNS = SITE_HEADER.split("\t")
START = datetime(2031, 3, 4, 22, 5, 6)
ANY_TEXT = st.text(st.characters(), max_size=40)  # control characters, surrogates and all


def _rows(text, quoting=csv.QUOTE_NONE):
    return list(csv.reader(io.StringIO(text, newline=""), delimiter="\t", quoting=quoting))


def _channels(result):
    return {row.site: row.channel for row in result.sites}


def _with_flag(**changes):
    """A result whose one flag has these fields changed."""
    result = make_result(1)
    return dataclasses.replace(
        result, flags=(dataclasses.replace(result.flags[0], **changes),)
    )


# ---------------------------------------------------------------- one line


def test_one_line_keeps_letters_of_any_script_and_drops_what_breaks_a_line():
    assert one_line("Ω é 脳 µV  - +") == "Ω é 脳 µV  - +"
    assert one_line("a\tb\r\nc\x00d\x1be\x85f\u2028g\u2029h\u202ei\udc80j") == (
        "a b  c d e f g h i j"
    )
    assert one_line(" \n ") == ""


# ---------------------------------------------------------------- flags.tsv


def test_flags_tsv_holds_the_lines_worked_out_by_hand():
    # eye: score 3.1 + 0.9 - 0.2 - 2.5 = 1.3, logistic 0.7858; muscle and pop: 2.2, 0.9002
    assert flags_tsv(make_result(3)).split("\n") == [
        FLAG_HEADER,
        "1\t12.00\t2.00\teye\tFp1|Fp2\t0.786\tfront_vertical\t142.3\tuV\t3.5\t+3.100\t"
        "frontal intermittent rhythmic delta activity or frontal slow waves\t"
        "Fp1, Fp2 - consistent with eye movement or blink: frontal polarity 142.3 uV. It "
        "drove this mark (+3.1 of +3.8).",
        "2\t40.00\t5.00\tmuscle\tT3|F7\t0.900\thigh_power\t14.81\tdB\t0.2\t+2.750\tn/a\t"
        "T3, F7 - consistent with muscle: power at 55-95 Hz 14.81 dB. It drove this "
        "mark (+2.8 of +4.2).",
        "3\t77.00\t1.00\tpop\tC3\t0.900\tstep_crest\t31.42\tdB\t2.9\t+3.600\t"
        "a focal spike or a discharge at the end of a chain\t"
        "C3 - consistent with electrode pop: fastest step over the mean step 31.42 dB. It "
        "drove this mark (+3.6 of +5.2).",
        "",
    ]


def test_flags_tsv_says_not_available_where_the_driver_was_not_measured():
    flag = make_result(1).flags[0]
    unmeasured = dataclasses.replace(flag.driver, value=None, usual=None)
    row = _rows(flags_tsv(_with_flag(contributions=(unmeasured,))))[1]
    assert row[7] == row[9] == "n/a"


def test_flags_tsv_drives_on_the_strongest_evidence_for_the_kind_not_against_it():
    flag = make_result(1).flags[0]
    against = dataclasses.replace(flag.contributions[0], feature="against", log_odds=-9.0)
    row = _rows(flags_tsv(_with_flag(contributions=(against, *flag.contributions))))[1]
    assert row[6] == "front_vertical"
    assert row[10] == "+3.100"


def test_flags_tsv_drives_on_a_pair_only_where_no_single_feature_speaks_for_the_kind():
    flag = make_result(1).flags[0]
    beside = _rows(flags_tsv(_with_flag(contributions=(PAIR, *flag.contributions))))[1]
    assert beside[6:11] == ["front_vertical", "142.3", "uV", "3.5", "+3.100"]
    against = dataclasses.replace(flag.contributions[0], log_odds=-0.1)
    alone = _rows(flags_tsv(_with_flag(contributions=(PAIR, against))))[1]
    assert alone[6:11] == ["burst+high_power", "n/a", "n/a", "n/a", "+5.000"]


def test_flags_tsv_without_flags_is_the_header_alone():
    assert flags_tsv(make_result(0)) == FLAG_HEADER + "\n"


def test_flags_tsv_makes_hostile_site_names_harmless():
    result = _with_flag(sites=("C3|C4", "T3\tonset\n9.9", '"Fp2', "=HYPERLINK(1)", "-", ""))
    assert _rows(flags_tsv(result))[1][4] == (
        'C3/C4|T3 onset 9.9|_"Fp2|_=HYPERLINK(1)|_-|n/a'
    )


def test_flags_tsv_reads_back_with_pandas():
    result = make_result(7, hostile=True)
    pd = pytest.importorskip("pandas")
    table = pd.read_csv(
        io.StringIO(flags_tsv(result)), sep="\t"
    )  # with its default quoting
    assert list(table.columns) == FLAG_COLUMNS
    assert table["flag"].tolist() == [flag.number for flag in result.flags]
    np.testing.assert_allclose(table["onset"], [flag.onset for flag in result.flags])
    np.testing.assert_allclose(
        table["evidence"], [flag.driver.log_odds for flag in result.flags], atol=5e-4
    )
    assert table["sites"].str.count(r"\|").tolist() == [
        len(flag.sites) - 1 for flag in result.flags
    ]


@given(st.lists(ANY_TEXT, min_size=1, max_size=4), ANY_TEXT, ANY_TEXT)
def test_no_name_or_sentence_breaks_the_rows_and_columns_of_the_flags(sites, text, unit):
    flag = make_result(1).flags[0]
    part = dataclasses.replace(flag.driver, feature=text, unit=unit)
    changed = _with_flag(
        sites=tuple(sites), sentence=text, look_alike=text, contributions=(part,)
    )
    plain = flags_tsv(changed)
    rows = _rows(plain)
    assert [len(row) for row in rows] == [len(FLAG_COLUMNS)] * 2
    assert len(plain.splitlines()) == 2  # splits at every Unicode line end
    assert len(rows[1][4].split("|")) == len(sites)
    assert all(rows[1])  # no cell is empty
    assert _rows(plain, csv.QUOTE_MINIMAL) == rows  # to a reader that knows quotes as well
    plain.encode("utf-8")


def test_every_column_of_the_flags_has_an_entry_in_the_dictionary():
    entries = json.loads(flags_columns_json())
    assert entries.pop("Caution") == CAUTION
    assert list(entries) == FLAG_COLUMNS
    assert all(entry["Description"].endswith(".") for entry in entries.values())
    assert {name for name, entry in entries.items() if "Units" in entry} == {
        "onset",
        "duration",
    }
    assert tuple(entries["kind"]["Levels"]) == KIND_NAMES
    assert entries["sites"]["Delimiter"] == "|"


# ---------------------------------------------------------------- sites.tsv


def test_sites_tsv_holds_the_lines_worked_out_by_hand():
    lines = sites_tsv(make_result(4)).split("\n")
    assert lines[0] == SITE_HEADER
    # Fp1: 2 of 120 s eye; C3: 1 of 120 s pop; the reference: 1 of 120 s pop
    assert lines[1] == (
        "Fp1\tEEG Fp1-REF\tsite\t120.00\t"
        "0.0167\t0.0000\t0.0000\tn/a\t0\t0.8125\t1.5\t0.4\tn/a\tleave\tn/a\tn/a\tn/a\tn/a"
    )
    assert lines[9] == (
        "C3\tEEG C3-REF\tsite\t120.00\t"
        "0.0000\t0.0000\t0.0083\tn/a\t0.5\t0.8125\t1.5\t9.5\tn/a\tleave\tn/a\tn/a\tn/a\tn/a"
    )
    assert lines[19].endswith("\tflat from 90 s on\tleave\tn/a\tn/a\tn/a\tn/a")
    assert lines[20] == (
        "reference\tn/a\treference\t120.00\t0.0000\t0.0000\t0.0083\tn/a\t0.5\tn/a\tn/a\tn/a"
        "\tn/a\tleave\tn/a\tn/a\tn/a\tn/a"
    )
    assert lines[21:] == [""]


def test_the_table_gives_each_site_its_verdict_and_the_first_entry_that_concerns_it():
    result = make_result(0)
    advice = [
        Advice(number, verdict, cause, sign, sites, "high", "present", ((0.0, 60.0),), 0.5,
               "seen", ("do",))
        for number, verdict, cause, sign, sites in (
            (1, "re-prep", "site", "pops", ("P3",)),
            (2, "check", "ground", "mains", ()),
            (3, "re-prep", "bridge", "bridged", ("F3", "P3")),
            (4, "ask", "patient", "muscle", ("T3", "reference")),
        )
    ]  # fmt: skip
    said = {
        "P3": ("re-prep", "8 pops in 2 min"),
        "Fp2": ("cannot tell", "@ the chain's end"),
    }
    rows = [
        dataclasses.replace(
            row,
            verdict=said.get(row.site, ("leave", ""))[0],
            why=said.get(row.site, ("", ""))[1],
            impedance_kohm={"P3": 12.345, "F3": 0.0}.get(row.site),
        )
        for row in result.sites
    ]
    result = dataclasses.replace(result, sites=tuple(rows), advice=tuple(advice))
    table = {row[0]: row[-5:] for row in _rows(sites_tsv(result))}
    assert table["P3"] == ["re-prep", "site", "8 pops in 2 min", "1", "12.35"]
    assert table["F3"] == ["leave", "bridge", "n/a", "3", "0"]
    assert table["Fp2"] == ["cannot tell", "n/a", "_@ the chain's end", "n/a", "n/a"]
    assert table["T3"][1::2] == table["reference"][1::2] == ["patient", "4"]
    assert table["O1"] == ["leave", "n/a", "n/a", "n/a", "n/a"]


def test_the_dictionary_of_the_sites_explains_every_word_of_the_advice():
    entries = json.loads(sites_columns_json())
    assert tuple(entries["verdict"]["Levels"]) == SITE_VERDICTS
    assert tuple(entries["cause"]["Levels"]) == CAUSES
    for name in ("verdict", "cause"):
        assert all(text.endswith(".") for text in entries[name]["Levels"].values())


def test_sites_tsv_reads_back_with_pandas():
    result = make_result(4, hostile=True)
    pd = pytest.importorskip("pandas")
    table = pd.read_csv(io.StringIO(sites_tsv(result)), sep="\t")
    assert list(table.columns) == SITE_COLUMNS
    assert len(table) == len(result.sites)
    np.testing.assert_allclose(
        table["eye_share"], [row.share["eye"] for row in result.sites], atol=5e-5
    )
    assert table["mains_share"].isna().all()


@given(ANY_TEXT, ANY_TEXT)
def test_no_name_breaks_the_rows_and_columns_of_the_sites(name, fault):
    result = make_result(0)
    row = dataclasses.replace(result.sites[0], site=name, channel=name, fault=fault)
    text = sites_tsv(dataclasses.replace(result, sites=(row, row)))
    rows = _rows(text)
    assert [len(row) for row in rows] == [len(SITE_COLUMNS)] * 3
    assert _rows(text, csv.QUOTE_MINIMAL) == rows


def test_every_column_of_the_sites_has_an_entry_in_the_dictionary():
    entries = json.loads(sites_columns_json())
    assert entries.pop("Caution") == CAUTION
    assert list(entries) == SITE_COLUMNS
    assert all(entry["Description"] for entry in entries.values())
    assert {
        name: entry["Units"] for name, entry in entries.items() if "Units" in entry
    } == {
        "seconds_judged": "s",
        "pops_per_minute": "1/min",
        "impedance_kohm": "kOhm",
        "mains_uv": "uV",
        "mains_db": "dB",
        "isolation_db": "dB",
    }


# ---------------------------------------------------------------- scores.npz


def test_scores_load_without_pickle_as_they_were():
    result = make_result(hostile=True)
    with np.load(io.BytesIO(scores_npz(result)), allow_pickle=False) as archive:
        loaded = dict(archive)
    assert tuple(loaded["kinds"].tolist()) == KIND_NAMES
    assert tuple(loaded["sites"].tolist()) == result.scores.sites
    assert loaded["onset"].dtype == np.float64
    assert loaded["probability"].dtype == np.float32
    np.testing.assert_array_equal(loaded["onset"], result.scores.onset)
    np.testing.assert_array_equal(loaded["probability"], result.scores.probability)
    assert loaded["caution"].item() == CAUTION


def test_equal_scores_give_equal_bytes_whatever_the_clock_says():
    data = scores_npz(make_result())
    assert data == scores_npz(make_result())
    with zipfile.ZipFile(io.BytesIO(data)) as archive:
        dates = {entry.date_time for entry in archive.infolist()}
    assert dates == {(1980, 1, 1, 0, 0, 0)}


def test_a_result_without_scores_says_so():
    with pytest.raises(ResultError, match="this one has none"):
        scores_npz(Result.from_json(make_result().to_json()))


# ---------------------------------------------------------------- EDF+ marks


def test_a_time_stamped_annotation_list_is_the_one_of_the_edfplus_specification():
    # edfplus.info, section 2.2.2: this list takes 28 bytes
    tal = tal_bytes(180_000_000, None, "Lights off", "Close door")
    assert tal == b"+180\x14Lights off\x14Close door\x14\x00"
    assert len(tal) == 28
    assert (
        tal_bytes(1_800_200_000, 25_500_000, "Apnea") == b"+1800.2\x1525.5\x14Apnea\x14\x00"
    )
    assert tal_bytes(-65_000, None, "x") == b"-0.065\x14x\x14\x00"
    assert tal_bytes(0, None, "") == b"+0\x14\x14\x00"  # time-keeping


def test_marks_are_the_bytes_worked_out_by_hand():
    result = make_result(1)
    data = marks_edf(result, start=START, channels=_channels(result))
    body = (
        b"+0\x14\x14\x00"
        b"+0\x14artifactlens marks: a technical aid, not a medical device; see report"
        b"\x14\x00"
        b"+12\x152\x14Artifact: eye@@EEG Fp1-REF\x14\x00"
        b"+12\x152\x14Artifact: eye@@EEG Fp2-REF\x14\x00"
    )
    body += b"\x00" * (len(body) % 2)
    header = (
        b"0".ljust(8)
        + b"X X X X".ljust(80)
        + b"Startdate 04-MAR-2031 X X artifactlens".ljust(80)
        + b"04.03.31"
        + b"22.05.06"
        + b"512".ljust(8)
        + b"EDF+C".ljust(44)
        + b"1".ljust(8)
        + b"0".ljust(8)
        + b"1".ljust(4)
        + b"EDF Annotations".ljust(16)
        + b" " * 80
        + b" " * 8
        + b"-1".ljust(8)
        + b"1".ljust(8)
        + b"-32768".ljust(8)
        + b"32767".ljust(8)
        + b" " * 80
        + str(len(body) // 2).encode().ljust(8)
        + b" " * 32
    )
    assert data == header + body


@given(
    st.lists(ANY_TEXT, min_size=1, max_size=5),
    st.none() | st.datetimes(datetime(1800, 1, 1), datetime(2500, 1, 1)),
)
def test_the_header_is_512_printable_bytes_whatever_the_labels_and_the_date(labels, start):
    result = _with_flag(sites=tuple(labels))
    data = marks_edf(result, start=start, channels={label: label for label in labels})
    assert all(32 <= byte <= 126 for byte in data[:512])
    assert data[184:192] == b"512     "
    assert data[192:197] == b"EDF+C"
    assert data[8:88] == b"X X X X".ljust(80)
    assert len(data) == 512 + int(data[236:244]) * 2 * int(data[472:480])
    record = data[512:]
    assert record.startswith(b"+")
    record.decode("utf-8")
    texts = [entry.text for entry in edfio.read_edf(data).annotations]
    assert CAUTION_TEXT in texts
    assert all(text.startswith("Artifact: eye") for text in texts if text != CAUTION_TEXT)
    assert 2 <= len(texts) <= 1 + len(labels)


def test_without_a_start_the_date_is_unknown():
    edf = edfio.read_edf(marks_edf(make_result(), start=None, channels={}))
    assert edf.local_recording_identification == "Startdate X X X artifactlens"
    assert str(edf.starttime) == "00:00:00"


@pytest.mark.parametrize("year", [1984, 2085])
def test_a_date_that_edf_cannot_hold_is_left_unknown_but_the_hour_kept(year):
    start = START.replace(year=year)
    edf = edfio.read_edf(marks_edf(make_result(), start=start, channels={}))
    assert edf.local_recording_identification == "Startdate X X X artifactlens"
    assert edf.starttime == start.time()


def test_a_fraction_of_the_starting_second_stands_in_the_time_keeper_alone(tmp_path):
    start = START.replace(microsecond=250_000)
    data = marks_edf(_with_flag(onset=12.344), start=start, channels={})
    assert data[512:].startswith(b"+0.25\x14\x14\x00+0.25\x14artifactlens marks")
    assert b"+12.594\x152\x14Artifact: eye\x14\x00" in data
    edf = edfio.read_edf(data)
    assert (edf.startdate, edf.starttime) == (start.date(), start.time())
    assert [entry.onset for entry in edf.annotations] == [0.0, 12.344]
    (tmp_path / "marks.edf").write_bytes(data)
    assert mne.read_annotations(tmp_path / "marks.edf").onset.tolist() == [0.0, 12.344]


def test_flags_of_one_channel_less_event_are_written_once():
    result = make_result(1)
    twins = dataclasses.replace(
        result,
        flags=(
            result.flags[0],
            dataclasses.replace(result.flags[0], number=2, sites=("Cz",)),
        ),
    )
    data = marks_edf(twins, start=None, channels={})
    assert data.count(b"Artifact: eye") == 1


def test_sites_without_a_channel_are_marked_only_where_no_site_of_the_flag_has_one():
    result = _with_flag(sites=("Fp1", "Fp2", "reference"))
    some = marks_edf(result, start=None, channels={"Fp2": "EEG Fp2-REF", "Fp1": None})
    none = marks_edf(result, start=None, channels={"Fp1": None, "Fp2": " \x00"})
    assert [entry.text for entry in edfio.read_edf(some).annotations][1:] == [
        "Artifact: eye@@EEG Fp2-REF"
    ]
    assert [entry.text for entry in edfio.read_edf(none).annotations][1:] == [
        "Artifact: eye"
    ]


def test_a_label_cannot_forge_an_annotation_or_a_second_link():
    result = make_result(4, hostile=True)
    data = marks_edf(
        result, start=None, channels=_channels(result) | {"reference": "a@@b@@@c"}
    )
    entries = edfio.read_edf(data).annotations
    assert {entry.onset for entry in entries} == {0.0, 12.0, 40.0, 77.0, 101.0}
    assert [entry.text for entry in entries if entry.onset == 40.0] == [
        "Artifact: muscle@@EEG F7 fake  +1 -REF",
        "Artifact: muscle@@EEG T3 onset 9.9-REF",
    ]
    result = _with_flag(sites=("reference",))
    data = marks_edf(result, start=None, channels={"reference": "a@@b@@@c"})
    assert edfio.read_edf(data).annotations[1].text == "Artifact: eye@@a@b@c"


def test_a_very_short_flag_keeps_a_duration():
    data = marks_edf(_with_flag(duration=0.0), start=None, channels={})
    assert edfio.read_edf(data).annotations[1].duration == 0.001


def test_many_marks_fill_data_records_of_the_recommended_size(tmp_path):
    # EDF specification: at most 61440 bytes a record; EDF+: each begun by the time-keeper
    flag = make_result(1).flags[0]
    flags = tuple(
        dataclasses.replace(flag, number=i, onset=i / 4, duration=0.25) for i in range(4000)
    )
    result = dataclasses.replace(make_result(1), flags=flags)
    data = marks_edf(result, start=START, channels=_channels(result))
    n_records, size = int(data[236:244]), 2 * int(data[472:480])
    assert n_records == 6
    assert size <= 61440
    assert len(data) == 512 + n_records * size
    for i in range(n_records):
        record = data[512 + i * size : 512 + (i + 1) * size]
        assert record.startswith(b"+0\x14\x14\x00")
        assert record.rstrip(b"\x00").endswith(b"\x14")  # no list crosses records
    edf = edfio.read_edf(data)
    assert edf.is_continuous
    assert len(edf.annotations) == 8001
    (tmp_path / "marks.edf").write_bytes(data)
    assert len(mne.read_annotations(tmp_path / "marks.edf")) == 8001


def test_mne_opens_the_marks_as_a_recording_and_points_to_its_annotation_reader(tmp_path):
    (tmp_path / "marks.edf").write_bytes(marks_edf(make_result(), start=START, channels={}))
    with pytest.warns(RuntimeWarning) as warned:
        raw = mne.io.read_raw_edf(tmp_path / "marks.edf", verbose="warning")
    assert raw.ch_names == []
    assert any("mne.read_annotations()" in str(entry.message) for entry in warned)


def _recording(marks, labels, seconds):
    """An EDF+ recording of silence with these marks inside."""
    signals = [
        edfio.EdfSignal(
            np.zeros(seconds), sampling_frequency=1, label=label, physical_range=(-1, 1)
        )
        for label in labels
    ]
    return edfio.Edf(signals, annotations=edfio.read_edf(marks).annotations)


def _linked_events(annotations):
    return {
        (round(float(onset), 3), round(float(duration), 3), text, channel)
        for onset, duration, text, channels in zip(
            annotations.onset,
            annotations.duration,
            annotations.description,
            annotations.ch_names,
            strict=True,
        )
        for channel in channels or (None,)
    }


LINKED = {"Fp1": "EEG Fp1-REF", "T3": "EEG T3-REF", "Cz": "Cz µ", "Pz": "POL Pz"}
RANDOM_FLAGS = st.lists(
    st.tuples(
        st.sampled_from(KIND_NAMES),
        st.lists(
            st.sampled_from([*LINKED, "reference"]), min_size=1, max_size=4, unique=True
        ),
        st.integers(0, 10_000),  # onset in hundredths of a second
        st.integers(1, 5_000),
    ),
    max_size=12,
)
TEXTS = {
    "eye": "Artifact: eye",
    "muscle": "Artifact: muscle",
    "pop": "Artifact: electrode pop",
    "mains": "Artifact: mains",
}


def _random_result(drawn):
    flag = make_result(1).flags[0]
    flags = tuple(
        dataclasses.replace(
            flag, kind=kind, sites=tuple(sites), onset=onset / 100, duration=duration / 100
        )
        for kind, sites, onset, duration in drawn
    )
    return dataclasses.replace(make_result(0), flags=flags)


def _expected(drawn, channels):
    events = {(0.0, 0.0, CAUTION_TEXT, None)}
    for kind, sites, onset, duration in drawn:
        for channel in [channels[site] for site in sites if site in channels] or [None]:
            events.add((onset / 100, duration / 100, TEXTS[kind], channel))
    return events


@settings(max_examples=40, deadline=None)
@given(RANDOM_FLAGS, st.integers(0, 999_999))
def test_mne_reads_onsets_durations_and_links_of_random_flags(drawn, microsecond):
    start = START.replace(microsecond=microsecond)
    data = marks_edf(_random_result(drawn), start=start, channels=LINKED)
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder, "marks.edf")
        path.write_bytes(data)
        read = mne.read_annotations(path)
    split = [text.split("@@") for text in read.description]
    got = {
        (round(float(onset), 3), round(float(duration), 3), text, link[0] if link else None)
        for onset, duration, (text, *link) in zip(
            read.onset, read.duration, split, strict=True
        )
    }
    assert got == _expected(drawn, LINKED)
    assert len(read) == len(got)  # each event once


@settings(max_examples=10, deadline=None)
@given(RANDOM_FLAGS)
def test_beside_their_channels_mne_takes_the_links_for_channel_names(drawn):
    ascii_only = {site: label for site, label in LINKED.items() if label.isascii()}
    marks = marks_edf(_random_result(drawn), start=None, channels=ascii_only)
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder, "recording.edf")
        _recording(marks, ascii_only.values(), 200).write(path)
        raw = mne.io.read_raw_edf(path, verbose="error")
    assert _linked_events(raw.annotations) == _expected(drawn, ascii_only)


def test_the_links_are_written_as_mne_writes_them(tmp_path):
    raw = mne.io.RawArray(
        np.zeros((2, 3000)), mne.create_info(["Fp1", "Fp2"], 100.0, "eeg"), verbose="error"
    )
    raw.set_annotations(
        mne.Annotations([12.0], [2.0], ["Artifact: eye"], ch_names=[["Fp1", "Fp2"]])
    )
    raw.export(tmp_path / "mne.edf", physical_range=(-1, 1), verbose="error")
    ours = marks_edf(make_result(1), start=None, channels={"Fp1": "Fp1", "Fp2": "Fp2"})
    assert (
        edfio.read_edf(tmp_path / "mne.edf").annotations
        == edfio.read_edf(ours).annotations[1:]
    )


# ---------------------------------------------------------------- atomic writing


def _fail(error):
    def failing(*_args, **_kwargs):
        raise error

    return failing


def test_a_failed_replacement_leaves_the_old_file_and_no_temporary_one(
    tmp_path, monkeypatch
):
    path = tmp_path / "flags.tsv"
    path.write_text("old")
    monkeypatch.setattr(os, "replace", _fail(OSError(errno.EIO, "Input/output error")))
    with pytest.raises(OutputError, match=r"flags\.tsv.*Input/output error"):
        write_atomically(path, "new")
    assert path.read_text() == "old"
    assert list(tmp_path.iterdir()) == [path]


def test_an_interrupted_run_leaves_the_old_file_and_no_temporary_one(tmp_path, monkeypatch):
    path = tmp_path / "flags.tsv"
    path.write_text("old")
    monkeypatch.setattr(os, "fsync", _fail(KeyboardInterrupt()))
    with pytest.raises(KeyboardInterrupt):
        write_atomically(path, "new")
    assert path.read_text() == "old"
    assert list(tmp_path.iterdir()) == [path]


@pytest.mark.parametrize(
    ("number", "remedy"),
    [
        (errno.ENOSPC, "Free some space"),
        (errno.EROFS, "read-only"),
        (errno.EACCES, "may write to"),
        (errno.EIO, "Choose another output folder"),
    ],
)
def test_a_disk_that_refuses_is_named_with_what_to_do(
    tmp_path, monkeypatch, number, remedy
):
    monkeypatch.setattr(os, "fsync", _fail(OSError(number, os.strerror(number))))
    with pytest.raises(OutputError) as caught:
        write_atomically(tmp_path / "flags.tsv", b"new")
    assert str(tmp_path) in caught.value.problem
    assert os.strerror(number) in caught.value.problem
    assert remedy in caught.value.remedy
    assert list(tmp_path.iterdir()) == []


def test_content_is_on_the_disk_before_it_takes_its_name(tmp_path, monkeypatch):
    calls = []
    synced, replaced = os.fsync, os.replace
    monkeypatch.setattr(os, "fsync", lambda fd: (calls.append("fsync"), synced(fd)))
    monkeypatch.setattr(
        os, "replace", lambda old, new: (calls.append("replace"), replaced(old, new))
    )
    write_atomically(tmp_path / "a", "text")
    assert calls == ["fsync", "replace"]


def test_text_keeps_its_line_ends_and_damaged_characters_are_escaped(tmp_path):
    write_atomically(tmp_path / "a", 'µ\r\n\n"\udc80"')
    assert (tmp_path / "a").read_bytes() == b'\xc2\xb5\r\n\n"\\udc80"'


@pytest.mark.skipif(os.name != "posix", reason="file modes are those of POSIX")
def test_a_written_file_has_the_mode_that_the_user_gives_new_files(tmp_path):
    (tmp_path / "usual").touch()
    write_atomically(tmp_path / "ours", "text")
    usual, ours = (
        stat.S_IMODE((tmp_path / name).stat().st_mode) for name in ("usual", "ours")
    )
    assert ours == usual


def test_files_that_belong_together_are_never_mixed_under_their_last(tmp_path, monkeypatch):
    first, second, last = (tmp_path / name for name in ("first", "second", "last"))
    write_together({first: "old", second: "old", last: "old"})
    replaced = os.replace

    def killed_at_the_second(old, new):
        if new == second:
            raise KeyboardInterrupt
        replaced(old, new)

    monkeypatch.setattr(os, "replace", killed_at_the_second)
    with pytest.raises(KeyboardInterrupt):
        write_together({first: "new", second: "new", last: "new"})
    assert sorted(tmp_path.iterdir()) == [first, second]  # the last does not say: complete
    assert (first.read_text(), second.read_text()) == ("new", "old")


def test_a_disk_that_fills_up_midway_changes_none_of_the_files(tmp_path, monkeypatch):
    files = [tmp_path / name for name in ("first", "second", "last")]
    write_together(dict.fromkeys(files, "old"))
    synced, calls = os.fsync, []

    def full_at_the_second(fd):
        calls.append(fd)
        if len(calls) == 2:
            raise OSError(errno.ENOSPC, "No space left on device")
        synced(fd)

    monkeypatch.setattr(os, "fsync", full_at_the_second)
    with pytest.raises(OutputError, match="second could not be written"):
        write_together(dict.fromkeys(files, "new"))
    assert sorted(tmp_path.iterdir()) == sorted(files)
    assert [path.read_text() for path in files] == ["old"] * 3


def test_probing_creates_the_folder_and_leaves_it_empty(tmp_path):
    probe_folder(tmp_path / "a" / "b")
    assert list((tmp_path / "a" / "b").iterdir()) == []
    probe_folder(tmp_path / "a" / "b")


@pytest.mark.parametrize("below", ["", "deeper", "deeper/still"])
def test_probing_tells_of_a_file_where_the_folder_should_be(tmp_path, below):
    (tmp_path / "night.triage").write_text("mine")
    with pytest.raises(OutputError, match=r"a file stands there.*Move that file"):
        probe_folder(tmp_path / "night.triage" / below)
    assert (tmp_path / "night.triage").read_text() == "mine"


def test_probing_tells_of_a_folder_that_takes_no_files(tmp_path, monkeypatch):
    refused = PermissionError(errno.EACCES, "Permission denied")
    monkeypatch.setattr(Path, "touch", _fail(refused))  # root may write everywhere
    with pytest.raises(
        OutputError, match=r"cannot be written: Permission.*you may write to"
    ):
        probe_folder(tmp_path)


def test_writing_below_a_file_names_the_folder(tmp_path):
    (tmp_path / "file").touch()
    with pytest.raises(OutputError) as caught:
        write_atomically(tmp_path / "file" / "flags.tsv", "x")
    assert str(tmp_path / "file") in caught.value.problem


# ---------------------------------------------------------------- the whole folder


def test_all_outputs_stand_in_the_folder_and_nothing_else(tmp_path):
    result = make_result(4)
    folder = tmp_path / "new"
    paths = write_all(
        result, folder, start=START, report_html="<p>µ</p>", sites_html="<p>Ω</p>"
    )
    assert {key: path.name for key, path in paths.items()} == {
        "flags": "flags.tsv",
        "flags_columns": "flags.json",
        "sites": "sites.tsv",
        "sites_columns": "sites.json",
        "scores": "scores.npz",
        "marks": "invented-01_marks.edf",
        "report": "report.html",
        "sheet": "sites.html",
        "result": "result.json",
    }
    assert sorted(folder.iterdir()) == sorted(paths.values())
    assert paths["flags"].read_bytes() == flags_tsv(result).encode()
    assert paths["sites"].read_bytes() == sites_tsv(result).encode()
    assert paths["report"].read_bytes() == "<p>µ</p>".encode()
    assert paths["sheet"].read_bytes() == "<p>Ω</p>".encode()
    assert paths["scores"].read_bytes() == scores_npz(result)
    texts = [entry.text for entry in edfio.read_edf(paths["marks"]).annotations]
    assert texts[1:] == [
        "Artifact: eye@@EEG Fp1-REF",
        "Artifact: eye@@EEG Fp2-REF",
        "Artifact: muscle@@EEG F7-REF",
        "Artifact: muscle@@EEG T3-REF",
        "Artifact: electrode pop@@EEG C3-REF",
        "Artifact: electrode pop",  # of the reference
    ]


def test_the_folder_of_the_sites_holds_sheet_table_and_result(tmp_path):
    result = make_result(2)
    paths = write_sites(result, tmp_path / "new", sites_html="<p>Ω</p>")
    assert {path.name for path in paths.values()} == SITES_FILES
    assert sorted((tmp_path / "new").iterdir()) == sorted(paths.values())
    assert paths["sheet"].read_text("utf-8") == "<p>Ω</p>"
    assert paths["sites"].read_text("utf-8") == sites_tsv(result)
    assert paths["sites_columns"].read_text("utf-8") == sites_columns_json()
    assert Result.from_json(paths["result"].read_text("utf-8")) == result


@pytest.mark.parametrize(
    ("files", "foreign"),
    [
        (TRIAGE_FILES, {"thesis.docx"}),
        (SITES_FILES, {"thesis.docx", "report.html", "x_marks.edf"}),
    ],
)
def test_a_folder_is_taken_only_if_all_in_it_came_from_such_a_run(tmp_path, files, foreign):
    for name in (".DS_Store", "._sites.html", ".0f.part", "result.json", "sites.tsv"):
        (tmp_path / name).write_text("old")
    with prepared_folder(tmp_path, files):
        pass
    for name in sorted(foreign):
        (tmp_path / name).write_text("mine")
        with pytest.raises(OutputError, match="holds other files") as caught:
            prepared_folder(tmp_path, files).__enter__()
        assert f"({name})" in caught.value.problem
        (tmp_path / name).unlink()


@pytest.mark.parametrize("hostile", [False, True])
def test_the_written_result_reads_back_equal(tmp_path, hostile):
    result = make_result(5, hostile=hostile)
    paths = write_all(result, tmp_path, start=None, report_html="", sites_html="")
    assert Result.from_json(paths["result"].read_text("utf-8")) == result


def test_a_pair_of_measures_reads_back_equal():
    result = _with_flag(contributions=(PAIR, make_result(1).flags[0].contributions[0]))
    text = result.to_json()
    assert Result.from_json(text) == result
    (pair, single) = json.loads(text)["flags"][0]["contributions"]
    assert [measure["feature"] for measure in pair["pair"]] == ["burst", "high_power"]
    assert single["pair"] == []


@pytest.mark.parametrize("pair", [None, [{"feature": "burst"}], [1]])
def test_a_damaged_pair_is_refused_in_words(pair):
    body = json.loads(make_result(1).to_json())
    body["flags"][0]["contributions"][0]["pair"] = pair
    with pytest.raises(ResultError, match="damaged"):
        Result.from_json(json.dumps(body))


def test_a_site_name_with_a_damaged_character_reads_back_equal(tmp_path):
    result = _with_flag(sites=("F\udc803",))
    paths = write_all(result, tmp_path, start=None, report_html="", sites_html="")
    assert Result.from_json(paths["result"].read_text("utf-8")) == result


def test_the_result_takes_its_place_last(tmp_path, monkeypatch):
    placed = []
    replaced = os.replace
    monkeypatch.setattr(
        os, "replace", lambda old, new: (placed.append(Path(new).name), replaced(old, new))
    )
    write_all(make_result(), tmp_path, start=None, report_html="", sites_html="")
    assert placed[-1] == "result.json"
    assert len(placed) == 9


def test_scores_of_an_earlier_run_do_not_outlive_it(tmp_path):
    write_all(make_result(), tmp_path, start=None, report_html="", sites_html="")
    bare = dataclasses.replace(make_result(), scores=None)
    paths = write_all(bare, tmp_path, start=None, report_html="", sites_html="")
    assert "scores" not in paths
    assert not (tmp_path / "scores.npz").exists()


@pytest.mark.parametrize(
    ("name", "file_name"),
    [
        ("sub-01_task-rest", "sub-01_task-rest_marks.edf"),
        ("Nächt 脳 1.2", "Nächt 脳 1.2_marks.edf"),
        ("../../etc/x", "_.._etc_x_marks.edf"),
        ("a\\b:c\x00\n", "a_b_c___marks.edf"),
        ("..", "recording_marks.edf"),
        ("", "recording_marks.edf"),
        ("n" * 300, "n" * 60 + "_marks.edf"),
    ],
)
def test_the_name_of_the_recording_cannot_lead_out_of_the_folder(tmp_path, name, file_name):
    result = make_result(1)
    result = dataclasses.replace(
        result, recording=dataclasses.replace(result.recording, name=name)
    )
    folder = tmp_path / "out"
    paths = write_all(result, folder, start=None, report_html="", sites_html="")
    assert paths["marks"] == folder / file_name
    assert list(tmp_path.iterdir()) == [folder]
    assert len(list(folder.iterdir())) == 9


def test_a_file_in_place_of_the_folder_is_told_of_and_kept(tmp_path):
    (tmp_path / "out").write_text("mine")
    with pytest.raises(OutputError, match="a file stands there"):
        write_all(
            make_result(), tmp_path / "out", start=None, report_html="", sites_html=""
        )
    assert (tmp_path / "out").read_text() == "mine"


def test_equal_results_give_equal_bytes(tmp_path):
    one = write_all(
        make_result(), tmp_path / "1", start=START, report_html="x", sites_html="y"
    )
    two = write_all(
        make_result(), tmp_path / "2", start=START, report_html="x", sites_html="y"
    )
    assert {key: path.read_bytes() for key, path in one.items()} == {
        key: path.read_bytes() for key, path in two.items()
    }


def test_the_caution_is_on_every_output_that_can_hold_text_beside_its_data(tmp_path):
    paths = write_all(make_result(), tmp_path, start=None, report_html="", sites_html="")
    for key in ("result", "flags_columns", "sites_columns"):
        assert CAUTION in paths[key].read_text("utf-8")
    with np.load(paths["scores"]) as archive:
        assert archive["caution"].item() == CAUTION
    assert CAUTION_TEXT.encode() in paths["marks"].read_bytes()
