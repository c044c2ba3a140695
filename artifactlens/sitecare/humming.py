"""Mains: at a few sites, in the reference, or from ground and surroundings.

Every site's complex amplitude at the line frequency is compared with the median of all. What
a common reference puts into all channels alike, in size and phase, is then left at the
reference's own row; a single bad site is left at its row; a fault of the ground, or a device
near by, leaves sizes and phases that differ from site to site and survive any derivation.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from artifactlens.epochs import median_of_known
from artifactlens.sitecare.evidence import SMALL_CHAIN, Evidence, Finding

EVERYWHERE_UV = 0.8
PLAIN_UV = 4.0
OF_STRONGEST = 0.08
"""Amplitude (half of peak to peak) at the line from which mains at many sites, or at one,
is acted upon; a site counts among many if it has that share of the strongest."""

ALONE_UV = 1.0
ALONE_TIMES = 4.0
PLAIN_ALONE_UV, PLAIN_ALONE_TIMES = 1.5, 8.0
"""A site is named for mains of this size, if it is so many times that of the other sites; it
is acted upon if it is large, or far larger than elsewhere. A ground at fault, with sizes at
random, rarely makes one site four times the usual."""

LEAST_RATIO_DB = 6.0
EVERYWHERE = 0.5
"""Mains at this share of the sites is a matter of ground and surroundings."""

OF_OTHERS = 0.2
"""Mains of a short chain comes from one electrode if this share of it, at most, is left at any
other beyond what that one explains."""

FEW = 0.25
"""Up to this share of the sites, each has its own trouble."""


def own_hum(
    hum: NDArray[np.complexfloating], ok: NDArray[np.bool_], chain: NDArray[np.intp]
) -> NDArray[np.float64]:
    """Amplitude of each site beyond the complex median of its chain, (n_epochs, n_sites), uV.

    In a chain of mean zero a site with an amplitude A leaks A / n to all others: the median
    over the sites takes that off again. Median of real and imaginary part; NaN in chains of
    fewer than five sites, whose median tells nothing.
    """
    own = np.full(hum.shape, np.nan)
    for number in np.flatnonzero(np.bincount(chain) >= SMALL_CHAIN):
        rows = np.flatnonzero(chain == number)
        part, there = hum[:, rows], ok[:, rows]
        real = median_of_known(np.where(there, part.real, np.nan).T)
        imaginary = median_of_known(np.where(there, part.imag, np.nan).T)
        middle = (real + 1j * imaginary)[:, None]
        own[:, rows] = np.where(there, np.abs(part - middle), np.nan)
    return own


def hums(evidence: Evidence) -> list[Finding]:
    """Sites, reference or ground with mains."""
    log, frame = evidence.log, evidence.frame
    if evidence.line_frequency is None or len(frame.sites) < 3:
        return []
    reference = evidence.references()
    size = log.mean(own_hum(log.signs.hum, log.signs.ok, frame.chain))
    ratio = log.mean(evidence.mains_ratio)
    known = np.isfinite(size)
    scalp = ~reference
    usual = median_of_known(size[:, scalp].T).astype(np.float64)[:, None]
    with np.errstate(divide="ignore", invalid="ignore"):
        hums = known & (ratio >= LEAST_RATIO_DB)
        least = np.fmax(
            EVERYWHERE_UV, OF_STRONGEST * np.fmax.reduce(size[:, scalp], axis=1)
        )
        held = hums & (size >= least[:, None])
        times = size / usual
        alone = hums & (size >= ALONE_UV) & (times >= ALONE_TIMES)
    share = held[:, scalp].sum(axis=1) / np.maximum(known[:, scalp].sum(axis=1), 1)
    everywhere = share > EVERYWHERE
    line = f"{evidence.line_frequency:.3g} Hz"
    found = []
    if everywhere.any():
        strongest = np.fmax.reduce(size[everywhere][:, scalp], axis=1)
        least = np.fmin.reduce(size[everywhere][:, scalp], axis=1)
        count = int(np.median(held[everywhere][:, scalp].sum(axis=1)))
        found.append(
            Finding(
                cause="ground",
                sign="mains",
                rows=(),
                held=everywhere,
                known=np.asarray(known.any(axis=1)),
                plain=bool(np.median(strongest) >= PLAIN_UV),
                weight=float(np.median(strongest)),
                reason=(
                    f"mains at {line} at {count} of {int(scalp.sum())} sites, "
                    f"{np.median(least):.2g} to {np.median(strongest):.2g} uV, of differing "
                    "size and phase, so it is left in any derivation"
                ),
            )
        )
    found += _short_chains(evidence, usual[:, 0], everywhere, line)
    crowd = alone[:, scalp].sum(axis=1) > max(3, FEW * scalp.sum())
    for row in np.flatnonzero(alone.any(axis=0)):
        when = alone[:, row]
        uv = float(np.median(size[when, row]))
        elsewhere = float(np.median(usual[when]))
        far = uv >= PLAIN_ALONE_UV and np.median(times[when, row]) >= PLAIN_ALONE_TIMES
        at_reference = bool(reference[row])
        if at_reference:
            what = (
                f"mains at {line}, {uv:.2g} uV, in every channel alike in size and phase, "
                f"and {elsewhere:.1g} uV at the usual site beside that"
            )
        else:
            what = (
                f"mains at {line}, {uv:.2g} uV, where the usual site has {elsewhere:.1g} uV"
            )
        found.append(
            Finding(
                cause="reference" if at_reference else "site",
                sign="mains",
                rows=(int(row),),
                held=when,
                known=known[:, row],
                plain=bool(uv >= PLAIN_UV or far) and not bool(np.all(crowd[when])),
                weight=uv * float(when.mean()),
                reason=what,
            )
        )
    return found


class _Short(NamedTuple):
    """A short chain: its rows and, stretch by stretch, what mains is in it.

    ``size`` (n_stretches, n_rows) amplitude, ``left`` (n_stretches, n_rows) the largest
    amplitude at any other electrode if all mains were of this one; microvolt.
    ``uv`` (n_stretches,) the largest amplitude of any, of two electrodes that between them.
    """

    rows: NDArray[np.intp]
    size: NDArray[np.float64]
    left: NDArray[np.float64]
    uv: NDArray[np.float64]
    held: NDArray[np.bool_]

    @property
    def known(self) -> NDArray[np.bool_]:
        """When it could be told."""
        return np.asarray(np.isfinite(self.uv))


def _short_chains(
    evidence: Evidence, usual: NDArray[np.float64], everywhere: NDArray[np.bool_], line: str
) -> list[Finding]:
    """Mains in chains too short for a median, by how it divides among their electrodes.

    Mains of one electrode of a chain of n is solved as n - 1 parts there and one, turned
    over, at each of the others. Where it divides otherwise, and always in a single
    derivation, nothing tells which electrode it is, nor whether it comes from the ground.

    Parameters
    ----------
    usual : array, shape (n_stretches,), microvolt
        Amplitude at the usual site of longer chains, NaN where there are none.
    everywhere : array, shape (n_stretches,), bool
        Where ground and surroundings are known to be at fault.
    """
    log, frame = evidence.log, evidence.frame
    ratio = log.mean(evidence.mains_ratio)
    chains = []
    for number in np.flatnonzero(np.bincount(frame.chain) < SMALL_CHAIN):
        rows = np.flatnonzero(frame.chain == number)
        hum, others = log.signs.hum[:, rows], len(rows) - 1
        there = log.signs.ok[:, rows].all(axis=1, keepdims=True)
        size = log.mean(np.where(there, np.abs(hum), np.nan))
        # Row j of the last two axes is what is left at j if all comes from k.
        rest = np.abs(hum[:, :, None] + hum[:, None, :] / others)
        rest[:, np.arange(len(rows)), np.arange(len(rows))] = 0
        left = log.mean(np.where(there, rest.max(axis=1), np.nan))
        uv = size.sum(axis=1) if others == 1 else size.max(axis=1)
        loud = np.nan_to_num(ratio[:, rows], nan=-99.0).max(axis=1) >= LEAST_RATIO_DB
        with np.errstate(invalid="ignore"):
            held = loud & (uv >= ALONE_UV) & ~(uv < ALONE_TIMES * usual) & ~everywhere
        chains.append(_Short(rows, size, left, uv, held))
    humming = [chain for chain in chains if chain.held.any()]
    if len(chains) > 1 and len(humming) == len(chains) and not np.isfinite(usual).any():
        held = np.asarray(np.any([chain.held for chain in chains], axis=0))
        strongest = float(np.median(np.fmax.reduce([chain.uv for chain in chains])[held]))
        return [
            Finding(
                cause="ground",
                sign="mains",
                rows=(),
                held=held,
                known=np.asarray(np.any([chain.known for chain in chains], axis=0)),
                plain=strongest >= PLAIN_UV,
                weight=strongest,
                reason=f"mains at {line}, up to {strongest:.2g} uV, in every derivation",
            )
        ]
    return [_in_short_chain(evidence, chain, line) for chain in humming]


def _in_short_chain(evidence: Evidence, chain: _Short, line: str) -> Finding:
    frame = evidence.frame
    parts, left = (
        np.median(values[chain.held], axis=0) for values in (chain.size, chain.left)
    )
    order = chain.rows[np.argsort(-parts, kind="stable")]
    one = len(order) > 2 and left[parts.argmax()] <= OF_OTHERS * parts.max()
    names = [frame.sites[row] for row in chain.rows]
    several = f"{', '.join(names[:-1])} and {names[-1]}"
    amplitude = float(np.median(chain.uv[chain.held]))
    if one:
        where = (
            f"as if it all came from there among {several}; so few cannot tell for sure, and "
            "the ground may do the same"
        )
    else:
        where = f"shared by {several}; nothing tells which of them it is, or the ground"
    at_reference = one and frame.roles[order[0]] == "reference"
    return Finding(
        cause="reference" if at_reference else "site",
        sign="mains",
        rows=tuple(int(row) for row in (order[:1] if one else order)),
        held=chain.held,
        known=chain.known | chain.held,
        plain=amplitude >= PLAIN_UV,
        weight=amplitude * float(chain.held.mean()),
        reason=f"mains at {line}, {amplitude:.2g} uV, {where}",
        one_of=not one,
    )
