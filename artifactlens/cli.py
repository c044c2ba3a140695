"""The command line: parses, calls the library, prints, and turns errors into exit codes."""

from __future__ import annotations

import json
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from artifactlens import __version__

if TYPE_CHECKING:
    from artifactlens.pipeline import Progress
    from artifactlens.result import Result

EXIT_HELP = (
    "Exit codes: 0 done; 1 some recording failed, the others are done; 2 wrong usage."
)


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
    help="Mains frequency in hertz; found by itself if not given.",
)
_QUIET = click.option("--quiet", is_flag=True, help="Print nothing but errors.")
_JSON = click.option("--json", "as_json", is_flag=True, help="Print one JSON document.")


@main.command(epilog=EXIT_HELP)
@click.argument("recordings", nargs=-1, required=True, metavar="RECORDING...")
@click.option(
    "--out",
    type=click.Path(path_type=Path),
    help="Folder for the results; NAME.triage is made in it. Default: beside each recording.",
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
    the recording (x_marks.edf), the report (report.html) and the rest. Reads EDF, EDF+,
    BDF, BrainVision, EEGLAB, FIF and other formats that mne reads.
    """
    reports = _triage_all(
        [Path(name) for name in recordings], out, mark, line_frequency, quiet
    )
    _finish(reports, quiet, as_json)


@main.command(epilog=EXIT_HELP)
@click.argument(
    "folder",
    required=False,
    type=click.Path(path_type=Path),
    default=Path("artifactlens-demo"),
)
@_MARK
@_QUIET
@_JSON
def demo(folder: Path, mark: str, quiet: bool, as_json: bool) -> None:
    """Write an invented recording to FOLDER and triage it.

    The recording is made up, with artifacts and brain rhythms at known times; no person
    was recorded. FOLDER is artifactlens-demo if not given.
    """
    from artifactlens.demo import write_demo
    from artifactlens.errors import ArtifactlensError
    from artifactlens.export.atomic import probe_folder

    try:
        probe_folder(folder)
        path = write_demo(folder)
    except ArtifactlensError as error:
        _finish([_failure(folder, error.problem, error.remedy)], quiet, as_json)
        return
    if not (quiet or as_json):
        click.echo(f"Wrote {path}: an invented recording, no person was recorded.\n")
    _finish(_triage_all([path], None, mark, "auto", quiet), quiet, as_json)


def _triage_all(
    paths: list[Path], out: Path | None, mark: str, line_frequency: str, quiet: bool
) -> list[dict[str, Any]]:
    from artifactlens.errors import ArtifactlensError
    from artifactlens.pipeline import default_folder, triage_to_folder

    reports: list[dict[str, Any]] = []
    taken: dict[Path, Path] = {}
    line = None if line_frequency == "auto" else float(line_frequency)
    with _progress(len(paths), quiet) as step:
        for path in paths:
            folder = (
                default_folder(path) if out is None else out / default_folder(path).name
            )
            if folder.absolute() in taken:
                first = taken[folder.absolute()]
                reports.append(
                    _failure(
                        path,
                        f"{folder} would hold the results of both {first} and {path}.",
                        "Triage them in two calls with different --out folders.",
                    )
                )
                continue
            taken[folder.absolute()] = path
            try:
                result, written = triage_to_folder(
                    path, folder, mark=mark, line_frequency=line, progress=step(path.name)
                )
            except ArtifactlensError as error:
                reports.append(_failure(path, error.problem, error.remedy))
            except Exception as error:
                reports.append(
                    _failure(
                        path,
                        f"An error that artifactlens does not know: {type(error).__name__}.",
                        "Please report it with the format and size of the recording; run "
                        "Python's artifactlens.triage(path) to see where it happened.",
                    )
                )
            else:
                reports.append(
                    {"recording": str(path), "status": "done", "folder": str(written),
                     "result": result}
                )  # fmt: skip
    return reports


def _failure(path: Path, problem: str, remedy: str) -> dict[str, Any]:
    return {
        "recording": str(path), "status": "failed", "problem": problem, "remedy": remedy,
    }  # fmt: skip


def _finish(reports: list[dict[str, Any]], quiet: bool, as_json: bool) -> None:
    """Print what was done and leave with the exit code that says it."""
    from artifactlens.result import CAUTION

    failed = [report for report in reports if report["status"] == "failed"]
    if as_json:
        body = {"caution": CAUTION, "recordings": [_plain(report) for report in reports]}
        click.echo(json.dumps(body, indent=1, ensure_ascii=False))
    elif not quiet:
        for report in reports:
            if report["status"] == "done":
                _print_result(report["result"], report["folder"])
        if len(failed) < len(reports):
            click.echo(CAUTION)
    for report in failed:
        click.echo(
            f"{report['recording']}: {report['problem']} {report['remedy']}", err=True
        )
    if len(reports) > 1 and failed:
        click.echo(
            f"{len(failed)} of {len(reports)} recordings failed; the others are done.",
            err=True,
        )
    raise SystemExit(1 if failed else 0)


def _plain(report: dict[str, Any]) -> dict[str, Any]:
    if "result" not in report:
        return report
    result: Result = report["result"]
    counts = result.flag_counts()
    return {
        **{key: value for key, value in report.items() if key != "result"},
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


def _print_result(result: Result, folder: str) -> None:
    from rich.console import Console
    from rich.table import Table
    from rich.text import Text

    console = Console(highlight=False)
    facts = result.recording
    n_sites = sum(site.role != "reference" for site in result.sites)
    console.print(
        Text(
            f"{facts.name}: {_clock(facts.duration)}, {n_sites} sites, {facts.montage}, "
            f"{facts.sampling_rate:g} Hz"
        )
    )
    for note in facts.notes:
        console.print(Text(f"note: {note}"))
    table = Table(box=None, pad_edge=False, show_edge=False)
    table.add_column("kind")
    table.add_column("judged")
    table.add_column("flags", justify="right")
    table.add_column("touched", justify="right")
    table.add_column("sites flagged most")
    counts = result.flag_counts()
    for entry in result.assessable:
        if entry.verdict == "no":
            table.add_row(entry.kind, Text(f"no: {entry.reason}"), "-", "-", "")
            continue
        judged = entry.verdict if not entry.reason else f"{entry.verdict}: {entry.reason}"
        table.add_row(
            entry.kind,
            Text(judged),
            str(counts[entry.kind]),
            f"{result.touched[entry.kind]:.0f} s",
            Text(", ".join(result.sites_flagged_most(entry.kind, 4))),
        )
    console.print(table)
    console.print(Text(f"Report: {Path(folder) / 'report.html'}\n"))


def _clock(seconds: float) -> str:
    whole = round(seconds)
    return f"{whole // 3600}:{whole // 60 % 60:02d}:{whole % 60:02d}"


@contextmanager
def _progress(count: int, quiet: bool) -> Iterator[Any]:
    """A progress bar on standard error; yields a maker of callbacks per recording."""
    import sys

    if quiet or not sys.stderr.isatty():
        yield lambda name: None
        return
    from rich.console import Console
    from rich.progress import BarColumn, TextColumn, TimeRemainingColumn
    from rich.progress import Progress as Bar

    with Bar(
        TextColumn("{task.description}"),
        BarColumn(),
        TextColumn("{task.completed:.0f} of {task.total:.0f} s"),
        TimeRemainingColumn(),
        console=Console(stderr=True),
        transient=True,
    ) as bar:

        def step(name: str) -> Progress:
            task = bar.add_task(name.replace("[", "("), total=None)

            def update(done: int, total: int) -> None:
                bar.update(task, completed=done, total=total, visible=done < total)

            return update

        yield step
