"""Where a technologist noted cerebral patterns: what of it a model flags.

The notes of ``clinical_absence`` are what the technologist typed while recording: onsets,
seconds late, not exhaustive. A flag inside a window is a reason to look, no error by
itself: people blink and clench during a seizure too.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from artifactlens.curves import Model
from artifactlens.flagging import MARKS
from artifactlens.kinds import KIND_NAMES
from artifactlens.pipeline import Measured
from artifactlens.training.corpora.absence import (
    CALIBRATION_SECONDS,
    SEIZURES,
    Note,
    documented_windows,
)
from artifactlens.training.corpora.spans import Span, within
from artifactlens.training.realchecks.agreement import share
from artifactlens.training.realchecks.judged import Judged, judge_recording

ELSEWHERE = "all other seconds"


@dataclass(frozen=True, slots=True)
class FlagInside:
    """A flag that touches a window, for a person to look at."""

    pattern: str
    onset: float
    end: float
    kind: str
    sites: tuple[str, ...]
    probability: float
    sentence: str


@dataclass(frozen=True, slots=True)
class PatternSeconds:
    """The seconds of one documented pattern and the share of them flagged.

    ``shares``: kind (and "any"), then operating point; ``cells`` the same for the cells of
    these seconds (one site in one second): a flag at one ear touches a second, not a head.
    ``own`` is the share of cells whose own score reaches the operating point: a flag gives
    all its sites the whole of its time.
    """

    pattern: str
    seconds: int
    shares: dict[str, dict[str, float]]
    cells: dict[str, dict[str, float]]
    own: dict[str, dict[str, float]]


@dataclass(frozen=True, slots=True)
class LookalikeCheck:
    """All documented patterns and, last, all other seconds; ``flags`` per operating point."""

    patterns: tuple[PatternSeconds, ...]
    flags: dict[str, tuple[FlagInside, ...]]

    def text(self) -> str:
        """The check in plain lines, every flag with its sentence."""
        return "\n".join([self.shares_text(), *self._flag_lines()])

    def shares_text(self) -> str:
        """The shares flagged, without the flags themselves."""
        lines = []
        for entry in self.patterns:
            lines.append(f"{entry.pattern}: {entry.seconds} s, flagged {'/'.join(MARKS)}")
            lines += [
                f"  {what}: "
                + "; ".join(
                    f"{kind} " + "/".join(f"{by_mark[mark]:.3f}" for mark in MARKS)
                    for kind, by_mark in shares.items()
                )
                for what, shares in (
                    ("seconds", entry.shares),
                    ("cells", entry.cells),
                    ("cells by own score", entry.own),
                )
            ]
        return "\n".join(lines)

    def _flag_lines(self) -> list[str]:
        lines = []
        for mark, flags in self.flags.items():
            lines.append(f"flags inside at {mark}: {len(flags)}")
            lines += [
                f"  {flag.onset:.2f}-{flag.end:.2f} s {flag.pattern}: {flag.kind} at "
                f"{', '.join(flag.sites)}, {flag.probability:.2f}. {flag.sentence}"
                for flag in flags
            ]
        return lines


def pattern_masks(
    windows: dict[str, list[Span]], onset: NDArray[np.float64]
) -> dict[str, NDArray[np.bool_]]:
    """Seconds of every pattern, and of none after the calibration, each (n_epochs,).

    Seconds of a seizure count as no other pattern: the slowing surrounds the seizures.
    """
    masks = {pattern: within(spans, onset) for pattern, spans in windows.items()}
    seizure = masks[SEIZURES]
    masks = {
        pattern: mask if mask is seizure else mask & ~seizure
        for pattern, mask in masks.items()
    }
    documented = np.any(list(masks.values()), axis=0)
    return {**masks, ELSEWHERE: ~documented & (onset >= CALIBRATION_SECONDS)}


def lookalike_check(
    model: Model,
    measured: Measured,
    notes: Sequence[Note],
    judged: Judged | None = None,
) -> LookalikeCheck:
    """Share of documented seconds flagged, and the flags inside.

    Parameters
    ----------
    model : Model
    measured : Measured
        Of ``clinical_absence/absence.edf``.
    notes : sequence of (seconds, text)
    judged : Judged, optional
        The same recording judged by the same model, if it is at hand.
    """
    seen = judge_recording(measured, model) if judged is None else judged
    masks = pattern_masks(documented_windows(notes), seen.onset)
    flagged = _with_any(
        {kind: {m: seen.flagged_cells(m, kind) for m in MARKS} for kind in KIND_NAMES}
    )
    own = _with_any(
        {kind: {m: seen.reached_cells(m, kind) for m in MARKS} for kind in KIND_NAMES}
    )
    return LookalikeCheck(
        tuple(
            PatternSeconds(
                pattern,
                int(mask.sum()),
                _shares(flagged, mask, whole_seconds=True),
                _shares(flagged, mask, whole_seconds=False),
                _shares(own, mask, whole_seconds=False),
            )
            for pattern, mask in masks.items()
        ),
        {mark: _inside(seen, mark, masks) for mark in MARKS},
    )


Cells = dict[str, dict[str, NDArray[np.bool_]]]
"""Kind, then operating point, to marked cells (n_epochs, n_sites)."""


def _with_any(cells: Cells) -> Cells:
    together = {
        mark: np.any([cells[kind][mark] for kind in KIND_NAMES], axis=0) for mark in MARKS
    }
    return {**cells, "any": together}


def _shares(
    cells: Cells,
    mask: NDArray[np.bool_],
    *,
    whole_seconds: bool,
) -> dict[str, dict[str, float]]:
    return {
        kind: {
            mark: share(np.asarray(hits[mask].any(axis=1) if whole_seconds else hits[mask]))
            for mark, hits in by_mark.items()
        }
        for kind, by_mark in cells.items()
    }


def _inside(
    seen: Judged, mark: str, masks: dict[str, NDArray[np.bool_]]
) -> tuple[FlagInside, ...]:
    found = []
    for flag in seen.flags[mark]:
        seconds = (seen.onset < flag.end) & (seen.onset + 1 > flag.onset)
        names = [
            pattern
            for pattern, mask in masks.items()
            if pattern != ELSEWHERE and (mask & seconds).any()
        ]
        if names:
            found.append(
                FlagInside(
                    ", ".join(names), flag.onset, flag.end, flag.kind, flag.sites,
                    flag.probability, flag.sentence,
                )
            )  # fmt: skip
    return tuple(found)
