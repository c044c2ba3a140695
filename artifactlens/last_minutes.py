"""The last minutes of a recording, in the clock of the whole."""

from __future__ import annotations

import math
from dataclasses import replace

from artifactlens.errors import OptionError
from artifactlens.recording import Recording, Segment

SHORTEST_MINUTES = 1 / 60
"""One epoch."""


def last_minutes_of(recording: Recording, minutes: float) -> Recording:
    """The recording as if it began ``minutes`` before its end; nothing is copied.

    Times stay counted from the start of the whole. What is left begins on the grid of
    seconds of the whole, so that up to a second more may be kept.

    Parameters
    ----------
    recording : Recording
    minutes : float
        Gaps count: the clock of the recording decides.

    Returns
    -------
    Recording
        The same object if it is no longer than that. Annotations that end earlier are
        left out, and a note says what is judged.

    Raises
    ------
    OptionError
        If ``minutes`` is less than a second or no number.
    """
    if not SHORTEST_MINUTES <= minutes < math.inf:
        raise OptionError(
            f"The last minutes need to be a number, at least a second; given was {minutes!r}.",
            "Give for example 10, or leave it out to judge the whole recording.",
        )
    begin = recording.duration - 60 * minutes
    parts = (_from(part, begin, recording.sampling_rate) for part in recording.segments)
    segments = tuple(part for part in parts if part.n_samples > 0)
    if segments == recording.segments:
        return recording
    return replace(
        recording,
        segments=segments,
        annotations=tuple(
            entry for entry in recording.annotations if entry[0] + entry[1] >= begin
        ),
        notes=(*recording.notes, f"Judged: the last {minutes:g} min."),
    )


def _from(segment: Segment, begin: float, rate: float) -> Segment:
    """What of a segment lies behind ``begin``, in whole seconds from its own start."""
    seconds = max(math.floor(begin - segment.onset), 0)
    first = round(seconds * rate)  # where epochs.epoch_grid puts this second
    return Segment(
        segment.start + first, segment.n_samples - first, segment.onset + first / rate
    )
