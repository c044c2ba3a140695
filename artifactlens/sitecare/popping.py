"""Pops, and leads that make and lose contact."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from artifactlens.epochs import median_of_known
from artifactlens.sitecare.evidence import SMALL_CHAIN, Evidence, Finding

LEAST_POPS, PLAIN_POPS = 2, 3
"""From so many pops on an electrode is watched, and prepared again."""

POPS_WINDOW_SECONDS, LOOSE_WINDOW_SECONDS = 360.0, 120.0
"""Time within which so many must come."""

WILD_UV = 150.0
REFERENCE_WILD_UV = 80.0
WILD_RATIO = 5.0
"""A second is wild at a site that swings by this much, and this many times the median site; the
reference's row is a mean of all channels and quiet by itself."""

SWING_OVER_FAST, STEP_OVER_FAST = 18.0, 20.0
"""Muscle swings, and steps, by less than this many times its rms at 30-45 Hz; a lone step of
one electrode by about 26 times (a step of height A has a density of 2 (A / 2 pi f)^2 w^2,
with w the window where it falls)."""

LEAST_STAYS = 0.3
"""Share of a pop that is left a tenth of a second later: a twitch comes back."""

LOOSE_SECONDS = 3
"""Wild seconds from which a popping site is called a loose lead."""

BORDER_SHARE = 0.25
MUSCLE_NEAR_SECONDS = 1

REFERENCE_STEP_UV, REFERENCE_STAYS = 30.0, 0.5
REFERENCE_ALONE_DB, REFERENCE_CREST_DB = 11.0, 16.0

STEPS_TOLD_TO = 6
"""Chains of up to so many electrodes are judged by how a step divides among them."""

SMALL_CHAIN_TIMES, SMALL_CHAIN_UV = 1.5, 20.0
SMALL_CHAIN_PART = 0.5
SMALL_CHAIN_RISE_DB, SMALL_CHAIN_CALM_DB = 12.0, 8.0


def popping(evidence: Evidence) -> list[Finding]:
    """Sites and references that pop; those that also run wild are loose leads."""
    log, frame = evidence.log, evidence.frame
    n = len(frame.sites)
    epochs, rows = _pop_cells(evidence)
    pops = np.zeros((len(log.onset), n))
    np.add.at(pops, (epochs, rows), 1)
    steps = _small_chain_pops(evidence) | _reference_pops(evidence)
    # A step on the border of two seconds is seen in both, in the same size.
    size = np.nan_to_num(evidence.step.astype(np.float64))
    alike = np.abs(np.diff(size, axis=0)) <= BORDER_SHARE * np.maximum(size[1:], size[:-1])
    steps[1:] &= ~(alike & (steps[:-1] | (pops[:-1] > 0)))
    steps[:-1] &= ~(alike & (pops[1:] > 0))
    pops[(pops == 0) & steps] = 1
    wild = _wild(evidence)
    per_stretch = log.total(pops)
    wild_stretch = log.total(wild)
    known = evidence.present()
    seconds = log.signs.ok.sum(axis=0)
    company = evidence.company()
    found = []
    for row in range(n):
        count = int(per_stretch[:, row].sum())
        bad = int(wild_stretch[:, row].sum())
        busy = _busiest(log.onset, wild[:, row], LOOSE_WINDOW_SECONDS)
        loose = busy >= LOOSE_SECONDS and count >= 1
        if not (count >= LEAST_POPS or loose):
            continue
        held = (per_stretch[:, row] > 0) | (loose & (wild_stretch[:, row] > 0))
        minutes = max(seconds[row] / 60, 1 / 6)
        often = (
            count >= PLAIN_POPS
            and _busiest(log.onset, pops[:, row], POPS_WINDOW_SECONDS) >= PLAIN_POPS
        )
        span = _span_words(minutes)
        noun = "pop" if count == 1 else "pops"
        if loose:
            reason = f"comes and goes: large swings in {bad} s and {count} {noun} in {span}"
        else:
            reason = f"{count} {noun} in {span}"
        at_reference = frame.roles[row] == "reference"
        if company[row] < SMALL_CHAIN:
            reason += (
                ", largest there; so few electrodes cannot tell for sure which one it is"
            )
        else:
            reason += (
                " in every channel alike" if at_reference else ", unlike its neighbours"
            )
        found.append(
            Finding(
                cause="reference" if at_reference else "site",
                sign="loose lead" if loose else "pops",
                rows=(row,),
                held=held,
                known=known[:, row] | held,
                plain=often or loose,
                weight=count / minutes + 2.0 * bad / minutes,
                reason=reason,
                lasting=False,
            )
        )
    return found


