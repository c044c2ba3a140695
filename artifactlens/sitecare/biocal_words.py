"""The tasks of a biological calibration: their words in annotations, and our own protocol."""

from __future__ import annotations

import re
from collections.abc import Sequence
from typing import NamedTuple

KINDS = ("blink", "gaze left", "gaze right", "gaze", "jaw")
"""What a patient may be asked for; "gaze" is from side to side, or no side was named."""

UNNAMED = "calibration"
"""A calibration is announced, but not which task."""

LONGEST_SECONDS = 15.0
"""An answer is looked for no longer than this after its announcement (our own choice)."""

LONGEST_UNNAMED_SECONDS = 60.0
"""The same where a whole calibration is announced and not its tasks (our own choice)."""


class Task(NamedTuple):
    """Something the patient was asked to do.

    ``kind`` is one of ``KINDS``; ``onset`` and ``duration`` in seconds. ``timed`` is False
    for a stretch in which it may have been done at any time, or not at all.
    """

    kind: str
    onset: float
    duration: float
    timed: bool = True

    @property
    def end(self) -> float:
        """End, seconds."""
        return self.onset + self.duration


class Step(NamedTuple):
    """A line of the protocol: what the patient is told, for how long, and which task it is."""

    words: str
    seconds: float
    kind: str | None


_PROTOCOL = (
    Step("Rest, eyes open, look straight ahead", 5.0, None),
    Step("Blink five times", 8.0, "blink"),
    Step("Rest, look straight ahead", 3.0, None),
    Step("Look left, keep the head still", 3.0, "gaze left"),
    Step("Look straight ahead", 2.0, None),
    Step("Look right, keep the head still", 3.0, "gaze right"),
    Step("Look straight ahead", 2.0, None),
    Step("Look left once more", 3.0, "gaze left"),
    Step("Look straight ahead", 2.0, None),
    Step("Look right once more", 3.0, "gaze right"),
    Step("Look straight ahead, rest", 4.0, None),
    Step("Clench the teeth on both sides", 4.0, "jaw"),
    Step("Let the jaw hang, rest", 4.0, None),
)


def steps() -> tuple[Step, ...]:
    """Our own short protocol, in order, with which a page may lead the patient."""
    return _PROTOCOL


def protocol_tasks(start: float) -> tuple[Task, ...]:
    """The tasks of :func:`steps` if its first line is said at ``start`` seconds."""
    tasks, onset = [], start
    for step in _PROTOCOL:
        if step.kind is not None:
            tasks.append(Task(step.kind, onset, step.seconds))
        onset += step.seconds
    return tuple(tasks)


# All patterns are matched against words of small letters with one blank between them.
_SIDE = r"(?P<side>left|right|l|r|lt|rt)(?:wards?)?"
_BOTH = (
    r"(?:left (?:and |to |then )?right|right (?:and |to |then )?left|side to side"
    r"|l r|r l|lt rt|rt lt)"
)
_ACROSS = r"(?:lateral(?:ly)?|horizontal(?:ly)?|sideways)"
_LOOK = r"(?:look|looks|looking|gaze|gazes|gazing|glance|saccades?|eyes|eye movements?)"
_WAY = r"(?:(?:to|towards?|the|his|her|their|far|all|move|moved|moving|go|turn|turned) )*"
_BODY = r"(?:arm|hand|leg|foot|side|ear|eye|face|finger|toe|thumb|temporal|frontal|hemi\w*|eeg)s?"

