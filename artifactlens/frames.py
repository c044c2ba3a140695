"""From channels to site potentials: the electrodes of a recording and how to solve them.

A channel is the potential of its first input minus that of its second. The channels of a
recording are therefore the edges of a graph whose nodes are electrodes: a star around the
reference, chains in a bipolar recording. One least-squares machinery serves them all.
"""

from __future__ import annotations

from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from artifactlens.errors import SitesError
from artifactlens.sites import (
    AVERAGE_NAMES,
    EARS,
    SiteLabel,
    canonical_site,
    head_to_site_frame,
    names_other_signal,
    neighbour_weights,
    parse_label,
    reference_name,
    site_position,
    without_prefix,
)

SHARED_UNKNOWN = 3
"""Channels that must name the same unknown second input before it counts as a reference."""

_AVERAGE = "reference: average"
_UNNAMED = "reference: unnamed"


@dataclass(frozen=True, slots=True, eq=False)
class Frame:
    """How channels become site potentials of mean zero: sites_uv = matrix @ channels_uv.

    Attributes
    ----------
    montage : str
        "referential", "average" or "bipolar".
    sites : tuple of str
        Electrodes as the file spells them, without prefix and suffix, in the order of the
        channels. In a referential recording the reference electrode is the extra last row
        "reference" (several references: "reference A1", "reference A2").
    canonical : tuple of str or None
        Names in the 10-05 system, of the reference too if the labels name it.
    channel : tuple of str or None
        Label of the one channel carrying the site; None for solved sites and references.
    roles : tuple of str
        "site", "ear" or "reference".
    positions : array, shape (n_sites, 3), metre
        In the frame of :func:`artifactlens.sites.site_position`; NaN where unknown.
    channels : array, shape (n_used,)
        Indices of the recording's channels that are used.
    incidence : array, shape (n_used, n_sites)
        channels_uv = incidence @ electrode potentials: +1 for the first input, -1 for the
        second. In an average-referenced recording the second input is the mean of all.
    chain : array, shape (n_sites,)
        Number of the connected component; potentials compare only within one.
    neighbours : array, shape (n_sites, n_sites)
        Weights of the other sites a site is compared with; a row sums to 1, or is zero
        where no neighbour exists.
    near : array, shape (n_sites, n_sites), bool
        Symmetric: who counts as a spatial neighbour.
    set_aside : tuple of (label, reason)
        Channels that are not used.
    notes : tuple of str
        What a reader should know of how the sites were found.
    """

    montage: str
    sites: tuple[str, ...]
    canonical: tuple[str | None, ...]
    channel: tuple[str | None, ...]
    roles: tuple[str, ...]
    positions: NDArray[np.float64]
    channels: NDArray[np.intp]
    incidence: NDArray[np.float64]
    chain: NDArray[np.intp]
    neighbours: NDArray[np.float64]
    near: NDArray[np.bool_]
    set_aside: tuple[tuple[str, str], ...]
    notes: tuple[str, ...]

    def matrix(self, available: NDArray[np.bool_] | None = None) -> NDArray[np.float32]:
        """Least-squares solution for the site potentials, mean zero per connected chain.

        The null space of the incidence matrix of a connected graph is the constant
        potential, so its pseudo-inverse gives the solution of mean zero. Without some
        channels a chain may fall into pieces, each of mean zero.

        Parameters
        ----------
        available : array, shape (n_used,), bool, optional
            Channels that carry a signal; all by default.

        Returns
        -------
        array, shape (n_sites, n_used)
            Rows of NaN for sites that no available channel reaches; columns of zeros for
            channels that are not available (set those to 0 before multiplying: 0 x NaN is
            NaN).

        Raises
        ------
        SitesError
            If ``available`` has another length than ``channels``.
        """
        n_used = len(self.channels)
        usable = np.ones(n_used, bool) if available is None else np.asarray(available, bool)
        if usable.shape != (n_used,):
            raise SitesError(
                f"available needs one value for each of the {n_used} used channels; "
                f"it has shape {usable.shape}.",
                "Give the availability of frame.channels, in that order.",
            )
        kept = np.flatnonzero(usable)
        if self.montage == "average":
            # The mean of the channels that are left is the only reference left.
            reached = kept = kept if len(kept) > 1 else kept[:0]
            solved = np.eye(len(kept)) - 1.0 / max(len(kept), 1)
        else:
            block = self.incidence[kept]
            reached = np.flatnonzero(block.any(axis=0))
            solved = np.asarray(np.linalg.pinv(block[:, reached], rcond=1e-10), np.float64)
            solved[np.abs(solved) < 1e-12] = 0.0  # no leak between chains by rounding
        matrix = np.full((len(self.sites), n_used), np.nan, dtype=np.float32)
        matrix[reached] = 0.0
        matrix[np.ix_(reached, kept)] = solved
        return matrix


