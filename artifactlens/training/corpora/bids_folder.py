"""A user's own labelled recordings in a BIDS folder (data_cards/own_recordings.md)."""

from __future__ import annotations

from collections import Counter
from functools import partial
from pathlib import Path

from artifactlens.errors import LabelsError
from artifactlens.kinds import KIND_NAMES
from artifactlens.recording import READABLE_SUFFIXES, open_recording
from artifactlens.sites import parse_label
from artifactlens.training.corpora.labelled import (
    CLEAN,
    PRESENT,
    Label,
    LabelledRecording,
    need_folder,
    need_labelled,
    read_text,
    seconds_in,
    split,
)

CORPUS = "bids"

SUFFIXES = frozenset({".edf", ".bdf", ".vhdr", ".set"}) & READABLE_SUFFIXES
"""Formats that BIDS allows for EEG and that can be opened."""

COLUMNS = ("onset", "duration", "trial_type")
CHANNEL = "channel"
DELIMITER = "|"
NOT_GIVEN = ("n/a", "")

MEANING: dict[str, tuple[tuple[str, ...], str]] = {
    **{kind: ((kind,), PRESENT) for kind in KIND_NAMES},
    **{f"clean_{kind}": ((kind,), CLEAN) for kind in KIND_NAMES},
    "clean": (KIND_NAMES, CLEAN),
}
"""``trial_type`` to kinds and state."""


def parse(text: str, name: str) -> tuple[tuple[Label, ...], Counter[str]]:
    """Labels of an ``events.tsv``, and how often which other ``trial_type`` occurs.

    Parameters
    ----------
    text : str
    name : str
        Of the file, for messages.

    Raises
    ------
    LabelsError
        With the line that is malformed. Lines of another ``trial_type`` are not looked at.
    """
    lines = text.split("\n")  # cells may hold what str.splitlines() takes for line ends
    header = lines[0].split("\t")
    missing = [column for column in COLUMNS if column not in header]
    if missing:
        raise LabelsError(
            f"{name} needs the columns {', '.join(COLUMNS)}, separated by tabs; missing are "
            f"{', '.join(missing)}.",
            "Add them; data_cards/own_recordings.md shows an example.",
        )
    labels: list[Label] = []
    ignored: Counter[str] = Counter()
    for number, line in enumerate(lines[1:], start=2):
        if not line.strip():
            continue
        where = f"{name}, line {number}"
        cells = line.split("\t")
        if len(cells) != len(header):
            raise LabelsError(
                f"{where}: {len(header)} cells are needed; given were {len(cells)}.",
                "Separate cells by one tab and write n/a where there is nothing to say.",
            )
        row = dict(zip(header, (cell.strip() for cell in cells), strict=True))
        if row["trial_type"] not in MEANING:
            ignored[row["trial_type"]] += 1
            continue
        kinds, state = MEANING[row["trial_type"]]
        onset = seconds_in(row["onset"], "onset", where)
        duration = seconds_in(row["duration"], "duration", where)
        if duration == 0:
            raise LabelsError(
                f"{where}: a label needs a duration above 0 s; given was 0.",
                "Give how long it lasts, in seconds.",
            )
        channels = _channels(row.get(CHANNEL, ""), where)
        labels += [
            Label(kind, onset, onset + duration, channels, state, row["trial_type"])
            for kind in kinds
        ]
    return tuple(labels), ignored


def _channels(cell: str, where: str) -> tuple[str, ...]:
    if cell in NOT_GIVEN:
        return ()
    names = tuple(name.strip() for name in cell.split(DELIMITER))
    if not all(names):
        raise LabelsError(
            f"{where}: channel names a channel of no letters.",
            f"Separate sites or derivations by {DELIMITER!r}; write n/a for all of them.",
        )
    read = {name: parse_label(name) for name in names}
    wrong = [name for name, label in read.items() if label.role == "other" and label.minus]
    if wrong:
        raise LabelsError(
            f"{where}: channel needs sites or derivations of the 10-20 system; given was "
            f"{wrong[0][:20]!r}.",
            "Spell it like F7 or F7-T7.",
        )
    return names


def read(folder: Path) -> list[LabelledRecording]:
    """Every recording with its events beside it.

    Raises
    ------
    LabelsError
        If a line is malformed, or there is nothing to read.
    """
    root = need_folder(folder, CORPUS).resolve()
    labelled, bare = split(_recordings(root), _events)
    needed = "recordings sub-*/[ses-*/]eeg/*_eeg.* with an *_events.tsv beside each"
    found = [_read_one(path, root.name) for path in labelled]
    return need_labelled(found, CORPUS, needed, bare)


def unlabelled(folder: Path) -> list[str]:
    """Names of the recordings that are skipped because no events lie beside them."""
    return split(_recordings(folder), _events)[1]


def _recordings(folder: Path) -> list[Path]:
    paths = [
        *folder.glob("sub-*/eeg/sub-*_eeg.*"),
        *folder.glob("sub-*/ses-*/eeg/sub-*_eeg.*"),
    ]
    return sorted(path for path in paths if path.suffix.lower() in SUFFIXES)


def _events(path: Path) -> Path:
    return path.with_name(f"{path.stem.removesuffix('_eeg')}_events.tsv")


def _read_one(path: Path, data_set: str) -> LabelledRecording:
    table = _events(path)
    labels, ignored = parse(read_text(table), table.name)
    return LabelledRecording(
        corpus=CORPUS,
        person=f"{data_set}-{path.name.split('_')[0]}",
        name=path.stem,
        open=partial(open_recording, path),
        labels=labels,
        notes=tuple(
            f"{count} rows of trial_type {word!r} in {table.name} are no labels and were left "
            "out."
            for word, count in sorted(ignored.items())
        ),
    )
