"""The technologist's sheet: one page that says which electrodes ask for care, and why."""

from __future__ import annotations

import math
from collections.abc import Sequence
from functools import cache
from typing import TYPE_CHECKING, Any

from markupsafe import Markup

from artifactlens.advice import CAUSE_WORDS, Advice
from artifactlens.page.caremap import (
    ACCEPTABLE_KOHM,
    Mark,
    care_svg,
    concerned,
    joins,
    marks,
    spots,
)
from artifactlens.page.careshapes import LINES, SHAPES, line, symbol
from artifactlens.page.svg import tag
from artifactlens.page.template import part, template
from artifactlens.page.words import clean, clock, cut, names, number, span
from artifactlens.result import CAUTION, Result, Setup, SiteEvidence

if TYPE_CHECKING:
    from jinja2 import Template

IN_FULL = 12
"""Entries that are told in full; they and the map share one printed page."""

ROOMY = 6
"""Up to so many entries are set in larger letters."""

LINES_OF_LIST, LETTERS_OF_LINE, MOST_LINES = 36, 42, 5
"""Lines of print that the list may fill, characters that fit on one of them even in a wide
typeface, and the most lines of an entry."""

ROOMY_LINES, ROOMY_LETTERS, ROOMY_MOST = 27, 33, 6
"""The same in larger letters."""

GOOD_KOHM = 5.0
"""Impedance that is good (common practice)."""

MOST_OF_IT = 0.9
"""Part of the time from which it counts as all of it."""

STATE_WORDS = {"present": "now", "past": "earlier, gone", "cured": "gone after handling"}

NO_SITES = ("ground", "reference", CAUSE_WORDS["reference"])
"""Names under which a setup may speak of what is no site."""

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
        judged=judged_words(result),
        setup=None if result.setup is None else setup_words(result.setup),
        responses=[
            # What was measured stands in the other files.
            f"{cut(response.split(',')[0], 90).removesuffix('.')}."
            for response in (result.setup.responses if result.setup else ())
        ],
        care=care_svg(shown, advice),
        legend=_legend(shown, advice),
        doubled=next((m.entries[1].number for m in shown if len(m.entries) > 1), 0),
        elsewhere=_elsewhere(shown),
        untold=_grouped(shown, "cannot tell"),
        watched=_grouped(shown, "watch"),
        impedance=impedance_words(result.sites),
        order=", ".join(ORDER_OF_CHECKS),
        entries=[_row(entry, result, _fitted(entry, len(full))) for entry in full],
        rest=[
            _row(entry, result, (_whole_words(entry.reason, 40), entry.to_do[0], ""))
            for entry in rest
        ],
        blank=range(_free_rows(len(full))),
        roomy=len(full) <= ROOMY,
        caution=CAUTION,
        style=Markup(part("sheet.css")),
    )


def what_to_do(result: Result) -> tuple[str, str]:
    """The sheet in one plain sentence, and what has to be known beside it.

    ``'3 sites to re-prep, ground to check first.'`` What is over asks for nothing more;
    what cannot be judged is said, so that silence is not read as good news.
    """
    sites = [site for site in result.sites if site.role not in ("reference", "ground")]
    n_untold = sum(site.verdict == "cannot tell" for site in sites)
    present = [entry for entry in result.advice if entry.state == "present"]
    n_over = len(result.advice) - len(present)
    if not present and sites and n_untold == len(sites):
        return "This recording cannot tell whether a site asks for care.", ""
    more = []
    if n_over:
        verb = "earlier fault is" if n_over == 1 else "earlier faults are"
        more.append(f"{n_over} {verb} gone.")
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
    told_of = (*setup.fit, *(site for site, _ in setup.unfit), *setup.cannot_tell)
    n_sites = sum(site not in NO_SITES for site in told_of)
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
    above = high_impedances(sites)
    words += f"; above {ACCEPTABLE_KOHM:g}: {_at_most(above, 3, ', ')}." if above else "."
    return (
        f"{words} 100 Ω to {GOOD_KOHM:g} kΩ is good, {GOOD_KOHM:g} to {ACCEPTABLE_KOHM:g} "
        "acceptable if even (common practice). Line power is no impedance meter "
        "(Ferree et al. 2001)."
    )


def high_impedances(sites: Sequence[SiteEvidence]) -> list[str]:
    """Sites with more than is acceptable and their kilo-ohm, the highest first."""
    known = [(s.impedance_kohm, s.site) for s in sites if s.impedance_kohm is not None]
    return [
        f"{cut(site, 12)} {number(value)}"
        for value, site in sorted(known, key=lambda pair: -pair[0])
        if value > ACCEPTABLE_KOHM
    ]