@dataclass(frozen=True, slots=True)
class _Lead:
    """A usable channel: keys tell electrodes apart, names are the file's spelling."""

    index: int
    label: str
    plus: str
    plus_name: str
    minus: str
    minus_name: str

    @property
    def is_derivation(self) -> bool:
        """Whether the second input is an electrode of the 10-05 system."""
        return canonical_site(self.minus) is not None

    @property
    def ends(self) -> frozenset[str]:
        """The two inputs, whichever comes first."""
        return frozenset({self.plus, self.minus})


def build_frame(
    labels: Sequence[str],
    types: Sequence[str | None],
    positions_head: NDArray[np.float64] | None,
    *,
    measured_average: bool = False,
) -> Frame:
    """Resolve the channels of a recording into electrode sites.

    Parameters
    ----------
    labels : sequence of str
        All channel labels of the recording, in its order.
    types : sequence of str or None
        Channel types that the format itself gives ("eeg", "eog", ...); "" or None where it
        gives none.
    positions_head : array, shape (n_channels, 3), metre, or None
        Digitised positions in mne head coordinates, NaN or zeros where unknown.
    measured_average : bool
        The channels were found to sum to about zero: a recording with a single common
        reference is then taken as average-referenced. Bipolar chains may sum to zero for
        another reason and stay what they are.

    Returns
    -------
    Frame

    Raises
    ------
    SitesError
        If fewer than two EEG channels are found, or the lengths differ.
    """
    own_positions = (
        np.full((len(labels), 3), np.nan)
        if positions_head is None
        else head_to_site_frame(positions_head)
    )
    if len(types) != len(labels) or len(own_positions) != len(labels):
        raise SitesError(
            f"Every channel needs a type and a position (None and NaN are fine): "
            f"{len(labels)} labels, {len(types)} types, {len(own_positions)} positions.",
            "Give the three in the order of the channels.",
        )
    aside: dict[int, str] = {}
    notes: list[str] = []
    leads = _find_leads(labels, types, own_positions, aside, notes)
    montage, leads = _settle_montage(leads, measured_average, aside, notes)
    leads = _without_repeats(leads, aside)
    if len(leads) < 2:
        shown = ", ".join(repr(label) for label in labels[:5]) or "none"
        raise SitesError(
            f"At least 2 EEG channels are needed to tell sites apart; {len(leads)} of "
            f"{len(labels)} channels can be used (first labels: {shown}).",
            "Give a recording with more scalp channels, or name them by the 10-20 system "
            "('Fp1-REF', 'F7-T3') or type them as EEG.",
        )
    return _assemble(montage, leads, labels, own_positions, aside, notes)


def _find_leads(
    labels: Sequence[str],
    types: Sequence[str | None],
    own_positions: NDArray[np.float64],
    aside: dict[int, str],
    notes: list[str],
) -> list[_Lead]:
    """The channels that carry scalp electrodes, in file order; reasons go to ``aside``."""
    leads: list[_Lead] = []
    undecided: dict[int, SiteLabel] = {}
    for index, (label, given) in enumerate(zip(labels, types, strict=True)):
        kind = (given or "").strip().lower()
        parsed = parse_label(label)
        if kind not in ("", "eeg"):
            aside[index] = f"typed {kind} by the file (kept as witness)"
        elif names_other_signal(label):
            aside[index] = "not a scalp site (kept as witness)"
        elif parsed.role != "other":
            leads.append(_lead(index, parsed))
        elif reference_name(without_prefix(label)) is not None:
            aside[index] = "names the reference, not a scalp site"
        elif kind == "eeg" or np.isfinite(own_positions[index]).all():
            leads.append(_lead(index, parsed))
        else:
            undecided[index] = parsed
    shared = Counter(p.minus.upper() for p in undecided.values() if p.minus is not None)
    chosen = {
        index: parsed
        for index, parsed in undecided.items()
        if parsed.minus is not None and shared[parsed.minus.upper()] >= SHARED_UNKNOWN
    }
    if not leads and not chosen and undecided:
        chosen = undecided
        notes.append(
            f"No label names a known scalp site: all {len(chosen)} channels that name "
            "nothing else are taken as sites without a position."
        )
    leads += [_lead(index, parsed) for index, parsed in chosen.items()]
    for index in undecided.keys() - chosen.keys():
        aside[index] = "its label names no known scalp site"
    return sorted(leads, key=lambda lead: lead.index)


