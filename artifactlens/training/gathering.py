"""What a model is made from: simulated copies of backgrounds, and real labels."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path

import joblib
import numpy as np
from numpy.typing import NDArray

from artifactlens.errors import LabelsError
from artifactlens.kinds import KIND_NAMES
from artifactlens.training.corpora.backgrounds import mental_arithmetic, motor_imagery
from artifactlens.training.corpora.labelled import need_folder
from artifactlens.training.corpora.readers import READERS
from artifactlens.training.corpora.truth import examples_of
from artifactlens.training.examples import Examples, join
from artifactlens.training.simulated import simulate
from artifactlens.training.situation import Background

TRAINING_PEOPLE, RESERVED_PEOPLE = range(30), range(30, 36)
"""Subjects of ``eegmat``. Nothing of the reserved ones goes into a model."""

AT_HAND = ("eegmat", "eegmmidb_s001", "gestures_one_person")
"""Corpora of the shipped model, looked for in one folder unless told otherwise."""

NEVER_LEARNT = ("clinical_absence", "sample_60eeg")
"""Kept for checks on real record."""

FIXED_BY_NOBODY = ("eegmmidb_s001", "gestures_one_person")
"""Their labels are those of a machine or of an instruction: they may teach, but do not set
calibration and operating points."""

COPIES, IMAGERY_COPIES = 8, 2
SEEDS = {"copies": 1_000_000, "imagery": 2_000_000, "reserved": 9_000_000}
"""First seeds: those of two sets never meet."""


@dataclass(frozen=True, slots=True)
class Gathered:
    """Examples and which of their rows may set calibration and operating points."""

    examples: Examples
    setting: NDArray[np.bool_]


def folders(root: Path, given: list[str]) -> dict[str, Path]:
    """Folder of every corpus: those at hand below ``root``, and ``NAME=PATH`` as given.

    Raises
    ------
    LabelsError
        If a name is unknown, kept for checks, or has no path.
    """
    found = {name: root / name for name in AT_HAND}
    for entry in given:
        name, _, path = entry.partition("=")
        if name not in READERS or name in NEVER_LEARNT or not path:
            allowed = ", ".join(name for name in READERS if name not in NEVER_LEARNT)
            raise LabelsError(
                f"--corpus needs NAME=PATH with a name of {allowed}; given was {entry!r}.",
                "See data_cards/ for what each name stands for.",
            )
        found[name] = Path(path)
    return found


def copies(
    backgrounds: list[Background],
    count: int,
    first_seed: int,
    jobs: int,
    kinds: tuple[str, ...] = KIND_NAMES,
) -> Examples:
    """``count`` simulated copies of every background."""
    made = joblib.Parallel(n_jobs=jobs)(
        joblib.delayed(_examples)(background, first_seed + 1000 * copy + number, kinds)
        for number, background in enumerate(backgrounds)
        for copy in range(count)
    )
    return join(made)


def _examples(background: Background, seed: int, kinds: tuple[str, ...]) -> Examples:
    return simulate(background, seed, kinds=kinds).examples


def gather(where: dict[str, Path], jobs: int) -> Gathered:
    """Everything that a model may learn from."""
    eegmat = need_folder(where["eegmat"], "eegmat")
    imagery = need_folder(where["eegmmidb_s001"], "eegmmidb_s001")
    parts = [
        copies(mental_arithmetic(eegmat, TRAINING_PEOPLE), COPIES, SEEDS["copies"], jobs),
        copies(
            motor_imagery(imagery), IMAGERY_COPIES, SEEDS["imagery"], jobs,
            kinds=("pop", "mains"),
        ),
    ]  # fmt: skip
    setting = [np.ones(len(parts[0]), dtype=bool), np.zeros(len(parts[1]), dtype=bool)]
    for name, path in where.items():
        if name == "eegmat":
            continue  # a background: its labels say no more than that it was cleaned
        for one in READERS[name](need_folder(path, name)):
            part = examples_of(one)
            parts.append(part)
            setting.append(np.full(len(part), name not in FIXED_BY_NOBODY))
    return Gathered(join(parts), np.concatenate(setting))
