"""The command as a person calls it: what it prints, where, and how it ends."""

import json
import os
import re
import shutil
import struct
import subprocess
import sys
from pathlib import Path

import pytest

import artifactlens
from artifactlens import pipeline
from artifactlens.cli import demo as cli_demo
from artifactlens.cli import main
from artifactlens.cli import triage as cli_triage
from artifactlens.kinds import KIND_NAMES
from artifactlens.result import CAUTION


@pytest.fixture(scope="module")
def recording(write_edf, quiet_eeg, tmp_path_factory):
    return write_edf(tmp_path_factory.mktemp("recording") / "night.edf", quiet_eeg(12), 256)


@pytest.fixture
def night(recording, tmp_path):
    """A copy of its own, so that results lie where nothing else does."""
    return Path(shutil.copy(recording, tmp_path / "night.edf"))


@pytest.fixture
def broken(tmp_path):
    path = tmp_path / "broken.edf"
    path.write_bytes(b"")
    return path


def files_in(folder):
    return sorted(path.name for path in folder.iterdir())


# ---------------------------------------------------------------- help and usage


def test_help_names_the_commands_with_what_they_do_uncut(invoke):
    shown = invoke("--help", width=80).stdout
    assert "sites   Say which electrodes to look after, and why." in shown
    assert "triage  Mark the artifacts of EEG recordings." in shown
    assert "demo    Try it on an invented recording." in shown
    assert "not a medical device" in shown


@pytest.mark.parametrize("name", sorted(main.commands))
@pytest.mark.parametrize("flag", ["-h", "--help"])
def test_every_option_has_a_sentence_in_the_help_and_the_exit_codes_stand_there(
    invoke, name, flag
):
    done = invoke(name, flag)
    assert done.exit_code == 0
    codes = {
        "watch": "0 ended by you; 1 no stream",
        "replay": "0 played, or ended by you; 1",
    }
    assert (
        f"Exit codes: {codes.get(name, '0 done; 1 some recording failed')}" in done.stdout
    )
    for option in main.commands[name].params:
        if option.param_type_name == "option" and option.name != "help":
            assert option.help.endswith(".")
            assert option.opts[0] in done.stdout


def test_the_version_is_that_of_the_package(invoke):
    assert (
        invoke("--version").stdout.strip()
        == f"artifactlens, version {artifactlens.__version__}"
    )


@pytest.mark.parametrize(
    ("arguments", "words"),
    [
        (["triage"], "Missing argument 'RECORDING...'"),
        (["triage", "x.edf", "--mark", "some"], "'sure', 'doubtful'"),
        (["triage", "x.edf", "--line-frequency", "55"], "'auto', '50', '60'"),
        (["triage", "x.edf", "--loud"], "No such option"),
        (["demo", "a", "b"], "unexpected extra argument"),
        (["clean", "x.edf"], "No such command 'clean'"),
    ],
)
def test_wrong_usage_ends_with_2_and_says_what_is_possible(invoke, arguments, words):
    done = invoke(*arguments)
    assert done.exit_code == 2
    assert words in done.stderr
    assert done.stdout == ""


# ---------------------------------------------------------------- one recording


def test_a_triage_prints_one_line_per_kind_the_place_of_the_report_and_the_caution(
    invoke, night
):
    done = invoke("triage", night)
    assert done.exit_code == 0
    assert done.stderr == ""
    lines = done.stdout.splitlines()
    assert lines[0] == f"{night}: 12 s, 19 sites, referential, 256 Hz"
    assert lines[1].split() == [
        "kind",
        "judged",
        "flags",
        "touched",
        "sites",
        "flagged",
        "most",
    ]
    assert tuple(line.split()[0] for line in lines[2:6]) == KIND_NAMES
    report = Path(lines[-3].removeprefix("report").strip())
    assert report == night.with_name("night.triage") / "report.html"
    assert report.exists()
    assert done.stdout.count(CAUTION) == 1
    assert lines[-1] == CAUTION


def test_quiet_prints_nothing_where_all_went_well(invoke, night):
    done = invoke("triage", "--quiet", night)
    assert (done.exit_code, done.stdout, done.stderr) == (0, "", "")
    assert (night.with_name("night.triage") / "result.json").exists()


