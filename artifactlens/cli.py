"""The command line: parses, calls the library, prints, and turns errors into exit codes."""

from __future__ import annotations

import json
import os
import sys
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import TYPE_CHECKING, Any, NoReturn

import click

from artifactlens import __version__

if TYPE_CHECKING:
    from artifactlens.pipeline import Progress
    from artifactlens.result import Result

Report = dict[str, Any]
"""What is said of one recording: the entry of the JSON document."""

EXIT_HELP = (
    "Exit codes: 0 done; 1 some recording failed, the others are done; 2 wrong usage."
)
NAMES_IN_SUMMARY = 10
_HANG = 12
"""Width of the first column: 'not judged' and two blanks."""


@click.group(context_settings={"help_option_names": ["-h", "--help"]}, epilog=EXIT_HELP)
@click.version_option(__version__, prog_name="artifactlens")
def main() -> None:
    """Tell which seconds and which sites of a scalp EEG carry artifact, and why.

    A research and technical aid, not a medical device: it marks, and never alters or
    deletes anything of a recording.
    """


_MARK = click.option(
    "--mark",
    type=click.Choice(["sure", "doubtful"]),
    default="sure",
    show_default=True,
    help="Mark little and surely, or all that is doubtful.",
)
_LINE = click.option(
    "--line-frequency",
    type=click.Choice(["auto", "50", "60"]),
    default="auto",
    show_default=True,
    help="Mains frequency in hertz; auto finds it by itself.",
)
_QUIET = click.option(
    "--quiet", is_flag=True, help="No progress and no tables: print errors only."
)
_JSON = click.option(
    "--json", "as_json", is_flag=True, help="Print one JSON document instead of tables."
)


@main.command(epilog=EXIT_HELP, short_help="Mark the artifacts of EEG recordings.")
@click.argument("recordings", nargs=-1, required=True, metavar="RECORDING...")
@click.option(
    "--out",
    type=click.Path(path_type=Path),
    metavar="DIR",
    help="Make the folders NAME.triage in DIR; without it, beside each recording.",
)
@_MARK
@_LINE
@_QUIET
@_JSON
def triage(
    recordings: tuple[str, ...],
    out: Path | None,
    mark: str,
    line_frequency: str,
    quiet: bool,
    as_json: bool,
) -> None:
    """Mark eye, muscle, electrode-pop and mains artifact in EEG recordings.

    For x.edf the folder x.triage holds the flags (flags.tsv), EDF+ marks that open beside
    the recording (x_marks.edf), the report (report.html) and the rest; results of an
    earlier run are replaced. Reads EDF, EDF+, BDF, BrainVision, EEGLAB, FIF and other
    formats that mne reads. A name that begins with a hyphen is given as ./-name.edf.
    """
    paths = [Path(name) for name in recordings]
    _finish(_triage_all(paths, out, mark, line_frequency, quiet, as_json), as_json, quiet)


@main.command(epilog=EXIT_HELP, short_help="Try it on an invented recording.")
@click.argument(
    "folder",
    required=False,
    type=click.Path(path_type=Path),
    default=Path("artifactlens-demo"),
    metavar="[DIR]",
)
@_MARK
@_QUIET
@_JSON
def demo(folder: Path, mark: str, quiet: bool, as_json: bool) -> None:
    """Write an invented recording into DIR and triage it.

    The recording is made up, with artifacts and brain rhythms at known times; no person
    was recorded. DIR is artifactlens-demo if not given.
    """
    from artifactlens.demo import write_demo
    from artifactlens.errors import ArtifactlensError
    from artifactlens.export.atomic import probe_folder

    try:
        probe_folder(folder)
        path = write_demo(folder)
    except ArtifactlensError as error:
        report = _failure(folder, error.problem, error.remedy)
        _print_failure(report)
        _finish([report], as_json, quiet)
    if not (quiet or as_json):
        _echo(f"Wrote {path}: an invented recording, no person was recorded.\n")
    _finish(_triage_all([path], None, mark, "auto", quiet, as_json), as_json, quiet)


