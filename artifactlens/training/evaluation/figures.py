"""Figures of the evidence as SVG text: same input, same bytes.

Every line has a marker and a dash pattern of its own, so that nothing is lost in grey.
"""

from __future__ import annotations

import io
from collections.abc import Mapping
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from artifactlens.errors import OptionError
from artifactlens.kinds import KIND_NAMES, KINDS
from artifactlens.training.evaluation.metrics import (
    CALIBRATION_BINS,
    Scores,
    known_cells,
    sensitivity_at,
    split_scores,
)
from artifactlens.training.evaluation.tables import (
    STRENGTHS,
    Marks,
    ScoresByKind,
    source_of,
    strength_rows,
)
from artifactlens.training.examples import PRESENT, Examples

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

KIND_COLOURS = {
    "eye": "#0072b2", "muscle": "#e69f00", "pop": "#cc79a7", "mains": "#009e73",
}  # fmt: skip
"""As on the page (``page/report.css``): Okabe and Ito (2008), Color Universal Design."""
INK, SOFT = "#1e2326", "#8a9093"

OTHER_LINES: tuple[tuple[tuple[float, tuple[float, ...]], str], ...] = (
    ((0, (4, 2)), "s"),
    ((0, (1, 1.5)), "^"),
    ((0, (5, 1.5, 1, 1.5)), "D"),
    ((0, (8, 2)), "v"),
    ((0, (3, 1, 1, 1, 1, 1)), "P"),
)
"""Dashes and marker of the methods beside the tool, in their order; five at most."""

FEW_CELLS = 50
"""A bin with fewer cells is drawn hollow: its share is not to be leant on."""

ROC_SHARES = np.geomspace(1e-3, 1.0, 121)


def reliability_figure(examples: Examples, scores: ScoresByKind) -> str:
    """Share present against stated probability, and the cells per bin, for every kind.

    15 bins of equal width from 0 to 1 (bins of equal mass, as the calibration error uses
    them, would nearly all lie at 0). Bins with fewer than 50 cells are hollow.

    Parameters
    ----------
    examples : Examples
        All simulated or all real.
    scores : mapping of array, shape (n_rows,)

    Returns
    -------
    str
        SVG.
    """
    figure, columns = _figure(len(scores), rows=2, heights=(3, 1))
    for (kind, score), (upper, lower) in zip(scores.items(), columns, strict=True):
        truth = examples.truth[:, KIND_NAMES.index(kind)]
        known = known_cells(score, truth)
        stated, share, counts = reliability(score[known], truth[known] == PRESENT)
        colour = KIND_COLOURS[kind]
        upper.plot([0, 1], [0, 1], color=SOFT, linestyle=":", linewidth=1)
        upper.plot(stated, share, color=colour, linewidth=1.2)
        for many, face in ((True, colour), (False, "white")):
            chosen = (counts >= FEW_CELLS) == many
            if not chosen.any():
                continue
            upper.plot(
                stated[chosen], share[chosen], linestyle="none", marker="o", markersize=5,
                markerfacecolor=face, markeredgecolor=colour, clip_on=False,
            )  # fmt: skip
        upper.set(title=_label(kind), xlim=(0, 1), ylim=(0, 1), ylabel="share present")
        centres = (np.arange(CALIBRATION_BINS) + 0.5) / CALIBRATION_BINS
        all_counts = np.zeros(CALIBRATION_BINS)
        all_counts[_width_bin(stated)] = counts
        lower.bar(
            centres, all_counts, width=0.8 / CALIBRATION_BINS, color=colour, edgecolor=INK,
            linewidth=0.5,
        )  # fmt: skip
        lower.set_yscale("symlog", linthresh=1)
        lower.set(xlim=(0, 1), ylim=(0, None), xlabel="stated probability", ylabel="cells")
    return _svg(
        figure,
        f"{source_of(examples)}: probability stated and share present (hollow: under 50 cells)",
    )


def reliability(
    score: Scores, present: NDArray[np.bool_]
) -> tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.int64]]:
    """Mean probability, share present and cells of every bin of equal width that has cells.

    Parameters
    ----------
    score : array, shape (n_cells,)
        Probabilities.
    present : array, shape (n_cells,), bool

    Returns
    -------
    three arrays, shape (n_used_bins,)
    """
    bins = _width_bin(score)
    counts = np.bincount(bins, minlength=CALIBRATION_BINS)
    used = counts > 0
    stated = np.bincount(bins, weights=score, minlength=CALIBRATION_BINS)[used]
    share = np.bincount(bins, weights=present, minlength=CALIBRATION_BINS)[used]
    return stated / counts[used], share / counts[used], counts[used].astype(np.int64)


def _width_bin(score: Scores) -> NDArray[np.intp]:
    place = np.floor(np.asarray(score) * CALIBRATION_BINS).astype(np.intp)
    return np.clip(place, 0, CALIBRATION_BINS - 1)


