"""``artifactlens sites``: the list for a person, the document for a script, the folder."""

import json
import os
import re
import shutil
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest

from artifactlens import bedside, pipeline
from artifactlens.advice import SITE_VERDICTS
from artifactlens.demo import DEMO_SITES
from artifactlens.errors import OptionError
from artifactlens.result import CAUTION, Result

SFREQ = 256
SECONDS = 150
WRITTEN = {"sites.html", "sites.tsv", "sites.json", "result.json"}
POPS_AT = tuple(range(65, 145, 8))
"""Ten seconds, all in the second half."""

FAULTY = "P3"


@pytest.fixture(scope="module")
def popping(write_edf, quiet_eeg, tmp_path_factory):
    """Two and a half minutes in which P3 pops ten times, from 65 s on."""
    data = quiet_eeg(SECONDS, SFREQ)
    after = np.arange(SECONDS * SFREQ)
    for number, second in enumerate(POPS_AT):
        since = (after - second * SFREQ - 100) / SFREQ
        # A step through a first-order high-pass of 0.3 Hz decays with 0.531 s (derived).
        step = np.where(since >= 0, np.exp(-np.clip(since, 0, None) / 0.531), 0.0)
        data[DEMO_SITES.index(FAULTY)] += (-1) ** number * 250.0 * step
    return write_edf(tmp_path_factory.mktemp("popping") / "night.edf", data, SFREQ)


@pytest.fixture
def night(popping, tmp_path):
    """A copy of its own, so that results lie where nothing else does."""
    return Path(shutil.copy(popping, tmp_path / "night.edf"))


@pytest.fixture(scope="module")
def done(invoke, popping):
    """What the plain command prints; its folder is read only."""
    return invoke("sites", popping)


@pytest.fixture(scope="module")
def result(done, popping):
    text = (popping.with_name("night.sites") / "result.json").read_text(encoding="utf-8")
    return Result.from_json(text)


@pytest.fixture(scope="module")
def quiet(write_edf, quiet_eeg, tmp_path_factory):
    """Twenty seconds without any fault."""
    return write_edf(tmp_path_factory.mktemp("quiet") / "calm.edf", quiet_eeg(20), SFREQ)


def files_in(folder):
    return {path.name for path in folder.iterdir()}


def table_of(folder):
    header, *rows = (folder / "sites.tsv").read_text(encoding="utf-8").splitlines()
    names = header.split("\t")
    cells = (dict(zip(names, row.split("\t"), strict=True)) for row in rows)
    return {row["site"]: row for row in cells}


def lines_of(printed, word):
    return [line for line in printed.splitlines() if line.startswith(f"{word:<12}")]


# ---------------------------------------------------------------- what a person reads


def test_the_popping_site_is_the_first_thing_to_do_in_one_line(done, popping, result):
    assert done.exit_code == 0, done.output
    assert done.stderr == ""
    lines = done.stdout.splitlines()
    assert lines[0] == f"{popping}: 2 min 30 s, 19 sites, referential, 256 Hz"
    assert re.match(r"1\. P3 re-prep: .*pops.*; .*re-prep", lines[1])
    assert [line for line in lines if re.match(r"\d+\. ", line)] == lines[
        1 : 1 + len(result.advice)
    ]


def test_what_is_to_be_left_alone_is_named_and_the_faulty_site_is_not_among_it(
    done, result
):
    (leave,) = lines_of(done.stdout, "leave")
    names = leave.removeprefix("leave").strip().split(", ")
    assert names == [row.site for row in result.sites if row.verdict == "leave"]
    assert len(names) >= 15
    assert FAULTY not in names


def test_the_sheet_is_where_it_is_said_to_be_and_the_caution_ends_it(done, popping):
    (line,) = lines_of(done.stdout, "sheet")
    sheet = Path(line.removeprefix("sheet").strip())
    assert sheet == popping.with_name("night.sites") / "sites.html"
    page = sheet.read_text(encoding="utf-8")
    assert FAULTY in page
    assert "re-prep" in page
    assert done.stdout.count(CAUTION) == 1
    assert done.stdout.splitlines()[-1] == CAUTION