def _pop_cells(evidence: Evidence) -> tuple[NDArray[np.intp], NDArray[np.intp]]:
    """Epoch and row of every pop that is no spike of muscle."""
    pairs = [(moment, row) for moment, rows in evidence.pops for row in rows]
    if not pairs:
        nothing = np.zeros(0, dtype=np.intp)
        return nothing, nothing
    moments = np.array([moment for moment, _ in pairs])
    rows = np.array([row for _, row in pairs], dtype=np.intp)
    onset = evidence.log.onset
    epochs = np.clip(np.searchsorted(onset, moments, side="right") - 1, 0, len(onset) - 1)
    muscle = evidence.marked("muscle")
    near = muscle.copy()
    for shift in range(1, MUSCLE_NEAR_SECONDS + 1):
        near[shift:] |= muscle[:-shift]
        near[:-shift] |= muscle[shift:]
    with np.errstate(invalid="ignore"):
        twitch = near & ~(evidence.step > STEP_OVER_FAST * evidence.fast_uv())
        spiky = twitch | (evidence.step_stays < LEAST_STAYS)
    keep = ~spiky[epochs, rows]
    return epochs[keep], rows[keep]


def _wild(evidence: Evidence) -> NDArray[np.bool_]:
    """Seconds in which a site swings far beyond all others, (n_epochs, n_sites)."""
    swing = evidence.swing.astype(np.float64)
    if swing.shape[1] < 3:
        return np.zeros(swing.shape, dtype=bool)
    usual = median_of_known(swing.T)[:, None]
    second = np.partition(np.nan_to_num(swing), -2, axis=1)[:, -2:-1]
    # Eye movements may reach one frontal pole twice as much as the other.
    times = np.where(evidence.marked("eye"), 4.0, 2.0)
    least = np.where(evidence.references(), REFERENCE_WILD_UV, WILD_UV)
    with np.errstate(invalid="ignore"):
        wild = (swing > least) & (swing > WILD_RATIO * usual) & (swing > times * second)
        muscle = evidence.marked("muscle") & ~(swing > SWING_OVER_FAST * evidence.fast_uv())
    return np.asarray(wild & ~muscle)


def _reference_pops(evidence: Evidence) -> NDArray[np.bool_]:
    """Plain steps of a reference that no site shares, (n_epochs, n_sites).

    The classifier was made for sites, whose traces are louder than the mean of all.
    """
    with np.errstate(invalid="ignore"):
        plain = (
            (evidence.step >= REFERENCE_STEP_UV)
            & (evidence.step_alone >= REFERENCE_ALONE_DB)
            & (evidence.step_crest >= REFERENCE_CREST_DB)
            & (evidence.step_stays >= REFERENCE_STAYS)
        )
    return np.asarray(plain & evidence.references())


def _small_chain_pops(evidence: Evidence) -> NDArray[np.bool_]:
    """Steps in chains too small for neighbours to speak, (n_epochs, n_sites).

    A step at one electrode of a chain of three is solved as two thirds there and one third,
    turned over, at each of the other two; of a chain of n as n - 1 parts there and one at
    each other. It is a pop if its electrode has the largest part of it, far above its usual,
    while no other chain steps.
    """
    chain = evidence.frame.chain
    sizes = np.bincount(chain)
    step = np.nan_to_num(evidence.step, nan=0.0)
    rise = np.nan_to_num(evidence.step_rise, nan=-99.0)
    stays = np.nan_to_num(evidence.step_stays, nan=-1.0)
    found = np.zeros(step.shape, dtype=bool)
    for number in np.flatnonzero((sizes <= STEPS_TOLD_TO) & (sizes >= 3)):
        rows = np.flatnonzero(chain == number)
        others = rise[:, chain != number]
        calm = others.max(axis=1, initial=-99.0) < SMALL_CHAIN_CALM_DB
        order = np.argsort(-step[:, rows], axis=1)
        first = np.take_along_axis(step[:, rows], order, axis=1)
        times = max(SMALL_CHAIN_TIMES, SMALL_CHAIN_PART * (len(rows) - 1))
        lead = (first[:, 0] >= times * first[:, 1]) & calm
        at = rows[order[:, 0]]
        epochs = np.arange(len(step))
        lead &= (rise[epochs, at] >= SMALL_CHAIN_RISE_DB) & (first[:, 0] >= SMALL_CHAIN_UV)
        lead &= stays[epochs, at] >= LEAST_STAYS
        found[epochs[lead], at[lead]] = True
    return found


def _busiest(
    onset: NDArray[np.float64], count: NDArray[np.generic], window: float
) -> float:
    """Most events within any ``window`` seconds."""
    total = np.concatenate([[0.0], np.cumsum(count, dtype=np.float64)])
    last = np.searchsorted(onset, onset + window)
    return float((total[last] - total[:-1]).max(initial=0.0))


def _span_words(minutes: float) -> str:
    return f"{minutes:.0f} min" if minutes >= 1.5 else f"{60 * minutes:.0f} s"
