"""Simulated artifact over real background, in recording conditions drawn at random.

The conditions are drawn independently of what is put in, so that no filter, sampling rate
or montage can stand for a label: a background that was low-passed gets its artifact through
the same low-pass, or a plausible fast floor that reaches as high as the artifact does.
"""

from __future__ import annotations

import itertools
from dataclasses import dataclass
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from artifactlens.features.amplitude import STEP_SECONDS
from artifactlens.frames import Frame
from artifactlens.kinds import KIND_NAMES
from artifactlens.pipeline import measure_recording
from artifactlens.recording import Filters, Recording, from_array
from artifactlens.simulation import electrode, eye, mains, muscle
from artifactlens.simulation.floor import extend_above
from artifactlens.simulation.lookalikes import LOOK_ALIKES
from artifactlens.simulation.scene import Scene, Simulated
from artifactlens.sites import canonical_site, site_position
from artifactlens.training.examples import CLEAN, PRESENT, UNKNOWN, Examples, from_table

Array = NDArray[np.float64]


class Background(NamedTuple):
    """Real recording to put artifact into.

    ``potentials`` (n_sites, n_samples) microvolt against the common reference;
    ``reference_sites`` names whose mean that reference is. ``kept_to_hz`` is where its own
    low-pass lies (None: full bandwidth) and ``notch_hz`` its own notch.
    """

    person: str
    sites: tuple[str, ...]
    potentials: Array
    sfreq: float
    reference_sites: tuple[str, ...]
    kept_to_hz: float | None
    notch_hz: float | None
    origin: str


@dataclass(frozen=True, slots=True)
class Situation:
    """One draw of recording conditions; None where a filter is absent."""

    sfreq: float
    extended: bool
    low_pass: float | None
    notch: float | None
    line: float
    high_pass: float | None
    montage: str
    n_sites: int
    header: bool

    def words(self) -> str:
        """For tables by condition."""
        band = "as recorded" if not self.extended else f"low-pass {self.low_pass or 'none'}"
        return (
            f"{self.sfreq:g} Hz; {band}; notch {self.notch or 'none'}; {self.montage}; "
            f"{self.n_sites} sites"
        )


FEWER_SITES: dict[int, tuple[str, ...]] = {
    8: ("Fp1", "Fp2", "C3", "C4", "T7", "T8", "O1", "O2"),
    12: ("Fp1", "Fp2", "F7", "F8", "C3", "C4", "T7", "T8", "P3", "P4", "O1", "O2"),
    14: (
        "Fp1", "Fp2", "F7", "F8", "F3", "F4", "T7", "T8", "P7", "P8", "C3", "C4", "O1", "O2",
    ),
}  # fmt: skip

CHAINS = (
    ("Fp1", "F7", "T7", "P7", "O1"),
    ("Fp2", "F8", "T8", "P8", "O2"),
    ("Fp1", "F3", "C3", "P3", "O1"),
    ("Fp2", "F4", "C4", "P4", "O2"),
    ("Fz", "Cz", "Pz"),
)


def draw_situation(background: Background, rng: np.random.Generator) -> Situation:
    """Recording conditions that the background allows."""
    extended = background.kept_to_hz is None or rng.random() < 0.65
    rates = [
        rate for rate in (128.0, 200.0, 250.0, 256.0, 500.0) if rate <= background.sfreq
    ]
    sfreq = float(rng.choice(rates)) if rates else background.sfreq
    line = float(rng.choice([50.0, 60.0]))
    low_pass: float | None = None
    if extended:
        allowed = [cut for cut in (30.0, 40.0, 50.0, 70.0, 100.0) if cut < 0.4 * sfreq]
        low_pass = float(rng.choice(allowed)) if rng.random() < 0.45 else None
    notch = line if rng.random() < 0.3 else None
    n_channels = len(background.sites)
    montage = str(
        rng.choice(
            ["ears", "Cz", "average", "system", "bipolar"], p=[0.4, 0.15, 0.15, 0.15, 0.15]
        )
    )
    n_sites = n_channels
    if montage != "bipolar" and rng.random() < 0.3:
        n_sites = int(rng.choice(list(FEWER_SITES)))
    return Situation(
        sfreq=sfreq,
        extended=extended,
        low_pass=low_pass,
        notch=notch,
        line=line,
        high_pass=float(rng.choice([0.1, 0.16, 0.3, 0.5, 1.0])),
        montage=montage,
        n_sites=n_sites,
        header=bool(rng.random() < 0.5),
    )


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
    potentials = background.potentials[rows].astype(np.float64)
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

    recorder = _Recorder(situation, background, sfreq)
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
    data, labels, reference_row = _montage(situation, channels, names, rng)
    recording = _recording(data, labels, situation, recorder)
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
    return from_table(
        measured.table,
        truth,
        strength,
        person=background.person,
        origin=f"simulated: {background.origin}",
        condition=situation.words(),
        look_alike=_pattern_per_epoch(happenings, measured.grid.onset),
    )


