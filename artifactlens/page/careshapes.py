"""The shapes of the technologist's sheet: each verdict its own, told apart without colour."""

from __future__ import annotations

import math

from markupsafe import Markup

from artifactlens.page.svg import joined, tag

SHAPES: dict[str, tuple[str, str]] = {
    "re-prep": ("filled square", "prepare again"),
    "check": ("triangle", "look here before re-prepping"),
    "ask": ("diamond", "ask the patient, no re-prep"),
    "watch": ("double ring", "wait, look again"),
    "cannot tell": ("dotted ring with ?", "not judged, see below"),
    "leave": ("small ring", "nothing to do"),
}
"""Every verdict, the shape it is drawn as, and what it asks for."""

LINES: dict[str, tuple[str, str]] = {
    "bridged": ("double line", "clean between, re-prep both"),
    "swapped": ("broken arrow", "suspected, check placement"),
}

Spot = tuple[float, float]


def symbol(verdict: str, x: float, y: float, r: float, words: str = "") -> Markup:
    """The shape of a verdict about a middle, with a number or nothing inside."""
    fit = r * {1: 1.3, 2: 1.1}.get(len(words), 0.85)
    if verdict == "re-prep":
        shape = tag("rect", x=x - r, y=y - r, width=2 * r, height=2 * r, class_="solid")
        return joined([shape, _inside(words, x, y, fit, "inside inverse")])
    if verdict == "check":
        d = f"M{x:.2f} {y - 1.35 * r:.2f}l{1.35 * r:.2f} {2.3 * r:.2f}h{-2.7 * r:.2f}z"
        shape = tag("path", d=d, class_="edge", stroke_width=0.28 * r)
        return joined([shape, _inside(words, x, y + 0.28 * r, 0.9 * fit, "inside")])
    if verdict == "ask":
        far = 1.3 * r
        side = f"l{far:.2f} {far:.2f}l{-far:.2f} {far:.2f}l{-far:.2f} {-far:.2f}z"
        d = f"M{x:.2f} {y - far:.2f}{side}"
        shape = tag("path", d=d, class_="edge", stroke_width=0.12 * r)
        return joined([shape, _inside(words, x, y, 0.85 * fit, "inside")])
    if verdict == "watch":
        rings = [
            tag("circle", cx=x, cy=y, r=far * r, class_="edge", stroke_width=0.11 * r)
            for far in (1.05, 0.8)
        ]
        return joined([*rings, _inside(words, x, y, 0.8 * fit, "inside")])
    if verdict == "cannot tell":
        dots = f"{0.12 * r:.2f} {0.34 * r:.2f}"
        ring = tag(
            "circle", cx=x, cy=y, r=0.8 * r, class_="edge dotted", stroke_dasharray=dots
        )
        return joined([ring, _inside(words or "?", x, y, r, "inside")])
    return tag("circle", cx=x, cy=y, r=0.42 * r, class_="edge", stroke_width=1)


def _inside(words: str, x: float, y: float, height: float, look: str) -> Markup:
    if not words:
        return Markup("")
    return tag("text", words, x=x, y=y + 0.35 * height, font_size=height, class_=look)


def line(sign: str, start: Spot, end: Spot, size: float) -> Markup:
    """What joins two sites: a heavy double line, or a broken one with a head at each end."""
    (ax, ay), (bx, by) = start, end
    far = math.hypot(bx - ax, by - ay) or 1.0
    ux, uy = (bx - ax) / far, (by - ay) / far
    if sign == "bridged":
        d = f"M{ax:.2f} {ay:.2f}L{bx:.2f} {by:.2f}"
        return tag(
            "g",
            tag("path", d=d, class_="stroke", stroke_width=0.75 * size),
            tag("path", d=d, class_="gap", stroke_width=0.3 * size),
            data_line=sign,
        )
    off = min(1.55 * size, 0.3 * far)
    ax, ay, bx, by = ax + off * ux, ay + off * uy, bx - off * ux, by - off * uy
    heads = "".join(
        f"M{x + h * (turn * ux - 0.6 * uy):.2f} {y + h * (turn * uy + 0.6 * ux):.2f}"
        f"L{x:.2f} {y:.2f}"
        f"L{x + h * (turn * ux + 0.6 * uy):.2f} {y + h * (turn * uy - 0.6 * ux):.2f}"
        for x, y, turn in ((ax, ay, 1), (bx, by, -1))
        for h in (0.62 * size,)
    )
    return tag(
        "g",
        tag(
            "path",
            d=f"M{ax:.2f} {ay:.2f}L{bx:.2f} {by:.2f}",
            class_="stroke",
            stroke_width=0.17 * size,
            stroke_dasharray=f"{0.5 * size:.2f} {0.35 * size:.2f}",
        ),
        tag("path", d=heads, class_="stroke", stroke_width=0.17 * size),
        data_line=sign,
    )
