"""Recordings to put artifact into: the potentials of people, chunk by chunk."""

from __future__ import annotations

from pathlib import Path

import numpy as np

from artifactlens.recording import open_recording
from artifactlens.sites import parse_label
from artifactlens.training.situation import Background

CHUNK_SECONDS = 62


def mental_arithmetic(folder: Path, people: range) -> list[Background]:
    """Artifact-free backgrounds of the mental arithmetic corpus (``eegmat``)."""
    found = []
    for person in people:
        for path in sorted(folder.glob(f"Subject{person:02d}_*.edf")):
            recording = open_recording(path)
            rate = recording.sampling_rate
            labels = [parse_label(label) for label in recording.labels]
            rows = [k for k, label in enumerate(labels) if label.role == "site"]
            names = tuple(str(labels[k].canonical) for k in rows)
            step = int(CHUNK_SECONDS * rate)
            for start in range(0, recording.n_samples - int(40 * rate), step):
                stop = min(start + step, recording.n_samples)
                data = recording.read(start, stop)[rows].astype(np.float64)
                found.append(
                    Background(
                        person=f"eegmat-{person:02d}", sites=names, potentials=data,
                        sfreq=rate, reference_sites=("A1", "A2"), kept_to_hz=45.0,
                        notch_hz=50.0, origin="eegmat",
                    )
                )  # fmt: skip
    return found


def motor_imagery(folder: Path, *, every: int = 1) -> list[Background]:
    """One adult at full bandwidth with 64 sites (``eegmmidb_s001``), natural artifact in it.

    Only kinds that the reader does not find in it by nature (pop, mains) may be put in.
    """
    found = []
    for path in sorted(folder.glob("S001R*.edf"))[::every]:
        recording = open_recording(path)
        rate = recording.sampling_rate
        labels = [parse_label(label) for label in recording.labels]
        rows = [k for k, label in enumerate(labels) if label.role == "site"]
        step = int(CHUNK_SECONDS * rate)
        for start in range(0, recording.n_samples - int(40 * rate), step):
            stop = min(start + step, recording.n_samples)
            found.append(
                Background(
                    person="eegmmidb-001",
                    sites=tuple(str(labels[k].canonical) for k in rows),
                    potentials=recording.read(start, stop)[rows].astype(np.float64),
                    sfreq=rate, reference_sites=("A1", "A2"), kept_to_hz=None,
                    notch_hz=None, origin="eegmmidb_s001", line_hz=60.0,
                )
            )  # fmt: skip
    return found
