"""Features of the field over the head: spread, isolation and frontal polarity."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from artifactlens.epochs import median_of_known

if TYPE_CHECKING:
    from artifactlens.epochs import EpochBatch
    from artifactlens.frames import Frame

Array = NDArray[np.float32]

SLOW_RATE = 50
"""Samples a second of the smoothed traces on which fields are compared."""

SPREAD_SHARE = 0.3
"""A site takes part in a field if it follows with at least this share of its size."""

FOLLOW_SECONDS = 0.4
"""A site is compared with the frontal deflection so far to either side: a blink's length."""

LEAST_UV = np.float32(0.05)
"""Deflections of this size and below agree with nothing."""

EYE_POSITION_M = np.array([[-0.032, 0.078, -0.035], [0.032, 0.078, -0.035]])
"""Centres of the eyes, origin at the centre of the head sphere (anatomical, rounded)."""

HEAD_RADIUS_M = 0.095


@dataclass(frozen=True, slots=True)
class EyeLeads:
    """Which sites see the eyes, from real positions.

    ``front``, ``row``, ``behind``, ``left`` and ``right`` are boolean masks (n_sites,):
    the frontal poles, the sites next behind them, the back of the head, both temples;
    ``near`` (n_sites,) the front half, where the eyes are seen.
    ``maps`` (2, n_sites) is the field of a vertical and of a lateral turn of the eyes,
    NaN without position. ``front_row`` says in words which frontal sites serve.
    """

    front: NDArray[np.bool_]
    row: NDArray[np.bool_]
    near: NDArray[np.bool_]
    behind: NDArray[np.bool_]
    left: NDArray[np.bool_]
    right: NDArray[np.bool_]
    maps: NDArray[np.float64]
    front_row: str


def eye_leads(frame: Frame) -> EyeLeads:
    """Choose the sites that stand for the eyes, by direction from the head's centre.

    Frontal poles lie within about 40 degrees of straight ahead; where there are none, the
    row behind serves. The maps are those of current dipoles at both eyes in an unbounded
    medium, V = p.r/r^3: up and a little forward, and to the right.
    """
    distance = np.linalg.norm(frame.positions, axis=1)
    with np.errstate(invalid="ignore"):
        x, y, _ = (frame.positions / distance[:, None]).T
        scalp = np.isfinite(distance) & (np.array(frame.roles) != "reference")
        poles = scalp & (y >= 0.75)
        words = "frontal poles"
        if not poles.any():
            poles, words = scalp & (y >= 0.5), "frontal sites"
        behind = scalp & (y <= -0.3)
        if not behind.any():
            behind = scalp & (y <= 0.1) & (np.abs(x) < 0.9)
        near = scalp & (y > 0.1)
        if near.sum() < 4:
            near = scalp
        middle = scalp & ~poles & (y >= 0.3) & (np.abs(x) < 0.6)
        if not middle.any():
            middle = behind
        left, right = scalp & (x <= -0.6) & (y >= 0.3), scalp & (x >= 0.6) & (y >= 0.3)
    where = frame.positions / distance[:, None] * HEAD_RADIUS_M
    away = where[None] - EYE_POSITION_M[:, None]
    cube = np.linalg.norm(away, axis=2) ** 3
    moments = np.array([[0.0, 0.5, 0.87], [1.0, 0.0, 0.0]])
    maps = np.einsum("mk,esk->ms", moments, away / cube[:, :, None])
    return EyeLeads(poles, middle, near, behind, left, right, maps / 1000, words)


