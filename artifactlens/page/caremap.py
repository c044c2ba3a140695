"""The head of the technologist's sheet: shapes tell verdicts, numbers the order of work."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from itertools import pairwise

from markupsafe import Markup

from artifactlens.advice import VERDICTS, Advice
from artifactlens.page.careshapes import LINES, Spot, line, symbol
from artifactlens.page.headmap import (
    CENTRE,
    RADIUS,
    outline,
    place,
    placed_below,
    rim_degrees,
    room,
    unplaced,
)
from artifactlens.page.svg import joined, tag
from artifactlens.page.words import cut, number
from artifactlens.result import Result, SiteEvidence

TOP, HEIGHT = 9.0, 326.0
HEAD_FROM, HEAD_TO = CENTRE[0] - RADIUS - 15, CENTRE[0] + RADIUS + 15
"""From ear to ear."""

BELOW, MOST_BELOW = 303.0, 6
ACCEPTABLE_KOHM = 10.0
"""Impedance up to which a site is acceptable if all are even (common practice)."""

NAMED, MEASURED = 17.0, 28.0
"""Room between sites from which untroubled ones keep their name, and all their impedance."""

_LETTER = 0.6
"""Width of a character over its height, for keeping names apart; wide on purpose."""

Box = tuple[float, float, float, float]


@dataclass(frozen=True, slots=True)
class Mark:
    """A site on the map, with the entries of the list that concern it, the gravest first."""

    site: SiteEvidence
    entries: tuple[Advice, ...]

    @property
    def verdict(self) -> str:
        """What the gravest of its entries asks for, else what is said of the site."""
        return self.entries[0].verdict if self.entries else self.site.verdict

    @property
    def judged(self) -> bool:
        """Whether anything is known: a ground has no signal, only the others tell of it."""
        return self.site.role != "ground" or bool(self.entries)


def marks(result: Result) -> list[Mark]:
    """All sites, and whatever else an entry needs a place for; there is always a ground."""
    rows = list(result.sites)
    if not any(site.role == "ground" for site in rows):
        rows.append(_stand_in("ground", "ground"))
    found = {entry.number: concerned(entry, rows) for entry in result.advice}
    for entry in result.advice:
        if not found[entry.number]:
            role = "reference" if entry.cause == "reference" else "unknown"
            rows.append(_stand_in(entry.subject, role))
            found[entry.number] = [rows[-1]]
    ordered = sorted(result.advice, key=_gravity)
    return [
        Mark(row, tuple(e for e in ordered if any(row is one for one in found[e.number])))
        for row in rows
    ]


def _gravity(entry: Advice) -> tuple[bool, int, int]:
    """A site that is to be re-prepped shows so, whatever else is asked before."""
    return entry.state == "cured", VERDICTS.index(entry.verdict), entry.number


def concerned(entry: Advice, sites: Sequence[SiteEvidence]) -> list[SiteEvidence]:
    """The rows that an entry is about, in the order in which it names them."""
    if entry.cause == "ground":
        return [site for site in sites if site.role == "ground"]
    named = [site for name in entry.sites for site in sites if site.site == name]
    if entry.cause == "reference" and not named:
        return [site for site in sites if site.role == "reference"]
    return named


def _stand_in(name: str, role: str) -> SiteEvidence:
    return SiteEvidence(
        site=name,
        channel=None,
        canonical=None,
        role=role,
        position=None,
        seconds_judged=0.0,
        share={},
        pops_per_minute=None,
        mains_uv=None,
        mains_db=None,
        isolation_db=None,
        fault="",
    )


def spots(shown: Sequence[Mark]) -> dict[int, Spot]:
    """Where each mark stands, by its index; those missing have no place in the picture.

    Below the head stand the ground and reference, then others without a known place that
    the list speaks of, as many as there is room for.
    """
    sites = [mark.site for mark in shown]
    rim = rim_degrees(sites)
    found = {
        index: spot
        for index, site in enumerate(sites)
        if (spot := place(site, rim)) is not None
    }
    wanted = [*placed_below(sites), *unplaced(sites)]
    below = [
        index
        for site in wanted
        for index, mark in enumerate(shown)
        if mark.site is site and (mark.entries or site.role in ("reference", "ground"))
    ][:MOST_BELOW]
    step = min(74.0, 2 * RADIUS / max(1, len(below)))
    for rank, index in enumerate(below):
        found[index] = (CENTRE[0] + step * (rank - (len(below) - 1) / 2), BELOW)
    return found


def care_svg(shown: Sequence[Mark], advice: Sequence[Advice]) -> Markup:
    """The whole map: outline, lines between sites, marks, names."""
    at = spots(shown)
    wide = room([spot for spot in at.values() if spot[1] < BELOW])
    size, _ = sizes(wide)
    left = min([HEAD_FROM, *(x - 1.5 * size for x, _ in at.values())])
    right = max([HEAD_TO, *(x + 1.5 * size for x, _ in at.values())])
    lines = joins(shown, at, advice)
    # The quiet ones lie beneath, the first to be worked on lie on top.
    order = sorted(at, key=lambda index: -_urgency(shown[index]))
    # Among many sites the quiet ones shrink further, so that the others stand out.
    quiet = min(size, 0.4 * wide)
    drawn = [
        _mark(mark, at[index], quiet if mark.verdict == "leave" else size)
        for index in order
        for mark in (shown[index],)
    ]
    return tag(
        "svg",
        outline(),
        joined([line(sign, *ends, size) for sign, ends in lines]),
        joined(drawn),
        joined(_names(shown, at, [ends for _, ends in lines], wide, (left, right))),
        class_="care",
        viewBox=f"{left:.4g} {TOP:g} {right - left:.4g} {HEIGHT:g}",
        role="img",
        aria_label=_aloud(shown),
    )


def sizes(wide: float) -> tuple[float, float]:
    """Half the width of a mark, and the height of letters, for so much room between sites."""
    return _within(0.27 * wide, 7.5, 15.0), _within(0.3 * wide, 8.5, 14.0)


def _within(value: float, least: float, most: float) -> float:
    return min(most, max(least, value))


def _urgency(mark: Mark) -> float:
    return mark.entries[0].number if mark.entries else math.inf


def _mark(mark: Mark, spot: Spot, size: float) -> Markup:
    (x, y), site = spot, mark.site
    if not mark.judged:
        told = f"{cut(site.site)}: not judged"
        return tag("g", joined([tag("title", told), _earth(x, y - 4, 1.6)]))
    told = f"{cut(site.site)}: {mark.verdict}"
    if mark.entries:
        told += f", number {', '.join(str(entry.number) for entry in mark.entries)}"
    elif site.why:
        told += f", {cut(site.why, 120)}"
    words = str(mark.entries[0].number) if mark.entries else ""
    parts = [tag("title", told), symbol(mark.verdict, x, y, size, words)]
    if site.role == "ground":
        parts.append(_earth(x + 1.5 * size + 4.5, y, 1.0))
    numbers = " ".join(str(entry.number) for entry in mark.entries)
    return tag("g", joined(parts), data_verdict=mark.verdict, data_number=numbers or None)


def _earth(x: float, y: float, scale: float) -> Markup:
    """The sign for earth on every plug and box: three bars that grow shorter."""
    up, *bars = (scale * length for length in (7.0, 4.5, 2.5, 0.8))
    d = f"M{x:.2f} {y:.2f}v{-up:.2f}" + "".join(
        f"M{x - half:.2f} {y + 2.6 * scale * row:.2f}h{2 * half:.2f}"
        for row, half in enumerate(bars)
    )
    return tag("path", d=d, class_="earth")


def joins(
    shown: Sequence[Mark], at: dict[int, Spot], advice: Sequence[Advice]
) -> list[tuple[str, tuple[Spot, Spot]]]:
    """Which sites are joined: the sign, and both ends."""
    lines = []
    for entry in advice:
        ends = {
            shown[index].site.site: spot
            for index, spot in at.items()
            if entry in shown[index].entries and entry.sign in LINES
        }
        named = [name for name in entry.sites if name in ends]
        lines += [(entry.sign, (ends[a], ends[b])) for a, b in pairwise(named)]
    return lines


def _names(
    shown: Sequence[Mark],
    at: dict[int, Spot],
    lines: Sequence[tuple[Spot, Spot]],
    wide: float,
    sides: tuple[float, float],
) -> list[Markup]:
    """Names beside the marks: all of those with a verdict, the others where there is room."""
    size, letters = sizes(wide)
    loud = {index for index in at if shown[index].verdict != "leave"}
    marks_ = {
        index: _about(at[index], size if index in loud else 0.42 * size) for index in at
    }
    taken = [marks_[index] for index in at if index in loud]
    taken += [_about(spot, 0.25 * size) for ends in lines for spot in _along(*ends, size)]
    faint = [marks_[index] for index in at if index not in loud]
    names = []
    for index in sorted(at, key=lambda index: (_urgency(shown[index]), index)):
        mark, below = shown[index], at[index][1] == BELOW
        if index not in loud and wide < NAMED and not below:
            continue
        name = cut(mark.site.site, 14 if below else 8)
        also = "".join(f" +{entry.number}" for entry in mark.entries[1:3])
        ohms = mark.site.impedance_kohm
        told = (
            f" {number(ohms)}" if ohms is not None and (wide >= MEASURED or below) else ""
        )
        length = _LETTER * letters * (len(name) + 0.85 * len(also + told))
        tall = _reach(mark.verdict) * size
        places = _beside(at[index], length, letters, tall, sides)
        box = _free(places, taken + faint)
        if box is None and index not in loud:
            continue
        if box is None:
            box = _free(places, taken) or min(places, key=lambda one: _shared(one, taken))
        taken.append(box)
        high = ohms is not None and ohms > ACCEPTABLE_KOHM
        small = [
            tag("tspan", words, class_=look, font_size=0.85 * letters, font_weight=weight)
            for words, look, weight in (
                (also, "also", None),
                (told, *(("high", 700) if high else ("ohms", None))),
            )
            if words
        ]
        names.append(
            tag(
                "text",
                name,
                *small,
                x=(box[0] + box[2]) / 2,
                y=box[3] - 0.2 * letters,
                font_size=letters,
                class_="name" if index in loud else "name quiet",
            )
        )
    return names


def _about(spot: Spot, r: float) -> Box:
    return spot[0] - r, spot[1] - r, spot[0] + r, spot[1] + r


def _along(start: Spot, end: Spot, step: float) -> list[Spot]:
    """Points on a line, close enough together to keep names off it."""
    (ax, ay), (bx, by) = start, end
    n = max(2, math.ceil(math.hypot(bx - ax, by - ay) / (0.4 * step)))
    return [(ax + (bx - ax) * i / n, ay + (by - ay) * i / n) for i in range(1, n)]


def _reach(verdict: str) -> float:
    """How far a shape reaches up and down, in sizes."""
    return {"re-prep": 1.0, "check": 1.0, "ask": 1.3, "leave": 0.42}.get(verdict, 1.1)


def _beside(
    spot: Spot, length: float, letters: float, tall: float, sides: tuple[float, float]
) -> list[Box]:
    """Places of a name: below, above, beside its mark, then askew, all inside the picture."""
    (x, y), half, rise = spot, length / 2, letters
    under, over = y + tall + 1, y - 1.3 * tall - 1 - rise
    right, left = x + 1.3 * tall + 1.5, x - 1.3 * tall - 1.5 - length
    level = y - rise / 2
    corners = [(x - half, under), (x - half, over), (right, level), (left, level)]
    corners += [(x, under), (x - length, under), (x, over), (x - length, over)]
    held = [
        (_within(corner, sides[0] + 1, sides[1] - 1 - length), top)
        for corner, top in corners
    ]
    return [(corner, top, corner + length, top + rise) for corner, top in held]


def _free(places: Sequence[Box], taken: Sequence[Box]) -> Box | None:
    """The first place that touches nothing."""
    return next((box for box in places if _shared(box, taken) == 0), None)


def _shared(box: Box, taken: Sequence[Box]) -> float:
    """Area that a box shares with others."""
    return sum(
        max(0.0, min(box[2], other[2]) - max(box[0], other[0]))
        * max(0.0, min(box[3], other[3]) - max(box[1], other[1]))
        for other in taken
    )


def _aloud(shown: Sequence[Mark]) -> str:
    """What the map shows, for those who hear it."""
    told = [
        f"{cut(mark.site.site, 16)} {mark.verdict}"
        for mark in sorted(shown, key=_urgency)
        if mark.verdict != "leave"
    ]
    if not told:
        return "Head from above: nothing to do at any site"
    rest = f" and {len(told) - 12} more" if len(told) > 12 else ""
    return f"Head from above: {', '.join(told[:12])}{rest}"
