"""What nobody should give, and everybody does: each is told in plain words or triaged.

All bad files go through one call of the command, all odd but usable ones through another;
each test looks at one of them.
"""

import errno
import io
import json
import shutil
import warnings
import zipfile
from datetime import UTC, date, datetime
from html.parser import HTMLParser
from pathlib import Path

import mne
import numpy as np
import pytest

from artifactlens import pipeline
from artifactlens.demo import DEMO_SITES
from artifactlens.export import atomic
from artifactlens.page import report
from artifactlens.result import Result
from artifactlens.sites import HEAD_CENTRE_M, canonical_site, site_position

SFREQ = 256
OUTPUTS = {
    "flags.tsv", "flags.json", "sites.tsv", "sites.json", "sites.html", "scores.npz",
    "report.html", "result.json",
}  # fmt: skip


def save_fif(path, data_uv, sfreq, names, *, positions=None, person=None):
    """A FIF file; positions (n, 3) are metres in mne head coordinates."""
    info = mne.create_info(list(names), sfreq, "eeg")
    raw = mne.io.RawArray(data_uv * 1e-6, info, verbose="error")
    if positions is not None:
        places = dict(zip(names, positions, strict=True))
        raw.set_montage(mne.channels.make_dig_montage(places, coord_frame="head"))
    if person is not None:
        raw.set_meas_date(datetime(2001, 2, 3, 13, 14, 15, tzinfo=UTC))
        raw.info["subject_info"] = person
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")  # it wishes for another ending of the name
        raw.save(path, verbose="error")
    return path


def head_positions():
    places = [site_position(canonical_site(name)) for name in DEMO_SITES]
    return np.array(places) + HEAD_CENTRE_M


@pytest.fixture(scope="module")
def eeg(quiet_eeg):
    return quiet_eeg(20)


# ---------------------------------------------------------------- what cannot be triaged

READER = "Check that it was exported as EDF, EDF+ or BDF and copied whole."
AGAIN = "Copy or export the recording again."
REFUSED = {
    "empty.edf": ("empty.edf is empty (0 bytes).", AGAIN),
    "cut in header.edf": ("cut in header.edf ends inside its header.", AGAIN),
    "header only.edf": (
        "header only.edf holds a header but not one whole data record.",
        "Check that the recording was closed properly and copied whole.",
    ),
    "random.edf": ("random.edf does not begin like an EDF or BDF file.", READER),
    "letter.edf": ("letter.edf does not begin like an EDF or BDF file.", READER),
    "picture.edf": ("picture.edf does not begin like an EDF or BDF file.", READER),
    "letter.txt": (
        "letter.txt has a suffix that no reader is known for.",
        "Give an EDF, EDF+, BDF, BrainVision (.vhdr), EEGLAB (.set) or FIF file.",
    ),
    "nowhere.edf": (
        "There is no file nowhere.edf at the place given.",
        "Check the path for typing errors.",
    ),
    "folder.edf": ("folder.edf is a directory.", "Give one recording file."),
    "one channel.edf": (
        "At least 2 EEG channels are needed to tell sites apart; 1 of 1 channels can be used "
        "(first labels: 'EEG Cz-REF').",
        "Give a recording with more scalp channels, or name them by the 10-20 system "
        "('Fp1-REF', 'F7-T3') or type them as EEG.",
    ),
    "heart only.edf": (
        "At least 2 EEG channels are needed to tell sites apart; 0 of 2 channels can be used "
        "(first labels: 'ECG', 'EMG chin').",
        "Give a recording with more scalp channels, or name them by the 10-20 system "
        "('Fp1-REF', 'F7-T3') or type them as EEG.",
    ),
    "half a second.fif": (
        "At least one whole second of signal is needed; half a second has 128 samples at "
        "256 Hz.",
        "Check that the recording was exported completely.",
    ),
    "flat.edf": (
        "A signal is needed on at least two EEG channels; all 19 are flat.",
        "Check that the recorder was connected and that the right channels were exported.",
    ),
    "nan.fif": (
        "A signal is needed on at least two EEG channels; all 19 hold no numbers (NaN).",
        "Check the export.",
    ),
}


