"""The table of all readers of labelled corpora."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

from artifactlens.training.corpora import (
    absence,
    bids_folder,
    eegmat,
    eegmmidb,
    gestures,
    sample_60eeg,
    tuh_artifacts,
    tuh_events,
)
from artifactlens.training.corpora.labelled import LabelledRecording

READERS: dict[str, Callable[[Path], list[LabelledRecording]]] = {
    "eegmat": eegmat.read,
    "eegmmidb_s001": eegmmidb.read,
    "gestures_one_person": gestures.read,
    "clinical_absence": absence.read,
    "sample_60eeg": sample_60eeg.read,
    "tuh_artifacts": tuh_artifacts.read,
    "tuh_events": tuh_events.read,
    "bids": bids_folder.read,
}
"""Corpus to its reader, which takes the folder. People are chosen by ``person`` of what it
gives; only ``open`` reads a signal (``gestures`` and ``sample_60eeg`` read it for labels)."""
