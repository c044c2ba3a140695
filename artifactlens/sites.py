"""Electrode names: reading them out of channel labels, places on the head, neighbours."""

from __future__ import annotations

import re
from collections.abc import Iterator
from dataclasses import dataclass
from functools import cache
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

POSITIONS_FILE = Path(__file__).with_name("site_positions.tsv")
"""Written by ``scripts/make_site_positions.py``."""

EARS = frozenset({"A1", "A2", "M1", "M2"})
"""Ear lobes and mastoids."""

OLD_NAMES = {
    "T3": "T7",  # T3 to T6 are the older names (ACNS Guideline 2, 2016)
    "T4": "T8",
    "T5": "P7",
    "T6": "P8",
    "T1": "FT9",  # T1 and T2 stand near FT9 and FT10: common practice
    "T2": "FT10",
}

AVERAGE_NAMES = frozenset({"AVG", "AV", "AVE", "AVERAGE", "CAR", "AVGREF", "AVREF"})
"""Second inputs that mean the average of the electrodes (common practice)."""

COMMON_NAMES = frozenset(
    {"REF", "REFERENCE", "VREF", "NOSE", "LM", "RM"}
    | {"LE", "LINKEDEARS", "AA", "A12", "A1A2", "A1A22", "A2A1", "M12", "M1M2", "M1M22"}
)
"""Second inputs that name a reference without a place of its own on the 10-05 system."""

REFERENCE_NAMES = AVERAGE_NAMES | COMMON_NAMES

HEAD_CENTRE_M = (0.0, 0.0, 0.04)
"""Centre of the head in mne head coordinates, mne's default sphere origin for EEG."""

HEAD_RADII_M = (0.04, 0.20)
"""An electrode nearer to or farther from the centre than this has no usable position."""

NEIGHBOUR_REACH_M = 0.09
"""Nearest 10-20 neighbours are 5.6 to 7.4 cm apart: this takes them all, few beyond."""

MOST_NEIGHBOURS = 5
FEWEST_NEIGHBOURS = 2

_EYE_LEADS = r"LOC|ROC|PG[12]|IO[12]|SO[12]|LO[12]|LIO|RIO|LSO|RSO"
_BODY = (
    r"PR|HR|BP|ABP|RR|IBI|PULSE|PLETH|PPG|EDA|GSR|RESP\w*|AIRFLOW|FLOW|NASAL|SNORE|THOR\w*|"
    r"CHEST|ABD\w*|EFFORT|CHIN\d?|LEG\d?|LEGS|TEMP\w*|[A-Z]*O2SAT|OSAT|SAT|S[PA]O2|\w*CO2|CPAP"
)
_MACHINE = (
    r"DC\d*|X\d+|STI\d*|STATUS|TRIG\w*|MARKERS?|EVENTS?|ANNOTATIONS?|PHOTIC|STIM\w*|AUX\d*|"
    r"ACC\w*|GYRO\w*|BATT\w*|LIGHT|POSITION|COUNTER|TIME\w*|GND|GROUND|BURSTS?|SUPPR|IMP\w*"
)
_OTHER_WORD = re.compile(rf"\w*(EOG|ECG|EKG|EMG)\w*|{_EYE_LEADS}|{_BODY}|{_MACHINE}", re.I)
_EYE_AGAINST_EAR = re.compile(r"E[12]\W+[AM][12]", re.I)

_PREFIX = re.compile(r"(?:EEG(?:[\s:_.-]+|(?=[A-Z]))|POL[\s:_.-]+)(?=.)", re.I)
_HYPHEN = re.compile(r"\s*[-\u2010\u2012\u2013\u2014\u2212]\s*")
_LOOSE_SEPARATOR = re.compile(r"\s*[_/:>]\s*|\s+")
_RUN_TOGETHER = re.compile(r"([A-Z]+(?:[0-9]+H?|Z))([A-Z][A-Z0-9]+)", re.I)
_REPEAT_NUMBER = re.compile(r"-[0-9]{1,2}$")
_PADDING = " \t\r\n\x00\xa0._-"


