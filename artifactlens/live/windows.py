"""What a watch remembers: the last minute of samples, the last minutes of measures.

Both are of fixed size: a watch of hours takes no more memory than one of minutes.
"""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

if TYPE_CHECKING:
    from artifactlens.live.stream_grid import Stretch


class RawWindow:
    """The last ``seconds`` of samples of one uninterrupted stretch, (n_channels, ...) uV."""

    def __init__(self, n_channels: int, sampling_rate: float, seconds: float) -> None:
        self._keep = int(seconds * sampling_rate)
        self._data = np.empty((n_channels, 2 * self._keep), dtype=np.float32)
        self.restart()

    def restart(self) -> None:
        """Forget everything: what follows does not follow on what was."""
        self.first = 0
        self._filled = 0

    @property
    def end(self) -> int:
        """Number of the next sample, counted from the last restart."""
        return self.first + self._filled

    def add(self, uv: NDArray[np.float32]) -> None:
        """Take in the next samples, (n_channels, n)."""
        for low in range(0, uv.shape[1], self._keep):
            self._add(uv[:, low : low + self._keep])

    def _add(self, uv: NDArray[np.float32]) -> None:
        n = uv.shape[1]
        if self._filled + n > self._data.shape[1]:
            kept = self._keep
            self._data[:, :kept] = self._data[:, self._filled - kept : self._filled]
            self.first += self._filled - kept
            self._filled = kept
        self._data[:, self._filled : self._filled + n] = uv
        self._filled += n

    def piece(self, start: int, stop: int) -> NDArray[np.float32]:
        """Samples ``start`` up to ``stop``, as a view; what is gone or to come is left out."""
        low, high = max(start - self.first, 0), min(stop - self.first, self._filled)
        return self._data[:, low : max(high, low)]


class Seconds:
    """The last samples of a stream and where they lie in time, by whole seconds.

    Times are seconds from the first sample of the stream, and never step back. Where the
    clock of the source does, the break is taken to have been of no length.

    Parameters
    ----------
    n_channels : int
    sampling_rate : float, hertz
    keep : float
        How many seconds of samples are kept at least.

    Attributes
    ----------
    raw : RawWindow
        Samples of the segment at hand.
    segment : int
        Its number; -1 before the first sample.
    whole : int
        Whole seconds of it so far.
    n_samples : int
        Samples that fit into a second.
    """

    def __init__(self, n_channels: int, sampling_rate: float, keep: float) -> None:
        self.rate = sampling_rate
        self.n_samples = int(np.floor(sampling_rate + 1e-9))
        self.raw = RawWindow(n_channels, sampling_rate, keep)
        self.segment = -1
        self.whole = 0
        self._onset = 0.0
        self._origin: float | None = None  # of all times, by the clock of the source
        self._away: float | None = None

    @property
    def now(self) -> float:
        """Time of the next sample."""
        return self.time_of(self.raw.end)

    def time_of(self, sample: int) -> float:
        """Time of a sample of the segment."""
        return self._onset + sample / self.rate

    def start_of(self, second: int) -> int:
        """First sample of a second of the segment."""
        return int(np.rint(second * self.rate))

    def end_of(self, second: int) -> int:
        """The sample behind its last one."""
        return self.start_of(second) + self.n_samples

    def come_back(self, away: float) -> None:
        """The source was away for so many seconds, by the clock of this computer.

        If a new segment is next, the break before it is of that length: the clock of the
        source may be another one than before.
        """
        self._away = away

    def begin_segment(self, stretch: Stretch) -> None:
        """Forget the samples so far: those of the stretch do not follow on them."""
        onset = self.now
        if self._away is not None:
            onset += self._away
        elif self._origin is not None:
            onset = max(onset, stretch.time - self._origin)
        self._origin = stretch.time - onset
        self._onset, self.segment, self.whole = onset, stretch.segment, 0
        self.raw.restart()

    def add(self, uv: NDArray[np.float32]) -> None:
        """Take in the next samples of the segment, (n_channels, n)."""
        self._away = None
        self.raw.add(uv)
        while self.end_of(self.whole) <= self.raw.end:
            self.whole += 1


class Rolling:
    """Columns of the last epochs, one row an epoch; old rows go as new ones come."""

    def __init__(self, keep: int) -> None:
        self._keep = keep
        self._columns: dict[str, NDArray[Any]] = {}
        self._first = self._end = 0

    def __len__(self) -> int:
        return self._end - self._first

    def append(self, row: dict[str, NDArray[Any]]) -> None:
        """Add an epoch; the first one tells shapes and types."""
        if not self._columns:
            self._columns = {
                name: np.zeros((2 * self._keep, *np.shape(value)), np.asarray(value).dtype)
                for name, value in row.items()
            }
        if self._end == 2 * self._keep:
            for column in self._columns.values():
                column[: self._keep] = column[self._keep :]
            self._first, self._end = max(self._first - self._keep, 0), self._keep
        self._end += 1
        self._first = max(self._first, self._end - self._keep)
        self.rewrite(-1, row)

    def rewrite(self, place: int, row: dict[str, NDArray[Any]]) -> None:
        """Replace values of an epoch, counted from the end: -1 is the last one."""
        for name, value in row.items():
            self._columns[name][self._end + place] = value

    def drop(self, count: int) -> None:
        """Forget the oldest epochs."""
        self._first = min(self._first + count, self._end)

    def column(self, name: str) -> NDArray[Any]:
        """A column, (n_epochs, ...), as a view."""
        return self._columns[name][self._first : self._end]
