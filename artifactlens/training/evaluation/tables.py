"""Markdown tables of the evidence; every caption says SIMULATED or REAL, and the sizes.

Real labels and simulated artifact never share a table: what mixes them is refused.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from itertools import pairwise
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from artifactlens.errors import OptionError
from artifactlens.kinds import KIND_NAMES
from artifactlens.training.evaluation.ablation import FAMILIES, Ablation
from artifactlens.training.evaluation.conditions import groups_by
from artifactlens.training.evaluation.intervals import FEWEST_PEOPLE, Evaluation, Interval
from artifactlens.training.evaluation.markdown import (
    ABSENT,
    count_of,
    number,
    table,
    with_interval,
)
from artifactlens.training.evaluation.metrics import (
    Ranking,
    Scores,
    clean_rate,
    known_cells,
    measure_scores,
    per_second,
    rank_scores,
    recordings_of,
)
from artifactlens.training.examples import CLEAN, PRESENT, Examples

ScoresByKind = Mapping[str, Scores]
"""Calibrated probability per kind, (n_rows,) each, NaN where not judged."""
Marks = Mapping[str, tuple[float, float]]
"""Operating points per kind: (sure, doubtful)."""

FEW_PEOPLE = 20
"""Below, the caption warns that percentile intervals over so few cover less than they say
(Cameron, Gelbach and Miller 2008, on few clusters; from memory)."""

STRENGTHS: dict[str, tuple[str, tuple[float, ...]]] = {
    "eye": ("uV peak-to-peak", (30, 50, 100, 200)),
    "muscle": ("uV rms above 15 Hz", (5, 10, 20, 40)),
    "pop": ("uV step", (20, 40, 80, 160)),
    "mains": ("uV amplitude", (1.5, 3, 6, 12, 24)),
}
"""Unit and limits of the rows by strength; the sizes are those of ``labels.label_cells``."""


class Comparison(NamedTuple):
    """One method on one kind.

    ``unit`` is "cells" or "seconds": only rows of one unit compare. ``own_limit`` says at
    which limit ``sensitivity`` and ``specificity`` hold. ``ahead`` is by how much AUC the
    tool is ahead of it on the same rows, with its interval.
    """

    kind: str
    method: str
    unit: str
    ranking: Ranking
    own_limit: str = ""
    sensitivity: float | None = None
    specificity: float | None = None
    ahead: float | None = None
    ahead_interval: Interval | None = None


class StrengthRow(NamedTuple):
    """Present cells whose artifact has a size in [low, high), and the shares found."""

    label: str
    n_present: int
    sensitivity_sure: float
    sensitivity_doubtful: float
    ranking: Ranking


def source_of(examples: Examples) -> str:
    """SIMULATED or REAL, from the origins.

    Raises
    ------
    OptionError
        If the examples are of both, or of neither.
    """
    found = {str(origin).partition(":")[0] for origin in np.unique(examples.origin)}
    if found not in ({"simulated"}, {"real"}):
        raise OptionError(
            "A table needs examples that are all simulated or all real; these are "
            f"{' and '.join(sorted(found)) or 'none'}.",
            "Make a table of each.",
        )
    return found.pop().upper()


def caption(examples: Examples, title: str, note: str = "") -> str:
    """Source, title and sizes in one line of markdown."""
    recordings = recordings_of(examples)
    people = len(np.unique(examples.person))
    sizes = (
        f"{count_of(len(examples), 'cell')}, {count_of(len(recordings), 'second')}, "
        f"{count_of(int(recordings.max()) + 1, 'recording')}, "
        f"{count_of(people, 'person', 'people')}."
    )
    return f"**{source_of(examples)}. {title}.** {sizes} {note}".rstrip()


def main_table(
    examples: Examples, evaluations: Sequence[Evaluation], title: str = "All measures"
) -> str:
    """A row per measure, a column per kind, intervals in brackets."""
    rows = [["people", *(str(e.n_people) for e in evaluations)]]
    for name, label in (("n_present", "present cells"), ("n_clean", "clean cells")):
        rows.append([label, *(f"{getattr(e.measures, name):,}" for e in evaluations)])
    for name, label in _MEASURE_LABELS.items():
        digits = 4 if name in _FOUR_DIGITS else 3
        rows.append(
            [
                label,
                *(
                    with_interval(
                        getattr(e.measures, name), (e.interval or {}).get(name), digits
                    )
                    for e in evaluations
                ),
            ]
        )
    rows += [
        ["operating point, sure", *(f"{e.sure:.3f}" for e in evaluations)],
        ["operating point, doubtful", *(f"{e.doubtful:.3f}" for e in evaluations)],
        ["people with clean seconds", *(str(e.n_clean_people) for e in evaluations)],
        ["clean seconds", *(f"{e.clean.seconds:,}" for e in evaluations)],
    ]
    for name, label in _RATE_LABELS.items():
        rows.append(
            [
                label,
                *(
                    with_interval(
                        getattr(e.clean, name), (e.clean_interval or {}).get(name), 1
                    )
                    for e in evaluations
                ),
            ]
        )
    heading = caption(examples, title, _interval_note(evaluations))
    return table(heading, ["measure", *(e.kind for e in evaluations)], rows)


_MEASURE_LABELS = {
    "prevalence": "prevalence",
    "auc": "ROC AUC",
    "average_precision": "average precision",
    "sensitivity_95": "sensitivity at 95 % specificity",
    "sensitivity_99": "sensitivity at 99 % specificity",
    "sensitivity_sure": "sensitivity, sure",
    "specificity_sure": "specificity, sure",
    "balanced_accuracy_sure": "balanced accuracy, sure",
    "sensitivity_doubtful": "sensitivity, doubtful",
    "specificity_doubtful": "specificity, doubtful",
    "balanced_accuracy_doubtful": "balanced accuracy, doubtful",
    "brier": "Brier score",
    "calibration_error": "calibration error (15 bins of equal mass)",
}
_RATE_LABELS = {
    "flags_sure": "flags per clean hour, sure",
    "flags_doubtful": "flags per clean hour, doubtful",
    "seconds_sure": "marked seconds per clean hour, sure",
    "seconds_doubtful": "marked seconds per clean hour, doubtful",
}
_FOUR_DIGITS = {"auc", "average_precision", "brier", "calibration_error"}


def _interval_note(evaluations: Sequence[Evaluation]) -> str:
    counts = sorted({e.n_people for e in evaluations})
    sentences = []
    enough = [str(count) for count in counts if count >= FEWEST_PEOPLE]
    if enough:
        sentences.append(
            f"In brackets the middle 95 % of a bootstrap over {' or '.join(enough)} people"
            + (
                "; with so few people it is rather too narrow."
                if int(enough[0]) < FEW_PEOPLE
                else "."
            )
        )
    sentences += [
        f"{count_of(count, 'person', 'people')}, no interval."
        for count in counts
        if count < FEWEST_PEOPLE
    ]
    return " ".join(sentences)


def condition_table(
    examples: Examples, scores: ScoresByKind, marks: Marks, aspect: str
) -> str:
    """Measures of every kind within each value of one aspect of the recording conditions.

    ``aspect`` is one of ``conditions.ASPECTS``. A kind that is not judged has no row.
    """
    rows = []
    for value, chosen in groups_by(aspect, examples.condition).items():
        part = examples.subset(chosen)
        for kind, score in scores.items():
            truth = part.truth[:, KIND_NAMES.index(kind)]
            measures = measure_scores(score[chosen], truth, *marks[kind])
            if not measures.n_present + measures.n_clean:
                continue
            clean = clean_rate(part, kind, score[chosen], *marks[kind])
            people = part.person[known_cells(score[chosen], truth)]
            rows.append(
                [
                    value,
                    kind,
                    str(len(np.unique(people))),
                    f"{measures.n_present:,}",
                    f"{measures.n_clean:,}",
                    number(measures.auc, 4),
                    number(measures.sensitivity_sure),
                    number(measures.specificity_sure),
                    number(clean.flags_sure, 1),
                ]
            )
    header = [
        aspect, "kind", "people", "present", "clean", "ROC AUC", "sensitivity, sure",
        "specificity, sure", "flags per clean hour, sure",
    ]  # fmt: skip
    return table(caption(examples, f"By {aspect}"), header, rows)


def strength_rows(
    examples: Examples, kind: str, score: Scores, sure: float, doubtful: float
) -> list[StrengthRow]:
    """Shares of present cells found, by the size of the artifact; see ``STRENGTHS``.

    Ranges without a cell are left out; cells of unknown size (real labels) come last.
    """
    column = KIND_NAMES.index(kind)
    truth = examples.truth[:, column]
    known = known_cells(score, truth)
    chosen = known & (truth == PRESENT)
    clean = score[known & (truth == CLEAN)]
    size, found = examples.strength[chosen, column], score[chosen]
    edges = STRENGTHS[kind][1]
    labels = [
        f"under {edges[0]:g}",
        *(f"{low:g} to {high:g}" for low, high in pairwise(edges)),
        f"{edges[-1]:g} and more",
        "not known",
    ]
    place = np.where(
        np.isnan(size), len(edges) + 1, np.searchsorted(edges, size, side="right")
    )
    rows = []
    for position, label in enumerate(labels):
        own = found[place == position]
        if len(own):
            rows.append(
                StrengthRow(
                    label,
                    len(own),
                    float((own >= sure).mean()),
                    float((own >= doubtful).mean()),
                    _ranked(own, clean),
                )
            )
    return rows


def strength_table(examples: Examples, scores: ScoresByKind, marks: Marks) -> str:
    """Sensitivity by the size of the artifact at the cell."""
    rows = [
        [
            kind,
            f"{row.label} {STRENGTHS[kind][0]}",
            f"{row.n_present:,}",
            number(row.sensitivity_sure),
            number(row.sensitivity_doubtful),
            number(row.ranking.auc, 4),
            number(row.ranking.sensitivity_99),
        ]
        for kind, score in scores.items()
        for row in strength_rows(examples, kind, score, *marks[kind])
    ]
    header = [
        "kind", "size", "present", "sensitivity, sure", "sensitivity, doubtful", "ROC AUC",
        "sensitivity at 99 % specificity",
    ]  # fmt: skip
    note = "AUC and specificity are against all clean cells."
    return table(caption(examples, "By size of the artifact", note), header, rows)


def _ranked(present: Scores, clean: Scores) -> Ranking:
    truth = np.repeat(np.array([PRESENT, CLEAN], np.int8), (len(present), len(clean)))
    return rank_scores(np.concatenate([present, clean]), truth)


def look_alike_table(examples: Examples, scores: ScoresByKind, marks: Marks) -> str:
    """Marks on cerebral patterns, and on seconds without one for comparison.

    Only clean cells, and seconds that are clean of the kind at every site, are counted:
    what is marked there is marked wrongly.
    """
    rows = []
    for kind, score in scores.items():
        limits = marks[kind]
        seconds = per_second(examples, kind, score)
        truth = examples.truth[:, KIND_NAMES.index(kind)]
        cells_count = known_cells(score, truth) & (truth == CLEAN)
        seconds_count = (seconds.truth == CLEAN) & ~np.isnan(seconds.highest)
        patterns = [str(name) for name in np.unique(examples.look_alike) if name]
        for pattern in [*patterns, ""]:
            here = seconds.highest[seconds_count & (seconds.look_alike == pattern)]
            cells = score[cells_count & (examples.look_alike == pattern)]
            rows.append(
                [
                    kind,
                    pattern or "none (for comparison)",
                    f"{len(here):,}",
                    *(number(_share(here >= limit)) for limit in limits),
                    f"{len(cells):,}",
                    *(number(_share(cells >= limit), 4) for limit in limits),
                ]
            )
    header = [
        "kind", "pattern", "clean seconds", "marked, sure", "marked, doubtful",
        "clean cells", "marked, sure", "marked, doubtful",
    ]  # fmt: skip
    return table(caption(examples, "Cerebral patterns marked"), header, rows)


def baseline_table(examples: Examples, comparisons: Sequence[Comparison]) -> str:
    """The tool and other methods on the same cells or the same seconds."""
    rows = [
        [
            entry.kind,
            entry.method,
            entry.unit,
            f"{entry.ranking.n_present:,}",
            f"{entry.ranking.n_clean:,}",
            number(entry.ranking.auc, 4),
            number(entry.ranking.average_precision, 4),
            number(entry.ranking.sensitivity_95),
            number(entry.ranking.sensitivity_99),
            _at_own_limit(entry),
            with_interval(entry.ahead, entry.ahead_interval, 4, signed=True),
        ]
        for entry in comparisons
    ]
    header = [
        "kind", "method", "of", "present", "clean", "ROC AUC", "average precision",
        "sensitivity at 95 %", "sensitivity at 99 %", "at its own limit",
        "the tool's AUC less its AUC",
    ]  # fmt: skip
    return table(caption(examples, "Other methods on the same data"), header, rows)


def _at_own_limit(entry: Comparison) -> str:
    if not entry.own_limit:
        return ABSENT
    return (
        f"{entry.own_limit}: sensitivity {number(entry.sensitivity)}, "
        f"specificity {number(entry.specificity)}"
    )


def ablation_table(
    examples: Examples,
    full: Mapping[str, float | None],
    without: Mapping[tuple[str, str], Ablation | None],
) -> str:
    """AUC without a family of features less the AUC with all, per kind.

    Parameters
    ----------
    examples : Examples
        The validation set.
    full : mapping
        Kind to the AUC with all features.
    without : mapping
        (kind, family) to what ``ablation.ablate`` gave.
    """

    def change(kind: str, family: str) -> str:
        if (kind, family) not in without:
            return ABSENT
        found = without[kind, family]
        if found is None:
            return "all it sees"
        if not found.left_out:
            return "not seen"
        if found.auc is None or full[kind] is None:
            return ABSENT
        return f"{found.auc - (full[kind] or 0.0):+.4f}"

    rows = [["none (ROC AUC)", *(number(full[kind], 4) for kind in full)]]
    rows += [[name, *(change(kind, name) for kind in full)] for name in FAMILIES]
    note = "Each forest fitted again; the change of the ROC AUC of cells."
    return table(
        caption(examples, "Without a family of features", note), ["left out", *full], rows
    )


def _share(marked: NDArray[np.bool_]) -> float | None:
    return float(marked.mean()) if len(marked) else None
