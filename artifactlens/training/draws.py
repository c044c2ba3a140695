"""What is put into a copy: artifacts of each kind, drawn at random.

Each draw takes the scene (the sites, then the electrodes of the reference) and a generator,
and returns potentials per kind. Sizes go from just visible to swamping, logarithmically.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from artifactlens.simulation import electrode, eye, gaze, lids, mains, muscle
from artifactlens.simulation.scene import Scene, Simulated

Array = NDArray[np.float64]

ABSENT_SHARE = 0.4
"""Of the copies have none of a kind, so that its absence is learnt too."""


class Draw(NamedTuple):
    """Where and with what a copy is made: its line frequency, its reference electrodes."""

    scene: Scene
    rng: np.random.Generator
    line: float
    n_refs: int

    def either(self, share: float) -> bool:
        """True in ``share`` of the draws."""
        return bool(self.rng.random() < share)

    def between(self, low: float, high: float) -> float:
        """A size or duration, logarithmically between both."""
        return float(np.exp(self.rng.uniform(np.log(low), np.log(high))))

    def moments(self, per_minute: float) -> list[float]:
        """Onsets in seconds, at random, one at least."""
        length = self.scene.length
        count = max(1, self.rng.poisson(per_minute * length / 60))
        return sorted(
            float(at) for at in self.rng.uniform(0.5, max(length - 2.5, 0.6), count)
        )

    def stretch(self, shortest: float, longest: float) -> tuple[float, float]:
        """Onset and duration in seconds of something that is there once."""
        duration = min(float(self.rng.uniform(shortest, longest)), self.scene.length - 0.2)
        return float(self.rng.uniform(0, self.scene.length - duration)), duration


def draw_artifacts(draw: Draw, kinds: tuple[str, ...]) -> dict[str, Array]:
    """Potentials of each kind at all sites and reference electrodes, microvolt."""
    scene = draw.scene
    fields = {kind: np.zeros((scene.n_sites, scene.n_samples)) for kind in kinds}
    for kind in kinds:
        if draw.either(ABSENT_SHARE):
            continue
        for part in _DRAWS[kind](draw):
            # A forced blink brings muscle along; where muscle is not told apart, it stays out.
            own = part.truth[0].kind if part.truth else kind
            if own in fields:
                fields[own] += part.potentials
    return fields


def _eyes(draw: Draw) -> list[Simulated]:
    scene, rng = draw.scene, draw.rng
    pair = eye.draw_eyes(rng)
    parts: list[Simulated] = []
    if draw.either(0.6):
        onsets = eye.blink_onsets(
            scene.length, rng, per_minute=float(rng.choice([4, 8, 15, 30]))
        )
        size = draw.between(50, 220)
        parts.append(
            eye.blinks(
                scene, rng, onsets, amplitude_uv=(0.7 * size, 1.4 * size),
                duration=(0.18, 0.5), pair=pair,
                eyes=str(rng.choice(["both", "left", "right"], p=[0.96, 0.02, 0.02])),
            )
        )  # fmt: skip
    parts += [
        lids.styled_blinks(scene, rng, style, draw.moments(rng.choice([2, 5])), pair=pair)
        for style in ("half", "slow")
        if draw.either(0.2)
    ]
    if draw.either(0.2):
        parts += [lids.blink_train(scene, rng, at, pair=pair) for at in draw.moments(2)]
    if draw.either(0.2):
        parts += [
            lids.closure(
                scene, rng, at, float(rng.uniform(1, 5)),
                amplitude_uv=draw.between(60, 200),
                roll_deg=float(rng.uniform(5, 15)) if draw.either(0.15) else 0.0, pair=pair,
            )
            for at in draw.moments(2)
        ]  # fmt: skip
    if draw.either(0.1):
        parts += lids.forced_blinks(
            scene, rng, draw.moments(3), rms_uv=draw.between(6, 40), pair=pair
        )
    if draw.either(0.5):
        for onset in draw.moments(float(rng.choice([3, 6, 12]))):
            heading = rng.uniform(0, 2 * np.pi)
            if draw.either(0.5):
                heading = rng.choice([0.0, np.pi]) + rng.normal(0, 0.15)
            degrees = float(rng.uniform(6, 35))
            parts.append(
                eye.saccade(
                    scene, onset, right_deg=degrees * np.cos(heading),
                    up_deg=degrees * np.sin(heading), plateau=draw.between(0.2, 3.0),
                    pair=pair,
                )
            )  # fmt: skip
    for name, make in gaze.GAZE_SEQUENCES.items():
        if draw.either(0.15 if name in ("scan", "reading") else 0.1):
            parts.append(make(scene, rng, *draw.stretch(4, 20), pair=pair))
    if draw.either(0.2):
        parts.append(
            eye.roving(
                scene, rng, *draw.stretch(6, 25), size_deg=float(rng.uniform(12, 35)),
                pair=pair,
            )
        )  # fmt: skip
    if draw.either(0.15):
        parts.append(
            eye.flutter(
                scene, rng, *draw.stretch(1, 5), rate_hz=float(rng.uniform(3, 9)),
                amplitude_uv=draw.between(40, 120), pair=pair,
            )
        )  # fmt: skip
    return parts


SOFTENED = (0.45, 1.15)
"""Range of a factor on a muscle's frequencies: tissue between muscle and electrode takes
the fast part. In the one natural recording at hand temporal muscle peaks below 30 Hz, not
at the 40 to 80 Hz published for electrodes over the muscle."""


def _muscle(draw: Draw, name: str) -> muscle.Muscle:
    drawn = muscle.draw_muscle(draw.rng, name)
    factor = draw.between(*SOFTENED)
    return drawn._replace(low_hz=factor * drawn.low_hz, high_hz=factor * drawn.high_hz)


_EFFORTS = {"burst": 0.52, "tonic": 0.25, "chewing": 0.1, "shivering": 0.08, "tremor": 0.05}


def _muscles(draw: Draw) -> list[Simulated]:
    scene, rng = draw.scene, draw.rng
    parts: list[Simulated] = []
    for _ in range(int(rng.integers(1, 4))):
        name = str(rng.choice(list(muscle.MUSCLES), p=[0.3, 0.4, 0.15, 0.15]))
        sides = [["left", "right"], ["left"], ["right"]][
            int(rng.choice(3, p=[0.5, 0.25, 0.25]))
        ]
        effort = str(rng.choice(list(_EFFORTS), p=list(_EFFORTS.values())))
        size = draw.between(2.5, 80.0)
        if effort == "burst":
            style = rng.choice(["twitch", "burst", "long"], p=[0.25, 0.5, 0.25])
            low, high, rate = {
                "twitch": (0.06, 0.25, 5.0),
                "burst": (0.3, 4.0, 4.0),
                "long": (8.0, scene.length, 0.5),
            }[str(style)]
            spans = [(at, draw.between(low, high)) for at in draw.moments(rate)]
        else:
            spans = [draw.stretch(*((20, 62) if effort == "tonic" else (3, 20)))]
            size = (
                draw.between(2.0, 8.0) if effort == "tonic" and draw.either(0.8) else size
            )
        source = _muscle(draw, name)
        names = ("masseter", "temporalis") if effort == "chewing" else (name,)
        parts += [
            muscle.contraction(
                scene, rng, one, onset, duration, rms_uv=size * float(rng.uniform(0.6, 1.5)),
                sides=sides, units=int(rng.choice([2, 4, 10, 20])), effort=effort,
                muscle=source if one == name else _muscle(draw, one),
            )
            for onset, duration in spans
            for one in names
        ]  # fmt: skip
    if draw.either(0.1):
        parts.append(
            muscle.single_unit(
                scene, rng, "temporalis", *draw.stretch(3, 30), peak_uv=draw.between(8, 30),
                side=str(rng.choice(["left", "right"])),
                muscle=_muscle(draw, "temporalis"),
            )
        )  # fmt: skip
    return parts


def _pops(draw: Draw) -> list[Simulated]:
    scene, rng, n_refs = draw.scene, draw.rng, draw.n_refs
    parts: list[Simulated] = []
    n_rows = scene.n_sites
    for _ in range(int(rng.integers(1, 5))):
        linked = draw.either(0.15)
        row = n_rows - 1 if linked else int(rng.integers(n_rows - n_refs))
        if draw.either(0.1):
            made = electrode.loose_lead(
                scene, rng, row, *draw.stretch(5, 20), size_uv=draw.between(100, 500),
                mains_hz=None,
            )  # fmt: skip
        else:
            if draw.either(0.25):
                onsets = electrode.unstable_run(rng, *draw.stretch(3, 15))
            else:
                onsets = draw.moments(float(rng.choice([1, 3, 6])))
            made = electrode.pops(scene, rng, row, onsets, forms=electrode.POP_FORMS)
        if linked:
            # A linked reference takes the step with all its electrodes.
            made.potentials[n_rows - n_refs :] = made.potentials[row]
        parts.append(made)
    return parts


def _mains(draw: Draw) -> list[Simulated]:
    scene, rng, n_refs = draw.scene, draw.rng, draw.n_refs
    n_rows, length = scene.n_sites, scene.length
    where = str(rng.choice(["one", "few", "all", "reference"], p=[0.4, 0.3, 0.2, 0.1]))
    rows: list[int] | None = None
    if where == "one":
        rows = [int(rng.integers(n_rows - n_refs))]
    elif where == "few":
        count = int(rng.integers(2, max(3, n_rows // 2)))
        rows = [int(row) for row in rng.choice(n_rows - n_refs, count, replace=False)]
    elif where == "reference":
        rows = list(range(n_rows - n_refs, n_rows))
    onset = 0.0 if draw.either(0.5) else float(rng.uniform(0, length / 2))
    made = mains.hum(
        scene, rng, size_uv=draw.between(1.0, 60.0), nominal_hz=draw.line, rows=rows,
        common=where == "reference", onset=onset, duration=float(rng.uniform(5, length)),
        wander=float(rng.choice([0.001, 0.008])),
    )  # fmt: skip
    return [made]


_DRAWS: dict[str, Callable[[Draw], list[Simulated]]] = {
    "eye": _eyes,
    "muscle": _muscles,
    "pop": _pops,
    "mains": _mains,
}
