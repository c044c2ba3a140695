"""Poor contact: what a site shows that no other site does, and slow drift."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from artifactlens.epochs import median_of_known
from artifactlens.sitecare.evidence import SMALL_CHAIN, Evidence, Finding

Array = NDArray[np.float64]
Bools = NDArray[np.bool_]

MOST_PREDICTORS = 6
RIDGE = 1e-3

APART_SHARE = 0.6
"""Share of a site's power that the sites most like it do not predict."""

APART_WITH_EYES = 0.85
EYE_SHARE = 0.2
"""The same near the eyes where eye movements are marked at the site in this part of the
stretch: they reach the two frontal poles unequally, and the weights may come from times
without them."""

APART_DB, PLAIN_DB = 9.0, 12.5
"""How far the unpredicted amplitude exceeds the median of all sites': to be named, to be
acted upon. Single stretches of undisturbed recordings at hand reach 12 dB with such a share."""

APART_UV, PLAIN_UV = 7.0, 12.0
"""The same in microvolt rms."""

PLAIN_SLOW_DB, BROAD_DB = 16.0, 3.0
"""Near the eyes, what does not reach into beta by so much must exceed the others by this."""

PLAIN_FRONT_UV = 25.0
"""... and must have this size: undisturbed frontal poles reach 22 uV in the recordings at hand."""

STEADY_STRETCHES = 3
"""Nobody is sent to the patient for what a site does for less."""

DRIFT_ANYHOW_UV = 100.0
"""A site that wanders by so much on its own is acted upon whatever the others do."""

MUSCLE_SHARE = 0.4
"""A stretch with muscle at the site in this part of it does not count against the contact."""

NOISE_OVER_FAST = 2.2
"""... unless what is slow is this many times what is fast: then it is no muscle alone."""

DRIFT_DB, DRIFT_WITH_EYES_DB = 14.0, 20.0
DRIFT_UV = 25.0
DRIFT_PLAIN_DB, DRIFT_PLAIN_UV = 20.0, 35.0
"""How far a site's own half-second levels exceed the median site's; to be named, acted upon.
Undisturbed sites of the recordings at hand reach 17.6 dB for half a minute."""

BARRED_SHARE = 0.1
"""A site that is strange in this part of the time must not predict others."""

MANY_DRIFT = 4
"""So many sites that wander in one stretch have something in common."""


def prediction_errors(
    covariance: NDArray[np.floating],
    chain: NDArray[np.intp],
    barred: NDArray[np.bool_] | None = None,
) -> Array:
    """Weights (n_sites, n_sites) that leave of each site what the sites like it do not show.

    Least squares of each site on the sites of its chain that correlate best with it, at most
    six, with weights that sum to one: what is left is then the same against any reference. (In
    a chain of mean zero, noise of a site leaks into all others, turned over, and free weights
    would predict it from there.) The weights are those of the whole recording, each stretch
    weighing alike.

    Parameters
    ----------
    covariance : array, shape (n_stretches, n_sites, n_sites), uV^2, NaN where unknown
    chain : array, shape (n_sites,)
        Connected component of each site.
    barred : array, shape (n_sites,), bool, optional
        Sites that must not predict others, because something is wrong with them.

    Returns
    -------
    array, shape (n_sites, n_sites)
        A row holds 1 for its own site and the negative weights of the others; NaN where too
        few others are left.
    """
    matrix = np.asarray(covariance, dtype=np.float64)
    n = matrix.shape[1]
    together = chain[:, None] == chain[None]
    most = min(MOST_PREDICTORS, int(together.sum(axis=1).max(initial=0)) - 2)
    if most < 1:
        return np.full((n, n), np.nan)
    variance = np.einsum("bss->bs", matrix)
    alive = np.sqrt(np.where(variance > 0, variance, np.nan))
    # Correlations of each stretch, and the usual amplitude of each site: a fault of some
    # stretches does not set the weights.
    with np.errstate(divide="ignore", invalid="ignore"):
        correlation = matrix / (alive[:, :, None] * alive[:, None])
        relative = alive / median_of_known(alive.T).astype(np.float64)[:, None]
    known = np.isfinite(correlation)
    shared = np.where(known, correlation, 0).sum(axis=0) / np.maximum(known.sum(axis=0), 1)
    spread = np.maximum(np.nan_to_num(median_of_known(relative).astype(np.float64)), 1e-15)
    typical = shared * np.outer(spread, spread)
    alike = np.abs(shared)
    may = together if barred is None else together & ~barred
    alike[~may] = -1.0
    np.fill_diagonal(alike, -2.0)
    chosen = np.argsort(-alike, axis=1, kind="stable")[:, :most]
    serves = np.take_along_axis(alike, chosen, axis=1) >= 0
    both = serves[:, :, None] & serves[:, None, :]
    gram = np.where(both, typical[chosen[:, :, None], chosen[:, None, :]], 0.0)
    ridge = RIDGE * np.einsum("nkk->n", gram) / most + 1e-12
    gram += np.where(serves, ridge[:, None], 1.0)[:, :, None] * np.eye(most)
    # Means over differing stretches, of sites that were lost for a while, may contradict
    # each other: no combination of sites has less power than the ridge.
    power, axes = np.linalg.eigh(gram)
    power = np.maximum(power, ridge[:, None])
    gram = (axes * power[:, None]) @ axes.transpose(0, 2, 1)
    moment = np.where(serves, np.take_along_axis(typical, chosen, axis=1), 0.0)
    ones = serves.astype(np.float64)
    free, along = np.linalg.solve(gram, np.stack([moment, ones], axis=2)).transpose(2, 0, 1)
    # Lagrange's multiplier that makes the weights of every site sum to one.
    reach = np.maximum((along * ones).sum(axis=1), 1e-30)
    solved = free + along * ((1 - (free * ones).sum(axis=1)) / reach)[:, None]
    weights = np.zeros((n, n))
    np.put_along_axis(weights, chosen, -solved, axis=1)
    weights[np.arange(n), np.arange(n)] = 1.0
    weights[~serves.any(axis=1)] = np.nan
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
    """Sites whose trace no other site of their chain shares, slow drift told from noise."""
    scalp = np.flatnonzero(~evidence.references())
    sites = scalp[evidence.company()[scalp] >= SMALL_CHAIN]
    if len(sites) < 3:
        return []
    return _apart(evidence, sites, evidence.log.covariance[:, sites[:, None], sites])


