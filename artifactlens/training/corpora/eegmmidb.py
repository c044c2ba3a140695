"""One adult whose pages were read twice by a vision model (data_cards/eegmmidb_s001.md).

The readers are no people and no experts. Both read the same pages, blind to each other.
"""

from __future__ import annotations

import csv
from collections.abc import Sequence
from functools import partial
from pathlib import Path
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from artifactlens.errors import LabelsError
from artifactlens.recording import open_recording
from artifactlens.sites import canonical_site
from artifactlens.training.corpora.labelled import (
    CLEAN,
    PRESENT,
    UNKNOWN,
    Label,
    LabelledRecording,
    check_order,
    need_folder,
    need_labelled,
    read_text,
    seconds_in,
)

Bools = NDArray[np.bool_]

CORPUS = "eegmmidb_s001"
READERS = ("first", "second")
CALLED = ("sure", "probable")
DOUBTED = ("doubtful",)

FRONTAL = ("Fp1", "Fp2", "Fpz", "AF7", "AF8", "AF3", "AF4", "AFz")
"""Where an eye movement that both readers mark is taken as present."""

BESIDE_POP = ("pop", "sway", "other")
"""Rows of other names that may stand for what the other reader calls a pop."""

KINDS = ("eye", "muscle", "pop", "sway", "other", "brain", "page")


class Reading(NamedTuple):
    """One row of ``readings.tsv``; times in seconds, ``sites`` as the reader spells them."""

    recording: str
    reader: str
    kind: str
    onset: float
    end: float
    sites: tuple[str, ...]
    confidence: str
    comment: str


def readings(folder: Path) -> dict[str, tuple[Reading, ...]]:
    """All rows of ``readings.tsv``, by the file name of the recording.

    Raises
    ------
    LabelsError
        If the file is missing or a row is malformed.
    """
    path = folder / "readings.tsv"
    lines = csv.reader(read_text(path).splitlines(), delimiter="\t", quoting=csv.QUOTE_NONE)
    header = next(lines, [])
    if header != list(Reading._fields):
        raise LabelsError(
            f"{path.name} needs the columns {', '.join(Reading._fields)}; it has "
            f"{', '.join(header)[:120] or 'none'}.",
            "Take the file as it comes with the corpus.",
        )
    found: dict[str, list[Reading]] = {}
    for number, cells in enumerate(lines, start=2):
        where = f"{path.name}, line {number}"
        if len(cells) != len(header) or cells[1] not in READERS or cells[2] not in KINDS:
            raise LabelsError(
                f"{where}: {len(header)} cells are needed, with reader {' or '.join(READERS)} "
                f"and kind {', '.join(KINDS)}; given was {' | '.join(cells)[:60]}.",
                "Take the file as it comes with the corpus.",
            )
        onset, end = (
            seconds_in(cells[3], "onset", where),
            seconds_in(cells[4], "end", where),
        )
        check_order(onset, end, where)
        sites = tuple(site for site in cells[5].split("|") if site)
        recording, reader, kind, _, _, _, confidence, comment = cells
        row = Reading(recording, reader, kind, onset, end, sites, confidence, comment)
        found.setdefault(recording, []).append(row)
    return {recording: tuple(rows) for recording, rows in found.items()}


def marked_seconds(
    rows: Sequence[Reading],
    n_epochs: int,
    kind: str,
    confidence: Sequence[str] | None = None,
    site: str | None = None,
) -> Bools:
    """Seconds that the marks of either reader touch.

    Parameters
    ----------
    rows : sequence of Reading
        Of one recording.
    n_epochs : int
        Whole seconds from the start.
    kind : str
    confidence : sequence of str, optional
        Marks of this confidence only.
    site : str, optional
        Marks that name this site only, by its canonical name.

    Returns
    -------
    array, shape (2, n_epochs), bool
        The first reader, and the second.
    """
    marked = np.zeros((len(READERS), n_epochs), dtype=bool)
    for row in rows:
        if row.kind != kind or (
            confidence is not None and row.confidence not in confidence
        ):
            continue
        if site is not None and site not in {canonical_site(name) for name in row.sites}:
            continue
        marked[READERS.index(row.reader), int(row.onset) : int(np.ceil(row.end))] = True
    return marked


