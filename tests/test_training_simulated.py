"""Simulated copies: what is drawn, in which conditions, and that these tell nothing of it."""

import dataclasses
import math

import numpy as np
import pytest
from rows import EYE, MAINS, MUSCLE, POP, bare, invented, same
from scipy.signal import butter, sosfiltfilt, welch
from scipy.stats import chi2_contingency, ks_2samp
from signals import sine

from artifactlens.kinds import KIND_NAMES
from artifactlens.simulation import lids
from artifactlens.simulation.lookalikes import LOOK_ALIKES
from artifactlens.simulation.scene import Scene
from artifactlens.sites import site_position
from artifactlens.training import draws, simulated
from artifactlens.training.corpora.backgrounds import mental_arithmetic
from artifactlens.training.draws import ABSENT_SHARE, Draw, draw_artifacts
from artifactlens.training.draws_other import SWAY_SHARE, YOUNG, draw_others
from artifactlens.training.examples import CLEAN, PRESENT, UNKNOWN
from artifactlens.training.situation import (
    Recorder,
    Situation,
    as_recording,
    draw_situation,
)

PLAIN = Situation(
    sfreq=256.0, extended=True, low_pass=None, notch=None, line=50.0, high_pass=None,
    montage="ears", n_sites=19, header=True,
)  # fmt: skip
AS_RECORDED = dataclasses.replace(PLAIN, extended=False)
NAMES = ("Fp1", "C4", "O2", "A1", "A2")


def draw_at(seed, *, seconds=10.0, sfreq=128.0, names=NAMES):
    """A draw at three sites and two reference electrodes."""
    places = np.array([site_position(name) for name in names])
    scene = Scene(places, round(seconds * sfreq), sfreq)
    return Draw(scene, np.random.default_rng(seed), 50.0, 2)


# What is drawn -------------------------------------------------------------------------


def test_sizes_are_drawn_logarithmically_between_both_ends():
    draw = draw_at(0)
    sizes = np.array([draw.between(2.0, 32.0) for _ in range(4000)])
    assert 2 <= sizes.min() < 2.1 < 30 < sizes.max() <= 32
    # Each of the four octaves holds a quarter: +- 4 sigma of 4000 draws.
    share = np.histogram(np.log2(sizes), [1, 2, 3, 4, 5])[0] / 4000
    np.testing.assert_allclose(share, 0.25, atol=4 * math.sqrt(0.25 * 0.75 / 4000))


@pytest.mark.parametrize("seconds", [1.0, 8.0, 62.0])
def test_moments_and_stretches_lie_in_the_scene(seconds):
    draw = draw_at(0, seconds=seconds)
    for _ in range(200):
        moments = draw.moments(6.0)
        assert moments == sorted(moments)
        assert moments
        assert 0.5 <= moments[0] <= moments[-1] < seconds
        onset, duration = draw.stretch(4, 20)
        assert onset >= 0
        assert duration > 0
        assert onset + duration <= seconds


def test_kinds_that_are_not_asked_for_are_not_drawn():
    for seed in range(5):
        assert set(draw_artifacts(draw_at(seed), ("pop", "mains"))) == {"pop", "mains"}


@pytest.mark.parametrize("kinds", [("eye",), ("eye", "muscle")])
def test_a_forced_blink_brings_muscle_only_where_muscle_is_told_apart(monkeypatch, kinds):
    made = []

    def forced(draw):
        made.extend(lids.forced_blinks(draw.scene, draw.rng, [1.0, 4.0], rms_uv=30.0))
        return list(made)

    monkeypatch.setattr(draws, "ABSENT_SHARE", 0.0)
    monkeypatch.setitem(draws._DRAWS, "eye", forced)
    monkeypatch.setitem(draws._DRAWS, "muscle", lambda draw: [])
    fields = draw_artifacts(draw_at(0, sfreq=256.0), kinds)
    of_eye, of_muscle = made
    assert np.abs(of_muscle.potentials).max() > 30
    np.testing.assert_array_equal(fields["eye"], of_eye.potentials)
    assert set(fields) == set(kinds)
    if "muscle" in kinds:
        np.testing.assert_array_equal(fields["muscle"], of_muscle.potentials)


