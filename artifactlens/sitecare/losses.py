"""Sites without a signal: flat, clipped, or with samples missing."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from artifactlens.epochs import median_of_known
from artifactlens.sitecare.bridging import electrical_distance
from artifactlens.sitecare.evidence import SMALL_CHAIN, Evidence, Finding

LOST_SHARE = 0.3
CLIPPED_SHARE = 0.1
"""Part of a stretch from which it counts."""

EMPTY_SHARE = 0.04
"""A channel with less than this share of the usual power is no recording of a head; sound ones
had 0.1 or more in the recordings at hand."""

DENSE_NET_M = 0.022
"""In a net as dense as this a site may lie beside the reference and have no potential."""

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
        held = share >= least
        count = int((~reference).sum())
        together = held[:, ~reference].sum(axis=1) > ALL_AT_ONCE * count
        together &= count >= SMALL_CHAIN
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
        faulty = (log.mean(fault) >= least) & ~together[:, None]
        for rows in _suspects(evidence, sign, faulty, held):
            lost = [row for row in rows if held[:, row].any()]
            part = float(share[~together][:, lost].max(axis=1).mean())
            reason = f"{_WORDS[sign]} for {100 * part:.0f} % of the time"
            one_of = len(rows) > 1
            if one_of:
                reason += _doubt(sign, [evidence.frame.sites[row] for row in rows])
            found.append(
                Finding(
                    cause="site",
                    sign=sign,
                    rows=rows,
                    held=np.asarray(held[:, lost].any(axis=1)),
                    known=~together,
                    plain=bool(held[:, lost].any(axis=1).sum() >= min(2, len(log))),
                    weight=30.0 * part,
                    reason=reason,
                    one_of=one_of,
                )
            )
    return [*found, *_without_eeg(evidence)]


def _without_eeg(evidence: Evidence) -> list[Finding]:
    """Sites whose channel holds next to nothing beside the others.

    A dead input, or a lead that lies at the reference; told against a common reference only.
    """
    log, frame = evidence.log, evidence.frame
    distance = electrical_distance(log.covariance)
    found = []
    for reference in np.flatnonzero(evidence.references()):
        mates = np.flatnonzero(frame.chain == frame.chain[reference])
        mates = mates[mates != reference]
        if len(mates) < SMALL_CHAIN or _spacing(frame.positions[mates]) < DENSE_NET_M:
            continue
        own = distance[:, mates, reference]
        usual = median_of_known(own.T).astype(np.float64)[:, None]
        with np.errstate(invalid="ignore"):
            held = own < EMPTY_SHARE * usual
        for index in np.flatnonzero(held.sum(axis=0) >= min(2, len(log))):
            when = held[:, index]
            uv, other = (
                np.sqrt(np.median(own[when, index])),
                np.sqrt(np.median(usual[when])),
            )
            found.append(
                Finding(
                    cause="site",
                    sign="flat",
                    rows=(int(mates[index]),),
                    held=when,
                    known=np.isfinite(own[:, index]),
                    plain=True,
                    weight=30.0 * float(when.mean()),
                    reason=f"carries no EEG: {uv:.1f} uV where the usual site has {other:.0f} uV",
                )
            )
    return found


def _spacing(places: NDArray[np.float64]) -> float:
    """Usual distance to the next site, metre; infinite where places are unknown."""
    placed = places[np.isfinite(places).all(axis=1)]
    if len(placed) < SMALL_CHAIN:
        return float("inf")
    apart = np.linalg.norm(placed[:, None] - placed[None], axis=2)
    np.fill_diagonal(apart, np.inf)
    return float(np.median(apart.min(axis=1)))


def _suspects(
    evidence: Evidence, sign: str, faulty: NDArray[np.bool_], held: NDArray[np.bool_]
) -> list[tuple[int, ...]]:
    """Sites without a sound channel, those together of which nothing tells which it is.

    A faulty derivation between a site that has sound ones and a site that has none is laid
    to the latter. Between two that have none it may be either. At the end of a chain a flat
    derivation may be the electrode of the end, or its neighbour joined to it.

    Parameters
    ----------
    faulty : array, shape (n_stretches, n_channels), bool
    held : array, shape (n_stretches, n_sites), bool
        Where all channels of a site are faulty.
    """
    frame = evidence.frame
    own = np.flatnonzero(held.any(axis=0) & ~evidence.references())
    if frame.montage == "average":
        return [(int(row),) for row in own]
    count = (frame.incidence != 0).sum(axis=0)
    # A reference that serves several channels and is lost would make noise of them.
    dead = held & ~(evidence.references() & (count > 1))
    bipolar = frame.montage == "bipolar"
    told: set[int] = set()
    pairs = []
    for channel in np.flatnonzero(faulty.any(axis=0)):
        pair = [int(row) for row in np.flatnonzero(frame.incidence[channel])]
        without = dead[:, pair] & faulty[:, [channel]]
        if without.all(axis=1).any():
            pairs.append(pair)
        elif without.any():
            row = pair[int(without.any(axis=0).argmax())]
            if sign == "flat" and bipolar and count[row] == 1:
                pairs.append(pair)
            else:
                told.add(row)
    groups = [{int(row)} for row in own]
    for pair in pairs:
        if not set(pair) <= told:
            touched = [group for group in groups if group & set(pair)]
            groups = [group for group in groups if group not in touched]
            groups.append(set(pair).union(*touched))
    ordered = [tuple(sorted(group, key=lambda row: (-count[row], row))) for group in groups]
    return sorted(ordered, key=min)


def _doubt(sign: str, names: list[str]) -> str:
    several = f"{', '.join(names[:-1])} and {names[-1]}"
    if len(names) > 2:
        return f" in all derivations of {several}; nothing tells which of them it is"
    either = "a lead, or the two joined" if sign == "flat" else "either of them"
    return (
        f" in the derivation of {several}, which does not tell one from the other: {either}"
    )


_WORDS = {"flat": "flat", "lost": "samples missing", "clipped": "clipped"}
