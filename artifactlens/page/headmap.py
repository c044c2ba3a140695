"""A head from above for each kind: at which sites it was flagged, and how often."""

from __future__ import annotations

import math
import statistics
from collections.abc import Sequence

import numpy as np
from markupsafe import Markup

from artifactlens.page.svg import joined, tag
from artifactlens.page.words import cut, per_hundred
from artifactlens.result import SiteEvidence

CENTRE = (160.0, 154.0)
RADIUS = 122.0
RING = ("Fp1", "Fp2", "F7", "F8", "T7", "T8", "P7", "P8", "O1", "O2")
RING_SHARE = 0.8
"""The lowest 10-20 ring lies 4/5 of the way from the vertex to nasion or inion."""

RIM_DEGREES = 110.0
"""Angle from the vertex on the outline of the head where no site of the ring is known."""

FARTHEST = 1.17
"""Places below the ears are drawn no farther out than this many radii."""

EARS = {"A1": -1.0, "M1": -1.0, "A2": 1.0, "M2": 1.0}
BIGGEST, NUMBERED, SMALLEST = 12.5, 6.5, 3.0
"""Radius of a mark: at most, with room for a number, and at least."""

WIDTH, HEIGHT, BELOW = 320.0, 345.0, 318.0


def rim_degrees(sites: Sequence[SiteEvidence]) -> float:
    """Angle from the vertex that is drawn on the outline of the head.

    Taken from the recording's own 10-20 ring, because the angle depends on where exactly
    its positions put the centre of the head.
    """
    angles = [
        math.degrees(math.atan2(math.hypot(*site.position[:2]), site.position[2]))
        for site in sites
        if site.position is not None and site.canonical in RING
    ]
    return statistics.median(angles) / RING_SHARE if angles else RIM_DEGREES


def place(site: SiteEvidence, rim: float) -> tuple[float, float] | None:
    """Where a site stands in the picture, None if it has no known place.

    The angle from the vertex is the distance from the middle (azimuthal equidistant
    projection), ``rim`` degrees lie on the outline, the nose is up. Ears without a
    position get a place beside the head.
    """
    if site.position is None:
        side = EARS.get(site.canonical or "")
        return (
            None if side is None else (CENTRE[0] + side * FARTHEST * RADIUS, CENTRE[1] + 8)
        )
    x, y, z = site.position
    flat = math.hypot(x, y)
    if flat == 0:
        return CENTRE
    far = RADIUS * min(FARTHEST, math.degrees(math.atan2(flat, z)) / rim)
    return CENTRE[0] + far * x / flat, CENTRE[1] - far * y / flat


def placed_below(sites: Sequence[SiteEvidence]) -> list[SiteEvidence]:
    """The reference and ground, if the file does not say where they sit."""
    return [s for s in _nowhere(sites) if s.role in ("reference", "ground")]


def unplaced(sites: Sequence[SiteEvidence]) -> list[SiteEvidence]:
    """The sites that only a list under the picture can show."""
    return [s for s in _nowhere(sites) if s.role not in ("reference", "ground")]


def _nowhere(sites: Sequence[SiteEvidence]) -> list[SiteEvidence]:
    return [site for site in sites if place(site, RIM_DEGREES) is None]


def head_svg(kind: str, sites: Sequence[SiteEvidence]) -> Markup:
    """The head of one kind: each site a small clock filled by its share of 100 seconds."""
    rim = rim_degrees(sites)
    spots = [(site, spot) for site in sites if (spot := place(site, rim)) is not None]
    size = _size([spot for _, spot in spots])
    parts = [outline()]
    for site, spot in spots:
        square = site.role in ("reference", "ground")
        parts.append(_mark(site, kind, spot, size, square=square))
    below = placed_below(sites)
    for index, site in enumerate(below):
        x = CENTRE[0] + 62 * (index - (len(below) - 1) / 2)
        parts.append(_mark(site, kind, (x, BELOW), size, square=True))
    return tag(
        "svg",
        joined(parts),
        class_=f"head c-{kind}",
        viewBox=f"0 0 {WIDTH:g} {HEIGHT if below else HEIGHT - 45:g}",
        role="img",
        aria_label=_aloud(kind, sites),
    )


