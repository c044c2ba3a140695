"""``artifactlens demo``: an invented recording, written and triaged."""

from __future__ import annotations

from pathlib import Path

import click

from artifactlens.cli.options import EXIT_HELP, JSON, MARK, QUIET
from artifactlens.cli.outcome import failure, finish, print_failure
from artifactlens.cli.printing import echo
from artifactlens.cli.triage import triage_all


@click.command("demo", epilog=EXIT_HELP, short_help="Try it on an invented recording.")
@click.argument(
    "folder",
    required=False,
    type=click.Path(path_type=Path),
    default=Path("artifactlens-demo"),
    metavar="[DIR]",
)
@MARK
@QUIET
@JSON
def demo_command(folder: Path, mark: str, quiet: bool, as_json: bool) -> None:
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
        report = failure(folder, error.problem, error.remedy)
        print_failure(report)
        finish([report], as_json, quiet)
    if not (quiet or as_json):
        echo(f"Wrote {path}: an invented recording, no person was recorded.\n")
    finish(triage_all([path], None, mark, None, quiet, as_json), as_json, quiet)
