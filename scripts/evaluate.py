"""Regenerate every result of the model card and of the README, and the card's figures.

    python scripts/evaluate.py --corpora ../shared/corpora

Takes the shipped model as it is, and fits again what the comparisons need: models that saw
nothing of the person they are checked on, other methods, heads without a family of
features. About half an hour on two cores. Pops and mains of the heads that are checked on
``eegmmidb_s001`` are learnt from simulation over that person's recordings too.
"""

from __future__ import annotations

import argparse
import os
import sys
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from artifactlens.curves import Model, load_model, logistic
from artifactlens.errors import ArtifactlensError
from artifactlens.export.atomic import write_atomically
from artifactlens.features.catalogue import FEATURE_NAMES
from artifactlens.kinds import KIND_NAMES
from artifactlens.pipeline import measure_recording
from artifactlens.recording import open_recording
from artifactlens.training import gathering, reserved
from artifactlens.training.corpora import absence, gestures, page_readings
from artifactlens.training.evaluation import figures, tables
from artifactlens.training.evaluation.ablation import FAMILIES, ablate
from artifactlens.training.evaluation.baselines import (
    SWING_LIMIT_UV,
    fit_interactions,
    fit_logistic,
    swing_of,
)
from artifactlens.training.evaluation.card import fill
from artifactlens.training.evaluation.intervals import (
    Interval,
    auc_difference,
    evaluate_kind,
)
from artifactlens.training.evaluation.markdown import number, table
from artifactlens.training.evaluation.metrics import marked_shares, per_second, rank_scores
from artifactlens.training.evaluation.tables import Comparison
from artifactlens.training.examples import Examples
from artifactlens.training.fit import calibrate, deal, fit_folds
from artifactlens.training.leaving_out import LABELLED_KINDS, as_model, heads_without
from artifactlens.training.realchecks.gestures_check import gestures_check, grouped_check
from artifactlens.training.realchecks.lookalike_seconds import lookalike_check
from artifactlens.training.realchecks.readings import readings_check
from artifactlens.training.realchecks.witness import clinical_check, eog_check

Scores = dict[str, NDArray[np.float64]]

GESTURE_FOLDS = 3
ASPECTS = ("bandwidth", "montage", "sites", "sampling rate")


def scored(model: Model, examples: Examples) -> Scores:
    """Calibrated probability of every row."""

    def column(name: str) -> NDArray[np.float64]:
        return examples.features[:, FEATURE_NAMES.index(name)].astype(np.float64)

    return {
        head.kind: logistic(
            head.base
            + sum(curve(column(name)) for name, curve in head.curves.items())
            + sum(pair(column(a), column(b)) for (a, b), pair in head.pairs.items())
        )
        for head in model.heads
    }


def marks_of(model: Model) -> dict[str, tuple[float, float]]:
    """Operating points by kind."""
    return {head.kind: (head.sure, head.doubtful) for head in model.heads}


def development(gathered: gathering.Gathered, model: Model, folder: Path) -> dict[str, str]:
    """Results on the people who took part in development, each scored by others' heads."""
    examples, marks = gathered.examples, marks_of(model)
    rows = np.char.startswith(examples.origin, "simulated: eegmat")
    chosen = examples.subset(rows)
    asis = reserved.as_distributed(folder, gathering.TRAINING_PEOPLE)
    lines, rated, full_auc, clean = [], [], {}, []
    first = deal(examples.person) == 0
    training, validation = examples.subset(~first), examples.subset(rows & first)
    # Differences between families show on a third of the cells as well.
    fewer = training.subset(np.arange(len(training)) % 3 == 0)
    without = {}
    for kind in KIND_NAMES:
        forests = fit_folds(kind, examples)
        decision = forests.decision(examples.features, examples.person)
        # The same scores and rows as in training give the same calibration.
        known = gathered.setting & (examples.truth[:, KIND_NAMES.index(kind)] >= 0)
        slope, offset = calibrate(
            decision[known], examples.truth[known, KIND_NAMES.index(kind)]
        )
        score = logistic(offset + slope * decision[rows])
        others = forests.decision(asis.features, asis.person)
        rated.append(evaluate_kind(chosen, kind, score, *marks[kind]))
        full = fit_interactions(kind, training)(validation.features)
        ahead, interval = auc_difference(
            full,
            decision[rows & first],
            validation.truth[:, KIND_NAMES.index(kind)],
            validation.person,
        )
        lines.append([kind, number(ahead, 4), _interval(interval)])
        clean.append(
            evaluate_kind(asis, kind, logistic(offset + slope * others), *marks[kind])
        )
        found = ablate(kind, fewer, validation, None)
        full_auc[kind] = None if found is None else found.auc
        for family in FAMILIES:
            without[kind, family] = ablate(kind, fewer, validation, family)
        print(f"development: {kind}", file=sys.stderr)
    return {
        "development": tables.main_table(
            chosen, rated, "People of development, each scored by heads of the other folds"
        ),
        "additive": table(
            tables.caption(
                validation, "Full forest less the shipped form, one fold of people"
            ),
            ["kind", "difference of AUC", "95 %"],
            lines,
        ),
        "ablation": tables.ablation_table(validation, full_auc, without),
        "clean record": tables.main_table(
            asis, clean, "Recordings as distributed, no artifact put in (held-out heads)"
        ),
    }


