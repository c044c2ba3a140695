"""A small invented Result that the tests of every output share."""

from __future__ import annotations

import dataclasses
import math

import numpy as np

from artifactlens.advice import Advice
from artifactlens.kinds import KIND_NAMES, KINDS
from artifactlens.result import (
    Assessment,
    Contribution,
    Flag,
    Measure,
    RecordingFacts,
    Result,
    Scores,
    Setup,
    SiteEvidence,
)

N_EPOCHS = 120  # one second each

# Invented head of 9.5 cm radius; x right, y nose, z up, in metres. Approximate by intent:
# the outputs only need places that look like the 10-20 system.
POSITIONS: dict[str, tuple[float, float, float]] = {
    "Fp1": (-0.029, 0.088, 0.020),
    "Fp2": (0.029, 0.088, 0.020),
    "F7": (-0.075, 0.054, 0.020),
    "F3": (-0.052, 0.062, 0.049),
    "Fz": (0.000, 0.067, 0.067),
    "F4": (0.052, 0.062, 0.049),
    "F8": (0.075, 0.054, 0.020),
    "T3": (-0.093, 0.000, 0.020),
    "C3": (-0.067, 0.000, 0.067),
    "Cz": (0.000, 0.000, 0.095),
    "C4": (0.067, 0.000, 0.067),
    "T4": (0.093, 0.000, 0.020),
    "T5": (-0.075, -0.054, 0.020),
    "P3": (-0.052, -0.062, 0.049),
    "Pz": (0.000, -0.067, 0.067),
    "P4": (0.052, -0.062, 0.049),
    "T6": (0.075, -0.054, 0.020),
    "O1": (-0.029, -0.088, 0.020),
    "O2": (0.029, -0.088, 0.020),
}
SITES: tuple[str, ...] = tuple(POSITIONS)
REFERENCE = "reference"
CANONICAL = {"T3": "T7", "T4": "T8", "T5": "P7", "T6": "P8"}

# Names that break tables, pages, EDF+ lists of annotations and terminals.
HOSTILE: dict[str, str] = {
    "Fp1": "</script><script>alert(1)</script>",
    "Fp2": 'Fp2" onload="x',
    "T3": "T3\tonset\n9.9",
    "C3": "C3|C4",
    "F7": "F7\x14fake\x14\x00+1\x15",
    "P3": "=HYPERLINK(1)",
    "O1": "\x1b[31mO1\u2028\u202e",
    REFERENCE: "R&D <b>\r\n",
}

# kind, sites, onset, seconds, base, features (name, label, unit, value, usual, log-odds)
_TEMPLATES: tuple[
    tuple[
        str,
        tuple[str, ...],
        float,
        float,
        float,
        tuple[tuple[str, str, str, float | None, float | None, float], ...],
    ],
    ...,
] = (
    (
        "eye",
        ("Fp1", "Fp2"),
        12.0,
        2.0,
        -2.5,
        (
            ("front_vertical", "frontal polarity", "uV", 142.27, 3.5, 3.1),
            ("spread", "share of sites in the field", "", 0.37, 0.6, 0.9),
            ("slope", "spectral slope, 14-42 Hz", "", -1.62, -1.4, -0.2),
        ),
    ),
    (
        "muscle",
        ("T3", "F7"),
        40.0,
        5.0,
        -2.0,
        (
            ("high_power", "power at 55-95 Hz", "dB", 14.806, 0.2, 2.75),
            ("slope", "spectral slope, 14-42 Hz", "", 0.12, -1.4, 1.5),
            ("isolation", "what the neighbours do not share", "dB", None, None, -0.05),
        ),
    ),
    (
        "pop",
        ("C3",),
        77.0,
        1.0,
        -3.0,
        (
            ("step_crest", "fastest step over the mean step", "dB", 31.42, 2.9, 3.6),
            ("isolation", "what the neighbours do not share", "dB", 9.5, 0.4, 1.2),
            ("spread", "share of sites in the field", "", 0.05, 0.6, 0.4),
        ),
    ),
    (
        "pop",
        (REFERENCE,),
        101.0,
        1.0,
        -3.0,
        (
            ("step_crest", "fastest step over the mean step", "dB", 18.0, 2.9, 2.9),
            ("spread", "share of sites in the field", "", 1.0, 0.6, 0.8),
        ),
    ),
)
_REASONS = {
    "eye": ("yes", "Fp1 and Fp2 are present and slow activity is recorded from 0.5 Hz."),
    "muscle": ("limited", "The low-pass filter at 70 Hz removed part of the muscle range."),
    "pop": ("yes", "All 19 sites have neighbours."),
    "mains": ("no", "A 50 Hz notch filter was applied when the recording was written."),
}


