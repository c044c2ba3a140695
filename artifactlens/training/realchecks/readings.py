"""A model against two readings of the pages of one adult (``eegmmidb_s001``).

The readings are those of a general vision model that looked at the plotted pages twice:
not human, not expert, and every output says so. They tell whether what was learnt
elsewhere carries over to a real adult at full bandwidth; they are no ground truth.
"""

from __future__ import annotations

from collections.abc import Collection, Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from artifactlens.curves import Model
from artifactlens.flagging import MARKS
from artifactlens.kinds import KIND_NAMES
from artifactlens.pipeline import Measured
from artifactlens.training.corpora.page_readings import (
    ANY,
    BESIDE_POP,
    PAGE_SITES,
    PLAIN,
    POLES,
    READ_KINDS,
    Reading,
    marked,
    page_numbers,
)
from artifactlens.training.corpora.spans import Bools
from artifactlens.training.realchecks.agreement import (
    NO,
    NOT_CALLED,
    YES,
    Separation,
    kappa,
    separation,
    separation_text,
    share,
)
from artifactlens.training.realchecks.judged import Judged, judge_recording

ARTIFACT_ROWS = ("eye", "muscle", *BESIDE_POP)
HALF = "at .5"
"""A way of marking beside both operating points: a probability of at least one half."""

CAUTION = (
    "Readings by a general vision model: not human, not expert. One adult: nothing is said "
    "of people in general."
)

Flagged = dict[str, dict[str, float]]
"""Share flagged: kind, then way of marking."""


@dataclass(frozen=True, slots=True)
class Agreement:
    """Cohen's kappa on the ``seconds`` of pages both read that are doubtful to neither.

    ``readings`` is that of the two readings; ``tool`` maps a way of marking to that of the
    tool with the first and with the second reading.
    """

    seconds: int
    readings: float
    tool: dict[str, tuple[float, float]]


@dataclass(frozen=True, slots=True)
class Cerebral:
    """How many seconds or cells are called cerebral, and the share of them flagged.

    Both per kind. Nobody read for mains: its share is that of real interference too.
    """

    count: dict[str, int]
    flagged: Flagged


@dataclass(frozen=True, slots=True)
class ReadingsCheck:
    """A model against the readings, at the sites that the pages show.

    ``seconds`` (yes: both readings mark it sure or probable; no: neither marks it) and
    ``agreement`` per kind. ``cells`` for "muscle" (sites both name, against sites that
    neither names anywhere on the page) and "eye" (Fp1 and Fp2 in the same seconds).
    ``artifact_free`` counts the seconds that both call cerebral and neither artifact of
    any kind; ``cerebral_seconds`` are called cerebral by both and artifact *of the kind* by
    neither; ``cerebral_cells`` are sites that both call cerebral in a second and neither
    names for any artifact in it.
    """

    seconds: dict[str, Separation]
    agreement: dict[str, Agreement]
    cells: dict[str, Separation]
    artifact_free: int
    cerebral_seconds: Cerebral
    cerebral_cells: Cerebral
    caution: str = CAUTION

    def text(self) -> str:
        """The check in plain lines, the caution first."""
        lines = [self.caution]
        for kind, found in self.seconds.items():
            with_each = self.agreement[kind]
            lines += [
                separation_text(f"{kind}, seconds on which both readings agree", found),
                f"  kappa on {with_each.seconds} s: first-second {with_each.readings:.2f}",
            ]
            lines += [
                f"    tool {way}: with first {first:.2f}, with second {second:.2f}"
                for way, (first, second) in with_each.tool.items()
            ]
        lines += [separation_text(f"{k}, sites", found) for k, found in self.cells.items()]
        lines.append(f"cerebral to both, artifact to neither: {self.artifact_free} s")
        for what, cerebral in (
            ("seconds cerebral to both, of the kind to neither", self.cerebral_seconds),
            ("cells cerebral to both, artifact to neither", self.cerebral_cells),
        ):
            lines.append(f"{what}; share flagged:")
            lines += [
                f"  {kind} ({cerebral.count[kind]}): "
                + ", ".join(f"{way} {found:.3f}" for way, found in ways.items())
                for kind, ways in cerebral.flagged.items()
            ]
        return "\n".join(lines)


