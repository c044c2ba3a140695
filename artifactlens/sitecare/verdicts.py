"""From findings to advice: what to do, in which order, and what is said of each site."""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from artifactlens.advice import CAUSES, VERDICTS, Advice
from artifactlens.sitecare import courses
from artifactlens.sitecare.bridging import bridges
from artifactlens.sitecare.contact import contacts
from artifactlens.sitecare.evidence import (
    BESIDE_M,
    FEWEST_BESIDE,
    FEWEST_ELSEWHERE,
    SMALL_CHAIN,
    Evidence,
    Finding,
)
from artifactlens.sitecare.humming import hums
from artifactlens.sitecare.losses import losses
from artifactlens.sitecare.patients import patients
from artifactlens.sitecare.placement import doubtful_places
from artifactlens.sitecare.popping import popping
from artifactlens.sitecare.reference_noise import noisy_references
from artifactlens.sitecare.short_chains import short_chains

LEAST_SHARE, LEAST_DOUBTFUL_SHARE = 0.03, 0.15
"""What held for less of the time, and is over, is not worth a line; the second if it was not
plain."""

LEAST_STRETCHES = 2
"""What lasts must hold for so many stretches before anybody is sent to the patient."""

SHORT_LOG = 4
"""With fewer stretches than this a single one is told of, to be watched."""

CHECKS: dict[tuple[str, str], tuple[str, ...]] = {
    ("ground", "mains"): (
        "check the ground electrode and the cables",
        "lead cables and power cords away from the patient and the leads",
        "ask who is in charge before a device is moved or unplugged",
        "touch no other electrode before that",
    ),
    ("ground", "any"): (
        "check the head box, its cable and the input plug",
        "check ground and reference",
    ),
    ("reference", "any"): (
        "check the reference lead and its plug",
        "re-prep it, not the sites",
        "check the ground",
    ),
    ("bridge", "any"): (
        "clean between the sites and dry the skin",
        "re-prep both with less paste",
        "check that no cables are joined",
    ),
    ("placement", "any"): (
        "check placement against the head",
        "check the labels at the head box",
        "check the montage",
    ),
    ("patient", "muscle"): (
        "look at the patient; ask for a loose jaw, smooth brow, head at rest",
        "a pillow under the neck",
        "not while asleep or overbreathing",
    ),
    ("patient", "eye"): (
        "look at the patient; ask to rest the eyes, closed if the protocol allows",
        "a folded cloth on the lids if local procedure has it",
    ),
    ("patient", "drift"): (
        "look at the eye leads and feel the forehead",
        "cool the room, dry the skin",
    ),
    ("site", "pops"): ("check the lead", "re-prep", "replace the electrode if it goes on"),
    ("site", "loose lead"): ("check lead and plug", "fix the electrode again, re-prep"),
    ("site", "apart"): ("check the lead", "re-prep", "measure the impedance"),
    ("site", "drift"): ("check for sweat and drying paste", "re-prep", "cool the room"),
    ("site", "mains"): (
        "check the lead and where it runs",
        "measure the impedance, re-prep if high",
        "lead it away from power cables",
    ),
    ("site", "flat"): ("check that the lead is plugged in", "replace the electrode"),
    ("site", "lost"): ("check the lead and the head box input", "replace the electrode"),
    ("site", "clipped"): ("check the lead", "re-prep", "check the range of the recorder"),
}
"""In the order of the trade: cables, electrode, placement, bridge, impedance, ground and
reference, montage (common practice)."""

CHECKS_OF_SEVERAL: dict[str, tuple[str, ...]] = {
    "mains": (
        "check the leads and where they run, and the ground",
        "move or unplug devices and power cords near the patient",
        "look at the sites in another montage",
    ),
    "any": (
        "check their leads and the head box inputs",
        "look for gel or a cable that joins them",
        "look at the sites in another montage",
    ),
}
"""By sign, where one of several sites is at fault and nothing tells which."""


def findings_of(evidence: Evidence, extra: tuple[Finding, ...] = ()) -> list[Finding]:
    """Everything that is wrong, in no order, with what other tests have found."""
    if not len(evidence.log):
        return []
    found = [
        *losses(evidence),
        *hums(evidence),
        *bridges(evidence),
        *popping(evidence),
        *contacts(evidence),
        *short_chains(evidence),
        *noisy_references(evidence),
        *patients(evidence),
    ]
    return _without_echoes(evidence, [*found, *_misplaced(evidence, found), *extra])


_TORN = ("flat", "lost")