def _lead(index: int, parsed: SiteLabel) -> _Lead:
    label = parsed.original
    if parsed.plus is None:
        whole = label.strip()
        return _Lead(index, label, f"label: {whole.upper()}", whole, _UNNAMED, "")
    minus_name = parsed.minus or ""
    reference = reference_name(minus_name)
    if parsed.canonical_minus is not None:
        minus = parsed.canonical_minus
    elif not minus_name:
        minus = _UNNAMED
    elif reference in AVERAGE_NAMES:
        minus = _AVERAGE
    else:
        minus = f"reference: {reference or minus_name.upper()}"
    return _Lead(
        index, label, parsed.canonical or parsed.plus, parsed.plus, minus, minus_name
    )


def _settle_montage(
    leads: list[_Lead], measured_average: bool, aside: dict[int, str], notes: list[str]
) -> tuple[str, list[_Lead]]:
    """Name the montage; what does not belong to the larger part is set aside."""
    for lead in leads:
        if lead.plus == lead.minus:
            aside[lead.index] = "an electrode against itself carries nothing"
    leads = [lead for lead in leads if lead.plus != lead.minus]
    derivations = [lead for lead in leads if lead.is_derivation]
    referred = [lead for lead in leads if not lead.is_derivation]
    if len(referred) >= len(derivations):
        for lead in derivations:
            aside[lead.index] = "a derivation beside referential channels"
        montage, leads = _settle_reference(referred, aside)
    else:
        for lead in referred:
            aside[lead.index] = "a referential channel beside derivations"
        first = {lead.plus for lead in derivations}
        second = {lead.minus for lead in derivations}
        # Ears and the vertex serve as references; a vertex with its own channel is a link.
        star = len(second) == 1 or second - EARS <= {"Cz"} - first
        montage, leads = "referential" if star else "bipolar", derivations
    if montage == "referential" and measured_average and len({x.minus for x in leads}) == 1:
        notes.append("The channels sum to about zero: taken as referred to their average.")
        return "average", leads
    if montage == "average":
        notes.append("By the labels the channels are referred to their average.")
    return montage, leads


def _settle_reference(leads: list[_Lead], aside: dict[int, str]) -> tuple[str, list[_Lead]]:
    """Unnamed references take the file's one named reference; averages stay apart."""
    named = {lead.minus: lead.minus_name for lead in leads if lead.minus != _UNNAMED}
    if len(named) == 1:
        minus, minus_name = next(iter(named.items()))
        leads = [replace(lead, minus=minus, minus_name=minus_name) for lead in leads]
    averaged = [lead for lead in leads if lead.minus == _AVERAGE]
    others = [lead for lead in leads if lead.minus != _AVERAGE]
    if averaged and len(averaged) >= len(others):
        for lead in others:
            aside[lead.index] = "not referred to the average as the other channels are"
        return "average", averaged
    for lead in averaged:
        aside[lead.index] = "referred to the average, unlike the other channels"
    return "referential", others


def _without_repeats(leads: list[_Lead], aside: dict[int, str]) -> list[_Lead]:
    first: dict[frozenset[str], _Lead] = {}
    for lead in leads:
        if lead.ends in first:
            aside[lead.index] = (
                f"the same electrodes as in channel {first[lead.ends].label!r}"
            )
        else:
            first[lead.ends] = lead
    return list(first.values())


