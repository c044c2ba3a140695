"""What is known of a stream at this moment: what the page and the terminal show."""

from __future__ import annotations

from dataclasses import dataclass

from artifactlens.result import Result

PHASES = ("waiting", "gathering", "watching", "lost", "refused", "stopped")
"""No stream yet; too little of it to say anything; at work; the source is gone; its layout
cannot be watched; the watch has given up."""

FLOWING = ("gathering", "watching")
"""Phases in which samples are awaited, so that what is shown may be old."""

QUIET_SECONDS = 3.0
"""What is shown is old if nothing came for longer; sources send several times a second."""


@dataclass(frozen=True, slots=True)
class Prompt:
    """What to ask the patient now, during the biological calibration.

    ``words`` is the request, ``left`` how many seconds it still lasts, ``step`` of ``steps``
    counts from 1.
    """

    words: str
    left: float
    step: int
    steps: int


@dataclass(frozen=True, slots=True)
class LiveState:
    """The state of the watch, made anew at least once a second.

    Attributes
    ----------
    phase : str
        Of ``PHASES``.
    stream : str
        Name of the stream, empty while none was found.
    seconds : float
        Stream time seen, gaps included.
    result : Result or None
        Of the last minutes: sites, advice, setup and what can be judged; flags are left out.
        None until enough was seen.
    marked_now : dict of str to tuple of str
        Sites marked in the last whole second, by kind.
    filled : int
        Samples that never came, per channel; they count as missing.
    outages : int
        How often the source was gone.
    delay : float or None
        Seconds from taking in the samples that end the last epoch until its result was
        there; what the source and the network need before is not in it.
    slowest : float or None
        The largest delay of the last minutes.
    prompt : Prompt or None
    notes : tuple of str
        Sentences for a person: "The stream came back with 20 channels, it had 19."
    breaks : int
        How often samples were missing for too long to be filled, though the source was there.
    silent : float
        Seconds since the stream last went on; 0 in phases other than ``FLOWING``.
    setup_left : float or None
        Seconds until the setup check is closed; None once it is, or before there is a stream.
    """

    phase: str
    stream: str
    seconds: float
    result: Result | None
    marked_now: dict[str, tuple[str, ...]]
    filled: int
    outages: int
    delay: float | None
    slowest: float | None
    prompt: Prompt | None
    notes: tuple[str, ...]
    breaks: int = 0
    silent: float = 0.0
    setup_left: float | None = None

    @property
    def old(self) -> bool:
        """Whether what is shown must not be taken for what is now."""
        return self.silent > QUIET_SECONDS


NOTHING_YET = LiveState("waiting", "", 0.0, None, {}, 0, 0, None, None, None, ())
