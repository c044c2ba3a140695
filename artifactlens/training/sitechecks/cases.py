"""One case: a recording with a fault in it, and what is true of it."""

from __future__ import annotations

import itertools
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from artifactlens.errors import OptionError
from artifactlens.frames import build_frame
from artifactlens.recording import Filters, Recording, from_array
from artifactlens.simulation.floor import extend_above
from artifactlens.simulation.scene import Scene
from artifactlens.sites import site_position
from artifactlens.training.sitechecks.backgrounds import (
    LINE_HZ,
    MONTAGES,
    Bed,
    Source,
    double_banana,
)
from artifactlens.training.sitechecks.bench import REFERENCE, Array, Bench
from artifactlens.training.sitechecks.faults import FAULTS, handling
from artifactlens.training.situation import CHAINS

STRENGTHS = ("plain", "mild")
COURSES = ("throughout", "begins", "cured")
LENGTHS_S = (62.0, 120.0)
"""Shortest and longest stretch of a background; one that is shorter is taken whole."""

HIGH_PASS_HZ = (0.1, 0.16, 0.3)

MIX: dict[str, int] = {
    "pops": 2, "apart": 1, "mains at few sites": 2, "flat": 1, "clipped": 1, "drift": 1,
    "loose lead": 1, "pops in the reference": 1, "mains in the reference": 1,
    "noisy reference": 1, "loose reference lead": 1, "mains everywhere": 3, "bridge": 3,
    "swapped labels": 1,
}  # fmt: skip
"""How often each fault comes among twenty cases."""

PATIENT_MIX: dict[str, int] = {
    "muscle bursts": 1, "tonic muscle": 1, "blinks": 1, "gaze": 1,
}  # fmt: skip


@dataclass(frozen=True, slots=True)
class Truth:
    """What is true of a case.

    ``fault`` is its name in :data:`FAULTS`; ``cause``, ``sign`` and ``state`` are words of
    :mod:`artifactlens.advice`. ``sites`` as the file spells them, the first one most;
    ``("reference",)`` for the reference, empty for the ground and the patient. ``onset``
    and ``end`` in seconds: from when to when.
    """

    fault: str
    cause: str
    sign: str
    strength: str
    montage: str
    sites: tuple[str, ...]
    onset: float
    end: float
    state: str
    what: str

    @property
    def hidden(self) -> bool:
        """Whether nothing of it is left: a reference fault in bipolar derivations."""
        return self.cause == "reference" and self.montage == "double banana"

    @property
    def dead_in_bipolar(self) -> bool:
        """A dead or railed input in derivations made from referential channels.

        Its two derivations then show the potentials of its neighbours against the reference:
        the same as an electrode that sits where the reference sits.
        """
        dead = self.fault == "flat" or self.what.startswith("an offset")
        return dead and self.montage == "double banana"

    @property
    def pairs(self) -> tuple[frozenset[str], ...]:
        """Bridged pairs."""
        if self.cause != "bridge":
            return ()
        return tuple(frozenset(pair) for pair in itertools.combinations(self.sites, 2))

    @property
    def words(self) -> str:
        """For a person who looks into the case."""
        where = ", ".join(self.sites) or self.cause
        return (
            f"{self.fault} ({self.strength}, {self.montage}) at {where}: {self.what}; "
            f"{self.onset:.0f} to {self.end:.0f} s, {self.state}"
        )


@dataclass(frozen=True, slots=True)
class Case:
    """A recording with a fault in it, and the same ``before`` anything was put in.

    ``bed`` names the background.
    """

    seed: int
    bed: str
    recording: Recording
    before: Recording
    line_frequency: float
    truth: Truth