def slow_traces(batch: EpochBatch) -> Array:
    """Site potentials smoothed to about 50 samples a second by block means.

    Returns
    -------
    array, shape (n_sites, n_epochs + 2, n_slow), microvolt, context epochs included
    """
    n = batch.n_samples
    width = max(1, n // SLOW_RATE)
    count = n // width
    average = np.zeros((n, count), dtype=np.float32)
    average[np.arange(count * width), np.repeat(np.arange(count), width)] = 1 / width
    return batch.windows(batch.starts, n) @ average


def field_covariance(slow: Array) -> Array:
    """Covariance between sites within each epoch, shape (n_epochs, n_sites, n_sites), uV^2."""
    own = slow[:, 1:-1].transpose(1, 0, 2)
    own = own - own.mean(axis=2, keepdims=True)
    return own @ own.transpose(0, 2, 1) / np.float32(own.shape[2])


def field_spread(covariance: Array) -> Array:
    """Share of the other sites that follow with at least 0.3 of the site's size.

    Regression of each other site on this one: cov / var. One electrode alone gives 0. Sites
    without variance do not count.

    Returns
    -------
    array, shape (n_sites, n_epochs), 0..1; NaN where the site has no variance
    """
    variance = np.einsum("ess->es", covariance)
    others = np.maximum((variance > 0).sum(axis=1, keepdims=True) - 1, 1)
    with np.errstate(divide="ignore", invalid="ignore"):
        follow = np.abs(covariance) / variance[:, :, None] >= SPREAD_SHARE
        share = (follow.sum(axis=2) - 1) / others.astype(np.float32)
    return np.where(variance > 0, share, np.float32(np.nan)).T.astype(np.float32)


def isolation(covariance: Array, neighbours: Array) -> Array:
    r"""What a site shows that its neighbours do not.

    :math:`10 \log_{10} (1 - \max(0, r)^2)` with *r* the correlation between the site and
    the weighted mean of its neighbours: 0 dB when they share nothing, -10 dB when nine
    tenths of the power is shared. Activity at one electrode alone is artifact until proven
    otherwise: a presumption, not proof.

    Returns
    -------
    array, shape (n_sites, n_epochs), decibel, -30..0; NaN where the site or all its
    neighbours are without signal
    """
    toward = covariance @ neighbours.T
    shared = np.einsum("ess->es", toward)
    mean_power = np.einsum("st,ets->es", neighbours, toward)
    variance = np.einsum("ess->es", covariance)
    with np.errstate(divide="ignore", invalid="ignore"):
        r = shared / np.sqrt(variance * mean_power)
    alone = 1 - np.clip(np.where(np.isfinite(r), r, 0), 0, 1) ** 2
    decibel = 10 * np.log10(np.maximum(alone, np.float32(1e-3)))
    known = (variance > 0) & (mean_power > 0)
    return np.where(known, decibel, np.float32(np.nan)).T.astype(np.float32)


@dataclass(frozen=True, slots=True)
class FrontalPolarity:
    """What the sites near the eyes do, epoch by epoch.

    ``vertical`` and ``lateral`` (n_epochs,) signed microvolt: the largest departure, within
    the epoch, of the frontal poles from the sites behind, and of the right from the left
    temple, from their median over three seconds. ``at`` (n_epochs,) its place within the
    epoch, 0..1. ``rhythm`` (n_epochs,) the highest autocorrelation between 0.3 and 0.6 s.
    ``reach`` (n_sites, n_epochs) microvolt: how far the site moves with that deflection,
    against the sites behind. ``match`` (n_epochs,) 0..1: share of this field that the two
    eye maps explain; ``span`` (n_epochs,) the same over the whole second. ``part``
    (n_sites, n_epochs) microvolt: what they predict at the site, and
    ``agree`` (n_sites, n_epochs) -1..1 how that agrees with what is there: 1 if it is the
    same, 0 if one of both is far larger, negative if they are opposite. ``swing`` (n_sites,
    n_epochs) microvolt: how far what the eye maps predict there, fitted in the front half of
    the head, moves within the second; ``front_swing`` and ``side_swing`` (n_epochs,)
    microvolt: how far the poles move against the row behind them, and the temples against
    each other.
    """

    vertical: Array
    lateral: Array
    at: Array
    rhythm: Array
    reach: Array
    match: Array
    span: Array
    part: Array
    agree: Array
    swing: Array
    front_swing: Array
    side_swing: Array


def frontal_polarity(
    slow: Array, ok: NDArray[np.bool_], leads: EyeLeads
) -> FrontalPolarity:
    """Measure the eye deflections of each epoch; see :class:`FrontalPolarity`.

    Parameters
    ----------
    slow : array, shape (n_sites, n_epochs + 2, n_slow), microvolt
    ok : array, shape (n_sites, n_epochs + 2), bool
    leads : EyeLeads

    Notes
    -----
    Cornea positive: a blink or upward gaze makes the frontal poles positive, gaze to the
    right makes F8 positive and F7 negative (Picton et al. 2000).
    """
    behind = _group_mean(slow, ok, leads.behind)
    vertical = _group_mean(slow, ok, leads.front) - behind
    lateral = _group_mean(slow, ok, leads.right) - _group_mean(slow, ok, leads.left)
    v_size, v_at = _departure(vertical)
    h_size, h_at = _departure(lateral)
    sideways = np.nan_to_num(np.abs(h_size)) > np.nan_to_num(np.abs(v_size))
    at = np.where(sideways, h_at, v_at)

    against = slow - np.where(np.isfinite(behind), behind, 0)
    three = _three_seconds(against)
    away = three - np.median(three, axis=2, keepdims=True)
    traces = _three_seconds(np.stack([vertical, lateral]))
    traces -= median_of_known(traces.transpose(2, 0, 1))[:, :, None]
    lead = np.where(sideways[:, None], traces[1], traces[0])
    departure = _following(away, lead, at)
    departure = np.where(ok[:, 1:-1], departure, np.float32(np.nan))
    everywhere = np.ones(len(slow), dtype=bool)
    explained, power, predicted = _map_fit(departure[:, :, None], leads, everywhere)
    predicted = predicted[:, :, 0]
    larger = np.maximum(np.abs(departure), np.abs(predicted)) ** 2 + LEAST_UV**2
    n = slow.shape[2]
    second = np.where(ok[:, 1:-1, None], away[:, :, n : 2 * n], np.float32(np.nan))
    over, total, _ = _map_fit(second, leads, everywhere)
    _, _, trace = _map_fit(second, leads, leads.near)
    local = _group_mean(slow, ok, leads.front) - _group_mean(slow, ok, leads.row)
    with np.errstate(divide="ignore", invalid="ignore"):
        match = np.clip(explained[:, 0] / power[:, 0], 0, 1)
        span = np.clip(over.sum(axis=1) / total.sum(axis=1), 0, 1)
    return FrontalPolarity(
        vertical=v_size,
        lateral=h_size,
        at=(at / np.float32(slow.shape[2])).astype(np.float32),
        rhythm=_rhythm(_three_seconds(vertical[None])[0]),
        reach=np.abs(departure),
        match=match.astype(np.float32),
        span=span.astype(np.float32),
        part=np.abs(predicted),
        agree=departure * predicted / larger,
        swing=np.ptp(trace, axis=2),
        front_swing=np.ptp(local[1:-1], axis=1),
        side_swing=np.ptp(lateral[1:-1], axis=1),
    )


def _group_mean(slow: Array, ok: NDArray[np.bool_], group: NDArray[np.bool_]) -> Array:
    weight = (ok & group[:, None]).astype(np.float32)
    with np.errstate(divide="ignore", invalid="ignore"):
        mean = np.einsum("se,sem->em", weight, slow) / weight.sum(axis=0)[:, None]
    return mean.astype(np.float32)


def _three_seconds(signal: Array) -> Array:
    """(rows, n_epochs + 2, m) to (rows, n_epochs, 3 m): each epoch with its neighbours."""
    return np.concatenate([signal[:, :-2], signal[:, 1:-1], signal[:, 2:]], axis=2)


def _following(away: Array, lead: Array, at: NDArray[np.intp]) -> Array:
    """How far each site moves with the frontal deflection, (n_sites, n_epochs), microvolt.

    Regression of the site on the deflection within 0.4 s of its largest moment, times the
    deflection at that moment: what does not follow it, rhythms and muscle, averages out.
    """
    n = lead.shape[1] // 3
    reach = np.arange(-round(FOLLOW_SECONDS * n), round(FOLLOW_SECONDS * n) + 1)
    near = (at + n)[:, None] + reach
    course = np.nan_to_num(np.take_along_axis(lead, near, axis=1))
    sites = np.take_along_axis(away, near[None], axis=2)
    with np.errstate(divide="ignore", invalid="ignore"):
        share = np.einsum("et,set->se", course, sites) / np.einsum(
            "et,et->e", course, course
        )
    return share * lead[np.arange(len(at)), at + n]


def _departure(trace: Array) -> tuple[Array, NDArray[np.intp]]:
    usual = median_of_known(_three_seconds(trace[None])[0].T)
    away = trace[1:-1] - usual[:, None]
    at = np.nan_to_num(np.abs(away)).argmax(axis=1)
    return away[np.arange(len(away)), at], at


def _rhythm(three: Array) -> Array:
    """Highest normalised autocorrelation between lags of 0.3 and 0.6 s."""
    centred = three - three.mean(axis=1, keepdims=True)
    length = centred.shape[1]
    per_second = length / 3
    lags = np.unique(np.rint(np.linspace(0.3, 0.6, 16) * per_second).astype(int))
    power = np.einsum("et,et->e", centred, centred)
    values = np.stack(
        [
            np.einsum("et,et->e", centred[:, lag:], centred[:, : length - lag])
            for lag in lags
        ]
    )
    with np.errstate(divide="ignore", invalid="ignore"):
        best = np.asarray(values.max(axis=0) / power)
    return np.where(power > 0, best, np.float32(np.nan)).astype(np.float32)


def _map_fit(
    departure: Array, leads: EyeLeads, where: NDArray[np.bool_]
) -> tuple[Array, Array, Array]:
    """Least squares of the field on two eye maps at every moment.

    Parameters
    ----------
    departure : array, shape (n_sites, n_epochs, n_slow), microvolt, NaN where lost
    leads : EyeLeads
    where : array, shape (n_sites,), bool
        Sites on which the maps are fitted.

    Returns
    -------
    explained, power : arrays, shape (n_epochs, n_slow)
        What the maps explain of the field's sum of squares over the sites, and all of it;
        NaN where fewer than four sites with a place are there.
    predicted : array, shape (n_sites, n_epochs, n_slow), microvolt
        What they predict at each site against the sites behind.
    """
    placed = np.isfinite(leads.maps).all(axis=0)
    known = placed & where
    _, n_epochs, n_slow = departure.shape
    predicted = np.full(departure.shape, np.nan, dtype=np.float32)
    nothing = np.full((n_epochs, n_slow), np.nan, dtype=np.float32)
    if known.sum() < 4:
        return nothing, nothing, predicted
    maps = leads.maps[:, known]
    there = np.isfinite(departure[known, :, 0]).T
    count = np.maximum(there.sum(axis=1), 1)[:, None, None]
    seen = there[:, :, None]
    field = np.where(seen, departure[known].transpose(1, 0, 2), 0).astype(np.float64)
    field = np.where(seen, field - field.sum(axis=1, keepdims=True) / count, 0)
    templates = maps[None] * there[:, None]
    templates = np.where(
        there[:, None], templates - templates.sum(axis=2, keepdims=True) / count, 0
    )
    gram = templates @ templates.transpose(0, 2, 1)
    ridge = 1e-9 * np.trace(gram, axis1=1, axis2=2) + 1e-30
    gram += ridge[:, None, None] * np.eye(2)
    moment = templates @ field
    fitted = np.linalg.solve(gram, moment)
    power = np.einsum("est,est->et", field, field)
    explained = np.einsum("emt,emt->et", fitted, moment)
    enough = (there.sum(axis=1) >= 4)[:, None]
    behind = leads.behind & placed
    far = leads.maps[:, behind].mean(axis=1) if behind.any() else maps.min(axis=1)
    against = leads.maps[:, placed] - far[:, None]
    at_sites = np.einsum("emt,ms->set", fitted, against)
    predicted[placed] = np.where(enough[None], at_sites, np.nan)
    # A site that is lost has no prediction either.
    predicted[~np.isfinite(departure)] = np.nan
    return (
        np.where(enough, explained, np.nan).astype(np.float32),
        np.where(enough, power, np.nan).astype(np.float32),
        predicted,
    )
