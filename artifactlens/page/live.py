"""The page beside the bed: what to do now, at which electrode, and who is marked."""

from __future__ import annotations

import math
from collections.abc import Sequence
from functools import cache
from typing import TYPE_CHECKING, Any

from markupsafe import Markup

from artifactlens.advice import Advice
from artifactlens.kinds import KIND_NAMES
from artifactlens.page.caremap import care_svg, concerned, marks
from artifactlens.page.careshapes import LINES, SHAPES, line, symbol
from artifactlens.page.ribbon import swatch, textures
from artifactlens.page.sheet import setup_words, what_to_do
from artifactlens.page.svg import joined, tag
from artifactlens.page.template import part, template
from artifactlens.page.words import clean, clock, cut, names, number, span
from artifactlens.result import CAUTION, Result

if TYPE_CHECKING:
    from jinja2 import Template

    from artifactlens.live.state import LiveState

ROWS = 6
"""Entries told in full; each has a row of its own, so that nothing jumps."""

MOST_NOTES = 2


def live_page() -> str:
    """The page without any content, which its script fetches; it names no state and no key."""
    return _template().render(
        rows=ROWS,
        legend=_legend(),
        textures=textures(),
        outline=care_svg([], []),
        caution=CAUTION,
    )


def live_fragments(state: LiveState) -> dict[str, Any]:
    """What the page shows of a state.

    Parameters
    ----------
    state : LiveState

    Returns
    -------
    dict
        Ready for JSON. ``phase``, ``sentence``, ``more``, ``time`` and ``further`` are plain
        text; ``old`` tells whether all below them is; ``prompt`` is None or holds ``words``,
        ``left`` and ``step`` as plain text; ``parts`` holds markup by the name of its
        place on the page; ``rows`` the first ``ROWS`` entries in order of number, each with
        ``key`` (the same as long as it is about the same electrodes), ``name`` as plain
        text and ``html``.
    """
    sentence, more = what_to_do_now(state)
    advice = sorted(state.result.advice if state.result else (), key=lambda e: e.number)
    return {
        "phase": state.phase,
        "old": state.old,
        "time": clock(state.seconds),
        "sentence": clean(sentence),
        "more": clean(more),
        "prompt": _prompt(state),
        "rows": [
            {"key": key, "name": clean(entry.subject), "html": _row(entry, state.result)}
            for key, entry in list(zip(entry_keys(advice), advice, strict=True))[:ROWS]
            if state.result
        ],
        "further": _further(advice[ROWS:]),
        "parts": {
            "map": _map(state.result),
            "marked": _marked(state),
            "setup": _setup(state),
            "stream": tag("p", stream_words(state)),
            "notes": joined(
                [tag("p", cut(note, 200)) for note in state.notes[-MOST_NOTES:]]
            ),
        },
    }


def what_to_do_now(state: LiveState) -> tuple[str, str]:
    """The one sentence for a person who looks up for a second, and what stands below it.

    ``'Re-prep P3. First check the lead.'`` speaks of the first entry that asks for
    something; the others are counted below.
    """
    if state.phase == "waiting":
        return (
            "Waiting for a stream.",
            "Start the amplifier and its LSL outlet.",
        )
    if state.phase == "lost":
        return (
            f"The source is gone since {clock(state.seconds)}.",
            "See to the amplifier, its LSL outlet and the network. "
            "The watch goes on by itself when the source is back.",
        )
    if state.phase == "refused":
        return (
            "This stream cannot be watched.",
            "A note tells why. The watch goes on by itself when the source is back with "
            "channels that it can watch.",
        )
    if state.phase == "stopped":
        return (
            "The watch has stopped by a failure of its own.",
            "What stands below is old. Start artifactlens watch again.",
        )
    if state.old:
        return (
            f"Nothing new from the stream for {_so_long(state.silent)}.",
            "See to the amplifier and its LSL outlet. What stands below is old: the last "
            f"that was seen is of {clock(state.seconds)}.",
        )
    result = state.result
    if state.phase == "gathering" or result is None:
        return (
            "Listening to the stream.",
            "Too little was seen to say anything of the sites.",
        )
    present = [entry for entry in result.advice if entry.state == "present"]
    total, more = what_to_do(result)
    if not present:
        return total, more
    if len(present) > 1 and any(entry.verdict != "ask" for entry in present):
        more = f"In all: {total} {more}"
    return _asked_for(min(present, key=lambda entry: entry.number)), more.strip()


