"""From time-stamped samples to the even grid that epochs are cut from."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from artifactlens.errors import StreamError

__all__ = ["Assembler", "Samples", "Stretch"]

LONGEST_FILL_SECONDS = 2.0
"""A longer drop-out is a break: the grid starts anew behind it."""

_HALF = 0.5
_FRACTION = 0.05
_MARGIN = 1.5
_MOST_JITTER_SECONDS = 0.25
_JITTER_MEMORY_SECONDS = 60.0
_ANSWER_SECONDS = 5.0

# The grid follows the stamps like a proportional-integral loop, a block at a time.
_BLOCK_SECONDS = 0.1
_FOLLOW_SECONDS = 0.5
_RATE_SECONDS = 10.0
_MOST_RATE_ERROR = 0.01


@dataclass(frozen=True, eq=False, slots=True)
class Samples:
    """Samples as they came.

    ``uv`` (n_channels, n) microvolt, missing values NaN; ``times`` (n,) seconds.
    """

    uv: NDArray[np.float32]
    times: NDArray[np.float64]


@dataclass(frozen=True, eq=False, slots=True)
class Stretch:
    """Samples that follow one another without a hole.

    ``segment`` counts the breaks so far; ``start`` is the place of the first sample on
    the grid of that segment, which is where the stretch before it ended; ``time`` is its
    LSL time, seconds; ``uv`` (n_channels, n) microvolt, NaN for samples that never came.
    """

    segment: int
    start: int
    time: float
    uv: NDArray[np.float32]


class Assembler:
    """Puts samples onto a grid of ``sampling_rate``, one piece after another.

    A sample belongs to the grid point next to its time stamp. Missing points become NaN,
    up to two seconds; beyond that, or if the clock of the source steps back as far, a new
    segment begins. Samples for points that are taken already (sent twice, or too late) are
    discarded: what was given out is never changed.

    Many sources stamp a whole chunk when they send it, so that stamps come early and late
    by some milliseconds though no sample is missing. It shows when a hole and an overlap
    answer one another within seconds and are no whole numbers of samples. From then on
    deviations of that size are borne and samples just counted. A source that stamps by
    its own clock does not show this, and its drop-outs are found to the sample.

    The grid follows the stamps slowly, so that a source that is a little faster or slower
    than its nominal rate (up to some 0.1 %) runs for hours without holes.

    Nothing of the samples is kept between two pieces.

    Attributes
    ----------
    filled, discarded : int
        Samples so far.
    breaks : int
        Drop-outs too long to fill, and steps of the clock, so far.
    """

    def __init__(self, sampling_rate: float, n_channels: int) -> None:
        if not (0 < sampling_rate < math.inf and n_channels > 0):
            raise StreamError(
                f"A grid needs a rate above 0 Hz and a channel; given were "
                f"{sampling_rate:g} Hz and {n_channels} channels.",
                "Give the nominal rate and the number of channels of the stream.",
            )
        self.filled = 0
        self.discarded = 0
        self.breaks = 0
        self._rate = sampling_rate
        self._n_channels = n_channels
        self._longest = LONGEST_FILL_SECONDS * sampling_rate
        self._block = max(1, round(_BLOCK_SECONDS * sampling_rate))
        self._segment = -1
        self._count = 0
        self._next = math.nan  # time of the next grid point, seconds
        self._period = 1.0 / sampling_rate
        self._jitter = 0.0  # samples
        # The last hole and the last overlap: size in samples, and when.
        self._hole = self._overlap = (0.0, -math.inf)

    def add(self, samples: Samples) -> list[Stretch]:
        """Take a piece of any length.

        Returns
        -------
        list of Stretch
            None if nothing new is in it, more than one after a break.

        Raises
        ------
        StreamError
            If the piece has another number of channels or of time stamps.
        """
        uv, times = samples.uv, samples.times
        if uv.ndim != 2 or uv.shape != (self._n_channels, len(times)):
            raise StreamError(
                f"A piece needs {self._n_channels} channels and a time for each sample; "
                f"given were values of shape {uv.shape} and {len(times)} times.",
                "Begin a new grid when the channels of a stream change.",
            )
        stamped = np.isfinite(times)
        if not stamped.all():
            self.discarded += int((~stamped).sum())
            uv, times = uv[:, stamped], times[stamped]
        if not len(times):
            return []
        self._forget_jitter(len(times))
        stretches: list[Stretch] = []
        parts: list[tuple[int, int, int]] = []  # first, behind the last, holes before
        done = 0
        while done < len(times):
            early = (times[done:] - self._next) / self._period
            deviation = early[: self._block] - np.arange(len(early[: self._block]))
            # Not within the bounds: before its first sample a segment has no next point.
            odd = ~(np.abs(deviation) <= _HALF + self._jitter)
            fitting = int(odd.argmax()) if odd.any() else len(odd)
            if fitting:
                parts.append((done, done + fitting, 0))
                self._follow(deviation[:fitting])
                done += fitting
                continue
            off = float(deviation[0])
            if not abs(off) <= self._longest:
                self._finish(stretches, uv, parts)
                self.breaks += self._count > 0
                self._segment += 1
                self._count = 0
                self._next = float(times[done])
                self._period = 1.0 / self._rate
            elif off > 0:
                missing = round(off)
                self._learn(off, float(times[done]))
                parts.append((done, done, missing))
                self.filled += missing
                self._next += missing * self._period
            else:
                self._learn(off, float(times[done]))
                # Behind the taken points, or so far back that the clock was set.
                beyond = (early >= -_HALF - self._jitter) | (early < -self._longest)
                skipped = int(beyond.argmax()) if beyond.any() else len(early)
                self.discarded += skipped
                done += skipped
        self._finish(stretches, uv, parts)
        return stretches

    def _finish(
        self,
        stretches: list[Stretch],
        uv: NDArray[np.float32],
        parts: list[tuple[int, int, int]],
    ) -> None:
        """Turn the parts collected into a stretch of the segment at hand."""
        n = sum(stop - start + holes for start, stop, holes in parts)
        if n:
            grid = np.full((self._n_channels, n), np.nan, dtype=np.float32)
            place = 0
            for start, stop, holes in parts:
                place += holes
                grid[:, place : place + stop - start] = uv[:, start:stop]
                place += stop - start
            time = self._next - n * self._period
            stretches.append(Stretch(self._segment, self._count, time, grid))
            self._count += n
        parts.clear()

    def _follow(self, deviation: NDArray[np.float64]) -> None:
        """Move on by points whose stamps deviated so many samples from the grid."""
        seconds = len(deviation) * self._period
        late = float(deviation.mean()) * self._period
        gain = -math.expm1(-seconds / _FOLLOW_SECONDS)
        self._next += seconds + gain * late
        ratio = self._period * self._rate
        ratio += late * seconds / (_FOLLOW_SECONDS * _RATE_SECONDS)
        ratio = min(max(ratio, 1.0 - _MOST_RATE_ERROR), 1.0 + _MOST_RATE_ERROR)
        self._period = ratio / self._rate
        if self._jitter:
            self._raise_jitter(float(np.abs(deviation).max()))

    def _raise_jitter(self, seen: float) -> None:
        limit = _MOST_JITTER_SECONDS * self._rate
        self._jitter = min(max(self._jitter, _MARGIN * seen), limit)

    def _forget_jitter(self, n: int) -> None:
        self._jitter *= math.exp(-n / self._rate / _JITTER_MEMORY_SECONDS)
        if self._jitter < _HALF:
            self._jitter = 0.0

    def _learn(self, off: float, now: float) -> None:
        """Tell jitter from drop-outs and repeats: it is fractional and goes both ways."""
        if abs(off - round(off)) < _FRACTION:
            return
        size = abs(off)
        if off > 0:
            self._hole, answer = (size, now), self._overlap
        else:
            self._overlap, answer = (size, now), self._hole
        if abs(now - answer[1]) <= _ANSWER_SECONDS:
            self._raise_jitter(min(size, answer[0]))
