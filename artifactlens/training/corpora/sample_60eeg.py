"""A short recording with an eye channel as witness (data_cards/sample_60eeg.md)."""

from __future__ import annotations

from functools import partial
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from artifactlens.errors import LabelsError
from artifactlens.recording import Recording, open_recording
from artifactlens.training.corpora.labelled import (
    PRESENT,
    Label,
    LabelledRecording,
    need_folder,
)
from artifactlens.training.corpora.spans import runs

CORPUS = "sample_60eeg"
FILE = "sample_eeg_raw.fif"

BELOW_HZ = 10.0
BLINK_UV, EDGE_UV = 75.0, 25.0
"""Deflection of the eye channel that makes a blink (the four here reach 140 to 510 microvolt,
everything else stays below 45), and to which its start and end are followed."""


def read(folder: Path) -> list[LabelledRecording]:
    """The one recording; its eye channel is read for the labels.

    The witness tells when, not at which sites: its labels name no channel. Nothing is called
    clean, for one eye channel does not see every gaze.
    """
    path = need_folder(folder, CORPUS) / FILE
    return [
        LabelledRecording(
            corpus=CORPUS,
            person="sample-60eeg",
            name="sample_eeg",
            open=partial(open_recording, path),
            labels=labels_of(open_recording(path)),
            line_frequency=60.0,
        )
    ]


def labels_of(recording: Recording) -> tuple[Label, ...]:
    """Eye movements by the eye channel alone.

    Raises
    ------
    LabelsError
        If the recording has no eye channel.
    """
    if "eog" not in recording.types:
        raise LabelsError(
            f"{recording.name} needs a channel of type EOG as witness; it has none.",
            "Take the file that scripts/fetch_sample.py fetches.",
        )
    row = recording.types.index("eog")
    trace = recording.read(0, recording.n_samples)[row].astype(np.float64)
    return tuple(
        Label("eye", start, end, (), PRESENT, "EOG")
        for start, end in deflections(trace, recording.sampling_rate)
    )


def deflections(trace: NDArray[np.float64], sfreq: float) -> list[tuple[float, float]]:
    """Start and end in seconds of what departs from the usual level of an eye channel.

    Parameters
    ----------
    trace : array, shape (n_samples,), microvolt
    sfreq : float, hertz
    """
    from scipy.signal import butter, sosfiltfilt

    kept = sosfiltfilt(butter(2, BELOW_HZ, "low", fs=sfreq, output="sos"), trace)
    away = np.abs(kept - np.median(kept))
    return [
        (start / sfreq, stop / sfreq)
        for start, stop in runs(away > EDGE_UV)
        if away[start:stop].max() > BLINK_UV
    ]
