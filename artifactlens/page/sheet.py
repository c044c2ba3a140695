"""The technologist's sheet: one page that says which electrodes ask for care, and why."""

from __future__ import annotations

import math
from collections.abc import Sequence
from functools import cache
from typing import TYPE_CHECKING, Any

from markupsafe import Markup

from artifactlens.advice import Advice
from artifactlens.page.caremap import Mark, care_svg, concerned, marks, spots
from artifactlens.page.careshapes import LINES, SHAPES, line, symbol
from artifactlens.page.svg import tag
from artifactlens.page.template import part, template
from artifactlens.page.words import clock, cut, names, number, span
from artifactlens.result import CAUTION, Result, Setup, SiteEvidence

if TYPE_CHECKING:
    from jinja2 import Template

IN_FULL = 12
"""Entries that are told in full; they and the map share one printed page."""

ROOMY = 6
"""Up to so many entries are set in larger letters."""

LINES_OF_LIST, LETTERS_OF_LINE = 36, 42
"""Lines of print that the list may fill, and characters that fit on one of them even in a
wide typeface."""

GOOD_KOHM, ACCEPTABLE_KOHM = 5.0, 10.0
"""Impedance that is good, and that is acceptable if even over the sites (common practice)."""

ORDER_OF_CHECKS = (
    "cables",
    "electrode",
    "placement",
    "bridge",
    "impedance",
    "ground and reference",
    "montage",
)
"""The trade's order (American Society of Electroneurodiagnostic Technologists, newsletter)."""


def sheet_html(result: Result) -> str:
    """The sheet as one string that needs nothing else, and runs nothing.

    Parameters
    ----------
    result : Result
        What the sheet tells; nothing else is read.

    Returns
    -------
    str
        HTML with style and picture inside. The same input gives the same text.
    """
    shown = marks(result)
    advice = sorted(result.advice, key=lambda entry: entry.number)
    full, rest = advice[:IN_FULL], advice[IN_FULL:]
    sentence, more = what_to_do(result)
    return _template().render(
        recording=result.recording,
        n_sites=sum(s.role not in ("reference", "ground") for s in result.sites),
        sentence=sentence,
        more=more,
        setup=None if result.setup is None else setup_words(result.setup),
        responses=() if result.setup is None else result.setup.responses,
        care=care_svg(shown, advice),
        legend=_legend(),
        doubled=next((m.entries[1].number for m in shown if len(m.entries) > 1), 0),
        elsewhere=_elsewhere(shown),
        untold=_grouped(shown, "cannot tell"),
        watched=_grouped(shown, "watch"),
        impedance=impedance_words(result.sites),
        order=", ".join(ORDER_OF_CHECKS),
        entries=[_row(e, result, *_limits(e.reason, len(full))) for e in full],
        rest=[_row(entry, result, 40, 24) for entry in rest],
        blank=range(4 if not full else 2 if len(full) <= ROOMY else 0),
        roomy=len(full) <= ROOMY,
        caution=CAUTION,
        style=Markup(part("sheet.css")),
    )


def what_to_do(result: Result) -> tuple[str, str]:
    """The sheet in one plain sentence, and what has to be known beside it.

    ``'3 sites to re-prep, ground to check first.'`` What was cured asks for nothing more;
    what cannot be judged is said, so that silence is not read as good news.
    """
    sites = [site for site in result.sites if site.role not in ("reference", "ground")]
    n_untold = sum(site.verdict == "cannot tell" for site in sites)
    present = [entry for entry in result.advice if entry.state != "cured"]
    n_cured = len(result.advice) - len(present)
    if not present and sites and n_untold == len(sites):
        return "This recording cannot tell whether a site asks for care.", ""
    more = []
    if n_cured:
        verb = "fault was" if n_cured == 1 else "faults were"
        more.append(f"{n_cured} {verb} cured during the recording.")
    if n_untold:
        more.append(f"{n_untold} site{'' if n_untold == 1 else 's'} cannot be judged.")
    return _asked(present), " ".join(more)


def _asked(present: Sequence[Advice]) -> str:
    groups = {
        verdict: [entry for entry in present if entry.verdict == verdict]
        for verdict in ("re-prep", "check", "watch")
    }
    told = [f"{_counted(group)} to {verdict}" for verdict, group in groups.items() if group]
    first = {v: min((e.number for e in group), default=0) for v, group in groups.items()}
    if 0 < first["check"] < first["re-prep"]:
        told[1] += " first"
    if any(entry.verdict == "ask" for entry in present):
        told.append("patient to ask")
    sentence = ", ".join(told) or "No site asks for care"
    if sentence.startswith(("ground", "reference", "patient")):
        sentence = sentence[0].upper() + sentence[1:]
    return f"{sentence}."


def _counted(entries: Sequence[Advice]) -> str:
    """Who is meant: ground and reference by name, one or two sites too, else their count."""
    words = [c for c in ("ground", "reference") if any(e.cause == c for e in entries)]
    own = [entry for entry in entries if entry.cause not in ("ground", "reference")]
    sites = list(dict.fromkeys(name for entry in own for name in entry.sites))
    if len(sites) > 2:
        words.append(f"{len(sites)} sites")
    else:
        words += [cut(name, 16) for name in sites]
    return " and ".join(words) or cut(entries[0].subject)


