"""Mental arithmetic of 36 adults, distributed free of artifact (data_cards/eegmat.md)."""

from __future__ import annotations

import math
from functools import partial
from pathlib import Path

from artifactlens.kinds import KIND_NAMES
from artifactlens.recording import open_recording
from artifactlens.training.corpora.labelled import (
    CLEAN,
    Label,
    LabelledRecording,
    need_folder,
)

CORPUS = "eegmat"


def read(folder: Path) -> list[LabelledRecording]:
    """All recordings, clean of every kind throughout; no file is opened.

    Clean is what the authors of the corpus made of it by independent component analysis;
    what they missed counts as clean too.
    """
    labels = tuple(
        Label(kind, 0.0, math.inf, (), CLEAN, "free of artifact") for kind in KIND_NAMES
    )
    return [
        LabelledRecording(
            corpus=CORPUS,
            person=f"eegmat-{path.name[len('Subject') :][:2]}",
            name=path.stem,
            open=partial(open_recording, path),
            labels=labels,
            line_frequency=50.0,
        )
        for path in sorted(need_folder(folder, CORPUS).glob("Subject[0-9][0-9]_[12].edf"))
    ]
