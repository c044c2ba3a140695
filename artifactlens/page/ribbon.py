"""The folded ribbon: the recording laid out like lines of text."""

from __future__ import annotations

import math
from typing import NamedTuple

from markupsafe import Markup

from artifactlens.kinds import KIND_NAMES
from artifactlens.page.svg import joined, tag
from artifactlens.page.words import clock, names, plain
from artifactlens.result import Flag, Result

LEFT = 70.0
"""Room for the time at the start of a line, in units of the picture."""

WIDTH = 1130.0
"""Width of a full line."""

TICKS = 7.0
"""Height above the lanes where the recording's own annotations stand."""

LANE = 8.0
LANE_STEP = 9.5
STRIP = len(KIND_NAMES) * LANE_STEP + 1.5
"""Height of the four lanes of a line with a little room around them."""

LINE_STEP = TICKS + STRIP + 8.0
TOP = 24.0

THINNEST = 1.2
"""A bar is never drawn thinner than this, or it would vanish in a day's recording."""


class Piece(NamedTuple):
    """The part of a stretch of time that lies on one line, in seconds."""

    line: int
    start: float
    seconds: float


def line_seconds(duration: float) -> int:
    """Seconds a line: 1 min up to 10 min, 5 min up to 2 h, 1 h beyond."""
    if duration <= 600:
        return 60
    return 300 if duration <= 7200 else 3600


def fold(onset: float, duration: float, line: int) -> list[Piece]:
    """Cut a stretch of time at the line ends.

    Parameters
    ----------
    onset : float, seconds from the start of the recording
        Where the stretch begins.
    duration : float, seconds
        How long it is.
    line : int, seconds
        Length of a line.

    Returns
    -------
    list of Piece
        At least one, also for a duration of zero.
    """
    end = onset + duration
    first = math.floor(onset / line)
    last = max(first, math.ceil(end / line - 1e-9) - 1)
    pieces = []
    for number in range(first, last + 1):
        start = max(onset, number * line)
        pieces.append(
            Piece(number, start - number * line, min(end, (number + 1) * line) - start)
        )
    return pieces