class _Recorder:
    """The recorder's filters and sampling rate, the same for everything it records."""

    def __init__(self, situation: Situation, background: Background, sfreq: float) -> None:
        self.situation = situation
        self.sfreq = sfreq
        self.own_low = None if situation.extended else background.kept_to_hz
        self.own_notch = None if situation.extended else background.notch_hz

    def __call__(self, field: Array, *, own: bool = False) -> Array:
        """Filter and resample; ``own``: the background, which has its own filters already."""
        from scipy.fft import irfft, next_fast_len, rfft, rfftfreq
        from scipy.signal import resample_poly

        s = self.situation
        field = np.asarray(field, dtype=np.float64)
        n = field.shape[1]
        if s.high_pass:
            field = electrode.high_pass_first_order(field, s.high_pass, self.sfreq)
        padded = next_fast_len(n + int(self.sfreq), real=True)
        freqs = rfftfreq(padded, 1 / self.sfreq)
        gain = np.ones_like(freqs)
        low = s.low_pass
        if low is not None:
            gain /= np.sqrt(1 + (freqs / low) ** 8)
        notch = s.notch
        if not own:
            if self.own_low is not None:
                gain /= np.sqrt(1 + (freqs / (0.97 * self.own_low)) ** 40)
            notch = notch or self.own_notch
        if notch is not None:
            gain *= 1 - np.exp(-0.5 * ((freqs - notch) / 1.2) ** 2)
        field = irfft(rfft(field, padded, axis=1) * gain, padded, axis=1)[:, :n]
        if s.sfreq != self.sfreq:
            up, down = _ratio(s.sfreq, self.sfreq)
            field = resample_poly(field, up, down, axis=1)
        return np.asarray(field)


def _ratio(new: float, old: float) -> tuple[int, int]:
    from math import gcd

    common = gcd(round(new), round(old))
    return round(new) // common, round(old) // common


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


def _montage(
    situation: Situation, channels: Array, names: tuple[str, ...], rng: np.random.Generator
) -> tuple[Array, list[str], str | None]:
    """Channels of the drawn montage, their labels, and what the reference row stands for."""
    if situation.montage == "Cz" and "Cz" in names:
        cz = names.index("Cz")
        keep = [row for row in range(len(names)) if row != cz]
        labels = [f"EEG {names[row]}-Cz" for row in keep]
        return channels[keep] - channels[cz], labels, "Cz"
    if situation.montage == "average":
        return channels - channels.mean(axis=0), [f"{name}-AVG" for name in names], None
    if situation.montage == "system":
        # A reference somewhere on the midline that has no channel of its own.
        middle = [row for row, name in enumerate(names) if name.endswith("z")] or [0]
        weights = rng.dirichlet(np.ones(len(middle)))
        return (
            channels - weights @ channels[middle],
            [f"{name}-REF" for name in names],
            "mix",
        )
    if situation.montage == "bipolar":
        pairs = [
            (a, b)
            for chain in CHAINS
            for a, b in itertools.pairwise(chain)
            if a in names and b in names
        ]
        data = np.stack(
            [channels[names.index(a)] - channels[names.index(b)] for a, b in pairs]
        )
        return data, [f"{a}-{b}" for a, b in pairs], None
    return channels, [f"EEG {name}-LE" for name in names], "ears"


def _recording(
    data: Array, labels: list[str], situation: Situation, recorder: _Recorder
) -> Recording:
    low = situation.low_pass or recorder.own_low
    notch = situation.notch or recorder.own_notch
    stated = Filters(situation.high_pass, low, notch)
    blank = Filters(None, None, None)
    return from_array(
        data.astype(np.float32),
        situation.sfreq,
        labels,
        filters=[stated if situation.header else blank] * len(labels),
    )


