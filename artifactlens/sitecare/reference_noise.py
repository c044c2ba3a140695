"""A reference whose own disturbance fills every channel alike."""

from __future__ import annotations

import numpy as np

from artifactlens.epochs import median_of_known
from artifactlens.sitecare.contact import MUSCLE_SHARE, NOISE_OVER_FAST
from artifactlens.sitecare.evidence import Evidence, Finding

REFERENCE_DB, REFERENCE_PLAIN_DB = 8.0, 9.0
"""How far the reference's row exceeds the median site."""

REFERENCE_PLAIN_SITES = 8
"""Fewer sites may all lie in one region, so that what they share comes from the head."""

REFERENCE_BETA_DB, REFERENCE_BETA_PLAIN_DB = 4.5, 6.0
"""The same of its power at 18-30 Hz, where the mean of all channels is quiet: at most 3 dB in
the recordings at hand."""


def noisy_references(evidence: Evidence) -> list[Finding]:
    """References that are louder than the sites, as a whole or at 18-30 Hz."""
    sites = np.flatnonzero(~evidence.references())
    log, frame = evidence.log, evidence.frame
    rows = np.flatnonzero(evidence.references())
    variance = np.einsum("bss->bs", log.covariance.astype(np.float64))
    beta, fast = log.mean(evidence.beta_power), log.mean(evidence.fast_uv())
    muscle = log.mean(evidence.marked("muscle"))
    found = []
    for row in rows:
        mates = sites[frame.chain[sites] == frame.chain[row]]
        if len(mates) < 4:
            continue
        usual = median_of_known(variance[:, mates].T).astype(np.float64)
        with np.errstate(divide="ignore", invalid="ignore"):
            above = 10 * np.log10(variance[:, row] / usual)
        known = np.isfinite(above)
        over = beta[:, row] - median_of_known(beta[:, mates].T).astype(np.float64)
        loud = (muscle[:, row] < MUSCLE_SHARE) | (
            variance[:, row] > (NOISE_OVER_FAST * fast[:, row]) ** 2
        )
        with np.errstate(invalid="ignore"):
            held = known & ((above >= REFERENCE_DB) | (loud & (over >= REFERENCE_BETA_DB)))
        if not held.any():
            continue
        beyond = float(median_of_known(over[held]))
        decibel = float(np.median(above[held]))
        uv = float(np.median(np.sqrt(variance[held, row])))
        found.append(
            Finding(
                cause="reference",
                sign="apart",
                rows=(int(row),),
                held=held,
                known=known,
                plain=(decibel >= REFERENCE_PLAIN_DB or beyond >= REFERENCE_BETA_PLAIN_DB)
                and len(mates) >= REFERENCE_PLAIN_SITES,
                weight=decibel * float(held.mean()),
                reason=(
                    f"{uv:.0f} uV in every channel alike, {10 ** (decibel / 20):.1f} times "
                    "what the sites differ by"
                    if decibel >= REFERENCE_DB
                    else f"{10 ** (beyond / 20):.1f} times the usual site's amplitude at "
                    "18-30 Hz, in every channel alike"
                ),
            )
        )
    return found
