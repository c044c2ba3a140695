"""From scores to flags: segments, their evidence, their sentences."""

from __future__ import annotations

import dataclasses
import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from artifactlens.curves import logistic
from artifactlens.epochs import median_of_known
from artifactlens.evidence import explain, quiet_values, sentence, values_at
from artifactlens.kinds import KIND_NAMES
from artifactlens.lookalikes import look_alike
from artifactlens.result import Assessment, Flag, finite_or_none
from artifactlens.segments import Segments, find_segments, refine, union_seconds

if TYPE_CHECKING:
    from artifactlens.curves import Model
    from artifactlens.epochs import EpochGrid
    from artifactlens.features import FeatureTable
    from artifactlens.frames import Frame
    from artifactlens.survey import Conditions

MARKS = ("sure", "doubtful")

POP_TAIL_SECONDS = (0.3, 2.0)
"""Bounds of how long a pop is taken to last; three time constants lie between."""


@dataclass(frozen=True, slots=True)
class Judgement:
    """Scores of a whole recording.

    ``score`` log-odds and ``probability`` float32, shape (n_kinds, n_epochs, n_sites), NaN
    where not assessable; ``usual`` per feature (n_sites,); ``quiet`` (n_epochs, n_sites).
    """

    score: NDArray[np.float64]
    probability: NDArray[np.float32]
    usual: dict[str, NDArray[np.float32]]
    quiet: NDArray[np.bool_]


def judge(
    model: Model, table: FeatureTable, frame: Frame, assessable: tuple[Assessment, ...]
) -> Judgement:
    """Score every epoch and site."""
    score = model.scores(table)
    absent = np.isnan(table.values[0])
    score[:, absent] = np.nan
    _clear_reference(score, table, frame)
    for row, entry in enumerate(assessable):
        if entry.verdict == "no":
            score[row] = np.nan
    probability = logistic(score).astype(np.float32)
    lower = np.array([head.doubtful for head in model.heads])[:, None, None]
    quiet = ~(probability >= lower).any(axis=0) & ~absent
    return Judgement(score, probability, quiet_values(table, quiet), quiet)


REFERENCE_SIZE = {"muscle": "beta_power", "pop": "step", "mains": "mains_size"}
"""What must be larger at the reference than at every site for the reference to be blamed."""


def _clear_reference(score: NDArray[np.float64], table: FeatureTable, frame: Frame) -> None:
    """Take back what a reference electrode cannot be blamed for.

    The reference's row is the mean of all channels turned over: it also shows, faintly, what
    a few sites show strongly. Only what is largest there comes from there. Eye movements are
    judged at a reference only if its position is known.
    """
    rows = np.flatnonzero([role == "reference" for role in frame.roles])
    if not len(rows):
        return
    sites = np.flatnonzero([role != "reference" for role in frame.roles])
    unplaced = rows[~np.isfinite(frame.positions[rows]).all(axis=1)]
    score[KIND_NAMES.index("eye"), :, unplaced] = np.nan
    for kind, feature in REFERENCE_SIZE.items():
        size = table.column(feature)
        highest = np.fmax.reduce(size[:, sites], axis=1)
        for row in rows:
            score[KIND_NAMES.index(kind), ~(size[:, row] > highest), row] = np.nan


def make_flags(
    model: Model,
    judgement: Judgement,
    table: FeatureTable,
    grid: EpochGrid,
    frame: Frame,
    conditions: Conditions,
    mark: str,
    end: float,
) -> tuple[Flag, ...]:
    """All flags of a recording in order of onset.

    Parameters
    ----------
    mark : str
        "sure" marks little and surely, "doubtful" all that is doubtful.
    end : float
        End of the recording, seconds: no flag reaches beyond.
    """
    pace = table.pace.mean(axis=2, dtype=np.float32)
    quiet_pace = median_of_known(np.where(judgement.quiet, pace, np.float32("nan")))
    tau = 1 / (2 * math.pi * conditions.high_pass) if conditions.high_pass else 0.5
    tail = float(np.clip(3 * tau, *POP_TAIL_SECONDS))
    flags: list[Flag] = []
    for row, head in enumerate(model.heads):
        events = find_segments(
            head.kind,
            judgement.probability[row],
            grid,
            table.step_at,
            enter=head.limit(mark),
            stay=head.doubtful,
        )
        times = refine(head.kind, events, grid, table, quiet_pace, tail)
        flags.extend(
            _flags_of(model, row, events, times, judgement, table, frame, conditions, end)
        )
    flags.sort(key=lambda flag: (flag.onset, KIND_NAMES.index(flag.kind), flag.sites))
    return tuple(
        dataclasses.replace(flag, number=number)
        for number, flag in enumerate(flags, start=1)
    )