def test_json_is_one_document_that_agrees_with_the_result(invoke, night, broken):
    done = invoke("triage", "--json", night, broken)
    assert done.exit_code == 1
    body = json.loads(done.stdout)
    assert body["caution"] == CAUTION
    good, bad = body["recordings"]
    assert good["recording"] == str(night)
    assert good["status"] == "done"
    assert good["seconds"] == 12.0
    result = json.loads((Path(good["folder"]) / "result.json").read_text(encoding="utf-8"))
    for kind, entry in zip(KIND_NAMES, result["assessable"], strict=True):
        said = good["kinds"][kind]
        assert (said["judged"], said["reason"]) == (entry["verdict"], entry["reason"])
        assert said["flags"] == sum(flag["kind"] == kind for flag in result["flags"])
        assert said["seconds_touched"] == result["touched"][kind]
    assert bad == {
        "recording": str(broken),
        "status": "failed",
        "problem": "broken.edf is empty (0 bytes).",
        "remedy": "Copy or export the recording again.",
    }


def test_out_takes_the_folder_and_leaves_the_place_of_the_recording_alone(
    invoke, night, tmp_path
):
    out = tmp_path / "not" / "there yet"
    assert invoke("triage", night, "--out", out, "--quiet").exit_code == 0
    assert files_in(out) == ["night.triage"]
    assert "result.json" in files_in(out / "night.triage")
    assert files_in(night.parent) == ["night.edf", "not"]


def test_mark_and_line_frequency_reach_the_result(triage_json, night):
    body, _ = triage_json(night, "--mark", "doubtful", "--line-frequency", "60")
    assert body["parameters"] == {"mark": "doubtful", "line_frequency": "60"}
    assert body["recording"]["line_frequency"] == 60.0


def test_doubtful_never_marks_less_than_sure(triage_json, demo, tmp_path):
    path = Path(shutil.copy(demo.path, tmp_path / "workshop.edf"))
    more, _ = triage_json(path, "--mark", "doubtful")
    for kind, seconds in demo.body["touched"].items():
        assert more["touched"][kind] >= seconds
    assert more["touched"]["any"] > demo.body["touched"]["any"]


@pytest.mark.parametrize(
    ("options", "named"), [({"mark": "Sure"}, "'Sure'"), ({"line_frequency": 55}, "55")]
)
def test_the_library_refuses_options_that_it_does_not_know(night, options, named):
    with pytest.raises(ValueError, match=f"given was {named}"):
        artifactlens.triage(night, **options)


# ---------------------------------------------------------------- several recordings


def test_a_failure_does_not_stop_the_others_and_is_named_again_at_the_end(
    invoke, night, broken
):
    done = invoke("triage", broken, night)
    assert done.exit_code == 1
    assert done.stdout.startswith(f"{night}: 12 s")
    assert done.stdout.count(CAUTION) == 1
    assert done.stderr.splitlines() == [
        f"Failed: {broken}",
        "  broken.edf is empty (0 bytes).",
        "  Copy or export the recording again.",
        f"1 of 2 recordings failed, the others are done: {broken}",
    ]


def test_where_all_fail_nothing_is_said_to_be_done(invoke, broken, tmp_path):
    other = tmp_path / "other.edf"
    done = invoke("triage", broken, other)
    assert done.exit_code == 1
    assert done.stdout == ""
    assert "There is no file other.edf" in done.stderr
    assert f"2 of 2 recordings failed, none is done: {broken}, {other}" in done.stderr


def test_each_recording_is_printed_before_the_next_one_begins(
    invoke, night, tmp_path, monkeypatch
):
    second = Path(shutil.copy(night, tmp_path / "second.edf"))
    whole, said = pipeline.triage_to_folder, []

    def watched(path, *args, **kwargs):
        said.append(f"begin {path.name}")
        return whole(path, *args, **kwargs)

    printed = cli_triage.print_result

    def printing(result, report):
        said.append(f"print {Path(report['recording']).name}")
        printed(result, report)

    monkeypatch.setattr(pipeline, "triage_to_folder", watched)
    monkeypatch.setattr(cli_triage, "print_result", printing)
    assert invoke("triage", night, second).exit_code == 0
    assert said == [
        "begin night.edf", "print night.edf", "begin second.edf", "print second.edf",
    ]  # fmt: skip


def test_a_file_given_twice_is_triaged_once(invoke, night):
    again = night.parent / "." / ".." / night.parent.name / "night.edf"
    done = invoke("triage", night, again, "--json")
    assert done.exit_code == 0
    assert [entry["recording"] for entry in json.loads(done.stdout)["recordings"]] == [
        str(night)
    ]


