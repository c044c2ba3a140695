"""One result as one offline page: the reader's questions, in the reader's order."""

from __future__ import annotations

import base64
import hashlib
import math
from collections.abc import Callable, Sequence
from functools import cache
from typing import TYPE_CHECKING, Any

from markupsafe import Markup

from artifactlens.kinds import KIND_NAMES
from artifactlens.page.balance import (
    balance_rows,
    balance_words,
    bar_svg,
    probability_ticks,
    reach,
    sum_svg,
)
from artifactlens.page.headmap import head_svg, short_share, unplaced
from artifactlens.page.need import by_need
from artifactlens.page.ribbon import line_seconds, ribbon_svg, swatch, textures
from artifactlens.page.sheet import what_to_do
from artifactlens.page.template import part, template
from artifactlens.page.traces import TraceWindow, closeup
from artifactlens.page.words import (
    clock,
    cut,
    names,
    number,
    per_hundred,
    plain,
    signed,
    span,
)
from artifactlens.result import CAUTION, Flag, RecordingFacts, Result

if TYPE_CHECKING:
    from jinja2 import Template

FULL_ENTRIES = 60
"""Flags shown with traces and balance; a person does not open more of them one by one."""

VERDICTS = {"yes": "judged", "limited": "partly judged", "no": "cannot be judged"}


def report_html(result: Result, traces: Sequence[TraceWindow] = ()) -> str:
    """The whole page as one string that needs nothing else.

    Parameters
    ----------
    result : Result
        What the page tells; nothing else is read.
    traces : sequence of TraceWindow
        Close-ups; those of flags beyond the first ``FULL_ENTRIES`` by need are not drawn.

    Returns
    -------
    str
        HTML with style, script and pictures inside. The same input gives the same text.
    """
    recording = result.recording
    windows = {window.flag: window for window in traces}
    ranked = by_need(result.flags, recording.duration)
    others = sorted(
        (flag for flag, _ in ranked[FULL_ENTRIES:]),
        key=lambda flag: (flag.onset, flag.number),
    )
    script = part("report.js")
    digest = base64.b64encode(hashlib.sha256(script.encode()).digest()).decode()
    return _template().render(
        recording=recording,
        facts=_facts(result),
        caution=CAUTION,
        verdicts=_verdicts(result),
        amount=amount_sentence(result),
        line_words={60: "1 min", 300: "5 min", 3600: "1 h"}[
            line_seconds(recording.duration)
        ],
        textures=textures(),
        ribbon=ribbon_svg(result),
        heads=_heads(result),
        queue_words=_queue_words(len(ranked), len(others)),
        entries=[
            _entry(flag, reason, windows.get(flag.number))
            for flag, reason in ranked[:FULL_ENTRIES]
        ],
        others=others,
        n_flags=len(result.flags),
        kinds=KIND_NAMES,
        sites=result.sites,
        sites_words=" ".join(filter(None, what_to_do(result))),
        gaps=_gaps(recording),
        versions=_versions(result),
        style=Markup(part("report.css")),
        script=Markup(script),
        script_hash=f"sha256-{digest}",
    )


def amount_sentence(result: Result) -> str:
    """How much is touched, in one plain sentence.

    ``'30 min, 19 sites. 41 of 100 seconds are touched: muscle 38, eye 22, pop below 1.'``
    The hundred are seconds recorded; gaps do not count. Kinds that cannot be judged are
    named so that their absence is not read as good news.
    """
    recording = result.recording
    n_sites = sum(site.role not in ("reference", "ground") for site in result.sites)
    recorded = recording.duration - math.fsum(seconds for _, seconds in recording.gaps)
    size = f"{span(recording.duration)}, {n_sites} site{'' if n_sites == 1 else 's'}."
    judged = [kind for kind in KIND_NAMES if result.assessment(kind).verdict != "no"]
    missing = [kind for kind in KIND_NAMES if kind not in judged]
    if not judged:
        return f"{size} None of the four kinds can be judged."

    def share(kind: str) -> float:
        return min(1.0, result.touched.get(kind, 0.0) / recorded) if recorded > 0 else 0.0

    untold = f" {_listed(missing).capitalize()} cannot be judged." if missing else ""
    if share("any") == 0:
        return f"{size} No second is touched by a flag.{untold}"
    count = per_hundred(share("any"))
    verb = "is" if count == "1" or count == "below 1" else "are"
    parts = ", ".join(
        f"{kind} {per_hundred(share(kind))}"
        for kind in sorted(judged, key=lambda kind: -share(kind))
    )
    count = count[0].upper() + count[1:]
    return f"{size} {count} of 100 seconds {verb} touched: {parts}.{untold}"