def test_a_pop_of_a_linked_reference_is_the_same_at_all_its_electrodes():
    found = []
    for seed in range(60):
        (pop,) = draw_artifacts(draw_at(seed), ("pop",)).values()
        np.testing.assert_array_equal(pop[-1], pop[-2])
        found.append((pop[-1].any(), pop[:-2].any()))
    # In some copies only the reference has them, in some only sites, in some both or none.
    assert set(found) == {(False, False), (False, True), (True, False), (True, True)}


def test_others_are_named_and_happen_within_the_copy():
    names = set()
    for seed in range(250):
        draw = draw_at(seed, seconds=20.0, sfreq=100.0)
        field, happenings = draw_others(draw)
        assert field.shape == (5, 2000)
        assert np.isfinite(field).all()
        for name, onset, end in happenings:
            assert 0 <= onset < end <= 20.0
            names.add(name)
        if happenings:
            assert field.any()
    assert names <= set(LOOK_ALIKES) | {"sway"}
    assert {"sway", *YOUNG} <= names
    assert len(names - {"sway"}) == len(LOOK_ALIKES)


def test_others_come_again_from_the_same_seed_and_differ_between_seeds():
    (first, told), (again, told_again) = (draw_others(draw_at(3)) for _ in range(2))
    np.testing.assert_array_equal(first, again)
    assert told == told_again
    assert told != draw_others(draw_at(4))[1]


def test_a_swaying_electrode_is_never_one_of_the_reference(monkeypatch):
    rows = []

    def sway(scene, rng, row, *size):
        rows.append(row)
        return scene.simulated("other", np.zeros((scene.n_sites, scene.n_samples)), [])

    monkeypatch.setattr("artifactlens.training.draws_other.electrode.sway", sway)
    monkeypatch.setattr("artifactlens.training.draws_other.YOUNG_SHARE", 0)
    monkeypatch.setattr("artifactlens.training.draws_other.PATTERN_SHARE", 0)
    for seed in range(300):
        draw_others(draw_at(seed, seconds=2.0))
    assert set(rows) == {0, 1, 2}
    assert len(rows) / 300 == pytest.approx(SWAY_SHARE, abs=0.08)


# Conditions tell nothing of the label --------------------------------------------------


@pytest.fixture(scope="module")
def drawn():
    """Conditions, and which kinds were put in, as simulate draws them."""
    conditions, put_in = [], []
    for number in range(400):
        draw = draw_at(70_000 + number)
        conditions.append(draw_situation(bare(), draw.rng))
        fields = draw_artifacts(draw._replace(line=conditions[-1].line), KIND_NAMES)
        put_in.append([bool(fields[kind].any()) for kind in KIND_NAMES])
    return conditions, np.array(put_in)


@pytest.mark.parametrize(
    "condition",
    ["sfreq", "extended", "low_pass", "notch", "line", "high_pass", "montage", "n_sites",
     "header"],
)  # fmt: skip
@pytest.mark.parametrize("kind", range(4), ids=KIND_NAMES)
def test_conditions_tell_nothing_of_what_is_put_in(drawn, condition, kind):
    conditions, put_in = drawn
    values = np.array([str(getattr(entry, condition)) for entry in conditions])
    names, place = np.unique(values, return_inverse=True)
    assert len(names) > 1
    counts = np.zeros((len(names), 2))
    np.add.at(counts, (place, put_in[:, kind].astype(int)), 1)
    assert chi2_contingency(counts).pvalue > 0.001