_BLINKS = re.compile(r"\b(?:blink|blinks|blinked|blinking|eyeblinks?)\b")
_JAW = re.compile(
    r"\b(?:jaws?|bite|bites|biting|teeth|chew|chews|chewing|clench|clenches|clenched|clenching)\b"
)
_MOVE = r"(?:eyes?|gaze|look|looks|saccades?|saccadic)(?: movements?| moves?)?"
_GAZE_BOTH, _GAZE_ACROSS = (
    re.compile(rf"\b(?:{_LOOK} {_WAY}{manner}|{manner} {_MOVE})\b")
    for manner in (_BOTH, _ACROSS)
)
_GAZE_SIDE = re.compile(
    rf"\b(?:{_LOOK} {_WAY}{_SIDE}(?! {_BODY}\b)"
    r"|(?P<before>left|right|l|r|lt|rt)(?:wards?)? (?:lateral )?"
    r"(?:gazes?|looks?|saccades?|eye movements?))\b"
)
_UNNAMED = re.compile(
    r"\b(?:biocals?|bio cals?|bio ?calibrations?|biological cal(?:ibration)?s?"
    r"|patient calibrations?)\b"
)

# What an annotation says of a seizure, of a sign of illness or of the opposite of a task.
_OTHERWISE = re.compile(
    r"\b(?:no|not|non|don t|dont|never|without|avoid|less|stop|stops|stopped|relax\w*|loosen"
    r"|loose|slack|hang|hanging|drop|open mouth|unclench\w*|unable|cannot|can t"
    r"|sz|seizures?|ictal|clinical|twitch\w*|jerk\w*|myoclon\w*|chatter\w*|automatisms?"
    r"|deviat\w*|preference|palsy|nystagmus|tongue|lips?|brush\w*|block|guard|photic|flash\w*"
    r"|rem|reading)\b"
)


def task_words(text: str) -> str | None:
    """What an annotation announces: one of ``KINDS``, ``UNNAMED`` or nothing (None).

    English trade words, whole words, in any case and with any punctuation. A text that also
    speaks of a seizure, of rest or of the opposite announces nothing.
    """
    words = " ".join(re.findall(r"[a-z]+", text.lower()))
    if _OTHERWISE.search(words):
        return None
    if _BLINKS.search(words):
        return "blink"
    if _JAW.search(words):
        return "jaw"
    if _GAZE_BOTH.search(words):
        return "gaze"
    sides = {(match["side"] or match["before"])[0] for match in _GAZE_SIDE.finditer(words)}
    if sides:
        return (
            "gaze" if len(sides) > 1 else {"l": "gaze left", "r": "gaze right"}[sides.pop()]
        )
    if _GAZE_ACROSS.search(words):
        return "gaze"
    return UNNAMED if _UNNAMED.search(words) else None


def announced(
    annotations: Sequence[tuple[float, float, str]], end: float
) -> tuple[Task, ...]:
    """The tasks that a recording's own annotations announce, in order of time.

    A task lasts as long as its annotation says or else until the next one, at most 15 s. A
    calibration without named tasks gives an untimed task of each family, unless tasks are
    named within the minute after it.

    Parameters
    ----------
    annotations : sequence of (onset, duration, text)
        Seconds.
    end : float
        End of the recording, seconds.
    """
    ordered = sorted(entry for entry in annotations if 0 <= entry[0] < end)
    onsets = [onset for onset, _, _ in ordered]
    named, unnamed = [], []
    for onset, stated, text in ordered:
        kind = task_words(text)
        if kind is None:
            continue
        following = min((other for other in onsets if other > onset), default=end)
        if kind == UNNAMED:
            unnamed.append(onset)
            continue
        length = stated if stated > 0 else following - onset
        named.append(Task(kind, onset, min(length, LONGEST_SECONDS, end - onset)))
    covered = -1.0
    loose: list[Task] = []
    for onset in unnamed:
        until = min(onset + LONGEST_UNNAMED_SECONDS, end)
        if onset < covered or any(onset <= task.onset <= until for task in named):
            continue
        covered = until
        loose += anywhere(onset, until - onset)
    return tuple(sorted([*named, *loose], key=lambda task: task.onset))


def anywhere(onset: float, duration: float) -> tuple[Task, ...]:
    """A task of each family that may be done at any time of a stretch."""
    return tuple(Task(kind, onset, duration, False) for kind in ("blink", "gaze", "jaw"))
