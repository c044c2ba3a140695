"""How a recording ended: done or failed, and the exit code that says it."""

from __future__ import annotations

import json
from collections.abc import Callable
from pathlib import Path
from typing import TYPE_CHECKING, Any, NoReturn

import click

from artifactlens.cli.printing import echo

if TYPE_CHECKING:
    from artifactlens.result import Result

Report = dict[str, Any]
"""What is said of one recording: the entry of the JSON document."""

NAMES_IN_SUMMARY = 10


def attempt(
    path: Path, work: Callable[[], tuple[Result, Path]], call: str
) -> tuple[Result, Path] | Report:
    """Run the work on one recording: what it gives, or the report of its failure.

    ``call`` is what does the same from Python.
    """
    from artifactlens.errors import ArtifactlensError

    try:
        return work()
    except ArtifactlensError as error:
        return failure(path, error.problem, error.remedy)
    except Exception as error:
        remedy = (
            "Please report it with the format and size of the recording; run Python's "
            f"{call} to see where it happened."
        )
        return failure(path, unknown(error), remedy)


def unknown(error: Exception) -> str:
    """What is said of an error that nobody thought of: its words may hold names."""
    return f"An error that artifactlens does not know: {type(error).__name__}."


def failure(path: Path, problem: str, remedy: str) -> Report:
    """The report of a recording that failed."""
    return {
        "recording": str(path), "status": "failed", "problem": problem, "remedy": remedy,
    }  # fmt: skip


def print_failure(report: Report) -> None:
    """Say on standard error what failed, why, and what to do."""
    echo(f"Failed: {report['recording']}", err=True)
    for sentence in (report["problem"], report["remedy"]):
        echo(f"  {sentence}", err=True, hang=2)


def finish(reports: list[Report], as_json: bool, quiet: bool) -> NoReturn:
    """Say how it ended and leave with the exit code that says it."""
    from artifactlens.result import CAUTION

    failed = [report for report in reports if report["status"] == "failed"]
    if as_json:
        # Escaped to ASCII, so that no name and no terminal can break the document.
        click.echo(json.dumps({"caution": CAUTION, "recordings": reports}, indent=1))
    elif not quiet and len(failed) < len(reports):
        echo(CAUTION)
    if failed and len(reports) > 1:
        rest = "the others are done" if len(failed) < len(reports) else "none is done"
        listed = ", ".join(report["recording"] for report in failed[:NAMES_IN_SUMMARY])
        more = ", ..." if len(failed) > NAMES_IN_SUMMARY else ""
        echo(
            f"{len(failed)} of {len(reports)} recordings failed, {rest}: {listed}{more}",
            err=True,
        )
    raise SystemExit(1 if failed else 0)