class _Look(NamedTuple):
    """What the sites show that no other does, all (n_stretches, n_sites).

    ``above`` and ``wander``, of ``size`` and ``level`` microvolt, are decibel over the median
    site's.
    """

    known: Bools
    noisy: Bools
    drifting: Bools
    size: Array
    above: Array
    level: Array
    wander: Array


def _look(
    evidence: Evidence,
    sites: NDArray[np.intp],
    covariance: NDArray[np.floating],
    barred: Bools | None = None,
) -> _Look:
    log = evidence.log
    weights = prediction_errors(covariance, evidence.frame.chain[sites], barred)
    share, size = unpredicted(covariance, weights)
    level = _level_size(evidence, sites, weights)
    muscle = log.mean(evidence.marked("muscle"))[:, sites] >= MUSCLE_SHARE
    fast = log.mean(evidence.fast_uv())[:, sites]
    eyes = log.mean(evidence.marked("eye") & evidence.front())[:, sites] >= EYE_SHARE
    there = np.isfinite(share)
    above, wander = _above_usual(size), _above_usual(level)
    with np.errstate(invalid="ignore"):
        known = there & (~muscle | (size >= NOISE_OVER_FAST * fast))
        noisy = known & (share >= np.where(eyes, APART_WITH_EYES, APART_SHARE))
        noisy &= (above >= APART_DB) & (size >= APART_UV)
        drifting = there & (wander >= np.where(eyes, DRIFT_WITH_EYES_DB, DRIFT_DB))
        drifting &= level >= DRIFT_UV
    return _Look(known, noisy, drifting, size, above, level, wander)


