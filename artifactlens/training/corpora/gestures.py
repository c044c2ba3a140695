"""Instructed face gestures of one person (data_cards/gestures_one_person.md).

Each chunk is a stretch of its own with one epoch, its middle second. The instruction says
what was done, not which sites show it. That is decided once per gesture and site over all its
chunks, on the raw samples and by none of the package's features (:func:`site_states`), and so
tells nothing of a single chunk: whether one chunk shows the gesture is the instruction's word.
"""

from __future__ import annotations

from functools import partial
from pathlib import Path
from typing import NamedTuple
from zipfile import BadZipFile

import numpy as np
from numpy.typing import NDArray

from artifactlens.errors import LabelsError
from artifactlens.recording import Recording, Segment, from_array
from artifactlens.training.corpora.labelled import (
    CLEAN,
    PRESENT,
    UNKNOWN,
    Label,
    LabelledRecording,
    need_folder,
)

Array = NDArray[np.float64]

CORPUS = "gestures_one_person"
FILE = "session1.npz"
NEUTRAL = "neutral"

GESTURES: dict[str, tuple[str, ...]] = {
    "hardblink": ("eye",),
    "lookleft": ("eye",),
    "lookright": ("eye",),
    "bitelowerlip": ("muscle",),
    "smile": ("muscle",),
    "eyebrows": ("muscle",),
    "scrunch": ("muscle",),
    "tongue": (),
    NEUTRAL: (),
}
"""Gestures and the kinds that they are called; the other kind may well be there too."""

NEUTRAL_TIMES = 5
"""How often neutral chunks are laid in: in a real recording rest prevails."""

BLOCK_CHUNKS = 10
"""A block is closed at the first chunk from here on that the next one does not overlap."""

LONGEST_BLOCK = 30
"""Chunks from which a block is closed even so: its last chunk overlaps the next block."""

PACE = 10.0
"""Seconds from the start of a chunk to that of the next, as if there were gaps."""

BEHIND = ("P7", "O1", "O2", "P8")
LEAST_EYE_UV = 30.0
EYE_BELOW_HZ = 10.0
MUSCLE_BAND_HZ = (20.0, 43.0)
ABOVE_PERCENTILE, BELOW_PERCENTILE = 90, 60
FILTER_ORDER = 4


class Session(NamedTuple):
    """The chunks as stored: gesture to array (n_chunks, n_samples, n_sites), microvolt."""

    sites: tuple[str, ...]
    sfreq: float
    chunks: dict[str, Array]


class Chunks(NamedTuple):
    """Which chunk each epoch of the recording is; arrays of shape (n_epochs,).

    ``name`` its gesture, ``block`` a number that it shares with its neighbours (chunks of one
    gesture overlap in time: never split a block between training and check), ``is_copy``
    whether it repeats a neutral chunk and bears no label.
    """

    name: NDArray[np.str_]
    block: NDArray[np.int64]
    is_copy: NDArray[np.bool_]


def load(folder: Path) -> Session:
    """Read the stored chunks.

    Raises
    ------
    LabelsError
        If the file is missing or lacks a gesture.
    """
    path = folder / FILE
    try:
        with path.open("rb") as file, np.load(file) as stored:
            sites = tuple(str(name) for name in stored["ch_names"])
            chunks = {name: stored[name].astype(np.float64) for name in GESTURES}
            return Session(sites, float(stored["sfreq"]), chunks)
    except (OSError, EOFError, KeyError, ValueError, BadZipFile):
        raise LabelsError(
            f"{FILE} is needed with ch_names, sfreq and the gestures {', '.join(GESTURES)}; "
            "it could not be read so.",
            "Check that the corpus was copied completely.",
        ) from None


def sizes(session: Session, kind: str) -> dict[str, Array]:
    """How large a kind is in the middle second of every chunk, from the raw samples.

    Eye: peak-to-peak below 10 Hz against the mean of the posterior sites. Muscle: rms at
    20-43 Hz against the median of all sites, which takes off what the reference carries.
    Butterworth filters, forwards and backwards over the whole chunk.

    Returns
    -------
    dict of gesture to array, shape (n_chunks, n_sites), microvolt
    """
    from scipy.signal import butter, sosfiltfilt

    if kind == "eye":
        sos = butter(FILTER_ORDER, EYE_BELOW_HZ, "low", fs=session.sfreq, output="sos")
        behind = [number for number, site in enumerate(session.sites) if site in BEHIND]
    else:
        sos = butter(FILTER_ORDER, MUSCLE_BAND_HZ, "band", fs=session.sfreq, output="sos")
    found = {}
    for gesture, chunks in session.chunks.items():
        first, n = _middle(chunks.shape[1], session.sfreq)
        data = chunks - chunks.mean(axis=1, keepdims=True)
        if kind == "eye":
            data = data - data[:, :, behind].mean(axis=2, keepdims=True)
            kept = sosfiltfilt(sos, data, axis=1)[:, first : first + n]
            found[gesture] = np.ptp(kept, axis=1)
        else:
            data = data - np.median(data, axis=2, keepdims=True)
            kept = sosfiltfilt(sos, data, axis=1)[:, first : first + n]
            found[gesture] = np.sqrt((kept**2).mean(axis=1))
    return found


