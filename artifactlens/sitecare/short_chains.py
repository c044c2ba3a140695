"""Noise in chains of three or four electrodes, such as the midline of a double banana."""

from __future__ import annotations

import numpy as np

from artifactlens.epochs import median_of_known
from artifactlens.sitecare.contact import (
    APART_DB,
    EYE_SHARE,
    MUSCLE_SHARE,
    PLAIN_DB,
    PLAIN_UV,
)
from artifactlens.sitecare.evidence import FEWEST_ELSEWHERE, SMALL_CHAIN, Evidence, Finding

SMALL_CHAIN_SHARE = 0.58
"""Share of a short chain's power at one of its sites: two thirds if it alone is noisy."""


def short_chains(evidence: Evidence) -> list[Finding]:
    """Noise in chains of three or four, such as Fz-Cz-Pz of a double banana.

    In a frame of mean zero, noise of one electrode of three is there with two thirds, and
    with one third at each of the other two: four fifths, nearly, of the power is its own.
    Which of them it is stays a suspicion.
    """
    log, frame = evidence.log, evidence.frame
    scalp = np.flatnonzero(~evidence.references())
    large = evidence.company()[scalp] >= SMALL_CHAIN
    sites, others = scalp[~large], scalp[large]
    variance = np.einsum("bss->bs", log.covariance.astype(np.float64))
    if len(others) < FEWEST_ELSEWHERE:
        return []
    usual = median_of_known(variance[:, others].T).astype(np.float64)
    eyes = log.mean(evidence.marked("eye"))
    muscle = log.mean(evidence.marked("muscle"))
    found = []
    for number in np.unique(frame.chain[sites]):
        rows = sites[frame.chain[sites] == number]
        if len(rows) < 3:
            continue
        part = variance[:, rows]
        with np.errstate(divide="ignore", invalid="ignore"):
            share = part / part.sum(axis=1, keepdims=True)
            above = 10 * np.log10(part / usual[:, None])
        calm = (eyes[:, rows].max(axis=1) < EYE_SHARE) & (
            muscle[:, rows].max(axis=1) < MUSCLE_SHARE
        )
        known = np.isfinite(share) & np.isfinite(above) & calm[:, None]
        with np.errstate(invalid="ignore"):
            held = known & (share >= SMALL_CHAIN_SHARE) & (above >= APART_DB)
            held &= part >= PLAIN_UV**2
        for index in np.flatnonzero(held.any(axis=0)):
            when = held[:, index]
            uv = float(np.median(np.sqrt(part[when, index])))
            decibel = float(np.median(above[when, index]))
            names = ", ".join(frame.sites[row] for row in rows)
            found.append(
                Finding(
                    cause="site",
                    sign="apart",
                    rows=(int(rows[index]),),
                    held=when,
                    known=known[:, index],
                    plain=decibel >= PLAIN_DB,
                    weight=decibel * float(when.mean()),
                    reason=(
                        f"{uv:.0f} uV more than elsewhere in the chain {names}, most of it "
                        "here; so short a chain cannot tell for sure which site it is"
                    ),
                )
            )
    return found
