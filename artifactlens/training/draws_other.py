"""What is put into a copy and is none of the four kinds: patterns of the brain, and others.

They are negatives of every kind. A wandering electrode or the heart is artifact, but not of
a kind that is learnt; to call it an eye movement or a pop would be wrong.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from artifactlens.simulation import electrode, heart
from artifactlens.simulation.lookalikes import LOOK_ALIKES
from artifactlens.training.draws import Draw

Happenings = list[tuple[str, float, float]]

YOUNG = {
    "infant_background": 0.4,
    "childhood_slowing": 0.3,
    "posterior_slow_waves": 0.1,
    "drowsy_rhythm": 0.1,
    "hypnagogic_bursts": 0.1,
}
"""Backgrounds of the young and the drowsy, which fill much of a copy."""

YOUNG_SHARE, PATTERN_SHARE, SWAY_SHARE, HEART_SHARE = 0.25, 0.5, 0.15, 0.2

OFTEN = frozenset({"frontal_delta", "spike_and_wave", "slow_waves", "focal_spike"})
"""Drawn twice as often as the others: those most taken for artifact."""

LONG_SECONDS = 15.0
"""A pattern that may last longer is put in once."""


def draw_others(draw: Draw) -> tuple[NDArray[np.float64], Happenings]:
    """Potentials at all sites and reference electrodes, and what was put in when.

    Returns
    -------
    field : array, shape (n_sites, n_samples), microvolt
    happenings : list of (name, onset, end), seconds
    """
    scene, rng = draw.scene, draw.rng
    field = np.zeros((scene.n_sites, scene.n_samples))
    happenings: Happenings = []

    def put(name: str, onset: float, duration: float) -> None:
        pattern = LOOK_ALIKES[name]
        duration = min(duration, scene.length - onset - 0.1)
        if duration >= 0.1:
            size = float(rng.uniform(*pattern.amplitude_uv))
            np.add(
                field, pattern.make(scene, rng, onset, duration, size).potentials, out=field
            )
            happenings.append((name, onset, onset + duration))

    if draw.either(YOUNG_SHARE):
        name = str(rng.choice(list(YOUNG), p=list(YOUNG.values())))
        put(name, *draw.stretch(15, 60))
    if draw.either(PATTERN_SHARE):
        names = [name for name in LOOK_ALIKES if name not in YOUNG]
        weight = np.array([2.0 if name in OFTEN else 1.0 for name in names])
        chosen = rng.choice(
            names, int(rng.integers(1, 4)), replace=False, p=weight / weight.sum()
        )
        for name in chosen:
            shortest, longest = LOOK_ALIKES[str(name)].duration
            if longest > LONG_SECONDS:
                put(str(name), *draw.stretch(shortest, longest))
                continue
            for onset in draw.moments(4.0):
                put(str(name), onset, float(rng.uniform(shortest, longest)))
    if draw.either(SWAY_SHARE):
        row = int(rng.integers(scene.n_sites - draw.n_refs))
        onset, duration = draw.stretch(10, 60)
        made = electrode.sway(scene, rng, row, onset, duration, draw.between(50, 300))
        field += made.potentials
        happenings.append(("sway", onset, onset + duration))
    if draw.either(HEART_SHARE):
        size = float(rng.uniform(20, 60))
        field += heart.heart(scene, rng, 0.0, scene.length, size_uv=size).potentials
        # It is there all along: a second's own pattern would be lost under its name.
    return field, happenings
