"""The command line: parses, calls the library, prints, and turns errors into exit codes."""

from __future__ import annotations

import click

from artifactlens import __version__
from artifactlens.cli.demo import demo_command
from artifactlens.cli.options import EXIT_HELP
from artifactlens.cli.replay import replay_command
from artifactlens.cli.sites import sites_command
from artifactlens.cli.triage import triage_command
from artifactlens.cli.watch import watch_command


@click.group(context_settings={"help_option_names": ["-h", "--help"]}, epilog=EXIT_HELP)
@click.version_option(__version__, prog_name="artifactlens")
def main() -> None:
    """Tell which seconds and which sites of a scalp EEG carry artifact, and why.

    A research and technical aid, not a medical device: it marks, and never alters or
    deletes anything of a recording.
    """


for _command in (
    triage_command,
    sites_command,
    watch_command,
    replay_command,
    demo_command,
):
    main.add_command(_command)
