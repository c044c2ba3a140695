"""Blinks, saccades, roving eye movements and lid flutter.

The eye is a dipole, cornea positive. Two sources in the sphere of ``head`` stand for it:

*lid*: a blink is the lid sliding over the cornea, not the globe rolling up; the forehead
gets the positivity of the cornea from just below it (Lins et al. 1993; Picton et al. 2000).

*globe*: a saccade turns the corneo-retinal dipole; its map is that of the difference of the
two dipole vectors. Only the part across the line of sight is kept: left and right saccades
are measured to be equal and inverted (Lins et al. 1993), and one sphere, which has no
orbit, would make too much of the small change along it.

Depth and direction of both were tuned, nothing else but the breadth of the lid, until the
maps against linked ears gave the published numbers: transmission from the vertical EOG
(supra- minus infraorbital lead) to Cz 9.3 % for a blink and 13.9 % for a vertical movement
(13 subjects; Corby & Kopell 1972; citation and reference from memory), F3/F4 at 30 to 50 %
of Fp1/Fp2 for a blink (from memory). The lid is two dipoles in each eye, the outer one
weaker; its breadth was set to give F7/F8 40 to 50 % of Fp1/Fp2, after one recorded adult
(eegmmidb S001: 38 and 40 % in the mean of ten large blinks against T9/T10; there one dipole
gave 28 %, two give 44 %, correlation of the maps over 64 sites .93 and .94), who is
therefore no independent witness of it.
The model gives 9.3 %, 13.9 %, 36 % and 45 %, and
the tests hold it there, on the assumption that the orbital leads lie 14 degrees (2.4 cm)
above and below the globe. What one sphere does not give: depths are effective, not the
anatomy. Heads differ: :func:`draw_eyes` draws other eyes for each copy.
"""

from __future__ import annotations

from typing import TYPE_CHECKING, NamedTuple

import numpy as np

from artifactlens.simulation.head import HEAD_RADIUS, direction, lead_field
from artifactlens.simulation.scene import Scene, Simulated, ease

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import ArrayLike, NDArray


class EyeSource(NamedTuple):
    """Degrees from the midline, degrees above the level, share of the radius."""

    azimuth_deg: float
    elevation_deg: float
    depth: float


class EyePair(NamedTuple):
    """Sources of the eyes of one person, given for the right eye.

    ``lid`` is the inner dipole of the lid; the outer lies ``LID_BREADTH_DEG`` further out.
    ``lid_tilt_deg`` is the direction of both: degrees upwards from straight ahead.
    ``globe_tilt_deg`` is the direction in which looking up moves the dipole, likewise.
    ``right_share`` is the strength of the right eye, the left having 2 less that.
    """

    lid: EyeSource
    lid_tilt_deg: float
    globe: EyeSource
    globe_tilt_deg: float
    right_share: float = 1.0


TYPICAL_EYES = EyePair(
    EyeSource(25.0, -23.0, 0.88), 25.0, EyeSource(26.0, -25.0, 0.781), 70.0
)
LID_BREADTH_DEG, LID_OUTER_SHARE, LID_FAN = 20.0, 0.3, 0.25
"""Outer dipole of the lid: how much further out, how strong; both point outwards by a share
``LID_FAN`` of their azimuth, as the lid is curved."""

UV_PER_DEGREE = 3.5
"""Potential at Fp1/Fp2 against the ears for one degree of upward gaze, microvolt: 50 to
100 microvolt for looking up by 14 to 29 degrees."""

_SIDES = {"left": (-1,), "right": (1,), "both": (-1, 1)}
_POLES = direction([-16.5, 16.5], -3.6)
_EARS = direction([-95.8, 95.8], -37.7)
_LEAD_DEG = 14.0
SPIKE_UV, SPIKE_S, SPIKE_LEAD_S = 10.0, 0.03, 0.01
JUMP_S, JUMP_S_PER_DEGREE = 0.021, 0.0022
"""A saccade takes 21 ms and 2.2 ms for each degree (Carpenter 1988, from memory)."""