@pytest.fixture(scope="module")
def refused(invoke, write_edf, eeg, tmp_path_factory):
    """The outcome of one call over all of them with a good recording in the middle."""
    home = tmp_path_factory.mktemp("refused")
    good = write_edf(home / "good.edf", eeg, SFREQ)
    whole = good.read_bytes()
    letter = "Dear colleague, please find the recording attached.\n" * 40
    (home / "empty.edf").touch()
    (home / "cut in header.edf").write_bytes(whole[:1000])
    (home / "header only.edf").write_bytes(whole[: 256 * 20])
    (home / "random.edf").write_bytes(np.random.default_rng(3).bytes(9000))
    (home / "letter.edf").write_text(letter)
    (home / "letter.txt").write_text(letter)
    (home / "picture.edf").write_bytes(b"\x89PNG\r\n\x1a\n\x00\x00\x00\rIHDR" + bytes(3000))
    (home / "folder.edf").mkdir()
    write_edf(home / "one channel.edf", eeg[:1], SFREQ, ["EEG Cz-REF"])
    write_edf(home / "heart only.edf", eeg[:2], SFREQ, ["ECG", "EMG chin"])
    save_fif(home / "half a second.fif", eeg[:, :128], SFREQ, DEMO_SITES)
    write_edf(home / "flat.edf", 0 * eeg, SFREQ)
    save_fif(home / "nan.fif", np.full_like(eeg, np.nan), SFREQ, DEMO_SITES)
    names = list(REFUSED)
    names.insert(7, "good.edf")
    before = {path.name for path in home.iterdir()}
    done = invoke("triage", "--json", *(home / name for name in names))
    left = {path.name for path in home.iterdir()} - before
    entries = {
        Path(entry["recording"]).name: entry
        for entry in json.loads(done.stdout)["recordings"]
    }
    return done, entries, left


@pytest.mark.parametrize("name", REFUSED)
def test_it_is_told_what_was_needed_what_was_given_and_what_to_do(refused, name):
    done, entries, _ = refused
    entry = entries[name]
    assert entry["status"] == "failed"
    assert (entry["problem"], entry["remedy"]) == REFUSED[name]
    assert f"  {entry['problem']}\n  {entry['remedy']}\n" in done.stderr


def test_the_good_recording_among_the_bad_ones_is_done_and_the_exit_code_is_1(refused):
    done, entries, _ = refused
    assert done.exit_code == 1
    assert entries["good.edf"]["status"] == "done"
    assert (
        f"{len(REFUSED)} of {len(REFUSED) + 1} recordings failed, the others are done"
        in (done.stderr)
    )


def test_what_failed_left_nothing_behind(refused):
    _, _, left = refused
    assert left == {"good.triage"}


def test_a_file_that_may_not_be_read_is_told(invoke, write_edf, eeg, tmp_path, monkeypatch):
    path = write_edf(tmp_path / "locked.edf", eeg, SFREQ)
    whole = Path.open

    def locked(self, *args, **kwargs):
        if self.name == "locked.edf":
            raise PermissionError(errno.EACCES, "Permission denied", str(self))
        return whole(self, *args, **kwargs)

    monkeypatch.setattr(Path, "open", locked)
    done = invoke("triage", path)
    assert done.exit_code == 1
    assert (
        "locked.edf may not be read by this user.\n  Ask for read permission" in done.stderr
    )
    assert [entry.name for entry in tmp_path.iterdir()] == ["locked.edf"]