def _assemble(
    montage: str,
    leads: list[_Lead],
    labels: Sequence[str],
    own_positions: NDArray[np.float64],
    aside: dict[int, str],
    notes: list[str],
) -> Frame:
    names = _electrodes(montage, leads)
    keys = list(names)
    row = {key: number for number, key in enumerate(keys)}
    own = Counter(lead.plus for lead in leads)
    canonical = tuple(key if canonical_site(key) == key else None for key in keys)
    roles = tuple(
        "reference"
        if montage == "referential" and not own[key]
        else ("ear" if key in EARS else "site")
        for key in keys
    )
    incidence = np.zeros((len(leads), len(keys)))
    for number, lead in enumerate(leads):
        incidence[number, row[lead.plus]] = 1.0
        if montage != "average":
            incidence[number, row[lead.minus]] = -1.0
    if montage == "average":
        incidence -= 1.0 / len(keys)
    carrier = {lead.plus: lead for lead in leads if own[lead.plus] == 1}
    if montage == "bipolar":
        carrier = {}
    source = {lead.plus: lead.index for lead in leads}
    measured = np.array(
        [own_positions[source[key]] if key in source else [np.nan] * 3 for key in keys]
    )
    reference = np.array(roles) == "reference"
    positions = _positions(canonical, measured, reference)
    chain = _chains(incidence)
    neighbours, near = neighbour_weights(positions, chain, reference)
    if montage == "bipolar":
        notes.append(
            f"Sites are solved from {len(leads)} derivations by least squares, mean zero "
            f"over each connected chain; chains: {int(chain.max()) + 1}."
        )
    elif chain.max() > 0:
        notes.append(
            f"The channels have {int(chain.max()) + 1} separate references; sites are "
            "compared only with those of the same reference."
        )
    for name, site in (("T1", "FT9"), ("T2", "FT10")):
        if names.get(site, "").upper() == name:
            notes.append(f"{name} is taken to stand at {site} (common practice).")
    return Frame(
        montage=montage,
        sites=tuple(names.values()),
        canonical=canonical,
        channel=tuple(carrier[key].label if key in carrier else None for key in keys),
        roles=roles,
        positions=positions,
        channels=np.array([lead.index for lead in leads], dtype=np.intp),
        incidence=incidence,
        chain=chain,
        neighbours=neighbours,
        near=near,
        set_aside=tuple((labels[index], aside[index]) for index in sorted(aside)),
        notes=tuple(notes),
    )


def _electrodes(montage: str, leads: list[_Lead]) -> dict[str, str]:
    """Electrode keys and their display names, in row order."""
    names: dict[str, str] = {}
    for lead in leads:
        names.setdefault(lead.plus, lead.plus_name)
        if montage == "bipolar":
            names.setdefault(lead.minus, lead.minus_name)
    if montage == "referential":
        second = {lead.minus: lead.minus_name for lead in leads if lead.minus not in names}
        for key, name in second.items():
            names[key] = f"reference {name}".strip() if len(second) > 1 else "reference"
    return names


def _positions(
    canonical: tuple[str | None, ...],
    measured: NDArray[np.float64],
    reference: NDArray[np.bool_],
) -> NDArray[np.float64]:
    """One source of positions as far as possible: heads differ in size and in tilt."""
    template = np.full(measured.shape, np.nan)
    for number, name in enumerate(canonical):
        place = None if name is None else site_position(name)
        if place is not None:
            template[number] = place
    known = np.isfinite(template).all(axis=1)
    mostly_named = known[~reference].mean() >= 0.5
    first, second = (template, measured) if mostly_named else (measured, template)
    return np.where(np.isfinite(first), first, second)


def _chains(incidence: NDArray[np.float64]) -> NDArray[np.intp]:
    """Connected components of the electrodes, numbered in row order."""
    joined = np.abs(incidence.T) @ np.abs(incidence) > 0
    chain = np.arange(incidence.shape[1])
    while True:
        # Every electrode takes the lowest number among those it shares a channel with.
        lowest = np.where(joined, chain, len(chain)).min(axis=1)
        if np.array_equal(lowest, chain):
            return np.unique(chain, return_inverse=True)[1].astype(np.intp)
        chain = lowest
