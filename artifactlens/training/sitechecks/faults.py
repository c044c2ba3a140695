"""Electrode faults: what each does to a recording, at plain and at mild strength.

Sizes are our own choice of what a technologist sees at a glance (plain) and what shows on
a second look (mild); nothing here is measured on real faults.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import NamedTuple

import numpy as np

from artifactlens.simulation import electrode, mains
from artifactlens.training.sitechecks import patient
from artifactlens.training.sitechecks.bench import REFERENCE, Array, Bench


class Made(NamedTuple):
    """Channels (n_sites, n_samples) with a fault, its sites (most first) and its size."""

    channels: Array
    rows: tuple[int, ...]
    what: str


class Fault(NamedTuple):
    """Cause and sign in the words of the advice, and how it is made.

    ``cure`` is how it ends where it ends before the recording does: "handled" (hands at
    the electrode are seen), "unseen" (a cable, a device), or "" where it always stays.
    """

    cause: str
    sign: str
    make: Callable[[Bench], Made]
    cure: str = "handled"


Maker = Callable[[Bench, int], tuple[Array, str]]
"""From the row of an electrode: potentials at all electrodes, and the size in words."""


def pink_noise(bench: Bench, rms_uv: float) -> Array:
    """Noise whose power falls as 1/f from 0.3 Hz on, shape (n_samples,).

    ``rms_uv`` is its root mean square between 1 and 20 Hz, microvolt.
    """
    from scipy.fft import irfft, next_fast_len, rfft, rfftfreq

    n, sfreq = bench.scene.n_samples, bench.scene.sfreq
    padded = next_fast_len(n, real=True)
    freqs = rfftfreq(padded, 1 / sfreq)
    power = np.where(freqs >= 0.3, 1 / np.maximum(freqs, 0.3), 0.0)
    spectrum = rfft(bench.rng.standard_normal(padded)) * np.sqrt(power)
    band = np.where((freqs >= 1) & (freqs <= 20), spectrum, 0.0)
    scale = rms_uv / irfft(band, padded)[:n].std()
    return np.asarray(scale * irfft(spectrum, padded)[:n])


def handling(bench: Bench, rows: tuple[int, ...], onset: float, duration: float) -> Array:
    """What a hand at electrodes does: jumps, swings and noise; recorded, (n_sites, n)."""
    field = np.zeros((bench.scene.n_sites, bench.scene.n_samples))
    for row in rows:
        jumps = electrode.loose_lead(
            bench.scene, bench.rng, bench.electrodes(row)[0], onset, duration,
            size_uv=bench.between(150, 400), mains_hz=bench.line,
        ).potentials[bench.electrodes(row)[0]]  # fmt: skip
        rubbing = pink_noise(bench, bench.between(60, 150))
        gate = bench.scene.gate(onset, duration, 0.3)
        field += bench.at(row, gate * rubbing + jumps)
    return bench.recorded(field)


def _pops(bench: Bench, row: int) -> tuple[Array, str]:
    count = bench.count((6, 14), (3, 4))
    onsets = bench.moments(count)
    if bench.plain and bench.rng.random() < 0.3:
        lasts = min(8.0, bench.duration / 2)
        start = bench.span[0] + bench.rng.uniform(0, bench.duration - lasts)
        onsets = sorted([*onsets, *electrode.unstable_run(bench.rng, start, lasts)])
    sizes = [
        bench.size((80, 400), (40, 80)) * bench.rng.choice([-1.0, 1.0]) for _ in onsets
    ]
    own = bench.electrodes(row)[0]
    made = electrode.pops(
        bench.scene, bench.rng, own, onsets, sizes_uv=sizes, forms=electrode.POP_FORMS
    )
    largest = max(abs(size) for size in sizes)
    return (
        bench.at(row, made.potentials[own].astype(np.float64)),
        f"{len(onsets)} pops, the largest {largest:.0f} uV",
    )


def _noise(bench: Bench, row: int) -> tuple[Array, str]:
    size = bench.size((30, 60), (12, 20))
    wave = bench.weight * pink_noise(bench, size)
    return bench.at(row, wave), f"noise of {size:.0f} uV rms"


def _loose_lead(bench: Bench, row: int) -> tuple[Array, str]:
    own = bench.electrodes(row)[0]
    size = bench.size((200, 500), (60, 120))
    wave = np.zeros(bench.scene.n_samples)
    longest = 8.0 if bench.plain else 4.0
    onsets = bench.moments(bench.count((3, 5), (2, 2)), longest)
    for onset in onsets:
        lasts = float(bench.rng.uniform(longest / 2, longest))
        wave += electrode.loose_lead(
            bench.scene, bench.rng, own, onset, min(lasts, bench.span[1] - onset),
            size_uv=size, mains_hz=bench.line,
        ).potentials[own]  # fmt: skip
    return bench.at(row, wave), f"{len(onsets)} spells with jumps of about {size:.0f} uV"


def _sway(bench: Bench, row: int) -> tuple[Array, str]:
    size = bench.size((200, 500), (70, 90))
    made = electrode.sway(
        bench.scene, bench.rng, row, bench.span[0], bench.duration, size
    )  # fmt: skip
    return bench.at(row, made.potentials[row].astype(np.float64)), f"sways by {size:.0f} uV"


def _hum(bench: Bench, rows: list[int] | None, common: bool, size: float) -> Array:
    field = mains.hum(
        bench.scene, bench.rng, size_uv=size, nominal_hz=bench.line, rows=rows,
        common=common, onset=bench.span[0], duration=bench.duration,
    ).potentials  # fmt: skip
    return field.astype(np.float64)


def _reference_hum(bench: Bench, row: int) -> tuple[Array, str]:
    size = bench.size((15, 60), (5, 8))
    return _hum(bench, bench.electrodes(row), True, size), f"mains of {size:.0f} uV"


def _at_a_site(make: Maker) -> Callable[[Bench], Made]:
    def fault(bench: Bench) -> Made:
        (row,) = bench.some_sites(1)
        field, what = make(bench, row)
        return Made(bench.channels + bench.recorded(field), (row,), what)

    return fault


def _in_the_reference(make: Maker) -> Callable[[Bench], Made]:
    def fault(bench: Bench) -> Made:
        field, what = make(bench, REFERENCE)
        return Made(bench.channels + bench.recorded(field), (REFERENCE,), what)

    return fault


def _mains_at_few(bench: Bench) -> Made:
    rows = bench.some_sites(int(bench.rng.integers(1, 4)))
    size = bench.size((15, 60), (5, 8))
    field = _hum(bench, rows, False, size)
    rows.sort(key=lambda row: -float(np.abs(field[row]).max()))
    return Made(
        bench.channels + bench.recorded(field), tuple(rows), f"mains of {size:.0f} uV"
    )


def _mains_everywhere(bench: Bench) -> Made:
    size = bench.size((10, 60), (4, 8))
    field = _hum(bench, None, False, size)
    return Made(bench.channels + bench.recorded(field), (), f"mains up to {size:.0f} uV")


def _flat(bench: Bench) -> Made:
    (row,) = bench.some_sites(1)
    channels = bench.channels.copy()
    # The last bit of the converter toggles where the input itself is dead.
    bit = 0.0 if bench.plain else 0.05
    dead = bit * bench.rng.choice([-1.0, 1.0], bench.scene.n_samples)
    channels[row] = np.where(bench.during, dead, channels[row])
    return Made(channels, (row,), f"dead at {bit:g} uV")


def _clipped(bench: Bench) -> Made:
    """A site beyond the converter's range, which is the same for all and held by the others."""
    (row,) = bench.some_sites(1)
    channels = bench.channels.copy()
    rail = max(200.0, 1.1 * float(np.abs(channels).max()))
    if bench.plain and bench.rng.random() < 0.4:
        beyond = bench.rng.choice([-1.0, 1.0]) * bench.between(1.2, 3.0) * rail
        wave, manner = beyond * bench.during, "an offset"
    else:
        sway = electrode.sway(
            bench.scene, bench.rng, row, bench.span[0], bench.duration, 1.0
        )
        wave = bench.recorded(sway.potentials.astype(np.float64))[row] * bench.during
        wave *= bench.size((2.0, 4.0), (1.3, 1.6)) * rail / np.abs(wave).max()
        manner = "a sway"
    channels[row] = np.clip(channels[row] + wave, -rail, rail)
    return Made(channels, (row,), f"{manner} beyond {rail:.0f} uV")


