"""Whether each kind can be judged: conditions on the left, verdict and words on the right."""

import dataclasses

import numpy as np
import pytest
from signals import SITES, noise, referential, sine, ten_twenty

from artifactlens.assessable import assess
from artifactlens.features.spatial import eye_leads
from artifactlens.frames import build_frame
from artifactlens.kinds import KIND_NAMES
from artifactlens.pipeline import measure_recording
from artifactlens.prefilter import Filters
from artifactlens.survey import Conditions

GOOD = Conditions(
    sampling_rate=256.0,
    high_pass=0.5,
    low_pass=128.0,
    low_pass_source="sampling rate",
    notch=None,
    notch_source="",
    line_frequency=50.0,
    line_found_db=1.0,
    amplitude_uv=12.0,
    average_reference=False,
)


def judged(sites=SITES, seconds=600.0, implausible=False, labels=None, **changes):
    named = labels or [f"{site}-REF" for site in sites]
    frame = build_frame(named, [None] * len(named), None)
    conditions = dataclasses.replace(GOOD, **changes)
    found = assess(frame, eye_leads(frame), conditions, seconds, implausible)
    return {entry.kind: entry for entry in found}


def test_a_full_recording_lets_everything_be_judged_and_gives_no_reason():
    found = judged()
    assert tuple(found) == KIND_NAMES
    assert {entry.verdict for entry in found.values()} == {"yes"}
    assert {entry.reason for entry in found.values()} == {""}


@pytest.mark.parametrize(
    ("changes", "verdict", "words"),
    [
        ({}, "yes", ""),
        ({"notch": 50.0, "notch_source": "header"}, "no", "notch at 50 Hz by the header"),
        ({"notch": 50.0, "notch_source": "measured"}, "no", "notch at 50 Hz as measured"),
        (
            {"notch": 60.0, "notch_source": "header", "line_frequency": 60.0},
            "no",
            "notch at 60 Hz by the header",
        ),
        (
            {"notch": 50.0, "notch_source": "header", "line_found_db": 12.0},
            "yes",
            "",
        ),
        (
            {"low_pass": 35.0, "low_pass_source": "header"},
            "no",
            "low-pass at 35 Hz by the header, below the mains",
        ),
        (
            {"low_pass": 40.0, "low_pass_source": "measured"},
            "no",
            "low-pass at 40 Hz as measured, below the mains",
        ),
        (
            {"sampling_rate": 100.0, "low_pass": 50.0},
            "no",
            "sampled at 100 Hz: 50 Hz is above or too near its limit of 50 Hz",
        ),
        (
            {"sampling_rate": 128.0, "low_pass": 64.0, "line_frequency": 60.0},
            "no",
            "sampled at 128 Hz: 60 Hz is above or too near its limit of 64 Hz",
        ),
        ({"sampling_rate": 128.0, "low_pass": 64.0}, "yes", ""),
        (
            {"sampling_rate": 111.0, "low_pass": 55.5, "line_frequency": 49.5},
            "no",
            "sampled at 111 Hz: 50 Hz is above or too near its limit of 55.5 Hz",
        ),
        ({"sampling_rate": 112.0, "low_pass": 56.0, "line_frequency": 50.5}, "yes", ""),
        ({"low_pass": 70.0, "low_pass_source": "header"}, "yes", ""),
    ],
)
def test_mains_verdicts(changes, verdict, words):
    found = judged(**changes)["mains"]
    assert (found.verdict, found.reason) == (verdict, words)


def test_a_notch_is_never_told_as_no_mains():
    # Not assessable is not the same as absent.
    reason = judged(notch=50.0, notch_source="header")["mains"].reason
    assert "notch at 50 Hz" in reason
    assert "no mains" not in reason
    assert "absent" not in reason


@pytest.mark.parametrize(
    ("changes", "verdict", "words"),
    [
        ({"low_pass": 70.0, "low_pass_source": "header"}, "yes", ""),
        (
            {"low_pass": 69.0, "low_pass_source": "header"},
            "limited",
            "low-pass at 69 Hz by the header: weak muscle cannot be told from beta activity",
        ),
        (
            {"low_pass": 35.0, "low_pass_source": "measured"},
            "limited",
            "low-pass at 35 Hz as measured: weak muscle cannot be told from beta activity",
        ),
        (
            {"low_pass": 50.0, "sampling_rate": 100.0},
            "limited",
            "sampled at 100 Hz, which carries 50 Hz at most: weak muscle cannot be told "
            "from beta activity",
        ),
        (
            {"low_pass": 29.9, "low_pass_source": "header"},
            "no",
            "low-pass at 29.9 Hz by the header: muscle lies above",
        ),
    ],
)
def test_muscle_verdicts(changes, verdict, words):
    found = judged(**changes)["muscle"]
    assert (found.verdict, found.reason) == (verdict, words)


@pytest.mark.parametrize(
    ("sites", "verdict", "words"),
    [
        (SITES, "yes", ""),
        (
            ("P3", "Pz", "P4", "O1", "O2"),
            "no",
            "no site over the forehead with a known position",
        ),
        (
            ("Fp1", "Fp2", "F7", "F8"),
            "no",
            "no site behind the vertex to compare the forehead with",
        ),
        (
            ("F7", "F3", "Fz", "F4", "F8", "Cz", "O1", "O2"),
            "limited",
            "no frontal pole: the nearest frontal sites serve",
        ),
        (
            ("Fp1", "Fp2", "C3", "C4", "O1", "O2"),
            "limited",
            "no pair of temples: lateral gaze is judged poorly",
        ),
        (
            ("Fp1", "F8", "O1"),
            "limited",
            "no pair of temples: lateral gaze is judged poorly; only 3 sites",
        ),
    ],
)
def test_eye_verdicts(sites, verdict, words):
    found = judged(sites)["eye"]
    assert (found.verdict, found.reason) == (verdict, words)