def _so_long(seconds: float) -> str:
    """In steps, so that what is read aloud is not read every second."""
    step = 1 if seconds < 10 else 10 if seconds < 120 else 60
    return span(seconds // step * step)


def _asked_for(entry: Advice) -> str:
    subject = cut(entry.subject, 48)
    if entry.cause == "reference" and subject == "reference":
        subject = "the reference"
    check = entry.checks[0] if entry.checks else ""
    if entry.verdict == "watch":
        return f"Watch {subject}. No re-prep now."
    if entry.verdict == "re-prep":
        return f"Re-prep {subject}." + (f" First {check}." if check else "")
    if entry.verdict == "ask":
        return f"Patient: {check or 'ask'}."
    return f"{_capital(subject)}: {check or 'check'}."


def _capital(text: str) -> str:
    """Site names that begin with a small letter keep it; ground and reference do not."""
    return text[0].upper() + text[1:] if text.startswith(("ground", "the ref")) else text


def since(entry: Advice) -> str:
    """Since when it is so, or until when it was: ``'on and off since 0:12:30'``."""
    if not entry.stretches:
        return "" if entry.state == "present" else entry.state
    if entry.state != "present":
        return f"until {clock(entry.stretches[-1][1])}, {entry.state}"
    onset = entry.stretches[0][0]
    words = "since the start" if onset < 1 else f"since {clock(onset)}"
    return f"on and off {words}" if len(entry.stretches) > 1 else words


def stream_words(state: LiveState) -> str:
    """How the stream does, in one quiet line."""
    if state.phase == "waiting":
        return "No stream yet."
    words = [f"Stream {cut(state.stream, 40)}" if state.stream else "Stream without a name"]
    words.append(f"{clock(state.seconds)} seen")
    losses = []
    if state.filled:
        losses.append(f"{state.filled} samples of each channel missing")
    if state.breaks:
        losses.append(f"{_count(state.breaks, 'break')} of more than 2 s")
    if state.outages:
        losses.append(f"source gone {_count(state.outages, 'time')}")
    words += losses or ["none missing", "no outage"]
    if state.delay is not None:
        slowest = f", slowest {state.slowest:.2f} s" if state.slowest is not None else ""
        words.append(f"judged {state.delay:.2f} s after its samples came{slowest}")
    return ", ".join(words) + "."


def _count(number: int, word: str) -> str:
    return f"{number} {word}" + ("" if number == 1 else "s")


def setup_line(state: LiveState) -> str:
    """How the sites began, and how long that is still being looked at."""
    words = []
    if state.phase in ("gathering", "watching") and state.setup_left is not None:
        left = math.ceil(state.setup_left)
        words.append(f"Setup check: {left // 60}:{left % 60:02d} left.")
    setup = state.result.setup if state.result else None
    if setup is not None:
        words += [setup_words(setup), *(cut(answer, 90) for answer in setup.responses)]
    return " ".join(words)


def entry_keys(advice: Sequence[Advice]) -> list[str]:
    """What an entry is about, while its reason and number go on changing.

    Whom muscle marks changes from second to second, hence not by site.
    """
    keys: list[str] = []
    for entry in advice:
        about = (entry.sign,) if entry.cause == "patient" else entry.sites
        key = clean("|".join((entry.cause, *about)))
        while key in keys:
            key += "|more"
        keys.append(key)
    return keys


def _row(entry: Advice, result: Result) -> Markup:
    known = [
        number(row.impedance_kohm)
        for row in concerned(entry, result.sites)
        if row.impedance_kohm is not None
    ]
    ohms = f" {', '.join(known)}\u00a0kΩ" if 0 < len(known) < 3 else ""
    spoken = tag("span", f"{entry.number}. ", class_="unseen")
    over = "" if entry.state == "present" else " over"
    who = [
        tag("b", spoken, cut(entry.subject, 40)),
        tag("span", entry.verdict, tag("small", f" ({entry.confidence}){ohms}")),
        tag("span", since(entry), class_="since"),
    ]
    why = [tag("p", cut(entry.reason, 110)), tag("p", *_next(entry))]
    return joined(
        [
            _sign(symbol(entry.verdict, 0, 0, 10, str(entry.number)), "which"),
            tag("div", *who, class_=f"who{over}"),
            tag("div", *why, class_=f"why{over}"),
        ]
    )


def _next(entry: Advice) -> list[str]:
    """What to do, the first of it in bold letters; nothing at what is over."""
    if entry.state != "present":
        return ["nothing to do now"]
    first, then = ([cut(check, 90) for check in entry.checks[:2]] + ["", ""])[:2]
    if entry.verdict == "watch":
        return [f"if it goes on: {first}" if first else ""]
    return [tag("b", first), tag("small", f" then {then}" if then else "")]


def _further(rest: Sequence[Advice]) -> str:
    told = [
        f"{entry.number}. {cut(entry.subject, 24)} {entry.verdict}" for entry in rest[:6]
    ]
    more = f" and {len(rest) - 6} more" if len(rest) > 6 else ""
    return f"Further: {', '.join(told)}{more}." if rest else ""


def _map(result: Result | None) -> Markup:
    return care_svg([], []) if result is None else care_svg(marks(result), result.advice)


def _marked(state: LiveState) -> Markup:
    """One line per kind, always all of them: who is marked in this second."""
    lines = []
    for kind in KIND_NAMES:
        entry = state.result.assessment(kind) if state.result else None
        if entry is not None and entry.verdict == "no":
            words, look = f"not judged: {cut(entry.reason, 60)}", "none"
        elif sites := state.marked_now.get(kind, ()):
            words, look = names(sites, 4), "some"
        else:
            words, look = "no site" if state.phase == "watching" else "", "none"
        lines.append(
            tag(
                "li",
                swatch(kind),
                tag("b", kind),
                tag("span", words),
                class_=f"c-{kind} {look}",
            )
        )
    return tag("ul", joined(lines))


def _setup(state: LiveState) -> Markup:
    return tag("p", setup_line(state))


def _prompt(state: LiveState) -> dict[str, str] | None:
    if state.prompt is None:
        return None
    return {
        "words": clean(state.prompt.words),
        "left": f"{max(state.prompt.left, 0):.0f} s",
        "step": f"{state.prompt.step} of {state.prompt.steps}",
    }


def _sign(inner: Markup, look: str) -> Markup:
    return tag(
        "svg", inner, class_=f"sign {look}", viewBox="-14 -14 28 28", aria_hidden="true"
    )


def _legend() -> list[tuple[Markup, str, str]]:
    shapes = [
        (_sign(symbol(verdict, 0, 0, 10), ""), verdict, meaning)
        for verdict, (_, meaning) in SHAPES.items()
    ]
    joins = [
        (_sign(line(sign, (-20, 0), (20, 0), 8), ""), sign, meaning)
        for sign, (_, meaning) in LINES.items()
    ]
    return shapes + joins


@cache
def _template() -> Template:
    return template("live.html.j2", {})


def live_style() -> str:
    """The style of the page."""
    return part("live.css")


def live_script() -> str:
    """The script of the page."""
    return part("live.js")
