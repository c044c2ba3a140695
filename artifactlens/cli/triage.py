"""``artifactlens triage``: flags, marks and the report of each recording."""

from __future__ import annotations

import os
from pathlib import Path
from typing import TYPE_CHECKING

import click

from artifactlens.cli.options import (
    EXIT_HELP,
    JSON,
    LINE_FREQUENCY,
    MARK,
    QUIET,
    out_option,
)
from artifactlens.cli.outcome import Report, attempt, failure, finish, print_failure
from artifactlens.cli.printing import (
    HANG,
    alike,
    detail,
    place,
    print_head,
    print_set_aside,
    progress_bar,
    shown,
)

if TYPE_CHECKING:
    from artifactlens.pipeline import Progress
    from artifactlens.result import Result


@click.command(
    "triage", epilog=EXIT_HELP, short_help="Mark the artifacts of EEG recordings."
)
@click.argument("recordings", nargs=-1, required=True, metavar="RECORDING...")
@out_option("Make the folders NAME.triage in DIR; without it, beside each recording.")
@MARK
@LINE_FREQUENCY
@QUIET
@JSON
def triage_command(
    recordings: tuple[str, ...],
    out: Path | None,
    mark: str,
    line_frequency: float | None,
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
    finish(triage_all(paths, out, mark, line_frequency, quiet, as_json), as_json, quiet)


def triage_all(
    paths: list[Path],
    out: Path | None,
    mark: str,
    line_frequency: float | None,
    quiet: bool,
    as_json: bool,
) -> list[Report]:
    """Triage one after the other and print each when it is done."""
    from artifactlens.pipeline import default_folder

    reports = []
    # The same file given twice, as by two patterns of the shell, is triaged once.
    once = list({os.path.realpath(path): path for path in reversed(paths)}.values())[::-1]
    taken: dict[str, Path] = {}
    for number, path in enumerate(once, start=1):
        folder = default_folder(path) if out is None else out / default_folder(path).name
        real = os.path.realpath(folder)
        result = None
        if real in taken:
            report = _clash(path, taken[real], folder)
        else:
            name = f"{number} of {len(once)}  {path.name}" if len(once) > 1 else path.name
            with progress_bar(name, quiet) as progress:
                report, result = _triage_one(path, folder, mark, line_frequency, progress)
            if result is not None:
                taken[real] = path
        reports.append(report)
        if result is None:
            print_failure(report)
        elif not (quiet or as_json):
            print_result(result, report)
    return reports


def _triage_one(
    path: Path,
    folder: Path,
    mark: str,
    line_frequency: float | None,
    progress: Progress | None,
) -> tuple[Report, Result | None]:
    from artifactlens.pipeline import triage_to_folder

    done = attempt(
        path,
        lambda: triage_to_folder(
            path, folder, mark=mark, line_frequency=line_frequency, progress=progress
        ),
        "artifactlens.triage(path)",
    )
    if isinstance(done, dict):
        return done, None
    result, written = done
    return _success(path, written, result), result


def _clash(path: Path, first: Path, folder: Path) -> Report:
    """Why a recording is not triaged into a folder that another one has filled."""
    from artifactlens.errors import ArtifactlensError
    from artifactlens.recording import open_recording

    try:
        open_recording(path)  # a companion file of the first one has another problem
    except ArtifactlensError as error:
        return failure(path, error.problem, error.remedy)
    return failure(
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


def print_result(result: Result, report: Report) -> None:
    """The kinds, what could not be judged, and where the report lies."""
    print_head(result, report["recording"])
    _print_kinds(result)
    for entry in alike([((e.verdict, e.reason), e.kind) for e in result.assessable]):
        (verdict, reason), kinds = entry
        if reason:
            detail("not judged" if verdict == "no" else verdict, f"{kinds}: {reason}")
    print_set_aside(result)
    place("report", Path(report["folder"]) / "report.html")


def _print_kinds(result: Result) -> None:
    """One line per kind: whether it is judged, how much there is of it, and where."""
    from rich.console import Console
    from rich.table import Table
    from rich.text import Text

    from artifactlens.page.words import span

    table = Table(box=None, pad_edge=False, padding=(0, 3, 0, 0))
    table.add_column("kind", min_width=HANG - 3, no_wrap=True)
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
            Text(shown(", ".join(result.sites_flagged_most(entry.kind, 4)))),
        )
    console = Console(highlight=False)
    with console.capture() as captured:
        console.print(table)
    for line in captured.get().splitlines():
        click.echo(line.rstrip())