def test_a_file_that_is_cut_while_it_is_read_is_told_and_leaves_nothing(
    invoke, write_edf, eeg, tmp_path, monkeypatch
):
    path = write_edf(tmp_path / "shrinking.edf", eeg, SFREQ)
    whole = pipeline.survey

    def shrinking(*args):
        found = whole(*args)
        path.write_bytes(path.read_bytes()[:6000])
        return found

    monkeypatch.setattr(pipeline, "survey", shrinking)
    done = invoke("triage", path)
    assert done.exit_code == 1
    assert "shrinking.edf was moved, shortened or disconnected while it was read." in (
        done.stderr
    )
    assert [entry.name for entry in tmp_path.iterdir()] == ["shrinking.edf"]


# ---------------------------------------------------------------- what is odd but usable

GAP_AT, GAP_SECONDS, BURST_AT = 8, 30.0, 14.0
BLINKS_AT = (5.3, 9.4, 13.2)


@pytest.fixture(scope="module")
def odd(invoke, write_edf, eeg, quiet_eeg, tmp_path_factory):
    """result.json, folder and report of every odd recording, from one call."""
    home = tmp_path_factory.mktemp("odd")
    write_edf(home / "three seconds.edf", eeg[:, : 3 * SFREQ], SFREQ)
    write_edf(home / "slow.edf", quiet_eeg(10, 50.0), 50)
    names = [f"lead {number}" for number in range(19)]
    write_edf(home / "nameless.edf", eeg, SFREQ, names)
    blinking = quiet_eeg(20, blinks_at=BLINKS_AT)
    save_fif(home / "placed.fif", blinking, SFREQ, names, positions=head_positions())
    write_edf(home / "named.edf", blinking, SFREQ)
    write_edf(
        home / "doubled.edf",
        eeg[:8],
        SFREQ,
        ["Fp1", "Fp2", "Fp1", "F7", "F8", "C3", "O1", "O2"],
    )
    cut = write_edf(home / "cut.edf", eeg, SFREQ)
    cut.write_bytes(cut.read_bytes()[: -7 * 19 * SFREQ * 2 - 1000])
    write_edf(home / "mV.edf", eeg / 1000, SFREQ, limit=3.2767)
    write_edf(home / "V.edf", eeg / 1e6, SFREQ, limit=0.0032767)
    write_edf(home / "nV.edf", eeg * 1000, SFREQ, limit=3276700)
    # Fast activity at T3 on either side of the gap, and once later.
    marked = eeg.copy()
    for onset, end in ((GAP_AT - 1.5, GAP_AT + 1.5), (BURST_AT, BURST_AT + 1.0)):
        marked[DEMO_SITES.index("T3"), span(onset, end)] += burst(end - onset)
    onsets = [second + GAP_SECONDS * (second >= GAP_AT) for second in range(20)]
    write_edf(home / "gap.edf", marked, SFREQ, reserved="EDF+D", onsets=onsets)
    done = invoke("triage", "--json", *sorted(home.iterdir()))
    reports = {}
    for entry in json.loads(done.stdout)["recordings"]:
        if entry["status"] == "done":
            folder = Path(entry["folder"])
            entry["body"] = json.loads((folder / "result.json").read_text(encoding="utf-8"))
        reports[Path(entry["recording"]).name] = entry
    return reports


def span(onset, end):
    return slice(round(onset * SFREQ), round(end * SFREQ))


def burst(seconds, rms_uv=40.0):
    """Noise of 30 to 100 Hz: muscle, as far as a spectrum can tell."""
    n = round(seconds * SFREQ)
    freqs = np.fft.rfftfreq(n, 1 / SFREQ)
    inside = (freqs > 30) & (freqs < 100)
    spectrum = np.fft.rfft(np.random.default_rng(4).standard_normal(n)) * inside
    wave = np.fft.irfft(spectrum, n)
    return rms_uv * wave / wave.std()


def verdicts(entry):
    return {kind: said["judged"] for kind, said in entry["kinds"].items()}


def test_three_seconds_are_triaged_and_said_to_be_too_short_for_usual_values(odd):
    entry = odd["three seconds.edf"]
    assert set(verdicts(entry).values()) == {"limited"}
    for said in entry["kinds"].values():
        assert said["reason"] == "only 3 s: too short to know what is usual here"
    assert entry["body"]["recording"]["duration"] == 3.0