@dataclass(frozen=True, slots=True)
class SiteLabel:
    """What a channel label says of its two inputs.

    ``role`` is "site" (one electrode, against nothing named or a common reference),
    "derivation" (one electrode against another) or "other". ``plus`` and ``minus`` are
    the inputs as the file spells them, without prefix, suffix and dots. A label of role
    "other" has a ``plus`` only where it names an electrode against something unknown.
    """

    original: str
    role: str
    plus: str | None
    minus: str | None

    @property
    def canonical(self) -> str | None:
        """Name of ``plus`` in the 10-05 system, for example "T7" for "T3"."""
        return None if self.plus is None else canonical_site(self.plus)

    @property
    def canonical_minus(self) -> str | None:
        """Name of ``minus`` in the 10-05 system; None for REF, LE, AVG and the like."""
        return None if self.minus is None else canonical_site(self.minus)


def parse_label(label: str) -> SiteLabel:
    """Read a channel label; never raises.

    Understood are an "EEG" or "POL" before the electrode, dots and blanks around it, a
    second input after a hyphen (or an underscore, slash, colon or blank), a reference
    written on without a separator ("C4A1"), and the number that reading software
    appends to a repeated label ("T8-P8-1").

    Parameters
    ----------
    label : str
        As in the file.

    Returns
    -------
    SiteLabel
    """
    text = without_prefix(label)
    against_unknown = None
    for first, second in _readings(text):
        if canonical_site(first) is None:
            continue
        if second is None or reference_name(second) is not None:
            return SiteLabel(label, "site", first, second)
        if canonical_site(second) is not None:
            return SiteLabel(label, "derivation", first, second)
        against_unknown = against_unknown or SiteLabel(label, "other", first, second)
    return against_unknown or SiteLabel(label, "other", None, None)


def _readings(text: str) -> Iterator[tuple[str, str | None]]:
    """The ways to cut a label into its inputs, the most literal first."""
    yield text, None
    for body in dict.fromkeys((text, _REPEAT_NUMBER.sub("", text))):
        if body != text:
            yield body.strip(_PADDING), None
        if match := _RUN_TOGETHER.fullmatch(body):
            first, second = match.groups()
            if second.upper() in EARS or reference_name(second) is not None:
                yield first, second
        # Only a hyphen may stand before an unknown word: "Pz quality" is no electrode pair.
        for separator, any_word in ((_HYPHEN, True), (_LOOSE_SEPARATOR, False)):
            parts = [part.strip(_PADDING) for part in separator.split(body, maxsplit=1)]
            if len(parts) == 2 and all(parts):
                known = canonical_site(parts[1]) or reference_name(parts[1])
                if known or any_word:
                    yield parts[0], parts[1]


def without_prefix(label: str) -> str:
    """A label without "EEG" or "POL" before it and without blanks and dots around it."""
    text = label.strip(_PADDING)
    match = _PREFIX.match(text)
    return text[match.end() :] if match else text


def reference_name(name: str) -> str | None:
    """The bare capitals of a reference that is no single site ("REF"), or None."""
    bare = re.sub(r"[^A-Z0-9]", "", name.upper())
    return bare if bare in REFERENCE_NAMES else None


def names_other_signal(label: str) -> bool:
    """Whether a label plainly names something that is not a scalp electrode.

    Eye leads, heart, muscle, breath, oxygen, triggers and the machine's own channels
    (names by common practice). "E1" alone is not decided here: it is an eye lead in sleep
    recordings and an electrode in dense arrays.
    """
    text = without_prefix(label)
    if _EYE_AGAINST_EAR.fullmatch(text):
        return True
    return any(_OTHER_WORD.fullmatch(word) for word in re.split(r"[\W_]+", text) if word)


def canonical_site(name: str) -> str | None:
    """Name of an electrode in the 10-20, 10-10 and 10-05 systems, or None.

    Case, blanks and dots around the name do not matter; "T3" gives "T7".
    """
    return _by_capitals().get(name.strip(_PADDING).upper())


