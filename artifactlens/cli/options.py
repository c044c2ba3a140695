"""Options that several commands share."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path
from typing import Any, TypeVar

import click

Decorated = TypeVar("Decorated", bound=Callable[..., Any] | click.Command)

EXIT_HELP = (
    "Exit codes: 0 done; 1 some recording failed, the others are done; 2 wrong usage."
)

MARK = click.option(
    "--mark",
    type=click.Choice(["sure", "doubtful"]),
    default="sure",
    show_default=True,
    help="Mark little and surely, or all that is doubtful.",
)
QUIET = click.option(
    "--quiet", is_flag=True, help="No progress and no tables: print errors only."
)
JSON = click.option(
    "--json", "as_json", is_flag=True, help="Print one JSON document instead of tables."
)


def _hertz(context: click.Context, parameter: click.Parameter, value: str) -> float | None:
    return None if value == "auto" else float(value)


LINE_FREQUENCY = click.option(
    "--line-frequency",
    type=click.Choice(["auto", "50", "60"]),
    default="auto",
    show_default=True,
    callback=_hertz,
    help="Mains frequency in hertz; auto finds it by itself.",
)


def out_option(help_text: str) -> Callable[[Decorated], Decorated]:
    """The option ``--out DIR``, with what a command makes there."""
    return click.option(
        "--out", type=click.Path(path_type=Path), metavar="DIR", help=help_text
    )
