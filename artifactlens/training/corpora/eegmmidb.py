"""One adult whose pages were read twice by a vision model (data_cards/eegmmidb_s001.md).

The readers are no people and no experts. Both read the same pages, blind to each other.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from functools import partial
from pathlib import Path

import numpy as np

from artifactlens.recording import open_recording
from artifactlens.training.corpora.labelled import (
    CLEAN,
    PRESENT,
    UNKNOWN,
    Label,
    LabelledRecording,
    need_folder,
    need_labelled,
)
from artifactlens.training.corpora.page_readings import (
    ANY,
    BESIDE_POP,
    DOUBTED,
    PAGE_SITES,
    PLAIN,
    POLES,
    READ_KINDS,
    Reading,
    marked,
    page_numbers,
    readings,
)
from artifactlens.training.corpora.spans import Bools, runs

CORPUS = "eegmmidb_s001"


def labels_of(rows: Sequence[Reading]) -> tuple[Label, ...]:
    """Labels on whole seconds where both readers agree, at sites that a page shows.

    A second of a page that both read is clean of eye and muscle at these sites where neither
    marks them, and of pop where neither marks pop, sway or other. Eye is present at the
    frontal poles, muscle and pop at the sites that both name. What either calls doubtful is
    unknown, and so is every other site of the recording. Rows of kind "brain" become labels
    as they stand, one for each row.
    """
    onset = np.arange(
        math.ceil(max((row.end for row in rows), default=0)), dtype=np.float64
    )
    read = page_numbers(rows, onset) >= 0
    found: list[Label] = []
    for kind in READ_KINDS:
        alike = BESIDE_POP if kind == "pop" else (kind,)
        touches = marked(rows, onset, alike, ANY).any(axis=0)
        found += _labels(kind, read & ~touches, PAGE_SITES, CLEAN)
        at_sites = [((site,), site) for site in PAGE_SITES]
        for channels, site in [(POLES, None)] if kind == "eye" else at_sites:
            both = marked(rows, onset, (kind,), PLAIN, site).all(axis=0)
            doubt = marked(rows, onset, (kind,), DOUBTED, site).any(axis=0)
            found += _labels(kind, read & both & ~doubt, channels, PRESENT)
    for row in rows:
        if row.kind == "brain":
            state = PRESENT if row.confidence in PLAIN else UNKNOWN
            text = row.comment or "pattern without a name"
            found.append(Label("brain", row.onset, row.end, row.sites, state, text))
    return tuple(found)


def _labels(
    kind: str, seconds: Bools, channels: tuple[str, ...], state: str
) -> list[Label]:
    """One label for each uninterrupted run of seconds."""
    return [
        Label(kind, float(start), float(stop), channels, state, "two readings")
        for start, stop in runs(seconds)
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
