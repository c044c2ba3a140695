"""What the advice said of a case, held against what is true of it."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

from artifactlens.advice import Advice
from artifactlens.training.sitechecks.cases import Truth

ACTS = ("re-prep", "check")
"""Verdicts that ask the technologist to do something about an electrode or its lead."""

NOTHING = "none"


@dataclass(frozen=True, slots=True)
class Outcome:
    """One case scored.

    Attributes
    ----------
    truth : Truth
    first : str
        Cause of the first entry, "none" where there is none.
    right : bool
        Whether the case counts as solved; see :func:`score`.
    acted : bool
        Whether it is right and the leading entry asks for something to be done, or tells of
        what was there and is over: it is not only watched.
    named : bool
        Whether any entry, of whatever verdict, has the cause right and names a true site.
    innocent : tuple of str
        Sites that are to be prepared again and have nothing, "reference" among them.
    pairs_named : int
        Bridged pairs that an entry for a bridge names.
    state_right, time_right : bool or None
        Of the entry that is ``named``: whether it says that it is over, or not; whether its
        time from first to last shares at least half of what both cover. None without one.
    lines : tuple of str
        The list as a person sees it.
    """

    truth: Truth
    first: str
    right: bool
    acted: bool
    named: bool
    innocent: tuple[str, ...]
    pairs_named: int
    state_right: bool | None
    time_right: bool | None
    lines: tuple[str, ...]

    @property
    def faultless(self) -> bool:
        """Solved, and nobody else blamed."""
        return self.right and not self.innocent


def score(truth: Truth, advice: Sequence[Advice]) -> Outcome:
    """Score the list of one case.

    The *leading* entry is the first that is not about the patient. Right is, by the true
    cause:

    - site: the leading entry has a true site as its first;
    - reference: the leading entry is for the reference; in bipolar derivations, where it
      cannot be seen, nothing is asked for;
    - ground: the leading entry is for the ground;
    - bridge: every bridged pair stands together in an entry for a bridge;
    - placement and patient: nothing is to be prepared again.
    """
    listed = sorted(advice, key=lambda entry: entry.number)
    leading = next((entry for entry in listed if entry.cause != "patient"), None)
    innocent = _innocent(truth, listed)
    pairs_named = sum(
        any(entry.cause == "bridge" and pair <= set(entry.sites) for entry in listed)
        for pair in truth.pairs
    )
    if truth.hidden:
        right = not any(entry.verdict in ACTS for entry in listed)
    elif truth.cause == "site":
        right = leading is not None and set(leading.sites[:1]) <= set(truth.sites)
        right = right and bool(leading and leading.sites)
    elif truth.cause in ("reference", "ground"):
        right = leading is not None and leading.cause == truth.cause
    elif truth.cause == "bridge":
        right = pairs_named == len(truth.pairs)
    else:
        right = not any(entry.verdict == "re-prep" for entry in listed)
    match = next((entry for entry in listed if _names(truth, entry)), None)
    return Outcome(
        truth=truth,
        first=listed[0].cause if listed else NOTHING,
        right=right,
        acted=right and leading is not None and _acts(leading),
        named=match is not None,
        innocent=innocent,
        pairs_named=pairs_named,
        state_right=None if match is None else match.state == truth.state,
        time_right=None if match is None else _same_time(truth, match),
        lines=tuple(
            f"{entry.number}. [{entry.cause}, {entry.state}, {entry.confidence}] {entry.line}"
            for entry in listed
        ),
    )


def _acts(entry: Advice) -> bool:
    return entry.verdict in ACTS or entry.state != "present"


def _names(truth: Truth, entry: Advice) -> bool:
    if entry.cause != truth.cause:
        return False
    if truth.cause in ("site", "bridge", "placement"):
        return bool(set(entry.sites) & set(truth.sites))
    return True


def _innocent(truth: Truth, listed: Sequence[Advice]) -> tuple[str, ...]:
    """Sites to be prepared again for which nothing speaks, each once, in order."""
    guilty = set(truth.sites) if truth.cause in ("site", "bridge") else set()
    if truth.cause == "reference" and not truth.hidden:
        guilty = {"reference"}
    blamed = [
        site
        for entry in listed
        if entry.verdict == "re-prep"
        for site in (entry.sites or (entry.subject,))
    ]
    return tuple(site for site in dict.fromkeys(blamed) if site not in guilty)


def _same_time(truth: Truth, entry: Advice) -> bool:
    if not entry.stretches:
        return False
    start = min(begin for begin, _ in entry.stretches)
    stop = max(end for _, end in entry.stretches)
    common = min(stop, truth.end) - max(start, truth.onset)
    return common >= 0.5 * (max(stop, truth.end) - min(start, truth.onset))