def test_two_recordings_with_one_folder_of_results_are_not_mixed(invoke, night, tmp_path):
    other = tmp_path / "other"
    other.mkdir()
    second = Path(shutil.copy(night, other / "night.edf"))
    out = tmp_path / "out"
    done = invoke("triage", night, second, "--out", out)
    assert done.exit_code == 1
    assert f"{out / 'night.triage'} already holds the results of {night}." in done.stderr
    assert "Triage them in two calls with different --out folders." in done.stderr
    body = json.loads((out / "night.triage" / "result.json").read_text(encoding="utf-8"))
    assert body["recording"]["name"] == "night"


def test_of_files_that_belong_together_the_companions_are_told_apart(
    invoke, quiet_eeg, tmp_path
):
    import pybv

    pybv.write_brainvision(
        data=quiet_eeg(12)[:4] * 1e-6,
        sfreq=256,
        ch_names=["Fp1", "Fp2", "O1", "O2"],
        fname_base="night",
        folder_out=tmp_path,
    )
    done = invoke("triage", tmp_path / "night.vhdr", tmp_path / "night.eeg")
    assert done.exit_code == 1
    assert done.stdout.startswith(f"{tmp_path / 'night.vhdr'}: 12 s, 4 sites")
    assert "night.eeg is only a part of night.vhdr.\n  Give night.vhdr." in done.stderr


def test_a_file_that_cannot_be_read_does_not_take_the_folder_of_its_namesake(
    invoke, night, tmp_path
):
    (tmp_path / "night.bdf").write_bytes(b"not a recording")
    done = invoke("triage", tmp_path / "night.bdf", night)
    assert done.exit_code == 1
    assert f"1 of 2 recordings failed, the others are done: {tmp_path / 'night.bdf'}" in (
        done.stderr
    )
    assert (tmp_path / "night.triage" / "result.json").exists()


def test_an_error_that_nobody_thought_of_fails_that_recording_alone(
    invoke, night, tmp_path, monkeypatch
):
    second = Path(shutil.copy(night, tmp_path / "second.edf"))
    whole = pipeline.triage_to_folder

    def failing(path, *args, **kwargs):
        if path.name == "night.edf":
            raise ZeroDivisionError("Jane Roe")
        return whole(path, *args, **kwargs)

    monkeypatch.setattr(pipeline, "triage_to_folder", failing)
    done = invoke("triage", night, second)
    assert done.exit_code == 1
    assert "An error that artifactlens does not know: ZeroDivisionError." in done.stderr
    assert "report it" in done.stderr
    assert "Roe" not in done.output  # a foreign message may quote the header
    assert (tmp_path / "second.triage" / "result.json").exists()


def test_an_interrupt_leaves_no_folder(invoke, night, monkeypatch):
    def interrupted(*args, **kwargs):
        raise KeyboardInterrupt

    monkeypatch.setattr(pipeline, "conclude", interrupted)
    done = invoke("triage", night)
    assert done.exit_code == 1
    assert "Aborted!" in done.stderr
    assert files_in(night.parent) == ["night.edf"]


# ---------------------------------------------------------------- the demonstration


def test_the_demo_says_that_nobody_was_recorded_and_shows_all_four_kinds(demo):
    lines = demo.printed.splitlines()
    assert lines[0] == f"Wrote {demo.path}: an invented recording, no person was recorded."
    counts = {line.split()[0]: line.split()[1:3] for line in lines if line.split()}
    for kind in KIND_NAMES:
        judged, flags = counts[kind]
        assert judged == "yes"
        assert int(flags) >= 1


def test_the_demo_goes_into_a_folder_of_its_own_where_none_is_named(
    invoke, tmp_path, monkeypatch
):
    monkeypatch.chdir(tmp_path)
    monkeypatch.setattr(cli_demo, "triage_all", lambda *args: [])
    assert invoke("demo").exit_code == 0
    assert files_in(tmp_path) == ["artifactlens-demo"]
    assert files_in(tmp_path / "artifactlens-demo") == ["workshop.edf"]


def test_a_demo_that_cannot_be_written_is_told(invoke, tmp_path):
    (tmp_path / "blocked").write_text("mine")
    done = invoke("demo", tmp_path / "blocked")
    assert done.exit_code == 1
    assert done.stdout == ""
    assert f"Failed: {tmp_path / 'blocked'}" in done.stderr
    assert "a file stands there or on the way to it." in done.stderr


# ---------------------------------------------------------------- hostile names