def _triage_all(
    paths: list[Path],
    out: Path | None,
    mark: str,
    line_frequency: str,
    quiet: bool,
    as_json: bool,
) -> list[Report]:
    """Triage one after the other and print each when it is done."""
    from artifactlens.pipeline import default_folder

    reports = []
    line = None if line_frequency == "auto" else float(line_frequency)
    # The same file given twice, as by two patterns of the shell, is triaged once.
    once = list({os.path.realpath(path): path for path in reversed(paths)}.values())[::-1]
    taken: dict[str, Path] = {}
    for number, path in enumerate(once, start=1):
        folder = default_folder(path) if out is None else out / default_folder(path).name
        place = os.path.realpath(folder)
        result = None
        if place in taken:
            report = _clash(path, taken[place], folder)
        else:
            name = f"{number} of {len(once)}  {path.name}" if len(once) > 1 else path.name
            with _progress(name, quiet) as progress:
                report, result = _triage_one(path, folder, mark, line, progress)
            if result is not None:
                taken[place] = path
        reports.append(report)
        if result is None:
            _print_failure(report)
        elif not (quiet or as_json):
            _print_result(result, report)
    return reports


def _triage_one(
    path: Path,
    folder: Path,
    mark: str,
    line_frequency: float | None,
    progress: Progress | None,
) -> tuple[Report, Result | None]:
    from artifactlens.errors import ArtifactlensError
    from artifactlens.pipeline import triage_to_folder

    try:
        result, written = triage_to_folder(
            path, folder, mark=mark, line_frequency=line_frequency, progress=progress
        )
    except ArtifactlensError as error:
        return _failure(path, error.problem, error.remedy), None
    except Exception as error:
        problem = f"An error that artifactlens does not know: {type(error).__name__}."
        remedy = (
            "Please report it with the format and size of the recording; run Python's "
            "artifactlens.triage(path) to see where it happened."
        )
        return _failure(path, problem, remedy), None
    return _success(path, written, result), result


def _clash(path: Path, first: Path, folder: Path) -> Report:
    """Why a recording is not triaged into a folder that another one has filled."""
    from artifactlens.errors import ArtifactlensError
    from artifactlens.recording import open_recording

    try:
        open_recording(path)  # a companion file of the first one has another problem
    except ArtifactlensError as error:
        return _failure(path, error.problem, error.remedy)
    return _failure(
        path,
        f"{folder} already holds the results of {first}.",
        "Triage them in two calls with different --out folders.",
    )


def _success(path: Path, folder: Path, result: Result) -> Report:
    counts = result.flag_counts()
    return {
        "recording": str(path),
        "status": "done",
        "folder": str(folder),
        "seconds": result.recording.duration,
        "kinds": {
            entry.kind: {
                "judged": entry.verdict,
                "reason": entry.reason,
                "flags": counts[entry.kind],
                "seconds_touched": result.touched[entry.kind],
            }
            for entry in result.assessable
        },
        "notes": list(result.recording.notes),
    }


def _failure(path: Path, problem: str, remedy: str) -> Report:
    return {
        "recording": str(path), "status": "failed", "problem": problem, "remedy": remedy,
    }  # fmt: skip


def _finish(reports: list[Report], as_json: bool, quiet: bool) -> NoReturn:
    """Say how it ended and leave with the exit code that says it."""
    from artifactlens.result import CAUTION

    failed = [report for report in reports if report["status"] == "failed"]
    if as_json:
        # Escaped to ASCII, so that no name and no terminal can break the document.
        click.echo(json.dumps({"caution": CAUTION, "recordings": reports}, indent=1))
    elif not quiet and len(failed) < len(reports):
        _echo(CAUTION)
    if failed and len(reports) > 1:
        rest = "the others are done" if len(failed) < len(reports) else "none is done"
        listed = ", ".join(report["recording"] for report in failed[:NAMES_IN_SUMMARY])
        more = ", ..." if len(failed) > NAMES_IN_SUMMARY else ""
        _echo(
            f"{len(failed)} of {len(reports)} recordings failed, {rest}: {listed}{more}",
            err=True,
        )
    raise SystemExit(1 if failed else 0)


def _print_failure(report: Report) -> None:
    _echo(f"Failed: {report['recording']}", err=True)
    for sentence in (report["problem"], report["remedy"]):
        _echo(f"  {sentence}", err=True, hang=2)


