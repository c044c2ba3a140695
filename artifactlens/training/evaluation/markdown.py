"""Numbers and tables in markdown, formatted alike everywhere."""

from __future__ import annotations

from collections.abc import Sequence

from artifactlens.training.evaluation.intervals import Interval

ABSENT = "-"


def number(value: float | None, digits: int = 3) -> str:
    """A rate, or the sign for what cannot be told."""
    return ABSENT if value is None else f"{value:.{digits}f}"


def with_interval(
    value: float | None, interval: Interval | None, digits: int = 3, *, signed: bool = False
) -> str:
    """A value and, in brackets, its interval if there is one."""
    if value is None:
        return ABSENT
    form = f"{'+' if signed else ''}.{digits}f"
    if interval is None:
        return f"{value:{form}}"
    return f"{value:{form}} [{interval.low:{form}}, {interval.high:{form}}]"


def count_of(count: int, one: str, many: str = "") -> str:
    """A count with its noun: 1 person, 2 people, 1,200 cells."""
    return f"{count:,} {one if count == 1 else many or one + 's'}"


def table(heading: str, header: Sequence[str], rows: Sequence[Sequence[str]]) -> str:
    """A heading line and a table with pipes; a pipe within a cell becomes a slash."""
    lines = [header, ["---"] * len(header), *rows]
    body = "\n".join(
        f"| {' | '.join(cell.replace('|', '/') for cell in line)} |" for line in lines
    )
    return f"{heading}\n\n{body}\n"
