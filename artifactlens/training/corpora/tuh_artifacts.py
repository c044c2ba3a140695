"""The artifact corpus of Temple University Hospital (data_cards/tuh_artifacts.md).

Read where a user has it: an EDF and a CSV of the same name beside it, at any depth. The
format is that of version 3 (Hamid et al. 2020, IEEE SPMB).
"""

from __future__ import annotations

import csv
import re
from functools import partial
from pathlib import Path
from typing import NamedTuple

from artifactlens.errors import LabelsError
from artifactlens.recording import open_recording
from artifactlens.training.corpora.derivations import TCP_MONTAGE, clean_elsewhere, pair_of
from artifactlens.training.corpora.labelled import (
    PRESENT,
    Label,
    LabelledRecording,
    check_order,
    edf_with,
    read_edf_with,
    read_text,
    seconds_in,
)

CORPUS = "tuh_artifacts"
COLUMNS = ("channel", "start_time", "stop_time", "label")
EVERYWHERE = "TERM"

KIND_OF = {
    "eyem": "eye",
    "musc": "muscle",
    "chew": "muscle",
    "shiv": "muscle",
    "elec": "pop",  # any electrode artifact: pops, but contact loss and leads that move too
    "elpp": "pop",
}
"""Words of the corpus; a label may join two by "_". There is none for mains."""

IGNORED = frozenset({"null", "bckg"})

_PERSON = re.compile(r"([a-z]{8})_s\d+_t\d+")
_WITHOUT_EARS = "tcp_ar_a"
"""In the name of a folder whose montage lacks A1-T3 and T4-A2 (from memory)."""


class Annotation(NamedTuple):
    """One row of a CSV file; times in seconds, ``channel`` a derivation or TERM."""

    channel: str
    start: float
    stop: float
    label: str


def parse(text: str, name: str) -> list[Annotation]:
    """Rows of a CSV of version csv_v1.0.0.

    Parameters
    ----------
    text : str
    name : str
        Of the file, for messages.

    Raises
    ------
    LabelsError
        With the line that is malformed.
    """
    header: list[str] | None = None
    found = []
    for number, line in enumerate(text.splitlines(), start=1):
        if not line.strip() or line.lstrip().startswith("#"):
            continue
        where = f"{name}, line {number}"
        cells = [cell.strip() for cell in next(csv.reader([line]))]
        if header is None:
            header = cells
            missing = [column for column in COLUMNS if column not in header]
            if missing:
                raise LabelsError(
                    f"{where}: the header row needs the columns {', '.join(COLUMNS)}; "
                    f"missing are {', '.join(missing)}.",
                    "Give files of version csv_v1.0.0 (version 3 of the corpus).",
                )
            continue
        if len(cells) != len(header):
            raise LabelsError(
                f"{where}: {len(header)} cells are needed; given were {len(cells)}.",
                "Copy the file again or correct the line.",
            )
        row = dict(zip(header, cells, strict=True))
        if row["channel"] != EVERYWHERE and pair_of(row["channel"]) is None:
            raise LabelsError(
                f"{where}: channel needs a derivation such as FP1-F7, or {EVERYWHERE}; given "
                f"was {row['channel'][:20]!r}.",
                "Copy the file again or correct the line.",
            )
        start = seconds_in(row["start_time"], "start_time", where)
        stop = seconds_in(row["stop_time"], "stop_time", where)
        check_order(start, stop, where)
        found.append(Annotation(row["channel"], start, stop, row["label"]))
    if header is None:
        raise LabelsError(
            f"{name} needs a header row {','.join(COLUMNS)}; it has none.",
            "Copy the file again.",
        )
    return found


def labels_of(rows: list[Annotation], montage: tuple[str, ...]) -> tuple[Label, ...]:
    """Present labels, and what is clean beside them.

    A joined label gives one of each kind. A word that is not known is kept as "other".
    """
    found = []
    for row in rows:
        word = row.label.lower()
        if word in IGNORED:
            continue
        parts = word.split("_")
        known = all(part in KIND_OF for part in parts)
        kinds = dict.fromkeys(KIND_OF[part] for part in parts) if known else ("other",)
        channels = () if row.channel == EVERYWHERE else (row.channel,)
        found += [
            Label(kind, row.start, row.stop, channels, PRESENT, row.label) for kind in kinds
        ]
    return (*found, *clean_elsewhere(found, montage))


def read(folder: Path) -> list[LabelledRecording]:
    """Every EDF with its CSV beside it, wherever below the folder.

    Raises
    ------
    LabelsError
        If a CSV is malformed, a file name tells no person, or there is nothing to read.
    """
    return read_edf_with(".csv", folder, CORPUS, _read_one)


def unlabelled(folder: Path) -> list[str]:
    """Names of the EDF files that are skipped because no CSV lies beside them."""
    return edf_with(".csv", folder)[1]


def _read_one(path: Path) -> LabelledRecording:
    person = _PERSON.match(path.stem)
    if person is None:
        raise LabelsError(
            f"The name of {path.name} needs to start like aaaaaaju_s005_t000, to tell which "
            "recordings are of one person.",
            "Keep the names of the corpus.",
        )
    montage: tuple[str, ...] = TCP_MONTAGE
    if any(_WITHOUT_EARS in part for part in path.parts):
        montage = tuple(name for name in TCP_MONTAGE if name not in ("A1-T3", "T4-A2"))
    table = path.with_suffix(".csv")
    return LabelledRecording(
        corpus=CORPUS,
        # The corpora of this hospital share their ids, so one person has one name in all.
        person=f"tuh-{person.group(1)}",
        name=path.stem,
        open=partial(open_recording, path),
        labels=labels_of(parse(read_text(table), table.name), montage),
        line_frequency=60.0,
        montage=montage,
    )