@dataclass(frozen=True, slots=True)
class _Called:
    """Truth, score and marks of the same cells."""

    truth: NDArray[np.int8]
    score: NDArray[np.float64]
    ways: dict[str, Bools]


@dataclass(frozen=True, slots=True)
class _Run:
    """One recording: what the readings and the model say of its seconds and cells."""

    seconds: dict[str, _Called]
    plain: dict[str, Bools]
    certain: dict[str, Bools]
    cells: dict[str, _Called]
    cerebral: dict[str, Bools]
    artifact_free: Bools
    cerebral_cells: Bools


def readings_check(
    model: Model,
    runs: Mapping[str, Measured],
    readings: Mapping[str, Sequence[Reading]],
) -> ReadingsCheck:
    """Score a model against the readings; this person needs to be none of its training.

    Parameters
    ----------
    model : Model
    runs : mapping
        File name as in the readings ("S001R01.edf") to the measured recording.
    readings : mapping
        File name to the rows of both readers (``page_readings.readings``).
    """
    found = [
        _run(readings.get(name, ()), judge_recording(measured, model))
        for name, measured in runs.items()
    ]
    return ReadingsCheck(
        seconds={
            kind: _pooled([run.seconds[kind] for run in found]) for kind in READ_KINDS
        },
        agreement={kind: _agreement(found, kind) for kind in READ_KINDS},
        cells={
            kind: _pooled([run.cells[kind] for run in found]) for kind in ("eye", "muscle")
        },
        artifact_free=sum(int(run.artifact_free.sum()) for run in found),
        cerebral_seconds=_cerebral([(run.cerebral, run.seconds) for run in found]),
        cerebral_cells=_cerebral(
            [(dict.fromkeys(KIND_NAMES, run.cerebral_cells), run.cells) for run in found]
        ),
    )


def marked_cells(
    rows: Sequence[Reading],
    onset: NDArray[np.float64],
    kinds: Collection[str],
    confidences: Collection[str],
    sites: Sequence[str],
) -> Bools:
    """As :func:`marked`, site by site: shape (2, n_epochs, n_sites)."""
    columns = [marked(rows, onset, kinds, confidences, site) for site in sites]
    return np.stack(columns, axis=2)


def agreed(plain: Bools, anything: Bools, read: Bools) -> NDArray[np.int8]:
    """Truth by two readings: YES where both are plain, NO where neither marks anything.

    What one calls and the other does not, and what one calls doubtful only, is NOT_CALLED.

    Parameters
    ----------
    plain : array, shape (2, ...), bool
        Sure or probable to each reader.
    anything : array, shape (2, ...), bool
        Marked with any confidence.
    read : array, shape (...), bool
        On a page that both read.
    """
    truth = np.full(read.shape, NOT_CALLED, dtype=np.int8)
    truth[read & plain.all(axis=0)] = YES
    truth[read & ~anything.any(axis=0)] = NO
    return truth


def on_whole_page(named: Bools, page: NDArray[np.int64]) -> Bools:
    """Spread a mark over the page it stands on.

    Parameters
    ----------
    named : array, shape (n_epochs, n_sites), bool
    page : array, shape (n_epochs,)
        Page numbers, -1 for none: such seconds stay as they are.

    Returns
    -------
    array, shape (n_epochs, n_sites), bool
    """
    spread = named.copy()
    for number in np.unique(page[page >= 0]):
        spread[page == number] = named[page == number].any(axis=0)
    return spread


