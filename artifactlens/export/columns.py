"""What every exported table shares: columns with their dictionary, and safe cells."""

from __future__ import annotations

import json
from collections.abc import Callable, Iterable, Mapping, Sequence
from dataclasses import dataclass
from typing import Generic, TypeVar

from artifactlens.export.one_line import one_line
from artifactlens.result import CAUTION

Row = TypeVar("Row")

MISSING = "n/a"  # BIDS specification, "Tabular files"

# Characters that readers act upon at the start of a cell: quotes open a cell that runs
# over tabs and line ends, the others start a formula in spreadsheets.
_ACTED_UPON = ("'", '"', "=", "+", "-", "@")


@dataclass(frozen=True, slots=True)
class Column(Generic[Row]):
    """One column: its name, its cell for a row, and its entry in the column dictionary.

    ``units``, ``levels`` and ``delimiter`` are those of a BIDS sidecar; None where the
    column has none.
    """

    name: str
    cell: Callable[[Row], str]
    description: str
    units: str | None = None
    levels: Mapping[str, str] | None = None
    delimiter: str | None = None


def table_tsv(columns: Sequence[Column[Row]], rows: Iterable[Row]) -> str:
    r"""A header row and one row per entry, separated by tabs, each ended by ``\n``."""
    lines = ["\t".join(column.name for column in columns)]
    lines += ["\t".join(column.cell(row) for column in columns) for row in rows]
    return "\n".join(lines) + "\n"


def columns_json(columns: Sequence[Column[Row]]) -> str:
    """The column dictionary in the style of a BIDS sidecar, with the caution beside it."""
    body: dict[str, object] = {"Caution": CAUTION}
    for column in columns:
        entry: dict[str, object] = {"Description": column.description}
        if column.units is not None:
            entry["Units"] = column.units
        if column.levels is not None:
            entry["Levels"] = dict(column.levels)
        if column.delimiter is not None:
            entry["Delimiter"] = column.delimiter
        body[column.name] = entry
    return json.dumps(body, indent=1, ensure_ascii=False) + "\n"


def text_cell(text: str) -> str:
    """Text as one cell; 'n/a' for empty text.

    A quote or formula sign at the start is preceded by an underscore, so that no reader
    takes the cell for anything but text.
    """
    line = one_line(text)
    if line.startswith(_ACTED_UPON):
        return f"_{line}"
    return line or MISSING


def number_cell(value: float | None, spec: str) -> str:
    """A number under a format specification; 'n/a' for None."""
    return MISSING if value is None else format(value, spec)