@pytest.mark.parametrize(
    "name",
    ["two words", "Übung-й-脳波", "brain 🧠", "-leading", "--quiet", "a[red]b", "it's"],
)
def test_any_file_name_is_taken_and_shown(invoke, night, monkeypatch, name):
    monkeypatch.chdir(night.parent)
    night.rename(f"{name}.edf")
    done = invoke("triage", "--", f"{name}.edf")
    assert done.exit_code == 0, done.stderr
    assert f"{name}.edf: 12 s" in done.stdout
    written = files_in(Path(f"{name}.triage"))
    assert len(written) == 9
    assert "result.json" in written


def test_a_file_name_that_is_no_text_breaks_neither_output(invoke, night):
    odd = Path(os.fsdecode(os.fsencode(night.with_name("caf")) + b"\xe9.edf"))
    try:
        night.rename(odd)
    except OSError:
        pytest.skip("this file system takes only names that are text")
    assert invoke("triage", odd).exit_code == 0
    done = invoke("triage", odd, "--json")
    assert json.loads(done.stdout)["recordings"][0]["recording"] == str(odd)


def test_no_name_from_a_file_steers_the_terminal(invoke, write_edf, quiet_eeg, tmp_path):
    path = write_edf(
        tmp_path / "steer\x1b[2J.edf",
        quiet_eeg(12)[:4],
        256,
        labels=["\x1b[31mred", "\x1b]0;title\x07", "a\rb", "c\x08d"],
    )
    done = invoke("triage", path)
    assert done.exit_code == 0, done.stderr
    assert not {"\x1b", "\x07", "\r", "\x08"} & set(done.output)


# ---------------------------------------------------------------- terminals and processes


def in_terminal(arguments, columns, cwd):
    """Run the command on a terminal of this width; exit code and all that was shown."""
    pty = pytest.importorskip("pty", reason="this system has no pseudo-terminals")
    fcntl, termios = pytest.importorskip("fcntl"), pytest.importorskip("termios")
    leader, follower = pty.openpty()
    fcntl.ioctl(follower, termios.TIOCSWINSZ, struct.pack("HHHH", 40, columns, 0, 0))
    environment = {k: v for k, v in os.environ.items() if k not in ("COLUMNS", "NO_COLOR")}
    process = subprocess.Popen(
        [sys.executable, "-W", "error", "-m", "artifactlens", *map(str, arguments)],
        stdin=subprocess.DEVNULL,
        stdout=follower,
        stderr=follower,
        cwd=cwd,
        env={**environment, "TERM": "xterm"},
    )
    os.close(follower)
    shown = b""
    while True:
        try:
            part = os.read(leader, 4096)
        except OSError:  # Linux says so when the other side has closed
            break
        if not part:
            break
        shown += part
    os.close(leader)
    return process.wait(timeout=60), shown.decode()


def test_on_a_terminal_good_and_bad_recordings_pass_with_their_progress(night, broken):
    """Each line fits into 80 columns, words stay whole, and the bar is gone at the end."""
    code, shown = in_terminal(["triage", "broken.edf", "night.edf"], 80, night.parent)
    assert code == 1
    assert "Traceback" not in shown
    assert "opening" in shown
    _, _, rest = shown.rpartition("\x1b[2K")  # the last time that the bar was wiped
    plain = re.sub(r"\x1b\[[0-9;?]*[a-zA-Z]", "", rest).replace("\r\n", "\n")
    lines = plain.splitlines()
    assert lines[0] == "night.edf: 12 s, 19 sites, referential, 256 Hz"
    assert max(len(line) for line in lines) <= 80
    assert CAUTION in " ".join(lines)
    assert "1 of 2 recordings failed, the others are done: broken.edf" in plain
    assert "Failed: broken.edf" in shown


def test_the_module_runs_as_a_command_without_a_warning(night, broken):
    done = subprocess.run(
        [
            sys.executable,
            "-W",
            "error",
            "-m",
            "artifactlens",
            "triage",
            "night.edf",
            "--json",
        ],
        capture_output=True,
        text=True,
        cwd=night.parent,
        timeout=120,
    )
    assert done.returncode == 0, done.stderr
    assert done.stderr == ""
    assert json.loads(done.stdout)["recordings"][0]["folder"] == "night.triage"


def test_the_installed_command_is_the_same(night):
    command = shutil.which("artifactlens", path=str(Path(sys.executable).parent))
    if command is None:
        pytest.skip("the package is not installed beside this Python: no console script")
    done = subprocess.run(
        [command, "triage", "night.edf", "nowhere.edf"],
        capture_output=True,
        text=True,
        cwd=night.parent,
        timeout=120,
    )
    assert done.returncode == 1
    assert done.stdout.startswith("night.edf: 12 s")
    assert "There is no file nowhere.edf" in done.stderr