def test_fifty_samples_a_second_rule_out_what_they_cannot_carry(odd):
    entry = odd["slow.edf"]
    assert verdicts(entry) == {"eye": "yes", "muscle": "no", "pop": "no", "mains": "no"}
    for kind in ("muscle", "pop", "mains"):
        said = entry["kinds"][kind]
        assert said["reason"].startswith("sampled at 50 Hz")
        assert said["flags"] == 0
    scores = np.load(Path(entry["folder"]) / "scores.npz", allow_pickle=False)
    assert np.isnan(scores["probability"][1:]).all()
    assert np.isfinite(scores["probability"][0]).any()
    for site in entry["body"]["sites"]:
        assert site["share"]["mains"] is None  # not judged is not the same as none


def test_without_names_and_places_only_what_needs_geometry_is_not_judged(odd):
    entry = odd["nameless.edf"]
    assert verdicts(entry) == {
        "eye": "no",
        "muscle": "yes",
        "pop": "limited",
        "mains": "yes",
    }
    assert "position" in entry["kinds"]["eye"]["reason"]
    assert any("No label names a known scalp site" in note for note in entry["notes"])
    assert [site["site"] for site in entry["body"]["sites"]][:2] == ["lead 0", "lead 1"]
    assert "unknown" in (Path(entry["folder"]) / "report.html").read_text(encoding="utf-8")


def test_without_names_but_with_places_the_eyes_are_judged_as_by_the_names(odd):
    placed, named = odd["placed.fif"], odd["named.edf"]
    assert verdicts(placed)["eye"] == verdicts(named)["eye"] == "yes"
    for at in BLINKS_AT:
        for entry, front in ((placed, {"lead 0", "lead 1"}), (named, {"Fp1", "Fp2"})):
            over = [
                flag
                for flag in entry["body"]["flags"]
                if flag["kind"] == "eye"
                and flag["onset"] <= at + 0.16 <= flag["onset"] + flag["duration"]
            ]
            assert over, f"no eye flag at {at} s of {entry['recording']}"
            assert front & set(over[0]["sites"])


def test_of_channels_that_share_a_name_the_first_counts_and_it_is_said(odd):
    entry = odd["doubled.edf"]
    assert "More than one channel is called Fp1." in entry["notes"]
    assert entry["body"]["recording"]["set_aside"] == [
        ["Fp1", "the same electrodes as in channel 'Fp1'"]
    ]
    assert [site["site"] for site in entry["body"]["sites"]].count("Fp1") == 1


def test_a_recording_that_ends_early_is_triaged_as_far_as_it_goes(odd):
    entry = odd["cut.edf"]
    assert entry["seconds"] == 12.0
    assert entry["notes"] == [
        "The file ends after 12 s of the 20 s its header promises; triaged as far as it goes."
    ]


def test_nanovolts_called_microvolts_are_noted_with_the_unit_that_would_fit(odd):
    entry = odd["nV.edf"]
    (note,) = entry["notes"]
    assert "where scalp EEG has 0.8 to 400 uV" in note
    assert "the values would fit scalp EEG if they were in nV" in note
    assert "nothing was rescaled" in note
    for said in entry["kinds"].values():
        assert said["judged"] != "yes"
        assert "not those of scalp EEG in microvolt" in said["reason"]


@pytest.mark.parametrize("unit", ["mV", "V"])
def test_what_is_far_too_small_is_refused_with_the_unit_that_would_fit(odd, unit):
    entry = odd[f"{unit}.edf"]
    assert entry["status"] == "failed"
    assert "all 19 are flat: their median amplitude is" in entry["problem"]
    assert f"would fit scalp EEG if they were in {unit}." in entry["problem"]
    assert "Check the unit in the header" in entry["remedy"]