def test_the_setup_is_told_in_a_line(done, result):
    assert result.setup is not None
    (line,) = lines_of(done.stdout, "setup")
    counted = (
        len(result.setup.fit) + len(result.setup.unfit) + len(result.setup.cannot_tell)
    )
    assert f"{len(result.setup.fit)} of {counted} sites fit to start" in line


def test_where_nothing_is_wrong_it_is_said_in_so_many_words(invoke, quiet):
    shown = invoke("sites", quiet)
    assert shown.exit_code == 0, shown.output
    assert shown.stdout.splitlines()[1] == "No site asks for care."
    assert not re.search(r"^\d+\. ", shown.stdout, re.MULTILINE)


def test_what_is_over_is_told_with_its_time(monkeypatch, invoke, night, result):
    from dataclasses import replace

    first = result.advice[0]
    over = replace(first, verdict="watch", state="cured", stretches=((60.0, 130.0),))
    unsure = replace(first, number=2, confidence="low")
    changed = replace(result, advice=(over, unsure))
    monkeypatch.setattr(bedside, "sites_to_folder", lambda *a, **k: (changed, Path("x")))
    lines = invoke("sites", night).stdout.splitlines()
    assert lines[1] == f"1. {over.line} (gone after handling: 0:01:00–0:02:10)"
    assert lines[2] == f"2. {unsure.line} (unsure)"


def test_impedances_above_what_is_acceptable_are_told_in_a_line(
    done, invoke, quiet, tmp_path
):
    table = tmp_path / "kohm.tsv"
    table.write_text("site\tkohm\nT4\t250\nO1\t10\nP3\t10.5\n")
    shown = invoke("sites", quiet, "--impedances", table, "--out", tmp_path)
    (line,) = lines_of(shown.stdout, "impedance")
    assert line == "impedance   above 10 kohm: T4 250, P3 10.5"
    assert lines_of(done.stdout, "impedance") == []


def test_quiet_prints_nothing_where_all_went_well(invoke, quiet, tmp_path):
    shown = invoke("sites", "--quiet", quiet, "--out", tmp_path)
    assert (shown.exit_code, shown.stdout, shown.stderr) == (0, "", "")
    assert files_in(tmp_path / "calm.sites") == WRITTEN


# ---------------------------------------------------------------- what a script reads


def test_json_is_one_document_that_agrees_with_the_written_result(invoke, night):
    shown = invoke("sites", "--json", night)
    assert shown.exit_code == 0, shown.output
    body = json.loads(shown.stdout)
    assert body["caution"] == CAUTION
    (entry,) = body["recordings"]
    assert (entry["recording"], entry["status"]) == (str(night), "done")
    folder = Path(entry["folder"])
    written = json.loads((folder / "result.json").read_text(encoding="utf-8"))
    lines = [advice.pop("line") for advice in entry["advice"]]
    assert entry["advice"] == written["advice"]
    assert lines[0].startswith(f"{FAULTY} re-prep: ")
    assert entry["setup"] == written["setup"]
    assert entry["seconds"] == 150.0
    for said, row in zip(entry["sites"], written["sites"], strict=True):
        assert said == {key: row[key] for key in said}
        assert said["verdict"] in SITE_VERDICTS


def test_the_table_says_the_same_as_the_list(done, popping, result):
    folder = popping.with_name("night.sites")
    assert files_in(folder) == WRITTEN
    table = table_of(folder)
    assert list(table) == [row.site for row in result.sites]
    assert (table[FAULTY]["verdict"], table[FAULTY]["cause"]) == ("re-prep", "site")
    assert table[FAULTY]["advice"] == "1"
    assert table[FAULTY]["why"] == result.advice[0].reason
    levels = json.loads((folder / "sites.json").read_text(encoding="utf-8"))
    assert {row["verdict"] for row in table.values()} <= set(levels["verdict"]["Levels"])


# ---------------------------------------------------------------- the last minutes


