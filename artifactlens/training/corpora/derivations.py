"""What a label on a derivation says of electrodes.

A label on the derivation A-B says that A, or B, or both show it: the channel is their
difference. The rule that leads to sites, for one kind and one second:

1. A site is *present* if at least two labelled derivations share it.
2. A site is *free* if one of its derivations in the montage is not labelled. One end of a
   labelled derivation is *present* if the other end is free and it is not free itself: the
   artifact is not at the other end, so it is at this one. This names the ends of chains.
3. Both ends of a labelled derivation that are not present so stay *unknown*.

Where both ends are free (a label on one link amid an unlabelled chain) the labels contradict
each other on any electrode, and both ends stay unknown. The rule is our own; it holds for
artifact of one electrode and errs where neighbours show the same amount, which cancels.
"""

from __future__ import annotations

import itertools
from collections.abc import Iterable, Sequence

import numpy as np
from numpy.typing import NDArray

from artifactlens.kinds import KIND_NAMES
from artifactlens.sites import neighbour_weights, parse_label, site_position
from artifactlens.training.corpora.labelled import CLEAN, PRESENT, Label

Bools = NDArray[np.bool_]
Pair = tuple[str, str]

TCP_MONTAGE = (
    "FP1-F7", "F7-T3", "T3-T5", "T5-O1", "FP2-F8", "F8-T4", "T4-T6", "T6-O2", "A1-T3", "T3-C3",
    "C3-CZ", "CZ-C4", "C4-T4", "T4-A2", "FP1-F3", "F3-C3", "C3-P3", "P3-O1", "FP2-F4", "F4-C4",
    "C4-P4", "P4-O2",
)  # fmt: skip
"""Montage 01_tcp_ar of the Temple University Hospital corpora, in their order."""


def pair_of(channel: str) -> Pair | None:
    """Canonical names of the two electrodes of a derivation; None if it is no derivation."""
    read = parse_label(channel)
    if read.role != "derivation" or read.canonical is None or read.canonical_minus is None:
        return None
    return read.canonical, read.canonical_minus


def pairs_of(channels: Iterable[str]) -> list[Pair]:
    """The derivations among channels, each once, whichever end comes first."""
    found: dict[frozenset[str], Pair] = {}
    for channel in channels:
        pair = pair_of(channel)
        if pair is not None:
            found.setdefault(frozenset(pair), pair)
    return list(found.values())


def names_of(pairs: Sequence[Pair]) -> list[str]:
    """The electrodes of derivations, in order of appearance."""
    return list(dict.fromkeys(name for pair in pairs for name in pair))


def members(pairs: Sequence[Pair], names: Sequence[str]) -> Bools:
    """Which derivation has which electrode, shape (n_pairs, n_names)."""
    return np.array(
        [[name in pair for name in names] for pair in pairs], dtype=bool
    ).reshape(len(pairs), len(names))


def sites_present(
    pairs: Sequence[Pair], names: Sequence[str], labelled: Bools, touched: Bools
) -> Bools:
    """Sites that the labelled derivations leave no doubt about (rules 1 and 2).

    Parameters
    ----------
    pairs : the montage
    names : its electrodes
    labelled, touched : arrays, shape (n_pairs, n_epochs), bool
        Derivations on which the kind is present, and on which any part of its label lies.

    Returns
    -------
    array, shape (n_names, n_epochs), bool
    """
    has = members(pairs, names).astype(np.int64)
    present: Bools = has.T @ labelled.astype(np.int64) >= 2
    free: Bools = has.T @ (~touched).astype(np.int64) > 0
    for number, (first, second) in enumerate(pairs):
        a, b = names.index(first), names.index(second)
        present[a] |= labelled[number] & free[b] & ~free[a]
        present[b] |= labelled[number] & free[a] & ~free[b]
    return present


def clean_elsewhere(labels: Sequence[Label], montage: Sequence[str]) -> tuple[Label, ...]:
    """Sites that are clean of a kind while others are labelled with it.

    Whoever marks a kind on some derivations looks for it on the others at that time. Sites
    that no labelled derivation touches, and that are no neighbour of a touched site, are
    then clean of the kind for as long as the labels last. All other unlabelled time stays
    unknown: nobody says that it was looked at. Nothing is clean while a label lies on all
    derivations.

    Parameters
    ----------
    labels : sequence of Label
    montage : sequence of str
        What the annotator looked at; other sites stay unknown.

    Returns
    -------
    tuple of Label
        Of state "clean", on sites.
    """
    names = names_of(pairs_of(montage))
    near = _near(names)
    found: list[Label] = []
    for kind in KIND_NAMES:
        own = [label for label in labels if (label.kind, label.state) == (kind, PRESENT)]
        onset = np.array([label.onset for label in own])
        end = np.array([label.end for label in own])
        times = np.unique(np.concatenate([onset, end]))
        everywhere = np.array([not label.channels for label in own], dtype=bool)
        touches = np.array([_touches(label, names) for label in own], dtype=bool)
        latest: Label | None = None
        for start, stop in itertools.pairwise(times.tolist()):
            active = (onset <= start) & (end >= stop)
            if not active.any() or (active & everywhere).any():
                continue
            touched = touches[active].any(axis=0)
            clear = ~touched & ~near[touched].any(axis=0)
            sites = tuple(name for name, good in zip(names, clear, strict=True) if good)
            if latest and latest.end == start and latest.channels == sites:
                found.pop()
                start = latest.onset
            latest = Label(kind, start, stop, sites, CLEAN, "beside labels")
            found.append(latest)
    return tuple(label for label in found if label.channels)


def _touches(label: Label, names: Sequence[str]) -> list[bool]:
    ends = {name for pair in pairs_of(label.channels) for name in pair}
    return [name in ends for name in names]


def _near(names: Sequence[str]) -> Bools:
    """Who is a neighbour of whom on the template head, shape (n_names, n_names)."""
    unknown = np.full(3, np.nan)
    places = [site_position(name) for name in names]
    positions = np.array([unknown if place is None else place for place in places])
    n = len(names)
    chain, reference = np.zeros(n, dtype=np.intp), np.zeros(n, dtype=bool)
    return neighbour_weights(positions.reshape(n, 3), chain, reference)[1]
