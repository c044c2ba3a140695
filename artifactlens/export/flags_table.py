"""The flags as a table, one row per flag, and its column dictionary."""

from __future__ import annotations

from artifactlens.export.columns import (
    Column,
    columns_json,
    number_cell,
    table_tsv,
    text_cell,
)
from artifactlens.kinds import KINDS
from artifactlens.result import Flag, Result

SITE_DELIMITER = "|"


def _sites_cell(flag: Flag) -> str:
    # A delimiter inside a name would read as one site more.
    names = (text_cell(site).replace(SITE_DELIMITER, "/") for site in flag.sites)
    return SITE_DELIMITER.join(names) or text_cell("")


COLUMNS: tuple[Column[Flag], ...] = (
    Column(
        "flag",
        lambda flag: str(flag.number),
        "Number of the flag; the same number stands in result.json and in the report.",
    ),
    Column(
        "onset",
        lambda flag: format(flag.onset, ".2f"),
        "Start of the flagged segment, from the start of the recording.",
        units="s",
    ),
    Column(
        "duration",
        lambda flag: format(flag.duration, ".2f"),
        "Length of the flagged segment.",
        units="s",
    ),
    Column(
        "kind",
        lambda flag: text_cell(flag.kind),
        "Kind of artifact that the segment is consistent with.",
        levels={
            kind.name: f"Consistent with {kind.label}. Look-alike: {kind.look_alike}."
            for kind in KINDS
        },
    ),
    Column(
        "sites",
        _sites_cell,
        "Electrode sites concerned, spelled as in the recording. In a name, '|' is shown "
        "as '/', control characters as spaces, and a quote or formula sign at the start "
        "is preceded by an underscore.",
        delimiter=SITE_DELIMITER,
    ),
    Column(
        "probability",
        lambda flag: format(flag.probability, ".3f"),
        "Calibrated probability of the kind at the strongest second and site, 0 to 1.",
    ),
    Column(
        "driver",
        lambda flag: text_cell(flag.driver.feature),
        "Single feature that speaks for the kind most strongly. If none does: the two features "
        "that do so together, joined by '+'; the measures of such a pair stand in result.json.",
    ),
    Column(
        "driver_value",
        lambda flag: number_cell(flag.driver.value, ".4g"),
        "Value of that feature at the strongest second and site, in driver_unit; n/a if "
        "it could not be measured, and for a pair.",
    ),
    Column(
        "driver_unit",
        lambda flag: text_cell(flag.driver.unit),
        "Unit of that feature; n/a for a pure number, and for a pair.",
    ),
    Column(
        "driver_usual",
        lambda flag: number_cell(flag.driver.usual, ".4g"),
        "Median of that feature over the quiet seconds of this recording, in driver_unit; "
        "n/a if there is none, and for a pair.",
    ),
    Column(
        "evidence",
        lambda flag: format(flag.driver.log_odds, "+.3f"),
        "What that feature adds to the score, in log-odds (natural logarithm).",
    ),
    Column(
        "look_alike",
        lambda flag: text_cell(flag.look_alike),
        "Cerebral patterns with signs present that the segment can be mistaken for; n/a "
        "if no such sign was found, which does not exclude cerebral activity.",
    ),
    Column(
        "sentence",
        lambda flag: text_cell(flag.sentence),
        "The flag in words, with its reason.",
    ),
)


def flags_tsv(result: Result) -> str:
    """The flags in the order of the result, as tab separated values."""
    return table_tsv(COLUMNS, result.flags)


def flags_columns_json() -> str:
    """The column dictionary of :func:`flags_tsv`, as a BIDS sidecar would hold it."""
    return columns_json(COLUMNS)
