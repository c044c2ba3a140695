"""How a command speaks to a terminal: paragraphs, lines with a word before, progress."""

from __future__ import annotations

import sys
from collections.abc import Iterator
from contextlib import contextmanager
from typing import TYPE_CHECKING, Any

import click

if TYPE_CHECKING:
    from artifactlens.pipeline import Progress
    from artifactlens.result import Result

HANG = 12
"""Width of the first column: 'not judged' and two blanks."""


def echo(text: str, *, err: bool = False, hang: int = 0, wrap: bool = True) -> None:
    """Print a paragraph; a terminal gets it broken between words, a file in one line."""
    import shutil
    import textwrap

    lead = text[: len(text) - len(text.lstrip(" "))]
    end = "\n" * (len(text) - len(text.rstrip("\n")))
    text = lead + shown(text)
    if wrap and (sys.stderr if err else sys.stdout).isatty():
        text = textwrap.fill(
            text,
            max(shutil.get_terminal_size().columns, 40),
            subsequent_indent=" " * hang,
            break_long_words=False,
            break_on_hyphens=False,
        )
    click.echo(text + end, err=err)


def shown(text: str) -> str:
    """Text from a file or a path without what could steer the terminal."""
    from artifactlens.export.one_line import one_line

    return one_line(text)


def detail(word: str, text: str) -> None:
    """A word in the first column, or none, and a text beside it."""
    echo(f"{word:<{HANG}}{text}", hang=HANG)


def place(word: str, path: object) -> None:
    """A word and where a file lies, never broken, so that it can be copied."""
    echo(f"{word:<{HANG}}{path}\n", wrap=False)


def alike(pairs: list[tuple[Any, str]]) -> list[tuple[Any, str]]:
    """Each reason once, with all the names it stands for."""
    from artifactlens.edf_records import listing

    groups: dict[Any, list[str]] = {}
    for reason, name in pairs:
        groups.setdefault(reason, []).append(name)
    return [(reason, listing(names)) for reason, names in groups.items()]


def print_head(result: Result, name: str) -> None:
    """What the recording is, in one line."""
    from artifactlens.page.words import span

    facts = result.recording
    n_sites = sum(site.role != "reference" for site in result.sites)
    echo(
        f"{name}: {span(facts.duration)}, {n_sites} sites, "
        f"{facts.montage}, {facts.sampling_rate:g} Hz"
    )


def print_set_aside(result: Result) -> None:
    """Channels that were not used and why, and what else is noted of the recording."""
    facts = result.recording
    for reason, labels in alike([(why, label) for label, why in facts.set_aside]):
        detail("not used", f"{labels}: {reason}")
    for note in facts.notes:
        detail("note", note)


@contextmanager
def progress_bar(name: str, quiet: bool) -> Iterator[Progress | None]:
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
        task = bar.add_task(shown(name), total=None, state="opening")

        def update(done: int, total: int) -> None:
            state = f"{span(done)} of {span(total)}" if done < total else "writing"
            bar.update(task, completed=done, total=total, state=state)

        yield update
