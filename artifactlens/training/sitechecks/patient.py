"""What comes from the patient and no re-prep would cure: muscle, blinks, gaze."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np

from artifactlens.simulation import eye, gaze, muscle
from artifactlens.training.draws import SOFTENED
from artifactlens.training.sitechecks.bench import Array, Bench

PatientMaker = Callable[[Bench], tuple[Array, str]]
"""Potentials at all electrodes, microvolt, and the size in words."""

_SIDES = (("left", "right"), ("left",), ("right",))
_GAZES = ("scan", "reading", "square_wave_jerks", "pursuit")


def muscle_bursts(bench: Bench) -> tuple[Array, str]:
    """Bursts of temporal or frontal muscle, on one side or both."""
    size = bench.size((20, 60), (6, 12))
    source, name, sides = _muscle(bench)
    field = np.zeros((bench.scene.n_sites, bench.scene.n_samples))
    onsets = bench.moments(bench.count((8, 16), (4, 8)), 3.0)
    for onset in onsets:
        field += muscle.contraction(
            bench.scene, bench.rng, name, onset, bench.between(0.3, 3.0),
            rms_uv=size * float(bench.rng.uniform(0.7, 1.3)), sides=sides, muscle=source,
        ).potentials  # fmt: skip
    return field, f"{len(onsets)} bursts of the {name}, {size:.0f} uV rms"


def tonic_muscle(bench: Bench) -> tuple[Array, str]:
    """Steady tension of temporal or frontal muscle."""
    size = bench.size((8, 25), (3, 6))
    source, name, sides = _muscle(bench)
    field = muscle.contraction(
        bench.scene, bench.rng, name, bench.span[0] - 2.0, bench.duration + 4.0, rms_uv=size,
        sides=sides, effort="tonic", muscle=source,
    ).potentials  # fmt: skip
    return field.astype(np.float64), f"steady {name}, {size:.0f} uV rms"


def _muscle(bench: Bench) -> tuple[muscle.Muscle, str, tuple[str, ...]]:
    name = str(bench.rng.choice(["temporalis", "frontalis"]))
    drawn = muscle.draw_muscle(bench.rng, name)
    factor = bench.between(*SOFTENED)
    sides = _SIDES[int(bench.rng.integers(len(_SIDES)))]
    return (
        drawn._replace(low_hz=factor * drawn.low_hz, high_hz=factor * drawn.high_hz),
        name,
        sides,
    )


def blinks(bench: Bench) -> tuple[Array, str]:
    """Natural blinks of one person."""
    size = bench.size((100, 250), (50, 90))
    per_minute = bench.size((10, 25), (4, 8))
    onsets = eye.blink_onsets(bench.scene.length, bench.rng, per_minute)
    made = eye.blinks(
        bench.scene, bench.rng, onsets, amplitude_uv=(0.7 * size, 1.3 * size),
        pair=eye.draw_eyes(bench.rng),
    )  # fmt: skip
    return made.potentials.astype(np.float64), f"{len(onsets)} blinks of {size:.0f} uV"


def gazes(bench: Bench) -> tuple[Array, str]:
    """Scanning, reading, following: one stretch (mild) or three (plain)."""
    pair = eye.draw_eyes(bench.rng)
    field = np.zeros((bench.scene.n_sites, bench.scene.n_samples))
    names = []
    for onset in bench.moments(bench.count((3, 3), (1, 1)), 10.0):
        names.append(str(bench.rng.choice(_GAZES)))
        lasts = float(bench.rng.uniform(5, 10))
        made = gaze.GAZE_SEQUENCES[names[-1]](
            bench.scene, bench.rng, onset, lasts, pair=pair
        )
        field += made.potentials
    return field, f"gaze: {', '.join(names).replace('_', ' ')}"