def _misplaced(evidence: Evidence, found: list[Finding]) -> list[Finding]:
    """Sites that may have been exchanged, those with troubles of their own left out."""
    faulty = {
        row for item in found if item.cause in ("site", "bridge") for row in item.rows
    }
    if evidence.frame.montage == "bipolar":
        # Without some of its derivations a chain falls into pieces, each of its own mean.
        chain = evidence.frame.chain
        torn = {chain[row] for item in found if item.sign in _TORN for row in item.rows}
        faulty |= {row for row in range(len(chain)) if chain[row] in torn}
    moments = evidence.log.places
    covariance = moments.covariance()
    covariance[list(faulty)] = np.nan
    covariance[:, list(faulty)] = np.nan
    seconds = float(moments.seconds.max(initial=0.0))
    everywhere = np.ones(len(evidence.log), dtype=bool)
    return [
        Finding(
            cause="placement",
            sign="swapped",
            rows=doubt.sites,
            held=everywhere,
            known=everywhere,
            plain=True,
            weight=doubt.gain_db,
            reason=doubt.reason,
            standing=True,
        )
        for doubt in doubtful_places(covariance, evidence.frame, seconds)
    ]


def _without_echoes(evidence: Evidence, found: list[Finding]) -> list[Finding]:
    """One finding per site, the gravest, with what else there is told along with it.

    A loose lead pops, hums and drifts: one thing to look after. A bridged site may look apart:
    that is told by the bridge.
    """
    rank = (
        "lost",
        "flat",
        "clipped",
        "loose lead",
        "pops",
        "drift",
        "apart",
        "mains",
        "no response",
        "mirrored",
    )
    by_site: dict[tuple[str, int], list[Finding]] = {}
    rest = []
    for finding in found:
        if finding.cause in ("site", "reference") and not finding.one_of:
            by_site.setdefault((finding.cause, finding.rows[0]), []).append(finding)
        else:
            rest.append(finding)
    bridged = {row for finding in rest if finding.cause == "bridge" for row in finding.rows}
    kept = []
    for (_, row), group in by_site.items():
        group = [item for item in group if not courses.is_a_hand(evidence, item, group)]
        group.sort(key=lambda item: (not item.plain, rank.index(item.sign)))
        main, others = group[0], group[1:]
        if row in bridged and main.sign not in ("pops", "loose lead", "lost", "clipped"):
            continue
        for other in others:
            if main.plain and not other.plain:
                continue
            main = replace(
                main,
                held=main.held | other.held,
                known=main.known | other.known,
                weight=main.weight + 0.5 * other.weight,
                reason=_both_reasons(main, other),
                lasting=main.lasting and other.lasting,
                standing=main.standing or other.standing,
            )
        kept.append(main)
    return kept + rest


def _both_reasons(main: Finding, other: Finding) -> str:
    """The reasons of two findings of a site; what pops also wanders and stands apart."""
    if main.sign in ("pops", "loose lead") and other.sign in ("apart", "drift"):
        return main.reason
    return f"{main.reason}; {other.reason}"


def advise(evidence: Evidence, extra: tuple[Finding, ...] = ()) -> tuple[Advice, ...]:
    """The ranked list.

    Parameters
    ----------
    evidence : Evidence
    extra : tuple of Finding
        What other tests have found: the biological calibration.
    """
    entries = []
    for finding in findings_of(evidence, extra):
        entry = _entry(evidence, finding)
        if entry is not None:
            entries.append((finding, entry))
    entries.sort(key=lambda pair: _order(*pair))
    return tuple(
        replace(entry, number=number) for number, (_, entry) in enumerate(entries, start=1)
    )


def _entry(evidence: Evidence, finding: Finding) -> Advice | None:
    known = max(int((finding.known | finding.held).sum()), 1)
    count = int(finding.held.sum())
    share = count / known
    state = courses.state(evidence, finding)
    worth = LEAST_SHARE if finding.plain else LEAST_DOUBTFUL_SHARE
    if share < worth and state != "present":
        return None
    brief = finding.lasting and not finding.standing and count < min(LEAST_STRETCHES, known)
    if brief and known >= SHORT_LOG:
        return None
    verdict = "watch"
    if state == "present" and finding.plain and not brief:
        verdict = {"ground": "check", "placement": "check", "patient": "ask"}.get(
            finding.cause, "check" if finding.one_of else "re-prep"
        )
    elif finding.cause == "patient":
        if not finding.standing:
            return None
        verdict = "ask"
    names = tuple(evidence.frame.sites[row] for row in finding.rows)
    reason = finding.reason
    if finding.sign == "muscle" and _few_to_compare(evidence, finding):
        reason += "; too few sites to tell it from the noise of a poor contact"
    return Advice(
        number=0,
        verdict=verdict,
        cause=finding.cause,
        sign=finding.sign,
        sites=names,
        confidence=_confidence(evidence, finding, verdict),
        state=state,
        stretches=courses.stretches(evidence, finding),
        share=round(share, 4),
        reason=reason,
        checks=finding.checks or _usual_checks(finding),
    )


