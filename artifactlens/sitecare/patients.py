"""What the patient does: muscle and eyes ask for a word, not for paste."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from artifactlens.sitecare.evidence import Evidence, Finding

LEAST_SHARE = 0.2
"""Share of the seconds from which the patient is asked."""


def patients(evidence: Evidence) -> list[Finding]:
    """Muscle by region of the head, and eyes."""
    log = evidence.log
    reference = evidence.references()
    found = []
    muscle = evidence.marked("muscle")
    muscle[:, reference] = False
    if evidence.judged("muscle") and len(log):
        seconds = np.asarray(muscle.any(axis=1))
        held = log.mean(seconds) >= LEAST_SHARE
        share = float(seconds.mean())
        if share >= LEAST_SHARE:
            per_site = muscle.mean(axis=0)
            rows = np.argsort(-per_site, kind="stable")
            rows = rows[per_site[rows] >= max(0.5 * per_site.max(), 0.05)][:6]
            where, word = _muscle_words(evidence, rows)
            found.append(
                Finding(
                    cause="patient",
                    sign="muscle",
                    rows=tuple(int(row) for row in rows),
                    held=held,
                    known=np.ones(len(log), dtype=bool),
                    plain=True,
                    weight=share,
                    reason=f"marked as muscle {where} in {100 * share:.0f} of 100 seconds, {word}",
                )
            )
    eye = evidence.marked("eye", doubtful=False)
    eye[:, reference] = False
    if evidence.judged("eye") and len(log):
        seconds = np.asarray(eye.any(axis=1))
        share = float(seconds.mean())
        if share >= LEAST_SHARE:
            per_site = eye.mean(axis=0)
            rows = np.argsort(-per_site, kind="stable")[:4]
            found.append(
                Finding(
                    cause="patient",
                    sign="eye",
                    rows=tuple(int(row) for row in rows if per_site[row] > 0),
                    held=log.mean(seconds) >= LEAST_SHARE,
                    known=np.ones(len(log), dtype=bool),
                    plain=True,
                    weight=share,
                    reason=f"marked as eye movement in {100 * share:.0f} of 100 seconds",
                )
            )
    return found


def _muscle_words(evidence: Evidence, rows: NDArray[np.intp]) -> tuple[str, str]:
    """Where the muscle is, and what it is consistent with, by the place of the sites."""
    places = evidence.frame.positions[rows]
    places = places[np.isfinite(places).all(axis=1)]
    if not len(places):
        return "at some sites", "consistent with jaw, brow or neck"
    direction = places / np.linalg.norm(places, axis=1, keepdims=True)
    x, y = np.median(np.abs(direction[:, 0])), np.median(direction[:, 1])
    if y > 0.6:
        return "at the front", "consistent with the brow"
    if y < -0.5:
        return "at the back", "consistent with the neck or the position of the head"
    if x > 0.6:
        return "at the temples", "consistent with the jaw"
    return "at many sites", "consistent with jaw, brow or neck"