def orbital_leads(side: str) -> NDArray[np.float64]:
    """Places (metre) of the supra- and the infraorbital lead of "left" or "right"."""
    height = TYPICAL_EYES.globe.elevation_deg + np.array([_LEAD_DEG, -_LEAD_DEG])
    return HEAD_RADIUS * direction(_SIDES[side][0] * TYPICAL_EYES.globe.azimuth_deg, height)


def draw_eyes(rng: np.random.Generator, jitter: float = 1.0) -> EyePair:
    """Eyes of another person: sources scattered about those of ``TYPICAL_EYES``.

    Standard deviations at ``jitter`` 1: 1.2 degrees of place, 1 % of depth, 4 degrees of
    direction, 6 % between the eyes. Our own choice: with them the published numbers of
    ``TYPICAL_EYES`` are the middle of a range that a test states.
    """

    def moved(source: EyeSource) -> EyeSource:
        turn, lift = 1.2 * jitter * rng.standard_normal(2)
        depth = source.depth * (1 + 0.01 * jitter * rng.standard_normal())
        return EyeSource(
            source.azimuth_deg + turn, source.elevation_deg + lift, min(float(depth), 0.93)
        )

    return EyePair(
        moved(TYPICAL_EYES.lid),
        TYPICAL_EYES.lid_tilt_deg + 4.0 * jitter * float(rng.standard_normal()),
        moved(TYPICAL_EYES.globe),
        TYPICAL_EYES.globe_tilt_deg + 4.0 * jitter * float(rng.standard_normal()),
        float(np.clip(1 + 0.06 * jitter * rng.standard_normal(), 0.5, 1.5)),
    )


