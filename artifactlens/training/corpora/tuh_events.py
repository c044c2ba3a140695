"""The events corpus of Temple University Hospital (data_cards/tuh_events.md).

Read where a user has it: an EDF and a ``.rec`` of the same name beside it, at any depth.
Its discharges are the public test of look-alikes (Harati et al. 2015, IEEE SPMB).
"""

from __future__ import annotations

import re
from functools import partial
from pathlib import Path
from typing import NamedTuple

from artifactlens.errors import LabelsError
from artifactlens.recording import open_recording
from artifactlens.training.corpora.derivations import TCP_MONTAGE
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

CORPUS = "tuh_events"

CODES = {
    1: ("brain", "spsw"),
    2: ("brain", "gped"),
    3: ("brain", "pled"),
    4: ("eye", "eyem"),
    5: ("other", "artf"),
    6: ("other", "bckg"),
}
"""Code to kind and the corpus's own word. Background, "bckg", is whatever is none of the other
five: it is kept by its word and makes nothing clean."""

_PERSON = re.compile(r"([a-z]{8})_\d+")


class Event(NamedTuple):
    """One row of a ``.rec`` file: place in the montage, from 0; seconds; code."""

    channel: int
    start: float
    stop: float
    code: int


def parse(text: str, name: str) -> list[Event]:
    """Rows ``channel,start,stop,code``.

    Channels count from 0 in the order of the montage (from memory).

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
    found = []
    for number, line in enumerate(text.splitlines(), start=1):
        if not line.strip():
            continue
        where = f"{name}, line {number}"
        cells = [cell.strip() for cell in line.split(",")]
        if len(cells) != 4:
            raise LabelsError(
                f"{where}: channel,start,stop,code are needed; given were {len(cells)} cells.",
                "Copy the file again or correct the line.",
            )
        channel = _whole(cells[0], "channel", 0, len(TCP_MONTAGE) - 1, where)
        code = _whole(cells[3], "code", min(CODES), max(CODES), where)
        start = seconds_in(cells[1], "start", where)
        stop = seconds_in(cells[2], "stop", where)
        check_order(start, stop, where)
        found.append(Event(channel, start, stop, code))
    return found


def _whole(cell: str, what: str, least: int, most: int, where: str) -> int:
    if not re.fullmatch(r"[0-9]{1,3}", cell) or not least <= int(cell) <= most:
        raise LabelsError(
            f"{where}: {what} needs a whole number from {least} to {most}; given was "
            f"{cell[:20]!r}.",
            "Copy the file again or correct the line.",
        )
    return int(cell)


def labels_of(events: list[Event]) -> tuple[Label, ...]:
    """One label for each event, on its derivation; nothing is clean."""
    found = []
    for event in events:
        kind, word = CODES[event.code]
        channels = (TCP_MONTAGE[event.channel],)
        found.append(Label(kind, event.start, event.stop, channels, PRESENT, word))
    return tuple(found)


def read(folder: Path) -> list[LabelledRecording]:
    """Every EDF with its ``.rec`` beside it, wherever below the folder.

    Raises
    ------
    LabelsError
        If a ``.rec`` is malformed, or there is nothing to read.
    """
    return read_edf_with(".rec", folder, CORPUS, _read_one)


def unlabelled(folder: Path) -> list[str]:
    """Names of the EDF files that are skipped because no ``.rec`` lies beside them."""
    return edf_with(".rec", folder)[1]


def _read_one(path: Path) -> LabelledRecording:
    match = _PERSON.match(path.stem)
    table = path.with_suffix(".rec")
    return LabelledRecording(
        corpus=CORPUS,
        # Files of the evaluation part carry no id; each of its folders is one person.
        person=f"tuh-{match.group(1)}" if match else f"tuh-events-{path.parent.name}",
        name=path.stem,
        open=partial(open_recording, path),
        labels=labels_of(parse(read_text(table), table.name)),
        line_frequency=60.0,
        montage=TCP_MONTAGE,
    )
