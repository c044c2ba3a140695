"""``artifactlens sites``: which electrodes to look after, in which order, and why."""

from __future__ import annotations

from dataclasses import asdict
from pathlib import Path
from typing import TYPE_CHECKING

import click

from artifactlens.cli.options import EXIT_HELP, JSON, LINE_FREQUENCY, QUIET, out_option
from artifactlens.cli.outcome import Report, attempt, finish, print_failure
from artifactlens.cli.printing import (
    detail,
    echo,
    place,
    print_head,
    print_set_aside,
    progress_bar,
)

if TYPE_CHECKING:
    from artifactlens.result import Result

NAMES_IN_LINE = 24


@click.command(
    "sites", epilog=EXIT_HELP, short_help="Say which electrodes to look after, and why."
)
@click.argument("recording", metavar="RECORDING")
@click.option(
    "--last",
    type=click.FloatRange(min=0, min_open=True),
    metavar="MINUTES",
    help="Judge only the last minutes; without it, the whole recording.",
)
@click.option(
    "--impedances",
    type=click.Path(path_type=Path),
    metavar="TABLE",
    help="Two columns, site and kilo-ohm; without it, those of the file or its BIDS folder.",
)
@click.option(
    "--calibration",
    is_flag=True,
    help="Test the leads by blinks, gaze and jaw clench, even if no annotation names them.",
)
@LINE_FREQUENCY
@out_option("Make the folder NAME.sites in DIR; without it, beside the recording.")
@QUIET
@JSON
def sites_command(
    recording: str,
    last: float | None,
    impedances: Path | None,
    calibration: bool,
    line_frequency: float | None,
    out: Path | None,
    quiet: bool,
    as_json: bool,
) -> None:
    """Say which electrodes of a recording to look after: in which order, why, what to do.

    For x.edf the folder x.sites holds a sheet to print (sites.html), a table (sites.tsv)
    and the rest; results of an earlier run are replaced. Reads what artifactlens triage
    reads.
    """
    from artifactlens.bedside import sites_folder, sites_to_folder

    path = Path(recording)
    folder = sites_folder(path) if out is None else out / sites_folder(path).name
    with progress_bar(path.name, quiet) as progress:
        done = attempt(
            path,
            lambda: sites_to_folder(
                path,
                folder,
                last_minutes=last,
                impedances=impedances,
                calibration=calibration,
                line_frequency=line_frequency,
                progress=progress,
            ),
            "artifactlens.bedside.sites_to_folder(path)",
        )
    if isinstance(done, dict):
        print_failure(done)
        finish([done], as_json, quiet)
    result, written = done
    report = _success(path, written, result)
    if not (quiet or as_json):
        print_advice(result, report)
    finish([report], as_json, quiet)


def _success(path: Path, folder: Path, result: Result) -> Report:
    return {
        "recording": str(path),
        "status": "done",
        "folder": str(folder),
        "seconds": result.recording.duration,
        "advice": [{**asdict(entry), "line": entry.line} for entry in result.advice],
        "sites": [
            {
                "site": row.site,
                "verdict": row.verdict,
                "why": row.why,
                "impedance_kohm": row.impedance_kohm,
            }
            for row in result.sites
        ],
        "setup": None if result.setup is None else asdict(result.setup),
        "notes": list(result.recording.notes),
    }


def print_advice(result: Result, report: Report) -> None:
    """The list in order of work, what to leave alone, the setup, and where the sheet lies."""
    from artifactlens.edf_records import listing
    from artifactlens.page.sheet import high_impedances, setup_words, what_to_do, when

    print_head(result, report["recording"])
    for entry in result.advice:
        *times, state = when(entry, result.recording.duration)
        told = ": ".join(filter(None, (state, " ".join(filter(None, times)))))
        over = "" if entry.state == "present" else f" ({told})"
        doubt = " (unsure)" if entry.confidence == "low" else ""
        echo(f"{entry.number}. {entry.line}{over}{doubt}", hang=3)
    if not result.advice:
        sentence, _ = what_to_do(result)
        echo(sentence)
    for verdict in ("leave", "cannot tell"):
        names = [row.site for row in result.sites if row.verdict == verdict]
        if names:
            detail(verdict, listing(names, NAMES_IN_LINE))
    high = high_impedances(result.sites)
    if high:
        detail("impedance", f"above 10 kohm: {listing(high)}")
    if result.setup is not None:
        detail("setup", setup_words(result.setup))
        for response in result.setup.responses:
            detail("", response)
    print_set_aside(result)
    place("sheet", Path(report["folder"]) / "sites.html")
