"""What a technologist is advised to do, and in which order: the words and their type."""

from __future__ import annotations

from dataclasses import dataclass

VERDICTS = ("re-prep", "check", "ask", "watch")
"""What an entry of the list asks for: an electrode to be prepared again, something else to be
looked at first (ground, cables, placement), the patient to be asked, or patience."""

SITE_VERDICTS = ("re-prep", "watch", "leave", "cannot tell")
"""What is said of each site; "cannot tell" where the recording lacks what it takes."""

CAUSES = ("ground", "reference", "bridge", "site", "placement", "patient")

CAUSE_WORDS = {
    "ground": "ground or environment",
    "reference": "reference electrode",
    "bridge": "bridge between sites",
    "site": "the site itself",
    "placement": "placement or labels",
    "patient": "the patient",
}

SIGNS = (
    "lost", "flat", "clipped", "loose lead", "pops", "apart", "mains", "drift", "bridged",
    "swapped", "muscle", "eye", "no response", "mirrored",
)  # fmt: skip
"""What was seen. "lost": samples missing; "apart": a trace that the neighbours do not share;
"bridged": two sites nearly identical; "swapped": a site behaves like another position;
"no response" and "mirrored": answers to the biological calibration."""

CONFIDENCES = ("high", "moderate", "low")

STATES = ("present", "cured", "past")
"""Whether it is so at the end; "cured": it stopped when the electrode was handled; "past": it
stopped and nothing tells why."""


@dataclass(frozen=True, slots=True)
class Advice:
    """One entry of the ranked list.

    Attributes
    ----------
    number : int
        Order of the work, from 1.
    verdict, cause, sign, confidence, state : str
        Of ``VERDICTS``, ``CAUSES``, ``SIGNS``, ``CONFIDENCES`` and ``STATES``.
    sites : tuple of str
        Sites concerned, as the file spells them, the first one most; "reference" for the
        reference electrode; empty for the ground.
    stretches : tuple of (float, float)
        From when to when it was so, seconds from the start of the recording, in order.
    share : float
        Part of the judged time for which it was so, 0 to 1.
    reason : str
        What was measured, in one clause: "14 pops in 10 min, unlike its neighbours".
    checks : tuple of str
        What to do, in the trade's order; the first is what to do now.
    """

    number: int
    verdict: str
    cause: str
    sign: str
    sites: tuple[str, ...]
    confidence: str
    state: str
    stretches: tuple[tuple[float, float], ...]
    share: float
    reason: str
    checks: tuple[str, ...]

    @property
    def subject(self) -> str:
        """Who is meant, for a person: "P3", "F3 and C3", "reference", "ground"."""
        if self.cause == "ground":
            return "ground"
        if len(self.sites) > 4:
            return f"{', '.join(self.sites[:3])} and {len(self.sites) - 3} more"
        if len(self.sites) > 1:
            return f"{', '.join(self.sites[:-1])} and {self.sites[-1]}"
        return self.sites[0] if self.sites else CAUSE_WORDS[self.cause]

    @property
    def to_do(self) -> tuple[str, str]:
        """What to do now, and then what; empty where there is nothing.

        What is watched asks for a look only, what is over for nothing unless it comes back.
        """
        first, then = (*self.checks, "", "")[:2]
        if self.verdict != "watch":
            return first, then
        if self.state == "present":
            return f"look again; if it goes on: {first}", ""
        return f"nothing to do now; if it comes back: {first}", ""

    @property
    def line(self) -> str:
        """One line for a list: "P3 re-prep: 14 pops in 10 min; check the lead, ...".

        The number is left to the list.
        """
        doing = ", then ".join(part for part in self.to_do if part)
        return f"{self.subject} {self.verdict}: {self.reason}; {doing}"