def judged_words(result: Result) -> str:
    """How much was judged, empty if it was nearly all."""
    seconds = max((site.seconds_judged for site in result.sites), default=0.0)
    if seconds >= MOST_OF_IT * result.recording.duration:
        return ""
    for note in result.recording.notes:
        if note.startswith("Judged: "):  # what artifactlens.last_minutes notes
            return f"j{note[1:].removesuffix('.')}"
    return f"{span(seconds)} of it judged"


def when(entry: Advice, duration: float) -> tuple[str, str, str]:
    """The stretch that matters, how many others there were, and how it stands at the end.

    Of what goes on the last stretch is told, of what is over the longest.
    """
    state, going_on = STATE_WORDS[entry.state], entry.state == "present"
    if not entry.stretches:
        return "", "", state
    total = sum(end - start for start, end in entry.stretches)
    if going_on and total >= MOST_OF_IT * duration:
        return "throughout", "", ""
    start, end = (
        entry.stretches[-1]
        if going_on
        else max(entry.stretches, key=lambda stretch: stretch[1] - stretch[0])
    )
    others = len(entry.stretches) - 1
    more = f"and {others} {'before' if going_on else 'more'}" if others else ""
    if going_on and end > duration - 1:
        return f"{clock(start)} to the end", more, state
    return f"{clock(start)}–{clock(end)}", more, state


def _row(entry: Advice, result: Result, texts: tuple[str, str, str]) -> dict[str, Any]:
    rows = concerned(entry, result.sites)
    known = [row.impedance_kohm for row in rows if row.impedance_kohm is not None]
    ohms = [
        tag("b", number(value)) if value > ACCEPTABLE_KOHM else Markup(number(value))
        for value in known
    ]
    reason, first, then = texts
    return {
        "number": entry.number,
        "symbol": _picture(symbol(entry.verdict, 0, 0, 10, str(entry.number))),
        "subject": cut(entry.subject, 40),
        "verdict": entry.verdict,
        "confidence": entry.confidence,
        "impedance": Markup(", ").join(ohms) if len(ohms) < 3 else "",
        "reason": reason,
        "check": clean(first),
        "then": clean(then),
        "when": when(entry, result.recording.duration),
        "state": STATE_WORDS[entry.state],
    }


def _fitted(entry: Advice, n_entries: int) -> tuple[str, str, str]:
    """The reason, what to do now and then what, so that the list keeps to its page.

    What to do now is never cut, what comes then is left out rather than cut.
    """
    if n_entries <= ROOMY:
        lines, letters = min(ROOMY_MOST, ROOMY_LINES // n_entries), ROOMY_LETTERS
    else:
        lines, letters = min(MOST_LINES, LINES_OF_LIST // n_entries), LETTERS_OF_LINE
    first, then = entry.to_do
    # What to do is set in bold letters, which are wider.
    doing = math.ceil(1.1 * len(first) / letters)
    reason = _whole_words(entry.reason, letters * max(1, lines - doing))
    left = lines - math.ceil(len(reason) / letters)
    fits = 1.1 * len(first) + len(f" then {then}") <= letters * left
    return reason, first, then if fits else ""


def _whole_words(text: str, longest: int) -> str:
    """The text, or so many of its first words, and an ellipsis."""
    text = clean(text)
    if len(text) <= longest:
        return text
    kept = text[:longest].rpartition(" ")[0] or text[: longest - 1]
    return f"{kept.rstrip(' ,;:')}…"


def _free_rows(n_entries: int) -> int:
    """Ruled rows for what a person finds, as many as the page has room for."""
    if n_entries > ROOMY:
        return 0
    return 4 if n_entries == 0 else 2 if n_entries < 5 else 1


def _legend(
    shown: Sequence[Mark], advice: Sequence[Advice]
) -> list[tuple[Markup, str, str, str]]:
    """The shapes and lines that occur here, and the one of nothing to do."""
    verdicts = {"leave", *(entry.verdict for entry in advice)}
    verdicts |= {mark.verdict for mark in shown if mark.judged}
    signs = {sign for sign, _ in joins(shown, spots(shown), advice)}
    shapes = [
        (_picture(symbol(verdict, 0, 0, 10)), verdict, shape, meaning)
        for verdict, (shape, meaning) in SHAPES.items()
        if verdict in verdicts
    ]
    lines = [
        (_picture(line(sign, (-20, 0), (20, 0), 8)), sign, shape, meaning)
        for sign, (shape, meaning) in LINES.items()
        if sign in signs
    ]
    return shapes + lines


def _picture(inner: Markup) -> Markup:
    return tag("svg", inner, class_="sign", viewBox="-14 -14 28 28", aria_hidden="true")


def _elsewhere(shown: Sequence[Mark]) -> str:
    """Sites without a known place, those with a verdict first."""
    there = spots(shown)
    absent = [mark for i, mark in enumerate(shown) if i not in there and mark.judged]
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
