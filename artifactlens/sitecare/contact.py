"""Poor contact: what a site shows that no other site does, slow drift, and loose leads."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from artifactlens.epochs import median_of_known
from artifactlens.sitecare.evidence import Evidence, Finding

Array = NDArray[np.float64]

MOST_PREDICTORS = 6
RIDGE = 1e-3

APART_SHARE = 0.6
"""Share of a site's power that the sites most like it do not predict."""

APART_WITH_EYES = 0.85
EYE_SHARE = 0.2
"""The same where eye movements are marked at the site in this part of the stretch: they reach
the two frontal poles unequally, and the weights may come from times without them."""

APART_DB, PLAIN_DB = 8.0, 10.5
"""How far the unpredicted amplitude exceeds the median of all sites': to be named, to be
acted upon. The largest in undisturbed recordings at hand is about 8 dB with such a share."""

APART_UV = 6.0
REFERENCE_DB, REFERENCE_PLAIN_DB = 6.0, 7.5
"""How far the reference's row exceeds the median site."""

MUSCLE_SHARE = 0.4
"""A stretch with muscle at the site in this part of it does not count against the contact."""

DRIFT_RATIO = 1.5
"""Of what is apart, the half-second levels must move this many times as much as the rest."""


def prediction_errors(covariance: NDArray[np.floating]) -> Array:
    """Weights (n_sites, n_sites) that leave of each site what the sites like it do not show.

    Least squares of each site on the sites that correlate best with it (at most six, and
    fewer than half of all: in a frame of mean zero all others together predict anything).
    The weights are those of the whole recording, each stretch weighing alike. A row holds 1
    for its own site and the negative weights of the others; NaN with fewer than three sites.
    ``covariance`` (n_stretches, n_sites, n_sites) uV^2, NaN where unknown.
    """
    matrix = np.asarray(covariance, dtype=np.float64)
    n = matrix.shape[1]
    most = min(MOST_PREDICTORS, (n - 1) // 2)
    if most < 1:
        return np.full((n, n), np.nan)
    variance = np.einsum("bss->bs", matrix)
    alive = np.where(variance > 0, variance, np.nan)
    scaled = matrix / median_of_known(alive.T).astype(np.float64)[:, None, None]
    known = np.isfinite(scaled)
    typical = np.where(known, scaled, 0).sum(axis=0) / np.maximum(known.sum(axis=0), 1)
    spread = np.sqrt(np.maximum(np.diag(typical), 1e-30))
    alike = np.abs(typical / np.outer(spread, spread))
    np.fill_diagonal(alike, -1.0)
    chosen = np.argsort(-alike, axis=1, kind="stable")[:, :most]
    gram = typical[chosen[:, :, None], chosen[:, None, :]]
    ridge = RIDGE * np.einsum("nkk->n", gram) / most + 1e-12
    gram = gram + ridge[:, None, None] * np.eye(most)
    moment = np.take_along_axis(typical, chosen, axis=1)
    solved = np.linalg.solve(gram, moment[:, :, None])[:, :, 0]
    weights = np.zeros((n, n))
    np.put_along_axis(weights, chosen, -solved, axis=1)
    weights[np.arange(n), np.arange(n)] = 1.0
    return weights


def unpredicted(covariance: NDArray[np.floating], weights: Array) -> tuple[Array, Array]:
    """What the sites most like a site do not show of it, stretch by stretch.

    Parameters
    ----------
    covariance : array, shape (n_stretches, n_sites, n_sites), uV^2, NaN where unknown
    weights : array, shape (n_sites, n_sites)
        Of :func:`prediction_errors`.

    Returns
    -------
    share : array, shape (n_stretches, n_sites)
        Unpredicted over all power, NaN where a site or one that predicts it is missing.
    size : array, shape (n_stretches, n_sites), microvolt rms
    """
    matrix = np.asarray(covariance, dtype=np.float64)
    variance = np.einsum("bss->bs", matrix)
    used = (weights != 0).astype(np.float64)
    whole = np.isfinite(matrix)
    filled = np.where(whole, matrix, 0.0)
    power = np.einsum("bij,ij->bi", weights @ filled, weights)
    lost = np.einsum("bij,ij->bi", used @ (~whole), used) > 0
    power = np.where(lost, np.nan, np.maximum(power, 0))
    with np.errstate(divide="ignore", invalid="ignore"):
        share = np.where(variance > 0, power / variance, np.nan)
    return share, np.sqrt(power)


def contacts(evidence: Evidence) -> list[Finding]:
    """Sites whose trace no other site shares, with drift told from noise; the reference."""
    log, frame = evidence.log, evidence.frame
    reference = evidence.references()
    sites = np.flatnonzero(~reference)
    found = []
    covariance = log.covariance[:, sites[:, None], sites]
    weights = prediction_errors(covariance)
    share, size = unpredicted(covariance, weights)
    muscle = log.mean(evidence.marked("muscle"))[:, sites]
    eyes = log.mean(evidence.marked("eye"))[:, sites]
    usual = median_of_known(size.T).astype(np.float64)[:, None]
    with np.errstate(divide="ignore", invalid="ignore"):
        above = 20 * np.log10(size / usual)
    known = np.isfinite(share) & (muscle < MUSCLE_SHARE)
    with np.errstate(invalid="ignore"):
        asked = np.where(eyes >= EYE_SHARE, APART_WITH_EYES, APART_SHARE)
        held = known & (share >= asked) & (above >= APART_DB) & (size >= APART_UV)
    slow = _level_size(evidence, sites, weights)
    for index in np.flatnonzero(held.any(axis=0)):
        times = held[:, index]
        decibel = float(np.median(above[times, index]))
        uv = float(np.median(size[times, index]))
        drifts = bool(np.median(slow[times, index]) > DRIFT_RATIO * uv)
        found.append(
            Finding(
                cause="site",
                sign="drift" if drifts else "apart",
                rows=(int(sites[index]),),
                held=times,
                known=known[:, index],
                plain=decibel >= PLAIN_DB,
                weight=decibel * float(times.mean()),
                reason=(
                    f"wanders by {np.median(slow[times, index]):.0f} uV on its own"
                    if drifts
                    else f"{uv:.0f} uV that no other site shares, "
                    f"{10 ** (decibel / 20):.0f} times the usual here"
                ),
            )
        )
    return [*found, *_noisy_reference(evidence, sites)]


def _level_size(evidence: Evidence, sites: NDArray[np.intp], weights: Array) -> Array:
    """How far each site's half-second levels move on their own, microvolt rms, per stretch."""
    log = evidence.log
    own = log.signs.level[:, :, sites].astype(np.float64) @ weights.T
    mean = log.mean(own.mean(axis=1))
    square = log.mean((own**2).mean(axis=1))
    return np.sqrt(np.maximum(square - mean**2, 0))


def _noisy_reference(evidence: Evidence, sites: NDArray[np.intp]) -> list[Finding]:
    """A reference whose own disturbance fills every channel alike."""
    log, frame = evidence.log, evidence.frame
    rows = np.flatnonzero(evidence.references())
    variance = np.einsum("bss->bs", log.covariance.astype(np.float64))
    found = []
    for row in rows:
        mates = sites[frame.chain[sites] == frame.chain[row]]
        if len(mates) < 4:
            continue
        usual = median_of_known(variance[:, mates].T).astype(np.float64)
        with np.errstate(divide="ignore", invalid="ignore"):
            above = 10 * np.log10(variance[:, row] / usual)
        known = np.isfinite(above)
        held = known & (np.nan_to_num(above, nan=-99) >= REFERENCE_DB)
        if not held.any():
            continue
        decibel = float(np.median(above[held]))
        uv = float(np.median(np.sqrt(variance[held, row])))
        found.append(
            Finding(
                cause="reference",
                sign="apart",
                rows=(int(row),),
                held=held,
                known=known,
                plain=decibel >= REFERENCE_PLAIN_DB,
                weight=decibel * float(held.mean()),
                reason=(
                    f"{uv:.0f} uV in every channel alike, {10 ** (decibel / 20):.1f} times "
                    "what the sites differ by"
                ),
            )
        )
    return found
