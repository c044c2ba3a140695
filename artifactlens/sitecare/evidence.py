"""All that the search for electrode faults looks at, and what it finds."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from artifactlens.kinds import KIND_NAMES

if TYPE_CHECKING:
    from artifactlens.curves import Model
    from artifactlens.features import FeatureTable
    from artifactlens.frames import Frame
    from artifactlens.sitecare.signs import SignLog

Bools = NDArray[np.bool_]
Array = NDArray[np.float64]

SMALL_CHAIN = 5
"""With fewer electrodes a chain has too few neighbours for the usual comparisons."""

FEWEST_ELSEWHERE = 4
"""Sites of longer chains from which on those of a short one are held against them."""

BESIDE_M, FEWEST_BESIDE = 0.09, 2
"""A site is judged with confidence if so many others stand this near, as nearest neighbours
of the 10-20 system do."""

COLUMNS = (
    "swing", "step", "step_rise", "step_crest", "step_alone", "step_stays", "beta_power",
    "fast_power", "mains_ratio",
)  # fmt: skip
"""Features that the search looks at, by their names in the catalogue."""

FRONT_Y = 0.35
"""Share of the way to the nose from which a site is near the eyes."""

REST_SHARE = 0.5
"""A stretch counts for a site if the site was there for this part of it."""


@dataclass(frozen=True, slots=True, eq=False)
class Evidence:
    """What is known of a recording, or of the last minutes of a stream.

    Attributes
    ----------
    frame, log
        The sites, and their signs.
    probability : array, shape (n_kinds, n_epochs, n_sites)
        NaN where not judged.
    doubtful, sure : array, shape (n_kinds,)
        Operating points.
    pops : tuple of (float, tuple of int)
        Moment in seconds and rows of every pop.
    swing : array, shape (n_epochs, n_sites), microvolt
    step : array, shape (n_epochs, n_sites), microvolt
        Fastest step.
    step_rise : array, shape (n_epochs, n_sites), decibel
        Fastest step against the site's usual.
    step_crest, step_alone : array, shape (n_epochs, n_sites), decibel
        The same against the site's mean step, and against its neighbours' at that instant.
    step_stays : array, shape (n_epochs, n_sites)
        Share of it that is left a tenth of a second later.
    beta_power : array, shape (n_epochs, n_sites), decibel
        Mean density at 18-30 Hz, uV^2/Hz.
    fast_power : array, shape (n_epochs, n_sites), decibel
        Mean density at 30-45 Hz, uV^2/Hz.
    mains_ratio : array, shape (n_epochs, n_sites), decibel
    line_frequency : float or None
        None where mains is not carried.
    """

    frame: Frame
    log: SignLog
    probability: NDArray[np.float32]
    doubtful: Array
    sure: Array
    pops: tuple[tuple[float, tuple[int, ...]], ...]
    swing: NDArray[np.float32]
    step: NDArray[np.float32]
    step_rise: NDArray[np.float32]
    step_crest: NDArray[np.float32]
    step_alone: NDArray[np.float32]
    step_stays: NDArray[np.float32]
    beta_power: NDArray[np.float32]
    fast_power: NDArray[np.float32]
    mains_ratio: NDArray[np.float32]
    line_frequency: float | None

    @classmethod
    def of(
        cls,
        frame: Frame,
        log: SignLog,
        model: Model,
        probability: NDArray[np.float32],
        pops: tuple[tuple[float, tuple[int, ...]], ...],
        table: FeatureTable,
        line_frequency: float | None,
    ) -> Evidence:
        """Put together from what the stages before have made."""
        return cls(
            frame=frame,
            log=log,
            probability=probability,
            doubtful=np.array([head.doubtful for head in model.heads]),
            sure=np.array([head.sure for head in model.heads]),
            pops=pops,
            line_frequency=line_frequency,
            **{name: table.column(name) for name in COLUMNS},
        )

    def first_seconds(self, seconds: float) -> Evidence:
        """The same of the stretches that begin in the first seconds only."""
        if not len(self.log):
            return self
        n = int(np.searchsorted(self.log.begin, self.log.begin[0] + seconds - 1e-6))
        log = self.log.first(n)
        epochs = len(log.onset)
        return replace(
            self,
            log=log,
            probability=self.probability[:, :epochs],
            pops=tuple(pop for pop in self.pops if pop[0] < log.end[-1]),
            **{name: getattr(self, name)[:epochs] for name in COLUMNS},
        )

    def judged(self, kind: str) -> bool:
        """Whether a kind is judged at all."""
        return bool(np.isfinite(self.probability[KIND_NAMES.index(kind)]).any())

    def marked(self, kind: str, *, doubtful: bool = True) -> Bools:
        """Where a kind reaches an operating point, (n_epochs, n_sites)."""
        row = KIND_NAMES.index(kind)
        limit = (self.doubtful if doubtful else self.sure)[row]
        return np.nan_to_num(self.probability[row], nan=-1.0) >= limit

    def fast_uv(self) -> Array:
        """Amplitude at 30-45 Hz, microvolt rms, (n_epochs, n_sites); NaN where not carried.

        The noise of a poor contact is taken for muscle now and then; it is strongest where
        muscle is weakest, so that what is slow is held against this.
        """
        return np.asarray(np.sqrt(10 ** (self.fast_power.astype(np.float64) / 10) * 15.0))

    def front(self) -> Bools:
        """Sites whose place the eyes reach, or whose place is unknown, (n_sites,)."""
        places = self.frame.positions
        with np.errstate(invalid="ignore"):
            return ~(places[:, 1] / np.linalg.norm(places, axis=1) < FRONT_Y)

    def references(self) -> Bools:
        """Which rows are reference electrodes, (n_sites,)."""
        return np.array([role == "reference" for role in self.frame.roles])

    def company(self) -> NDArray[np.intp]:
        """How many electrodes each hangs together with, itself counted, (n_sites,)."""
        return np.bincount(self.frame.chain)[self.frame.chain]

    def present(self) -> Bools:
        """Which sites were there for most of each stretch, (n_stretches, n_sites)."""
        return self.log.mean(self.log.signs.ok) >= REST_SHARE

    def site_faults(self, fault: Bools) -> Bools:
        """Epochs in which *all* channels of a site have a fault, (n_epochs, n_sites).

        One faulty derivation does not tell which of its two electrodes is to blame; where a
        site's other derivations are sound, neither is.
        """
        touches = self.frame.incidence != 0
        if self.frame.montage == "average":
            touches = self.frame.incidence > 0.5
        faulty = fault.astype(np.float32) @ touches.astype(np.float32)
        count = touches.sum(axis=0)
        return (faulty >= count - 0.5) & (count > 0)


@dataclass(frozen=True, slots=True, eq=False)
class Finding:
    """One thing that is wrong, before it becomes advice.

    Attributes
    ----------
    cause, sign : str
        Words of :mod:`artifactlens.advice`.
    rows : tuple of int
        Sites concerned, the first one most; empty for the ground.
    held : array, shape (n_stretches,), bool
        When it was so.
    known : array, shape (n_stretches,), bool
        When it could be told.
    plain : bool
        Whether it is strong enough to act upon.
    weight : float
        Orders findings of one kind: larger is worse.
    reason : str
        What was measured, a clause.
    lasting : bool
        False for what comes and goes, such as pops: it is present until it has been away for
        long.
    standing : bool
        True for what was seen at one time and holds until somebody has looked, such as the
        answers to a calibration.
    one_of : bool
        True where one of the sites is at fault and nothing tells which.
    checks : tuple of str
        What to do; empty for what is usual for cause and sign.
    """

    cause: str
    sign: str
    rows: tuple[int, ...]
    held: Bools
    known: Bools
    plain: bool
    weight: float
    reason: str
    lasting: bool = True
    standing: bool = False
    one_of: bool = False
    checks: tuple[str, ...] = ()