def site_position(canonical: str) -> NDArray[np.float64] | None:
    """Place of an electrode on the template head, or None if the name is unknown.

    Parameters
    ----------
    canonical : str
        A name that :func:`canonical_site` returns.

    Returns
    -------
    array, shape (3,), metre
        x to the right, y to the nose, z up; origin at the centre of the sphere fitted to
        the template's scalp electrodes (radius 98 mm).
    """
    place = _positions().get(canonical)
    return None if place is None else np.array(place)


def head_to_site_frame(positions_head: NDArray[np.float64]) -> NDArray[np.float64]:
    """Move digitised positions to the centre of the head.

    Parameters
    ----------
    positions_head : array, shape (n, 3), metre
        In mne head coordinates; NaN or all zeros where unknown.

    Returns
    -------
    array, shape (n, 3), metre
        NaN where unknown or at no plausible distance from the centre.
    """
    given = np.array(positions_head, dtype=np.float64).reshape(-1, 3)
    centred = given - HEAD_CENTRE_M
    radius = np.linalg.norm(centred, axis=1)
    low, high = HEAD_RADII_M
    unusable = ~((radius >= low) & (radius <= high)) | ~given.any(axis=1)
    centred[unusable] = np.nan
    return centred


def neighbour_weights(
    positions: NDArray[np.float64], chain: NDArray[np.intp], reference: NDArray[np.bool_]
) -> tuple[NDArray[np.float64], NDArray[np.bool_]]:
    """Which sites a site is compared with, and how much each counts.

    Up to 5 nearest sites of the same chain within 9 cm (the 2 nearest if there are fewer),
    weighted by 1/distance^2. A site without a position is compared with all others of its
    chain alike.

    Parameters
    ----------
    positions : array, shape (n_sites, 3), metre
        NaN where unknown.
    chain : array, shape (n_sites,)
        Number of the connected component.
    reference : array, shape (n_sites,), bool
        A reference without a position is no neighbour of a site with one.

    Returns
    -------
    weights : array, shape (n_sites, n_sites)
        Rows sum to 1, or are zero where there is no neighbour.
    near : array, shape (n_sites, n_sites), bool
        Symmetric; True only between sites with positions.
    """
    n = len(positions)
    placed: NDArray[np.bool_] = np.asarray(np.isfinite(positions).all(axis=1))
    distance = np.linalg.norm(positions[:, None] - positions[None], axis=2)
    weights, near = np.zeros((n, n)), np.zeros((n, n), dtype=bool)
    for site in range(n):
        others = (chain == chain[site]) & (np.arange(n) != site)
        candidates = np.flatnonzero(others & placed)
        if placed[site] and len(candidates):
            # Equal distances are ordered by place, so that channel order never matters.
            order = np.lexsort((*positions[candidates].T, distance[site, candidates]))
            nearest = candidates[order]
            chosen = nearest[distance[site, nearest] <= NEIGHBOUR_REACH_M][:MOST_NEIGHBOURS]
            if len(chosen) < FEWEST_NEIGHBOURS:
                chosen = nearest[:FEWEST_NEIGHBOURS]
            raw = 1.0 / np.maximum(distance[site, chosen], 1e-3) ** 2
            weights[site, chosen] = raw / raw.sum()
            near[site, chosen] = True
            continue
        if placed[site]:
            others &= ~reference
        if others.any():
            weights[site, others] = 1.0 / others.sum()
    return weights, near | near.T


@cache
def _positions() -> dict[str, tuple[float, float, float]]:
    table = {}
    for line in POSITIONS_FILE.read_text(encoding="utf-8").splitlines()[1:]:
        name, x, y, z = line.split("\t")
        table[name] = (float(x), float(y), float(z))
    return table


@cache
def _by_capitals() -> dict[str, str]:
    return {name.upper(): name for name in _positions()} | OLD_NAMES