def test_the_last_minutes_alone_are_judged_and_times_stay_those_of_the_whole(
    invoke, night, tmp_path
):
    shown = invoke("sites", night, "--last", 1, "--json")
    (entry,) = json.loads(shown.stdout)["recordings"]
    first = entry["advice"][0]
    assert first["sites"] == [FAULTY]
    assert all(start >= 90.0 for start, _ in first["stretches"])
    assert max(end for _, end in first["stretches"]) <= 150.0
    assert "Judged: the last 1 min." in entry["notes"]
    assert entry["setup"] is None
    table = table_of(night.with_name("night.sites"))
    assert table["O1"]["seconds_judged"] == "60.00"
    page = night.with_name("night.sites") / "sites.html"
    assert "<b>judged: the last 1 min</b>" in page.read_text(encoding="utf-8")


def test_what_happened_before_the_last_minutes_asks_for_nothing(
    invoke, write_edf, quiet_eeg, tmp_path
):
    data = quiet_eeg(60)
    data[DEMO_SITES.index("T4"), : 25 * SFREQ] = 0.0
    path = write_edf(tmp_path / "early.edf", data, SFREQ)
    whole = json.loads(invoke("sites", path, "--json").stdout)["recordings"][0]
    late = json.loads(invoke("sites", path, "--json", "--last", 0.5).stdout)["recordings"][
        0
    ]
    assert [entry["sites"] for entry in whole["advice"]] == [["T4"]]
    assert whole["advice"][0]["state"] != "present"
    assert late["advice"] == []


def test_more_minutes_than_there_are_is_the_whole(invoke, night, result):
    shown = invoke("sites", night, "--last", 90, "--json")
    (entry,) = json.loads(shown.stdout)["recordings"]
    assert entry["notes"] == list(result.recording.notes)
    assert [advice["line"] for advice in entry["advice"]] == [a.line for a in result.advice]


# ---------------------------------------------------------------- impedances


def test_impedances_stand_beside_their_sites(invoke, quiet, tmp_path):
    table = tmp_path / "after capping.csv"
    table.write_text("site;impedance [Ohm]\nT7;4200\nRef;1000\nEEG O1-REF;61000\n")
    shown = invoke("sites", quiet, "--impedances", table, "--out", tmp_path, "--quiet")
    assert shown.exit_code == 0, shown.output
    known = {
        site: row["impedance_kohm"]
        for site, row in table_of(tmp_path / "calm.sites").items()
    }
    assert {site: value for site, value in known.items() if value != "n/a"} == {
        "T3": "4.2", "reference": "1", "O1": "61",
    }  # fmt: skip
    body = json.loads((tmp_path / "calm.sites" / "result.json").read_text(encoding="utf-8"))
    by_site = {row["site"]: row["impedance_kohm"] for row in body["sites"]}
    assert (by_site["T3"], by_site["Fz"]) == (4.2, None)


def test_a_bids_table_beside_the_recording_is_found(invoke, quiet, tmp_path):
    path = Path(shutil.copy(quiet, tmp_path / "sub-01_task-rest_eeg.edf"))
    (tmp_path / "sub-01_electrodes.tsv").write_text(
        "name\tx\ty\tz\timpedance\nFz\t0\t0\t0\t7\nCz\t0\t0\t0\tn/a\n"
    )
    assert invoke("sites", path, "--quiet").exit_code == 0
    table = table_of(tmp_path / "sub-01_task-rest_eeg.sites")
    assert (table["Fz"]["impedance_kohm"], table["Cz"]["impedance_kohm"]) == ("7", "n/a")


def test_a_table_that_names_nothing_of_the_recording_fails_before_any_work(
    invoke, quiet, tmp_path, monkeypatch
):
    def never(*args, **kwargs):
        raise AssertionError("the recording was read first")

    monkeypatch.setattr(bedside, "measure_recording", never)
    table = tmp_path / "other.tsv"
    table.write_text("E1\t5\nE2\t7\n")
    shown = invoke("sites", quiet, "--impedances", table, "--out", tmp_path)
    assert shown.exit_code == 1
    assert shown.stdout == ""
    assert "other.tsv needs to name sites of the recording; it has values for E1, E2" in (
        shown.stderr
    )
    assert "Name the sites as the recording does" in shown.stderr
    assert files_in(tmp_path) == {"other.tsv"}