PAIR = Contribution.of(
    (
        Measure("burst", "highest pace within a tenth of a second", "uV", 12.31, 4.0),
        Measure("high_power", "power at 55-95 Hz", "dB", -2.96, None),
    ),
    5.0,
)
"""Two features together, heavier than any single one below."""


def _flag(number: int, names: dict[str, str]) -> Flag:
    kind, sites, onset, duration, base, parts = _TEMPLATES[(number - 1) % len(_TEMPLATES)]
    lap = (number - 1) // len(_TEMPLATES)
    onset = (onset + 3.0 * lap) % (N_EPOCHS - duration)
    contributions = tuple(
        Contribution(*part) for part in sorted(parts, key=lambda part: -abs(part[-1]))
    )
    score = base + sum(part.log_odds for part in contributions)
    spelled = tuple(names[site] for site in sites)
    driver = contributions[0]
    label = next(entry.label for entry in KINDS if entry.name == kind)
    return Flag(
        number=number,
        onset=onset,
        duration=duration,
        kind=kind,
        sites=spelled,
        probability=1 / (1 + math.exp(-score)),
        score=score,
        base=base,
        strongest_site=spelled[0],
        moment=onset + 0.37,
        contributions=contributions,
        look_alike=next(entry.look_alike for entry in KINDS if entry.name == kind)
        if number % 2
        else "",
        sentence=(
            f"{', '.join(spelled)} - consistent with {label}: {driver.label} "
            f"{driver.value:.4g} {driver.unit}. It drove this mark "
            f"({driver.log_odds:+.1f} of {score - base:+.1f})."
        ),
    )


def _site(
    name: str, names: dict[str, str], shares: dict[str, float | None]
) -> SiteEvidence:
    is_reference = name == REFERENCE
    return SiteEvidence(
        site=names[name],
        channel=None if is_reference else f"EEG {names[name]}-REF",
        canonical=None if is_reference else CANONICAL.get(name, name),
        role="reference" if is_reference else "site",
        position=None if is_reference else POSITIONS[name],
        seconds_judged=float(N_EPOCHS),
        share=shares,
        pops_per_minute=0.5 if name in ("C3", REFERENCE) else 0.0,
        mains_uv=None if is_reference else 0.8125,
        mains_db=None if is_reference else 1.5,
        isolation_db=None if is_reference else (9.5 if name == "C3" else 0.4),
        fault="flat from 90 s on" if name == "O2" else "",
    )


def make_result(n_flags: int = 3, hostile: bool = False) -> Result:
    """A plausible result on an invented recording of two minutes.

    Parameters
    ----------
    n_flags : int
        How many flags; the first four are eye, muscle, pop and a pop in the reference,
        and further ones repeat them three seconds later each round. Mains is not
        assessable (notch), muscle is limited.
    hostile : bool
        Give the recording and some sites names that break careless writers.
    """
    names = {name: name for name in (*SITES, REFERENCE)}
    if hostile:
        names |= HOSTILE
    flags = tuple(
        sorted((_flag(i + 1, names) for i in range(n_flags)), key=lambda flag: flag.onset)
    )
    columns = {spelled: i for i, spelled in enumerate(names.values())}
    seconds = np.zeros((len(KIND_NAMES), N_EPOCHS, len(names)), dtype=bool)
    for flag in flags:
        span = slice(int(flag.onset), int(flag.end))
        for site in flag.sites:
            seconds[KIND_NAMES.index(flag.kind), span, columns[site]] = True
    quiet = np.random.default_rng(20).uniform(0.001, 0.2, seconds.shape)
    probability = np.where(seconds, 0.9 + quiet / 4, quiet).astype(np.float32)
    probability[KIND_NAMES.index("mains")] = np.nan
    touched = {
        kind: float(seconds[i].any(axis=1).sum()) for i, kind in enumerate(KIND_NAMES)
    }
    touched["any"] = float(seconds.any(axis=(0, 2)).sum())
    shares = seconds.mean(axis=1)
    return Result(
        tool_version="0.1.0",
        model_name="invented",
        model_sha256="0" * 64,
        parameters={"operating_point": "sure"},
        recording=RecordingFacts(
            name="../<b>night & day</b>\t1" if hostile else "invented-01",
            format="EDF+",
            duration=float(N_EPOCHS),
            sampling_rate=256.0,
            montage="referential",
            high_pass=0.5,
            low_pass=70.0,
            notch=50.0,
            line_frequency=50.0,
            gaps=((60.0, 2.5),),
            set_aside=(("ECG EKG", "not an electrode of the scalp"),),
            annotation_onsets=(5.0, 64.5),
            notes=("One gap of 2.5 s was left out.",),
        ),
        assessable=tuple(Assessment(kind, *_REASONS[kind]) for kind in KIND_NAMES),
        touched=touched,
        flags=flags,
        sites=tuple(
            _site(
                name,
                names,
                {
                    kind: None if kind == "mains" else float(shares[i, column])
                    for i, kind in enumerate(KIND_NAMES)
                },
            )
            for column, name in enumerate(names)
        ),
        scores=Scores(
            kinds=KIND_NAMES,
            onset=np.arange(N_EPOCHS, dtype=np.float64),
            sites=tuple(names.values()),
            probability=probability,
        ),
    )