def _bridge(bench: Bench) -> Made:
    """Gel joins two or three sites: each shows their mean and its own amplifier's noise."""
    first = int(bench.rng.choice([r for r in range(bench.n_sites) if bench.neighbours(r)]))
    rows = [first, int(bench.rng.choice(bench.neighbours(first)))]
    further = sorted({row for one in rows for row in bench.neighbours(one)} - set(rows))
    if further and bench.rng.random() < 0.2:
        rows.append(int(bench.rng.choice(further)))
    noise_uv = 0.3 if bench.plain else 1.0
    joined = bench.channels[rows].mean(axis=0) + noise_uv * bench.rng.standard_normal(
        (len(rows), bench.scene.n_samples)
    )
    channels = bench.channels.copy()
    channels[rows] += bench.weight * (joined - channels[rows])
    return Made(channels, tuple(rows), f"alike but for {noise_uv:g} uV")


def _swapped(bench: Bench) -> Made:
    """Two leads are plugged into each other's sockets: mirrored sites, or neighbours."""
    first = int(bench.rng.choice([r for r in range(bench.n_sites) if bench.neighbours(r)]))
    mirror = bench.scene.sites[first] * [-1, 1, 1]
    far = np.linalg.norm(bench.scene.sites[: bench.n_sites] - mirror, axis=1)
    other = int(np.argmin(far))
    manner = "mirrored"
    if bench.rng.random() < 0.5 or other == first or far[other] > 0.01:
        other, manner = int(bench.rng.choice(bench.neighbours(first))), "neighbours"
    channels = bench.channels.copy()
    channels[[first, other]] = channels[[other, first]]
    return Made(channels, (first, other), manner)