@pytest.mark.parametrize("condition", ["gain", "noise_uv"])
@pytest.mark.parametrize("kind", range(4), ids=KIND_NAMES)
def test_sizes_of_background_and_noise_tell_nothing_of_what_is_put_in(
    drawn, condition, kind
):
    conditions, put_in = drawn
    values = np.array([getattr(entry, condition) for entry in conditions])
    low, high = {"gain": (0.6, 3.0), "noise_uv": (0.3, 4.0)}[condition]
    assert low <= values.min() < 1.1 * low < 0.9 * high < values.max() <= high
    here = put_in[:, kind]
    assert ks_2samp(values[here], values[~here]).pvalue > 0.001


def test_kinds_are_put_in_independently_of_each_other(drawn):
    _, put_in = drawn
    share = put_in.mean(axis=0)
    here = 1 - ABSENT_SHARE
    # A few eye draws come out empty, 0.4 x 0.8^5 x 0.9^4 x 0.85^3 x 0.5 of them; forced
    # blinks bring muscle to a tenth of those that have eyes.
    empty = 0.4 * 0.8**5 * 0.9**4 * 0.85**3 * 0.5
    expected = [here * (1 - empty), here + 0.1 * here * (1 - here), here, here]
    np.testing.assert_allclose(share, expected, atol=0.08)
    off_diagonal = np.corrcoef(put_in.T)[np.triu_indices(4, 1)]
    assert np.abs(off_diagonal).max() < 4 / math.sqrt(len(put_in))


def test_a_background_of_full_bandwidth_is_always_taken_as_such():
    rng = np.random.default_rng(0)
    found = [draw_situation(bare(160.0, None, None), rng) for _ in range(50)]
    assert all(entry.extended and entry.sfreq <= 160 for entry in found)
    assert all(
        entry.low_pass is None or entry.low_pass < entry.sfreq / 2 for entry in found
    )


def test_mains_that_is_in_a_background_by_nature_is_not_judged():
    background = bare(160.0, None, None, line_hz=60.0)
    rng = np.random.default_rng(0)
    assert {draw_situation(background, rng).line for _ in range(50)} == {50.0}


# What the recorder does to it ----------------------------------------------------------


def power_in(data, sfreq, low, high):
    freqs, psd = welch(data, sfreq, nperseg=round(sfreq), axis=-1)
    return psd[..., (freqs >= low) & (freqs <= high)].mean()


def test_artifact_falls_no_less_than_the_background_that_it_is_put_into():
    rng = np.random.default_rng(0)
    white = rng.standard_normal((4, 20_000)) * 40
    background = invented(sfreq=500.0)
    through_own = sosfiltfilt(butter(8, 45.0, fs=500.0, output="sos"), white, axis=1)
    recorder = Recorder(
        dataclasses.replace(AS_RECORDED, sfreq=500.0), background, background.sfreq
    )
    through_recorder = recorder(white)
    for low, high in ((60, 80), (80, 120), (120, 200)):
        kept = power_in(through_recorder, 500, low, high)
        assert kept <= max(power_in(through_own, 500, low, high), 1e-12)
    # And below the low-pass nothing is lost, or the artifact would be another one.
    assert power_in(through_recorder, 500, 5, 38) == pytest.approx(
        power_in(white, 500, 5, 38), rel=0.02
    )


def test_the_notch_of_the_background_acts_on_the_artifact_too():
    background = invented(sfreq=500.0)._replace(kept_to_hz=90.0)
    hum = sine(20_000, 500.0, 50.0, 30.0)[None]
    recorder = Recorder(dataclasses.replace(AS_RECORDED, sfreq=500.0), background, 500.0)
    middle = slice(2500, 17_500)
    assert np.abs(recorder(hum)[:, middle]).max() < 0.01
    # What was recorded has been through it before.
    assert np.abs(recorder(hum, own=True)[:, middle]).max() == pytest.approx(30, rel=0.01)
    extended = dataclasses.replace(PLAIN, sfreq=500.0)
    passed = Recorder(extended, background, 500.0)(hum)
    assert np.abs(passed[:, middle]).max() == pytest.approx(30, rel=0.01)


