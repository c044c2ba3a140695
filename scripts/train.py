"""Train the shipped model: simulated artifact over real background, and real labels.

    python scripts/train.py --corpora ../shared/corpora --out models/scalp-1.json
    python scripts/train.py --corpus bids=my-recordings --out models/house.json

Prints how people score whose group was left out of the fit (simulated and real apart), and
refuses to save a model whose curves do not reproduce the forest. Same inputs, same bytes.
"""

from __future__ import annotations

import argparse
import json
import os
import sys
from pathlib import Path

import numpy as np
import sklearn

from artifactlens import __version__
from artifactlens.curves import logistic
from artifactlens.errors import ArtifactlensError
from artifactlens.export.atomic import write_atomically
from artifactlens.kinds import KIND_NAMES
from artifactlens.training import gathering
from artifactlens.training.evaluation.intervals import evaluate_kind
from artifactlens.training.evaluation.tables import main_table
from artifactlens.training.fit import (
    FOLDS,
    FittedHead,
    fit_folds,
    fit_head,
    model_body,
)

RESAMPLES = 100


def fit_all(gathered: gathering.Gathered) -> tuple[list[FittedHead], list[np.ndarray]]:
    """The four heads, and the held-out probability of every row for each."""
    heads, probabilities = [], []
    for kind in KIND_NAMES:
        decision = fit_folds(kind, gathered.examples).decision(
            gathered.examples.features, gathered.examples.person
        )
        head = fit_head(
            kind, gathered.examples, np.where(gathered.setting, decision, np.nan)
        )
        heads.append(head)
        probabilities.append(logistic(head.offset + head.slope * decision))
        print(f"fitted {kind}", file=sys.stderr)
    return heads, probabilities


def main() -> int:
    """Train, print, save."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    default = os.environ.get("ARTIFACTLENS_CORPORA", "../shared/corpora")
    parser.add_argument("--corpora", type=Path, default=Path(default), help="their folder")
    parser.add_argument(
        "--corpus", action="append", default=[], metavar="NAME=PATH",
        help="another labelled corpus, or another place of one; may be repeated",
    )  # fmt: skip
    parser.add_argument("--out", type=Path, default=Path("models/scalp-1.json"))
    parser.add_argument("--jobs", type=int, default=2, help="worker processes")
    arguments = parser.parse_args()
    try:
        where = gathering.folders(arguments.corpora, arguments.corpus)
        gathered = gathering.gather(where, arguments.jobs)
        heads, held_out = fit_all(gathered)
    except ArtifactlensError as error:
        print(error, file=sys.stderr)
        return 1
    examples = gathered.examples
    for title, rows in (
        (
            "Held-out groups of people; calibration and operating points were set on them",
            np.char.startswith(examples.origin, "simulated: eegmat"),
        ),
        (
            "Held-out people with real labels",
            np.char.startswith(examples.origin, "real"),
        ),
    ):
        chosen = examples.subset(rows)
        rated = [
            evaluate_kind(
                chosen,
                head.kind,
                score[rows],
                head.sure,
                head.doubtful,
                resamples=RESAMPLES,
            )
            for head, score in zip(heads, held_out, strict=True)
        ]
        print(main_table(chosen, rated, title), end="\n\n")
    facts = {
        "tool_version": __version__,
        "simulated": "eegmat 00-29 (all kinds), eegmmidb_s001 (pop and mains)",
        "labelled": sorted(set(where) - {"eegmat"}),
        "held_out_groups": FOLDS,
        "seeds": gathering.SEEDS,
        "copies": [gathering.COPIES, gathering.IMAGERY_COPIES],
        "cells": len(examples),
        "versions": {"numpy": np.__version__, "scikit-learn": sklearn.__version__},
    }
    body = model_body(heads, arguments.out.stem, facts)
    text = json.dumps(body, indent=1, allow_nan=False) + "\n"
    write_atomically(arguments.out, text)
    print(f"saved {arguments.out}")
    return 0


if __name__ == "__main__":
    sys.exit(main())
