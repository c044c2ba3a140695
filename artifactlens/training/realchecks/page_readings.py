"""Readings of plotted pages as truth per second and site (``eegmmidb_s001``).

The readings at hand are those of a general vision model: not human, not expert.
"""

from __future__ import annotations

import csv
from collections.abc import Collection, Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from artifactlens.closeups import DOUBLE_BANANA
from artifactlens.sites import canonical_site
from artifactlens.training.realchecks.agreement import NO, NOT_CALLED, YES
from artifactlens.training.realchecks.judged import touched

Bools = NDArray[np.bool_]

READERS = ("first", "second")
PLAIN = frozenset({"sure", "probable"})
ANY = PLAIN | {"doubtful"}
PAGE_SITES = tuple(dict.fromkeys(name for pair in DOUBLE_BANANA for name in pair))
"""Sites that a page shows: only there can a reading tell anything."""

EVERYWHERE = "generalized"


@dataclass(frozen=True, slots=True)
class Row:
    """One row of a reading; times in seconds, ``sites`` in the 10-05 system."""

    recording: str
    reader: str
    kind: str
    onset: float
    end: float
    sites: frozenset[str]
    confidence: str


def read_rows(path: Path) -> list[Row]:
    """Rows of ``readings.tsv``; a "generalized" row names all sites that a page shows."""
    with path.open(encoding="utf-8", newline="") as file:
        entries = list(csv.DictReader(file, delimiter="\t"))
    rows = []
    for entry in entries:
        spelt = entry["sites"].split("|")
        sites = {name for name in map(canonical_site, spelt) if name is not None}
        if EVERYWHERE in spelt:
            sites.update(PAGE_SITES)
        rows.append(
            Row(
                entry["recording"], entry["reader"], entry["kind"], float(entry["onset"]),
                float(entry["end"]), frozenset(sites), entry["confidence"],
            )
        )  # fmt: skip
    return rows


def marked(
    rows: Sequence[Row],
    onset: NDArray[np.float64],
    kinds: Collection[str],
    confidences: Collection[str],
    site: str | None = None,
) -> Bools:
    """Seconds that each reader marked (at one site), shape (2, n_epochs).

    A row marks a second that it touches by a tenth, as a flag does.
    """
    out = np.zeros((len(READERS), len(onset)), dtype=bool)
    for place, reader in enumerate(READERS):
        own = [
            row
            for row in rows
            if row.reader == reader
            and row.kind in kinds
            and row.confidence in confidences
            and (site is None or site in row.sites)
        ]
        begin = np.array([row.onset for row in own])
        end = np.array([row.end for row in own])
        out[place] = touched(begin, end, onset).any(axis=0)
    return out


def marked_cells(
    rows: Sequence[Row],
    onset: NDArray[np.float64],
    kinds: Collection[str],
    confidences: Collection[str],
    sites: Sequence[str],
) -> Bools:
    """As :func:`marked`, site by site: shape (2, n_epochs, n_sites)."""
    columns = [marked(rows, onset, kinds, confidences, site) for site in sites]
    return np.stack(columns, axis=2)


def page_numbers(rows: Sequence[Row], onset: NDArray[np.float64]) -> NDArray[np.int64]:
    """Number of the page a second lies on, -1 unless both read that page, (n_epochs,)."""
    first, second = (
        {
            (row.onset, row.end)
            for row in rows
            if row.kind == "page" and row.reader == reader
        }
        for reader in READERS
    )
    page = np.full(len(onset), -1, dtype=np.int64)
    for number, (begin, end) in enumerate(sorted(first & second)):
        # Grids at fractional sampling rates miss the whole second by less than a sample.
        page[(onset >= begin - 0.01) & (onset + 1 <= end + 0.01)] = number
    return page


def agreed(plain: Bools, anything: Bools, read: Bools) -> NDArray[np.int8]:
    """Truth by two readings: YES where both are plain, NO where neither marks anything.

    What one calls and the other does not, and what one calls doubtful only, is NOT_CALLED.

    Parameters
    ----------
    plain : array, shape (2, ...), bool
        Sure or probable to each reader.
    anything : array, shape (2, ...), bool
        Marked with any confidence.
    read : array, shape (...), bool
        On a page that both read.
    """
    truth = np.full(read.shape, NOT_CALLED, dtype=np.int8)
    truth[read & plain.all(axis=0)] = YES
    truth[read & ~anything.any(axis=0)] = NO
    return truth


def on_whole_page(named: Bools, page: NDArray[np.int64]) -> Bools:
    """Spread a mark over the page it stands on.

    Parameters
    ----------
    named : array, shape (n_epochs, n_sites), bool
    page : array, shape (n_epochs,)
        Page numbers, -1 for none: such seconds stay as they are.

    Returns
    -------
    array, shape (n_epochs, n_sites), bool
    """
    spread = named.copy()
    for number in np.unique(page[page >= 0]):
        spread[page == number] = named[page == number].any(axis=0)
    return spread
