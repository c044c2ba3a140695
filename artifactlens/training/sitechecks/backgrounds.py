"""Real recordings to put electrode faults into, split into those to look at and the others."""

from __future__ import annotations

import itertools
from dataclasses import dataclass
from pathlib import Path
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from artifactlens.errors import OptionError
from artifactlens.recording import Recording, from_array, open_recording
from artifactlens.sites import SiteLabel, parse_label
from artifactlens.training.corpora.labelled import need_folder
from artifactlens.training.situation import CHAINS, Background

MONTAGES = ("referential", "double banana")
LINE_HZ = 50.0
"""Mains that is put in. ``eegmmidb_s001`` holds 60 Hz by nature, which is left as it is."""

_OWN_LINE_HZ = {"eegmat": 50.0, "eegmmidb_s001": 60.0}


class Split(NamedTuple):
    """Which people of ``eegmat`` and which runs of ``eegmmidb_s001`` belong together."""

    people: range
    runs: range


SPLITS = {
    "development": Split(range(12, 24), range(1, 15, 2)),
    "check": Split(range(24, 30), range(2, 15, 2)),
}

UNTOUCHED_PEOPLE = {"development": range(24), "check": range(24, 30)}
"""People of ``eegmat`` whose recordings are taken as distributed, rest recordings too."""


class Bed(NamedTuple):
    """A background and how its file spells the sites."""

    name: str
    background: Background
    spelt: tuple[str, ...]


@dataclass(frozen=True, slots=True)
class Source:
    """A background that is read when it is needed."""

    path: Path
    corpus: str

    def bed(self) -> Bed:
        """Read all of it."""
        recording = open_recording(self.path)
        rows, labels = _sites_of(recording)
        own = self.corpus == "eegmmidb_s001"
        background = Background(
            person="eegmmidb-001" if own else f"eegmat-{self.path.name[7:9]}",
            sites=tuple(str(label.canonical) for label in labels),
            potentials=recording.read(0, recording.n_samples)[rows].astype(np.float64),
            sfreq=recording.sampling_rate,
            reference_sites=("A1", "A2"),
            kept_to_hz=None if own else 45.0,
            notch_hz=None if own else 50.0,
            origin=self.corpus,
            line_hz=60.0 if own else None,
        )
        return Bed(self.path.stem, background, tuple(str(label.plus) for label in labels))


@dataclass(frozen=True, slots=True)
class Untouched:
    """A recording as distributed, or its digital re-montage; nothing is put in.

    ``seen`` says whether it was looked at while the advice was developed.
    """

    path: Path
    corpus: str
    montage: str
    seen: bool

    @property
    def line_frequency(self) -> float:
        """Mains where it was recorded, hertz."""
        return _OWN_LINE_HZ[self.corpus]

    def recording(self) -> Recording:
        """Opened; the double banana without any filters stated."""
        recording = open_recording(self.path)
        if self.montage == "referential":
            return recording
        rows, labels = _sites_of(recording)
        data = recording.read(0, recording.n_samples)[rows]
        derivations, names = double_banana(
            data,
            tuple(str(label.canonical) for label in labels),
            tuple(str(label.plus) for label in labels),
        )
        return from_array(derivations, recording.sampling_rate, names, name=recording.name)


def sources(root: Path, split: str) -> list[Source]:
    """Backgrounds of one split, below the folder of all corpora.

    Raises
    ------
    OptionError
        If there is no such split.
    LabelsError
        If a corpus is missing.
    """
    chosen = _split(split)
    return [
        *(Source(path, "eegmat") for path in _mental_arithmetic(root, chosen.people, "2")),
        *(Source(path, "eegmmidb_s001") for path in _imagery(root, chosen.runs)),
    ]


def untouched(root: Path, split: str) -> list[Untouched]:
    """Recordings as distributed, each in both montages.

    ``development`` gives those that may be looked at; ``check`` all of them, each of which
    says by ``seen`` to which it belongs.

    Raises
    ------
    OptionError, LabelsError
        As for :func:`sources`.
    """
    _split(split)
    names = ("development",) if split == "development" else ("development", "check")
    return [
        Untouched(path, corpus, montage, name == "development")
        for name in names
        for corpus, paths in (
            ("eegmat", _mental_arithmetic(root, UNTOUCHED_PEOPLE[name], "[12]")),
            ("eegmmidb_s001", _imagery(root, SPLITS[name].runs)),
        )
        for path in paths
        for montage in MONTAGES
    ]


def double_banana(
    potentials: NDArray[np.floating], canonical: tuple[str, ...], spelt: tuple[str, ...]
) -> tuple[NDArray[np.floating], list[str]]:
    """Derivations along the chains and their labels, from potentials (n_sites, n_samples)."""
    row = {name: number for number, name in enumerate(canonical)}
    pairs = [
        (row[a], row[b])
        for chain in CHAINS
        for a, b in itertools.pairwise(chain)
        if a in row and b in row
    ]
    data = np.stack([potentials[a] - potentials[b] for a, b in pairs])
    return data, [f"{spelt[a]}-{spelt[b]}" for a, b in pairs]


def _split(name: str) -> Split:
    if name not in SPLITS:
        raise OptionError(
            f"A split needs to be {' or '.join(SPLITS)}; given was {name!r}.",
            "Look at cases of development; keep check for the final table.",
        )
    return SPLITS[name]


def _mental_arithmetic(root: Path, people: range, part: str) -> list[Path]:
    folder = need_folder(root / "eegmat", "eegmat")
    return [
        path
        for person in people
        for path in sorted(folder.glob(f"Subject{person:02d}_{part}.edf"))
    ]


def _imagery(root: Path, runs: range) -> list[Path]:
    folder = need_folder(root / "eegmmidb_s001", "eegmmidb_s001")
    paths = [folder / f"S001R{run:02d}.edf" for run in runs]
    return [path for path in paths if path.exists()]


def _sites_of(recording: Recording) -> tuple[list[int], list[SiteLabel]]:
    """Rows of the scalp sites and their labels read."""
    labels = [parse_label(label) for label in recording.labels]
    rows = [row for row, label in enumerate(labels) if label.role == "site"]
    return rows, [labels[row] for row in rows]
