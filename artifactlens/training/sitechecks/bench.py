"""The recording that a fault is put into: its electrodes, its recorder, and chance."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from artifactlens.simulation import electrode
from artifactlens.simulation.scene import Scene

Array = NDArray[np.float64]

REFERENCE = -1
"""Row that stands for the reference electrode."""

NEAR_M = 0.075
"""Two sites nearer than this, in metres, are neighbours: in the 10-20 system those beside
each other."""


@dataclass(frozen=True, eq=False)
class Bench:
    """A clean recording in electrode terms and the draw that a fault is made from.

    Attributes
    ----------
    channels : array, shape (n_sites, n_samples), microvolt
        Each site against the reference, as the recorder keeps it.
    scene : Scene
        The sites, then the ``n_refs`` electrodes that make up the reference.
    chain : array, shape (n_sites,)
        Number of the connected part of the montage that a site belongs to.
    rng : numpy Generator
    plain : bool
        Plain faults are seen at a glance, mild ones are not.
    span : (float, float)
        From when to when the fault is there, seconds.
    high_pass, line : float, hertz
    """

    channels: Array
    scene: Scene
    n_refs: int
    chain: NDArray[np.intp]
    rng: np.random.Generator
    plain: bool
    span: tuple[float, float]
    high_pass: float
    line: float

    @property
    def n_sites(self) -> int:
        """Number of sites, without the reference."""
        return len(self.channels)

    @property
    def duration(self) -> float:
        """How long the fault is there, seconds."""
        return self.span[1] - self.span[0]

    @cached_property
    def during(self) -> NDArray[np.bool_]:
        """Samples at which the fault is there."""
        return (self.scene.time >= self.span[0]) & (self.scene.time < self.span[1])

    @cached_property
    def weight(self) -> Array:
        """As ``during``, with ramps of half a second at ends within the recording."""
        start, stop = self.span
        start = start if start > 0 else -1.0
        stop = stop if stop < self.scene.length else self.scene.length + 1.0
        return self.scene.gate(start, stop - start, 0.5)

    def between(self, low: float, high: float) -> float:
        """A size, even on a logarithmic scale."""
        return float(np.exp(self.rng.uniform(np.log(low), np.log(high))))

    def size(self, plain: tuple[float, float], mild: tuple[float, float]) -> float:
        """A size of the range that belongs to the strength."""
        return self.between(*(plain if self.plain else mild))

    def count(self, plain: tuple[int, int], mild: tuple[int, int]) -> int:
        """A number of events, both ends included."""
        low, high = plain if self.plain else mild
        return int(self.rng.integers(low, high + 1))

    def some_sites(self, count: int) -> list[int]:
        """Different sites at random."""
        return [int(row) for row in self.rng.choice(self.n_sites, count, replace=False)]

    def moments(self, count: int, lasting: float = 0.5) -> list[float]:
        """Onsets in the span, one at random in each of ``count`` equal parts of it, seconds."""
        room = max(self.duration - lasting - 0.5, 0.1) / count
        first = self.span[0] + 0.25
        return [float(first + room * (k + self.rng.random())) for k in range(count)]

    def electrodes(self, row: int) -> list[int]:
        """Rows of the scene that belong to a site, or all those of the reference."""
        if row == REFERENCE:
            return list(range(self.n_sites, self.n_sites + self.n_refs))
        return [row]

    def at(self, row: int, wave: Array) -> Array:
        """Potentials at all electrodes of something that reaches one only."""
        field = np.zeros((self.scene.n_sites, self.scene.n_samples))
        field[self.electrodes(row)] = wave
        return field

    def recorded(self, field: Array) -> Array:
        """What the recorder keeps of potentials at all electrodes, at each site.

        Against the mean of the reference's electrodes, through a first-order high-pass;
        shape (n_sites, n_samples). The channels have been through it already.
        """
        seen = field[: self.n_sites] - field[self.n_sites :].mean(axis=0)
        return electrode.high_pass_first_order(seen, self.high_pass, self.scene.sfreq)

    def distances(self, row: int) -> Array:
        """From one site to all sites, metre."""
        places = self.scene.sites[: self.n_sites]
        return np.asarray(np.linalg.norm(places - places[row], axis=1))

    def neighbours(self, row: int) -> list[int]:
        """Sites of the same chain within ``NEAR_M``."""
        near = (self.distances(row) <= NEAR_M) & (self.chain == self.chain[row])
        return [int(other) for other in np.flatnonzero(near) if other != row]
