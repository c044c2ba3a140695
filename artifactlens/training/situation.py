"""Recording conditions drawn at random, and the recorder that works under them."""

from __future__ import annotations

import itertools
from dataclasses import dataclass
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from artifactlens.recording import Filters, Recording, from_array
from artifactlens.simulation import electrode

Array = NDArray[np.float64]


class Background(NamedTuple):
    """Real recording to put artifact into.

    ``potentials`` (n_sites, n_samples) microvolt against the common reference;
    ``reference_sites`` names whose mean that reference is. ``kept_to_hz`` is where its own
    low-pass lies (None: full bandwidth) and ``notch_hz`` its own notch. ``line_hz`` is the
    mains that is in it by nature: another line frequency is then put in and judged.
    """

    person: str
    sites: tuple[str, ...]
    potentials: Array
    sfreq: float
    reference_sites: tuple[str, ...]
    kept_to_hz: float | None
    notch_hz: float | None
    origin: str
    line_hz: float | None = None


@dataclass(frozen=True, slots=True)
class Situation:
    """One draw of recording conditions; None where a filter is absent.

    ``gain`` multiplies the background: adults at rest are not the only people recorded.
    ``noise_uv`` is white noise of amplifier and electrodes, rms at the background's sampling
    rate, microvolt: from a good amplifier's to that of poor electrodes.
    """

    sfreq: float
    extended: bool
    low_pass: float | None
    notch: float | None
    line: float
    high_pass: float | None
    montage: str
    n_sites: int
    header: bool
    gain: float = 1.0
    noise_uv: float = 0.5

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
    extended = background.kept_to_hz is None or rng.random() < 0.75
    rates = [
        rate for rate in (128.0, 200.0, 250.0, 256.0, 500.0) if rate <= background.sfreq
    ]
    sfreq = float(rng.choice(rates)) if rates else background.sfreq
    line = float(rng.choice([line for line in (50.0, 60.0) if line != background.line_hz]))
    low_pass: float | None = None
    if extended:
        allowed = [cut for cut in (30.0, 40.0, 50.0, 70.0, 100.0) if cut < 0.4 * sfreq]
        low_pass = float(rng.choice(allowed)) if rng.random() < 0.4 else None
    notch = line if rng.random() < 0.3 else None
    n_channels = len(background.sites)
    montage = str(
        rng.choice(
            ["ears", "Cz", "average", "system", "bipolar"], p=[0.4, 0.15, 0.15, 0.15, 0.15]
        )
    )
    n_sites = n_channels
    if montage not in ("bipolar", "Cz") and rng.random() < 0.3:
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
        gain=float(np.exp(rng.uniform(np.log(0.6), np.log(3.0)))),
        noise_uv=float(np.exp(rng.uniform(np.log(0.3), np.log(4.0)))),
    )


class Recorder:
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
        if not own and self.own_low is not None:
            gain /= np.sqrt(1 + (freqs / (0.97 * self.own_low)) ** 40)
        for notch in {s.notch, None if own else self.own_notch} - {None}:
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


def in_montage(
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
        # With few sites it is halfway between the central ones.
        middle = [row for row, name in enumerate(names) if name.endswith("z")] or [
            names.index(name) for name in ("C3", "C4")
        ]
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


def as_recording(
    data: Array, labels: list[str], situation: Situation, recorder: Recorder
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
