"""The electrocardiogram in the scalp: an artifact of none of the four kinds."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from artifactlens.simulation.head import HEAD_RADIUS, direction, lead_field

if TYPE_CHECKING:
    from numpy.typing import ArrayLike, NDArray

    from artifactlens.simulation.scene import Scene, Simulated

# Share of the R wave, seconds from it, standard deviation in seconds: P, Q, R, S, T (from
# memory; the T wave reaches the head hardly less than the R wave in some people).
_WAVES = (
    (0.08, -0.16, 0.022),
    (-0.12, -0.03, 0.009),
    (1.0, 0.0, 0.011),
    (-0.25, 0.028, 0.010),
    (0.18, 0.26, 0.045),
)


def heart_map(sites: ArrayLike, turn_deg: float = 0.0) -> NDArray[np.float64]:
    """Map of the heart's field, largest absolute value 1, shape (n_sites,).

    Current enters the head by the neck: a dipole low in the sphere, lying across, from the
    right to the left and ``turn_deg`` towards the front. It is seen by all sites, smoothly,
    with opposite sign at the two sides.
    """
    turn = np.radians(turn_deg)
    moment = np.array([-np.cos(turn), np.sin(turn), 0.0])
    source = 0.8 * HEAD_RADIUS * direction(180.0, -70.0)
    field = lead_field(sites, source)[:, 0] @ moment
    return np.asarray(field / np.abs(field).max())


def heart(
    scene: Scene,
    rng: np.random.Generator,
    onset: float,
    duration: float,
    *,
    size_uv: float = 40.0,
    per_minute: float | None = None,
) -> Simulated:
    """Heart beats as the scalp shows them, of kind "other".

    Parameters
    ----------
    scene : Scene
        Electrodes and time.
    rng : numpy Generator
        Where chance comes from.
    onset, duration : float
        Seconds.
    size_uv : float
        R wave at the strongest electrode (an ear, where there is one), microvolt.
    per_minute : float or None
        Rate; None draws 60 to 90. Beats vary by 4 % (rms).
    """
    stretch = scene.stretch(onset, duration)
    beat = 60.0 / (rng.uniform(60.0, 90.0) if per_minute is None else per_minute)
    count = int(1.3 * duration / beat) + 3
    gaps = beat * np.maximum(1 + 0.04 * rng.standard_normal(count), 0.7)
    beats = np.cumsum(gaps) - rng.uniform(0, 1) * beat
    # Each sample belongs to the last beat that it is not more than a P wave ahead of.
    last = np.searchsorted(beats - 0.25, stretch.time, side="right") - 1
    since = stretch.time - beats[np.clip(last, 0, count - 1)]
    wave = sum(
        share * np.exp(-0.5 * ((since - at) / width) ** 2) for share, at, width in _WAVES
    )
    sign = rng.choice([-1.0, 1.0], p=[0.2, 0.8])
    site_map = heart_map(scene.sites, rng.uniform(-40.0, 40.0))
    ramp = stretch.gate(min(0.2, duration / 3))
    field = np.outer(sign * size_uv * site_map, wave * ramp)
    return stretch.simulated("other", field, "heart beats")