def _usual_checks(finding: Finding) -> tuple[str, ...]:
    if finding.one_of:
        return CHECKS_OF_SEVERAL.get(finding.sign, CHECKS_OF_SEVERAL["any"])
    return CHECKS.get((finding.cause, finding.sign)) or CHECKS[(finding.cause, "any")]


def _confidence(evidence: Evidence, finding: Finding, verdict: str) -> str:
    """High where it is plain, lasts, and the site has neighbours to be compared with.

    What the patient does is known from doubtful marks of the classifier: never high.
    """
    if finding.cause == "placement" or not finding.plain:
        return "low"
    if (
        finding.cause == "patient"
        or verdict == "watch"
        or finding.held.sum() < LEAST_STRETCHES
    ):
        return "moderate"
    return "moderate" if _few_to_compare(evidence, finding) else "high"


def _few_to_compare(evidence: Evidence, finding: Finding) -> bool:
    """Whether what the sites concerned hang together with is too little to be sure."""
    if finding.one_of:
        return True
    frame, rows = evidence.frame, list(finding.rows)
    if finding.sign in ("flat", "lost", "clipped"):
        # At the end of a chain one derivation is all that tells of the site.
        own = (frame.incidence[:, rows] != 0).sum(axis=0)
        return frame.montage == "bipolar" and bool((own == 1).any())
    company = evidence.company()
    if finding.cause == "ground":
        return bool(company.max() <= SMALL_CHAIN)
    if finding.cause not in ("site", "patient") or finding.sign == "mains":
        return bool((company[rows] < SMALL_CHAIN).any())
    apart = np.linalg.norm(frame.positions[rows, None] - frame.positions[None], axis=2)
    with np.errstate(invalid="ignore"):
        beside = frame.near[rows] & (apart <= BESIDE_M) & ~evidence.references()
    few = (beside.sum(axis=1) < FEWEST_BESIDE) | (company[rows] < SMALL_CHAIN)
    return bool(few.any() if finding.cause == "site" else few.all())


def _order(finding: Finding, entry: Advice) -> tuple[int, int, float]:
    """First what may explain the rest (ground, reference), then what is worst."""
    waiting = entry.verdict == "watch"
    first = CAUSES.index(entry.cause) if entry.cause in ("ground", "reference") else 2
    if entry.cause in ("placement", "patient"):
        first = CAUSES.index(entry.cause)
    return (VERDICTS.index("watch") if waiting else 0, first, -finding.weight)


def site_verdicts(
    evidence: Evidence, advice: tuple[Advice, ...]
) -> tuple[list[str], list[str]]:
    """What is said of each site, and why, in the order of the frame."""
    frame = evidence.frame
    reasons = _why_untold(evidence)
    verdicts = ["cannot tell" if reason else "leave" for reason in reasons]
    place = {name: row for row, name in enumerate(frame.sites)}
    for entry in sorted(advice, key=lambda item: -item.number):
        if entry.cause in ("ground", "patient", "placement"):
            continue
        said = {"re-prep": "re-prep", "check": "cannot tell"}.get(entry.verdict, "watch")
        for name in entry.sites:
            row = place[name]
            if said == "cannot tell" and verdicts[row] in ("re-prep", "watch"):
                continue  # nothing tells which of several it is, but this one has its own
            verdicts[row], reasons[row] = said, entry.reason
    for entry in advice:
        if entry.cause == "placement":
            for name in entry.sites:
                if verdicts[place[name]] in ("leave", "cannot tell"):
                    verdicts[place[name]], reasons[place[name]] = "watch", entry.reason
    return verdicts, reasons


def _why_untold(evidence: Evidence) -> list[str]:
    """Why nothing can be told of a site as long as nothing is found there; "" where it can."""
    frame = evidence.frame
    seen = np.asarray(evidence.log.signs.ok.any(axis=0))
    alone = (frame.neighbours.sum(axis=1) == 0) & ~evidence.references()
    company = evidence.company()
    # Short chains are held against long ones, where there are any.
    elsewhere = (company >= SMALL_CHAIN) & ~evidence.references()
    helped = elsewhere.sum() >= FEWEST_ELSEWHERE
    reasons = [""] * len(frame.sites)
    for row in range(len(frame.sites)):
        if not seen[row]:
            reasons[row] = "no signal at any time"
        elif alone[row]:
            reasons[row] = "no neighbour in this recording to compare it with"
        elif company[row] == 2:
            members = np.flatnonzero(frame.chain == frame.chain[row])
            (other,) = (frame.sites[member] for member in members if member != row)
            reasons[row] = (
                f"only the derivation with {other}, which cannot tell the two apart"
            )
        elif company[row] < SMALL_CHAIN and not helped:
            reasons[row] = (
                f"only {company[row]} electrodes to compare with each other, too few to tell"
            )
    return reasons