def test_times_behind_a_gap_count_the_gap_and_no_flag_crosses_it(odd):
    body = odd["gap.edf"]["body"]
    assert body["recording"]["gaps"] == [[GAP_AT, GAP_SECONDS]]
    assert body["recording"]["duration"] == 50.0
    resumes = GAP_AT + GAP_SECONDS
    for flag in body["flags"]:
        end = flag["onset"] + flag["duration"]
        assert end <= GAP_AT + 0.01 or flag["onset"] >= resumes - 0.01
    muscle = [flag for flag in body["flags"] if flag["kind"] == "muscle"]
    for at in (GAP_AT - 0.3, resumes + 0.3, BURST_AT + GAP_SECONDS + 0.5):
        over = [f for f in muscle if f["onset"] <= at <= f["onset"] + f["duration"]]
        assert over, f"no muscle flag at {at} s"
        assert "T3" in over[0]["sites"]


def test_marks_behind_a_gap_lie_at_the_time_of_the_recording(odd):
    folder = Path(odd["gap.edf"]["folder"])
    marks = mne.read_annotations(folder / "gap_marks.edf")
    flagged = [flag["onset"] for flag in odd["gap.edf"]["body"]["flags"]]
    assert max(marks.onset) == pytest.approx(max(flagged), abs=1e-3)
    assert max(marks.onset) > GAP_AT + GAP_SECONDS


# ---------------------------------------------------------------- where results go


@pytest.fixture
def night(write_edf, eeg, tmp_path):
    return write_edf(tmp_path / "night.edf", eeg[:, : 12 * SFREQ], SFREQ)


def contents(folder):
    return {path.name: path.read_bytes() for path in folder.iterdir()}


def test_a_file_in_place_of_the_folder_is_told_and_kept(invoke, night):
    night.with_name("night.triage").write_text("mine")
    done = invoke("triage", night)
    assert done.exit_code == 1
    assert "a file stands there or on the way to it." in done.stderr
    assert "choose another output folder" in done.stderr
    assert night.with_name("night.triage").read_text() == "mine"


def test_a_disk_that_may_not_be_written_is_told_before_any_work(invoke, night, monkeypatch):
    def refuse(self, *args, **kwargs):
        raise OSError(errno.EROFS, "Read-only file system")

    def never(*args, **kwargs):
        raise AssertionError("the recording was read first")

    monkeypatch.setattr(Path, "touch", refuse)
    monkeypatch.setattr(pipeline, "measure_recording", never)
    done = invoke("triage", night)
    assert done.exit_code == 1
    assert "night.triage cannot be written: Read-only file system." in done.stderr
    assert "choose an output folder on another one" in done.stderr


def test_a_disk_that_fills_up_leaves_no_folder(invoke, night, tmp_path, monkeypatch):
    def full(path, content):
        raise OSError(errno.ENOSPC, "No space left on device")

    monkeypatch.setattr(atomic, "_write_synced", full)
    done = invoke("triage", night, "--out", tmp_path / "new" / "deep")
    assert done.exit_code == 1
    assert "No space left on device." in done.stderr
    assert "Free some space on that disk" in done.stderr
    assert [path.name for path in tmp_path.iterdir()] == ["night.edf"]


def test_a_page_that_cannot_be_made_leaves_the_results_of_the_earlier_run(
    invoke, night, monkeypatch
):
    assert invoke("triage", night, "--quiet").exit_code == 0
    before = contents(night.with_name("night.triage"))

    def fails(*args, **kwargs):
        raise MemoryError

    monkeypatch.setattr(report, "report_html", fails)
    assert invoke("triage", night, "--mark", "doubtful").exit_code == 1
    assert contents(night.with_name("night.triage")) == before


def test_results_of_an_earlier_run_are_replaced_desktop_litter_stays(invoke, night):
    folder = night.with_name("night.triage")
    assert invoke("triage", night, "--quiet").exit_code == 0
    first = contents(folder)
    for name in OUTPUTS:
        (folder / name).write_text("old")
    (folder / ".DS_Store").write_text("desktop")
    (folder / "._report.html").write_text("desktop")
    assert invoke("triage", night, "--quiet").exit_code == 0
    assert contents(folder) == {
        **first, ".DS_Store": b"desktop", "._report.html": b"desktop",
    }  # fmt: skip
    assert set(first) == {*OUTPUTS, "night_marks.edf"}