def strength_figure(examples: Examples, scores: ScoresByKind, marks: Marks) -> str:
    """Sensitivity by the size of the artifact, at both operating points.

    Parameters
    ----------
    examples : Examples
        All simulated or all real.
    scores : mapping of array, shape (n_rows,)
    marks : mapping of (sure, doubtful)

    Returns
    -------
    str
        SVG.
    """
    figure, columns = _figure(len(scores), rows=1, heights=(1,))
    for (kind, score), (axes,) in zip(scores.items(), columns, strict=True):
        rows = strength_rows(examples, kind, score, *marks[kind])
        place = np.arange(len(rows))
        colour = KIND_COLOURS[kind]
        axes.plot(
            place, [row.sensitivity_doubtful for row in rows], color=colour, linestyle="--",
            marker="s", markerfacecolor="white", label="doubtful",
        )  # fmt: skip
        axes.plot(
            place, [row.sensitivity_sure for row in rows], color=colour, linestyle="-",
            marker="o", label="sure",
        )  # fmt: skip
        axes.set_xticks(
            place, [f"{row.label}\nn = {row.n_present}" for row in rows], rotation=60
        )
        axes.set(
            title=_label(kind), xlabel=STRENGTHS[kind][0], ylabel="sensitivity",
            ylim=(0, 1.02), xlim=(-0.5, max(len(rows), 1) - 0.5),
        )  # fmt: skip
        axes.legend(frameon=False, loc="lower right")
    return _svg(figure, f"{source_of(examples)}: what is found, by size of the artifact")


Ranked = tuple[Scores, NDArray[np.int8]]
"""Scores and truth of the same rows."""


def roc_figure(
    tool: Mapping[str, Ranked], others: Mapping[str, Mapping[str, Ranked]], source: str
) -> str:
    """ROC curves of the tool and of other methods; the share of clean cells is logarithmic.

    Parameters
    ----------
    tool : mapping
        Kind to its scores and truth.
    others : mapping
        Kind to method to scores and truth; a method looks alike in all panels.
    source : str
        SIMULATED or REAL, as ``tables.source_of`` gives it.

    Returns
    -------
    str
        SVG.

    Raises
    ------
    OptionError
        If there are more than five other methods.
    """
    methods = list(dict.fromkeys(name for kind in others.values() for name in kind))
    if len(methods) > len(OTHER_LINES):
        raise OptionError(
            f"{len(OTHER_LINES)} other methods can be told apart; given were {len(methods)}.",
            "Leave some out, or draw two figures.",
        )
    figure, columns = _figure(len(tool), rows=1, heights=(1,))
    for (kind, ranked), (axes,) in zip(tool.items(), columns, strict=True):
        for name, other in others.get(kind, {}).items():
            line, marker = OTHER_LINES[methods.index(name)]
            style = {"color": INK, "linestyle": line, "marker": marker, "linewidth": 1}
            _roc(axes, other, style)
        style = {"color": KIND_COLOURS[kind], "marker": "o", "linewidth": 2}
        _roc(axes, ranked, style)
        axes.plot(ROC_SHARES, ROC_SHARES, color=SOFT, linestyle=":", linewidth=0.8)
        axes.set_xscale("log")
        axes.set(
            title=_label(kind), xlabel="share of clean marked", ylabel="sensitivity",
            xlim=(ROC_SHARES[0], 1), ylim=(0, 1.02),
        )  # fmt: skip
    _legend(figure, methods)
    return _svg(figure, f"{source}: the tool and other methods")


def _legend(figure: Figure, methods: list[str]) -> None:
    """One legend for all panels: the tool's colour is that of the kind."""
    from matplotlib.lines import Line2D

    entries = [Line2D([], [], color=INK, marker="o", linewidth=2.5, label="this tool")]
    for number, name in enumerate(methods):
        line, marker = OTHER_LINES[number]
        entries.append(
            Line2D(
                [], [], color=INK, linestyle=line, marker=marker, linewidth=1, label=name
            )
        )
    figure.legend(
        handles=entries, loc="outside lower center", ncols=len(entries), frameon=False
    )


def _roc(axes: Axes, ranked: Ranked, style: dict[str, Any]) -> None:
    present, clean = split_scores(*ranked)
    if not len(present) or not len(clean):
        return
    # One clean cell is the least that can be marked: below its share nothing is known.
    least = 1 / len(clean)
    shares = ROC_SHARES[least <= ROC_SHARES]
    found = sensitivity_at(present, clean, 1 - shares)
    axes.plot(shares, found, **style, markersize=4, markevery=(len(shares) % 20, 20))


def _label(kind: str) -> str:
    return {entry.name: entry.label for entry in KINDS}[kind]


def _figure(
    n_kinds: int, *, rows: int, heights: tuple[float, ...]
) -> tuple[Figure, list[list[Axes]]]:
    """A column of axes per kind, without any global state of the plotting library."""
    from matplotlib.figure import Figure

    figure = Figure(
        figsize=(3.3 * max(n_kinds, 1), 3.9 + 0.6 * (rows - 1)), layout="constrained"
    )
    grid = figure.subplots(
        rows, max(n_kinds, 1), squeeze=False, height_ratios=list(heights)
    )
    for axes in grid.ravel():
        axes.spines[["top", "right"]].set_visible(False)
    return figure, [list(grid[:, column]) for column in range(n_kinds)]


def _svg(figure: Figure, title: str) -> str:
    import matplotlib

    figure.suptitle(title, fontsize=11)
    stream = io.StringIO()
    # Text stays text; identifiers come from this salt instead of from chance.
    with matplotlib.rc_context({"svg.hashsalt": "artifactlens", "svg.fonttype": "none"}):
        figure.savefig(stream, format="svg", metadata={"Date": None, "Creator": None})
    return stream.getvalue()