def reader_seconds(rows: Sequence[Reading], n_epochs: int, kind: str) -> NDArray[np.int8]:
    """What each reader by itself says of each second.

    Returns
    -------
    array, shape (2, n_epochs), int8
        1 a sure or probable mark touches the second, 0 its page was read and bears no mark of
        the kind there, -1 not read, or a doubtful mark only.
    """
    seconds = np.full((len(READERS), n_epochs), -1, dtype=np.int8)
    any_mark = marked_seconds(rows, n_epochs, kind)
    seconds[marked_seconds(rows, n_epochs, "page") & ~any_mark] = 0
    seconds[marked_seconds(rows, n_epochs, kind, CALLED)] = 1
    return seconds


def labels_of(rows: Sequence[Reading]) -> tuple[Label, ...]:
    """Labels on whole seconds where both readers agree.

    A second of a page that both read is clean of eye and muscle at every site where neither
    marks them, and of pop where neither marks pop, sway or other. Eye is present at the
    frontal poles, muscle and pop at the sites that both name. What either calls doubtful is
    unknown. Rows of kind "brain" become labels as they stand, one for each row.
    """
    n = max((int(np.ceil(row.end)) for row in rows), default=0)
    page = _by_both(marked_seconds(rows, n, "page"))
    named = {name for row in rows for name in row.sites}
    sites = sorted({site for name in named if (site := canonical_site(name))})
    of_site: list[tuple[tuple[str, ...], str | None]] = [((name,), name) for name in sites]
    found: list[Label] = []
    for kind in ("eye", "muscle", "pop"):
        clean = page
        for word in BESIDE_POP if kind == "pop" else (kind,):
            clean = clean & ~_by_either(marked_seconds(rows, n, word))
        found += _runs(kind, clean, (), CLEAN)
        for channels, site in [(FRONTAL, None)] if kind == "eye" else of_site:
            both = _by_both(marked_seconds(rows, n, kind, CALLED, site))
            found += _runs(kind, page & both, channels, PRESENT)
            doubt = _by_either(marked_seconds(rows, n, kind, DOUBTED, site))
            found += _runs(kind, doubt, channels, UNKNOWN)
    for row in rows:
        if row.kind == "brain":
            state = PRESENT if row.confidence in CALLED else UNKNOWN
            channels = tuple(name for name in row.sites if canonical_site(name))
            text = row.comment or "pattern without a name"
            found.append(Label("brain", row.onset, row.end, channels, state, text))
    return tuple(found)


def _by_both(marked: Bools) -> Bools:
    return marked[0] & marked[1]


def _by_either(marked: Bools) -> Bools:
    return marked[0] | marked[1]


def _runs(kind: str, seconds: Bools, channels: tuple[str, ...], state: str) -> list[Label]:
    """One label for each uninterrupted run of seconds."""
    edges = np.flatnonzero(np.diff(np.r_[False, seconds, False]))
    return [
        Label(kind, float(start), float(stop), channels, state, "two readings")
        for start, stop in zip(edges[::2], edges[1::2], strict=True)
    ]


def read(folder: Path) -> list[LabelledRecording]:
    """The recordings of which pages were read.

    Raises
    ------
    LabelsError
        If the readings are missing or malformed, or belong to no recording here.
    """
    by_name = readings(need_folder(folder, CORPUS))
    paths = sorted(folder.glob("S001R*.edf"))
    found = [
        LabelledRecording(
            corpus=CORPUS,
            person="eegmmidb-001",
            name=path.stem,
            open=partial(open_recording, path),
            labels=labels_of(by_name[path.name]),
            line_frequency=60.0,
        )
        for path in paths
        if path.name in by_name
    ]
    unread = [path.name for path in paths if path.name not in by_name]
    return need_labelled(found, CORPUS, "recordings that readings.tsv names", unread)
