"""Readings of plotted pages: their rows, and the seconds and sites that they mark.

The readings at hand (``eegmmidb_s001``) are those of a general vision model: not human, not
expert. Two readers looked at the same pages, blind to each other.
"""

from __future__ import annotations

from collections.abc import Collection, Sequence
from pathlib import Path
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from artifactlens.closeups import DOUBLE_BANANA
from artifactlens.errors import LabelsError
from artifactlens.sites import canonical_site
from artifactlens.training.corpora.labelled import check_order, rows_in, seconds_in
from artifactlens.training.corpora.spans import touched

Bools = NDArray[np.bool_]
Seconds = NDArray[np.float64]

READERS = ("first", "second")
PLAIN = ("sure", "probable")
DOUBTED = ("doubtful",)
ANY = (*PLAIN, *DOUBTED)

READ_KINDS = ("eye", "muscle", "pop")
"""Kinds that the readers looked for: where they mark none of it, there is none to them."""

BESIDE_POP = ("pop", "sway", "other")
"""Rows of other names that may stand for what the other reader calls a pop."""

KINDS = ("eye", "muscle", *BESIDE_POP, "brain", "page")

PAGE_SITES = tuple(dict.fromkeys(name for pair in DOUBLE_BANANA for name in pair))
"""Sites that a page shows: only there can a reading tell anything."""

POLES = ("Fp1", "Fp2")
"""Where an eye movement that both readers mark is taken as present."""

EVERYWHERE = "generalized"
"""Stands for all sites that a page shows."""

_GRID_SECONDS = 0.01
"""Grids at fractional sampling rates miss the whole second by less than a sample."""


class Reading(NamedTuple):
    """One row of ``readings.tsv``; times in seconds, ``sites`` among ``PAGE_SITES``."""

    recording: str
    reader: str
    kind: str
    onset: float
    end: float
    sites: tuple[str, ...]
    confidence: str
    comment: str = ""


def readings(folder: Path) -> dict[str, tuple[Reading, ...]]:
    """All rows of ``readings.tsv``, by the file name of the recording.

    Raises
    ------
    LabelsError
        If the file is missing or a row is malformed.
    """
    found: dict[str, list[Reading]] = {}
    for where, cells in rows_in(folder / "readings.tsv", Reading._fields):
        recording, reader, kind, begin, finish, spelt, confidence, comment = cells
        named = {
            site
            for name in filter(None, spelt.split("|"))
            for site in (PAGE_SITES if name == EVERYWHERE else (canonical_site(name),))
        }
        if (
            reader not in READERS
            or kind not in KINDS
            or (kind != "page" and confidence not in ANY)
            or not named.issubset(PAGE_SITES)
        ):
            raise LabelsError(
                f"{where}: reader {' or '.join(READERS)}, kind {', '.join(KINDS)}, sites of a "
                f"page and confidence {', '.join(ANY)} are needed; given was "
                f"{' | '.join(cells)[:60]}.",
                "Take the file as it comes with the corpus.",
            )
        onset = seconds_in(begin, "onset", where)
        end = seconds_in(finish, "end", where)
        check_order(onset, end, where)
        sites = tuple(site for site in PAGE_SITES if site in named)
        row = Reading(recording, reader, kind, onset, end, sites, confidence, comment)
        found.setdefault(recording, []).append(row)
    return {recording: tuple(rows) for recording, rows in found.items()}


def marked(
    rows: Sequence[Reading],
    onset: Seconds,
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


def page_numbers(rows: Sequence[Reading], onset: Seconds) -> NDArray[np.int64]:
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
        on_page = (onset >= begin - _GRID_SECONDS) & (onset + 1 <= end + _GRID_SECONDS)
        page[on_page] = number
    return page
