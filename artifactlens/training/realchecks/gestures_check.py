"""A model against instructed face gestures of one person (``gestures_one_person``).

The label is the instruction alone: what the person was told to do, not what any feature
shows. So a chunk in which the gesture did not reach the sites counts against the model.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from artifactlens.curves import Model
from artifactlens.flagging import MARKS
from artifactlens.kinds import KIND_NAMES
from artifactlens.pipeline import Measured, measure_recording
from artifactlens.recording import Segment, from_array
from artifactlens.training.realchecks.agreement import (
    NO,
    NOT_CALLED,
    YES,
    Separation,
    separation,
    separation_text,
    share,
)
from artifactlens.training.realchecks.judged import judge_recording

INSTRUCTED: dict[str, tuple[str, ...]] = {
    "eye": ("hardblink", "lookleft", "lookright"),
    "muscle": ("smile", "bitelowerlip", "eyebrows", "scrunch"),
}
REST = "neutral"
NEITHER = "tongue"
REST_COPIES = 5
"""Neutral chunks are laid in so often that a usual second of the recording is one of rest."""

BLOCK = 10
APART_SECONDS = 10.0
"""Chunks lie this far apart, so that none is beside another."""

CAUTION = "One person, one session: nothing is said of people in general."


@dataclass(frozen=True, slots=True)
class Chunks:
    """Chunks of all gestures in one measured recording, one second each.

    ``gesture`` (n,) names the instruction; ``counted`` (n,) is False for repeated copies of
    rest, which only set what is usual; ``block`` (n,) numbers runs of 10 neighbouring chunks
    of a gesture (neighbours overlap in time: folds need to keep a block together).
    """

    measured: Measured
    gesture: NDArray[np.str_]
    counted: NDArray[np.bool_]
    block: NDArray[np.int64]


@dataclass(frozen=True, slots=True)
class GesturesCheck:
    """A model against the instructions.

    ``kinds`` for "eye" and "muscle": gestures that hold the kind (yes) against rest (no),
    all others not called. ``flagged`` is the share of the chunks of every gesture that is
    flagged: gesture, kind, operating point; ``counts`` the chunks of every gesture.
    """

    kinds: dict[str, Separation]
    counts: dict[str, int]
    flagged: dict[str, dict[str, dict[str, float]]]
    caution: str = CAUTION

    def text(self) -> str:
        """The check in plain lines."""
        lines = [self.caution]
        lines += [
            separation_text(f"{kind}, gestures told to do against rest", found)
            for kind, found in self.kinds.items()
        ]
        for gesture, by_kind in self.flagged.items():
            shares = "; ".join(
                f"{kind} " + "/".join(f"{by_mark[mark]:.2f}" for mark in MARKS)
                for kind, by_mark in by_kind.items()
            )
            lines.append(
                f"  {gesture} ({self.counts[gesture]}), flagged {'/'.join(MARKS)}: {shares}"
            )
        return "\n".join(lines)


def instructed_truth(kind: str, gesture: NDArray[np.str_]) -> NDArray[np.int8]:
    """YES for gestures that hold the kind, NO for rest, else NOT_CALLED; shape (n,)."""
    truth = np.full(len(gesture), NOT_CALLED, dtype=np.int8)
    truth[np.isin(gesture, INSTRUCTED[kind])] = YES
    truth[gesture == REST] = NO
    return truth


def block_numbers(gesture: NDArray[np.str_], size: int = BLOCK) -> NDArray[np.int64]:
    """Number runs of ``size`` neighbouring chunks of one gesture, shape (n,).

    Chunks of a gesture stand together and in order; the last block may be shorter.
    """
    starts = np.flatnonzero(np.append(True, gesture[1:] != gesture[:-1]))
    lengths = np.diff(np.append(starts, len(gesture)))
    within = np.arange(len(gesture)) - np.repeat(starts, lengths)
    is_new = within % size == 0
    return np.cumsum(is_new) - 1


def load_chunks(path: Path) -> tuple[dict[str, NDArray[np.float64]], list[str], float]:
    """Chunks of ``session1.npz`` by gesture (n, samples, sites), site names and rate."""
    with np.load(path) as stored:
        names = [str(name) for name in stored["ch_names"]]
        every = (*INSTRUCTED["eye"], *INSTRUCTED["muscle"], REST, NEITHER)
        chunks = {gesture: stored[gesture].astype(np.float64) for gesture in every}
        return chunks, names, float(stored["sfreq"])


def lay_out(
    chunks: Mapping[str, NDArray[np.float64]], names: list[str], rate: float
) -> Chunks:
    """Measure all chunks as stretches of one recording, rest laid in five times.

    Parameters
    ----------
    chunks : mapping to arrays, shape (n, n_samples, n_sites), microvolt
        At least one second long and shorter than two; ``neutral`` among them.
    names : list of str, length n_sites
    rate : float, hertz
    """
    order = [*chunks, *[REST] * (REST_COPIES - 1)]
    sizes = [len(chunks[gesture]) for gesture in order]
    data = np.concatenate([chunks[gesture] for gesture in order])
    data = data - data.mean(axis=1, keepdims=True)
    n_chunks, n_samples, n_sites = data.shape
    recording = from_array(
        data.transpose(2, 0, 1).reshape(n_sites, -1).astype(np.float32),
        rate,
        [f"EEG {name}-REF" for name in names],
        segments=[
            Segment(k * n_samples, n_samples, k * APART_SECONDS) for k in range(n_chunks)
        ],
        name="gestures",
    )
    gesture = np.repeat(np.array(order), sizes)
    n_counted = sum(sizes[: len(chunks)])
    blocks = block_numbers(gesture[:n_counted])
    copies = np.tile(blocks[gesture[:n_counted] == REST], REST_COPIES - 1)
    return Chunks(
        measure_recording(recording),
        gesture,
        np.arange(n_chunks) < n_counted,
        np.concatenate([blocks, copies]),
    )


def gestures_check(model: Model, chunks: Chunks) -> GesturesCheck:
    """Score a model against the instructions; a chunk scores as its highest site."""
    seen = judge_recording(chunks.measured, model)
    kept = chunks.counted
    gesture = chunks.gesture[kept]
    flagged = {
        kind: {mark: seen.flagged(mark, kind)[kept] for mark in MARKS}
        for kind in KIND_NAMES
    }
    return GesturesCheck(
        kinds={
            kind: separation(
                instructed_truth(kind, gesture),
                seen.second_score(kind)[kept],
                flagged[kind],
            )
            for kind in INSTRUCTED
        },
        counts={name: int((gesture == name).sum()) for name in dict.fromkeys(gesture)},
        flagged={
            str(name): {
                kind: {mark: share(hit[gesture == name]) for mark, hit in by_mark.items()}
                for kind, by_mark in flagged.items()
            }
            for name in dict.fromkeys(gesture)
        },
    )
