"""What was measured at each site, one row per site, and its column dictionary."""

from __future__ import annotations

from collections.abc import Callable

from artifactlens.export.columns import (
    Column,
    columns_json,
    number_cell,
    table_tsv,
    text_cell,
)
from artifactlens.kinds import KINDS, Kind
from artifactlens.result import Result, SiteEvidence


def _share_cell(kind: str) -> Callable[[SiteEvidence], str]:
    return lambda row: number_cell(row.share.get(kind), ".4f")


def _share_column(kind: Kind) -> Column[SiteEvidence]:
    return Column(
        f"{kind.name}_share",
        _share_cell(kind.name),
        f"Share of the judged seconds flagged as consistent with {kind.label}, 0 to 1; n/a "
        "if the kind cannot be judged here, which is not the same as absent.",
    )


COLUMNS: tuple[Column[SiteEvidence], ...] = (
    Column(
        "site",
        lambda row: text_cell(row.site),
        "Electrode site, spelled as in the recording. Control characters are shown as "
        "spaces, and a quote or formula sign at the start is preceded by an underscore.",
    ),
    Column(
        "channel",
        lambda row: text_cell(row.channel or ""),
        "Label of the channel that carries the site; n/a for a site solved from "
        "derivations and for the reference.",
    ),
    Column(
        "role",
        lambda row: text_cell(row.role),
        "What the electrode is in this recording.",
        levels={
            "site": "Electrode on the scalp.",
            "ear": "Electrode at an ear lobe or mastoid.",
            "reference": "Common reference of the channels.",
        },
    ),
    Column(
        "seconds_judged",
        lambda row: format(row.seconds_judged, ".2f"),
        "Time over which the site could be judged.",
        units="s",
    ),
    *(_share_column(kind) for kind in KINDS),
    Column(
        "pops_per_minute",
        lambda row: number_cell(row.pops_per_minute, ".4g"),
        "Rate of flags consistent with an electrode pop.",
        units="1/min",
    ),
    Column(
        "mains_uv",
        lambda row: number_cell(row.mains_uv, ".4g"),
        "Amplitude at the line frequency.",
        units="uV",
    ),
    Column(
        "mains_db",
        lambda row: number_cell(row.mains_db, ".4g"),
        "Power at the line frequency over the power beside it.",
        units="dB",
    ),
    Column(
        "isolation_db",
        lambda row: number_cell(row.isolation_db, ".4g"),
        "How much the site shows that its neighbours do not.",
        units="dB",
    ),
    Column(
        "fault",
        lambda row: text_cell(row.fault),
        "Fault seen without a classifier (such as flat or clipped); n/a if none was seen.",
    ),
)


def sites_tsv(result: Result) -> str:
    """The sites in the order of the result, as tab separated values."""
    return table_tsv(COLUMNS, result.sites)


def sites_columns_json() -> str:
    """The column dictionary of :func:`sites_tsv`, as a BIDS sidecar would hold it."""
    return columns_json(COLUMNS)