def label_cells(
    frame: Frame,
    starts: NDArray[np.int64],
    n: int,
    sfreq: float,
    names: tuple[str, ...],
    electrodes: dict[str, Array],
    quiet_channels: Array,
    situation: Situation,
    reference_row: str | None,
) -> tuple[NDArray[np.int8], NDArray[np.float32]]:
    """Truth and strength of every kind at every epoch and site of the frame.

    A cell is *present* when the artifact at its electrode is large enough for a reader to
    see over the background there, *clean* when it is far below, and unknown in between:

    ======  ==========================  ===================  ==================
    kind    size                        present from         clean below
    ======  ==========================  ===================  ==================
    eye     peak-to-peak                30 uV                10 uV
    muscle  rms above 15 Hz in the      1.25 times the       0.35 times
            strongest fifth of a        background there
            second
    pop     change over 16 ms           20 uV and twice the  4 uV and no tail
                                        background's usual   above 15 uV
    mains   amplitude                   1.5 uV and 3 dB      0.4 uV or -6 dB
                                        over the background
    ======  ==========================  ===================  ==================

    ``electrodes`` holds per kind the potentials at ``names`` and, last, at the reference.
    """
    index = starts[:, None] + np.arange(n)
    rows = _rows_of(frame, names, reference_row)
    shape = (len(KIND_NAMES), len(starts), len(frame.sites))
    truth = np.full(shape, UNKNOWN, dtype=np.int8)
    strength = np.full(shape, np.nan, dtype=np.float32)
    average = quiet_channels - quiet_channels.mean(axis=0)
    quiet = np.concatenate([average, -quiet_channels.mean(axis=0, keepdims=True)])
    lag = max(1, round(STEP_SECONDS * sfreq))
    for number, kind in enumerate(KIND_NAMES):
        if kind not in electrodes:
            continue
        field = electrodes[kind][:, index]
        base = quiet[:, index]
        size, present, clean = _SIZES[kind](field, base, sfreq, lag, situation)
        cell = np.where(present, PRESENT, np.where(clean, CLEAN, UNKNOWN)).astype(np.int8)
        known = rows >= 0
        truth[number][:, known] = cell[rows[known]].T
        strength[number][:, known] = size[rows[known]].T
        if reference_row == "mix":
            # The made-up reference shares in what its electrodes have: not a clean label.
            truth[number][:, [role == "reference" for role in frame.roles]] = UNKNOWN
    return truth, strength


def _rows_of(
    frame: Frame, names: tuple[str, ...], reference_row: str | None
) -> NDArray[np.intp]:
    rows = []
    for site, canonical, role in zip(
        frame.sites, frame.canonical, frame.roles, strict=True
    ):
        name = canonical or canonical_site(site)
        if role == "reference" and reference_row in ("ears", "mix"):
            rows.append(len(names))
        else:
            rows.append(names.index(name) if name in names else -1)
    return np.array(rows, dtype=np.intp)


Sized = tuple[Array, NDArray[np.bool_], NDArray[np.bool_]]


def _eye_size(field: Array, base: Array, sfreq: float, lag: int, s: Situation) -> Sized:
    size = np.ptp(field, axis=2)
    return size, size >= 30, size < 10


def _muscle_size(field: Array, base: Array, sfreq: float, lag: int, s: Situation) -> Sized:
    fast, usual = _above_15(field, sfreq), _above_15(base, sfreq)
    n = fast.shape[2] // 5
    parts = fast[:, :, : 5 * n].reshape(*fast.shape[:2], 5, n)
    size = np.sqrt((parts**2).mean(axis=3)).max(axis=2)
    beside = np.sqrt(np.median((usual**2).mean(axis=2), axis=1))[:, None] + 0.3
    return size, size >= 1.25 * beside, size < 0.35 * beside


def _above_15(x: Array, sfreq: float) -> Array:
    from scipy.fft import irfft, rfft, rfftfreq

    n = x.shape[2]
    gain = rfftfreq(n, 1 / sfreq) >= 15
    return np.asarray(irfft(rfft(x, axis=2) * gain, n, axis=2))


def _pop_size(field: Array, base: Array, sfreq: float, lag: int, s: Situation) -> Sized:
    size = np.abs(field[:, :, lag:] - field[:, :, :-lag]).max(axis=2)
    usual = np.median(np.abs(base[:, :, lag:] - base[:, :, :-lag]).max(axis=2), axis=1)[
        :, None
    ]
    tail = np.ptp(field, axis=2)
    return size, (size >= 20) & (size >= 2 * usual), (size < 4) & (tail < 15)


def _mains_size(field: Array, base: Array, sfreq: float, lag: int, s: Situation) -> Sized:
    from scipy.fft import rfft, rfftfreq

    n = field.shape[2]
    window = np.hanning(n + 1)[:-1]
    near = np.abs(rfftfreq(n, 1 / sfreq) - s.line) <= 1.6
    scale = 2 / (sfreq * np.sum(window**2)) * (sfreq / n)

    def power(x: Array) -> Array:
        spectrum = rfft(x * window, axis=2)[:, :, near]
        return np.asarray(scale * (np.abs(spectrum) ** 2).sum(axis=2))

    own = power(field)
    beside = np.median(power(base), axis=1)[:, None] + 1e-3
    size = np.sqrt(2 * own)
    over = 10 * np.log10(own / beside + 1e-9)
    return size, (size >= 1.5) & (over >= 3), (size < 0.4) | (over < -6)


_SIZES = {"eye": _eye_size, "muscle": _muscle_size, "pop": _pop_size, "mains": _mains_size}