def ribbon_svg(result: Result) -> Markup:
    """The whole recording as one picture; every bar is a link to its flag."""
    duration = result.recording.duration
    line = line_seconds(duration)
    end = max([duration, *(flag.end for flag in result.flags)])
    n_lines = max(1, math.ceil(end / line - 1e-9))
    height = TOP + n_lines * LINE_STEP
    content = [_ruler(line, height)]
    judged = [result.assessment(kind).verdict != "no" for kind in KIND_NAMES]
    drawn = _lines(end, line, judged)
    for onset, seconds in result.recording.gaps:
        for piece in fold(onset, seconds, line):
            if piece.line < n_lines:
                drawn[piece.line].append(_gap(piece, onset, seconds, line))
    for onset in result.recording.annotation_onsets:
        if 0 <= onset < end:
            drawn[int(onset // line)].append(_tick(onset, line))
    for flag in sorted(result.flags, key=lambda flag: (flag.onset, -flag.duration)):
        for part, piece in enumerate(fold(flag.onset, flag.duration, line)):
            drawn[piece.line].append(_bar(flag, piece, line, first=part == 0))
    for number, parts in enumerate(drawn):
        shift = f"translate(0 {TOP + number * LINE_STEP:g})"
        content.append(tag("g", joined(parts), transform=shift))
    return tag(
        "svg",
        joined(content),
        class_="ribbon",
        viewBox=f"0 0 {LEFT + WIDTH:g} {height:g}",
        role="group",  # not "img": its bars are links that must stay reachable
        aria_label=f"The recording in lines of {line // 60} min, one bar for each flag",
    )


def _x(seconds: float, line: int) -> float:
    return LEFT + WIDTH * seconds / line


def _ruler(line: int, height: float) -> Markup:
    step, unit, size = {60: (10, "s", 1), 300: (60, "min", 60), 3600: (600, "min", 60)}[
        line
    ]
    parts = []
    for seconds in range(0, line, step):
        x = _x(seconds, line)
        parts.append(tag("path", class_="guide", d=f"M{x:.1f} {TOP - 6:g}V{height - 8:g}"))
        words = f"{seconds // size} {unit}" if seconds else "0"
        parts.append(
            tag("text", words, x=x, y=TOP - 10, class_="small", text_anchor="middle")
        )
    return tag("g", joined(parts), aria_hidden="true")


def _lines(end: float, line: int, judged: list[bool]) -> list[list[Markup]]:
    """For each line its time and its strip; a lane that is not judged is dotted."""
    lines: list[list[Markup]] = []
    for number in range(max(1, math.ceil(end / line - 1e-9))):
        seconds = min(line, end - number * line)
        parts = [
            tag(
                "text",
                clock(number * line),
                x=LEFT - 10,
                y=TICKS + STRIP / 2 + 3,
                text_anchor="end",
            )
        ]
        width = WIDTH * seconds / line
        strip = {"x": LEFT, "y": TICKS - 1.5, "width": width, "height": STRIP}
        parts.append(tag("rect", class_="strip-ground", **strip))
        for lane, ok in enumerate(judged):
            if not ok:
                y = TICKS + lane * LANE_STEP + LANE / 2
                parts.append(
                    tag("path", class_="unjudged", d=f"M{LEFT:g} {y:g}h{width:.1f}")
                )
        lines.append(parts)
    return lines


def _gap(piece: Piece, onset: float, seconds: float, line: int) -> Markup:
    return tag(
        "rect",
        tag("title", f"{clock(onset)}, gap of {plain(seconds)} s, nothing recorded"),
        class_="gap",
        x=_x(piece.start, line),
        y=TICKS - 1.5,
        width=max(THINNEST, WIDTH * piece.seconds / line),
        height=STRIP,
    )


def _tick(onset: float, line: int) -> Markup:
    return tag(
        "path",
        tag("title", f"{clock(onset)}, annotation of the recording"),
        class_="mark",
        d=f"M{_x(onset % line, line):.1f} 0v{TICKS - 1.5:g}",
    )


def _bar(flag: Flag, piece: Piece, line: int, *, first: bool) -> Markup:
    """One bar: two thirds of a lane high at a probability of 0.5, a full lane at 1."""
    height = LANE * min(1.0, max(2 / 3, (1 + 2 * flag.probability) / 3))
    lane = KIND_NAMES.index(flag.kind)
    told = (
        f"{clock(flag.onset)}, {plain(flag.duration)} s, {flag.kind}, "
        f"{names(flag.sites, 4)}, probability {flag.probability:.2f}"
    )
    return tag(
        "a",
        tag("title", told),
        tag(
            "rect",
            class_=f"k-{flag.kind}",
            x=_x(piece.start, line),
            y=TICKS + lane * LANE_STEP + LANE - height,
            width=max(THINNEST, WIDTH * piece.seconds / line),
            height=height,
        ),
        href=f"#flag-{flag.number}",
        tabindex=None if first else -1,  # one stop a flag, however many lines it spans
    )


def textures() -> Markup:
    """The four textures, defined once and used by every picture of the page.

    Lines of the ribbon are drawn in their own coordinates, so each texture is laid from
    the top of its kind's lane.
    """
    top = {kind: TICKS + lane * LANE_STEP for lane, kind in enumerate(KIND_NAMES)}
    wave = f"M-3 {LANE * 0.55:g}q3 {-LANE * 0.75:g} 6 0t6 0 6 0"
    notch = "M0 0H.36L.5 .72L.64 0H1V1H0z"
    return tag(
        "svg",
        tag(
            "defs",
            _texture("eye", top["eye"], 12, tag("path", class_="open", d=wave)),
            _texture(
                "muscle",
                top["muscle"],
                2.8,
                tag("path", class_="dense", d=f"M1 0v{LANE:g}"),
            ),
            tag(
                "pattern",
                tag("path", class_="solid c-pop", d=notch),
                id="texture-pop",
                width=1,
                height=1,
                patternContentUnits="objectBoundingBox",
            ),
            _texture(
                "mains",
                top["mains"],
                2.4,
                tag("path", class_="fine", d=f"M.6 0v{LANE:g}M0 {LANE - 0.7:g}h3"),
            ),
            tag(
                "pattern",
                tag("path", class_="hatch", d="M-1 1l2 -2M0 6l6 -6M5 7l2 -2"),
                id="texture-gap",
                width=6,
                height=6,
                patternUnits="userSpaceOnUse",
            ),
        ),
        class_="textures",
        width=0,
        height=0,
        aria_hidden="true",
    )


def _texture(kind: str, top: float, width: float, drawing: Markup) -> Markup:
    ground = tag("rect", class_="ground", width=width, height=LANE)
    return tag(
        "pattern",
        tag("g", ground, drawing, class_=f"c-{kind}"),
        id=f"texture-{kind}",
        y=top,
        width=width,
        height=LANE,
        patternUnits="userSpaceOnUse",
    )


def swatch(kind: str) -> Markup:
    """A small sample of a kind's texture for lists and legends."""
    top = TICKS + KIND_NAMES.index(kind) * LANE_STEP
    bar = tag("rect", class_=f"k-{kind}", x=0, y=top, width=24, height=LANE)
    return tag(
        "svg",
        bar,
        class_="swatch",
        viewBox=f"0 {top:g} 24 {LANE:g}",
        aria_hidden="true",
    )
