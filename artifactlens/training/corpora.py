"""The recordings at hand, read in place: backgrounds to put artifact into, and real labels."""

from __future__ import annotations

import csv
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from artifactlens.errors import RecordingError
from artifactlens.features import FeatureTable
from artifactlens.kinds import KIND_NAMES
from artifactlens.pipeline import measure_recording
from artifactlens.recording import Segment, from_array, open_recording
from artifactlens.sites import parse_label
from artifactlens.training.examples import CLEAN, PRESENT, UNKNOWN, Examples, from_table
from artifactlens.training.situation import Background

CHUNK_SECONDS = 62
EYE, MUSCLE = KIND_NAMES.index("eye"), KIND_NAMES.index("muscle")

LEAST_PRESENT = {"eye": 30.0, "muscle": -np.inf}
"""Microvolt and decibel; the limit of simulated eye movements holds for real ones too."""

GESTURES: dict[str, tuple[str, ...]] = {
    "hardblink": ("eye",),
    "lookleft": ("eye",),
    "lookright": ("eye",),
    "bitelowerlip": ("muscle",),
    "smile": ("muscle",),
    "eyebrows": ("muscle", "eye?"),
    "scrunch": ("muscle", "eye?"),
    "neutral": (),
}
"""Instructed gestures and the kinds they hold; "?" where it is mixed and not called."""


def need_folder(path: Path, corpus: str) -> Path:
    """The folder of a corpus.

    Raises
    ------
    RecordingError
        If it is not there.
    """
    if not path.is_dir():
        raise RecordingError(
            f"The corpus {corpus} is needed as a folder; {path} is none.",
            "Give --corpus NAME=PATH; data_cards/ tells how to get each corpus.",
        )
    return path


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


FRONTAL = frozenset({"Fp1", "Fp2", "Fpz", "AF7", "AF8", "AF3", "AF4", "AFz"})


def motor_imagery_readings(folder: Path) -> list[Examples]:
    """Eye and muscle as two readings of the same pages agree, second by second.

    The readings are those of a general vision model, not of people. A second is called
    only where both read its page and neither is in doubt. Eye is then taken as present at
    the frontal poles, muscle at the sites both name; a second called clean is clean at every
    site; all other cells are unknown.
    """
    with (folder / "readings.tsv").open(encoding="utf-8", newline="") as file:
        rows = list(csv.DictReader(file, delimiter="\t"))
    found = []
    for path in sorted(folder.glob("S001R*.edf")):
        own = [row for row in rows if row["recording"] == path.name]
        if not own:
            continue
        measured = measure_recording(open_recording(path))
        n_epochs, n_sites = measured.table.values.shape[1:]
        truth = np.full((len(KIND_NAMES), n_epochs, n_sites), UNKNOWN, dtype=np.int8)
        names = list(measured.frame.canonical)
        page = _marked(own, n_epochs, "page", None, None).all(axis=0)
        scalp = np.array([role == "site" for role in measured.frame.roles])
        for kind, number in (("eye", EYE), ("muscle", MUSCLE)):
            any_mark = _marked(own, n_epochs, kind, None, None)
            plain = _marked(own, n_epochs, kind, ("sure", "probable"), None)
            clean = page & ~any_mark.any(axis=0)
            truth[number][np.ix_(clean, scalp)] = CLEAN
            for site, name in enumerate(names):
                if name is None:
                    continue
                if kind == "eye":
                    present = (
                        plain.all(axis=0) if name in FRONTAL else np.zeros(n_epochs, bool)
                    )
                else:
                    present = _marked(own, n_epochs, kind, ("sure", "probable"), name).all(
                        axis=0
                    )
                truth[number][page & present, site] = PRESENT
        strength = np.full(truth.shape, np.nan, dtype=np.float32)
        found.append(
            from_table(
                measured.table, truth, strength, person="eegmmidb-001",
                origin="real: eegmmidb_s001 readings",
            )
        )  # fmt: skip
    return found


def _marked(
    rows: list[dict[str, str]],
    n_epochs: int,
    kind: str,
    confidence: tuple[str, ...] | None,
    site: str | None,
) -> NDArray[np.bool_]:
    """Seconds marked by the first and the second reader, shape (2, n_epochs)."""
    from artifactlens.sites import canonical_site

    marked = np.zeros((2, n_epochs), dtype=bool)
    for row in rows:
        if row["kind"] != kind or (confidence and row["confidence"] not in confidence):
            continue
        if site is not None and site not in {
            canonical_site(s) for s in row["sites"].split("|")
        }:
            continue
        first, last = int(float(row["onset"])), int(np.ceil(float(row["end"])))
        marked[0 if row["reader"] == "first" else 1, first:last] = True
    return marked


def gestures(folder: Path) -> list[Examples]:
    """Instructed face gestures of one person (``gestures_one_person``), labelled per site.

    Every chunk of 1.5 s is a stretch of its own with one epoch. The instruction tells what
    was done, not which sites show it: a site is called present where its deflection (eye)
    or its power at 30-45 Hz (muscle) exceeds the 90th percentile of the same site in the
    neutral chunks, clean where it stays below the median, unknown in between. Neutral
    chunks are clean everywhere. Blocks of neighbouring chunks (which overlap in time) make
    one "person" for grouped folds.
    """
    with np.load(folder / "session1.npz") as stored:
        names = [str(name) for name in stored["ch_names"]]
        rate = float(stored["sfreq"])
        chunks = {key: stored[key].astype(np.float64) for key in GESTURES}
    labels = np.concatenate([np.full(len(chunks[key]), key) for key in GESTURES])
    data = np.concatenate([chunks[key] for key in GESTURES])
    data = data - data.mean(axis=1, keepdims=True)
    n_chunks, n_samples, n_sites = data.shape
    recording = from_array(
        data.transpose(2, 0, 1).reshape(n_sites, -1).astype(np.float32),
        rate,
        [f"EEG {name}-REF" for name in names],
        segments=[Segment(k * n_samples, n_samples, k * 10.0) for k in range(n_chunks)],
    )
    measured = measure_recording(recording, line_frequency=60.0)
    table: FeatureTable = measured.table
    truth = np.full(
        (len(KIND_NAMES), n_chunks, table.values.shape[2]), UNKNOWN, dtype=np.int8
    )
    neutral = labels == "neutral"
    truth[EYE, neutral] = truth[MUSCLE, neutral] = CLEAN
    for number, kind, feature in (
        (EYE, "eye", "eye_reach"),
        (MUSCLE, "muscle", "fast_power"),
    ):
        column = table.column(feature)
        high = np.fmax(np.nanpercentile(column[neutral], 90, axis=0), LEAST_PRESENT[kind])
        middle = np.nanpercentile(column[neutral], 50, axis=0)
        for gesture, kinds in GESTURES.items():
            chosen = labels == gesture
            if kind in kinds:
                truth[number, chosen] = np.where(
                    column[chosen] > high,
                    PRESENT,
                    np.where(column[chosen] < middle, CLEAN, UNKNOWN),
                )
            elif kinds and f"{kind}?" not in kinds and kind == "muscle":
                truth[number, chosen] = np.where(column[chosen] < middle, CLEAN, UNKNOWN)
    reference = [role == "reference" for role in measured.frame.roles]
    truth[:, :, reference] = UNKNOWN
    strength = np.full(truth.shape, np.nan, dtype=np.float32)
    examples = from_table(
        table, truth, strength, person="gestures", origin="real: gestures_one_person"
    )
    return [examples]
