"""``artifactlens replay``: play a recording into LSL, as a rehearsal without a patient."""

from __future__ import annotations

import math
import sys
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path

import click

from artifactlens.cli.outcome import failure, print_failure, unknown
from artifactlens.cli.printing import echo, shown


@click.command(
    "replay",
    epilog="Exit codes: 0 played, or ended by you; 1 the recording or LSL cannot be used; "
    "2 wrong usage.",
    short_help="Play a recording as a live stream, for a rehearsal.",
)
@click.argument("recording", metavar="RECORDING")
@click.option(
    "--name",
    default="artifactlens replay",
    show_default=True,
    metavar="NAME",
    help="Name of the LSL stream.",
)
@click.option(
    "--speed",
    type=click.FloatRange(min=0, min_open=True),
    default=1.0,
    show_default=True,
    metavar="X",
    help="Times real time.",
)
@click.option("--loop", is_flag=True, help="Begin again at the end, until ctrl-C.")
@click.option(
    "--wait-for-watcher", is_flag=True, help="Do not begin before somebody listens."
)
def replay_command(
    recording: str, name: str, speed: float, loop: bool, wait_for_watcher: bool
) -> None:
    """Play a recording into LSL as if it were recorded now. End it with ctrl-C.

    The stream tells the labels of the channels, and nothing of the patient, the date or the
    file. Listen to it with artifactlens watch in another terminal.
    """
    from artifactlens.errors import ArtifactlensError
    from artifactlens.live.replay import replay
    from artifactlens.page.words import span
    from artifactlens.recording import open_recording

    path = Path(recording)
    sent = 0.0
    try:
        opened = open_recording(path)
        until = "; waiting for a watcher" if wait_for_watcher else ""
        echo(f"Stream {name}: {span(opened.duration)} of {path.name}{until}.", err=True)
        with _bar(name, loop) as show:

            def progress(done: float, total: float) -> None:
                nonlocal sent
                sent = done
                show(done, total)

            replay(
                opened,
                name=name,
                speed=speed,
                loop=loop,
                wait_for_consumer=math.inf if wait_for_watcher else 0.0,
                progress=progress,
            )
    except KeyboardInterrupt:
        echo(f"Ended by you at {span(sent)}.")
    except ArtifactlensError as error:
        print_failure(failure(path, error.problem, error.remedy))
        raise SystemExit(1) from None
    except Exception as error:
        remedy = "Please report it with the format and size of the recording."
        print_failure(failure(path, unknown(error), remedy))
        raise SystemExit(1) from None
    else:
        echo(f"Played {span(sent)}.")


@contextmanager
def _bar(name: str, loop: bool) -> Iterator[Callable[[float, float], None]]:
    """A progress bar on standard error, if that is a terminal."""
    if not sys.stderr.isatty():
        yield lambda done, total: None
        return
    from rich.console import Console
    from rich.progress import BarColumn, Progress, TextColumn

    from artifactlens.page.words import clock

    with Progress(
        TextColumn("{task.description}", markup=False),
        BarColumn(),
        TextColumn("{task.fields[state]}"),
        console=Console(stderr=True),
        transient=True,
    ) as bar:
        task = bar.add_task(shown(name), total=None, state="waiting")
        again = ", then again" if loop else ""

        def show(done: float, total: float) -> None:
            state = f"{clock(done)} of {clock(total)}{again}"
            bar.update(task, completed=done, total=total, state=state)

        yield show
