"""Simulated artifact over real background, in recording conditions drawn at random.

The conditions are drawn independently of what is put in, so that no filter, sampling rate
or montage can stand for a label: a background that was low-passed gets its artifact through
the same low-pass, or a plausible fast floor that reaches as high as the artifact does.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from artifactlens.assessable import assess
from artifactlens.kinds import KIND_NAMES
from artifactlens.pipeline import measure_recording
from artifactlens.simulation import electrode, eye, mains, muscle
from artifactlens.simulation.floor import extend_above
from artifactlens.simulation.lookalikes import LOOK_ALIKES
from artifactlens.simulation.scene import Scene, Simulated
from artifactlens.sites import site_position
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


def simulate(
    background: Background, seed: int, *, kinds: tuple[str, ...] = KIND_NAMES
) -> Examples:
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
            potentials, sfreq, background.kept_to_hz, rng, sites=places,
            amplifier_uv=float(rng.uniform(0.2, 0.6)),
        ).astype(np.float64)  # fmt: skip
    scene = Scene(np.concatenate([places, reference]), n, sfreq)
    put_in = {
        kind: draw_artifact(kind, scene, rng, situation.line, len(reference))
        for kind in kinds
    }
    patterns, happenings = draw_look_alikes(scene, rng)

    recorder = Recorder(situation, background, sfreq)
    fields = {kind: recorder(field) for kind, field in put_in.items()}
    brain = recorder(patterns)
    potentials = recorder(potentials, own=True)
    n_refs = len(reference)

    def against_reference(field: Array) -> Array:
        return field[:-n_refs] - field[-n_refs:].mean(axis=0)

    channels = potentials + against_reference(brain)
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
    judged = assess(
        measured.frame,
        measured.leads,
        measured.conditions,
        float(len(measured.grid)),
        False,
    )
    for number, entry in enumerate(judged):
        if entry.verdict == "no":
            # What the tool will not judge is neither learnt nor checked.
            truth[number] = UNKNOWN
    if reference_row == "mix":
        # A made-up reference shares in what its electrodes have: it has no truth of its own.
        made_up = [role == "reference" for role in measured.frame.roles]
        measured.table.values[:, :, made_up] = np.nan
    return from_table(
        measured.table,
        truth,
        strength,
        person=background.person,
        origin=f"simulated: {background.origin}",
        condition=situation.words(),
        look_alike=_pattern_per_epoch(happenings, measured.grid.onset),
    )


def draw_artifact(
    kind: str, scene: Scene, rng: np.random.Generator, line: float, n_refs: int
) -> Array:
    """Potentials of one kind at all sites and the reference's electrodes, microvolt.

    Four in ten copies have none of a kind, so that a kind's absence is learnt too.
    """
    field = np.zeros((scene.n_sites, scene.n_samples))
    if rng.random() < 0.4:
        return field
    parts = {
        "eye": lambda: _eyes(scene, rng),
        "muscle": lambda: _muscles(scene, rng),
        "pop": lambda: _pops(scene, rng, n_refs),
        "mains": lambda: _mains(scene, rng, line, n_refs),
    }[kind]()
    for part in parts:
        field += part.potentials
    return field


def _moments(rng: np.random.Generator, length: float, per_minute: float) -> list[float]:
    count = max(1, rng.poisson(per_minute * length / 60))
    return sorted(float(at) for at in rng.uniform(0.5, max(length - 2.5, 0.6), count))


def _eyes(scene: Scene, rng: np.random.Generator) -> list[Simulated]:
    parts: list[Simulated] = []
    length = scene.length
    if rng.random() < 0.7:
        onsets = eye.blink_onsets(length, rng, per_minute=float(rng.choice([4, 8, 15, 30])))
        size = float(np.exp(rng.uniform(np.log(50), np.log(220))))
        parts.append(
            eye.blinks(
                scene, rng, onsets, amplitude_uv=(0.7 * size, 1.4 * size),
                duration=(0.18, 0.5),
                eyes=str(rng.choice(["both", "left", "right"], p=[0.96, 0.02, 0.02])),
            )
        )  # fmt: skip
    if rng.random() < 0.7:
        for onset in _moments(rng, length, float(rng.choice([3, 6, 12]))):
            heading = rng.uniform(0, 2 * np.pi)
            if rng.random() < 0.6:
                heading = rng.choice([0.0, np.pi]) + rng.normal(0, 0.15)
            degrees = float(rng.uniform(6, 35))
            parts.append(
                eye.saccade(
                    scene, onset, right_deg=degrees * np.cos(heading),
                    up_deg=degrees * np.sin(heading),
                    plateau=float(np.exp(rng.uniform(np.log(0.2), np.log(3.0)))),
                )
            )  # fmt: skip
    if rng.random() < 0.2:
        duration = float(rng.uniform(6, 25))
        parts.append(
            eye.roving(
                scene, rng, float(rng.uniform(0, max(1, length - duration))), duration,
                size_deg=float(rng.uniform(12, 35)),
            )
        )  # fmt: skip
    if rng.random() < 0.2:
        parts.append(
            eye.flutter(
                scene, rng, float(rng.uniform(0, length - 4)), float(rng.uniform(1, 5)),
                rate_hz=float(rng.uniform(3, 9)),
                amplitude_uv=float(rng.uniform(40, 120)),
            )
        )  # fmt: skip
    return parts


def _muscles(scene: Scene, rng: np.random.Generator) -> list[Simulated]:
    parts: list[Simulated] = []
    length = scene.length
    for _ in range(int(rng.integers(1, 4))):
        name = str(rng.choice(list(muscle.MUSCLES), p=[0.3, 0.4, 0.15, 0.15]))
        sides = [["left", "right"], ["left"], ["right"]][
            int(rng.choice(3, p=[0.5, 0.25, 0.25]))
        ]
        style = rng.choice(["twitch", "burst", "long"], p=[0.25, 0.5, 0.25])
        low, high, rate = {
            "twitch": (0.06, 0.25, 5.0),
            "burst": (0.3, 4.0, 4.0),
            "long": (8.0, length, 0.5),
        }[str(style)]
        size = float(np.exp(rng.uniform(np.log(2.5), np.log(80.0))))
        parts += [
            muscle.contraction(
                scene, rng, name, onset,
                float(np.exp(rng.uniform(np.log(low), np.log(high)))),
                rms_uv=size * float(rng.uniform(0.6, 1.5)), sides=sides,
                units=int(rng.choice([2, 4, 10, 20])),
            )
            for onset in _moments(rng, length, rate)
        ]  # fmt: skip
    return parts


def _pops(scene: Scene, rng: np.random.Generator, n_refs: int) -> list[Simulated]:
    parts: list[Simulated] = []
    n_rows, length = scene.n_sites, scene.length
    for _ in range(int(rng.integers(1, 4))):
        linked = rng.random() < 0.15
        row = n_rows - 1 if linked else int(rng.integers(n_rows - n_refs))
        if rng.random() < 0.25:
            onset = float(rng.uniform(0, length - 6))
            onsets = electrode.unstable_run(rng, onset, float(rng.uniform(3, 15)))
        else:
            onsets = _moments(rng, length, float(rng.choice([1, 3, 6])))
        made = electrode.pops(scene, rng, row, onsets, forms=electrode.POP_FORMS)
        if linked:
            # A linked reference takes the step with all its electrodes.
            made.potentials[n_rows - n_refs :] = made.potentials[row]
        parts.append(made)
    return parts


def _mains(
    scene: Scene, rng: np.random.Generator, line: float, n_refs: int
) -> list[Simulated]:
    n_rows, length = scene.n_sites, scene.length
    where = str(rng.choice(["one", "few", "all", "reference"], p=[0.45, 0.25, 0.2, 0.1]))
    rows: list[int] | None = None
    if where == "one":
        rows = [int(rng.integers(n_rows - n_refs))]
    elif where == "few":
        count = int(rng.integers(2, max(3, n_rows // 2)))
        rows = [int(row) for row in rng.choice(n_rows - n_refs, count, replace=False)]
    elif where == "reference":
        rows = list(range(n_rows - n_refs, n_rows))
    onset = 0.0 if rng.random() < 0.5 else float(rng.uniform(0, length / 2))
    made = mains.hum(
        scene, rng, size_uv=float(np.exp(rng.uniform(np.log(1.0), np.log(60.0)))),
        nominal_hz=line, rows=rows, common=where == "reference", onset=onset,
        duration=float(rng.uniform(5, length)), wander=float(rng.choice([0.001, 0.008])),
    )  # fmt: skip
    return [made]


def draw_look_alikes(
    scene: Scene, rng: np.random.Generator
) -> tuple[Array, list[tuple[str, float, float]]]:
    """Patterns of the brain that are no artifact, in half of the copies.

    Returns their potentials and what was put in: (name, onset, end), seconds.
    """
    field = np.zeros((scene.n_sites, scene.n_samples))
    happenings: list[tuple[str, float, float]] = []
    if rng.random() < 0.5:
        return field, happenings
    for name in rng.choice(list(LOOK_ALIKES), int(rng.integers(1, 4)), replace=False):
        pattern = LOOK_ALIKES[str(name)]
        for onset in _moments(rng, scene.length, 4.0):
            duration = min(
                float(rng.uniform(*pattern.duration)), scene.length - onset - 0.1
            )
            if duration >= 0.1:
                size = float(rng.uniform(*pattern.amplitude_uv))
                field += pattern.make(scene, rng, onset, duration, size).potentials
                happenings.append((str(name), onset, onset + duration))
    return field, happenings


def _pattern_per_epoch(
    happenings: list[tuple[str, float, float]], onset: NDArray[np.float64]
) -> NDArray[np.str_]:
    patterns = np.full(len(onset), "", dtype="U40")
    for name, begin, end in happenings:
        patterns[(onset < end) & (onset + 1 > begin)] = name
    return patterns