def _interval(interval: Interval | None) -> str:
    return "-" if interval is None else f"{interval.low:+.4f} to {interval.high:+.4f}"


def final(
    gathered: gathering.Gathered, model: Model, folder: Path, jobs: int
) -> dict[str, str]:
    """Results and figures on the reserved people."""
    held = reserved.reserved_copies(folder, jobs)
    examples, marks = held.examples, marks_of(model)
    scores = scored(model, examples)
    rated = [
        evaluate_kind(examples, kind, scores[kind], *marks[kind]) for kind in KIND_NAMES
    ]
    found = {
        "reserved": tables.main_table(examples, rated, "Reserved people"),
        "strength": tables.strength_table(examples, scores, marks),
        "look-alikes": tables.look_alike_table(examples, scores, marks),
    }
    for aspect in ASPECTS:
        found[f"by {aspect}"] = tables.condition_table(examples, scores, marks, aspect)
    compared, curves = others_on(held, gathered.examples, scores)
    found["baselines"] = tables.baseline_table(examples, compared)
    asis = reserved.as_distributed(folder, gathering.RESERVED_PEOPLE)
    clean = scored(model, asis)
    found["reserved clean record"] = tables.main_table(
        asis,
        [evaluate_kind(asis, kind, clean[kind], *marks[kind]) for kind in KIND_NAMES],
        "Reserved recordings as distributed, no artifact put in",
    )
    tool = {
        kind: (scores[kind], examples.truth[:, number_])
        for number_, kind in enumerate(KIND_NAMES)
    }
    found["figure reliability.svg"] = figures.reliability_figure(examples, scores)
    found["figure strength.svg"] = figures.strength_figure(examples, scores, marks)
    found["figure roc.svg"] = figures.roc_figure(tool, curves, "SIMULATED, reserved people")
    return found


def others_on(
    held: reserved.Reserved, training: Examples, scores: Scores
) -> tuple[
    list[Comparison], dict[str, dict[str, tuple[NDArray[np.float64], NDArray[np.int8]]]]
]:
    """The tool and other methods on the same cells, and on the same seconds."""
    examples = held.examples
    compared: list[Comparison] = []
    curves: dict[str, dict[str, tuple[NDArray[np.float64], NDArray[np.int8]]]] = {}
    for column, kind in enumerate(KIND_NAMES):
        truth = examples.truth[:, column]
        methods = {
            "this tool": scores[kind],
            f"peak-to-peak limit ({SWING_LIMIT_UV:g} uV)": swing_of(examples.features),
            "logistic regression": fit_logistic(kind, training)(examples.features),
            "full forest": fit_interactions(kind, training)(examples.features),
        }
        for method, score in methods.items():
            ahead, interval = (
                (None, None)
                if method == "this tool"
                else auc_difference(scores[kind], score, truth, examples.person)
            )
            entry = Comparison(
                kind, method, "cells", rank_scores(score, truth), ahead=ahead,
                ahead_interval=interval,
            )  # fmt: skip
            if method.startswith("peak"):
                shares = marked_shares(score[truth == 1], score[truth == 0], SWING_LIMIT_UV)
                entry = entry._replace(
                    own_limit=f"{SWING_LIMIT_UV:g} uV", sensitivity=shares[0],
                    specificity=shares[1],
                )  # fmt: skip
            compared.append(entry)
        curves[kind] = {
            method: (score, truth)
            for method, score in methods.items()
            if method != "this tool"
        }
        trace = {"muscle": ("muscle z-score (mne)", held.muscle_z),
                 "eye": ("blink peak (mne)", held.blink_uv)}.get(kind)  # fmt: skip
        if trace:
            ours = per_second(examples, kind, scores[kind])
            theirs = per_second(examples, kind, trace[1])
            both = ~np.isnan(ours.highest) & ~np.isnan(theirs.highest)
            for method, score in (("this tool", ours.highest), (trace[0], theirs.highest)):
                compared.append(
                    Comparison(
                        kind, method, "seconds", rank_scores(score[both], ours.truth[both])
                    )
                )
    return compared, curves


