"""The import arrows of the design: what a module may know of the others."""

import ast
import subprocess
import sys
from pathlib import Path

import pytest

import artifactlens

ROOT = Path(artifactlens.__file__).parent
FILES = {
    ".".join(path.relative_to(ROOT).with_suffix("").parts).removesuffix(".__init__"): path
    for path in sorted(ROOT.rglob("*.py"))
}
PACKAGE = FILES.pop("__init__")
LONGEST = 450

HEAVY = ("mne", "sklearn", "scipy.signal", "rich")
"""Too slow to import for a command that only prints its help."""


def imports_of(path):
    """Full names of all that a file imports, inside functions and for typing too."""
    names = set()
    for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
        if isinstance(node, ast.Import):
            names |= {alias.name for alias in node.names}
        elif isinstance(node, ast.ImportFrom):
            assert node.level == 0, f"{path.name} has a relative import"
            names |= {f"{node.module}.{alias.name}" for alias in node.names}
    return names


def modules_of(path):
    """Modules of this package that a file imports, by their names within it."""
    found = set()
    for name in imports_of(path):
        head, _, inner = name.partition(".")
        if head != "artifactlens":
            continue
        while inner and inner not in FILES:  # cut off the imported object
            inner = inner.rpartition(".")[0]
        if inner:
            found.add(inner)
    return found


ARROWS = {name: modules_of(path) for name, path in FILES.items()}


def part_of(name, *packages):
    return any(name == package or name.startswith(f"{package}.") for package in packages)


def reached_from(name):
    """All modules that a module needs, directly or by way of others."""
    seen, waiting = set(), [name]
    while waiting:
        user = waiting.pop()
        for other in ARROWS[user] - seen:
            seen.add(other)
            waiting.append(other)
            package = other.rpartition(".")[0]
            # Importing a module runs its package first; within a package that is running.
            if package and not part_of(user, package):
                waiting.append(package)
    return seen


def test_the_arrows_are_read_as_they_stand():
    assert "epochs" in ARROWS["pipeline"]
    assert "features.spatial" in ARROWS["pipeline"]
    assert "page.traces" in ARROWS["closeups"]
    assert "simulation.head" in reached_from("demo")
    assert ARROWS["errors"] == set()


def test_nothing_imports_the_command_line():
    users = {
        name
        for name, arrows in ARROWS.items()
        if any(part_of(other, "cli") for other in arrows) and not part_of(name, "cli")
    }
    assert users == {"__main__"}


def test_the_command_line_imports_the_library_only_when_a_command_runs():
    for name, path in FILES.items():
        if part_of(name, "cli"):
            for node in ast.parse(path.read_text(encoding="utf-8")).body:
                if isinstance(node, ast.ImportFrom) and "." in node.module:
                    first, _, inner = node.module.partition(".")
                    assert first != "artifactlens" or part_of(inner, "cli"), name


@pytest.mark.parametrize(
    ("name", "allowed"),
    [
        ("errors", set()),
        ("advice", set()),
        ("kinds", {"errors"}),
        ("result", {"errors", "advice"}),
    ],
)
def test_the_ground_stands_on_nothing_but_errors(name, allowed):
    assert ARROWS[name] <= allowed


@pytest.mark.parametrize("entry", ["pipeline", "flagging", "closeups", "features"])
def test_the_pipeline_needs_neither_training_nor_simulation(entry):
    found = {
        name for name in reached_from(entry) if part_of(name, "training", "simulation")
    }
    assert found == set()


def test_only_training_and_the_demo_know_of_the_simulation():
    users = {
        name
        for name, arrows in ARROWS.items()
        if any(part_of(other, "simulation") for other in arrows)
        and not part_of(name, "simulation")
    }
    assert {name for name in users if not part_of(name, "training")} <= {"demo"}


def test_only_training_knows_of_training():
    users = {
        name
        for name, arrows in ARROWS.items()
        if any(part_of(other, "training") for other in arrows)
    }
    assert all(part_of(name, "training") for name in users)


def test_the_simulation_knows_nothing_of_what_judges_it():
    judging = (
        "features",
        "curves",
        "evidence",
        "flagging",
        "segments",
        "pipeline",
        "training",
    )
    for name, arrows in ARROWS.items():
        if part_of(name, "simulation"):
            assert not [other for other in arrows if part_of(other, *judging)], name


LATER = ("curves", "evidence", "flagging", "result", "pipeline", "export", "page", "sitecare",
         "segments", "closeups", "assessable", "advice", "bedside", "cli")  # fmt: skip


@pytest.mark.parametrize(
    "early",
    [
        "recording",
        "last_minutes",
        "sites",
        "frames",
        "impedances",
        "epochs",
        "survey",
        "features",
    ],
)
def test_what_measures_does_not_know_what_is_made_of_it(early):
    for name in FILES:
        if part_of(name, early):
            later = {other for other in ARROWS[name] if part_of(other, *LATER)}
            assert later == set(), name