def test_a_header_states_the_filters_or_nothing():
    background = invented(seconds=2.0)
    silent = np.zeros((2, 400), np.float32) + np.arange(400)
    for header in (True, False):
        situation = dataclasses.replace(
            PLAIN, sfreq=200.0, low_pass=70.0, notch=60.0, high_pass=0.3, header=header
        )
        made = as_recording(
            silent, ["Fp1-LE", "Fp2-LE"], situation, Recorder(situation, background, 200.0)
        )
        (stated,) = set(made.filters)
        assert (stated.high_pass, stated.low_pass, stated.notch) == (
            (0.3, 70.0, 60.0) if header else (None, None, None)
        )


# A copy --------------------------------------------------------------------------------


def copy_in(monkeypatch, situation, background, *, put_in=None, seed=3, kinds=KIND_NAMES):
    """A copy in these conditions; ``put_in`` makes the fields of a scene, if given."""
    monkeypatch.setattr(simulated, "draw_situation", lambda background, rng: situation)
    if put_in is not None:
        monkeypatch.setattr(
            simulated, "draw_artifacts", lambda draw, kinds: put_in(draw.scene)
        )
        monkeypatch.setattr(
            simulated, "draw_others",
            lambda draw: (np.zeros((draw.scene.n_sites, draw.scene.n_samples)), []),
        )  # fmt: skip
    return simulated.simulate(background, seed, kinds=kinds)


def nothing(scene):
    return {kind: np.zeros((scene.n_sites, scene.n_samples)) for kind in KIND_NAMES}


def signal_of(copy):
    return copy.recording.read(0, copy.recording.n_samples).astype(float)


def test_a_copy_depends_on_its_seed_alone():
    background = invented()
    np.random.seed(1)  # the global state must not matter
    first = simulated.simulate(background, 11)
    np.random.seed(2)
    again = simulated.simulate(background, 11)
    assert same(first.examples, again.examples)
    assert signal_of(first).tobytes() == signal_of(again).tobytes()
    assert not same(first.examples, simulated.simulate(background, 12).examples)
    assert set(first.examples.person) == {"invented-00"}
    assert set(first.examples.origin) == {"simulated: invented"}


def test_rows_of_a_copy_are_the_cells_that_were_measured():
    for seed in (1, 2, 3):
        made = simulated.simulate(invented(seconds=8.0), seed)
        measured = np.isfinite(made.measured.table.values[0])
        assert len(made.examples) == measured.sum()
        np.testing.assert_array_equal(made.examples.second, np.nonzero(measured)[0])
        assert made.recording.n_samples == len(made.measured.grid) * int(
            made.recording.sampling_rate
        )


def test_a_made_up_reference_has_no_rows(monkeypatch):
    background = invented(seconds=6.0)
    rows = {
        montage: len(
            copy_in(
                monkeypatch, dataclasses.replace(PLAIN, sfreq=200.0, montage=montage),
                background, put_in=nothing,
            ).examples
        )
        for montage in ("ears", "system")
    }  # fmt: skip
    assert rows == {"ears": 6 * 20, "system": 6 * 19}


def test_what_the_tool_will_not_judge_is_not_learnt(monkeypatch):
    background = invented(seconds=6.0)
    for notch, judged in ((None, True), (50.0, False)):
        situation = dataclasses.replace(PLAIN, sfreq=200.0, notch=notch)
        made = copy_in(monkeypatch, situation, background, put_in=nothing).examples
        assert ((made.truth[:, MAINS] == CLEAN).all()) == judged
        assert ((made.truth[:, MAINS] == UNKNOWN).all()) != judged
        assert (made.truth[:, [EYE, MUSCLE, POP]] == CLEAN).all()


def test_the_gain_multiplies_the_background_alone(monkeypatch):
    background = invented(seconds=6.0)

    def pulse(scene):
        fields = nothing(scene)
        fields["pop"][2, 500:] = 80.0
        return fields

    once, thrice = (
        signal_of(
            copy_in(
                monkeypatch, dataclasses.replace(AS_RECORDED, sfreq=200.0, gain=gain),
                background, put_in=pulse,
            )
        )
        for gain in (1.0, 3.0)
    )  # fmt: skip
    own = background.potentials
    np.testing.assert_allclose(thrice - once, 2 * own, atol=1e-3 * np.abs(own).max())


