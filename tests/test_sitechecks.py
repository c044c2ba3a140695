"""Injected electrode faults: their physics by hand, the scoring of made-up advice, tables."""

import dataclasses
import importlib.util
import itertools
import sys
from pathlib import Path

import numpy as np
import pytest
from rows import invented
from scipy.signal import butter, sosfiltfilt, welch
from signals import SITES

from artifactlens import advice as words
from artifactlens.advice import Advice
from artifactlens.errors import OptionError
from artifactlens.sites import site_position
from artifactlens.training.evaluation.card import fill
from artifactlens.training.gathering import RESERVED_PEOPLE
from artifactlens.training.sitechecks import table
from artifactlens.training.sitechecks.backgrounds import (
    MONTAGES,
    SPLITS,
    UNTOUCHED_PEOPLE,
    Bed,
    double_banana,
    sources,
    untouched,
)
from artifactlens.training.sitechecks.bench import NEAR_M
from artifactlens.training.sitechecks.cases import MIX, PATIENT_MIX, Truth, case
from artifactlens.training.sitechecks.faults import FAULTS
from artifactlens.training.sitechecks.runs import (
    FIRST_SEEDS,
    Left,
    Ran,
    fault_orders,
    patient_orders,
    run_cases,
)
from artifactlens.training.sitechecks.scoring import score

ROOT = Path(__file__).resolve().parents[1]
SFREQ, SECONDS = 200.0, 60.0
OLD = {"T7": "T3", "T8": "T4", "P7": "T5", "P8": "T6"}
SPELT = tuple(OLD.get(site, site) for site in SITES)
AT_SITES = [
    name for name, fault in FAULTS.items() if fault.cause in ("site", "bridge", "placement")
]
OF_REFERENCE = [name for name, fault in FAULTS.items() if fault.cause == "reference"]
STAYING = [name for name, fault in FAULTS.items() if not fault.cure]


@pytest.fixture(scope="module")
def bed():
    """A minute of invented background at full bandwidth, taken whole by every case."""
    return Bed("invented", invented(SECONDS, SFREQ, kept_to_hz=None), SPELT)


def signal(one):
    return one.recording.read(0, one.recording.n_samples).astype(float)


def put_in(one, bed):
    """What a referential case has that its background has not, (19, n) microvolt."""
    return signal(one) - bed.background.potentials


def rows_of(one):
    return [SPELT.index(site) for site in one.truth.sites]


def time_of(one):
    return np.arange(one.recording.n_samples) / SFREQ


# Cases ---------------------------------------------------------------------------------


@pytest.mark.parametrize("fault", FAULTS)
def test_a_case_speaks_the_words_of_the_advice(bed, fault):
    truth = case(3, [bed], fault=fault).truth
    assert truth.cause in words.CAUSES
    assert truth.sign in words.SIGNS
    assert truth.state in words.STATES
    assert set(truth.sites) <= {*SPELT, "reference"}
    assert (truth.sites == ()) == (truth.cause in ("ground", "patient"))
    assert (truth.sites == ("reference",)) == (truth.cause == "reference")


@pytest.mark.parametrize("fault", FAULTS)
def test_the_seed_decides_everything(bed, fault):
    one, again, other = (case(seed, [bed], fault=fault) for seed in (11, 11, 12))
    assert one.truth == again.truth
    assert one.recording.labels == again.recording.labels
    np.testing.assert_array_equal(signal(one), signal(again))
    alike = one.recording.labels == other.recording.labels
    assert not (alike and np.array_equal(signal(one), signal(other)))


def test_a_wish_leaves_the_other_draws_as_they_are(bed):
    free = case(21, [bed], fault="flat")
    for montage in MONTAGES:
        wished = case(21, [bed], fault="flat", montage=montage)
        assert (wished.truth.onset, wished.truth.end) == (free.truth.onset, free.truth.end)
        assert wished.truth.strength == free.truth.strength
        assert wished.truth.montage == montage


def test_everything_comes_up_among_many_seeds(bed):
    drawn = [case(seed, [bed]).truth for seed in range(60)]
    assert {truth.strength for truth in drawn} == {"plain", "mild"}
    assert {truth.montage for truth in drawn} == set(MONTAGES)
    assert {truth.state for truth in drawn} >= {"present", "cured"}
    assert len({truth.fault for truth in drawn}) > 12


@pytest.mark.parametrize("wish", ["fault", "strength", "montage", "course"])
def test_an_unknown_wish_is_refused_with_what_there_is(bed, wish):
    with pytest.raises(OptionError, match="given was 'sweat'"):
        case(1, [bed], **{wish: "sweat"})


def test_labels_are_those_of_the_montage_in_the_spelling_of_the_file(bed):
    referential = case(1, [bed], fault="flat", montage="referential").recording
    assert referential.labels == tuple(f"EEG {site}-LE" for site in SPELT)
    bipolar = case(1, [bed], fault="flat", montage="double banana").recording
    assert len(bipolar.labels) == 18
    assert {"Fp1-F7", "F7-T3", "T4-T6", "P4-O2", "Fz-Cz"} <= set(bipolar.labels)
    for recording in (referential, bipolar):
        assert {entry.notch for entry in recording.filters} == {None}
        assert {entry.low_pass for entry in recording.filters} == {None}


