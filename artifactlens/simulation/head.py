"""The head as one conducting sphere: what a current dipole inside gives at the scalp."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from artifactlens.errors import SitesError
from artifactlens.simulation.scene import unit_directions

if TYPE_CHECKING:
    from numpy.typing import ArrayLike, NDArray

HEAD_RADIUS = 0.098
"""Radius of the sphere, metre: that of the template head on which the sites stand."""

CONDUCTIVITY = 0.33
"""Conductivity of the sphere, siemens per metre (Geddes & Baker 1967, from memory)."""

CORTEX_DEPTH = 0.8
"""Distance of the cortex from the centre, as a share of the radius of the scalp."""

SKULL = 0.75
"""What the skull does: a dipole this much nearer to the centre, in one sphere, has the scalp
map that it would have at its own place inside a skull (the idea: Ary, Klein & Fender 1981,
IEEE Trans Biomed Eng 28:447, from memory; the number: our own fit to the four-shell head
model of mne, depths 0.75 to 0.85, radial and tangential, correlation 0.998 and more; at its
own place the correlation is 0.82 to 0.92, and brain would look too focal).
"""

_MICROVOLT_FROM_NANO = 1e-3


def direction(azimuth_deg: ArrayLike, elevation_deg: ArrayLike) -> NDArray[np.float64]:
    """Unit vector in the head frame (x right, y to the nose, z up), shape (..., 3).

    Azimuth in degrees: 0 to the nose, positive to the right, 180 to the inion. Elevation in
    degrees: 0 level, 90 to the vertex.
    """
    azimuth, elevation = np.radians(azimuth_deg), np.radians(elevation_deg)
    parts = (
        np.sin(azimuth) * np.cos(elevation),
        np.cos(azimuth) * np.cos(elevation),
        np.sin(elevation),
    )
    return np.stack(np.broadcast_arrays(*parts), axis=-1)


def lead_field(
    sites: ArrayLike, positions: ArrayLike, radius: float = HEAD_RADIUS
) -> NDArray[np.float64]:
    r"""Surface potential of unit current dipoles in a homogeneous sphere.

    With :math:`\hat r` the direction of a site (positions are projected onto the sphere),
    :math:`x = R \hat r - r_0` the way from the dipole to it and :math:`d = |x|`,

    .. math:: V = \frac{p}{4 \pi \sigma} \cdot \left[ \frac{2 x}{d^3}
              + \frac{\hat r + x / d}{R (R - \hat r \cdot r_0 + d)} \right]

    This is the gradient, with respect to the source, of the potential of a point current
    source, whose series :math:`\sum_n (2n+1)/n \; r_0^n P_n / R^{n+1}` sums to
    :math:`2/d - R^{-1} \ln(R - \hat r \cdot r_0 + d)` and a constant. It has no singularity
    at the centre, and its mean over the sphere is zero. A closed form of the same potential
    is given in [1]_.

    Parameters
    ----------
    sites : array, shape (n_sites, 3)
        Electrodes, metre.
    positions : array, shape (n_dipoles, 3)
        Places of the dipoles, metre.
    radius : float
        Radius R of the sphere, metre.

    Returns
    -------
    array, shape (n_sites, n_dipoles, 3), microvolt per nanoampere metre

    Raises
    ------
    SitesError
        If a dipole does not lie inside the sphere.

    References
    ----------
    .. [1] Brody, Terry & Ideker (1973), IEEE Trans Biomed Eng 20:141
    """
    outward = unit_directions(sites)[:, None, :]
    sources = np.atleast_2d(np.asarray(positions, dtype=np.float64))
    farthest = float(np.linalg.norm(sources, axis=1).max())
    if farthest >= radius:
        raise SitesError(
            f"Dipoles lie inside the sphere ({radius:g} m); one is put at {farthest:g} m.",
            "Move the source inwards.",
        )
    way = radius * outward - sources[None, :, :]
    distance = np.linalg.norm(way, axis=2, keepdims=True)
    along = np.sum(outward * sources[None, :, :], axis=2, keepdims=True)
    field = 2 * way / distance**3
    field += (outward + way / distance) / (radius * (radius - along + distance))
    return np.asarray(_MICROVOLT_FROM_NANO / (4 * np.pi * CONDUCTIVITY) * field)


def dipole_map(
    sites: ArrayLike, position: ArrayLike, moment: ArrayLike, radius: float = HEAD_RADIUS
) -> NDArray[np.float64]:
    """Potential of one dipole at each site, microvolt, shape (n_sites,).

    ``position`` (3,) in metres, ``moment`` (3,) in nanoampere metres; see
    :func:`lead_field`.
    """
    field = lead_field(sites, np.reshape(position, (1, 3)), radius)
    return np.asarray(field[:, 0] @ np.asarray(moment, dtype=np.float64))


def patch_map(
    sites: ArrayLike,
    centre: ArrayLike,
    *,
    spread_deg: float = 12.0,
    depth: float = CORTEX_DEPTH,
    tilt_deg: float = 0.0,
    tilt_towards_deg: float = 0.0,
) -> NDArray[np.float64]:
    """Map of a patch of cortex that is active as one, largest absolute value 1.

    A cap of dipoles, one at its centre and rings at a half of ``spread_deg`` and at
    ``spread_deg``, all with the moment of the middle; positive outwards.

    Parameters
    ----------
    sites : array, shape (n_sites, 3)
        Electrodes, metre.
    centre : array, shape (3,)
        Direction of the middle of the patch; its length does not matter.
    spread_deg : float
        Degrees from the middle to the rim. 12 degrees at 80 mm is a cap of 9 cm2:
        scalp-visible activity needs 6 cm2 (Cooper et al. 1965, from memory) to 10 cm2 (Tao
        et al. 2007).
    depth : float
        Distance of the dipoles from the centre of the head, as a share of its radius; the
        blur of the skull comes on top (``SKULL``).
    tilt_deg, tilt_towards_deg : float
        Angle of the moment from the outward direction in degrees (90: tangential, as in the
        wall of a sulcus), and towards where around it.

    Returns
    -------
    array, shape (n_sites,), without unit
    """
    middle = unit_directions(np.reshape(centre, (1, 3)))[0]
    helper = np.eye(3)[np.argmin(np.abs(middle))]
    side = np.cross(middle, helper)
    side /= np.linalg.norm(side)
    up = np.cross(side, middle)
    around = np.radians(np.arange(0, 360, 60))
    ring = np.cos(around)[:, None] * side + np.sin(around)[:, None] * up
    inner, outer = np.radians(spread_deg / 2), np.radians(spread_deg)
    places = np.concatenate(
        [
            middle[None, :],
            np.cos(inner) * middle + np.sin(inner) * ring,
            np.cos(outer) * middle + np.sin(outer) * ring,
        ]
    )
    tilt, towards = np.radians(tilt_deg), np.radians(tilt_towards_deg)
    moment = np.cos(tilt) * middle
    moment = moment + np.sin(tilt) * (np.cos(towards) * side + np.sin(towards) * up)
    field = lead_field(sites, places * SKULL * depth * HEAD_RADIUS).sum(axis=1) @ moment
    return np.asarray(field / np.abs(field).max())