def test_a_refusal_is_not_watered_down_by_lesser_reasons():
    found = judged(("P3", "O1"), seconds=4.0, implausible=True)["eye"]
    assert found.verdict == "no"
    assert found.reason == "no site over the forehead with a known position"


@pytest.mark.parametrize(
    ("options", "verdict", "words"),
    [
        ({}, "yes", ""),
        (
            {"sampling_rate": 99.0},
            "no",
            "sampled at 99 Hz: too slow to see a steep rise",
        ),
        ({"sampling_rate": 100.0}, "yes", ""),
        (
            {"sites": ("Fp1", "Cz", "O1")},
            "limited",
            "only 3 sites: one electrode cannot be told alone",
        ),
        (
            {"labels": ["one", "two", "three", "four"]},
            "limited",
            "no site positions: all other sites serve as neighbours",
        ),
    ],
)
def test_pop_verdicts(options, verdict, words):
    found = judged(**options)["pop"]
    assert (found.verdict, found.reason) == (verdict, words)


def test_the_reference_does_not_count_as_a_site():
    assert "only 3 sites" in judged(("Fp1", "Cz", "O1"))["pop"].reason
    assert judged(("Fp1", "Fp2", "Cz", "O1"))["pop"].verdict == "yes"


def test_a_short_recording_limits_every_kind():
    for entry in judged(seconds=9.0).values():
        assert entry.verdict == "limited"
        assert entry.reason == "only 9 s: too short to know what is usual here"
    assert {entry.verdict for entry in judged(seconds=10.0).values()} == {"yes"}


def test_implausible_amplitudes_limit_every_kind():
    for entry in judged(implausible=True).values():
        assert entry.verdict == "limited"
        assert entry.reason == "the amplitudes are not those of scalp EEG in microvolt"


def test_reasons_add_up():
    found = judged(seconds=5.0, implausible=True, low_pass=40.0, low_pass_source="header")
    assert found["muscle"].reason.split("; ") == [
        "low-pass at 40 Hz by the header: weak muscle cannot be told from beta activity",
        "only 5 s: too short to know what is usual here",
        "the amplitudes are not those of scalp EEG in microvolt",
    ]


@pytest.mark.parametrize("notch", [None, 50.0])
@pytest.mark.parametrize("low_pass", [25.0, 45.0, 120.0])
@pytest.mark.parametrize("rate", [90.0, 128.0, 256.0])
@pytest.mark.parametrize("line", [49.5, 50.0, 60.0])
def test_every_verdict_is_one_of_three_and_has_a_reason_unless_it_is_yes(
    notch, low_pass, rate, line
):
    found = judged(
        notch=notch,
        notch_source="header" if notch else "",
        low_pass=min(low_pass, rate / 2),
        low_pass_source="header" if low_pass < rate / 2 else "sampling rate",
        sampling_rate=rate,
        line_frequency=line,
    )
    for entry in found.values():
        assert entry.verdict in ("yes", "limited", "no")
        assert bool(entry.reason) == (entry.verdict != "yes")


# From a recording to the verdict ---------------------------------------------------------


def verdicts_of(data, rate=256.0, **options):
    measured = measure_recording(referential(data, rate, **options))
    found = assess(
        measured.frame,
        measured.leads,
        measured.conditions,
        float(len(measured.grid)),
        False,
    )
    return {entry.kind: entry for entry in found}


def test_mains_in_the_signal_is_judged_whatever_the_header_says_of_a_notch():
    data = ten_twenty(40)
    data[4] += sine(data.shape[1], 256.0, 50.0, 10.0)
    notched = [Filters(0.5, 70.0, 50.0)] * 19
    assert verdicts_of(data, filters=notched)["mains"].verdict == "yes"
    found = verdicts_of(ten_twenty(40), filters=notched)["mains"]
    assert (found.verdict, found.reason) == ("no", "notch at 50 Hz by the header")


def test_a_notch_in_the_header_of_a_short_recording_is_believed():
    notched = [Filters(0.5, 70.0, 50.0)] * 19
    found = [
        verdicts_of(ten_twenty(4, seed=seed), filters=notched)["mains"].verdict
        for seed in range(5)
    ]
    assert set(found) == {"no"}


def test_60_hz_mains_at_128_hz_sampling_is_told_not_to_be_judged():
    data = ten_twenty(40, 128.0)
    data += np.linspace(-1, 1, 19)[:, None] * sine(data.shape[1], 128.0, 60.0, 20.0)
    found = verdicts_of(data, 128.0)["mains"]
    assert found.verdict == "no"
    assert "60 Hz is above or too near its limit of 64 Hz" in found.reason


def test_what_is_judged_yes_or_limited_is_measured():
    features = {"muscle": "beta_power", "pop": "step", "mains": "mains_ratio"}
    for rate in (100.0, 128.0, 256.0):
        data = ten_twenty(12, rate) + noise(19, int(12 * rate), rate, exponent=0, rms_uv=1)
        measured = measure_recording(referential(data, rate), line_frequency=50.0)
        found = assess(measured.frame, measured.leads, measured.conditions, 12.0, False)
        for entry in found:
            if entry.kind in features:
                column = measured.table.column(features[entry.kind])
                assert np.isfinite(column).any() == (entry.verdict != "no")
