"""Simulated artifact over real background, in recording conditions drawn at random.

The conditions are drawn independently of what is put in, so that no filter, sampling rate
or montage can stand for a label: a background that was low-passed gets its artifact through
the same low-pass, or a plausible fast floor that reaches as high as the artifact does.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from artifactlens.kinds import KIND_NAMES
from artifactlens.pipeline import Measured, measure_recording
from artifactlens.recording import Recording
from artifactlens.simulation.floor import extend_above
from artifactlens.simulation.scene import Scene
from artifactlens.sites import site_position
from artifactlens.training.corpora.truth import judged_kinds
from artifactlens.training.draws import Draw, draw_artifacts
from artifactlens.training.draws_other import Happenings, draw_others
from artifactlens.training.examples import UNKNOWN, Examples, from_table
from artifactlens.training.labels import label_cells
from artifactlens.training.situation import (
    FEWER_SITES,
    Background,
    Recorder,
    as_recording,
    draw_situation,
    in_montage,
)

Array = NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class Copy:
    """One simulated copy: what was recorded, what was measured, and the labelled cells."""

    examples: Examples
    recording: Recording
    measured: Measured


def simulate(
    background: Background, seed: int, *, kinds: tuple[str, ...] = KIND_NAMES
) -> Copy:
    """One copy of a background in drawn conditions with drawn artifacts and look-alikes.

    Parameters
    ----------
    background : Background
    seed : int
    kinds : tuple of str
        Kinds that may be put in; the truth of the others is unknown where the background
        may hold them itself.
    """
    rng = np.random.default_rng(seed)
    situation = draw_situation(background, rng)
    names = background.sites
    if situation.n_sites < len(names):
        names = tuple(name for name in names if name in FEWER_SITES[situation.n_sites])
    rows = [background.sites.index(name) for name in names]
    potentials = situation.gain * background.potentials[rows].astype(np.float64)
    sfreq = background.sfreq
    places = np.array([site_position(name) for name in names])
    reference = np.array([site_position(name) for name in background.reference_sites])
    n = potentials.shape[1]

    if situation.extended and background.kept_to_hz is not None:
        potentials = extend_above(
            potentials, sfreq, background.kept_to_hz, rng, sites=places
        ).astype(np.float64)  # fmt: skip
    scene = Scene(np.concatenate([places, reference]), n, sfreq)
    draw = Draw(scene, rng, situation.line, len(reference))
    put_in = draw_artifacts(draw, kinds)
    others, happenings = draw_others(draw)
    noise = situation.noise_uv * rng.standard_normal(potentials.shape)
    noise *= np.exp(0.3 * rng.standard_normal((len(names), 1)))

    recorder = Recorder(situation, background, sfreq)
    fields = {kind: recorder(field) for kind, field in put_in.items()}
    potentials = recorder(potentials, own=True) + recorder(noise)
    n_refs = len(reference)

    def against_reference(field: Array) -> Array:
        return field[:-n_refs] - field[-n_refs:].mean(axis=0)

    channels = potentials + against_reference(recorder(others))
    for field in fields.values():
        channels = channels + against_reference(field)
    electrodes = {
        kind: np.concatenate([field[:-n_refs], field[-n_refs:].mean(axis=0, keepdims=True)])
        for kind, field in fields.items()
    }
    data, labels, reference_row = in_montage(situation, channels, names, rng)
    recording = as_recording(data, labels, situation, recorder)
    measured = measure_recording(recording, line_frequency=situation.line)
    truth, strength = label_cells(
        measured.frame,
        measured.grid.start,
        measured.grid.n_samples,
        recording.sampling_rate,
        names,
        electrodes,
        channels - sum(against_reference(field) for field in fields.values()),
        situation,
        reference_row,
    )
    # What the tool will not judge is neither learnt nor checked.
    truth[~judged_kinds(measured)] = UNKNOWN
    if reference_row == "mix":
        # A made-up reference shares in what its electrodes have: it has no truth of its own.
        made_up = [role == "reference" for role in measured.frame.roles]
        measured.table.values[:, :, made_up] = np.nan
    examples = from_table(
        measured.table,
        truth,
        strength,
        person=background.person,
        origin=f"simulated: {background.origin}",
        condition=situation.words(),
        look_alike=_pattern_per_epoch(happenings, measured.grid.onset),
    )
    return Copy(examples, recording, measured)


def _pattern_per_epoch(
    happenings: Happenings, onset: NDArray[np.float64]
) -> NDArray[np.str_]:
    patterns = np.full(len(onset), "", dtype="U40")
    for name, begin, end in happenings:
        patterns[(onset < end) & (onset + 1 > begin)] = name
    return patterns