def left_out(
    gathered: gathering.Gathered, model: Model, where: dict[str, Path]
) -> dict[str, str]:
    """Real labels, by models that saw nothing of the person they are checked on."""
    examples = gathered.examples
    real = np.char.startswith(examples.origin, "real")
    session = gestures.load(where["gestures_one_person"])
    chunks = gestures.gesture_chunks(session)
    faces = measure_recording(gestures.as_recording(session), line_frequency=60.0)
    folder = where["eegmmidb_s001"]
    rows = page_readings.readings(folder)
    runs = {
        name: measure_recording(open_recording(folder / name), line_frequency=60.0)
        for name in sorted(rows)
    }
    absent = measure_recording(open_recording(where["clinical_absence"] / "absence.edf"))
    simulated = heads_without(gathered, ~real, KIND_NAMES)
    texts: dict[str, str] = {}
    summary = []
    for source, seen in (
        ("simulation", ~real),
        ("real labels", real),
        ("both", np.ones_like(real)),
    ):
        for person, check in (
            ("eegmmidb-001", lambda made: readings_check(made, runs, rows)),
            ("gestures", lambda made: gestures_check(made, faces, chunks)),
            ("clinical_absence", lambda made: clinical_check(made, absent)[0]),
        ):
            allowed = seen & (examples.person != person)
            if source == "simulation":
                made = as_model(simulated)
            elif person == "clinical_absence" and source == "both":
                made = model
            else:
                made = as_model(simulated | heads_without(gathered, allowed))
            found = check(made)
            summary.append((source, person, found))
            print(f"left out: {person}, learnt from {source}", file=sys.stderr)
            if source == "both" and person != "clinical_absence":
                texts[f"real {person}"] = f"```\n{found.text()}\n```"
    texts["real transfer"] = transfer_table(summary)

    def without_block(fold: int) -> Model:
        theirs = examples.person == "gestures"
        first = examples.second[theirs].min()
        block = np.full(len(examples), -1)
        block[theirs] = chunks.block[examples.second[theirs] - first] % GESTURE_FOLDS
        return as_model(simulated | heads_without(gathered, block != fold))

    grouped = grouped_check(without_block, faces, chunks, GESTURE_FOLDS)
    texts["real gestures grouped"] = f"```\n{grouped.text()}\n```"
    eyes = clinical_check(model, absent)
    texts["eye leads"] = "```\n" + "\n".join(check.text() for check in eyes) + "\n```"
    noted = absence.notes(where["clinical_absence"] / "notes.tsv")
    alike = lookalike_check(model, absent, noted)
    texts["look-alikes on real record"] = f"```\n{alike.shares_text()}\n```"
    sample = open_recording(where["sample_60eeg"] / "sample_eeg_raw.fif")
    texts["eog"] = f"```\n{eog_check(model, measure_recording(sample)).text()}\n```"
    return texts


def transfer_table(summary: list[tuple[str, str, object]]) -> str:
    """AUC of the person left out, by what the heads learnt from."""
    header = [
        "learnt from",
        "checked on",
        "kind",
        "present",
        "clean",
        "AUC",
        "found at 95 %",
    ]
    lines = []
    for source, person, found in summary:
        by_kind = {
            "eegmmidb-001": lambda f: {k: f.seconds[k] for k in LABELLED_KINDS},
            "gestures": lambda f: f.kinds,
            "clinical_absence": lambda f: {"eye": f.separation},
        }[person](found)
        lines += [
            [source, person, kind, str(one.yes), str(one.no), number(one.auc, 3),
             number(one.found_at_95, 3)]
            for kind, one in by_kind.items()
        ]  # fmt: skip
    return table("**REAL, one person each; rows are seconds or chunks.**", header, lines)


def main() -> int:
    """Run everything, write the card, the README's block and the figures."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    default = os.environ.get("ARTIFACTLENS_CORPORA", "../shared/corpora")
    parser.add_argument("--corpora", type=Path, default=Path(default), help="their folder")
    parser.add_argument("--card", type=Path, default=Path("models/MODEL_CARD.md"))
    parser.add_argument("--readme", type=Path, default=Path("README.md"))
    parser.add_argument("--jobs", type=int, default=2, help="worker processes")
    arguments = parser.parse_args()
    root = arguments.corpora
    where = gathering.folders(root, [])
    where |= {name: root / name for name in gathering.NEVER_LEARNT}
    try:
        model = load_model()
        gathered = gathering.gather(gathering.folders(root, []), arguments.jobs)
        found = development(gathered, model, where["eegmat"])
        found |= final(gathered, model, where["eegmat"], arguments.jobs)
        found |= left_out(gathered, model, where)
        write(arguments.card, arguments.readme, found)
    except ArtifactlensError as error:
        print(error, file=sys.stderr)
        return 1
    return 0


def write(card: Path, readme: Path, found: dict[str, str]) -> None:
    """Fill the blocks of both texts, and write the figures beside the card.

    Nothing is written if a block is missing.
    """
    text, drawings = card.read_text(encoding="utf-8"), {}
    for name, content in found.items():
        if name.startswith("figure "):
            drawings[card.parent / name.removeprefix("figure ")] = content
        else:
            text = fill(text, name, content)
    short = readme.read_text(encoding="utf-8")
    for name in ("reserved", "real transfer"):
        short = fill(short, name, found[name])
    for path, content in (drawings | {card: text, readme: short}).items():
        write_atomically(path, content)
    print(f"wrote {card}, {readme} and the figures")


if __name__ == "__main__":
    sys.exit(main())