def case(
    seed: int,
    sources: Sequence[Source | Bed],
    *,
    fault: str | None = None,
    strength: str | None = None,
    montage: str | None = None,
    course: str | None = None,
) -> Case:
    """One case, the same for the same seed, sources and wishes.

    Parameters
    ----------
    seed : int
    sources : sequence of Source or Bed
        One is drawn.
    fault : str, optional
        A key of :data:`FAULTS`; drawn evenly if not given.
    strength, montage, course : str, optional
        Of ``STRENGTHS``, ``MONTAGES`` and ``COURSES``; drawn if not given. Swapped labels
        and what comes from the patient are there throughout.

    Raises
    ------
    OptionError
        If a wish is none of these words.
    """
    rng = np.random.default_rng(seed)
    source = sources[int(rng.integers(len(sources)))]
    name = _drawn_or(rng, fault, tuple(FAULTS), None)
    what = FAULTS[name]
    strength = _drawn_or(rng, strength, STRENGTHS, None)
    # A reference fault in bipolar derivations shows nothing: fewer of these.
    hidden = 1 / 3 if what.cause == "reference" else 1 / 2
    montage = _drawn_or(rng, montage, MONTAGES, (1 - hidden, hidden))
    course = _drawn_or(rng, course, COURSES, (0.5, 0.25, 0.25))
    if not what.cure:
        course = "throughout"
    bed = source.bed() if isinstance(source, Source) else source
    spelt, bench = _bench(bed, rng, strength == "plain", montage, course)
    made = what.make(bench)
    channels, state = made.channels, "present"
    if course == "cured":
        state = "cured" if what.cure == "handled" else "past"
        if what.cure == "handled":
            lasts = float(rng.uniform(2, 5))
            channels = channels + handling(bench, made.rows, bench.span[1], lasts)
    truth = Truth(
        fault=name,
        cause=what.cause,
        sign=what.sign,
        strength=strength,
        montage=montage,
        sites=tuple("reference" if row == REFERENCE else spelt[row] for row in made.rows),
        onset=bench.span[0],
        end=bench.span[1],
        state=state,
        what=made.what,
    )
    recording, before = (
        _as_recording(data, bed, spelt, bench, montage, f"case-{seed}")
        for data in (channels, bench.channels)
    )
    return Case(seed, bed.name, recording, before, bench.line, truth)


def _drawn_or(
    rng: np.random.Generator,
    wish: str | None,
    words: tuple[str, ...],
    weights: tuple[float, ...] | None,
) -> str:
    """The wish, or a word drawn; a wish leaves the draws that follow as they are."""
    drawn = str(rng.choice(words, p=weights))
    if wish is None:
        return drawn
    if wish not in words:
        raise OptionError(
            f"A case needs one of {', '.join(words)}; given was {wish!r}.",
            "Use one of these words, or leave it to chance.",
        )
    return wish


def _bench(
    bed: Bed, rng: np.random.Generator, plain: bool, montage: str, course: str
) -> tuple[tuple[str, ...], Bench]:
    """A stretch of a background, made fit to put a fault in, and how its sites are spelt."""
    background = bed.background
    sfreq = background.sfreq
    rows = list(range(len(background.sites)))
    if montage == "double banana":
        used = {name for chain in CHAINS for name in chain}
        rows = [row for row in rows if background.sites[row] in used]
    n_all = background.potentials.shape[1]
    n = min(n_all, round(rng.uniform(*LENGTHS_S) * sfreq))
    start = int(rng.integers(n_all - n + 1))
    channels = background.potentials[rows, start : start + n]
    places = np.array([site_position(background.sites[row]) for row in rows])
    reference = np.array([site_position(name) for name in background.reference_sites])
    if background.kept_to_hz is not None:
        # Mains at the notch and muscle above the low-pass need what the recorder cut off.
        filled = extend_above(channels, sfreq, background.kept_to_hz, rng, sites=places)
        channels = filled.astype(np.float64)
    seconds = n / sfreq
    begins = float(rng.uniform(0.25, 0.5)) * seconds if course == "begins" else 0.0
    ends = float(rng.uniform(0.5, 0.7)) * seconds if course == "cured" else seconds
    spelt = tuple(bed.spelt[row] for row in rows)
    return spelt, Bench(
        channels=channels,
        scene=Scene(np.concatenate([places, reference]), n, sfreq),
        n_refs=len(reference),
        chain=_chains(tuple(background.sites[row] for row in rows), montage),
        rng=rng,
        plain=plain,
        span=(begins, ends),
        high_pass=float(rng.choice(HIGH_PASS_HZ)),
        line=LINE_HZ,
    )


def _chains(names: tuple[str, ...], montage: str) -> NDArray[np.intp]:
    """Connected part of each site: potentials compare only within one."""
    if montage == "referential":
        return np.zeros(len(names), dtype=np.intp)
    _, labels = double_banana(np.zeros((len(names), 1)), names, names)
    frame = build_frame(labels, [None] * len(labels), None)
    number = dict(zip(frame.canonical, frame.chain, strict=True))
    return np.array([number[name] for name in names], dtype=np.intp)


def _as_recording(
    channels: Array,
    bed: Bed,
    spelt: tuple[str, ...],
    bench: Bench,
    montage: str,
    name: str,
) -> Recording:
    """The recording in its montage; a high-pass is stated, no low-pass and no notch."""
    labels = [f"EEG {site}-LE" for site in spelt]
    data: NDArray[np.floating] = channels
    if montage == "double banana":
        canonical = dict(zip(bed.spelt, bed.background.sites, strict=True))
        data, labels = double_banana(
            channels, tuple(canonical[site] for site in spelt), spelt
        )
    filters = [Filters(bench.high_pass, None, None)] * len(labels)
    return from_array(
        data.astype(np.float32), bench.scene.sfreq, labels, filters=filters, name=name
    )