def _dipoles(
    sites: ArrayLike, source: EyeSource, eyes: str, pair: EyePair
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Lead field (n_sites, n_eyes, 3), each eye by its strength, and azimuths (n_eyes,)."""
    sides = np.array(_SIDES[eyes])
    azimuths = source.azimuth_deg * sides
    places = source.depth * HEAD_RADIUS * direction(azimuths, source.elevation_deg)
    strength = 1 + (pair.right_share - 1) * sides
    return lead_field(sites, places) * strength[:, None], azimuths


def _upwards(tilt_deg: float) -> NDArray[np.float64]:
    tilt = np.radians(tilt_deg)
    return np.array([0.0, np.cos(tilt), np.sin(tilt)])


def _lid_field(sites: ArrayLike, eyes: str, pair: EyePair) -> NDArray[np.float64]:
    field = np.zeros(len(np.asarray(sites)))
    for further, share in ((0.0, 1.0), (LID_BREADTH_DEG, LID_OUTER_SHARE)):
        part = pair.lid._replace(azimuth_deg=pair.lid.azimuth_deg + further)
        seen, azimuths = _dipoles(sites, part, eyes, pair)
        moments = share * direction(LID_FAN * azimuths, pair.lid_tilt_deg)
        field += np.einsum("sed,ed->s", seen, moments)
    return field


def _globe_field(sites: ArrayLike, eyes: str, pair: EyePair) -> NDArray[np.float64]:
    """Potential of gaze to the right and upwards, shape (n_sites, 2)."""
    axes = np.stack([[1.0, 0.0, 0.0], _upwards(pair.globe_tilt_deg)], axis=1)
    return np.asarray(_dipoles(sites, pair.globe, eyes, pair)[0].sum(axis=1) @ axes)


def blink_map(
    sites: ArrayLike, eyes: str = "both", pair: EyePair = TYPICAL_EYES
) -> NDArray[np.float64]:
    """Map of a blink: 1 is what Fp1/Fp2 show against the ears. Shape (n_sites,)."""
    poles, ears = (_lid_field(places, "both", pair).mean() for places in (_POLES, _EARS))
    return np.asarray(_lid_field(sites, eyes, pair) / (poles - ears))


def gaze_potentials(
    sites: ArrayLike,
    right_deg: ArrayLike,
    up_deg: ArrayLike,
    eyes: str = "both",
    pair: EyePair = TYPICAL_EYES,
) -> NDArray[np.float64]:
    """Potentials of gaze away from straight ahead, microvolt, shape (n_sites, n_samples).

    ``right_deg`` and ``up_deg`` (n_samples,): to the person's right and upwards; both at
    once is an oblique gaze.
    """
    right, up = np.radians(np.atleast_1d(right_deg)), np.radians(np.atleast_1d(up_deg))
    across = np.stack([np.sin(right) * np.cos(up), np.sin(up)])
    poles, ears = (
        _globe_field(places, "both", pair)[:, 1].mean() for places in (_POLES, _EARS)
    )
    scale = UV_PER_DEGREE / np.radians(1.0) / (poles - ears)
    return np.asarray(scale * _globe_field(sites, eyes, pair) @ across)


def blink_wave(
    time: NDArray[np.float64], onset: float, duration: float = 0.3
) -> NDArray[np.float64]:
    """Lid going down in the first third of ``duration``, up again in the rest; peak 1."""
    since = (time - onset) / duration
    return np.asarray(ease(since / 0.34) - ease((since - 0.34) / 0.66))


def saccade_wave(
    time: NDArray[np.float64], onset: float, plateau: float, size_deg: float
) -> NDArray[np.float64]:
    """Gaze that jumps at ``onset``, stays and jumps back ``plateau`` seconds later, 0 to 1.

    A jump lasts as ``JUMP_S`` says.
    """
    jump = JUMP_S + JUMP_S_PER_DEGREE * abs(size_deg)
    since = time - onset
    return np.asarray(ease(since / jump) - ease((since - plateau) / jump))


def spike_potential(
    scene: Scene, onset: float, towards: float, size_uv: float = SPIKE_UV
) -> NDArray[np.float64]:
    """Saccadic spike at the start of a saccade to the right (``towards`` 1) or left (-1).

    30 ms (20 to 40 ms at F7/F8, from memory), of the outer muscle of the eye on that side,
    negative there (sign and size from memory): ``size_uv`` close to F7 or F8.

    Returns
    -------
    array, shape (n_sites, n_samples), microvolt
    """
    wave = scene.gate(onset - SPIKE_LEAD_S, SPIKE_S, SPIKE_S / 2)
    return size_uv * np.outer(spike_map(scene.sites, towards), wave)


def spike_map(sites: ArrayLike, towards: float) -> NDArray[np.float64]:
    """Map of the saccadic spike, -1 close to F8 (``towards`` 1) or F7, shape (n_sites,)."""
    outward = direction([towards * 40.0], -18.0)
    source = 0.88 * HEAD_RADIUS * outward
    near = direction([towards * 52.0], -8.0)
    here, there = (
        lead_field(places, source)[:, 0] @ outward[0] for places in (near, sites)
    )
    return np.asarray(-there / here[0])


def blinks(
    scene: Scene,
    rng: np.random.Generator,
    onsets: Sequence[float],
    *,
    amplitude_uv: tuple[float, float] = (100.0, 300.0),
    duration: tuple[float, float] = (0.2, 0.4),
    eyes: str = "both",
    pair: EyePair = TYPICAL_EYES,
) -> Simulated:
    """Blinks at ``onsets`` (s), each of a size (at Fp1/Fp2) and duration of its own."""
    wave = np.zeros(scene.n_samples)
    spans = []
    for onset in onsets:
        length = float(rng.uniform(*duration))
        wave += rng.uniform(*amplitude_uv) * blink_wave(scene.time, onset, length)
        spans.append(("blink", float(onset), length))
    return of_lids(scene, wave, spans, eyes, pair)


def of_lids(
    scene: Scene,
    wave: NDArray[np.float64],
    spans: Sequence[tuple[str, float, float]],
    eyes: str = "both",
    pair: EyePair = TYPICAL_EYES,
) -> Simulated:
    """Lids that follow ``wave`` (n_samples,), microvolt at Fp1/Fp2 against the ears."""
    lid = blink_map(scene.sites, eyes, pair).astype(np.float32)
    return scene.simulated("eye", np.outer(lid, wave.astype(np.float32)), spans)


def blink_onsets(
    length: float, rng: np.random.Generator, per_minute: float = 15.0
) -> list[float]:
    """Times of natural blinks in ``length`` seconds: at random, never closer than 0.5 s."""
    mean_gap = max(60.0 / per_minute - 0.5, 0.05)
    count = int(2 * length / (mean_gap + 0.5)) + 20
    times = np.cumsum(0.5 + rng.exponential(mean_gap, size=count))
    return [float(time) for time in times[times < length - 0.5]]


def saccade(
    scene: Scene,
    onset: float,
    *,
    right_deg: float = 0.0,
    up_deg: float = 0.0,
    plateau: float = 1.0,
    eyes: str = "both",
    pair: EyePair = TYPICAL_EYES,
) -> Simulated:
    """Gaze to the right (left: negative), up (down) or oblique, held, and back."""
    size = float(np.hypot(right_deg, up_deg))
    lasts = plateau + JUMP_S + JUMP_S_PER_DEGREE * size
    stretch = scene.stretch(onset - SPIKE_LEAD_S, lasts + SPIKE_LEAD_S)
    time = stretch.time - SPIKE_LEAD_S
    wave = saccade_wave(time, 0.0, plateau, size)
    field = gaze_potentials(scene.sites, right_deg * wave, up_deg * wave, eyes, pair)
    if right_deg:
        towards = float(np.sign(right_deg))
        for start, side in ((0.0, towards), (plateau, -towards)):
            since = time - start + SPIKE_LEAD_S
            bell = ease(np.minimum(since, SPIKE_S - since) / (SPIKE_S / 2))
            field += SPIKE_UV * np.outer(spike_map(scene.sites, side), bell)
    return stretch.simulated("eye", field, [(_heading(right_deg, up_deg), onset, lasts)])


def _heading(right_deg: float, up_deg: float) -> str:
    words = ["gaze"]
    if up_deg:
        words.append("up" if up_deg > 0 else "down")
    if right_deg:
        words.append("right" if right_deg > 0 else "left")
    return " ".join(words)


def roving(
    scene: Scene,
    rng: np.random.Generator,
    onset: float,
    duration: float,
    *,
    size_deg: float = 24.0,
    pair: EyePair = TYPICAL_EYES,
) -> Simulated:
    """Slow lateral eye movements of drowsiness: a sway of 2 to 5 s, never quite regular."""
    stretch = scene.stretch(onset, duration)
    turns = 2 * np.pi * rng.uniform(0.2, 0.5) * scene.time[stretch.samples]
    sway = np.sin(turns + rng.uniform(0, 2 * np.pi))
    sway += 0.4 * np.sin(0.63 * turns + rng.uniform(0, 2 * np.pi))
    track = size_deg / 1.4 * sway * stretch.gate(1.0)
    field = gaze_potentials(scene.sites, track, np.zeros(len(track)), pair=pair)
    return stretch.simulated("eye", field, "slow roving eyes")


def flutter(
    scene: Scene,
    rng: np.random.Generator,
    onset: float,
    duration: float,
    *,
    rate_hz: float = 6.0,
    amplitude_uv: float = 60.0,
    pair: EyePair = TYPICAL_EYES,
) -> Simulated:
    """Lid flutter: small quick lid movements at 4 to 10 Hz, size and pace varying."""
    knots = np.arange(0.0, scene.length + 1.0, 0.25)
    pace = rate_hz * np.interp(
        scene.time, knots, 1 + 0.12 * rng.standard_normal(len(knots))
    )
    sizes = np.clip(1 + 0.3 * rng.standard_normal(len(knots)), 0.3, 1.7)
    wave = np.sin(np.pi * np.cumsum(pace) / scene.sfreq) ** 2
    wave *= amplitude_uv * np.interp(scene.time, knots, sizes)
    wave *= scene.gate(onset, duration, min(0.2, duration / 3))
    return of_lids(scene, wave, [("lid flutter", onset, duration)], pair=pair)