def room(spots: Sequence[tuple[float, float]]) -> float:
    """How far apart the closest sites stand, one in ten aside; infinite for a single one."""
    if len(spots) < 2:
        return math.inf
    points = np.array(spots)
    apart = np.hypot(*(points[:, None] - points[None]).transpose(2, 0, 1))
    np.fill_diagonal(apart, np.inf)
    return float(np.quantile(apart.min(axis=1), 0.1))


def _size(spots: list[tuple[float, float]]) -> float:
    """Radius of the marks: as large as the closest sites allow."""
    return min(BIGGEST, max(SMALLEST, 0.44 * room(spots)))


def outline() -> Markup:
    """The head from above with nose and ears."""
    (x, y), r = CENTRE, RADIUS
    nose = f"M{x - 13:g} {y - r + 1:g}L{x:g} {y - r - 17:g}L{x + 13:g} {y - r + 1:g}"
    ears = "".join(
        f"M{x + side * r:g} {y - 18:g}q{side * 13:g} 2 {side * 10:g} 19t{-side * 10:g} 19"
        for side in (-1, 1)
    )
    return tag(
        "g",
        tag("path", d=nose + ears),
        tag("circle", cx=x, cy=y, r=r),
        class_="outline",
    )


def short_share(share: float | None) -> str:
    """A share out of 100 for inside a mark: ``'38'``, ``'<1'``, ``'0'``, ``'–'``."""
    if share is None:
        return "–"
    return {"none": "0", "below 1": "<1", "above 99": ">99"}.get(
        words := per_hundred(share), words
    )


def _mark(
    site: SiteEvidence, kind: str, spot: tuple[float, float], size: float, *, square: bool
) -> Markup:
    x, y = spot
    share = site.share.get(kind)
    parts = [
        tag("title", f"{cut(site.site)}: {_of_hundred(share)}"),
        _shape(x, y, size, "ring" if share is not None else "ring unknown", square=square),
    ]
    if share:
        # A hundred seconds go once around; the least share still shows as a speck.
        arc = f"{min(100.0, max(1.5, 100 * share)):.1f} 100"
        # Among many small marks the ring would be too fine: there it is a filled sector.
        middle, heavy = (size, 0.38 * size) if size >= NUMBERED else (size / 2, size)
        parts.append(_shape(x, y, middle, "arc", square=square, arc=arc, heavy=heavy))
    # The closest caps leave no room for letters; there the hover text tells.
    if size >= NUMBERED:
        weight = "share" if share else "share faint"
        parts.append(tag("text", short_share(share), x=x, y=y + 4, class_=weight))
    if size >= 8:
        parts.append(
            tag(
                "text",
                cut(site.site, 12 if square else 6),
                x=x,
                y=y + size + 11,
                class_="name",
            )
        )
    return tag("g", joined(parts))


def _shape(
    x: float,
    y: float,
    r: float,
    look: str,
    *,
    square: bool,
    arc: str | None = None,
    heavy: float | None = None,
) -> Markup:
    """A round or square outline whose length counts as 100, from the top clockwise."""
    if square:
        outline = f"M{x:.2f} {y - r:.2f}h{r:.2f}v{2 * r:.2f}h{-2 * r:.2f}v{-2 * r:.2f}z"
    else:
        outline = f"M{x:.2f} {y - r:.2f}a{r:.2f} {r:.2f} 0 1 1 -.01 0z"
    return tag(
        "path",
        d=outline,
        class_=look,
        pathLength=None if arc is None else 100,
        stroke_dasharray=arc,
        stroke_width=heavy,
    )


def _of_hundred(share: float | None) -> str:
    if share is None:
        return "not judged"
    return f"{per_hundred(share)} of 100 seconds"


def _aloud(kind: str, sites: Sequence[SiteEvidence]) -> str:
    known = [(site.share[kind] or 0.0, site) for site in sites if site.share.get(kind)]
    known.sort(key=lambda entry: -entry[0])
    if not known:
        return f"Head from above: no site flagged for {kind}"
    top = ", ".join(
        f"{cut(site.site, 16)} {short_share(share)}" for share, site in known[:5]
    )
    return f"Head from above: {kind}, most flagged sites out of 100 seconds: {top}"