def test_a_background_that_was_low_passed_gets_its_fast_end_back():
    low = Bed("low", invented(20.0, 250.0, kept_to_hz=45.0), SPELT)
    made = signal(case(1, [low], fault="swapped labels", montage="referential"))
    freqs, cut = welch(low.background.potentials, 250.0, nperseg=500)
    _, filled = welch(made, 250.0, nperseg=500)
    fast = (freqs > 70) & (freqs < 100)
    assert np.median(cut[:, fast]) < 1e-5
    assert np.median(filled[:, fast]) > 1e-3


# The physics of each fault -------------------------------------------------------------


@pytest.mark.parametrize("fault", AT_SITES)
@pytest.mark.parametrize("strength", ["plain", "mild"])
def test_a_fault_at_sites_reaches_these_sites_only(bed, fault, strength):
    one = case(5, [bed], fault=fault, strength=strength, montage="referential")
    size = np.abs(put_in(one, bed)).max(axis=1)
    at = np.isin(SPELT, one.truth.sites)
    assert size[at].min() > 1
    assert size[~at].max() < 1e-3


@pytest.mark.parametrize("fault", OF_REFERENCE)
@pytest.mark.parametrize("course", ["throughout", "begins", "cured"])
def test_a_reference_fault_is_alike_in_all_channels_and_gone_from_all_derivations(
    bed, fault, course
):
    one = case(6, [bed], fault=fault, montage="referential", course=course)
    field = put_in(one, bed)
    assert np.abs(field).max() > 3
    assert np.ptp(field, axis=0).max() < 1e-3
    bipolar = case(6, [bed], fault=fault, montage="double banana", course=course)
    clean, labels = double_banana(bed.background.potentials, SITES, SPELT)
    assert bipolar.recording.labels == tuple(labels)
    assert np.abs(signal(bipolar) - clean).max() < 1e-3
    assert bipolar.truth.hidden
    assert not one.truth.hidden


@pytest.mark.parametrize("strength", ["plain", "mild"])
def test_a_reference_fault_has_its_full_size_in_every_channel(bed, strength):
    """Both ears carry it: a linked reference does not halve it."""
    one = case(6, [bed], fault="noisy reference", montage="referential", strength=strength,
               course="throughout")  # fmt: skip
    stated = float(one.truth.what.split()[2])
    band = butter(6, (1, 20), "bandpass", fs=SFREQ, output="sos")
    seen = sosfiltfilt(band, put_in(one, bed), axis=1).std(axis=1)
    np.testing.assert_allclose(seen, stated, rtol=0.08)