def setup_words(setup: Setup) -> str:
    """How it began, as ``'First 2 min: 17 of 19 sites fit to start.'``."""
    n_sites = len(setup.fit) + len(setup.unfit) + len(setup.cannot_tell)
    words = (
        f"First {span(setup.seconds)}: {len(setup.fit)} of {n_sites} sites fit to start."
    )
    if setup.unfit:
        told = [f"{cut(site, 12)} ({cut(why, 40)})" for site, why in setup.unfit]
        words += f" Not yet: {_at_most(told, 3, ', ')}."
    if setup.cannot_tell:
        words += f" Cannot tell: {names(setup.cannot_tell)}."
    return words


def impedance_words(sites: Sequence[SiteEvidence]) -> str:
    """What is known of the impedances, and what they may be used for."""
    known = [(s.impedance_kohm, s.site) for s in sites if s.impedance_kohm is not None]
    if not known:
        return "Not known here. Line power is no impedance meter (Ferree et al. 2001): measure."
    values = [value for value, _ in known]
    low, high = number(min(values)), number(max(values))
    reach = low if low == high else f"{low} to {high}"
    words = f"Small numbers, {reach} kΩ at {len(known)} electrode"
    words += "s" if len(known) > 1 else ""
    above = [
        f"{cut(site, 12)} {number(value)}"
        for value, site in sorted(known, key=lambda pair: -pair[0])
        if value > ACCEPTABLE_KOHM
    ]
    words += f"; above {ACCEPTABLE_KOHM:g}: {_at_most(above, 3, ', ')}." if above else "."
    return (
        f"{words} 100 Ω to {GOOD_KOHM:g} kΩ is good, {GOOD_KOHM:g} to {ACCEPTABLE_KOHM:g} "
        "acceptable if even (common practice). Line power is no impedance meter "
        "(Ferree et al. 2001)."
    )


def when(entry: Advice, duration: float) -> tuple[str, str]:
    """From when to when, and how it stands at the end; a long list is shortened."""
    if not entry.stretches:
        return "", entry.state
    start, end = entry.stretches[0]
    more = len(entry.stretches) - 1
    if not more and start < 1 and end > duration - 1:
        return "throughout", ""
    first = f"{clock(start)}–{clock(end)}"
    return first, f"and {more} more, {entry.state}" if more else entry.state


def _row(entry: Advice, result: Result, why: int, check: int) -> dict[str, Any]:
    rows = concerned(entry, result.sites)
    known = [number(r.impedance_kohm) for r in rows if r.impedance_kohm is not None]
    first, then = (*entry.checks[:1], "")[0], ", then ".join(entry.checks[1:])
    left = check - len(first) - 6
    return {
        "number": entry.number,
        "symbol": _picture(symbol(entry.verdict, 0, 0, 10, str(entry.number))),
        "subject": cut(entry.subject, 40),
        "verdict": entry.verdict,
        "confidence": entry.confidence,
        "impedance": f"{', '.join(known)}\u00a0kΩ" if 0 < len(known) < 3 else "",
        "reason": cut(entry.reason, why),
        "check": cut(first, check),
        "then": cut(then, left) if left >= min(len(then), 16) else "",
        "when": when(entry, result.recording.duration),
        "state": entry.state,
    }


def _limits(reason: str, n_entries: int) -> tuple[int, int]:
    """Characters for the reason and for the checks, so that the list keeps to its page."""
    lines = min(5, LINES_OF_LIST // n_entries)
    why = lines - lines // 2
    used = min(why, math.ceil(len(reason) / LETTERS_OF_LINE))
    # What to do is set in bold letters, which are wider.
    return LETTERS_OF_LINE * why, LETTERS_OF_LINE * (lines - used) - 6


def _legend() -> list[tuple[Markup, str, str, str]]:
    shapes = [
        (_picture(symbol(verdict, 0, 0, 10)), verdict, shape, meaning)
        for verdict, (shape, meaning) in SHAPES.items()
    ]
    joins = [
        (_picture(line(sign, (-20, 0), (20, 0), 8)), sign, shape, meaning)
        for sign, (shape, meaning) in LINES.items()
    ]
    return shapes + joins


def _picture(inner: Markup) -> Markup:
    return tag("svg", inner, class_="sign", viewBox="-14 -14 28 28", aria_hidden="true")


def _elsewhere(shown: Sequence[Mark]) -> str:
    """Sites without a known place, those with a verdict first."""
    there = spots(shown)
    absent = [mark for index, mark in enumerate(shown) if index not in there]
    told = [
        f"{cut(mark.site.site, 12)} {mark.verdict}"
        for mark in sorted(absent, key=lambda mark: mark.verdict == "leave")
    ]
    return _at_most(told, 8, ", ")


def _grouped(shown: Sequence[Mark], verdict: str) -> str:
    """Sites of a verdict that no entry of the list tells of, together by their reason."""
    groups: dict[str, list[str]] = {}
    for mark in shown:
        if mark.verdict == verdict and not mark.entries:
            groups.setdefault(cut(mark.site.why, 70), []).append(mark.site.site)
    told = [
        f"{names(sites)} ({why})" if why else names(sites) for why, sites in groups.items()
    ]
    return _at_most(told, 3, "; ")


def _at_most(words: Sequence[str], most: int, between: str) -> str:
    rest = len(words) - most
    told = between.join(words[:most])
    return f"{told} and {rest} more" if rest > 0 else told


@cache
def _template() -> Template:
    return template("sheet.html.j2", {"cut": cut, "span": span})
