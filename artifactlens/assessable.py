"""Whether a recording lets each kind be judged at all, and if not, why not."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from artifactlens.features import mains_is_carried
from artifactlens.features.spectral import LINE_MARGIN_HZ
from artifactlens.kinds import KIND_NAMES
from artifactlens.result import Assessment

if TYPE_CHECKING:
    from artifactlens.features.spatial import EyeLeads
    from artifactlens.frames import Frame
    from artifactlens.survey import Conditions

FEW_SECONDS = 10
FEW_SITES = 4
MUSCLE_FULL_HZ = 70.0
MUSCLE_LEAST_HZ = 30.0
POP_LEAST_RATE = 100.0

_WORST = {"no": 2, "limited": 1, "yes": 0}


def assess(
    frame: Frame,
    leads: EyeLeads,
    conditions: Conditions,
    seconds: float,
    units_implausible: bool,
) -> tuple[Assessment, ...]:
    """One assessment per kind, in the order of ``KIND_NAMES``.

    Parameters
    ----------
    frame, leads, conditions
        The recording's sites, its eye leads and what the survey found.
    seconds : float
        Seconds in whole epochs.
    units_implausible : bool
        Whether the median amplitude is not one of scalp EEG in microvolt.
    """
    n_sites = sum(role != "reference" for role in frame.roles)
    findings = {
        "eye": _eye(leads, n_sites),
        "muscle": _muscle(conditions),
        "pop": _pop(frame, conditions, n_sites),
        "mains": _mains(conditions),
    }
    general = []
    if seconds < FEW_SECONDS:
        general.append(
            ("limited", f"only {seconds:g} s: too short to know what is usual here")
        )
    if units_implausible:
        general.append(
            ("limited", "the amplitudes are not those of scalp EEG in microvolt")
        )
    return tuple(_summary(kind, findings[kind] + general) for kind in KIND_NAMES)


def _summary(kind: str, found: list[tuple[str, str]]) -> Assessment:
    if not found:
        return Assessment(kind, "yes", "")
    verdict = max((entry[0] for entry in found), key=_WORST.__getitem__)
    reasons = [
        reason for severity, reason in found if severity == verdict or verdict != "no"
    ]
    return Assessment(kind, verdict, "; ".join(reasons))


def _eye(leads: EyeLeads, n_sites: int) -> list[tuple[str, str]]:
    found = []
    if not leads.front.any():
        found.append(("no", "no site over the forehead with a known position"))
    elif not leads.behind.any():
        found.append(("no", "no site behind the vertex to compare the forehead with"))
    elif leads.front_row != "frontal poles":
        found.append(("limited", "no frontal pole: the nearest frontal sites serve"))
    if leads.front.any() and not (leads.left.any() and leads.right.any()):
        found.append(("limited", "no pair of temples: lateral gaze is judged poorly"))
    if n_sites < FEW_SITES:
        found.append(("limited", f"only {n_sites} sites"))
    return found


def _muscle(conditions: Conditions) -> list[tuple[str, str]]:
    top = conditions.low_pass
    words = _band_words(conditions)
    if top < MUSCLE_LEAST_HZ:
        return [("no", f"{words}: muscle lies above")]
    if top < MUSCLE_FULL_HZ:
        return [("limited", f"{words}: weak muscle cannot be told from beta activity")]
    return []


def _band_words(conditions: Conditions) -> str:
    if conditions.low_pass_source == "sampling rate":
        return (
            f"sampled at {conditions.sampling_rate:g} Hz, which carries "
            f"{conditions.low_pass:g} Hz at most"
        )
    source = "by the header" if conditions.low_pass_source == "header" else "as measured"
    return f"low-pass at {conditions.low_pass:g} Hz {source}"


def _pop(frame: Frame, conditions: Conditions, n_sites: int) -> list[tuple[str, str]]:
    found = []
    if conditions.sampling_rate < POP_LEAST_RATE:
        found.append(
            (
                "no",
                f"sampled at {conditions.sampling_rate:g} Hz: too slow to see a steep rise",
            )
        )
    if n_sites < FEW_SITES:
        found.append(
            ("limited", f"only {n_sites} sites: one electrode cannot be told alone")
        )
    if not np.isfinite(frame.positions).any():
        found.append(("limited", "no site positions: all other sites serve as neighbours"))
    return found


def _mains(conditions: Conditions) -> list[tuple[str, str]]:
    line = 60 if conditions.line_frequency > 55 else 50
    if mains_is_carried(conditions):
        return []
    if line + LINE_MARGIN_HZ > conditions.sampling_rate / 2:
        return [
            (
                "no",
                f"sampled at {conditions.sampling_rate:g} Hz: {line} Hz is above or too near "
                f"its limit of {conditions.sampling_rate / 2:g} Hz",
            )
        ]
    if conditions.notch is not None:
        source = "by the header" if conditions.notch_source == "header" else "as measured"
        return [("no", f"notch at {conditions.notch:g} Hz {source}")]
    return [("no", f"{_band_words(conditions)}, below the mains")]
