"""What is known of a stream at this moment: what the page and the terminal show."""

from __future__ import annotations

from dataclasses import dataclass

from artifactlens.result import Result

PHASES = ("waiting", "gathering", "watching", "lost")
"""No stream yet; too little of it to say anything; at work; the source is gone."""


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
        Seconds from the end of the last epoch until its result was there.
    slowest : float or None
        The largest delay of the last minutes.
    prompt : Prompt or None
    notes : tuple of str
        Sentences for a person: "The stream came back with 20 channels, it had 19."
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


NOTHING_YET = LiveState("waiting", "", 0.0, None, {}, 0, 0, None, None, None, ())