def test_noise_of_the_amplifier_is_white_and_has_about_its_size(monkeypatch):
    background = invented(seconds=10.0, kept_to_hz=None)
    quiet, low, high = (
        signal_of(
            copy_in(
                monkeypatch, dataclasses.replace(PLAIN, sfreq=200.0, noise_uv=size),
                background, put_in=nothing,
            )
        )
        for size in (0.0, 1.0, 4.0)
    )  # fmt: skip
    np.testing.assert_allclose(high - quiet, 4 * (low - quiet), atol=1e-3)
    rms = (low - quiet).std(axis=1)
    # Electrodes differ by a log-normal factor of sigma 0.3.
    assert np.median(rms) == pytest.approx(1.0, abs=0.3)
    assert np.log(rms).std() == pytest.approx(0.3, abs=0.2)
    white = (low - quiet) / rms[:, None]
    slow, fast = (power_in(white, 200, *band) for band in ((5, 20), (60, 90)))
    assert fast == pytest.approx(slow, rel=0.15)


def test_a_pattern_names_the_seconds_that_it_touches(monkeypatch):
    monkeypatch.setattr(
        simulated, "draw_others",
        lambda draw: (
            np.zeros((draw.scene.n_sites, draw.scene.n_samples)), [("mu", 1.9, 3.1)],
        ),
    )  # fmt: skip
    monkeypatch.setattr(
        simulated, "draw_artifacts", lambda draw, kinds: nothing(draw.scene)
    )
    monkeypatch.setattr(
        simulated, "draw_situation",
        lambda background, rng: dataclasses.replace(PLAIN, sfreq=200.0),
    )  # fmt: skip
    made = simulated.simulate(invented(seconds=6.0), 0).examples
    named = {int(second) for second in made.second[made.look_alike == "mu"]}
    assert named == {1, 2, 3}
    assert set(made.look_alike) == {"", "mu"}


def test_muscle_put_into_a_low_passed_copy_leaves_nothing_above(monkeypatch):
    def strong(scene):
        rng = np.random.default_rng(5)
        return {"muscle": 40 * rng.standard_normal((scene.n_sites, scene.n_samples))}

    made = copy_in(
        monkeypatch, dataclasses.replace(AS_RECORDED, sfreq=200.0, noise_uv=4.0),
        invented(sfreq=200.0), put_in=strong, kinds=("muscle",),
    )  # fmt: skip
    assert (made.examples.truth[:, MUSCLE] == PRESENT).mean() > 0.9
    assert (made.examples.truth[:, [EYE, POP, MAINS]] == UNKNOWN).all()
    data = signal_of(made)
    fall = 10 * np.log10(power_in(data, 200, 62, 95) / power_in(data, 200, 25, 40))
    # sosfiltfilt of order 8 keeps -40 dB at 60 Hz of what it lets through
    assert fall < -40
    assert {entry.low_pass for entry in made.recording.filters} == {45.0}
    assert {entry.notch for entry in made.recording.filters} == {50.0}


# With the recordings -------------------------------------------------------------------


@pytest.mark.corpora
def test_artifact_falls_no_less_than_eegmat_does(corpora):
    (background, *_) = mental_arithmetic(corpora / "eegmat", range(1))
    rate = background.sfreq
    recorder = Recorder(dataclasses.replace(AS_RECORDED, sfreq=rate), background, rate)
    white = np.random.default_rng(0).standard_normal((4, 20_000))
    gain = power_in(recorder(white), rate, 62, 90) / power_in(white, rate, 62, 90)
    own = power_in(background.potentials, rate, 62, 90)
    below = power_in(background.potentials, rate, 30, 38)
    # Without any filter scalp power falls from 34 to 76 Hz by (76 / 34)^2.9 (floor.py).
    assert gain <= own / below * (76 / 34) ** 2.9
