"""Electrode impedances: from a table, from a BIDS data set, or from the recording itself."""

from __future__ import annotations

import csv
import re
from collections.abc import Mapping
from pathlib import Path
from statistics import median
from typing import TYPE_CHECKING

import numpy as np

from artifactlens.edf_records import listing
from artifactlens.errors import ImpedanceError
from artifactlens.frames import Frame
from artifactlens.sites import canonical_site, parse_label, reference_name, without_prefix

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from artifactlens.recording import Recording

LARGEST_TABLE = 1_000_000
"""Bytes; a table of 256 sites has a few thousand."""

MOST_KOHM = 1000.0
"""A median above this, without a unit, is taken for ohm (common practice: well fixed
electrodes have some kilo-ohm, dry ones some hundred)."""

_REFERENCE = "reference"
_MISSING = frozenset({"", "n/a", "na", "nan", "-", "--", "?"})
# What meters write where no current flows: no number, so none is made up.
_OPEN = frozenset({"open", "ol", "o.l.", "inf", "+inf", "infinity", "\u221e"})
_NUMBER = re.compile(r"[+-]?([0-9]+([.,][0-9]*)?|[.,][0-9]+)(e[+-]?[0-9]{1,2})?", re.I)
_THOUSANDS = re.compile(r"[+-]?[0-9]{1,3},[0-9]{3}")
_UNIT = re.compile(
    r"(?<![a-z])(?P<prefix>kilo|k|mega|meg|m)?[\s_-]?(ohms?|[\u03a9\u2126])(?![a-z])", re.I
)
_SITE_COLUMNS = ("name", "site", "electrode", "channel", "label")
_FORM = (
    "Give a table of two columns, site and kilo-ohm (.tsv, .csv or blanks between them; a "
    "header may state ohm or kohm), or a BIDS electrodes.tsv."
)


def read_impedances(recording: Recording, table: Path | None = None) -> dict[str, float]:
    """The impedances that are known of a recording's electrodes.

    Parameters
    ----------
    recording : Recording
    table : Path, optional
        Two columns, site and kilo-ohm, separated by tabs, commas, semicolons or blanks,
        with or without a header, which may state the unit (ohm or kohm); or a BIDS
        ``electrodes.tsv``. Without it, a BIDS ``*_electrodes.tsv`` beside the recording is
        taken if it has impedances of its sites, else what the file itself gives.

    Returns
    -------
    dict of str to float, kilo-ohm
        By the names of the source, reference and ground included where it has them; empty
        if nothing is known. :func:`impedances_of` puts them in the order of the sites.

    Raises
    ------
    ImpedanceError
        If the table given cannot be read or names no site of the recording.

    References
    ----------
    BIDS 1.11, "Electrodes description (electrodes.tsv)": ``impedance`` is in kOhm.
    """
    if table is not None:
        values = read_table(table)
        if not _names_a_site(values, recording):
            raise ImpedanceError(
                f"{table.name} needs to name sites of the recording; it has values for "
                f"{listing(list(values)) or 'none'}, the recording has channels "
                f"{listing(list(recording.labels))}.",
                "Name the sites as the recording does, or by the 10-20 system.",
            )
        return values
    for beside in _electrodes_beside(recording.path):
        try:
            values = read_table(beside)
        except ImpedanceError:
            continue  # most such tables give positions alone; nobody named this one
        if _names_a_site(values, recording):
            return values
    return dict(recording.impedances_kohm)


def impedances_of(frame: Frame, values: Mapping[str, float]) -> NDArray[np.float64]:
    """Impedances in the order of the sites.

    Names are understood as channel labels are: "EEG T3-REF", "T3" and "T7" are one
    electrode. "Ref" is the reference, where the recording has a single one.

    Returns
    -------
    array, shape (n_sites,), kilo-ohm
        NaN where none is known.
    """
    known = {_electrode(name): value for name, value in values.items()}
    references = [role == "reference" for role in frame.roles]
    found = np.full(len(frame.sites), np.nan)
    for row, site in enumerate(frame.sites):
        key = frame.canonical[row] or _electrode(site)
        if key not in known and references[row] and sum(references) == 1:
            key = _REFERENCE
        found[row] = known.get(key, np.nan)
    return found


