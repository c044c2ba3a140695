"""From the labels of a recording to the truth of its cells.

Everything is unknown until a label says otherwise. Clean labels count first, then present,
then unknown ones overrule. A second is

- *present* at a site if a label covers at least a third of it, or if it holds the middle of
  the label (so that a short blink is never lost between two seconds);
- *clean* if clean labels cover all of it and no present one touches it;
- *unknown* if an unknown label, or a present one that covers less, touches it.

A present label that names no channel says only that the kind is somewhere in the second: its
sites are unknown unless another label names them. :func:`seconds_of` counts it. What a label
on a derivation says of electrodes stands in :mod:`artifactlens.training.corpora.derivations`;
clean derivations make a site clean if all derivations of the montage that have it are.
"""

from __future__ import annotations

from collections import defaultdict
from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from artifactlens.assessable import assess
from artifactlens.errors import LabelsError
from artifactlens.kinds import KIND_NAMES
from artifactlens.pipeline import Measured, measure_recording
from artifactlens.sites import parse_label
from artifactlens.training.corpora import labelled as words
from artifactlens.training.corpora.derivations import (
    Pair,
    members,
    names_of,
    pair_of,
    pairs_of,
    sites_present,
)
from artifactlens.training.corpora.labelled import Label, LabelledRecording
from artifactlens.training.examples import CLEAN, PRESENT, UNKNOWN, Examples, from_table

if TYPE_CHECKING:
    from artifactlens.frames import Frame

Bools = NDArray[np.bool_]
Seconds = NDArray[np.float64]
Truth = NDArray[np.int8]

LEAST_SHARE = 1 / 3
"""Of a second that a label needs to cover to be present in it."""

_ROUNDING = 1e-6
"""Seconds: labels are written to a few decimals, and thirds have none."""


@dataclass(frozen=True, slots=True)
class Cover:
    """How labels lie over one-second epochs; each array has shape (n_epochs,), bool."""

    held: Bools
    whole: Bools
    touched: Bools


def cover(labels: Sequence[Label], onset: Seconds) -> Cover:
    """How the union of labels lies over epochs.

    Parameters
    ----------
    labels : sequence of Label
        Their times only are looked at.
    onset : array, shape (n_epochs,), seconds
        Rising starts of the epochs.
    """
    none = np.zeros(len(onset), dtype=bool)
    if not labels or not len(onset):
        return Cover(none, none, none)
    times = np.array(sorted((label.onset, label.end) for label in labels))
    middle = times.mean(axis=1)
    at = np.searchsorted(onset, middle, side="right") - 1
    inside = (at >= 0) & (middle < onset[at] + 1)
    held = none.copy()
    held[at[inside]] = True

    times = times.clip(onset[0], onset[-1] + 1)
    reach = np.maximum.accumulate(times[:, 1])
    first = np.flatnonzero(np.r_[True, times[1:, 0] > reach[:-1]])
    starts, ends = times[first, 0], np.r_[reach[first[1:] - 1], reach[-1]]
    # Seconds covered up to each end of a stretch; straight lines between them.
    so_far = np.r_[0.0, np.cumsum(ends - starts)]
    corners = np.stack([starts, ends], axis=1).ravel()
    heights = np.stack([so_far[:-1], so_far[1:]], axis=1).ravel()
    share = np.interp(onset + 1, corners, heights) - np.interp(onset, corners, heights)
    held |= share >= LEAST_SHARE - _ROUNDING
    return Cover(held, share >= 1 - _ROUNDING, held | (share > _ROUNDING))


def truth_of(
    labels: Sequence[Label], measured: Measured, montage: Sequence[str] = ()
) -> Truth:
    """Truth of every kind at every epoch and site of a measured recording.

    Parameters
    ----------
    labels : sequence of Label
    measured : Measured
    montage : sequence of str
        Derivations that whoever labelled looked at; those of the recording itself if not
        given. Derivations that a label names belong to it in any case.

    Returns
    -------
    array, shape (n_kinds, n_epochs, n_sites), int8
        1 present, 0 clean, -1 unknown. A reference has no truth.

    Raises
    ------
    LabelsError
        If a label names what is neither a 10-20 name nor a channel of the recording.
    """
    frame, onset = measured.frame, measured.grid.onset
    truth = np.full((len(KIND_NAMES), len(onset), len(frame.sites)), UNKNOWN, dtype=np.int8)
    own = montage or measured.recording.labels
    named = [channel for label in labels for channel in dict.fromkeys(label.channels)]
    pairs = pairs_of([*own, *dict.fromkeys(named)])
    for number, kind in enumerate(KIND_NAMES):
        of_kind = [label for label in labels if label.kind == kind]
        if of_kind:
            truth[number] = _truth_of_kind(of_kind, frame, onset, pairs)
    truth[:, :, [role == "reference" for role in frame.roles]] = UNKNOWN
    return truth


