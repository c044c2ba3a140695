"""Where a simulation happens and what it hands back: potentials and their truth."""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING

import numpy as np

from artifactlens.errors import SitesError

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import ArrayLike, NDArray


@dataclass(frozen=True, slots=True, eq=False)
class Happening:
    """One thing that was put into a recording.

    ``kind`` is one of the four kinds, "brain", or "other" for what comes neither from the
    brain nor is one of the four kinds; ``what`` says it in a few words;
    ``onset`` and ``duration`` are in seconds; ``strength_uv`` (n_sites,) float32 is the
    largest absolute potential at each site while it lasts, in microvolt, before any
    reference or filter.
    """

    kind: str
    what: str
    onset: float
    duration: float
    strength_uv: NDArray[np.float32]

    @property
    def end(self) -> float:
        """End, seconds."""
        return self.onset + self.duration


@dataclass(frozen=True, slots=True, eq=False)
class Simulated:
    """Electrode potentials (n_sites, n_samples) float32, microvolt, and their truth.

    Two of the same scene are put into one head by adding them.
    """

    potentials: NDArray[np.float32]
    truth: tuple[Happening, ...]

    def __add__(self, other: Simulated) -> Simulated:
        """Both at once: potentials of independent sources add up."""
        return Simulated(self.potentials + other.potentials, self.truth + other.truth)


@dataclass(frozen=True, eq=False)
class Scene:
    """Electrodes and a stretch of time.

    ``sites`` (n_sites, 3) in metres, x right, y to the nose, z up, origin at the centre of
    the head; a recording's reference electrode is one of them. ``sfreq`` in hertz.
    """

    sites: NDArray[np.float64]
    n_samples: int
    sfreq: float

    def __post_init__(self) -> None:
        """Refuse positions from which nothing can be computed."""
        unit_directions(self.sites)

    @property
    def n_sites(self) -> int:
        """Number of electrodes."""
        return len(self.sites)

    @property
    def length(self) -> float:
        """Length in seconds."""
        return self.n_samples / self.sfreq

    @cached_property
    def time(self) -> NDArray[np.float64]:
        """Time of each sample, seconds, shape (n_samples,)."""
        return np.arange(self.n_samples) / self.sfreq

    def gate(self, onset: float, duration: float, ramp: float) -> NDArray[np.float64]:
        """1 from ``onset`` for ``duration`` seconds, smooth ramps inside, 0 outside."""
        since = self.time - onset
        return ease(np.minimum(since, duration - since) / ramp)

    def stretch(self, onset: float, duration: float) -> Stretch:
        """The samples from ``onset`` for ``duration`` seconds, as far as they exist."""
        return Stretch(self, float(onset), float(duration))

    def simulated(
        self, kind: str, potentials: ArrayLike, spans: Sequence[tuple[str, float, float]]
    ) -> Simulated:
        """Potentials (n_sites, n_samples), a happening for each (what, onset, duration).

        Spans are cut to the scene; one that lies wholly outside is left out.
        """
        field = np.asarray(potentials, dtype=np.float32)
        truth = []
        for what, onset, duration in spans:
            start, stop = max(onset, 0.0), min(onset + duration, self.length)
            first, last = int(start * self.sfreq), int(np.ceil(stop * self.sfreq))
            if first < last:
                shown = field[:, first:last]
                peak = np.maximum(shown.max(axis=1), -shown.min(axis=1))
                truth.append(Happening(kind, what, start, stop - start, peak))
        return Simulated(field, tuple(truth))


@dataclass(frozen=True, eq=False)
class Stretch:
    """The samples of a scene in which one thing happens: all that need be computed.

    ``onset`` and ``duration`` in seconds. Recordings are long and most events short.
    """

    scene: Scene
    onset: float
    duration: float

    @cached_property
    def samples(self) -> slice:
        """Its samples in the scene; empty if it lies outside."""
        rate, n_samples = self.scene.sfreq, self.scene.n_samples
        first = min(max(math.ceil(self.onset * rate - 1e-6), 0), n_samples)
        last = math.floor((self.onset + self.duration) * rate + 1e-6) + 1
        return slice(first, min(max(last, first), n_samples))

    @property
    def n_samples(self) -> int:
        """Number of its samples."""
        return int(self.samples.stop - self.samples.start)

    @cached_property
    def time(self) -> NDArray[np.float64]:
        """Seconds since its onset at each sample, shape (n_samples,)."""
        return self.scene.time[self.samples] - self.onset

    def gate(self, ramp: float) -> NDArray[np.float64]:
        """0 at both its ends, 1 between, with smooth ramps of ``ramp`` seconds."""
        return ease(np.minimum(self.time, self.duration - self.time) / ramp)

    def simulated(
        self,
        kind: str,
        potentials: ArrayLike,
        spans: str | Sequence[tuple[str, float, float]],
    ) -> Simulated:
        """Potentials (n_sites, n_samples) put into a silent scene.

        ``spans`` as in :meth:`Scene.simulated`, or what it is, if it is one thing that
        lasts for the whole stretch.
        """
        field = np.zeros((self.scene.n_sites, self.scene.n_samples), dtype=np.float32)
        field[:, self.samples] = potentials
        if isinstance(spans, str):
            spans = [(spans, self.onset, self.duration)]
        return self.scene.simulated(kind, field, spans)


def ease(x: ArrayLike) -> NDArray[np.float64]:
    """Smooth step: 0 up to x = 0, 1 from x = 1, a half cosine between. Any shape."""
    return np.asarray(np.sin(np.pi / 2 * np.clip(x, 0, 1)) ** 2)


def unit_directions(places: ArrayLike) -> NDArray[np.float64]:
    """Directions from the centre of the head, shape (n, 3).

    Raises
    ------
    SitesError
        If the places are not finite triples away from the origin.
    """
    points = np.asarray(places, dtype=np.float64)
    if points.ndim != 2 or points.shape[1] != 3:
        raise SitesError(
            f"Simulation needs site positions of shape (n_sites, 3); given {points.shape}.",
            "Give x, y, z in metres for each site.",
        )
    length = np.linalg.norm(points, axis=1, keepdims=True)
    if not np.all(np.isfinite(length)) or np.any(length < 1e-6):
        raise SitesError(
            "Simulation needs finite site positions away from the centre of the head.",
            "Leave out sites without a position.",
        )
    return np.asarray(points / length)