@pytest.mark.parametrize("package", ["export", "page"])
def test_outputs_read_only_the_result(package):
    for name in FILES:
        if part_of(name, package):
            foreign = {
                other
                for other in ARROWS[name]
                if not part_of(other, package)
                and other not in ("result", "advice", "kinds", "errors")
            }
            # What a watch shows is its state, a type like the result.
            assert foreign <= ({"live.state"} if name == "page.live" else set()), name


JUDGED_BY = ("advice", "curves", "epochs", "errors", "features", "frames", "kinds",
             "recording", "result", "survey")  # fmt: skip


def test_the_site_verdicts_know_what_was_measured_and_nothing_of_what_shows_them():
    members = {name for name in FILES if part_of(name, "sitecare")}
    assert len(members) > 10
    for name in members:
        foreign = {
            other for other in ARROWS[name] if not part_of(other, "sitecare", *JUDGED_BY)
        }
        assert foreign == set(), name


def test_only_the_pipeline_and_the_watch_ask_for_site_verdicts():
    users = {
        name
        for name, arrows in ARROWS.items()
        if any(part_of(other, "sitecare") for other in arrows)
        and not part_of(name, "sitecare", "live", "training")
    }
    assert users == {"pipeline"}


def test_only_the_command_line_starts_a_watch():
    users = {
        (name, other)
        for name, arrows in ARROWS.items()
        for other in arrows
        if part_of(other, "live") and not part_of(name, "live", "cli")
    }
    assert users == {("page.live", "live.state")}


@pytest.mark.parametrize(
    "entry", ["pipeline", "bedside", "closeups", "export", "page", "sitecare"]
)
def test_no_recording_needs_a_stream_or_training_to_be_judged(entry):
    for name in FILES:
        if part_of(name, entry) and name != "page.live":
            found = {
                other for other in reached_from(name) if part_of(other, "live", "training")
            }
            assert found == set(), name


def test_the_stages_follow_one_another():
    order = ("recording", "frames", "epochs", "features", "curves", "evidence", "flagging",
             "sitecare", "pipeline", "bedside", "cli")  # fmt: skip
    for place, name in enumerate(order):
        behind = order[place + 1 :]
        for member in FILES:
            if part_of(member, name):
                wrong = {other for other in ARROWS[member] if part_of(other, *behind)}
                # A type of a later stage that is only named in a signature is none either.
                assert wrong == set(), member


def test_no_module_needs_itself():
    for name in FILES:
        assert name not in reached_from(name) - {name.rpartition(".")[0]}, name


@pytest.mark.parametrize("package", ["click", "rich"])
def test_only_the_command_line_knows_the_terminal(package):
    users = {
        name
        for name, path in FILES.items()
        if any(found.split(".")[0] == package for found in imports_of(path))
    }
    assert {name for name in users if not part_of(name, "cli")} == set()


def heavy_after(code):
    run = subprocess.run(
        [sys.executable, "-c", f"{code}\nimport sys\nprint('LOADED', *sys.modules)"],
        capture_output=True,
        text=True,
        check=True,
        cwd=ROOT.parent,
    )
    loaded = set(run.stdout.rpartition("LOADED")[2].split())
    return loaded, run.stdout


def test_importing_the_package_loads_nothing_heavy():
    loaded, _ = heavy_after("import artifactlens")
    assert not loaded & {*HEAVY, "numpy", "scipy", "click"}


def test_printing_help_loads_nothing_heavy():
    loaded, printed = heavy_after(
        "from artifactlens.cli import main\n"
        "try:\n    main(['--help'])\nexcept SystemExit:\n    pass"
    )
    assert "Usage:" in printed
    assert "artifactlens.cli" in loaded
    assert not loaded & {*HEAVY, "numpy", "scipy"}


def test_importing_the_pipeline_loads_no_training_library():
    loaded, _ = heavy_after("import artifactlens.pipeline")
    assert "artifactlens.features" in loaded
    assert not loaded & set(HEAVY)


@pytest.mark.parametrize("name", sorted(FILES))
def test_every_module_is_read_in_one_sitting(name):
    lines = FILES[name].read_text(encoding="utf-8").count("\n")
    assert lines < LONGEST, f"{name} has {lines} lines"


@pytest.mark.parametrize("name", sorted(FILES))
def test_no_module_star_imports_or_asserts(name):
    for node in ast.walk(ast.parse(FILES[name].read_text(encoding="utf-8"))):
        assert not isinstance(node, ast.Assert), f"line {node.lineno}"
        if isinstance(node, ast.ImportFrom):
            assert all(alias.name != "*" for alias in node.names)
