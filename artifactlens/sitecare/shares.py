"""What was measured at every electrode site over the recording: one row per site."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from artifactlens.epochs import median_of_known
from artifactlens.kinds import KIND_NAMES
from artifactlens.result import Assessment, Flag, SiteEvidence, finite_or_none

if TYPE_CHECKING:
    from artifactlens.curves import Model
    from artifactlens.features import FeatureTable
    from artifactlens.frames import Frame

FAULT_SHARE = 0.02
"""A fault is named when it holds for more than this share of the recording."""


def site_evidence(
    model: Model,
    probability: NDArray[np.float32],
    table: FeatureTable,
    frame: Frame,
    assessable: tuple[Assessment, ...],
    flags: tuple[Flag, ...],
    faults: dict[str, NDArray[np.float64]],
    mark: str,
) -> tuple[SiteEvidence, ...]:
    """One row per site, in the order of the frame.

    Parameters
    ----------
    probability : array, shape (n_kinds, n_epochs, n_sites)
        NaN where not judged.
    faults : dict of array, shape (n_used_channels,)
        Share of epochs in which a channel is "flat", "missing" or "clipped".
    mark : str
        The operating point at which epochs count as flagged.
    """
    judged = ~np.isnan(table.values[0])
    seconds = judged.sum(axis=0)
    minutes = np.maximum(seconds, 1) / 60
    shares = {}
    for row, (head, entry) in enumerate(zip(model.heads, assessable, strict=True)):
        marked = (probability[row] >= head.limit(mark)).sum(axis=0)
        shares[head.kind] = (
            None if entry.verdict == "no" else marked / np.maximum(seconds, 1)
        )
    pops = {name: 0 for name in frame.sites}
    for flag in flags:
        if flag.kind == "pop":
            for name in flag.sites:
                pops[name] += 1
    medians = {
        name: median_of_known(table.column(name))
        for name in ("mains_size", "mains_ratio", "isolation")
    }
    worst = _site_faults(frame, faults)
    pop_judged = shares["pop"] is not None
    return tuple(
        SiteEvidence(
            site=name,
            channel=frame.channel[site],
            canonical=frame.canonical[site],
            role=frame.roles[site],
            position=_position(frame.positions[site]),
            seconds_judged=float(seconds[site]),
            share={
                kind: None
                if (share := shares[kind]) is None or not seconds[site]
                else round(float(share[site]), 6)
                for kind in KIND_NAMES
            },
            pops_per_minute=round(pops[name] / minutes[site], 4) if pop_judged else None,
            mains_uv=finite_or_none(round(float(medians["mains_size"][site]), 3)),
            mains_db=finite_or_none(round(float(medians["mains_ratio"][site]), 2)),
            isolation_db=finite_or_none(round(float(medians["isolation"][site]), 2)),
            fault=_fault_words({name: share[site] for name, share in worst.items()}),
        )
        for site, name in enumerate(frame.sites)
    )


def _site_faults(
    frame: Frame, faults: dict[str, NDArray[np.float64]]
) -> dict[str, NDArray[np.float64]]:
    """Share of the recording in which *all* channels of a site have the fault, (n_sites,).

    One faulty derivation does not tell which of its two electrodes is to blame; where a
    site's other derivations are sound, neither is.
    """
    touches = frame.incidence != 0
    if frame.montage == "average":
        touches = frame.incidence > 0.5
    return {
        name: np.where(touches, share[:, None], np.inf).min(axis=0, initial=np.inf)
        for name, share in faults.items()
    }


def _position(position: NDArray[np.float64]) -> tuple[float, float, float] | None:
    if not np.isfinite(position).all():
        return None
    x, y, z = (round(float(value), 4) for value in position)
    return x, y, z


def _fault_words(shares: dict[str, float]) -> str:
    return "; ".join(
        f"{name} {100 * share:.0f} % of the time"
        for name, share in shares.items()
        if np.isfinite(share) and share > FAULT_SHARE
    )
