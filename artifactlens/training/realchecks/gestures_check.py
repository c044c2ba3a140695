"""A model against instructed face gestures of one person (``gestures_one_person``).

The label is the instruction alone: what the person was told to do, not what any feature
shows. So a chunk in which the gesture did not reach the sites counts against the model.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from artifactlens.curves import Model
from artifactlens.flagging import MARKS
from artifactlens.kinds import KIND_NAMES
from artifactlens.pipeline import Measured
from artifactlens.training.corpora.gestures import GESTURES, NEUTRAL, Chunks
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

INSTRUCTED = {
    kind: tuple(name for name, kinds in GESTURES.items() if kind in kinds)
    for kind in ("eye", "muscle")
}

CAUTION = "One person, one session: nothing is said of people in general."


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
    truth[gesture == NEUTRAL] = NO
    return truth


def gestures_check(model: Model, measured: Measured, chunks: Chunks) -> GesturesCheck:
    """Score a model against the instructions; a chunk scores as its highest site.

    Parameters
    ----------
    model : Model
    measured : Measured
        Of the recording of all chunks (``gestures.as_recording``).
    chunks : Chunks
        Of the same session; copies of rest only set what is usual and are not counted.
    """
    return grouped_check(lambda _: model, measured, chunks, folds=1)


def grouped_check(
    model_of: Callable[[int], Model], measured: Measured, chunks: Chunks, folds: int
) -> GesturesCheck:
    """As :func:`gestures_check`, every chunk scored by a model of its own fold.

    ``model_of(fold)`` gives a model that saw no chunk whose block, modulo ``folds``, is the
    fold: neighbouring chunks overlap in time, blocks do not.
    """
    kept = ~chunks.is_copy
    gesture = chunks.name[kept]
    score = {kind: np.full(len(gesture), np.nan) for kind in INSTRUCTED}
    flagged = {
        kind: {mark: np.zeros(len(gesture), dtype=bool) for mark in MARKS}
        for kind in KIND_NAMES
    }
    for fold in range(folds):
        seen = judge_recording(measured, model_of(fold))
        theirs = chunks.block[kept] % folds == fold
        for kind in INSTRUCTED:
            score[kind][theirs] = seen.second_score(kind)[kept][theirs]
        for kind, by_mark in flagged.items():
            for mark, hit in by_mark.items():
                hit[theirs] = seen.flagged(mark, kind)[kept][theirs]
    return GesturesCheck(
        kinds={
            kind: separation(instructed_truth(kind, gesture), score[kind], flagged[kind])
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
