"""Tables of the advice: causes against verdicts, aims, and what failed.

What was put in and what is as recorded never share a table.
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from typing import NamedTuple

from artifactlens.training.evaluation.markdown import ABSENT, count_of, table
from artifactlens.training.sitechecks.backgrounds import MONTAGES
from artifactlens.training.sitechecks.cases import STRENGTHS
from artifactlens.training.sitechecks.faults import FAULTS
from artifactlens.training.sitechecks.runs import Left, Ran
from artifactlens.training.sitechecks.scoring import NOTHING, Outcome

COLUMNS = ("site", "reference", "ground", "bridge", "placement", "patient", NOTHING)
"""What a first entry can say, in the order of the table."""


class Aim(NamedTuple):
    """What was aimed at: ``found`` of ``among``, at least or at most ``limit`` of them."""

    name: str
    found: int
    among: int
    limit: float
    at_least: bool

    @property
    def met(self) -> bool | None:
        """None where there was nothing to count."""
        if not self.among:
            return None
        share = self.found / self.among
        return share >= self.limit if self.at_least else share <= self.limit

    @property
    def cells(self) -> list[str]:
        """Row of the table."""
        sign = "at least" if self.at_least else "at most"
        share = f"{100 * self.found / self.among:.1f} %" if self.among else ABSENT
        said = {True: "met", False: "missed", None: ABSENT}[self.met]
        return [
            self.name,
            f"{sign} {100 * self.limit:g} %",
            f"{self.found} of {self.among}",
            share,
            said,
        ]


def simulated_aims(ran: Sequence[Ran]) -> list[Aim]:
    """What the issue asks of cases with something put in."""
    outcomes = [one.outcome for one in ran]
    sites = [o for o in outcomes if o.truth.cause == "site" and o.truth.strength == "plain"]
    alive = [o for o in sites if not o.truth.dead_in_bipolar]
    reference = [o for o in outcomes if o.truth.cause == "reference" and not o.truth.hidden]
    ground = [o for o in outcomes if o.truth.cause == "ground"]
    bridges = [o for o in outcomes if o.truth.cause == "bridge"]
    patients = [one for one in ran if one.outcome.truth.cause == "patient"]
    return [
        _share("plain site fault: the first site of the list is a true one", sites, 0.95),
        _share("... without dead inputs in the double banana", alive, 0.95),
        Aim(
            "... and of these it is not only watched",
            sum(o.acted for o in alive),
            len(alive),
            0.95,
            True,
        ),
        _share("reference fault, referential: the leading entry names it", reference, 0.95),
        _share(
            "... plain ones",
            [o for o in reference if o.truth.strength == "plain"],
            0.95,
        ),
        _share("mains everywhere: told from the reference", ground, 0.90),
        Aim(
            "bridged pairs named",
            sum(o.pairs_named for o in bridges),
            sum(len(o.truth.pairs) for o in bridges),
            0.95,
            True,
        ),
        Aim(
            "muscle or eye alone: something is to be prepared again",
            sum(bool(one.outcome.innocent) for one in patients),
            len(patients),
            0.0,
            False,
        ),
        Aim(
            "... that was not before they were put in",
            sum(bool(set(one.outcome.innocent) - set(one.before)) for one in patients),
            len(patients),
            0.0,
            False,
        ),
    ]


def untouched_aims(left: Sequence[Left]) -> list[Aim]:
    """What the issue asks of recordings as distributed, all and those never looked at."""
    return [
        Aim(name, sum(bool(one.re_prep) for one in chosen), len(chosen), 0.02, False)
        for name, chosen in (
            ("re-prep advised", left),
            ("... on those not looked at before", [one for one in left if not one.seen]),
        )
    ]


def aims_table(aims: Iterable[Aim], heading: str) -> str:
    """A row per aim."""
    header = ["aim", "needed", "found", "share", ""]
    return table(heading, header, [aim.cells for aim in aims])


def cause_table(ran: Sequence[Ran], split: str) -> str:
    """True causes against what the first entry said, by strength and montage."""
    rows = []
    for cause in dict.fromkeys(fault.cause for fault in FAULTS.values()):
        for strength in STRENGTHS:
            for montage in MONTAGES:
                some = [
                    one.outcome
                    for one in ran
                    if one.outcome.truth.cause == cause
                    and one.outcome.truth.strength == strength
                    and one.outcome.truth.montage == montage
                ]
                if some:
                    counts = [sum(o.first == column for o in some) for column in COLUMNS]
                    rows.append(
                        [cause, strength, montage, str(len(some)),
                         *(str(count) if count else ABSENT for count in counts),
                         *_right_and_innocent(some)]
                    )  # fmt: skip
    header = ["true cause", "strength", "montage", "cases", *COLUMNS, "right", "innocent"]
    return table(
        _caption(ran, split, "What the first entry of the list says"), header, rows
    )


def fault_table(ran: Sequence[Ran], split: str) -> str:
    """How each fault went; the reference in bipolar derivations apart."""
    rows = []
    for fault in FAULTS:
        for hidden in (False, True):
            some = [
                one.outcome
                for one in ran
                if one.outcome.truth.fault == fault and one.outcome.truth.hidden == hidden
            ]
            if not some:
                continue
            plain = [o for o in some if o.truth.strength == "plain"]
            mild = [o for o in some if o.truth.strength == "mild"]
            named = [o for o in some if o.named]
            rows.append(
                [
                    f"{fault}, absent in bipolar" if hidden else fault,
                    _of(sum(o.right for o in plain), len(plain)),
                    _of(sum(o.right for o in mild), len(mild)),
                    _of(len(named), len(some)),
                    _of(sum(o.state_right is True for o in named), len(named)),
                    _of(sum(o.time_right is True for o in named), len(named)),
                    str(sum(len(o.innocent) for o in some)),
                ]
            )
    header = [
        "fault", "right, plain", "right, mild", "cause and site named", "state right",
        "time right", "innocent",
    ]  # fmt: skip
    return table(_caption(ran, split, "By fault"), header, rows)


def untouched_table(left: Sequence[Left]) -> str:
    """Recordings as distributed, by corpus and montage."""
    rows = []
    for seen in (True, False):
        for corpus in dict.fromkeys(one.corpus for one in left):
            for montage in MONTAGES:
                some = [
                    one
                    for one in left
                    if (one.corpus, one.montage, one.seen) == (corpus, montage, seen)
                ]
                if some:
                    rows.append(
                        [corpus, montage, "yes" if seen else "no", str(len(some)),
                         str(sum(bool(one.re_prep) for one in some)),
                         str(sum(bool(one.lines) for one in some))]
                    )  # fmt: skip
    distinct = len({one.name for one in left})
    heading = (
        "**REAL. Recordings as distributed, nothing put in.** "
        f"{count_of(len(left), 'recording')}: {distinct} files, each as recorded and as a "
        "double banana."
    )
    header = ["corpus", "montage", "looked at before", "recordings", "re-prep advised",
              "any entry"]  # fmt: skip
    return table(heading, header, rows)


def failures(ran: Sequence[Ran], most: int) -> list[str]:
    """Cases that are not solved, or blame somebody else, as blocks of text."""
    wrong = [one for one in ran if not one.outcome.faultless][:most]
    return [
        "\n".join(
            [
                f"case({one.seed}, beds, fault={one.outcome.truth.fault!r}) over {one.bed}: "
                f"{_complaint(one.outcome)}",
                f"  truth: {one.outcome.truth.words}",
                *(f"  {line}" for line in one.outcome.lines or ("no advice",)),
            ]
        )
        for one in wrong
    ]


def untouched_failures(left: Sequence[Left], most: int) -> list[str]:
    """Recordings as distributed on which a re-prep is advised, with the list."""
    return [
        "\n".join(
            [f"{one.name} ({one.montage}), untouched:", *(f"  {x}" for x in one.lines)]
        )
        for one in left
        if one.re_prep
    ][:most]


def _complaint(outcome: Outcome) -> str:
    parts = [] if outcome.right else ["not solved"]
    if outcome.innocent:
        parts.append(f"re-prep of innocent {', '.join(outcome.innocent)}")
    return "; ".join(parts)


def _share(name: str, outcomes: Sequence[Outcome], limit: float) -> Aim:
    return Aim(name, sum(o.right for o in outcomes), len(outcomes), limit, True)


def _right_and_innocent(some: Sequence[Outcome]) -> list[str]:
    return [
        _of(sum(o.right for o in some), len(some)),
        str(sum(len(o.innocent) for o in some)),
    ]


def _of(count: int, among: int) -> str:
    return f"{count}/{among}" if among else ABSENT


def _caption(ran: Sequence[Ran], split: str, title: str) -> str:
    beds = len({one.bed for one in ran})
    return (
        f"**SIMULATED faults over real background ({split}). {title}.** "
        f"{count_of(len(ran), 'case')} over {count_of(beds, 'recording')}."
    )
