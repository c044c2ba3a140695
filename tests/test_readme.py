"""The README is tested: its commands, its options, its code, and what it says is written."""

import ast
import re
import shlex
import shutil
import subprocess
from pathlib import Path

import click
import pytest

import artifactlens
from artifactlens.cli import main
from artifactlens.export.flags_table import COLUMNS as FLAG_COLUMNS
from artifactlens.kinds import KIND_NAMES

ROOT = Path(__file__).resolve().parents[1]
README = (ROOT / "README.md").read_text(encoding="utf-8")
BLOCKS = re.findall(r"^```(\w*)\n(.*?)^```", README, re.MULTILINE | re.DOTALL)
OPTIONS = [
    (name, option.opts[0])
    for name, command in main.commands.items()
    for option in command.params
    if isinstance(option, click.Option)
]


def marked(name):
    """The lines between ``<!-- name -->`` and ``<!-- end -->``, without fences and blanks."""
    found = re.findall(rf"<!-- {name} -->\n(.*?)<!-- end -->", README, re.DOTALL)
    assert len(found) == 1, f"the README needs one block marked {name!r}"
    return [line for line in found[0].splitlines() if line and not line.startswith("```")]


def calls(text):
    """All ``artifactlens ...`` command lines in code blocks and code spans."""
    code = "\n".join(body for language, body in BLOCKS if language != "python")
    prose = re.sub(r"^```.*?^```", "", text, flags=re.MULTILINE | re.DOTALL)
    code += "\n" + "\n".join(re.findall(r"`([^`\n]+)`", prose))
    return re.findall(r"(?:^|[\s/])artifactlens ([a-z].*)", code, re.MULTILINE)


@pytest.mark.parametrize("name", ["demo command", "test command"])
def test_setting_up_and_running_is_one_line_that_a_shell_understands(name):
    (line,) = marked(name)
    done = subprocess.run(["sh", "-n", "-c", line], capture_output=True, text=True)
    assert done.returncode == 0, done.stderr
    assert shlex.split(line)[:3] == ["python3", "-m", "venv"]
    assert "pip install" in line


def test_the_demo_command_ends_in_the_demo_and_the_test_command_in_the_tests():
    assert marked("demo command")[0].endswith("/artifactlens demo")
    assert marked("test command")[0].endswith("/pytest")


def test_the_continuous_check_runs_the_test_command_of_the_readme():
    """The very pipe that .ci/run has, run here on the README."""
    path = ROOT / ".ci" / "run"
    if not path.exists():
        pytest.skip("a source distribution carries no .ci")
    script = path.read_text(encoding="utf-8")
    (line,) = re.findall(r"^command=\$\((.*README\.md.*)\)$", script, re.MULTILINE)
    assert 'bash -c "$command"' in script
    done = subprocess.run(["sh", "-c", line], capture_output=True, text=True, cwd=ROOT)
    assert done.stdout.strip().splitlines() == marked("test command")


def test_the_test_extra_of_the_readme_exists():
    project = (ROOT / "pyproject.toml").read_text(encoding="utf-8")
    (extra,) = re.findall(r"\.\[(\w+)\]", marked("test command")[0])
    assert re.search(rf"^{extra} = \[", project, re.MULTILINE)


@pytest.mark.parametrize(("command", "option"), OPTIONS)
def test_every_option_of_every_command_stands_in_the_readme(command, option):
    usage = [call for call in calls(README) if call.split()[0] == command]
    assert usage, f"the README shows no 'artifactlens {command} ...'"
    assert any(option in call for call in usage), f"{option} of {command} is not shown"


def test_every_choice_of_every_option_stands_in_the_readme():
    for command in main.commands.values():
        for option in command.params:
            if isinstance(option.type, click.Choice):
                assert "|".join(option.type.choices) in README


def test_every_command_line_of_the_readme_exists():
    found = calls(README)
    assert len(found) >= 4
    for call in found:
        name = call.split()[0]
        assert name in main.commands, f"artifactlens {call}"
        known = {opt for option in main.commands[name].params for opt in option.opts}
        used = re.findall(r"(?<![\w-])--?[a-z][\w-]*", call)
        assert set(used) <= known | {"--help", "-h"}, f"artifactlens {call}"


def test_every_option_that_the_readme_names_exists():
    known = {opt for _, opt in OPTIONS} | {"--help", "--version"}
    prose = README
    for line in marked("demo command") + marked("test command"):
        prose = prose.replace(line, "")
    spans = "\n".join(re.findall(r"`([^`\n]+)`", prose))
    named = set(re.findall(r"(?<![\w-])--[a-z][\w-]*", spans))
    foreign = {"--corpora", "--full-forest"}  # of scripts/train.py
    assert named - known <= foreign


def test_no_heading_is_a_gap_left_open():
    """A line of capitals alone is a place kept for text that never came."""
    assert re.findall(r"^[A-Z]{3,}$", README, re.MULTILINE) == []


def test_links_and_paths_of_the_readme_lead_somewhere():
    for target in re.findall(r"\]\(([^)#]+)\)", README):
        if "://" not in target:
            assert (ROOT / target).exists(), target
    for path in re.findall(r"`((?:data_cards|scripts|models|tests)/[\w./-]*)`", README):
        assert (ROOT / path).exists(), path


def test_the_table_of_outputs_names_all_that_is_written_and_nothing_else(demo):
    rows = re.findall(r"^\| (`[^|]*) \|", README, re.MULTILINE)
    named = {name for row in rows for name in re.findall(r"`([\w.]+\.\w+)`", row)}
    written = {path.name.replace("workshop", "x") for path in demo.folder.iterdir()}
    assert named == written


def test_the_columns_of_the_flags_stand_there_in_their_order():
    assert f"`{' '.join(column.name for column in FLAG_COLUMNS)}`" in README


def test_the_caution_of_the_outputs_stands_in_the_readme():
    flowing = " ".join(re.sub(r"^> ?", "", README, flags=re.MULTILINE).split())
    assert (
        artifactlens.CAUTION.removeprefix("artifactlens is ").split(". ", 1)[1] in flowing
    )
    assert "not a medical device" in flowing


@pytest.mark.parametrize(
    "code", [body for language, body in BLOCKS if language == "python"]
)
def test_the_python_of_the_readme_runs_on_a_recording(
    demo, tmp_path, monkeypatch, capsys, code
):
    """On the demonstration, under the file name that the README uses."""
    ast.parse(code)
    (name,) = set(re.findall(r"\"([\w-]+\.edf)\"", code))
    shutil.copy(demo.path, tmp_path / name)
    monkeypatch.chdir(tmp_path)
    space = {}
    exec(compile(code, "README.md", "exec"), space)
    printed = capsys.readouterr().out.splitlines()
    assert len(printed) == len(demo.body["flags"])
    assert demo.body["flags"][0]["sentence"] in printed[0]
    assert space["worst"].shape == (240,)


def test_the_attributes_that_the_readme_promises_are_there(demo):
    result = artifactlens.Result.from_json(
        (demo.folder / "result.json").read_text(encoding="utf-8")
    )
    promised = re.search(r"A `Result` holds (.*?)round-trip", README, re.DOTALL)[1]
    for name in re.findall(r"`(\w+)`", promised):
        assert hasattr(result, name) or hasattr(result.flags[0], name), name


def test_every_kind_is_introduced():
    opening = README.partition("\n## ")[0]
    for kind in KIND_NAMES:
        assert kind in opening