def _print_result(result: Result, report: Report) -> None:
    from artifactlens.page.words import span

    facts = result.recording
    n_sites = sum(site.role != "reference" for site in result.sites)
    _echo(
        f"{report['recording']}: {span(facts.duration)}, {n_sites} sites, "
        f"{facts.montage}, {facts.sampling_rate:g} Hz"
    )
    _print_kinds(result)
    for entry in _alike([((e.verdict, e.reason), e.kind) for e in result.assessable]):
        (verdict, reason), kinds = entry
        if reason:
            _detail("not judged" if verdict == "no" else verdict, f"{kinds}: {reason}")
    for reason, labels in _alike([(why, label) for label, why in facts.set_aside]):
        _detail("not used", f"{labels}: {reason}")
    for note in facts.notes:
        _detail("note", note)
    _echo(f"{'report':<{_HANG}}{Path(report['folder']) / 'report.html'}\n", wrap=False)


def _alike(pairs: list[tuple[Any, str]]) -> list[tuple[Any, str]]:
    """Each reason once, with all the names it stands for."""
    from artifactlens.edf_records import listing

    groups: dict[Any, list[str]] = {}
    for reason, name in pairs:
        groups.setdefault(reason, []).append(name)
    return [(reason, listing(names)) for reason, names in groups.items()]


def _detail(word: str, text: str) -> None:
    _echo(f"{word:<{_HANG}}{text}", hang=_HANG)


def _print_kinds(result: Result) -> None:
    """One line per kind: whether it is judged, how much there is of it, and where."""
    from rich.console import Console
    from rich.table import Table
    from rich.text import Text

    from artifactlens.page.words import span

    table = Table(box=None, pad_edge=False, padding=(0, 3, 0, 0))
    table.add_column("kind", min_width=_HANG - 3, no_wrap=True)
    table.add_column("judged", no_wrap=True)
    table.add_column("flags", justify="right", no_wrap=True)
    table.add_column("touched", justify="right", no_wrap=True)
    table.add_column("sites flagged most")
    counts = result.flag_counts()
    for entry in result.assessable:
        if entry.verdict == "no":
            table.add_row(entry.kind, entry.verdict, "-", "-")
            continue
        table.add_row(
            entry.kind,
            entry.verdict,
            str(counts[entry.kind]),
            span(result.touched[entry.kind]),
            Text(_shown(", ".join(result.sites_flagged_most(entry.kind, 4)))),
        )
    console = Console(highlight=False)
    with console.capture() as captured:
        console.print(table)
    for line in captured.get().splitlines():
        click.echo(line.rstrip())


def _shown(text: str) -> str:
    """Text from a file or a path without what could steer the terminal."""
    from artifactlens.export.one_line import one_line

    return one_line(text)


def _echo(text: str, *, err: bool = False, hang: int = 0, wrap: bool = True) -> None:
    """Print a paragraph; a terminal gets it broken between words, a file in one line."""
    import shutil
    import textwrap

    lead = text[: len(text) - len(text.lstrip(" "))]
    end = "\n" * (len(text) - len(text.rstrip("\n")))
    text = lead + _shown(text)
    if wrap and (sys.stderr if err else sys.stdout).isatty():
        text = textwrap.fill(
            text,
            max(shutil.get_terminal_size().columns, 40),
            subsequent_indent=" " * hang,
            break_long_words=False,
            break_on_hyphens=False,
        )
    click.echo(text + end, err=err)


@contextmanager
def _progress(name: str, quiet: bool) -> Iterator[Progress | None]:
    """A progress bar on standard error, if that is a terminal."""
    if quiet or not sys.stderr.isatty():
        yield None
        return
    from rich.console import Console
    from rich.progress import BarColumn, TextColumn, TimeRemainingColumn
    from rich.progress import Progress as Bar
    from rich.table import Column

    from artifactlens.page.words import span

    label = TextColumn(
        "{task.description}",
        markup=False,
        table_column=Column(no_wrap=True, overflow="ellipsis", max_width=40),
    )
    with Bar(
        label,
        BarColumn(),
        TextColumn("{task.fields[state]}"),
        TimeRemainingColumn(),
        console=Console(stderr=True),
        transient=True,
        redirect_stdout=False,
        redirect_stderr=False,
    ) as bar:
        task = bar.add_task(_shown(name), total=None, state="opening")

        def update(done: int, total: int) -> None:
            state = f"{span(done)} of {span(total)}" if done < total else "writing"
            bar.update(task, completed=done, total=total, state=state)

        yield update