def at_line(field, hz=50.0):
    """Complex amplitude near the line of each row, by 2 s windows: (n_rows, n_windows)."""
    cut = field[:, : field.shape[1] // 400 * 400].reshape(len(field), -1, 400)
    turns = np.exp(-2j * np.pi * hz * np.arange(400) / SFREQ)
    return 2 * (cut * np.hanning(400) * turns).sum(axis=2) / np.hanning(400).sum()


@pytest.mark.parametrize("fault", ["mains everywhere", "mains at few sites"])
@pytest.mark.parametrize(("strength", "low", "high"), [("plain", 10, 60), ("mild", 4, 8)])
def test_mains_has_the_size_of_its_strength(bed, fault, strength, low, high):
    one = case(7, [bed], fault=fault, strength=strength, montage="referential",
               course="throughout")  # fmt: skip
    size = np.abs(at_line(put_in(one, bed))).max()
    # It drifts by exp(0.2), and the reference's own adds at most as much again.
    assert 0.4 * low < size < 3.5 * high


def test_mains_everywhere_differs_in_size_and_phase_and_survives_derivations(bed):
    one = case(8, [bed], fault="mains everywhere", montage="referential", strength="plain",
               course="throughout")  # fmt: skip
    waves = at_line(put_in(one, bed))[:, 5]
    assert np.median(np.abs(waves)) > 3
    assert np.abs(waves).max() > 1.5 * np.median(np.abs(waves))
    turned = np.angle(waves / waves[0])
    assert turned.max() - turned.min() > 0.5
    bipolar, _ = double_banana(put_in(one, bed), SITES, SPELT)
    assert np.median(np.abs(at_line(bipolar))) > 5


@pytest.mark.parametrize(("strength", "noise_uv"), [("plain", 0.3), ("mild", 1.0)])
def test_bridged_sites_differ_by_the_noise_of_two_amplifiers(bed, strength, noise_uv):
    for seed in range(8):
        one = case(seed, [bed], fault="bridge", strength=strength, montage="referential",
                   course="throughout")  # fmt: skip
        data = signal(one)
        rows = rows_of(one)
        assert len(set(rows)) == len(rows) in (2, 3)
        for a, b in itertools.combinations(rows, 2):
            apart = (data[a] - data[b]).std()
            assert apart == pytest.approx(noise_uv * np.sqrt(2), rel=0.05)
        mean = bed.background.potentials[rows].mean(axis=0)
        np.testing.assert_allclose(data[rows[0]], mean, atol=6 * noise_uv)
        places = np.array([site_position(SITES[row]) for row in rows])
        assert np.linalg.norm(places[0] - places[1]) <= NEAR_M


def test_bridges_of_a_double_banana_lie_within_one_connected_part(bed):
    left = {"Fp1", "F3", "F7", "C3", "T3", "P3", "T5", "O1"}
    middle = {"Fz", "Cz", "Pz"}
    for seed in range(20):
        truth = case(seed, [bed], fault="bridge", montage="double banana").truth
        sides = {"l" if s in left else "m" if s in middle else "r" for s in truth.sites}
        assert len(sides) == 1, truth.sites


@pytest.mark.parametrize(("strength", "swing"), [("plain", 0.0), ("mild", 0.1)])
def test_flat_is_flat_while_it_lasts(bed, strength, swing):
    one = case(9, [bed], fault="flat", strength=strength, montage="referential",
               course="begins")  # fmt: skip
    (row,) = rows_of(one)
    time, data = time_of(one), signal(one)[row]
    assert np.ptp(data[time >= one.truth.onset]) == pytest.approx(swing, abs=1e-6)
    assert np.ptp(data[time < one.truth.onset]) > 10


@pytest.mark.parametrize("strength", ["plain", "mild"])
def test_a_clipped_site_stands_at_the_rail_which_no_other_reaches(bed, strength):
    for seed in range(5):
        one = case(seed, [bed], fault="clipped", strength=strength, course="throughout",
                   montage="referential")  # fmt: skip
        (row,) = rows_of(one)
        data = np.abs(signal(one))
        rail = data[row].max()
        assert rail == pytest.approx(200, rel=1e-6)
        assert (data[row] == rail).mean() > (0.2 if strength == "plain" else 0.004)
        assert np.delete(data, row, axis=0).max() < rail


@pytest.mark.parametrize(("strength", "least", "most", "count"),
                         [("plain", 80, 400, (6, 40)), ("mild", 40, 80, (3, 4))])  # fmt: skip
def test_pops_are_steps_of_the_stated_number_and_size(bed, strength, least, most, count):
    for seed in range(5):
        one = case(seed, [bed], fault="pops", strength=strength, montage="referential",
                   course="throughout")  # fmt: skip
        (row,) = rows_of(one)
        wave = put_in(one, bed)[row]
        # Over 25 ms; a partial return takes back four tenths and is a jump too.
        jump = np.abs(wave[5:] - wave[:-5])
        steps = np.flatnonzero(np.diff(np.r_[0, jump > 0.9 * least]) == 1)
        assert count[0] <= len(steps) <= 2 * count[1]
        assert jump.max() < 2 * most


def test_a_step_decays_with_the_time_constant_of_the_recorder(bed):
    one = case(2, [bed], fault="pops", strength="mild", montage="referential",
               course="throughout")  # fmt: skip
    (row,) = rows_of(one)
    wave = put_in(one, bed)[row]
    last = wave[-round(2 * SFREQ) :]
    high_pass = one.recording.filters[0].high_pass
    step = np.exp(-2 * np.pi * high_pass / SFREQ)
    np.testing.assert_allclose(last[1:], step * last[:-1], atol=0.02)
    assert np.abs(last).max() > 1


@pytest.mark.parametrize(("strength", "low", "high"), [("plain", 30, 60), ("mild", 12, 20)])
def test_a_poor_contact_has_noise_of_its_own(bed, strength, low, high):
    one = case(4, [bed], fault="apart", strength=strength, montage="referential",
               course="throughout")  # fmt: skip
    (row,) = rows_of(one)
    wave = put_in(one, bed)[row]
    band = butter(6, (1, 20), "bandpass", fs=SFREQ, output="sos")
    assert 0.9 * low < sosfiltfilt(band, wave).std() < 1.05 * high
    freqs, power = welch(wave, SFREQ, nperseg=800)
    chosen = (freqs >= 2) & (freqs <= 40)
    slope = np.polyfit(np.log(freqs[chosen]), np.log(power[chosen]), 1)[0]
    assert slope == pytest.approx(-1, abs=0.15)


def test_drift_is_slow(bed):
    one = case(4, [bed], fault="drift", strength="plain", montage="referential",
               course="throughout")  # fmt: skip
    freqs, power = welch(put_in(one, bed)[rows_of(one)[0]], SFREQ, nperseg=4000)
    assert power[freqs > 1].sum() < 0.01 * power.sum()


def test_a_loose_lead_comes_and_goes(bed):
    one = case(4, [bed], fault="loose lead", strength="plain", montage="referential",
               course="throughout")  # fmt: skip
    wave = put_in(one, bed)[rows_of(one)[0]]
    buzz = np.abs(at_line(wave[None]))[0]
    assert (buzz > 5).sum() >= 2
    assert (buzz < 1).sum() >= 5


def test_swapped_labels_exchange_two_traces(bed):
    manners = set()
    for seed in range(8):
        one = case(seed, [bed], fault="swapped labels", montage="referential")
        a, b = rows_of(one)
        data = signal(one)
        np.testing.assert_allclose(data[a], bed.background.potentials[b], atol=1e-3)
        np.testing.assert_allclose(data[b], bed.background.potentials[a], atol=1e-3)
        places = [site_position(SITES[row]) for row in (a, b)]
        mirrored = np.linalg.norm(places[0] * [-1, 1, 1] - places[1]) < 0.01
        near = np.linalg.norm(places[0] - places[1]) <= NEAR_M
        assert mirrored or near
        manners.add(mirrored)
    assert manners == {True, False}


def test_blinks_are_largest_at_the_poles_and_gaze_opposite_at_the_temples(bed):
    blinks = put_in(case(4, [bed], fault="blinks", montage="referential"), bed)
    strongest = np.argsort(blinks.max(axis=1))[-2:]
    assert {SITES[row] for row in strongest} == {"Fp1", "Fp2"}
    gaze = put_in(case(5, [bed], fault="gaze", montage="referential"), bed)
    assert np.corrcoef(gaze[SITES.index("F7")], gaze[SITES.index("F8")])[0, 1] < 0


@pytest.mark.parametrize("fault", ["muscle bursts", "tonic muscle"])
def test_muscle_is_fast_and_strongest_in_front_or_at_the_temples(bed, fault):
    for seed in range(4):
        field = put_in(case(seed, [bed], fault=fault, montage="referential"), bed)
        freqs, power = welch(field, SFREQ, nperseg=400)
        fast = power[:, freqs > 15].sum(axis=1)
        at = SITES[int(np.argmax(fast))]
        assert at in ("Fp1", "Fp2", "F7", "F8", "F3", "F4", "T7", "T8"), (seed, at)
        assert fast.max() > 0.5 * power[np.argmax(fast)].sum()


# When ----------------------------------------------------------------------------------


@pytest.mark.parametrize("fault", [name for name in FAULTS if name not in STAYING])
def test_what_begins_midway_is_not_there_before(bed, fault):
    one = case(13, [bed], fault=fault, montage="referential", course="begins")
    field, time = put_in(one, bed), time_of(one)
    assert 0.25 * SECONDS <= one.truth.onset <= 0.5 * SECONDS
    assert one.truth.end == SECONDS
    assert one.truth.state == "present"
    assert np.abs(field[:, time < one.truth.onset - 0.01]).max() < 0.05
    assert np.abs(field[:, time > one.truth.onset]).max() > 2


@pytest.mark.parametrize("fault", [name for name in FAULTS if name not in STAYING])
def test_what_is_cured_shows_hands_at_the_electrode_and_then_nothing(bed, fault):
    one = case(14, [bed], fault=fault, montage="referential", course="cured")
    field, time, end = put_in(one, bed), time_of(one), one.truth.end
    assert one.truth.onset == 0
    assert 0.5 * SECONDS <= end <= 0.7 * SECONDS
    # 5 s of handling, then the high-pass: 4 of its longest time constants.
    late = time > end + 5 + 4 / (2 * np.pi * 0.1)
    assert late.sum() > SFREQ
    hands = field[:, (time > end + 0.3) & (time < end + 2)]
    if fault == "mains everywhere":
        assert one.truth.state == "past"
        assert np.abs(hands).max() < 1
    else:
        assert one.truth.state == "cured"
        rows = slice(None) if one.truth.cause == "reference" else rows_of(one)
        assert hands[rows].std(axis=1).min() > 30
    assert np.abs(field[:, late]).max() < 30


@pytest.mark.parametrize("fault", STAYING)
def test_what_no_electrode_can_cure_is_there_throughout(bed, fault):
    truth = case(15, [bed], fault=fault, course="cured").truth
    assert (truth.onset, truth.end, truth.state) == (0, SECONDS, "present")


# Which cases, over which recordings ----------------------------------------------------


def test_no_recording_is_in_both_splits_and_the_reserved_are_in_none(tmp_path):
    for folder, names in (
        ("eegmat", [f"Subject{n:02d}_{part}" for n in range(36) for part in (1, 2)]),
        ("eegmmidb_s001", [f"S001R{n:02d}" for n in range(1, 15)]),
    ):
        (tmp_path / folder).mkdir()
        for name in names:
            (tmp_path / folder / f"{name}.edf").touch()
    found = {split: {s.path.stem for s in sources(tmp_path, split)} for split in SPLITS}
    assert not found["development"] & found["check"]
    assert found["check"] == {
        *(f"Subject{n}_2" for n in range(24, 30)),
        *(f"S001R{n:02d}" for n in range(2, 15, 2)),
    }
    every = untouched(tmp_path, "check")
    seen = untouched(tmp_path, "development")
    assert {one.montage for one in every} == set(MONTAGES)
    assert all(one.seen for one in seen)
    assert set(seen) == {one for one in every if one.seen}
    assert {one.path.stem for one in every} >= found["check"] | found["development"]
    assert not {one.path.stem for one in every if one.seen} & found["check"]
    for people in (*UNTOUCHED_PEOPLE.values(), *(s.people for s in SPLITS.values())):
        assert not set(people) & set(RESERVED_PEOPLE)


def test_an_unknown_split_is_refused(tmp_path):
    with pytest.raises(OptionError, match="development or check; given was 'all'"):
        sources(tmp_path, "all")


def test_two_hundred_cases_hold_every_fault_in_its_share():
    wanted = fault_orders(200, "check")
    counts = {fault: sum(name == fault for _, name in wanted) for fault in MIX}
    assert counts == {fault: 10 * times for fault, times in MIX.items()}
    assert sum(counts.values()) == 200
    assert set(MIX) | set(PATIENT_MIX) == set(FAULTS)
    assert len(patient_orders(100, "check")) == 100
    seeds = [
        seed
        for split in FIRST_SEEDS
        for orders in (fault_orders, patient_orders)
        for seed, _ in orders(5000, split)
    ]
    assert len(set(seeds)) == len(seeds)


def test_cases_are_run_in_their_order_and_scored(bed):
    ran = run_cases([(31, "flat"), (32, "blinks")], [bed], 1)
    assert [(one.seed, one.bed) for one in ran] == [(31, "invented"), (32, "invented")]
    for one in ran:
        made = case(one.seed, [bed], fault=one.outcome.truth.fault)
        assert one.outcome.truth == made.truth
    assert [one.outcome.truth.fault for one in ran] == ["flat", "blinks"]


# Scoring -------------------------------------------------------------------------------


def truth(fault="pops", *, sites=("T3",), montage="referential", **changes):
    what = FAULTS[fault]
    made = Truth(fault, what.cause, what.sign, "plain", montage, sites, 0.0, 60.0,
                 "present", "made up")  # fmt: skip
    return dataclasses.replace(made, **changes)


def entry(number, verdict, cause, *sites, **changes):
    made = Advice(number, verdict, cause, "apart", sites, "high", "present",
                  ((0.0, 60.0),), 1.0, "made up", ("check the lead", "re-prep"))  # fmt: skip
    return dataclasses.replace(made, **changes)


def test_a_site_is_right_if_the_leading_entry_has_it_first():
    assert score(truth(), [entry(1, "re-prep", "site", "T3")]).faultless
    # Two sites with mains: either will do, but it has to stand first.
    both = truth("mains at few sites", sites=("T3", "Cz"))
    assert score(both, [entry(1, "re-prep", "site", "Cz", "O1")]).right
    assert not score(both, [entry(1, "re-prep", "site", "O1", "Cz")]).right


@pytest.mark.parametrize(
    ("listed", "right", "first", "named", "innocent"),
    [
        ([], False, "none", False, ()),
        ([entry(1, "re-prep", "site", "C3")], False, "site", False, ("C3",)),
        ([entry(1, "re-prep", "site", "T7")], False, "site", False, ("T7",)),
        ([entry(1, "check", "ground")], False, "ground", False, ()),
        ([entry(1, "re-prep", "site")], False, "site", False, ("the site itself",)),
        # What asks the patient does not lead; what is watched does.
        ([entry(1, "ask", "patient", "T4"), entry(2, "re-prep", "site", "T3")],
         True, "patient", True, ()),
        ([entry(1, "watch", "site", "T3")], True, "site", True, ()),
        ([entry(1, "watch", "site", "C3"), entry(2, "check", "site", "T3")],
         False, "site", True, ()),
        # The number decides, not the place in the list.
        ([entry(2, "re-prep", "site", "T3"), entry(1, "re-prep", "site", "C3")],
         False, "site", True, ("C3",)),
        ([entry(1, "re-prep", "site", "T3"), entry(2, "re-prep", "site", "C3"),
          entry(3, "re-prep", "bridge", "C3", "P3")], True, "site", True, ("C3", "P3")),
        # The right site for the wrong cause: found, but not named.
        ([entry(1, "re-prep", "bridge", "T3", "C3")], True, "bridge", False, ("C3",)),
    ],
)  # fmt: skip
def test_a_list_for_a_site_fault(listed, right, first, named, innocent):
    found = score(truth(), listed)
    assert (found.right, found.first, found.named) == (right, first, named)
    assert found.innocent == innocent
    assert found.faultless == (right and not innocent)


def test_what_is_over_leads_although_nothing_is_to_be_done():
    cured = truth(state="cured", end=35.0)
    over = entry(1, "watch", "site", "T3", state="cured", stretches=((0.0, 35.0),))
    found = score(cured, [over])
    assert found.right
    assert found.state_right is True
    assert found.time_right is True
    calm = entry(1, "ask", "patient", "T3", state="past")
    assert not score(cured, [calm]).right


@pytest.mark.parametrize(
    ("stretches", "state", "time_right", "state_right"),
    [
        (((30.0, 60.0),), "present", True, True),
        (((30.0, 40.0), (50.0, 59.0)), "present", True, True),
        (((0.0, 60.0),), "past", True, False),
        (((0.0, 20.0),), "present", False, True),
        (((45.5, 60.0),), "present", False, True),
        ((), "present", False, True),
    ],
)
def test_time_and_state_of_the_entry_that_names_the_fault(
    stretches, state, time_right, state_right
):
    listed = [entry(1, "re-prep", "site", "T3", state=state, stretches=stretches)]
    found = score(truth(onset=30.0), listed)
    assert (found.time_right, found.state_right) == (time_right, state_right)


def test_of_an_entry_that_is_missing_neither_time_nor_state_is_told():
    found = score(truth(), [])
    assert found.time_right is None
    assert found.state_right is None


REFERENCE = entry(1, "re-prep", "reference", "reference")


@pytest.mark.parametrize(
    ("listed", "right", "innocent"),
    [
        ([REFERENCE], True, ()),
        ([entry(1, "check", "reference", "reference")], True, ()),
        ([REFERENCE, entry(2, "re-prep", "site", "T3")], True, ("T3",)),
        ([entry(1, "re-prep", "site", "T3"), entry(2, "check", "reference", "reference")],
         False, ("T3",)),
        ([entry(1, "check", "ground")], False, ()),
        ([], False, ()),
    ],
)  # fmt: skip
def test_a_list_for_a_reference_fault(listed, right, innocent):
    found = score(truth("pops in the reference", sites=("reference",)), listed)
    assert (found.right, found.innocent) == (right, innocent)


@pytest.mark.parametrize(
    ("listed", "right", "innocent"),
    [
        ([], True, ()),
        ([entry(1, "ask", "patient", "T4")], True, ()),
        ([entry(1, "watch", "site", "T3")], True, ()),
        ([entry(1, "check", "ground")], False, ()),
        ([REFERENCE], False, ("reference",)),
    ],
)
def test_of_a_reference_fault_nothing_is_left_in_a_double_banana(listed, right, innocent):
    hidden = truth("noisy reference", sites=("reference",), montage="double banana")
    found = score(hidden, listed)
    assert (found.right, found.innocent) == (right, innocent)


@pytest.mark.parametrize(
    ("cause", "right", "innocent"),
    [("ground", True, ()), ("reference", False, ("reference",))],
)
def test_ground_is_told_from_the_reference(cause, right, innocent):
    sites = ("reference",) if cause == "reference" else ()
    listed = [entry(1, "re-prep" if sites else "check", cause, *sites)]
    found = score(truth("mains everywhere", sites=()), listed)
    assert (found.right, found.innocent) == (right, innocent)


@pytest.mark.parametrize(
    ("listed", "pairs", "innocent"),
    [
        ([entry(1, "re-prep", "bridge", "C3", "P3", "F3")], 3, ()),
        ([entry(1, "re-prep", "bridge", "F3", "C3")], 1, ()),
        ([entry(1, "re-prep", "bridge", "F3", "C3"), entry(2, "watch", "bridge", "C3", "P3"),
          entry(3, "re-prep", "bridge", "P3", "F3")], 3, ()),
        ([entry(1, "re-prep", "site", "F3", "C3", "P3")], 0, ()),
        ([entry(1, "re-prep", "bridge", "F3", "Fz")], 0, ("Fz",)),
        ([], 0, ()),
    ],
)  # fmt: skip
def test_every_bridged_pair_is_to_be_named(listed, pairs, innocent):
    found = score(truth("bridge", sites=("F3", "C3", "P3")), listed)
    assert (found.pairs_named, found.innocent) == (pairs, innocent)
    assert found.right == (pairs == 3)


@pytest.mark.parametrize("fault", ["swapped labels", "tonic muscle", "gaze"])
def test_what_no_preparation_cures_must_not_lead_to_one(fault):
    here = truth(fault, sites=("T3", "T4") if fault == "swapped labels" else ())
    assert score(here, []).right
    assert score(here, [entry(1, "check", "placement", "T3", "T4")]).right
    assert score(here, [entry(1, "ask", "patient", "T3")]).right
    blamed = score(here, [entry(1, "ask", "patient"), entry(2, "re-prep", "site", "T3")])
    assert not blamed.right
    assert blamed.innocent == ("T3",)


@pytest.mark.parametrize(
    ("leading", "acted"),
    [
        (entry(1, "re-prep", "site", "T3"), True),
        (entry(1, "watch", "site", "T3"), False),
        (dataclasses.replace(entry(1, "watch", "site", "T3"), state="cured"), True),
        (entry(1, "re-prep", "site", "C3"), False),
    ],
)
def test_what_is_only_watched_is_told_from_what_is_acted_upon(leading, acted):
    assert score(truth(), [leading]).acted is acted


@pytest.mark.parametrize(
    ("fault", "what", "montage", "dead"),
    [
        ("flat", "dead at 0 uV", "double banana", True),
        ("flat", "dead at 0 uV", "referential", False),
        ("clipped", "an offset beyond 200 uV", "double banana", True),
        ("clipped", "sways to 3 times 200 uV", "double banana", False),
    ],
)
def test_a_dead_input_in_made_derivations_is_told_apart(fault, what, montage, dead):
    here = dataclasses.replace(truth(fault), what=what, montage=montage)
    assert here.dead_in_bipolar is dead


# Tables --------------------------------------------------------------------------------


def ran(seed, of, *listed):
    return Ran(seed, f"bed {seed % 2}", score(of, listed))


@pytest.fixture
def some():
    """Seven cases, of which 2, 4, 6 and 7 are not as they should be."""
    good = entry(1, "re-prep", "site", "T3")
    of_reference = truth("pops in the reference", sites=("reference",))
    return [
        ran(1, truth(), good),
        ran(2, truth(), entry(1, "re-prep", "site", "C3")),
        ran(3, of_reference, REFERENCE),
        ran(4, truth("mains everywhere", sites=()), REFERENCE),
        ran(5, dataclasses.replace(of_reference, montage="double banana")),
        ran(6, truth("bridge", sites=("F3", "C3", "P3")),
            entry(1, "re-prep", "bridge", "F3", "C3")),
        ran(7, truth("blinks", sites=()), entry(1, "re-prep", "site", "Fp1")),
        ran(8, truth(strength="mild")),
    ]  # fmt: skip


def test_the_aims_count_what_they_say(some):
    found = {
        aim.name.split(":")[0]: (aim.found, aim.among, aim.met)
        for aim in table.simulated_aims(some)
    }
    assert found == {
        "plain site fault": (1, 2, False),
        "... without dead inputs in the double banana": (1, 2, False),
        "... and of these it is not only watched": (1, 2, False),
        "reference fault, referential": (1, 1, True),
        "... plain ones": (1, 1, True),
        "mains everywhere": (0, 1, False),
        "bridged pairs named": (1, 3, False),
        "muscle or eye alone": (1, 1, False),
        "... that was not before they were put in": (1, 1, False),
    }


def test_what_was_advised_before_the_patient_did_anything_is_told_apart():
    blinks = truth("blinks", sites=())
    blamed = score(blinks, [entry(1, "re-prep", "site", "Fp1")])
    aims = {
        aim.name.split(":")[0]: aim.found
        for aim in table.simulated_aims([Ran(1, "bed", blamed, before=("Fp1",))])
    }
    assert aims["muscle or eye alone"] == 1
    assert aims["... that was not before they were put in"] == 0


def test_a_case_brings_the_recording_before_anything_was_put_in(bed):
    one = case(5, [bed], fault="blinks", strength="plain", montage="referential")
    n = one.recording.n_samples
    changed = one.recording.read(0, n) - one.before.read(0, n)
    assert one.before.labels == one.recording.labels
    assert np.abs(changed[one.recording.labels.index("EEG Fp1-LE")]).max() > 50


@pytest.mark.parametrize(
    ("found", "among", "limit", "at_least", "met", "share"),
    [
        (19, 20, 0.95, True, True, "95.0 %"),
        (94, 100, 0.95, True, False, "94.0 %"),
        (2, 100, 0.02, False, True, "2.0 %"),
        (3, 100, 0.02, False, False, "3.0 %"),
        (0, 100, 0.0, False, True, "0.0 %"),
        (1, 100, 0.0, False, False, "1.0 %"),
        (0, 0, 0.95, True, None, "-"),
    ],
)
def test_an_aim_is_met_from_its_limit_on(found, among, limit, at_least, met, share):
    aim = table.Aim("this", found, among, limit, at_least)
    assert aim.met is met
    assert aim.cells[2:4] == [f"{found} of {among}", share]
    assert aim.cells[4] == {True: "met", False: "missed", None: "-"}[met]


def lines_of(text):
    return [line for line in text.splitlines() if line.startswith("| ")]


def test_the_table_of_causes_has_a_row_per_cause_strength_and_montage(some):
    text = table.cause_table(some, "check")
    assert text.startswith("**SIMULATED faults over real background (check).")
    assert "8 cases over 2 recordings." in text
    rows = lines_of(text)[2:]
    # cause, strength, montage, cases; site, reference, ground, bridge, placement, patient,
    # none; right, innocent
    assert rows == [
        "| site | plain | referential | 2 | 2 | - | - | - | - | - | - | 1/2 | 1 |",
        "| site | mild | referential | 1 | - | - | - | - | - | - | 1 | 0/1 | 0 |",
        "| reference | plain | referential | 1 | - | 1 | - | - | - | - | - | 1/1 | 0 |",
        "| reference | plain | double banana | 1 | - | - | - | - | - | - | 1 | 1/1 | 0 |",
        "| ground | plain | referential | 1 | - | 1 | - | - | - | - | - | 0/1 | 1 |",
        "| bridge | plain | referential | 1 | - | - | - | 1 | - | - | - | 0/1 | 0 |",
        "| patient | plain | referential | 1 | 1 | - | - | - | - | - | - | 0/1 | 1 |",
    ]


def test_the_table_of_faults_keeps_apart_what_bipolar_cannot_show(some):
    rows = lines_of(table.fault_table(some, "check"))[2:]
    assert rows[0] == "| pops | 1/2 | 0/1 | 1/3 | 1/1 | 1/1 | 1 |"
    assert "| pops in the reference | 1/1 | - | 1/1 | 1/1 | 1/1 | 0 |" in rows
    assert (
        "| pops in the reference, absent in bipolar | 1/1 | - | 0/1 | - | - | 0 |" in rows
    )


def test_failures_are_listed_with_what_makes_them_again_and_what_was_said(some):
    listed = table.failures(some, 10)
    assert [text.split(",")[0] for text in listed] == [
        "case(2", "case(4", "case(6", "case(7", "case(8",
    ]  # fmt: skip
    second = listed[0]
    assert "fault='pops') over bed 0: not solved; re-prep of innocent C3" in second
    assert "pops (plain, referential) at T3: made up; 0 to 60 s, present" in second
    assert "1. [site, present, high] C3 re-prep: made up; check the lead" in second
    assert "no advice" in listed[-1]
    assert table.failures(some, 1) == listed[:1]


def test_untouched_recordings_have_aims_and_a_table_of_their_own():
    left = [
        Left("a", "eegmat", "referential", True, (), ()),
        Left("a", "eegmat", "double banana", True, ("O1",), ("1. O1 re-prep: x; y",)),
        Left("b", "eegmat", "referential", False, (), ("1. T3 watch: x; y",)),
        Left("c", "eegmmidb_s001", "referential", False, (), ()),
    ]
    aims = table.untouched_aims(left)
    assert [(aim.found, aim.among, aim.met) for aim in aims] == [
        (1, 4, False),
        (0, 2, True),
    ]
    text = table.untouched_table(left)
    assert text.startswith("**REAL.")
    assert "4 recordings: 3 files" in text
    assert lines_of(text)[2:] == [
        "| eegmat | referential | yes | 1 | 0 | 0 |",
        "| eegmat | double banana | yes | 1 | 1 | 1 |",
        "| eegmat | referential | no | 1 | 0 | 1 |",
        "| eegmmidb_s001 | referential | no | 1 | 0 | 0 |",
    ]
    (wrong,) = table.untouched_failures(left, 5)
    assert wrong == "a (double banana), untouched:\n  1. O1 re-prep: x; y"


# The script ----------------------------------------------------------------------------


@pytest.fixture(scope="module")
def script():
    path = ROOT / "scripts" / "evaluate_sites.py"
    spec = importlib.util.spec_from_file_location("evaluate_sites", path)
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    return module


@pytest.fixture
def made_up(script, monkeypatch, some):
    """The script with cases that were run already."""
    left = [Left("a", "eegmat", "referential", False, (), ())]
    monkeypatch.setattr(script, "sources", lambda root, split: [])
    monkeypatch.setattr(script, "untouched", lambda root, split: [])
    monkeypatch.setattr(script, "run_untouched", lambda recordings, jobs: left)
    monkeypatch.setattr(
        script,
        "run_cases",
        lambda orders, beds, jobs: [
            one
            for one in some
            if (one.outcome.truth.cause == "patient") == (orders[0][1] in PATIENT_MIX)
        ],
    )

    def run(*arguments):
        monkeypatch.setattr(sys, "argv", ["evaluate_sites.py", *map(str, arguments)])
        return script.main()

    return run


def test_every_table_has_its_block_in_the_text(made_up, tmp_path, capsys):
    text = tmp_path / "SITE_ADVICE.md"
    shipped = (ROOT / "models" / "SITE_ADVICE.md").read_text(encoding="utf-8")
    text.write_text(shipped, encoding="utf-8")
    assert made_up("--split", "check", "--write", "--text", text) == 0
    filled = text.read_text(encoding="utf-8")
    assert filled.count("<!-- results: ") == 5
    assert "| bridged pairs named | at least 95 % | 1 of 3 | 33.3 % | missed |" in filled
    assert "| eegmat | referential | no | 1 | 0 | 0 |" in filled
    assert "case(2" not in capsys.readouterr().out
    for name in ("aims", "causes", "faults", "untouched aims", "untouched"):
        assert fill(filled, f"site advice {name}", "new") != filled


def test_failures_are_listed_where_it_may_be_looked_at(made_up, capsys):
    assert made_up() == 0
    assert capsys.readouterr().out.count("case(") == 5
    assert made_up("--list", 2) == 0
    assert capsys.readouterr().out.count("case(") == 2


@pytest.mark.parametrize(
    "arguments",
    [("--write",), ("--write", "--split", "check", "--cases", 40), ("--cases", 1)],
)
def test_too_little_is_neither_run_nor_written(made_up, capsys, arguments):
    assert made_up(*arguments) == 1
    said = capsys.readouterr()
    assert said.out == ""
    assert "given w" in said.err


# Over real background ------------------------------------------------------------------


@pytest.mark.corpora
def test_real_backgrounds_carry_mains_and_there_are_enough_of_them(corpora):
    every = untouched(corpora, "check")
    assert len(every) >= 100
    beds = sources(corpora, "development")
    assert {source.corpus for source in beds} == {"eegmat", "eegmmidb_s001"}
    for source, n_sites in ((beds[0], 19), (beds[-1], 64)):
        one = case(3, [source], fault="mains at few sites", strength="plain",
                   montage="referential", course="throughout")  # fmt: skip
        assert len(one.recording.labels) == n_sites
        assert 60 <= one.recording.duration <= 120
        row = one.recording.labels.index(f"EEG {one.truth.sites[0]}-LE")
        rate = one.recording.sampling_rate
        freqs, power = welch(signal(one)[row], rate, nperseg=round(2 * rate))
        beside = power[(np.abs(freqs - 50) > 3) & (np.abs(freqs - 50) < 8)]
        assert power[np.abs(freqs - 50) < 1].max() > 30 * np.median(beside)
        assert np.median(beside) > 1e-4  # what the recorder took is filled in
    bipolar = next(x for x in every if x.montage == "double banana" and x.seen)
    assert "F7-T3" in bipolar.recording().labels