def read_table(path: Path) -> dict[str, float]:
    """Read a table of impedances from a file, whatever recording it is of.

    Returns
    -------
    dict of str to float, kilo-ohm
        As :func:`parse_impedances` gives them.

    Raises
    ------
    ImpedanceError
        If the file cannot be read, or not as such a table.
    """
    return parse_impedances(_text_of(path), path.name)


def parse_impedances(text: str, name: str) -> dict[str, float]:
    """Read a table of impedances.

    Parameters
    ----------
    text : str
    name : str
        File name, for messages; its ending tells whether commas separate columns.

    Returns
    -------
    dict of str to float, kilo-ohm
        Sites without a value ("n/a"), or open ("OL", "inf"), are left out; ">100" is 100.

    Raises
    ------
    ImpedanceError
        If a row cannot be read, a site has two values, or the unit cannot be kilo-ohm.
    """
    rows = _rows(text, name)
    if not rows:
        raise ImpedanceError(f"{name} holds no rows, where sites were needed.", _FORM)
    header = rows[0][1] if _is_header(rows[0][1]) else None
    site_column, value_column = _columns(header, rows, name)
    factor = _kilo_ohm_per_unit(header, value_column, name)
    values: dict[str, float] = {}
    first: dict[str | None, float] = {}
    for number, cells in rows[header is not None :]:
        if len(cells) <= max(site_column, value_column) or (
            header is None and len(cells) > 2
        ):
            raise ImpedanceError(
                f"Row {number} of {name} needs a site and an impedance; it has "
                f"{len(cells)} columns.",
                _FORM,
            )
        site, value = cells[site_column], _number(cells[value_column], number, name)
        if value is None:
            continue
        value *= 1.0 if factor is None else factor
        electrode = _electrode(site)
        if electrode and first.setdefault(electrode, value) != value:
            raise ImpedanceError(
                f"{name} has two values for {site[:20]}: {first[electrode]:g} and "
                f"{value:g} kilo-ohm.",
                "Keep one row per site, that of the last measurement.",
            )
        values[site] = value
    if factor is None and values and median(values.values()) > MOST_KOHM:
        raise ImpedanceError(
            f"{name} states no unit, and half of its values are above "
            f"{median(values.values()):g}: too much for kilo-ohm.",
            "State the unit in the header: 'site ohm' or 'site kohm'.",
        )
    return values


def _text_of(table: Path) -> str:
    try:
        with table.open("rb") as file:
            data = file.read(LARGEST_TABLE + 1)
    except (OSError, ValueError):
        raise ImpedanceError(
            f"The table of impedances {table.name} could not be opened.",
            "Check the path and that the file may be read.",
        ) from None
    if len(data) > LARGEST_TABLE or b"\x00" in data:
        raise ImpedanceError(
            f"A table of text was needed; {table.name} holds something else.", _FORM
        )
    try:
        return data.decode("utf-8-sig")
    except UnicodeDecodeError:
        raise ImpedanceError(
            f"{table.name} is not text in UTF-8.", "Save it as plain text in UTF-8."
        ) from None


def _rows(text: str, name: str) -> list[tuple[int, list[str]]]:
    """Number and cells of each row that is neither empty nor a comment."""
    lines = [
        (number, line)
        for number, line in enumerate(text.splitlines(), start=1)
        if line.strip() and not line.lstrip().startswith("#")
    ]
    if not lines:
        return []
    separator = _separator(lines[0][1], name)
    if separator is None:
        # A label may hold blanks ("EEG T3-REF 4.2") unless a header tells the columns.
        wide = {"name", "impedance"} <= {word.lower() for word in lines[0][1].split()}
        return [
            (number, line.split() if wide else line.rsplit(maxsplit=1))
            for number, line in lines
        ]
    try:
        cells = list(csv.reader((line for _, line in lines), delimiter=separator))
    except csv.Error:
        raise ImpedanceError(f"{name} is no table.", _FORM) from None
    if len(cells) != len(lines):
        raise ImpedanceError(
            f"{name} has a quoted cell that runs over a line end.", "Close the quotes."
        )
    return [
        (number, [cell.strip() for cell in row])
        for (number, _), row in zip(lines, cells, strict=True)
    ]


def _separator(line: str, name: str) -> str | None:
    """What stands between the columns; None for blanks."""
    for candidate in "\t;":
        if candidate in line:
            return candidate
    first, *others = line.split()
    if "," in line and (name.lower().endswith(".csv") or not others or "," in first):
        return ","
    return None


