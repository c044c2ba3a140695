"""Train the shipped model: simulated artifact over real background, and real labels.

    python scripts/train.py --corpora ../shared/corpora --out models/scalp-1.json

Prints the check on the validation people (simulated and real apart) and refuses to save a
model whose curves do not reproduce the forest. Same inputs, same bytes.
"""

from __future__ import annotations

import argparse
import json
import os
import sys
from pathlib import Path

import joblib
import numpy as np
import sklearn
from sklearn.metrics import roc_auc_score

from artifactlens import __version__
from artifactlens.errors import ArtifactlensError
from artifactlens.export.atomic import write_atomically
from artifactlens.kinds import KIND_NAMES
from artifactlens.training.corpora.backgrounds import mental_arithmetic, motor_imagery
from artifactlens.training.corpora.labelled import need_folder
from artifactlens.training.corpora.readers import READERS
from artifactlens.training.corpora.truth import examples_of
from artifactlens.training.examples import CLEAN, PRESENT, Examples, join
from artifactlens.training.fit import fit_forest, fit_head, model_body
from artifactlens.training.report import check_table
from artifactlens.training.simulated import simulate
from artifactlens.training.situation import Background

TRAINING_PEOPLE, VALIDATION_PEOPLE = range(24), range(24, 30)
"""Subjects 30-35 are the reserved final check: nothing here reads them."""

TRAINING_COPIES, VALIDATION_COPIES, IMAGERY_COPIES = 8, 14, 2


def copies(
    backgrounds: list[Background], count: int, first_seed: int, jobs: int, **options: object
) -> Examples:
    """``count`` simulated copies of every background."""
    made = joblib.Parallel(n_jobs=jobs)(
        joblib.delayed(simulate)(background, first_seed + 1000 * copy + number, **options)
        for number, background in enumerate(backgrounds)
        for copy in range(count)
    )
    return join(made)


def gather(root: Path, jobs: int) -> tuple[Examples, Examples]:
    """Training and validation examples."""
    eegmat = need_folder(root / "eegmat", "eegmat")
    imagery = need_folder(root / "eegmmidb_s001", "eegmmidb_s001")
    training = [
        copies(
            mental_arithmetic(eegmat, TRAINING_PEOPLE), TRAINING_COPIES, 1_000_000, jobs
        ),
        copies(
            motor_imagery(imagery), IMAGERY_COPIES, 2_000_000, jobs,
            kinds=("pop", "mains"),
        ),
        *(
            examples_of(one)
            for name in ("eegmmidb_s001", "gestures_one_person")
            for one in READERS[name](root / name)
        ),
    ]  # fmt: skip
    validation = copies(
        mental_arithmetic(eegmat, VALIDATION_PEOPLE),
        VALIDATION_COPIES,
        3_000_000,
        jobs,
    )
    return join(training), validation


def real_check(person: str, training: Examples, validation: Examples) -> str:
    """Eye and muscle of one person with real labels, by heads that saw none of that person."""
    real = np.char.startswith(training.origin, "real")
    theirs = training.subset(real & (training.person == person))
    others = training.subset(training.person != person)
    lines = [f"{person}:"]
    for number, kind in enumerate(("eye", "muscle")):
        truth = theirs.truth[:, number]
        if (truth == PRESENT).any() and (truth == CLEAN).any():
            head = fit_head(kind, others, validation)
            score = head.probability(theirs.features)
            auc = roc_auc_score(truth[truth >= 0], score[truth >= 0])
            found = (score[truth == PRESENT] >= head.sure).mean()
            false = (score[truth == CLEAN] >= head.sure).mean()
            lines.append(
                f"  {kind:7s}{(truth == PRESENT).sum():7d} present{(truth == CLEAN).sum():7d} "
                f"clean  AUC {auc:.3f}  at sure: found {found:.3f}, clean marked {false:.4f}"
            )
    return "\n".join(lines)


def main() -> int:
    """Train, print, save."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    default = os.environ.get("ARTIFACTLENS_CORPORA", "../shared/corpora")
    parser.add_argument(
        "--corpora", type=Path, default=Path(default), help="folder of corpora"
    )
    parser.add_argument("--out", type=Path, default=Path("models/scalp-1.json"))
    parser.add_argument("--jobs", type=int, default=2, help="worker processes")
    parser.add_argument(
        "--full-forest", action="store_true", help="also train the comparison"
    )
    arguments = parser.parse_args()
    try:
        training, validation = gather(arguments.corpora, arguments.jobs)
    except ArtifactlensError as error:
        print(error, file=sys.stderr)
        return 1
    print(f"{len(training)} training cells, {len(validation)} validation cells")
    heads = [fit_head(kind, training, validation) for kind in KIND_NAMES]
    scores = {head.kind: head.probability(validation.features) for head in heads}
    full = {}
    if arguments.full_forest:
        for kind in KIND_NAMES:
            forest, columns = fit_forest(kind, training, interactions=True)
            rows = validation.features[:, columns].astype(np.float64)
            full[kind] = forest.decision_function(rows)
    print(
        "SIMULATED artifact over eegmat 24-29 (validation: calibration and operating points"
    )
    print("were set on these people)")
    print(
        check_table(validation, scores, {h.kind: (h.sure, h.doubtful) for h in heads}, full)
    )
    print(
        "REAL labels, each person left out of the fit (cells; one person each, so nothing is"
    )
    print("said of people in general; readings by a machine, gestures instructed)")
    for person in ("eegmmidb-001", "gestures"):
        print(real_check(person, training, validation))
    facts = {
        "tool_version": __version__,
        "training": "eegmat 00-23 and eegmmidb_s001 with simulated artifact; "
        "gestures_one_person and eegmmidb_s001 readings with real labels",
        "validation": "eegmat 24-29 with simulated artifact",
        "seeds": {"training": 1_000_000, "imagery": 2_000_000, "validation": 3_000_000},
        "copies": [TRAINING_COPIES, IMAGERY_COPIES, VALIDATION_COPIES],
        "cells": [len(training), len(validation)],
        "versions": {"numpy": np.__version__, "scikit-learn": sklearn.__version__},
    }
    body = model_body(heads, arguments.out.stem, facts)
    text = json.dumps(body, indent=1, allow_nan=False) + "\n"
    write_atomically(arguments.out, text)
    print(f"saved {arguments.out}")
    return 0


if __name__ == "__main__":
    sys.exit(main())
