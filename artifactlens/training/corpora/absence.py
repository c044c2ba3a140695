"""A child with absence epilepsy: cerebral patterns as noted while recording.

Never used for training (data_cards/clinical_absence.md). The technologist typed what was
seen, seconds late and not of everything. A note of a moment therefore says that its pattern
occurred somewhere in the seconds before it, not that it fills them.
"""

from __future__ import annotations

from collections.abc import Sequence
from functools import partial
from pathlib import Path

from artifactlens.kinds import KIND_NAMES
from artifactlens.recording import open_recording
from artifactlens.training.corpora.labelled import (
    PRESENT,
    UNKNOWN,
    Label,
    LabelledRecording,
    need_folder,
    rows_in,
    seconds_in,
)
from artifactlens.training.corpora.spans import Span

CORPUS = "clinical_absence"

Note = tuple[float, str]
"""Seconds from the start, text."""

CALIBRATION_SECONDS = 60.0
"""The start of the recording is calibration and impedance check."""

LATE_SECONDS, AFTER_SECONDS = 10.0, 1.0
"""A note is typed after what it tells of: it stands for the 10 s before it and 1 s more."""

PHOTIC_SECONDS = 10.0
"""From one flash rate to the next in the notes, and so of the last."""

SEIZURES = "spike-wave seizures"
SEIZURE = ("SZ START", "SZ END")
SLOWING = ("HV slowing", "HV END")
NOTED: dict[str, tuple[str, ...]] = {
    "sleep spindles": ("spindles", "sleep spindles"),
    "vertex waves": ("vertex-waves",),
    "spikes": (
        "R spike", "sharps", "spikes", "O1>O2 spike", "spike", "EFD", "L>R EFD", "L EFD",
    ),
}  # fmt: skip
"""Texts of the notes that name a pattern; "EFD" is read as epileptiform discharge (from
memory). Texts that leave open what was meant ("?", "p", "L") stand for nothing."""


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


def notes(path: Path) -> list[Note]:
    """Onset in seconds and text of each note, blanks made single.

    Raises
    ------
    LabelsError
        If the file is missing or a row is malformed.
    """
    return [
        (seconds_in(onset, "onset_s", where), " ".join(text.split()))
        for where, (onset, text) in rows_in(path, ("onset_s", "text"))
    ]


def documented_windows(noted: Sequence[Note]) -> dict[str, list[Span]]:
    """Windows in which the notes document a pattern, in seconds.

    - seizures: from SZ START to the next SZ END, as noted (on the traces the notes stand at
      the discharge itself);
    - spindles, vertex waves, spikes and discharges: 10 s before the note to 1 s after;
    - slowing by hyperventilation: from 10 s before "HV slowing" to the next HV END.

    A second may lie in windows of more than one pattern. Windows begin after the first 60 s,
    which are calibration.
    """
    windows = {
        SEIZURES: _between(noted, *SEIZURE, before=0.0),
        "hyperventilation slowing": _between(noted, *SLOWING, before=LATE_SECONDS),
        **{
            pattern: [
                (onset - LATE_SECONDS, onset + AFTER_SECONDS)
                for onset, text in noted
                if text in texts
            ]
            for pattern, texts in NOTED.items()
        },
    }
    return {
        pattern: [
            (max(begin, CALIBRATION_SECONDS), end)
            for begin, end in found
            if end > CALIBRATION_SECONDS
        ]
        for pattern, found in windows.items()
    }


def _between(
    noted: Sequence[Note], opening: str, closing: str, *, before: float
) -> list[Span]:
    ends = [onset for onset, text in noted if text == closing]
    found = []
    for begin, text in noted:
        later = [end for end in ends if end >= begin]
        if text == opening and later:
            found.append((begin - before, min(later)))
    return found


def labels_of(noted: Sequence[Note]) -> tuple[Label, ...]:
    """Documented patterns of kind "brain"; the first minute is unknown.

    Photic stimulation is of state "unknown": it may drive a response, none was noted.
    """
    return (
        *(
            Label(kind, 0.0, CALIBRATION_SECONDS, (), UNKNOWN, "calibration")
            for kind in (*KIND_NAMES, "brain")
        ),
        *(
            Label("brain", at, at + PHOTIC_SECONDS, (), UNKNOWN, "photic stimulation")
            for at, text in noted
            if text.startswith("PHOTO")
        ),
        # The seizures last: a second of one is named by it, whatever else surrounds it.
        *(
            Label("brain", begin, end, (), PRESENT, pattern)
            for pattern, spans in reversed(documented_windows(noted).items())
            for begin, end in spans
        ),
    )