def _flags_of(
    model: Model,
    row: int,
    events: Segments,
    times: tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.float64]],
    judgement: Judgement,
    table: FeatureTable,
    frame: Frame,
    conditions: Conditions,
    end: float,
) -> list[Flag]:
    kind = KIND_NAMES[row]
    measured = values_at(table, events.peak_epoch, events.peak_site)
    parts = explain(model, kind, measured, judgement.usual, events.peak_site)
    n_others = len(frame.sites) - 1
    flags = []
    for event, sites in enumerate(events.sites):
        epoch, site = int(events.peak_epoch[event]), int(events.peak_site[event])
        values = {name: finite_or_none(column[event]) for name, column in measured.items()}
        at_reference = frame.roles[site] == "reference"
        if at_reference:
            sites = tuple(s for s in sites if frame.roles[s] == "reference")
        names = tuple(frame.sites[index] for index in sites)
        score = model.heads[row].base + math.fsum(part.log_odds for part in parts[event])
        onset = round(float(times[0][event]), 2)
        finish = round(min(float(times[1][event]), end), 2)
        spread = values["spread"]
        flags.append(
            Flag(
                number=0,
                onset=onset,
                duration=round(max(finish - onset, 0.01), 2),
                kind=kind,
                sites=names,
                probability=float(judgement.probability[row, epoch, site]),
                score=score,
                base=model.heads[row].base,
                strongest_site=frame.sites[site],
                moment=round(min(max(float(times[2][event]), onset), finish), 3),
                contributions=parts[event],
                look_alike=look_alike(kind, values),
                sentence=sentence(
                    kind,
                    names,
                    frame.sites[site],
                    values,
                    parts[event],
                    at_reference=at_reference,
                    line_frequency=conditions.line_frequency,
                    field_count=1 if spread is None else round(spread * n_others) + 1,
                ),
            )
        )
    return flags


def pop_moments(
    model: Model,
    probability: NDArray[np.floating],
    step_at: NDArray[np.floating],
    grid: EpochGrid,
) -> tuple[tuple[float, tuple[int, ...]], ...]:
    """Moment (seconds) and rows of every doubtful pop, whatever operating point marks flags.

    An electrode is judged by several of them, so that one that is none does little harm.

    ``probability`` (n_kinds, n_epochs, n_sites), ``step_at`` (n_epochs, n_sites).
    """
    row = KIND_NAMES.index("pop")
    head = model.heads[row]
    events = find_segments(
        "pop", probability[row], grid, step_at, enter=head.doubtful, stay=head.doubtful
    )
    at = grid.onset[events.peak_epoch] + step_at[events.peak_epoch, events.peak_site]
    return tuple(zip((float(moment) for moment in at), events.sites, strict=True))


def touched_seconds(flags: tuple[Flag, ...], end: float) -> dict[str, float]:
    """Seconds under at least one flag, per kind and for "any"."""
    onset = np.array([flag.onset for flag in flags])
    finish = np.array([flag.end for flag in flags])
    kinds = np.array([flag.kind for flag in flags])
    touched = {
        kind: round(union_seconds(onset[kinds == kind], finish[kinds == kind], end), 2)
        for kind in KIND_NAMES
    }
    touched["any"] = round(union_seconds(onset, finish, end), 2)
    return touched
