"""Sites without a signal: flat, clipped, or with samples missing."""

from __future__ import annotations

import numpy as np

from artifactlens.sitecare.evidence import Evidence, Finding

LOST_SHARE = 0.3
CLIPPED_SHARE = 0.1
"""Part of a stretch from which it counts."""

ALL_AT_ONCE = 0.5
"""Where this share of the sites is lost together, it is not the sites."""


def losses(evidence: Evidence) -> list[Finding]:
    """Flat, clipped and missing sites; one finding where most are lost together."""
    log = evidence.log
    reference = evidence.references()
    signs = log.signs
    found = []
    for sign, fault, least in (
        ("flat", signs.flat, LOST_SHARE),
        ("lost", signs.missing, LOST_SHARE),
        ("clipped", signs.clipped, CLIPPED_SHARE),
    ):
        if not fault.any():
            continue
        share = log.mean(evidence.site_faults(fault))
        share[:, reference] = 0
        held = share >= least
        together = held.sum(axis=1) > ALL_AT_ONCE * (~reference).sum()
        if together.any():
            found.append(
                Finding(
                    cause="ground",
                    sign=sign,
                    rows=(),
                    held=together,
                    known=np.ones(len(log), dtype=bool),
                    plain=True,
                    weight=float(together.mean()),
                    reason=f"{_WORDS[sign]} at most sites at once",
                )
            )
        held &= ~together[:, None]
        for row in np.flatnonzero(held.any(axis=0)):
            part = float(share[~together, row].mean())
            found.append(
                Finding(
                    cause="site",
                    sign=sign,
                    rows=(int(row),),
                    held=held[:, row],
                    known=~together,
                    plain=True,
                    weight=30.0 * part,
                    reason=f"{_WORDS[sign]} for {100 * part:.0f} % of the time",
                )
            )
    return found


_WORDS = {"flat": "flat", "lost": "samples missing", "clipped": "clipped"}