# ---------------------------------------------------------------- what goes wrong


@pytest.mark.parametrize(
    ("arguments", "words"),
    [
        (["sites"], "Missing argument 'RECORDING'"),
        (["sites", "a.edf", "b.edf"], "unexpected extra argument"),
        (["sites", "a.edf", "--last", "0"], "'--last'"),
        (["sites", "a.edf", "--last", "soon"], "'--last'"),
        (["sites", "a.edf", "--line-frequency", "55"], "'auto', '50', '60'"),
        (["sites", "a.edf", "--mark", "sure"], "No such option"),
    ],
)
def test_wrong_usage_ends_with_2_and_says_what_is_possible(invoke, arguments, words):
    shown = invoke(*arguments)
    assert shown.exit_code == 2
    assert words in shown.stderr
    assert shown.stdout == ""


@pytest.mark.parametrize("last", ["nan", "inf", "0.001"])
def test_no_time_at_all_is_told_in_words(invoke, quiet, tmp_path, last):
    shown = invoke("sites", quiet, "--last", last, "--out", tmp_path)
    assert shown.exit_code == 1
    assert "The last minutes need to be a number, at least a second" in shown.stderr
    assert files_in(tmp_path) == set()


def test_the_library_refuses_a_line_frequency_that_it_does_not_know(quiet, tmp_path):
    with pytest.raises(OptionError, match="given was 55"):
        bedside.sites_to_folder(quiet, tmp_path / "x", line_frequency=55)


def test_a_failure_is_told_on_both_ways_and_leaves_nothing(invoke, tmp_path):
    (tmp_path / "broken.edf").write_bytes(b"")
    shown = invoke("sites", tmp_path / "broken.edf")
    assert (shown.exit_code, shown.stdout) == (1, "")
    assert shown.stderr.splitlines() == [
        f"Failed: {tmp_path / 'broken.edf'}",
        "  broken.edf is empty (0 bytes).",
        "  Copy or export the recording again.",
    ]
    body = json.loads(invoke("sites", "--json", tmp_path / "broken.edf").stdout)
    assert body["recordings"][0]["status"] == "failed"
    assert files_in(tmp_path) == {"broken.edf"}


def test_an_error_that_nobody_thought_of_names_the_call_and_no_person(
    invoke, quiet, tmp_path, monkeypatch
):
    def failing(*args, **kwargs):
        raise ZeroDivisionError("Jane Roe")

    monkeypatch.setattr(bedside, "conclude", failing)
    shown = invoke("sites", quiet, "--out", tmp_path)
    assert shown.exit_code == 1
    assert "ZeroDivisionError" in shown.stderr
    assert "artifactlens.bedside.sites_to_folder(path)" in shown.stderr
    assert "Roe" not in shown.output
    assert files_in(tmp_path) == set()


def test_a_folder_with_other_files_is_refused_and_kept(invoke, quiet, tmp_path):
    folder = tmp_path / "calm.sites"
    folder.mkdir()
    (folder / "report.html").write_text("mine")
    shown = invoke("sites", quiet, "--out", tmp_path)
    assert shown.exit_code == 1
    assert "holds other files (report.html)." in shown.stderr
    assert (folder / "report.html").read_text() == "mine"
    assert files_in(folder) == {"report.html"}


def test_results_of_an_earlier_run_are_replaced_with_the_same_bytes(
    invoke, quiet, tmp_path
):
    def contents():
        return {p.name: p.read_bytes() for p in (tmp_path / "calm.sites").iterdir()}

    assert invoke("sites", quiet, "--out", tmp_path, "--quiet").exit_code == 0
    first = contents()
    for name in WRITTEN:
        (tmp_path / "calm.sites" / name).write_text("old")
    assert invoke("sites", quiet, "--out", tmp_path, "--quiet").exit_code == 0
    assert contents() == first