def _apart(
    evidence: Evidence, sites: NDArray[np.intp], covariance: NDArray[np.floating]
) -> list[Finding]:
    look = _look(evidence, sites, covariance)
    barred = (look.noisy | look.drifting).mean(axis=0) >= BARRED_SHARE
    if barred.any():
        # A faulty site lends its fault to those that it predicts: once more without it.
        look = _look(evidence, sites, covariance, barred)
    known, drifting = look.known, look.drifting
    front = evidence.front()[sites]
    broad = ~front | _is_broad(evidence, sites, look.noisy)
    held = look.noisy | drifting
    many = held & (drifting.sum(axis=1, keepdims=True) >= MANY_DRIFT)
    wet = many & drifting
    found = []
    if wet.any():
        words = (
            f"{wet.any(axis=0).sum()} sites wander at the same time, by "
            f"{np.median(look.level[wet]):.0f} uV, consistent with sweat or movement"
        )
        found.append(_of_the_patient(sites, wet, words))
    held &= ~wet
    swings = drifting & held & front
    if (swings.sum(axis=0) >= 2).sum() > 1:
        # At different times, but near the eyes: a pair of electrodes is the less likely cause.
        words = (
            f"slow swings of {np.median(look.level[swings]):.0f} uV near the eyes, consistent "
            "with eye movements or a damp forehead"
        )
        found.append(_of_the_patient(sites, swings, words))
        held &= ~swings
    for index in np.flatnonzero(held.any(axis=0)):
        when = held[:, index]
        drifts = bool(drifting[when, index].sum() > 0.5 * when.sum())
        ratio, amplitude = (look.wander, look.level) if drifts else (look.above, look.size)
        decibel = float(np.median(ratio[when, index]))
        uv = float(np.median(amplitude[when, index]))
        plain = _is_steady(when) and (
            (decibel >= DRIFT_PLAIN_DB and uv >= DRIFT_PLAIN_UV) or uv >= DRIFT_ANYHOW_UV
            if drifts
            else decibel >= (PLAIN_DB if broad[index] else PLAIN_SLOW_DB)
            and uv >= (PLAIN_FRONT_UV if front[index] else PLAIN_UV)
        )
        found.append(
            Finding(
                cause="site",
                sign="drift" if drifts else "apart",
                rows=(int(sites[index]),),
                held=when,
                known=known[:, index] | when,
                plain=plain,
                weight=decibel * float(when.mean()),
                reason=(
                    f"wanders by {uv:.0f} uV on its own"
                    if drifts
                    else f"{uv:.0f} uV that no other site shares, "
                    f"{10 ** (decibel / 20):.0f} times the usual here"
                ),
            )
        )
    return found


def _is_steady(when: Bools) -> bool:
    """Whether it lasts: most of the time from first to last, and not only for a moment."""
    first, last = np.flatnonzero(when)[[0, -1]]
    count = int(when.sum())
    return count >= min(STEADY_STRETCHES, len(when)) and count >= 0.5 * (last - first + 1)


def _is_broad(evidence: Evidence, sites: NDArray[np.intp], noisy: Bools) -> Bools:
    """Sites whose own activity reaches into beta while they are noisy, (n_sites,).

    Near the eyes, what is slow alone may be what is left of their movements.
    """
    beta = evidence.log.mean(evidence.beta_power)[:, sites]
    excess = beta - median_of_known(beta.T).astype(np.float64)[:, None]
    when = np.where(noisy, excess, np.nan)
    return np.nan_to_num(median_of_known(when), nan=-99.0) >= BROAD_DB


def _of_the_patient(sites: NDArray[np.intp], swings: Bools, reason: str) -> Finding:
    """Wandering (n_stretches, n_sites) that is laid to the skin or the eyes, no electrode."""
    rows = np.argsort(-swings.sum(axis=0), kind="stable")
    rows = rows[swings[:, rows].any(axis=0)]
    when = np.asarray(swings.any(axis=1))
    return Finding(
        cause="patient",
        sign="drift",
        rows=tuple(int(sites[row]) for row in rows),
        held=when,
        known=np.ones(len(when), dtype=bool),
        plain=True,
        weight=float(when.mean()),
        reason=reason,
    )


def _above_usual(size: Array) -> Array:
    """Amplitudes over the median site's of the stretch, decibel."""
    usual = median_of_known(size.T).astype(np.float64)[:, None]
    with np.errstate(divide="ignore", invalid="ignore"):
        return np.asarray(20 * np.log10(size / usual))


def _level_size(evidence: Evidence, sites: NDArray[np.intp], weights: Array) -> Array:
    """How far each site's half-second levels move on their own, microvolt rms, per stretch."""
    log = evidence.log
    own = log.signs.level[:, :, sites].astype(np.float64) @ weights.T
    # The level of a site that is lost stands at 0: what it predicts is unknown then.
    lost = (~log.signs.ok[:, sites]).astype(np.float64) @ (weights != 0).T > 0
    own = np.where(lost[:, None], np.nan, own)
    mean = log.mean(own.mean(axis=1))
    square = log.mean((own**2).mean(axis=1))
    return np.sqrt(np.maximum(square - mean**2, 0))