def _truth_of_kind(
    labels: list[Label], frame: Frame, onset: Seconds, pairs: list[Pair]
) -> Truth:
    scalp = np.array([role == "site" for role in frame.roles])
    names = names_of(pairs)
    rows = {name: _rows(name, frame) for name in names}
    truth = np.full((len(onset), len(frame.sites)), UNKNOWN, dtype=np.int8)
    covers = {
        state: _by_channel(labels, state, frame, onset)
        for state in (words.CLEAN, words.PRESENT, words.UNKNOWN)
    }

    clean = covers[words.CLEAN]
    truth[np.ix_(clean.everywhere.whole, scalp)] = CLEAN
    for row, lies in clean.sites.items():
        truth[lies.whole | clean.everywhere.whole, row] = CLEAN
    if clean.pairs:
        whole = _stack(clean, pairs, len(onset), "whole")
        has = members(pairs, names)
        for column, name in enumerate(names):
            truth[np.ix_(whole[has[:, column]].all(axis=0), rows[name])] = CLEAN

    present = covers[words.PRESENT]
    truth[present.everywhere.touched] = UNKNOWN
    if present.pairs:
        held, touched = (
            _stack(present, pairs, len(onset), how) for how in ("held", "touched")
        )
        found = sites_present(pairs, names, held, touched)
        at_all = members(pairs, names).T.astype(np.int64) @ touched.astype(np.int64) > 0
        for name, here, near in zip(names, found, at_all, strict=True):
            truth[np.ix_(near, rows[name])] = UNKNOWN
            truth[np.ix_(here, rows[name])] = PRESENT
    for row, lies in present.sites.items():
        weak = lies.touched & (truth[:, row] != PRESENT)
        truth[weak, row] = UNKNOWN
        truth[lies.held, row] = PRESENT

    doubt = covers[words.UNKNOWN]
    truth[doubt.everywhere.touched] = UNKNOWN
    for row, lies in doubt.sites.items():
        truth[lies.touched, row] = UNKNOWN
    for pair, lies in doubt.pairs.items():
        for name in pair:
            truth[np.ix_(lies.touched, rows[name])] = UNKNOWN
    return truth


@dataclass(frozen=True, slots=True)
class _Covers:
    """Of one kind and state: labels without channels, on rows of the frame, on derivations."""

    everywhere: Cover
    sites: dict[int, Cover]
    pairs: dict[frozenset[str], Cover]


def _by_channel(labels: list[Label], state: str, frame: Frame, onset: Seconds) -> _Covers:
    everywhere: list[Label] = []
    sites: dict[int, list[Label]] = defaultdict(list)
    pairs: dict[frozenset[str], list[Label]] = defaultdict(list)
    known: dict[str, frozenset[str] | NDArray[np.intp]] = {}
    for label in labels:
        if label.state != state:
            continue
        if not label.channels:
            everywhere.append(label)
        for channel in label.channels:
            if channel not in known:
                pair = pair_of(channel)
                known[channel] = _rows(channel, frame) if pair is None else frozenset(pair)
            place = known[channel]
            if isinstance(place, frozenset):
                pairs[place].append(label)
            else:
                for row in place.tolist():
                    sites[row].append(label)
    if state == words.CLEAN:
        # A second may be clean by one label on the site and another on every site.
        sites = defaultdict(list, {row: [*own, *everywhere] for row, own in sites.items()})
    return _Covers(
        cover(everywhere, onset),
        {row: cover(own, onset) for row, own in sites.items()},
        {pair: cover(own, onset) for pair, own in pairs.items()},
    )


def _stack(covers: _Covers, pairs: list[Pair], n_epochs: int, how: str) -> Bools:
    """One property of all derivations of a montage, shape (n_pairs, n_epochs)."""
    stacked = np.zeros((len(pairs), n_epochs), dtype=bool)
    for number, pair in enumerate(pairs):
        if frozenset(pair) in covers.pairs:
            stacked[number] = getattr(covers.pairs[frozenset(pair)], how)
    return stacked