def test_no_name_from_a_file_steers_the_terminal_or_the_sheet(
    invoke, write_edf, quiet_eeg, tmp_path
):
    data = quiet_eeg(20)[:4]
    data[0] = 0.0  # so that the first label is in the list
    labels = ["\x1b[31mred", "</script>", "a\rb", "{{7*7}}"]
    path = write_edf(tmp_path / "steer.edf", data, SFREQ, labels)
    shown = invoke("sites", path)
    assert shown.exit_code == 0, shown.output
    assert not {"\x1b", "\x07", "\r", "\x08"} & set(shown.output)
    page = (tmp_path / "steer.sites" / "sites.html").read_text(encoding="utf-8")
    assert "</script>" not in page
    assert "{{7*7}}" in page
    assert "\x1b" not in page


def test_no_output_holds_a_person_or_a_date(invoke, write_edf, quiet_eeg, tmp_path):
    path = write_edf(
        tmp_path / "private.edf",
        quiet_eeg(20),
        SFREQ,
        patient="MCH-0234567 F 02-MAY-1951 Jane_Roe",
        recording="Startdate 03-FEB-2001 PSG-1234/2001 Dr_Roe Jane_s_recorder",
        reserved="EDF+C",
        texts=[(3.0, "Jane Roe opens her eyes")],
    )
    before = path.read_bytes()
    shown = invoke("sites", path)
    assert shown.exit_code == 0, shown.output
    found = [shown.output, *(p.read_text() for p in (tmp_path / "private.sites").iterdir())]
    assert len(found) == 5
    for text in found:
        low = text.lower()
        words = ("jane", "roe", "mch-0234567", "psg-1234", "1951", "03-feb", "03.02.01")
        assert not [word for word in words if word in low]
    assert path.read_bytes() == before


# ---------------------------------------------------------------- triage, and as a process


def test_a_triage_writes_the_same_sheet(invoke, night, done, popping):
    assert invoke("triage", night, "--quiet").exit_code == 0
    triaged = night.with_name("night.triage")
    alone = popping.with_name("night.sites")
    assert files_in(triaged) >= WRITTEN
    for name in ("sites.html", "sites.tsv", "sites.json"):
        assert (triaged / name).read_bytes() == (alone / name).read_bytes()


def test_the_command_opens_no_more_than_it_needs_to_help(invoke):
    shown = subprocess.run(
        [sys.executable, "-X", "importtime", "-m", "artifactlens", "sites", "--help"],
        capture_output=True,
        text=True,
        timeout=60,
    )
    assert shown.returncode == 0
    assert "--calibration" in shown.stdout
    assert not re.search(r"\| +(numpy|scipy|mne|rich)$", shown.stderr, re.MULTILINE)


def command():
    """The installed command, or the module where it is not installed beside this Python."""
    found = shutil.which("artifactlens", path=str(Path(sys.executable).parent))
    return [found] if found else [sys.executable, "-W", "error", "-m", "artifactlens"]


def test_as_a_process_it_prints_the_list_and_ends_with_its_code(night):
    environment = {**os.environ, "PYTHONIOENCODING": "utf-8"}
    good = subprocess.run(
        [*command(), "sites", "night.edf", "--last", "2"],
        capture_output=True,
        encoding="utf-8",
        cwd=night.parent,
        env=environment,
        timeout=120,
    )
    assert (good.returncode, good.stderr) == (0, "")
    assert good.stdout.startswith("night.edf: 2 min 30 s, 19 sites")
    assert "\n1. P3 re-prep: " in good.stdout
    bad = subprocess.run(
        [*command(), "sites", "nowhere.edf"],
        capture_output=True,
        text=True,
        cwd=night.parent,
    )
    assert bad.returncode == 1
    assert "There is no file nowhere.edf" in bad.stderr


def test_calibration_and_line_frequency_reach_the_judgement(night, monkeypatch, tmp_path):
    asked = {}
    whole = pipeline.conclude

    def watched(*args, **kwargs):
        asked.update(kwargs)
        return whole(*args, **kwargs)

    monkeypatch.setattr(bedside, "conclude", watched)
    result, _ = bedside.sites_to_folder(
        night, tmp_path / "x", calibration=True, line_frequency=60.0
    )
    assert asked["calibration"] is True
    assert asked["impedances_kohm"] is None
    assert result.parameters["line_frequency"] == "60"
