"""What lids do beside single natural blinks: trains, half and slow blinks, long closures.

Sizes are at Fp1/Fp2 against the ears. Sizes and durations are common practice.
"""

from __future__ import annotations

from typing import TYPE_CHECKING, NamedTuple

import numpy as np

from artifactlens.simulation.electrode import high_pass_first_order
from artifactlens.simulation.eye import (
    TYPICAL_EYES,
    EyePair,
    blinks,
    gaze_potentials,
    of_lids,
)
from artifactlens.simulation.muscle import contraction
from artifactlens.simulation.scene import Scene, Simulated, ease

if TYPE_CHECKING:
    from collections.abc import Sequence


class BlinkStyle(NamedTuple):
    """Ranges of a kind of blink: microvolt and seconds."""

    amplitude_uv: tuple[float, float]
    duration: tuple[float, float]


BLINK_STYLES: dict[str, BlinkStyle] = {
    "natural": BlinkStyle((100.0, 300.0), (0.2, 0.4)),
    "half": BlinkStyle((30.0, 60.0), (0.15, 0.3)),
    "slow": BlinkStyle((50.0, 200.0), (0.5, 1.2)),
    "forced": BlinkStyle((150.0, 450.0), (0.3, 0.8)),
}


def styled_blinks(
    scene: Scene,
    rng: np.random.Generator,
    style: str,
    onsets: Sequence[float],
    *,
    pair: EyePair = TYPICAL_EYES,
) -> Simulated:
    """Blinks at ``onsets`` (s) in one of ``BLINK_STYLES``.

    "forced" is the lids only; :func:`forced_blinks` adds what comes with force.
    """
    amplitude_uv, duration = BLINK_STYLES[style]
    return blinks(
        scene, rng, onsets, amplitude_uv=amplitude_uv, duration=duration, pair=pair
    )


def blink_train(
    scene: Scene,
    rng: np.random.Generator,
    onset: float,
    *,
    style: str = "natural",
    pair: EyePair = TYPICAL_EYES,
) -> Simulated:
    """Two to six blinks within 2 s, of like size; later ones may begin half open."""
    count = int(rng.integers(2, 7))
    amplitude_uv, duration = BLINK_STYLES[style]
    size = float(rng.uniform(*amplitude_uv))
    lasts = min(float(rng.uniform(*duration)), 1.8 / count)
    gaps = rng.uniform(lasts, max(1.9 / count, 1.05 * lasts), size=count - 1)
    onsets = onset + np.concatenate([[0.0], np.cumsum(gaps)])
    return blinks(
        scene, rng, [float(at) for at in onsets],
        amplitude_uv=(0.8 * size, 1.2 * size), duration=(0.85 * lasts, lasts), pair=pair,
    )  # fmt: skip


def closure(
    scene: Scene,
    rng: np.random.Generator,
    onset: float,
    held: float,
    *,
    amplitude_uv: float = 120.0,
    roll_deg: float = 0.0,
    high_pass_hz: float | None = None,
    pair: EyePair = TYPICAL_EYES,
) -> Simulated:
    """Eyes that close, stay closed for ``held`` seconds, and open again.

    A step up at the poles and a step down: what a reader sees decay between is the
    recorder's high-pass.

    Parameters
    ----------
    scene : Scene
        Electrodes and time.
    rng : numpy Generator
        Where chance comes from.
    onset, held : float
        Seconds.
    amplitude_uv : float
        Height of the step at Fp1/Fp2.
    roll_deg : float
        Upward turn of the globes while closed, degrees; ordinary closure has none.
    high_pass_hz : float or None
        None leaves plain steps, for a recorder that is applied afterwards. Give a cut-off
        in hertz to add to a recording that has been through its recorder already.
    pair : EyePair
        Whose eyes.
    """
    closing, opening = rng.uniform(0.08, 0.25), rng.uniform(0.12, 0.4)
    since = scene.time - onset
    wave = ease(since / closing) - ease((since - held) / opening)
    spans = [("eyes closed for a while", onset, held + opening)]
    if high_pass_hz is not None:
        wave = high_pass_first_order(wave, high_pass_hz, scene.sfreq)
    made = of_lids(scene, amplitude_uv * wave, spans, pair=pair)
    if roll_deg:
        up = roll_deg * wave
        rolled = gaze_potentials(scene.sites, np.zeros_like(up), up, pair=pair)
        made = scene.simulated("eye", made.potentials + rolled, spans)
    return made


def forced_blinks(
    scene: Scene,
    rng: np.random.Generator,
    onsets: Sequence[float],
    *,
    rms_uv: float = 15.0,
    pair: EyePair = TYPICAL_EYES,
) -> tuple[Simulated, Simulated]:
    """Eyes squeezed shut: large blinks, globes rolling up a little, and the frontalis.

    Only forced blinks roll the globe up. Returns what is of the eye and what is of muscle,
    apart; ``rms_uv`` is the size of the muscle.
    """
    of_eye = styled_blinks(scene, rng, "forced", onsets, pair=pair)
    field = of_eye.potentials
    of_muscle = scene.simulated("muscle", np.zeros_like(field), [])
    for happening in of_eye.truth:
        stretch = scene.stretch(happening.onset, happening.duration)
        up = rng.uniform(2.0, 10.0) * stretch.gate(0.3 * happening.duration)
        field[:, stretch.samples] += gaze_potentials(
            scene.sites, np.zeros_like(up), up, pair=pair
        )
        of_muscle += contraction(
            scene, rng, "frontalis", happening.onset, happening.duration,
            rms_uv=rms_uv * float(rng.uniform(0.5, 1.5)),
        )  # fmt: skip
    spans = [("forced blink", part.onset, part.duration) for part in of_eye.truth]
    return scene.simulated("eye", field, spans), of_muscle