def test_a_folder_with_other_files_is_refused_and_kept(invoke, night):
    folder = night.with_name("night.triage")
    folder.mkdir()
    (folder / "thesis.docx").write_text("mine")
    (folder / "result.json").write_text("mine too")
    done = invoke("triage", night)
    assert done.exit_code == 1
    assert "holds other files (thesis.docx)." in done.stderr
    assert "Move them, or choose another folder with --out." in done.stderr
    assert contents(folder) == {"thesis.docx": b"mine", "result.json": b"mine too"}


def test_a_packed_fif_gets_the_folder_of_its_name(invoke, eeg, tmp_path):
    path = save_fif(tmp_path / "night_eeg.fif.gz", eeg[:, : 12 * SFREQ], SFREQ, DEMO_SITES)
    assert invoke("triage", path, "--quiet").exit_code == 0
    assert sorted(entry.name for entry in tmp_path.iterdir()) == [
        "night_eeg.fif.gz", "night_eeg.triage",
    ]  # fmt: skip


# ---------------------------------------------------------------- hostile and private


class Elements(HTMLParser):
    """Names of all elements of a page, in order."""

    def __init__(self, page):
        super().__init__()
        self.names = []
        self.feed(page)

    def handle_starttag(self, tag, attrs):
        self.names.append(tag)


def test_a_label_that_is_markup_stays_a_label(invoke, write_edf, eeg, tmp_path):
    labels = [f"lead {number}" for number in range(19)]
    evil = ["</script><b>x", '"><img src=x>', "{{7*7}}", "a|b", "=1+1", "'; --"]
    tame = ["eeeeeeeeeeee1", "eeeeeeeeeeee2", "eeeeee3", "e_4", "eee5", "eeee6"]
    loud = eeg.copy()
    loud[:6, span(4, 7)] += burst(3.0)  # so that the labels get flags and close-ups
    pages = []
    for name, first in (("evil", evil), ("tame", tame)):
        path = write_edf(tmp_path / f"{name}.edf", loud, SFREQ, first + labels[6:])
        assert invoke("triage", path, "--quiet").exit_code == 0
        page = (tmp_path / f"{name}.triage" / "report.html").read_text(encoding="utf-8")
        pages.append(Elements(page).names)
        if name == "evil":
            assert "49" not in page.partition("{{7*7}}")[0][-5:]
            assert "<img" not in page
            assert "</script><b>" not in page
    assert pages[0] == pages[1]
    folder = tmp_path / "evil.triage"
    body = json.loads((folder / "result.json").read_text(encoding="utf-8"))
    assert body["sites"][0]["site"] == evil[0]
    assert any(flag["kind"] == "muscle" for flag in body["flags"])
    rows = (folder / "flags.tsv").read_text(encoding="utf-8").splitlines()
    assert {len(row.split("\t")) for row in rows} == {13}
    for row in (folder / "sites.tsv").read_text(encoding="utf-8").splitlines():
        assert not row.startswith(("=", "'", '"'))
    marks = mne.read_annotations(folder / "evil_marks.edf")
    assert any(text.endswith(evil[0]) or evil[0] in str(names) for text, names in zip(
        marks.description, marks.ch_names, strict=True))  # fmt: skip


def test_annotations_of_ten_kilobytes_are_taken_and_not_copied(
    invoke, write_edf, eeg, tmp_path
):
    text = "secret remark " * 730
    path = write_edf(
        tmp_path / "talkative.edf",
        eeg,
        SFREQ,
        reserved="EDF+C",
        texts=[(2.5, text), (7.0, "second")],
        text_bytes=len(text) + 100,
    )
    assert invoke("triage", path, "--quiet").exit_code == 0
    folder = tmp_path / "talkative.triage"
    body = json.loads((folder / "result.json").read_text(encoding="utf-8"))
    assert body["recording"]["annotation_onsets"] == [2.5, 7.0]
    assert all(b"secret remark" not in data for data in contents(folder).values())


