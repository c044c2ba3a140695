"""In which order the flags deserve a pair of eyes."""

from __future__ import annotations

from artifactlens.page.words import plain
from artifactlens.result import Flag

DOUBTFUL = (0.5, 0.8)
"""Probabilities between which a flag is a matter for a person."""

REACH = 0.2
"""How far outside ``DOUBTFUL`` the doubt has faded to nothing."""

LARGE_SHARE = 0.1
"""Share of the recording from which a single flag weighs as much as full doubt."""


def need(flag: Flag, duration: float) -> tuple[float, str]:
    r"""How much a flag needs a look, and why it stands where it stands.

    The sum of three parts, each 0 to 1: *doubt* is 1 for a probability inside
    ``DOUBTFUL`` and falls linearly to 0 within ``REACH`` of it; *look-alike* is 1 where
    signs of a cerebral look-alike are present; *stake* is the share of the recording that
    the flag covers over ``LARGE_SHARE``, at most 1. A rule of this page, not a published
    measure.

    Parameters
    ----------
    flag : Flag
        The flag to be ranked.
    duration : float, seconds
        Of the whole recording.

    Returns
    -------
    score : float, 0 to 3
    reason : str
        One line, the heaviest part first, such as
        ``'uncertain: 0.62; covers 12 % of the record'``.
    """
    low, high = DOUBTFUL
    away = max(low - flag.probability, flag.probability - high, 0.0)
    doubt = max(0.0, 1.0 - away / REACH)
    share = flag.duration / duration if duration > 0 else 0.0
    stake = min(1.0, share / LARGE_SHARE)
    reasons: list[tuple[float, str]] = []
    if doubt >= 0.5:
        reasons.append((doubt, f"uncertain: {flag.probability:.2f}"))
    if flag.look_alike:
        reasons.append((1.0, "look-alike signs"))
    if share >= 0.01:
        reasons.append((stake, f"covers {plain(100 * share)} % of the record"))
    reasons.sort(key=lambda part: -part[0])
    score = doubt + bool(flag.look_alike) + stake
    return score, "; ".join(text for _, text in reasons) or f"plain: {flag.probability:.2f}"


def by_need(flags: tuple[Flag, ...], duration: float) -> list[tuple[Flag, str]]:
    """Flags with their reasons, most needed first; equal ones in order of time."""
    ranked = [(*need(flag, duration), flag) for flag in flags]
    ranked.sort(key=lambda entry: (-entry[0], entry[2].onset, entry[2].number))
    return [(flag, reason) for _, reason, flag in ranked]
