"""Bridges: two sites joined by gel or by a cable show the same potential.

The electrical distance of two sites, the variance of their difference, was introduced by
Tenke & Kayser (2001, Clin Neurophysiol 112:545, from memory) and is used with a limit
relative to the usual distance of a recording by Alschuler et al. (2014, Clin Neurophysiol
125:484, from memory). A bridge leaves only the noise of two amplifiers between the sites.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from artifactlens.epochs import median_of_known
from artifactlens.sitecare.evidence import Evidence, Finding

if TYPE_CHECKING:
    from artifactlens.frames import Frame

BRIDGED_SHARE = 0.012
"""Electrical distance over the median of all pairs. Sites 5 to 7 cm apart had 0.06 or more
in the recordings at hand, sites 3 cm apart 0.007 or more."""

BRIDGED_UV2 = 3.0
"""Electrical distance that the noise of two amplifiers does not reach below 25 Hz."""

STEADY_SHARE = 0.8
"""Gel neither comes nor goes within seconds: rhythms that make neighbours alike do."""

LONGEST_M = 0.12
"""Gel does not run farther; jumpers and shorted cables are not told from a single site."""

MOST_TOGETHER = 8

DENSE_M, AROUND_M = 0.025, 0.05
NEARBY_SHARE = 0.12
"""Sites of nets with 128 and more electrodes are close enough to be alike by nature: a pair
is a bridge if its electrical distance is this share of that of pairs around it. The smallest
of 1900 such pairs in invented recordings of 256 sites had 0.2."""


def electrical_distance(covariance: NDArray[np.floating]) -> NDArray[np.float64]:
    """Variance of the difference of every two sites, (..., n_sites, n_sites), uV^2."""
    matrix = np.asarray(covariance, dtype=np.float64)
    variance = np.einsum("...ss->...s", matrix)
    return np.asarray(variance[..., :, None] + variance[..., None, :] - 2 * matrix)


def bridges(evidence: Evidence) -> list[Finding]:
    """Pairs and groups of sites that are nearly identical beyond what distance explains."""
    frame, log = evidence.frame, evidence.log
    sites = np.flatnonzero(~evidence.references())
    if len(sites) < 3:
        return []
    distance = electrical_distance(log.covariance[:, sites[:, None], sites])
    upper = np.triu_indices(len(sites), 1)
    usual = median_of_known(distance[:, *upper].T).astype(np.float64)
    limit = np.minimum(BRIDGED_SHARE * usual, BRIDGED_UV2)[:, None, None]
    known = np.isfinite(distance) & (usual > 0)[:, None, None]
    joined = known & (np.nan_to_num(distance, nan=np.inf) <= limit)
    joined &= _below_usual_nearby(frame.positions[sites], distance, joined)
    joined |= _flat_derivations(evidence, sites)
    joined &= _may_touch(frame, sites)[None]
    return _groups(evidence, sites, joined, known, distance, usual)


def _below_usual_nearby(
    places: NDArray[np.float64],
    distance: NDArray[np.float64],
    candidates: NDArray[np.bool_],
) -> NDArray[np.bool_]:
    """Which pairs are alike beyond what their nearness explains, shape of ``distance``.

    Between close sites the potential changes evenly, so that its difference grows with their
    distance, and the electrical distance with the square of that. A pair closer than 2.5 cm
    is held against what either has, on this scale, with the other sites around it. Pairs
    farther apart, and of unknown place, pass.
    """
    apart = np.linalg.norm(places[:, None] - places[None], axis=2)
    told = np.ones(distance.shape, dtype=bool)
    with np.errstate(invalid="ignore"):
        dense = (apart < DENSE_M) & candidates.any(axis=0)
        around = (apart < AROUND_M) & (apart > 0)
    for first, second in np.argwhere(np.triu(dense, 1)):
        slopes = [
            distance[:, site, others] / apart[site, others] ** 2
            for site, near in ((first, around[first]), (second, around[second]))
            for others in [
                np.flatnonzero(near & ~np.isin(np.arange(len(near)), (first, second)))
            ]
        ]
        usual = median_of_known(np.concatenate(slopes, axis=1).T)
        limit = NEARBY_SHARE * usual * apart[first, second] ** 2
        with np.errstate(invalid="ignore"):
            below = ~(distance[:, first, second] > limit)
        told[:, first, second] = told[:, second, first] = below
    return told


def _steadiness(joined: NDArray[np.bool_], known: NDArray[np.bool_]) -> NDArray[np.float64]:
    """Share of the stretches between a pair's first and last as a bridge in which it is one."""
    so_far = np.maximum.accumulate(joined, axis=0)
    to_come = np.maximum.accumulate(joined[::-1], axis=0)[::-1]
    between = (known | joined) & so_far & to_come
    return np.asarray(joined.sum(axis=0) / np.maximum(between.sum(axis=0), 1))


