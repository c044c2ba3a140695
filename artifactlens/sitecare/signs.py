"""What the electrodes themselves show, second by second, beside the features of the model.

The log of a recording holds little per second, so that it stays small over a day and can be
cut to the last minutes of a stream: who was lost, flat or clipped, the slow level, mains as
a complex amplitude, and, per stretch of some seconds, the covariance of the sites. From that
covariance follow the electrical distance of any two sites, what a site shows that no other
does, and which place it fits.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from artifactlens.features import mains_is_carried
from artifactlens.features.spatial import field_covariance, slow_traces
from artifactlens.sitecare.placement import PlaceMoments, placement_moments

if TYPE_CHECKING:
    from artifactlens.epochs import EpochBatch
    from artifactlens.frames import Frame
    from artifactlens.survey import Conditions

Array = NDArray[np.float32]
Bools = NDArray[np.bool_]

LEVELS_PER_SECOND = 2

STRETCH_SECONDS = 10.0
"""Time over which sites are compared: long enough for a stable correlation, short enough to
see when a fault began."""

FADE_PER_EPOCH = float(np.exp(-1 / 600))
"""In a stream, what tells of the sites' places counts for about ten minutes."""

LONGEST_LOG = 64e6
"""Bytes that the covariances of a recording may take; longer ones get longer stretches."""


@dataclass(frozen=True, slots=True)
class Signs:
    """Signs of a few neighbouring seconds, or of a recording's.

    Attributes
    ----------
    ok : array, shape (n_epochs, n_sites), bool
    flat, missing, clipped : array, shape (n_epochs, n_channels), bool
        Of the used channels.
    level : array, shape (n_epochs, 2, n_sites), microvolt
        Mean of each half second.
    hum : array, shape (n_epochs, n_sites), complex microvolt
        Amplitude and phase at the line frequency; zeros where mains is not carried. Phases
        compare within an epoch only.
    """

    ok: Bools
    flat: Bools
    missing: Bools
    clipped: Bools
    level: Array
    hum: NDArray[np.complex64]

    def at(self, epochs: Bools) -> Signs:
        """The same of some epochs only."""
        return Signs(**{name: getattr(self, name)[epochs] for name in Signs.__slots__})


def signs_of(
    batch: EpochBatch, frame: Frame, conditions: Conditions, *, newest: int | None = None
) -> tuple[Signs, Array, PlaceMoments]:
    """Signs of a batch, its covariance between sites, and what tells of their places.

    The covariance (n_epochs, n_sites, n_sites) uV^2 is that of the traces smoothed to 50
    samples a second, within each epoch. ``newest`` keeps only so many epochs of the batch, the
    last ones.
    """
    part = slice(-newest if newest else None, None)
    ok = batch.ok[:, 1:-1].T
    n, starts = batch.n_samples, batch.starts[1:-1]
    epochs = batch.windows(starts, n)
    half = n // LEVELS_PER_SECOND
    halves = [
        epochs[:, :, k * half : (k + 1) * half].mean(axis=2)
        for k in range(LEVELS_PER_SECOND)
    ]
    hum = np.zeros(ok.shape, dtype=np.complex64)
    if mains_is_carried(conditions):
        # Of the Hann window the line keeps half its height, hence 2 / (n / 2).
        window = np.hanning(n + 1)[:-1] * (4 / n)
        turns = conditions.line_frequency * np.arange(n) / batch.sampling_rate
        hum = (epochs @ (window * np.exp(-2j * np.pi * turns)).astype(np.complex64)).T
    signs = Signs(
        ok=ok[part],
        flat=batch.flat.T[part],
        missing=batch.missing.T[part],
        clipped=batch.clipped.T[part],
        level=np.stack(halves).transpose(2, 0, 1).astype(np.float32)[part],
        hum=hum.astype(np.complex64)[part],
    )
    keep = np.zeros_like(ok)
    keep[part] = ok[part]
    slow = slow_traces(batch)
    return signs, field_covariance(slow)[part], placement_moments(slow, keep)


