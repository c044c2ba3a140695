"""Where a simulation happens and what it hands back: potentials and their truth."""

from __future__ import annotations

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

    ``kind`` is one of the four kinds or "brain"; ``what`` says it in a few words;
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
                peak = np.abs(field[:, first:last]).max(axis=1)
                truth.append(Happening(kind, what, start, stop - start, peak))
        return Simulated(field, tuple(truth))


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