def _listed(words: Sequence[str]) -> str:
    if len(words) < 2:
        return "".join(words)
    return f"{', '.join(words[:-1])} and {words[-1]}"


def _facts(result: Result) -> list[tuple[str, str]]:
    recording = result.recording
    mains = recording.line_frequency
    return [
        ("Duration", span(recording.duration)),
        ("Sites", str(sum(s.role not in ("reference", "ground") for s in result.sites))),
        ("Montage", cut(recording.montage, 80)),
        ("Filters", filter_words(recording)),
        ("Sampling", f"{number(recording.sampling_rate)} Hz, {cut(recording.format)}"),
        ("Mains", "not found" if mains is None else f"{number(mains)} Hz"),
        ("Model", cut(result.model_name)),
    ]


def filter_words(recording: RecordingFacts) -> str:
    """The filters of the recording in words; what is not known is said to be so."""
    low, high, notch = recording.high_pass, recording.low_pass, recording.notch
    return ", ".join(
        [
            "high-pass not known" if low is None else f"high-pass {number(low)} Hz",
            "low-pass not known" if high is None else f"low-pass {number(high)} Hz",
            "no notch known" if notch is None else f"notch {number(notch)} Hz",
        ]
    )


def _verdicts(result: Result) -> list[dict[str, Any]]:
    entries = [result.assessment(kind) for kind in KIND_NAMES]
    return [
        {
            "kind": entry.kind,
            "verdict": entry.verdict if entry.verdict in VERDICTS else "limited",
            "words": VERDICTS.get(entry.verdict, entry.verdict),
            "reason": entry.reason,
            "swatch": swatch(entry.kind),
        }
        for entry in entries
    ]


def _heads(result: Result) -> list[dict[str, Any]]:
    heads = []
    for kind in KIND_NAMES:
        judged = result.assessment(kind).verdict != "no"
        rest = unplaced(result.sites) if judged else []
        heads.append(
            {
                "kind": kind,
                "swatch": swatch(kind),
                "picture": head_svg(kind, result.sites) if judged else None,
                "unplaced": ", ".join(
                    f"{cut(site.site, 16)} {short_share(site.share.get(kind))}"
                    for site in rest
                ),
            }
        )
    return heads


def _entry(flag: Flag, reason: str, window: TraceWindow | None) -> dict[str, Any]:
    scale = reach(flag)
    return {
        "flag": flag,
        "reason": reason,
        "swatch": swatch(flag.kind),
        "closeup": None if window is None else closeup(window, flag),
        "rows": balance_rows(flag),
        "reach": scale,
        "sum_bar": sum_svg(flag, scale),
        "sum_words": balance_words(flag),
        "ticks": probability_ticks(scale),
    }


def _queue_words(n_flags: int, n_others: int) -> str:
    order = (
        "First what is uncertain, what shows signs of a look-alike, and what covers "
        "much of the record."
    )
    if n_others:
        return f"{n_flags} flags, {n_flags - n_others} of them in full. {order}"
    return f"{n_flags} flag{'' if n_flags == 1 else 's'}. {order}"


def _gaps(recording: RecordingFacts, most: int = 20) -> str:
    told = [f"{clock(onset)} for {plain(seconds)} s" for onset, seconds in recording.gaps]
    rest = len(told) - most
    return "; ".join(told[:most]) + (f"; and {rest} more" if rest > 0 else "") + "."


def _versions(result: Result) -> list[tuple[str, str]]:
    return [
        *result.parameters.items(),
        ("artifactlens", result.tool_version),
        ("model", result.model_name),
        ("model SHA-256", result.model_sha256),
    ]


@cache
def _template() -> Template:
    filters: dict[str, Callable[..., Any]] = {
        "bar": bar_svg,
        "clock": clock,
        "cut": cut,
        "names": names,
        "number": number,
        "plain": plain,
        "share": short_share,
        "signed": signed,
        "span": span,
    }
    return template("report.html.j2", filters)