@dataclass(frozen=True, slots=True)
class SignLog:
    """The signs of a recording, or of the last minutes of a stream.

    ``onset`` (n_epochs,) seconds; ``stretch`` (n_epochs,) index of the stretch that an epoch
    is of, ``begin`` and ``end`` (n_stretches,) their bounds in seconds, ``covariance``
    (n_stretches, n_sites, n_sites) uV^2, mean over the epochs in which both sites were there,
    NaN where none was; ``places`` are sums over all that was seen, of a stream with the
    older fading.
    """

    signs: Signs
    onset: NDArray[np.float64]
    stretch: NDArray[np.intp]
    begin: NDArray[np.float64]
    end: NDArray[np.float64]
    covariance: Array
    places: PlaceMoments

    def __len__(self) -> int:
        return len(self.begin)

    def first(self, n_stretches: int) -> SignLog:
        """The log of the first stretches only."""
        kept = self.stretch < n_stretches
        return SignLog(
            signs=self.signs.at(kept),
            onset=self.onset[kept],
            stretch=self.stretch[kept],
            begin=self.begin[:n_stretches],
            end=self.end[:n_stretches],
            covariance=self.covariance[:n_stretches],
            places=PlaceMoments.none(self.covariance.shape[1]),
        )

    def mean(self, values: NDArray[np.floating | np.bool_]) -> NDArray[np.float64]:
        """Mean over each stretch of (n_epochs, ...) values, NaN left out, NaN where none is."""
        known = np.isfinite(values)
        total = self.total(np.where(known, values, 0.0))
        with np.errstate(divide="ignore", invalid="ignore"):
            return np.asarray(total / self.total(known))

    def total(self, values: NDArray[np.generic]) -> NDArray[np.float64]:
        """Sum over each stretch of (n_epochs, ...) values, (n_stretches, ...)."""
        first = np.searchsorted(self.stretch, np.arange(len(self)))
        return np.asarray(np.add.reduceat(values.astype(np.float64), first, axis=0))


class SignKeeper:
    """Takes in the signs of batch after batch; keeps covariances as sums per stretch.

    Parameters
    ----------
    n_epochs : int or None
        Expected number of epochs; None for a stream.
    n_sites : int
    """

    def __init__(self, n_epochs: int | None, n_sites: int) -> None:
        size = max(n_sites, 1) ** 2 * 8  # a sum and a count, four bytes each
        most = max(60, int(LONGEST_LOG / size))
        seconds = 0.0 if n_epochs is None else n_epochs / most
        self.stretch_seconds = max(STRETCH_SECONDS, float(math.ceil(seconds)))
        self._signs: list[Signs] = []
        self._onset: list[NDArray[np.float64]] = []
        self._fade = FADE_PER_EPOCH if n_epochs is None else 1.0
        self._places = PlaceMoments.none(n_sites)
        self._sums: dict[int, tuple[Array, Array]] = {}

    def add(
        self,
        onset: NDArray[np.float64],
        signs: Signs,
        covariance: Array,
        places: PlaceMoments,
    ) -> None:
        """Take in the next epochs, in order of time; the rest as :func:`signs_of` gives it."""
        fade = self._fade ** len(onset)
        before = PlaceMoments(fade * self._places.total, fade * self._places.seconds)
        self._places = before + places
        number = self._number(onset)
        first = np.flatnonzero(np.diff(number, prepend=-1))
        there = signs.ok.astype(np.float32)
        sums = np.add.reduceat(covariance, first, axis=0)
        both = np.add.reduceat(there[:, :, None] * there[:, None], first, axis=0)
        for index, total, count in zip(number[first], sums, both, strict=True):
            if int(index) in self._sums:
                earlier, fewer = self._sums[int(index)]
                total, count = earlier + total, fewer + count
            self._sums[int(index)] = (total, count)
        self._signs.append(signs)
        self._onset.append(onset)

    def forget(self, before: float) -> None:
        """Drop the epochs that begin before ``before`` seconds.

        The covariance of the stretch that is cut through stays that of all its epochs.
        """
        while self._onset and self._onset[0][-1] < before:
            del self._onset[0], self._signs[0]
        if self._onset and self._onset[0][0] < before:
            later = self._onset[0] >= before
            self._onset[0], self._signs[0] = self._onset[0][later], self._signs[0].at(later)
        lowest = int(self._number(np.array([before]))[0])
        self._sums = {key: pair for key, pair in self._sums.items() if key >= lowest}

    def log(self) -> SignLog:
        """All that is kept."""
        onset = np.concatenate(self._onset)
        number = self._number(onset)
        kept, first, stretch, length = np.unique(
            number, return_index=True, return_inverse=True, return_counts=True
        )
        sums, counts = (np.stack([self._sums[int(key)][k] for key in kept]) for k in (0, 1))
        # A rest too short to tell anything is told with the stretch before it.
        short = (length < self.stretch_seconds / 2) & (np.diff(kept, prepend=kept[0]) == 1)
        group = np.cumsum(~short) - 1
        begins = np.flatnonzero(~short)
        with np.errstate(divide="ignore", invalid="ignore"):
            covariance = np.add.reduceat(sums, begins) / np.add.reduceat(counts, begins)
        names = Signs.__slots__
        columns = {
            name: np.concatenate([getattr(part, name) for part in self._signs])
            for name in names
        }
        last = np.append(first[begins][1:], len(onset)) - 1
        return SignLog(
            signs=Signs(**columns),
            onset=onset,
            stretch=group[stretch.ravel()].astype(np.intp),
            begin=onset[first[begins]],
            end=onset[last] + 1.0,
            covariance=covariance.astype(np.float32),
            places=self._places,
        )

    def _number(self, onset: NDArray[np.float64]) -> NDArray[np.int64]:
        return np.floor(onset / self.stretch_seconds + 1e-9).astype(np.int64)
