"""A child with absence epilepsy: cerebral patterns as noted while recording.

Never used for training (data_cards/clinical_absence.md). The technologist typed what was
seen, seconds late and not of everything. A note of a moment therefore says that its pattern
occurred somewhere in the seconds before it, not that it fills them.
"""

from __future__ import annotations

import csv
from functools import partial
from pathlib import Path

from artifactlens.errors import LabelsError
from artifactlens.kinds import KIND_NAMES
from artifactlens.recording import open_recording
from artifactlens.training.corpora.labelled import (
    PRESENT,
    UNKNOWN,
    Label,
    LabelledRecording,
    need_folder,
    read_text,
    seconds_in,
)

CORPUS = "clinical_absence"

LATE_SECONDS = 10.0
"""How long before its note a pattern is looked for (our own choice)."""

SEIZURE_LATE_SECONDS = 2.0
"""The three bursts of more than 500 microvolt at Fz start up to 1 s before "SZ START"; they
end before "SZ END" (measured on the recording)."""

CALIBRATION_SECONDS = 60.0

PHOTIC_SECONDS = 10.0
"""From one flash rate to the next in the notes, and so of the last."""

SPIKES = "spikes or sharp waves"
MOMENTS = {
    "vertex-waves": "vertex waves",
    "spindles": "sleep spindles",
    "sleep spindles": "sleep spindles",
    "sharps": SPIKES,
    "spike": SPIKES,
    "spikes": SPIKES,
    "R spike": SPIKES,
    "O1>O2 spike": SPIKES,
    "EFD": SPIKES,
    "L EFD": SPIKES,
    "L>R EFD": SPIKES,
}
"""Notes of a moment and their pattern. EFD stands for epileptiform discharge (from memory).
Notes of a lone site, a question mark or a letter are not read into anything."""

STRETCHES = (
    ("SZ START", "SZ END", "spike-wave seizure", SEIZURE_LATE_SECONDS),
    ("HV START", "HV END", "hyperventilation slowing", 0.0),
)
"""Notes of a start and an end; the slowing builds up from the start on and was noted once."""


def read(folder: Path) -> list[LabelledRecording]:
    """The one recording.

    Raises
    ------
    LabelsError
        If the notes are missing or malformed.
    """
    path = need_folder(folder, CORPUS) / "notes.tsv"
    return [
        LabelledRecording(
            corpus=CORPUS,
            person="absence",
            name="absence",
            open=partial(open_recording, folder / "absence.edf"),
            labels=labels_of(notes(path)),
            line_frequency=60.0,
        )
    ]


def notes(path: Path) -> list[tuple[float, str]]:
    """Onset in seconds and text of each note, blanks made single.

    Raises
    ------
    LabelsError
        If the file is missing or a row is malformed.
    """
    found = []
    for number, cells in enumerate(
        csv.reader(read_text(path).splitlines(), delimiter="\t"), start=1
    ):
        if number == 1 and cells == ["onset_s", "text"]:
            continue
        where = f"{path.name}, line {number}"
        if number == 1 or len(cells) != 2:
            raise LabelsError(
                f"{where}: a header onset_s, text and two cells a line are needed; given were "
                f"{len(cells)} cells.",
                "Take the file as it comes with the corpus.",
            )
        found.append((seconds_in(cells[0], "onset_s", where), " ".join(cells[1].split())))
    return found


def labels_of(noted: list[tuple[float, str]]) -> tuple[Label, ...]:
    """Patterns of kind "brain" in intervals around their notes; the first minute is unknown.

    Photic stimulation is of state "unknown": it may drive a response, none was noted.

    Raises
    ------
    LabelsError
        If a start has no end.
    """
    found = [
        Label(kind, 0.0, CALIBRATION_SECONDS, (), UNKNOWN, "calibration")
        for kind in (*KIND_NAMES, "brain")
    ]
    noted = [note for note in noted if note[0] >= CALIBRATION_SECONDS]
    for at, text in noted:
        if text in MOMENTS:
            start = max(at - LATE_SECONDS, CALIBRATION_SECONDS)
            found.append(Label("brain", start, at, (), PRESENT, MOMENTS[text]))
        if text.startswith("PHOTO"):
            end = at + PHOTIC_SECONDS
            found.append(Label("brain", at, end, (), UNKNOWN, "photic stimulation"))
    for first, last, pattern, late in STRETCHES:
        starts, ends = (
            [at for at, text in noted if text == word] for word in (first, last)
        )
        if len(starts) != len(ends) or any(
            end < start for start, end in zip(starts, ends, strict=True)
        ):
            raise LabelsError(
                f"Each note {first!r} needs one {last!r} after it; there are {len(starts)} and "
                f"{len(ends)}.",
                "Take the notes as they come with the corpus.",
            )
        found += [
            Label("brain", start - late, end, (), PRESENT, pattern)
            for start, end in zip(starts, ends, strict=True)
        ]
    return tuple(found)