def _may_touch(frame: Frame, sites: NDArray[np.intp]) -> NDArray[np.bool_]:
    """Pairs near enough for gel; unknown places may."""
    places = frame.positions[sites]
    apart = np.linalg.norm(places[:, None] - places[None], axis=2)
    near = ~(apart > LONGEST_M)
    np.fill_diagonal(near, False)
    return np.asarray(near)


def _flat_derivations(evidence: Evidence, sites: NDArray[np.intp]) -> NDArray[np.bool_]:
    """Pairs whose own derivation is flat while both sites are seen by other derivations."""
    frame, log = evidence.frame, evidence.log
    flat = np.zeros((len(log), len(sites), len(sites)), dtype=bool)
    if frame.montage != "bipolar":
        return flat
    share = log.mean(log.signs.flat)
    place = {int(row): index for index, row in enumerate(sites)}
    there = evidence.present()
    for channel in np.flatnonzero((share >= 0.5).any(axis=0)):
        first, second = (int(row) for row in np.flatnonzero(frame.incidence[channel]))
        if first in place and second in place:
            held = (share[:, channel] >= 0.5) & there[:, first] & there[:, second]
            flat[:, place[first], place[second]] |= held
            flat[:, place[second], place[first]] |= held
    return flat


def _groups(
    evidence: Evidence,
    sites: NDArray[np.intp],
    joined: NDArray[np.bool_],
    known: NDArray[np.bool_],
    distance: NDArray[np.float64],
    usual: NDArray[np.float64],
) -> list[Finding]:
    from scipy.sparse import csr_array
    from scipy.sparse.csgraph import connected_components

    held_long = joined.sum(axis=0) >= min(2, len(evidence.log))
    held_long &= _steadiness(joined, known) >= STEADY_SHARE
    if not held_long.any():
        return []
    _, label = connected_components(csr_array(held_long), directed=False)
    found = []
    for number in np.unique(label[held_long.any(axis=1)]):
        members = np.flatnonzero(label == number)
        if len(members) > MOST_TOGETHER:
            continue  # the whole head alike is no bridge: a dead or shorted input box
        block = np.ix_(np.arange(len(joined)), members, members)
        inside = held_long[np.ix_(members, members)]
        held = np.asarray(joined[block][:, inside].any(axis=1))
        tell = np.asarray(known[block][:, inside].any(axis=1)) | held
        between = np.where(joined[block], np.nan_to_num(distance[block]), np.nan)
        apart = float(median_of_known(between[:, inside][held].ravel()))
        names = " and ".join(evidence.frame.sites[sites[member]] for member in members)
        typical = float(np.sqrt(median_of_known(usual[held])))
        found.append(
            Finding(
                cause="bridge",
                sign="bridged",
                rows=tuple(int(sites[member]) for member in members),
                held=held,
                known=tell,
                plain=True,
                weight=float(held.sum() / max(tell.sum(), 1)),
                reason=(
                    f"{names} differ by {np.sqrt(max(apart, 0.0)):.2g} uV only, where two "
                    f"sites of this recording differ by {typical:.0f} uV"
                ),
            )
        )
    return found
