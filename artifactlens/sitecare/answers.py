"""The answers to a biological calibration, as findings like any other."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from artifactlens.sitecare.evidence import Finding

if TYPE_CHECKING:
    from artifactlens.frames import Frame
    from artifactlens.sitecare.biocal import Calibration
    from artifactlens.sitecare.signs import SignLog


def answer_findings(
    calibration: Calibration, frame: Frame, log: SignLog
) -> tuple[Finding, ...]:
    """What missing and mirrored answers point to; they stand until the test is done again."""
    row = {name: index for index, name in enumerate(frame.sites)}
    found = []
    for fault in calibration.faults:
        held = np.zeros(len(log), dtype=bool)
        for onset, end in fault.stretches:
            held |= (log.begin < end) & (log.end > onset)
        found.append(
            Finding(
                cause=fault.cause,
                sign=fault.sign,
                rows=tuple(row[name] for name in fault.sites),
                held=held,
                known=held,
                plain=fault.plain,
                weight=float(len(fault.stretches)),
                reason=fault.reason,
                standing=True,
                checks=fault.checks,
            )
        )
    return tuple(found)
