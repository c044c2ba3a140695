"""An invented recording with known artifacts, to try the tool on without anybody's data.

The story is made up: an evening in the back room of a bicycle workshop, a volunteer who
never was, nineteen electrodes, a lead that will not hold and a lamp beside the bench. All
of it is computed by ``simulation``; nobody was measured.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from functools import cache, partial
from typing import TYPE_CHECKING

import numpy as np

from artifactlens.errors import OutputError, SitesError
from artifactlens.simulation import brain, electrode, eye, lookalikes, mains, muscle
from artifactlens.simulation.scene import Scene, Simulated
from artifactlens.sites import canonical_site, site_position

if TYPE_CHECKING:
    from pathlib import Path

    from edfio import Edf
    from numpy.typing import NDArray

DEMO_NAME = "workshop.edf"
DEMO_SITES: tuple[str, ...] = (
    "Fp1", "Fp2", "F7", "F3", "Fz", "F4", "F8", "T3", "C3", "Cz", "C4", "T4", "T5",
    "P3", "Pz", "P4", "T6", "O1", "O2",
)  # fmt: skip
REFERENCE = "REF"
"""The reference electrode of the recording, midway between Cz and Pz."""

HIGH_PASS_HZ, LOW_PASS_HZ = 0.3, 70.0
_SFREQ, _SECONDS, _SEED = 256.0, 240, 20_240
_RANGE_UV = (-3276.8, 3276.7)
_ELECTRODES = (*DEMO_SITES, "A1", REFERENCE)

_NOTES: tuple[tuple[float, str], ...] = (
    (0.0, "Invented recording, nobody was measured"),
    (1.0, "Eyes open, watching the wheel turn"),
    (32.0, "Look to the sides, up and down"),
    (55.0, "Eyes closed"),
    (97.0, "Eyes open"),
    (101.0, "Clench teeth"),
    (111.0, "Chew"),
    (148.5, "P3 gelled again"),
    (162.0, "Bench lamp on"),
    (190.0, "Bench lamp off"),
    (196.0, "Dozing"),
)


@dataclass(frozen=True, slots=True)
class DemoEvent:
    """One thing that was put into the demonstration.

    ``onset`` and ``duration`` in seconds; ``kind`` eye, muscle, pop, mains, or "brain" for
    what should be left alone; ``sites`` where it is strongest, as the file spells them
    ("REF" is the reference); ``what`` in words.
    """

    onset: float
    duration: float
    kind: str
    sites: tuple[str, ...]
    what: str


_Maker = Callable[[Scene, np.random.Generator], Simulated]
_Planned = tuple[DemoEvent, _Maker]


def demo_truth() -> tuple[DemoEvent, ...]:
    """What was put into the demonstration, in order of onset.

    Ongoing activity (background, weak alpha and beta) is not listed.
    """
    return tuple(event for event, _ in _plan())


@cache
def _plan() -> tuple[_Planned, ...]:
    blinks = (
        (5.2, 170.0), (8.9, 140.0), (12.4, 210.0), (17.1, 160.0), (17.8, 120.0),
        (23.6, 190.0), (28.3, 150.0), (54.6, 130.0), (97.3, 220.0), (121.3, 160.0),
        (126.8, 180.0), (132.9, 140.0), (138.2, 200.0), (145.5, 150.0), (152.2, 170.0),
        (160.4, 130.0), (167.7, 190.0), (174.9, 160.0), (181.2, 150.0), (187.5, 210.0),
        (193.1, 140.0),
    )  # fmt: skip
    gazes = (
        (33.5, 34.0, 0.0), (37.0, -35.0, 0.0), (40.5, 32.0, 0.0), (43.6, -36.0, 0.0),
        (47.0, 0.0, 25.0), (50.2, 0.0, -25.0),
    )  # fmt: skip
    pops = (
        (119.4, 260.0, "step"), (123.1, -140.0, "step"), (123.5, 180.0, "partial return"),
        (128.9, 420.0, "step"), (131.0, 95.0, "settling"), (134.7, -310.0, "step"),
        (139.6, 230.0, "partial return"), (140.1, 120.0, "step"), (143.8, -180.0, "step"),
        (147.2, 350.0, "step"),
    )  # fmt: skip
    central, front = ("C3", "Cz", "C4"), ("Fp1", "Fp2", "F3", "Fz", "F4")
    planned = [
        *(_blink(*entry) for entry in blinks),
        *(_gaze(*entry) for entry in gazes),
        *(_pop("P3", *entry) for entry in pops),
        _pop(REFERENCE, 156.0, 240.0, "step"),
        _muscle("frontalis", 70.3, 0.16, 30.0, ("Fp1", "Fp2"), "twitch of the forehead"),
        _muscle("frontalis", 80.5, 1.2, 22.0, ("Fp1", "Fp2"), "eyebrows raised"),
        _muscle("temporalis", 102.5, 2.4, 55.0, ("F7", "F8", "T3", "T4"), "jaw clenched"),
        _muscle("temporalis", 107.0, 2.6, 70.0, ("F7", "F8", "T3", "T4"), "jaw clenched"),
        *(
            _muscle("temporalis", onset, 0.45, 45.0, ("F7", "F8", "T3", "T4"), "a bite")
            for onset in (111.6, 112.5, 113.3, 114.2, 115.0)
        ),
        _hum("T6", 162.4, 27.6, 22.0),
        _roving(197.0, 11.0),
        (
            DemoEvent(55.2, 41.8, "brain", ("O1", "O2"), "posterior alpha"),
            lambda scene, rng: brain.alpha(
                scene, rng, 55.2, 41.8, amplitude_uv=45.0, peak_hz=9.8
            ),
        ),
        _pattern("spindle", 210.8, 1.2, 34.0, central, "sleep spindle"),
        _pattern("k_complex", 216.5, 0.9, 115.0, ("Fz", "Cz"), "K-complex"),
        _pattern("spindle", 217.3, 1.0, 30.0, central, "sleep spindle"),
        _pattern("spindle", 223.9, 1.5, 38.0, central, "sleep spindle"),
        _pattern("frontal_delta", 229.0, 5.0, 95.0, front, "frontal rhythmic delta"),
    ]
    return tuple(sorted(planned, key=lambda entry: entry[0].onset))


def _blink(onset: float, uv: float) -> _Planned:
    event = DemoEvent(onset, 0.32, "eye", ("Fp1", "Fp2"), "blink")

    def make(scene: Scene, rng: np.random.Generator) -> Simulated:
        return eye.blinks(scene, rng, [onset], amplitude_uv=(uv, uv), duration=(0.32, 0.32))

    return event, make


def _gaze(onset: float, right: float, up: float) -> _Planned:
    lateral, vertical = ("F7", "F8"), ("Fp1", "Fp2")
    side = "right" if right > 0 else "left"
    what = f"gaze to the {side}" if right else f"gaze {'up' if up > 0 else 'down'}"
    event = DemoEvent(onset, 1.3, "eye", lateral if right else vertical, what)

    def make(scene: Scene, rng: np.random.Generator) -> Simulated:
        return eye.saccade(scene, onset, right_deg=right, up_deg=up, plateau=1.2)

    return event, make


def _roving(onset: float, duration: float) -> _Planned:
    event = DemoEvent(onset, duration, "eye", ("F7", "F8"), "slow roving eyes")
    return event, lambda scene, rng: eye.roving(scene, rng, onset, duration)


def _muscle(
    name: str, onset: float, duration: float, uv: float, sites: tuple[str, ...], what: str
) -> _Planned:
    event = DemoEvent(onset, duration, "muscle", sites, what)
    make = partial(muscle.contraction, name=name, onset=onset, duration=duration, rms_uv=uv)
    return event, make


def _pop(site: str, onset: float, uv: float, form: str) -> _Planned:
    event = DemoEvent(onset, 0.5, "pop", (site,), f"pop ({form})")
    make = partial(
        electrode.pops,
        row=_ELECTRODES.index(site),
        onsets=[onset],
        sizes_uv=[uv],
        forms=[form],
    )
    return event, make


def _hum(site: str, onset: float, duration: float, uv: float) -> _Planned:
    event = DemoEvent(onset, duration, "mains", (site,), "50 Hz of the bench lamp")
    make = partial(
        mains.hum,
        size_uv=uv,
        rows=[_ELECTRODES.index(site)],
        onset=onset,
        duration=duration,
    )
    return event, make


def _pattern(
    name: str, onset: float, duration: float, uv: float, sites: tuple[str, ...], what: str
) -> _Planned:
    event = DemoEvent(onset, duration, "brain", sites, what)
    make = partial(
        lookalikes.LOOK_ALIKES[name].make, onset=onset, duration=duration, amplitude_uv=uv
    )
    return event, make


def _scene() -> Scene:
    places = []
    for name in _ELECTRODES:
        if name == REFERENCE:
            places.append((_place("Cz") + _place("Pz")) / 2)
        else:
            places.append(_place(name))
    return Scene(np.array(places), int(_SECONDS * _SFREQ), _SFREQ)


def _place(name: str) -> NDArray[np.float64]:
    canonical = canonical_site(name)
    place = None if canonical is None else site_position(canonical)
    if place is None:
        raise SitesError(f"The electrode {name} has no place on the template head.")
    return place


def demo_signals() -> tuple[tuple[str, ...], NDArray[np.float64]]:
    """Electrode names and what the recorder shows of them.

    Returns
    -------
    names : tuple of str
        The nineteen sites and A1, each against the reference.
    signals : array, shape (20, n_samples), microvolt
        Through a first-order high-pass and the recorder's low-pass.
    """
    scene = _scene()
    rng = np.random.default_rng(_SEED)
    whole = (-1.0, _SECONDS + 2.0)
    total = (
        brain.background(scene, rng, rms_uv=6.5)
        + brain.alpha(scene, rng, *whole, amplitude_uv=7.0, peak_hz=9.8)
        + brain.beta(scene, rng, *whole, amplitude_uv=4.0)
    ).potentials
    for _, make in _plan():
        total = total + make(scene, rng).potentials
    noise = 0.3 * rng.standard_normal((len(_ELECTRODES) - 1, scene.n_samples))
    channels = total[:-1] - total[-1:] + noise
    filtered = electrode.low_pass(channels, LOW_PASS_HZ, _SFREQ)
    return _ELECTRODES[:-1], electrode.high_pass_first_order(filtered, HIGH_PASS_HZ, _SFREQ)


def _heart(rng: np.random.Generator) -> NDArray[np.float64]:
    """Electrocardiogram of about 66 beats a minute, microvolt, shape (n_samples,)."""
    time = np.arange(int(_SECONDS * _SFREQ)) / _SFREQ
    gaps = 0.91 + 0.03 * rng.standard_normal(int(_SECONDS / 0.8))
    beats = np.cumsum(gaps) - 0.5
    since = time - beats[np.maximum(np.searchsorted(beats - 0.3, time) - 1, 0)]
    waves = ((110.0, -0.16, 0.022), (-90.0, -0.03, 0.009), (1000.0, 0.0, 0.011),
             (-210.0, 0.028, 0.010), (260.0, 0.26, 0.045))  # fmt: skip
    return np.asarray(
        sum(size * np.exp(-0.5 * ((since - at) / width) ** 2) for size, at, width in waves)
    )


def write_demo(folder: Path) -> Path:
    """Write the demonstration as EDF+ into ``folder``, which is made if need be.

    Same bytes at every call. Another recording of that name is left alone.

    Parameters
    ----------
    folder : Path
        Where to write.

    Returns
    -------
    Path
        ``folder / DEMO_NAME``: 240 s at 256 Hz, nineteen sites, A1 and an ECG.

    Raises
    ------
    OutputError
        If the file cannot be written there, or another one has its name.
    """
    path = folder / DEMO_NAME
    part = folder / f"{DEMO_NAME}.part"
    try:
        folder.mkdir(parents=True, exist_ok=True)
        _recording().write(part)
        if path.exists() and path.read_bytes() != part.read_bytes():
            part.unlink()
            raise OutputError(
                f"The demonstration needs the name {DEMO_NAME} in {folder}, but another "
                "file has it.",
                "Move that file, or give another folder.",
            )
        part.replace(path)
    except OutputError:
        raise
    except OSError as error:
        raise OutputError(
            f"The demonstration cannot be written to {folder}: {error.strerror}.",
            "Give a folder that may be written to.",
        ) from error
    return path


def _recording() -> Edf:
    from edfio import Edf, EdfAnnotation, EdfSignal, Recording

    names, signals = demo_signals()
    channels = [(f"EEG {name}-REF", row) for name, row in zip(names, signals, strict=True)]
    heart = _heart(np.random.default_rng(_SEED + 1))
    channels.append(("ECG", electrode.high_pass_first_order(heart, HIGH_PASS_HZ, _SFREQ)))
    return Edf(
        [
            EdfSignal(
                np.clip(values, *_RANGE_UV),
                _SFREQ,
                label=label,
                transducer_type="invented",
                physical_dimension="uV",
                physical_range=_RANGE_UV,
                prefiltering=f"HP:{HIGH_PASS_HZ:g}Hz LP:{LOW_PASS_HZ:g}Hz",
            )
            for label, values in channels
        ],
        recording=Recording(
            equipment_code="artifactlens", additional=("INVENTED_recording", "no_person")
        ),
        data_record_duration=1.0,
        annotations=[EdfAnnotation(onset, None, text) for onset, text in _NOTES],
    )