def _rows(channel: str, frame: Frame) -> NDArray[np.intp]:
    """Rows of the frame that a label's site names; none where the recording lacks it."""
    name = parse_label(channel).canonical
    found = [
        row
        for row, (canonical, site, own, role) in enumerate(
            zip(frame.canonical, frame.sites, frame.channel, frame.roles, strict=True)
        )
        if role != "reference"
        and (canonical == name if name is not None else channel in (site, own))
    ]
    if name is None and not found:
        raise LabelsError(
            f"A label names {channel[:40]!r}, which is neither an electrode of the 10-20 "
            f"system nor one of {len(frame.sites)} sites of the recording.",
            "Spell channels in the labels as the recording does.",
        )
    return np.array(found, dtype=np.intp)


def seconds_of(
    labels: Sequence[Label], kind: str, n_epochs: int, onset: Seconds | None = None
) -> Truth:
    """Truth of one kind per second, wherever on the head it is.

    Parameters
    ----------
    labels : sequence of Label
    kind : str
        One of ``KIND_NAMES``, or "brain" or "other".
    n_epochs : int
    onset : array, shape (n_epochs,), seconds, optional
        Starts of the epochs where they are not 0, 1, 2...: recordings with gaps.

    Returns
    -------
    array, shape (n_epochs,), int8
        1 where any label of the kind is present, 0 where it is clean at every site, -1 else.
    """
    at = np.arange(n_epochs, dtype=np.float64) if onset is None else onset
    of_state = {
        state: [label for label in labels if (label.kind, label.state) == (kind, state)]
        for state in (words.CLEAN, words.PRESENT, words.UNKNOWN)
    }
    everywhere = [label for label in of_state[words.CLEAN] if not label.channels]
    seconds = np.full(n_epochs, UNKNOWN, dtype=np.int8)
    seconds[cover(everywhere, at).whole] = CLEAN
    present = cover(of_state[words.PRESENT], at)
    seconds[present.touched] = UNKNOWN
    # Short labels at several places do not add up: each has to be present by itself.
    by_place: dict[tuple[str, ...], list[Label]] = defaultdict(list)
    for label in of_state[words.PRESENT]:
        by_place[label.channels].append(label)
    for own in by_place.values():
        seconds[cover(own, at).held] = PRESENT
    doubt = [label for label in of_state[words.UNKNOWN] if not label.channels]
    seconds[cover(doubt, at).touched] = UNKNOWN
    return seconds


def examples_of(labelled: LabelledRecording) -> Examples:
    """Open and measure a recording; its cells with their truth.

    Kinds that the recording does not let one judge are neither learnt nor checked: unknown.
    ``look_alike`` names the cerebral pattern labelled in the second, by the corpus's own word.

    Raises
    ------
    RecordingError, SitesError, LabelsError
        If the recording cannot be measured or the labels do not fit it.
    """
    measured = measure_recording(labelled.open(), line_frequency=labelled.line_frequency)
    truth = truth_of(labelled.labels, measured, labelled.montage)
    truth[~judged_kinds(measured)] = UNKNOWN
    # A site of which no label ever says anything, as a rule the reference, is left out:
    # else no second could count as clean at every site.
    silent = (truth == UNKNOWN).all(axis=(0, 1))
    measured.table.values[:, :, silent] = np.nan
    return from_table(
        measured.table,
        truth,
        np.full(truth.shape, np.nan, dtype=np.float32),
        person=labelled.person,
        origin=f"real: {labelled.corpus}",
        look_alike=_patterns(labelled.labels, measured.grid.onset),
    )


def judged_kinds(measured: Measured) -> Bools:
    """Which kinds the recording lets one judge at all, shape (n_kinds,)."""
    frame, leads, conditions = measured.frame, measured.leads, measured.conditions
    # Implausible units would limit a verdict, never deny it: they need not be known here.
    found = assess(frame, leads, conditions, float(len(measured.grid)), False)
    return np.array([entry.verdict != "no" for entry in found])


def _patterns(labels: Sequence[Label], onset: Seconds) -> NDArray[np.str_]:
    """Word of the cerebral pattern present in each epoch, shape (n_epochs,)."""
    brain = [
        label for label in labels if (label.kind, label.state) == ("brain", words.PRESENT)
    ]
    longest = max((len(label.text) for label in brain), default=1)
    patterns = np.full(len(onset), "", dtype=f"U{max(longest, 1)}")
    for label in brain:
        patterns[cover([label], onset).held] = label.text
    return patterns