def laid_open(folder):
    """Bytes of every file, archives unpacked."""
    for name, data in contents(folder).items():
        yield name, data
        if zipfile.is_zipfile(io.BytesIO(data)):
            with zipfile.ZipFile(io.BytesIO(data)) as archive:
                for member in archive.namelist():
                    yield f"{name}/{member}", archive.read(member)


def private_edf(write_edf, eeg, folder):
    return write_edf(
        folder / "private.edf",
        eeg,
        SFREQ,
        patient="MCH-0234567 F 02-MAY-1951 Jane_Roe",
        recording="Startdate 03-FEB-2001 PSG-1234/2001 Dr_Roe Jane_s_recorder",
        reserved="EDF+C",
        texts=[(3.0, "Jane Roe opens her eyes")],
    )


def private_fif(write_edf, eeg, folder):
    person = {
        "his_id": "MCH-0234567", "first_name": "Jane", "last_name": "Roe",
        "birthday": date(1951, 5, 2),
    }  # fmt: skip
    return save_fif(folder / "private.fif", eeg, SFREQ, DEMO_SITES, person=person)


@pytest.mark.parametrize("make", [private_edf, private_fif])
def test_no_output_and_no_message_holds_a_person_or_a_date(
    invoke, write_edf, eeg, tmp_path, make
):
    path = make(write_edf, eeg, tmp_path)
    given = path.read_bytes()
    assert b"Jane" in given
    assert b"Roe" in given
    done = invoke("triage", path)
    assert done.exit_code == 0
    wanted = [b"jane", b"roe", b"mch-0234567", b"psg-1234", b"1951"]
    dated = [b"03-feb-2001", b"2001-02-03", b"03.02.01", b"3 feb", b"13:14", b"13.14"]
    found = [("terminal", done.output.encode()), *laid_open(tmp_path / "private.triage")]
    assert len(found) > 10
    for name, data in found:
        low = data.lower()
        assert not [word for word in wanted if word in low], name
        # The marks need the start to lie beside the recording; nothing else has it.
        if not name.endswith("_marks.edf"):
            assert not [word for word in dated if word in low], name
    header = (tmp_path / "private.triage" / "private_marks.edf").read_bytes()[:256]
    assert b"03.02.0113.14.15" in header


def test_the_failure_of_a_private_recording_names_nobody(invoke, write_edf, eeg, tmp_path):
    path = private_edf(write_edf, 0 * eeg, tmp_path)
    done = invoke("triage", path, "--json")
    assert done.exit_code == 1
    assert "Jane" not in done.output
    assert "Roe" not in done.output


def test_no_recording_is_ever_altered(invoke, write_edf, eeg, tmp_path):
    kept = tmp_path / "kept"
    kept.mkdir()
    path = write_edf(tmp_path / "night.edf", eeg, SFREQ)
    fif = save_fif(tmp_path / "night_eeg.fif", eeg, SFREQ, DEMO_SITES)
    before = [
        (shutil.copy(p, kept), p.stat().st_mtime_ns, p.stat().st_mode) for p in (path, fif)
    ]
    assert invoke("triage", path, fif, "--quiet").exit_code == 0
    assert invoke("triage", path, fif, "--mark", "doubtful").exit_code == 0  # and again
    for source, (copy, mtime, mode) in zip((path, fif), before, strict=True):
        assert source.read_bytes() == Path(copy).read_bytes()
        assert (source.stat().st_mtime_ns, source.stat().st_mode) == (mtime, mode)


def test_the_written_result_reads_back_as_the_library_gives_it(invoke, night):
    assert invoke("triage", night, "--quiet").exit_code == 0
    text = (night.with_name("night.triage") / "result.json").read_text(encoding="utf-8")
    assert Result.from_json(text) == pipeline.triage(night)