def _of_the_patient(make: patient.PatientMaker) -> Callable[[Bench], Made]:
    def fault(bench: Bench) -> Made:
        field, what = make(bench)
        return Made(bench.channels + bench.recorded(field), (), what)

    return fault


FAULTS: dict[str, Fault] = {
    "pops": Fault("site", "pops", _at_a_site(_pops)),
    "apart": Fault("site", "apart", _at_a_site(_noise)),
    "mains at few sites": Fault("site", "mains", _mains_at_few),
    "flat": Fault("site", "flat", _flat),
    "clipped": Fault("site", "clipped", _clipped),
    "drift": Fault("site", "drift", _at_a_site(_sway)),
    "loose lead": Fault("site", "loose lead", _at_a_site(_loose_lead)),
    "pops in the reference": Fault("reference", "pops", _in_the_reference(_pops)),
    "mains in the reference": Fault(
        "reference", "mains", _in_the_reference(_reference_hum)
    ),
    "noisy reference": Fault("reference", "apart", _in_the_reference(_noise)),
    "loose reference lead": Fault(
        "reference", "loose lead", _in_the_reference(_loose_lead)
    ),
    "mains everywhere": Fault("ground", "mains", _mains_everywhere, "unseen"),
    "bridge": Fault("bridge", "bridged", _bridge),
    "swapped labels": Fault("placement", "swapped", _swapped, ""),
    "muscle bursts": Fault("patient", "muscle", _of_the_patient(patient.muscle_bursts), ""),
    "tonic muscle": Fault("patient", "muscle", _of_the_patient(patient.tonic_muscle), ""),
    "blinks": Fault("patient", "eye", _of_the_patient(patient.blinks), ""),
    "gaze": Fault("patient", "eye", _of_the_patient(patient.gazes), ""),
}
