"""What was measured at each site and is advised, one row per site, and its dictionary."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

from artifactlens.advice import CAUSE_WORDS, Advice
from artifactlens.export.columns import (
    Column,
    columns_json,
    number_cell,
    table_tsv,
    text_cell,
)
from artifactlens.kinds import KINDS, Kind
from artifactlens.result import Result, SiteEvidence

VERDICT_LEVELS = {
    "re-prep": "The electrode should be prepared again.",
    "watch": "Not as it should be, but nothing to go to the patient for by itself.",
    "leave": "Nothing asks for care.",
    "cannot tell": "The recording lacks what it takes to judge the site.",
}


@dataclass(frozen=True, slots=True)
class SiteRow:
    """A site, and the first entry of the list that concerns it."""

    site: SiteEvidence
    advice: Advice | None


def _share_cell(kind: str) -> Callable[[SiteRow], str]:
    return lambda row: number_cell(row.site.share.get(kind), ".4f")


def _share_column(kind: Kind) -> Column[SiteRow]:
    return Column(
        f"{kind.name}_share",
        _share_cell(kind.name),
        f"Share of the judged seconds flagged as consistent with {kind.label}, 0 to 1; n/a "
        "if the kind cannot be judged here, which is not the same as absent.",
    )


COLUMNS: tuple[Column[SiteRow], ...] = (
    Column(
        "site",
        lambda row: text_cell(row.site.site),
        "Electrode site, spelled as in the recording. Control characters are shown as "
        "spaces, and a quote or formula sign at the start is preceded by an underscore.",
    ),
    Column(
        "channel",
        lambda row: text_cell(row.site.channel or ""),
        "Label of the channel that carries the site; n/a for a site solved from "
        "derivations and for the reference.",
    ),
    Column(
        "role",
        lambda row: text_cell(row.site.role),
        "What the electrode is in this recording.",
        levels={
            "site": "Electrode on the scalp.",
            "ear": "Electrode at an ear lobe or mastoid.",
            "reference": "Common reference of the channels.",
        },
    ),
    Column(
        "seconds_judged",
        lambda row: format(row.site.seconds_judged, ".2f"),
        "Time over which the site could be judged.",
        units="s",
    ),
    *(_share_column(kind) for kind in KINDS),
    Column(
        "pops_per_minute",
        lambda row: number_cell(row.site.pops_per_minute, ".4g"),
        "Rate of flags consistent with an electrode pop.",
        units="1/min",
    ),
    Column(
        "mains_uv",
        lambda row: number_cell(row.site.mains_uv, ".4g"),
        "Amplitude at the line frequency.",
        units="uV",
    ),
    Column(
        "mains_db",
        lambda row: number_cell(row.site.mains_db, ".4g"),
        "Power at the line frequency over the power beside it.",
        units="dB",
    ),
    Column(
        "isolation_db",
        lambda row: number_cell(row.site.isolation_db, ".4g"),
        "How much the site shows that its neighbours do not.",
        units="dB",
    ),
    Column(
        "fault",
        lambda row: text_cell(row.site.fault),
        "Fault seen without a classifier (such as flat or clipped); n/a if none was seen.",
    ),
    Column(
        "verdict",
        lambda row: text_cell(row.site.verdict),
        "What is advised for the site.",
        levels=VERDICT_LEVELS,
    ),
    Column(
        "cause",
        lambda row: text_cell("" if row.advice is None else row.advice.cause),
        "Where the trouble is thought to lie; n/a if no entry of the list concerns the site.",
        levels={cause: f"{words.capitalize()}." for cause, words in CAUSE_WORDS.items()},
    ),
    Column(
        "why",
        lambda row: text_cell(row.site.why),
        "Reason of the verdict; n/a where there is nothing to say.",
    ),
    Column(
        "advice",
        lambda row: number_cell(None if row.advice is None else row.advice.number, "d"),
        "Number of the first entry of the ranked list that concerns the site, 1 being the "
        "first thing to do; n/a if none does.",
    ),
    Column(
        "impedance_kohm",
        lambda row: number_cell(row.site.impedance_kohm, ".4g"),
        "Impedance as given by the recording or beside it; nothing was measured here.",
        units="kOhm",
    ),
)


def sites_tsv(result: Result) -> str:
    """The sites in the order of the result, as tab separated values."""
    first: dict[str, Advice] = {}
    for entry in result.advice:
        for site in entry.sites:
            first.setdefault(site, entry)
    rows = (SiteRow(site, first.get(site.site)) for site in result.sites)
    return table_tsv(COLUMNS, rows)


def sites_columns_json() -> str:
    """The column dictionary of :func:`sites_tsv`, as a BIDS sidecar would hold it."""
    return columns_json(COLUMNS)
