"""What a watch says of its sites and of the stream, in the words of the main job."""

from __future__ import annotations

import dataclasses
from typing import TYPE_CHECKING

import numpy as np

from artifactlens.features import mains_is_carried
from artifactlens.result import RecordingFacts, SiteEvidence, finite_or_none
from artifactlens.sitecare.shares import site_evidence
from artifactlens.sitecare.verdicts import site_verdicts

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from artifactlens.advice import Advice
    from artifactlens.curves import Model
    from artifactlens.features import FeatureTable
    from artifactlens.frames import Frame
    from artifactlens.live.stream_header import StreamFacts
    from artifactlens.result import Assessment
    from artifactlens.sitecare.evidence import Evidence
    from artifactlens.survey import Conditions

FAULTS = ("flat", "missing", "clipped")


def site_table(
    evidence: Evidence,
    advice: tuple[Advice, ...],
    model: Model,
    table: FeatureTable,
    assessable: tuple[Assessment, ...],
    impedances_kohm: NDArray[np.float64],
) -> tuple[SiteEvidence, ...]:
    """A row for each site of the last minutes; ``impedances_kohm`` (n_sites,)."""
    verdicts, reasons = site_verdicts(evidence, advice)
    signs = evidence.log.signs
    rows = site_evidence(
        model,
        np.ascontiguousarray(evidence.probability),
        table,
        evidence.frame,
        assessable,
        (),
        {name: getattr(signs, name).mean(axis=0) for name in FAULTS},
        "sure",
    )
    return tuple(
        dataclasses.replace(
            row,
            verdict=verdict,
            why=why,
            impedance_kohm=finite_or_none(kohm),
            pops_per_minute=None,  # counted from flags, which a watch does not make
        )
        for row, verdict, why, kohm in zip(
            rows, verdicts, reasons, impedances_kohm, strict=True
        )
    )


def stream_facts(
    layout: StreamFacts, frame: Frame, conditions: Conditions, seconds: float
) -> RecordingFacts:
    """The stream as a recording of so many seconds; breaks are not kept."""
    measured = conditions.low_pass_source != "sampling rate"
    return RecordingFacts(
        name=layout.name,
        format="LSL stream",
        duration=round(seconds, 3),
        sampling_rate=layout.sampling_rate,
        montage=frame.montage,
        high_pass=conditions.high_pass,
        low_pass=conditions.low_pass if measured else None,
        notch=conditions.notch,
        line_frequency=conditions.line_frequency if mains_is_carried(conditions) else None,
        gaps=(),
        set_aside=(*layout.set_aside, *frame.set_aside),
        annotation_onsets=(),
        notes=frame.notes,
    )