def _run(rows: Sequence[Reading], seen: Judged) -> _Run:
    onset = seen.onset
    page = page_numbers(rows, onset)
    read = page >= 0
    names = [name for name in PAGE_SITES if name in seen.canonical]
    columns = np.array([seen.canonical.index(name) for name in names], dtype=np.intp)
    nothing = np.full(len(onset), NOT_CALLED, dtype=np.int8)
    brain = read & marked(rows, onset, {"brain"}, PLAIN).all(axis=0)
    seconds, plain, certain, cells, cerebral = {}, {}, {}, {}, {}
    for row, kind in enumerate(KIND_NAMES):
        sure = marked(rows, onset, {kind}, PLAIN)
        anything = marked(rows, onset, {kind}, ANY)
        score = seen.second_score(kind, columns)
        ways = {mark: seen.flagged(mark, kind, columns) for mark in MARKS}
        truth = agreed(sure, anything, read) if kind in READ_KINDS else nothing
        seconds[kind] = _Called(truth, score, {**ways, HALF: score >= 0.5})
        plain[kind] = sure
        certain[kind] = read & ~(anything & ~sure).any(axis=0)
        cerebral[kind] = brain & ~anything.any(axis=0)
        probability = seen.probability[row][:, columns]
        cell_ways = {mark: seen.flagged_cells(mark, kind)[:, columns] for mark in MARKS}
        cell_truth = np.repeat(nothing[:, None], len(names), axis=1)
        if kind == "eye":
            poles = [place for place, name in enumerate(names) if name in POLES]
            cell_truth[:, poles] = truth[:, None]
        elif kind == "muscle":
            named = marked_cells(rows, onset, {kind}, ANY, names)
            nowhere = ~on_whole_page(np.asarray(named.any(axis=0)), page)
            both = marked_cells(rows, onset, {kind}, PLAIN, names)
            cell_truth = agreed(both, named, np.repeat(read[:, None], len(names), axis=1))
            cell_truth[(cell_truth == NO) & ~nowhere] = NOT_CALLED
        cells[kind] = _Called(
            cell_truth, probability, {**cell_ways, HALF: probability >= 0.5}
        )
    return _Run(
        seconds,
        plain,
        certain,
        cells,
        cerebral,
        brain & ~marked(rows, onset, ARTIFACT_ROWS, ANY).any(axis=0),
        read[:, None]
        & marked_cells(rows, onset, {"brain"}, PLAIN, names).all(axis=0)
        & ~marked_cells(rows, onset, ARTIFACT_ROWS, ANY, names).any(axis=0),
    )


def _pooled(parts: list[_Called]) -> Separation:
    return separation(
        np.concatenate([part.truth.ravel() for part in parts]),
        np.concatenate([part.score.ravel() for part in parts]),
        {
            way: np.concatenate([part.ways[way].ravel() for part in parts])
            for way in (*MARKS, HALF)
        },
    )


def _agreement(runs: list[_Run], kind: str) -> Agreement:
    chosen = np.concatenate([run.certain[kind] for run in runs])
    first, second = np.concatenate([run.plain[kind] for run in runs], axis=1)[:, chosen]
    tool = {
        way: np.concatenate([run.seconds[kind].ways[way] for run in runs])[chosen]
        for way in (*MARKS, HALF)
    }
    return Agreement(
        int(chosen.sum()),
        kappa(first, second),
        {way: (kappa(mark, first), kappa(mark, second)) for way, mark in tool.items()},
    )


def _cerebral(parts: list[tuple[dict[str, Bools], dict[str, _Called]]]) -> Cerebral:
    counts: dict[str, int] = {}
    flagged: Flagged = {}
    for kind in KIND_NAMES:
        chosen = np.concatenate([masks[kind].ravel() for masks, _ in parts])
        counts[kind] = int(chosen.sum())
        flagged[kind] = {}
        for way in (*MARKS, HALF):
            hits = np.concatenate([called[kind].ways[way].ravel() for _, called in parts])
            flagged[kind][way] = share(hits[chosen])
    return Cerebral(counts, flagged)