def _middle(n_samples: int, sfreq: float) -> tuple[int, int]:
    """First sample and length of the middle second of a chunk."""
    n = int(sfreq)
    return (n_samples - n) // 2, n


def site_states(session: Session) -> dict[tuple[str, str], tuple[str, ...]]:
    """Per gesture and the kind it is called: the state of each site.

    A site shows a gesture where the median size over all chunks exceeds the 90th percentile
    of the same site over neutral chunks (and, for eye, 30 microvolt); it is clean at or below
    the 60th, and unknown between.
    """
    states = {}
    for kind, least in (("eye", LEAST_EYE_UV), ("muscle", 0.0)):
        size = sizes(session, kind)
        limits = np.percentile(size[NEUTRAL], (BELOW_PERCENTILE, ABOVE_PERCENTILE), axis=0)
        for gesture, kinds in GESTURES.items():
            if kind in kinds:
                typical = np.median(size[gesture], axis=0)
                shown = (typical > limits[1]) & (typical >= least)
                states[gesture, kind] = tuple(
                    np.where(
                        shown, PRESENT, np.where(typical <= limits[0], CLEAN, UNKNOWN)
                    ).tolist()
                )
    return states


def _order() -> list[tuple[str, bool]]:
    """Gestures in the order of the recording, and whether they are copies."""
    laid = [(name, False) for name in GESTURES]
    return laid + [(NEUTRAL, True)] * (NEUTRAL_TIMES - 1)


def as_recording(session: Session) -> Recording:
    """All chunks as segments of one recording; neutral ones again at the end, four times."""
    data = np.concatenate([session.chunks[name] for name, _ in _order()])
    data = data - data.mean(axis=1, keepdims=True)
    # From the middle second on: what follows it within the chunk is its context.
    data = data[:, _middle(data.shape[1], session.sfreq)[0] :]
    n_chunks, n_samples, n_sites = data.shape
    return from_array(
        data.transpose(2, 0, 1).reshape(n_sites, -1).astype(np.float32),
        session.sfreq,
        [f"EEG {site}-REF" for site in session.sites],
        segments=[Segment(k * n_samples, n_samples, k * PACE) for k in range(n_chunks)],
        name="gestures",
    )


def labels_of(session: Session) -> tuple[Label, ...]:
    """Labels of all chunks that are no copies."""
    states = site_states(session)
    found = []
    names = np.repeat(list(GESTURES), [len(session.chunks[name]) for name in GESTURES])
    for number, name in enumerate(names.tolist()):
        onset, end = number * PACE, number * PACE + 1.0
        if name == NEUTRAL:
            found += [
                Label(kind, onset, end, (), CLEAN, name) for kind in ("eye", "muscle")
            ]
        for kind in GESTURES[name]:
            for state in (PRESENT, CLEAN):
                at = zip(session.sites, states[name, kind], strict=True)
                sites = tuple(site for site, own in at if own == state)
                if sites:
                    found.append(Label(kind, onset, end, sites, state, name))
    return tuple(found)


def gesture_chunks(session: Session) -> Chunks:
    """Which chunk each epoch of the recording is."""
    chunks = session.chunks
    blocks, total = {}, 0
    for name in GESTURES:
        blocks[name] = _blocks(chunks[name]) + total
        total = int(blocks[name].max(initial=total - 1)) + 1
    order = _order()
    return Chunks(
        name=np.concatenate([np.full(len(chunks[name]), name) for name, _ in order]),
        block=np.concatenate([blocks[name] for name, _ in order]),
        is_copy=np.concatenate([np.full(len(chunks[name]), copy) for name, copy in order]),
    )


def _blocks(chunks: Array) -> NDArray[np.int64]:
    """Number of the block of each chunk of one gesture, shape (n_chunks,)."""
    n, n_samples, _ = chunks.shape
    overlaps = np.zeros(n, dtype=bool)
    for lag in range(1, n_samples):
        same = chunks[:-1, lag:] == chunks[1:, : n_samples - lag]
        overlaps[:-1] |= same.all(axis=(1, 2))
    number, length = 0, 0
    found = np.zeros(n, dtype=np.int64)
    for chunk in range(n):
        found[chunk] = number
        length += 1
        closed = length >= BLOCK_CHUNKS and not overlaps[chunk]
        enough_left = n - chunk - 1 >= BLOCK_CHUNKS // 2
        if enough_left and (closed or length >= LONGEST_BLOCK):
            number, length = number + 1, 0
    return found


def _open(folder: Path) -> Recording:
    return as_recording(load(folder))


def read(folder: Path) -> list[LabelledRecording]:
    """One recording of all chunks."""
    session = load(need_folder(folder, CORPUS))
    return [
        LabelledRecording(
            corpus=CORPUS,
            person="gestures",
            name="gestures",
            open=partial(_open, folder),
            labels=labels_of(session),
            line_frequency=60.0,
        )
    ]
