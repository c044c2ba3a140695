"""The final check: simulated artifact over people of whom no model saw anything."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path

import joblib
import numpy as np
from numpy.typing import NDArray

from artifactlens.kinds import KIND_NAMES
from artifactlens.pipeline import measure_recording
from artifactlens.recording import open_recording
from artifactlens.training.corpora.backgrounds import mental_arithmetic
from artifactlens.training.corpora.truth import judged_kinds
from artifactlens.training.evaluation.baselines import (
    blink_peak_seconds,
    muscle_zscore_seconds,
)
from artifactlens.training.examples import CLEAN, UNKNOWN, Examples, from_table, join
from artifactlens.training.gathering import RESERVED_PEOPLE, SEEDS
from artifactlens.training.simulated import simulate
from artifactlens.training.situation import Background

COPIES = 16


@dataclass(frozen=True, slots=True)
class Reserved:
    """Examples with what methods that read the signal say of each row's second.

    ``muscle_z``, ``blink_uv`` (n_rows,) float and ``blink_found`` (n_rows,) bool; NaN where
    a method cannot be applied.
    """

    examples: Examples
    muscle_z: NDArray[np.float64]
    blink_uv: NDArray[np.float64]
    blink_found: NDArray[np.bool_]


def reserved_copies(folder: Path, jobs: int) -> Reserved:
    """Simulated copies of the reserved people of ``eegmat``, drawn as those of training."""
    backgrounds = mental_arithmetic(folder, RESERVED_PEOPLE)
    made = joblib.Parallel(n_jobs=jobs)(
        joblib.delayed(_copy)(background, SEEDS["reserved"] + 1000 * copy + number)
        for number, background in enumerate(backgrounds)
        for copy in range(COPIES)
    )
    return Reserved(
        join([one.examples for one in made]),
        *(
            np.concatenate([getattr(one, name) for one in made])
            for name in ("muscle_z", "blink_uv", "blink_found")
        ),
    )


def _copy(background: Background, seed: int) -> Reserved:
    made = simulate(background, seed)
    conditions, second = made.measured.conditions, made.examples.second
    z = muscle_zscore_seconds(
        made.recording,
        low_pass=conditions.low_pass,
        line_frequency=conditions.line_frequency,
    )
    blinks = blink_peak_seconds(made.recording)
    return Reserved(made.examples, z[second], blinks.peak_uv[second], blinks.found[second])


def as_distributed(folder: Path, people: range) -> Examples:
    """Recordings of ``eegmat`` as they are: every cell is called clean of every kind.

    They were distributed as free of artifact; what their authors missed counts as clean.
    Kinds that the recordings do not let one judge (mains, after their notch) are unknown.
    """
    parts = []
    for person in people:
        for path in sorted(folder.glob(f"Subject{person:02d}_*.edf")):
            measured = measure_recording(open_recording(path), line_frequency=50.0)
            shape = (len(KIND_NAMES), *measured.table.values.shape[1:])
            truth = np.full(shape, CLEAN, dtype=np.int8)
            truth[~judged_kinds(measured)] = UNKNOWN
            parts.append(
                from_table(
                    measured.table,
                    truth,
                    np.zeros(shape, dtype=np.float32),
                    person=f"eegmat-{person:02d}",
                    origin="real: eegmat as distributed",
                    condition=path.stem,
                )
            )
    return join(parts)