def _is_header(cells: list[str]) -> bool:
    """Whether a row names columns: no number in it, and no electrode before them."""
    if canonical_site(cells[0]) is not None:
        return False
    return not any(_NUMBER.fullmatch(_bare(c)) or _is_missing(c) for c in cells[1:])


def _is_missing(cell: str) -> bool:
    return cell.lower() in _MISSING | _OPEN


def _bare(cell: str) -> str:
    """The number in a cell; a meter writes ">100" at the end of its scale."""
    return cell.removeprefix(">").lstrip()


def _columns(
    header: list[str] | None, rows: list[tuple[int, list[str]]], name: str
) -> tuple[int, int]:
    """Columns of the site and of the impedance."""
    if header is None:
        return 0, 1
    words = [cell.lower() for cell in header]
    sites = [column for column, word in enumerate(words) if word in _SITE_COLUMNS]
    values = [
        column
        for column, (word, cell) in enumerate(zip(words, header, strict=True))
        if word.startswith("imp") or _UNIT.search(cell)
    ]
    site = sites[0] if sites else 0
    values = [column for column in values if column != site]
    if not values and len(header) == 2:
        values = [1 - site]
    if not values or len(rows) < 2:
        raise ImpedanceError(
            f"{name} needs a column of impedances and rows below its header; it has "
            f"{len(header)} columns and {len(rows) - 1} rows.",
            _FORM,
        )
    return site, values[0]


def _kilo_ohm_per_unit(header: list[str] | None, column: int, name: str) -> float | None:
    """Factor of the unit that the header states; None if it states none."""
    unit = None if header is None else _UNIT.search(header[column])
    if unit is None:
        return None
    prefix = (unit["prefix"] or "").lower()
    if prefix.startswith("m"):
        raise ImpedanceError(
            f"The unit of {name} needs to be ohm or kohm; its header says "
            f"{unit[0].strip()!r}.",
            "Convert the values to kilo-ohm.",
        )
    return 1.0 if prefix else 1e-3


def _number(cell: str, row: int, name: str) -> float | None:
    """An impedance in the unit of the table; None where there is none."""
    if _is_missing(cell):
        return None
    number = _bare(cell)
    # "1,000" may be one or a thousand.
    if _NUMBER.fullmatch(number) and not _THOUSANDS.fullmatch(number):
        value = float(number.replace(",", "."))
        if value >= 0:
            return value
    raise ImpedanceError(
        f"Row {row} of {name} needs an impedance of 0 or more, or n/a; given was "
        f"{cell[:20]!r}.",
        "Write plain numbers such as 4.2.",
    )


def _electrode(name: str) -> str | None:
    """What tells one electrode from another; None for a pair of electrodes."""
    parsed = parse_label(name)
    if parsed.role == "site":
        return parsed.canonical
    if parsed.role == "derivation":
        return None
    bare = without_prefix(name)
    return _REFERENCE if reference_name(bare) else f"name: {bare.upper()}"


def _names_a_site(values: Mapping[str, float], recording: Recording) -> bool:
    electrodes: set[str | None] = set()
    for label in recording.labels:
        parsed = parse_label(label)
        electrodes |= {_electrode(label), parsed.canonical, parsed.canonical_minus}
    given = {_electrode(name) for name in values}
    return bool((given & electrodes) - {None, _REFERENCE})


def _electrodes_beside(path: Path | None) -> list[Path]:
    """BIDS tables of electrodes of the same session, the most specific first.

    All entities of the table but ``space`` need to be those of the recording, ``sub`` and
    ``ses`` among them.
    """
    if path is None:
        return []
    own = _entities(path.name)
    if "sub" not in own:
        return []
    found = []
    for table in path.parent.glob("*_electrodes.tsv"):
        theirs = _entities(table.name)
        theirs.pop("space", None)
        same = all(own.get(key) == value for key, value in theirs.items())
        if same and all(theirs.get(key) == own.get(key) for key in ("sub", "ses")):
            found.append((-len(theirs), table.name, table))
    return [table for _, _, table in sorted(found)]


def _entities(name: str) -> dict[str, str]:
    """The BIDS entities of a file name: ``sub-01_ses-2_eeg.edf`` has sub and ses."""
    parts = (part.partition("-") for part in name.split("_")[:-1])
    return {key: value for key, dash, value in parts if dash}
