"""Whether the sites are fit to start, from the first two minutes."""

from __future__ import annotations

from typing import TYPE_CHECKING

from artifactlens.result import Setup
from artifactlens.sitecare.verdicts import advise, site_verdicts

if TYPE_CHECKING:
    from artifactlens.sitecare.evidence import Evidence

SETUP_SECONDS = 120.0

LEAST_SECONDS = 20.0
"""Of less signal than this nothing is said."""


def setup_check(evidence: Evidence, responses: tuple[str, ...] = ()) -> Setup | None:
    """What can be said of every site from the start alone; None if there is too little.

    A site is unfit if it is to be prepared again, a reference or ground if it is to be
    looked at before anything else.

    Parameters
    ----------
    evidence : Evidence
        Of the whole recording, or of a stream so far.
    responses : tuple of str
        What the biological calibration showed, a sentence each.
    """
    start = evidence.first_seconds(SETUP_SECONDS)
    seconds = float(len(start.log.onset))
    if seconds < LEAST_SECONDS:
        return None
    advice = advise(start)
    verdicts, _ = site_verdicts(start, advice)
    unfit: dict[str, str] = {}
    for entry in advice:
        if entry.verdict in ("re-prep", "check"):
            for name in entry.sites or (entry.subject,):
                unfit.setdefault(name, entry.reason)
    frame = evidence.frame
    # The reference is told of only if something is wrong with it: it is no site.
    told = {
        name: verdict
        for name, verdict, role in zip(frame.sites, verdicts, frame.roles, strict=True)
        if name not in unfit and role != "reference"
    }
    return Setup(
        seconds=seconds,
        fit=tuple(name for name, verdict in told.items() if verdict != "cannot tell"),
        unfit=tuple(unfit.items()),
        cannot_tell=tuple(
            name for name, verdict in told.items() if verdict == "cannot tell"
        ),
        responses=responses,
    )