# verdict, cause, sign, sites, confidence, state, stretches, reason, checks
_ENTRIES: tuple[
    tuple[
        str,
        str,
        str,
        tuple[str, ...],
        str,
        str,
        tuple[tuple[float, float], ...],
        str,
        tuple[str, ...],
    ],
    ...,
] = (
    (
        "check",
        "ground",
        "mains",
        (),
        "moderate",
        "present",
        ((0.0, 120.0),),
        "mains at all sites with differing size, also between neighbours",
        ("check the ground electrode", "cables", "devices near the bed"),
    ),
    (
        "re-prep",
        "site",
        "pops",
        ("P3",),
        "high",
        "present",
        ((20.0, 118.0),),
        "14 pops in 2 min, unlike its neighbours",
        ("check the lead", "re-prep"),
    ),
    (
        "re-prep",
        "bridge",
        "bridged",
        ("F4", "C4"),
        "high",
        "present",
        ((0.0, 70.0), (90.0, 120.0)),
        "two traces nearly identical, beyond what their distance explains",
        ("clean between", "re-prep both"),
    ),
    (
        "check",
        "placement",
        "swapped",
        ("T5", "T6"),
        "low",
        "present",
        ((0.0, 120.0),),
        "each behaves like the other's position",
        ("check placement", "check the labels"),
    ),
    (
        "ask",
        "patient",
        "muscle",
        ("T3", "F7"),
        "high",
        "present",
        ((40.0, 45.0), (60.0, 80.0), (90.0, 95.0)),
        "muscle in 25 of 100 seconds",
        ("ask to loosen the jaw", "a pillow for the neck"),
    ),
    (
        "watch",
        "site",
        "drift",
        ("O1",),
        "moderate",
        "cured",
        ((30.0, 60.0),),
        "slow drift that stopped when the electrode was handled",
        ("look again in 10 min",),
    ),
)


def with_advice(result: Result) -> Result:
    """The result with six invented entries, site verdicts to match, impedances and a setup.

    The ground comes first, then P3, a bridge F4 to C4, T5 and T6 perhaps swapped, muscle at
    T3 and F7, and O1 whose drift was cured; of O2 nothing can be told.
    """
    spelled = dict(zip((*SITES, REFERENCE), (s.site for s in result.sites), strict=True))
    advice = tuple(
        Advice(
            number=number,
            verdict=verdict,
            cause=cause,
            sign=sign,
            sites=tuple(spelled[site] for site in sites),
            confidence=confidence,
            state=state,
            stretches=stretches,
            share=sum(end - start for start, end in stretches) / N_EPOCHS,
            reason=reason,
            checks=checks,
        )
        for number, (
            verdict,
            cause,
            sign,
            sites,
            confidence,
            state,
            stretches,
            reason,
            checks,
        ) in enumerate(_ENTRIES, 1)
    )
    verdicts = dict.fromkeys(("P3", "F4", "C4"), "re-prep")
    verdicts |= {"O1": "watch", "O2": "cannot tell"}
    whys = {entry.sites[0]: entry.reason for entry in advice if entry.sites}
    sites = tuple(
        dataclasses.replace(
            site,
            verdict=verdicts.get(name, "leave"),
            why="flat from 90 s on" if name == "O2" else whys.get(site.site, ""),
            impedance_kohm=None if name == REFERENCE else 2.0 + 12.5 * (name == "P3"),
        )
        for name, site in zip(spelled, result.sites, strict=True)
    )
    return dataclasses.replace(
        result,
        advice=advice,
        sites=sites,
        setup=Setup(
            seconds=120.0,
            fit=tuple(spelled[name] for name in SITES if name not in ("P3", "O2")),
            unfit=((spelled["P3"], "pops"),),
            cannot_tell=(spelled["O2"],),
            responses=("Blinks were seen at both frontal poles.",),
        ),
    )
