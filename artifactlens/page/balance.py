"""The balance: what speaks for a flag, what against, and what it adds up to."""

from __future__ import annotations

import math
from dataclasses import dataclass

from markupsafe import Markup

from artifactlens.page.svg import joined, tag
from artifactlens.result import Contribution, Flag, amount

MOST_BARS = 8
"""Features and pairs shown by themselves."""

SMALL = 0.1
"""Log-odds below which a feature or pair goes into "the rest": it moves no probability by 0.03."""

HALF = 100.0
"""Half the width of the scale, in units of the picture."""


@dataclass(frozen=True, slots=True)
class BalanceRow:
    """One bar. ``measured`` and ``usual`` are ready to read; ``log_odds`` is exact."""

    label: str
    measured: str
    usual: str
    log_odds: float
    role: str


def balance_rows(flag: Flag) -> tuple[BalanceRow, ...]:
    """The bars of a flag, heaviest first, then the rest and the base rate.

    Returns
    -------
    tuple of BalanceRow
        ``role`` is "feature", "rest" or "base"; their log-odds add up to the score.
    """
    parts = sorted(flag.contributions, key=lambda part: -abs(part.log_odds))
    shown = [part for part in parts[:MOST_BARS] if abs(part.log_odds) >= SMALL]
    small = parts[len(shown) :]
    if len(small) == 1:  # a rest of one is no shorter than the one
        shown, small = parts, []
    rows = [_feature_row(part) for part in shown]
    if small:
        total = math.fsum(part.log_odds for part in small)
        rows.append(BalanceRow("the rest", f"{len(small)} small ones", "", total, "rest"))
    rows.append(BalanceRow("base rate", "before any measurement", "", flag.base, "base"))
    return tuple(rows)


def _feature_row(part: Contribution) -> BalanceRow:
    def with_unit(value: float | None, unit: str, absent: str) -> str:
        if value is None:
            return absent
        # A line may break between two measures, not between a number and its unit.
        return amount(value, unit).replace("-", "−").replace(" ", "\u00a0")

    return BalanceRow(
        label=part.label,
        measured=" and ".join(
            with_unit(measure.value, measure.unit, "not measured")
            for measure in part.measures
        ),
        usual=" and ".join(
            with_unit(measure.usual, measure.unit, "not known") for measure in part.measures
        ),
        log_odds=part.log_odds,
        role="feature",
    )


def reach(flag: Flag) -> float:
    """Log-odds at either end of the scale, shared by the bars and the sum."""
    rows = balance_rows(flag)
    return max(2.0, *(abs(row.log_odds) for row in rows), abs(flag.score)) * 1.04


def bar_svg(row: BalanceRow, scale: float, kind: str) -> Markup:
    """One bar, to the right of the middle if it speaks for the kind, else to the left."""
    length = HALF * abs(row.log_odds) / scale
    side = "for" if row.log_odds > 0 else "against"
    bar = tag(
        "rect",
        class_=f"bar {side} c-{kind}",
        x=0.0 if side == "for" else -length,
        y=0.16,
        width=length,
        height=0.68,
    )
    return _scale_svg([_middle(), bar])


def sum_svg(flag: Flag, scale: float) -> Markup:
    """Where the sum comes to rest on the same scale."""
    x = HALF * flag.score / scale
    beam = tag("path", class_="beam", d=f"M0 .5H{x:.2f}")
    rest = tag("path", class_="rest", d=f"M{x:.2f} 0V1")
    return _scale_svg([_middle(), beam, rest])


def _middle() -> Markup:
    return tag("path", class_="middle", d="M0 -1V2")


def _scale_svg(parts: list[Markup]) -> Markup:
    return tag(
        "svg",
        joined(parts),
        class_="beam-scale",
        viewBox=f"{-HALF:g} 0 {2 * HALF:g} 1",
        preserveAspectRatio="none",
        aria_hidden="true",  # the number stands beside it as text
    )


def probability_ticks(scale: float) -> list[tuple[float, str]]:
    """Marks under the scale: percent of its width, and the probability there."""
    step = 1 if scale <= 3 else 2 if scale <= 8 else 4
    most = int(scale // step) * step
    ticks = []
    for log_odds in range(-most, most + 1, step):
        chance = 1 / (1 + math.exp(-log_odds))
        words = f"{chance:.2f}" if 0.01 <= chance <= 0.99 else f"{chance:.3f}"
        ticks.append((50 + 50 * log_odds / scale, words))
    return ticks


def balance_words(flag: Flag) -> str:
    """The sum in words."""
    return f"sum: probability {flag.probability:.2f}"
