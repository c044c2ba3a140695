"""Truth per cell by hand: from which size a kind is present at a site, in any montage."""

import dataclasses
import math
from types import SimpleNamespace

import numpy as np
import pytest
from rows import EYE, MAINS, MUSCLE, POP
from signals import SITES, bump, noise, row, sine, step, ten_twenty

from artifactlens.epochs import epoch_grid
from artifactlens.frames import build_frame
from artifactlens.recording import from_array
from artifactlens.simulation import eye
from artifactlens.sites import site_position
from artifactlens.training.examples import CLEAN, PRESENT, UNKNOWN
from artifactlens.training.labels import label_cells
from artifactlens.training.situation import Situation, in_montage

PLAIN = Situation(
    sfreq=256.0, extended=True, low_pass=None, notch=None, line=50.0, high_pass=None,
    montage="ears", n_sites=19, header=True,
)  # fmt: skip
SECONDS, RATE = 8, 256.0
N = round(SECONDS * RATE)


def labelled(montage, fields, *, names=SITES, situation=PLAIN, quiet=None):
    """Truth and strength of these fields, {kind: {site or "ears": trace}}, over noise."""
    situation = dataclasses.replace(situation, montage=montage)
    quiet = ten_twenty(SECONDS, RATE)[: len(names)] if quiet is None else quiet
    electrodes = {}
    for kind, traces in fields.items():
        field = np.zeros((len(names) + 1, N))
        for site, trace in traces.items():
            field[len(names) if site == "ears" else names.index(site)] = trace
        electrodes[kind] = field
    channels = quiet + sum(field[:-1] - field[-1] for field in electrodes.values())
    data, labels, reference = in_montage(
        situation, channels, names, np.random.default_rng(0)
    )
    recording = from_array(data.astype(np.float32), RATE, labels)
    frame = build_frame(recording.labels, recording.types, recording.positions)
    grid = epoch_grid(recording)
    truth, strength = label_cells(
        frame, grid.start, grid.n_samples, RATE, names, electrodes, quiet, situation,
        reference,
    )  # fmt: skip
    return SimpleNamespace(truth=truth, strength=strength, sites=frame.sites, frame=frame)


def cells(found, kind, value):
    """(second, site) of all cells with this truth."""
    seconds, sites = np.nonzero(found.truth[kind] == value)
    return {(int(s), found.sites[r]) for s, r in zip(seconds, sites, strict=True)}


@pytest.mark.parametrize("montage", ["ears", "average", "bipolar", "Cz"])
def test_a_pop_of_one_electrode_is_the_truth_of_that_site_alone(montage):
    pop = step(N, RATE, 3.5, 200.0)
    found = labelled(montage, {"pop": {"F3": pop}})
    assert cells(found, POP, PRESENT) == {(3, "F3")}
    assert cells(found, POP, UNKNOWN) == set()
    assert found.strength[POP, 3, found.sites.index("F3")] == pytest.approx(200)
    assert set(found.sites) - {"reference"} >= set(SITES) - {"Cz"}


def test_a_pop_of_the_linked_reference_is_the_truth_of_the_reference_alone():
    found = labelled("ears", {"pop": {"ears": step(N, RATE, 3.5, 200.0)}})
    assert cells(found, POP, PRESENT) == {(3, "reference")}
    assert cells(found, POP, UNKNOWN) == set()


def test_a_pop_at_cz_is_the_truth_of_the_reference_where_cz_is_the_reference():
    found = labelled("Cz", {"pop": {"Cz": step(N, RATE, 3.5, 200.0)}})
    assert cells(found, POP, PRESENT) == {(3, "reference")}
    assert found.frame.canonical[found.sites.index("reference")] == "Cz"


@pytest.mark.parametrize("montage", ["average", "bipolar", "Cz"])
def test_a_pop_of_the_ears_is_nowhere_where_the_ears_cancel(montage):
    found = labelled(montage, {"pop": {"ears": step(N, RATE, 3.5, 200.0)}})
    assert cells(found, POP, PRESENT) == set()


def test_a_pop_in_a_system_reference_recording_is_the_truth_of_its_site():
    found = labelled("system", {"pop": {"Fz": step(N, RATE, 3.5, 200.0)}})
    assert cells(found, POP, PRESENT) == {(3, "Fz")}


def test_pops_are_called_by_their_size_and_tail():
    # tau 0.5 s: what is left in the next second is unknown while it moves by 15 uV or more.
    found = labelled(
        "ears",
        {
            "pop": {
                "C3": step(N, RATE, 2.5, 200.0, tau=0.5),
                "P3": step(N, RATE, 2.5, 10.0),
                "O1": step(N, RATE, 2.5, 3.0),
            }
        },
        quiet=np.zeros((19, N)),
    )
    assert cells(found, POP, PRESENT) == {(2, "C3")}
    # 200 e^-1 = 74 at 3.0 s falls by 64, e^-3 of 200 = 10 by 9; 10 uV are no clear case.
    assert cells(found, POP, UNKNOWN) == {(3, "C3"), (2, "P3")}


def test_a_pop_within_the_usual_steps_is_not_present():
    quiet = np.zeros((19, N))
    quiet[row("C3")] = sine(N, RATE, 30.0, 50.0)  # 16 ms of 30 Hz: steps near 100 uV
    found = labelled("ears", {"pop": {"C3": step(N, RATE, 3.5, 120.0)}}, quiet=quiet)
    assert cells(found, POP, PRESENT) == set()
    assert cells(found, POP, UNKNOWN) == {(3, "C3")}


def test_mains_at_one_electrode_is_the_truth_of_that_site():
    sizes = {"O2": 10.0, "C3": 2.1, "C4": 1.4, "P3": 1.1, "P4": 0.9}
    found = labelled(
        "ears", {"mains": {site: sine(N, RATE, 50.0, size) for site, size in sizes.items()}}
    )
    every = range(SECONDS)
    present, unknown = cells(found, MAINS, PRESENT), cells(found, MAINS, UNKNOWN)
    assert present == {(second, site) for second in every for site in ("O2", "C3")}
    assert unknown == {(second, site) for second in every for site in ("C4", "P3")}
    size = found.strength[MAINS, :, found.sites.index("O2")]
    np.testing.assert_allclose(size, 10.0, rtol=1e-3)  # amplitude: half of peak to peak


def test_mains_under_strong_fast_activity_is_not_present():
    quiet = noise(19, N, RATE, exponent=0.0, rms_uv=100.0)
    # 100 uV rms over 128 Hz put 78 uV^2 into each hertz, 4 uV of mains 8 uV^2 in all.
    found = labelled("ears", {"mains": {"O2": sine(N, RATE, 50.0, 4.0)}}, quiet=quiet)
    assert cells(found, MAINS, PRESENT) == set()


def test_only_the_line_frequency_of_the_situation_counts_as_mains():
    found = labelled("ears", {"mains": {"O2": sine(N, RATE, 60.0, 10.0)}})
    assert cells(found, MAINS, PRESENT) == set()


def test_a_blink_is_the_truth_of_the_sites_that_it_moves():
    where = [site_position(name) for name in (*SITES, "A1", "A2")]
    blink = 100 * eye.blink_wave(np.arange(N) / RATE, 3.4, 0.3)
    field = np.outer(eye.blink_map(np.array(where)), blink)
    at = dict(zip(SITES, field[:-2], strict=True)) | {"ears": field[-2:].mean(axis=0)}
    found = labelled("ears", {"eye": at})
    present, clean = cells(found, EYE, PRESENT), cells(found, EYE, CLEAN)
    assert {(3, "Fp1"), (3, "Fp2")} <= present
    assert {site for _, site in present} <= {"Fp1", "Fp2", "F7", "F8", "F3", "F4", "Fz"}
    assert {(3, site) for site in ("C3", "Cz", "C4", "P3", "Pz", "P4", "O1", "O2")} <= clean
    # The truth is the size of the field, against the sites behind, site by site.
    behind = np.mean([at[site] for site in ("P3", "Pz", "P4", "O1", "O2")], axis=0)
    size = {
        "reference" if site == "ears" else site: np.ptp(trace - behind)
        for site, trace in at.items()
    }
    weak = {(3, site) for site, value in size.items() if 10 <= value < 30}
    assert weak
    assert cells(found, EYE, UNKNOWN) == weak
    for number, site in enumerate(found.sites):
        assert found.strength[EYE, 3, number] == pytest.approx(size[site], rel=1e-5)


def test_eye_is_called_from_30_and_clean_below_10_microvolt():
    sizes = {"Fp1": 31.0, "Fp2": 29.0, "F7": 11.0, "F8": 9.0}
    found = labelled(
        "ears", {"eye": {site: bump(N, RATE, 3.5, size) for site, size in sizes.items()}}
    )
    assert cells(found, EYE, PRESENT) == {(3, "Fp1")}
    assert cells(found, EYE, UNKNOWN) == {(3, "Fp2"), (3, "F7")}


def test_eye_within_the_slow_swing_that_is_usual_at_a_site_is_not_present():
    # 2 Hz of 60 uV at two sites: 57 against the mean of 19; means over tenths of a second
    # keep 0.93 of it, and five of them a period meet its peaks within 5 %.
    quiet = np.zeros((19, N))
    quiet[row("F7")] = quiet[row("F8")] = sine(N, RATE, 2.0, 30.0)
    # Alpha of 100 uV is large, but no slower than a tenth of a second.
    quiet[row("Fz")] = sine(N, RATE, 10.24, 50.0)
    moves = {"F7": 40.0, "F8": 65.0, "Fz": 31.0, "Fp1": 31.0}
    found = labelled(
        "ears", {"eye": {site: bump(N, RATE, 3.5, size) for site, size in moves.items()}},
        quiet=quiet,
    )  # fmt: skip
    assert cells(found, EYE, PRESENT) == {(3, "F8"), (3, "Fz"), (3, "Fp1")}
    assert cells(found, EYE, UNKNOWN) == {(3, "F7")}


def test_muscle_is_judged_against_the_fast_activity_of_the_site():
    quiet = np.stack([sine(N, RATE, 20.0, 4.0)] * 19)
    quiet -= quiet.mean(axis=0)
    quiet[row("T7")] += sine(N, RATE, 20.0, 4.0)
    quiet[row("T8")] -= sine(N, RATE, 20.0, 4.0)
    # So T7 and T8 have 4 / sqrt 2 = 2.83 uV rms above 15 Hz and 0.3 is added: 3.13. Present
    # from 4.69, clean below 1.10. Elsewhere 0.3 is all: 1.5 times that is far below the
    # 2 uV that present needs anywhere; clean below 0.105.
    during = (np.arange(N) >= round(3.2 * RATE)) & (np.arange(N) < round(3.8 * RATE))
    burst = np.where(during, sine(N, RATE, 40.0, math.sqrt(2)), 0)  # rms 1
    sizes = {"T7": 5.1, "T8": 4.3, "F7": 2.2, "F8": 1.8, "C3": 0.2, "O1": 0.05}
    found = labelled(
        "ears", {"muscle": {site: size * burst for site, size in sizes.items()}},
        quiet=quiet,
    )  # fmt: skip
    assert cells(found, MUSCLE, PRESENT) == {(3, "T7"), (3, "F7")}
    assert cells(found, MUSCLE, UNKNOWN) == {(3, "T8"), (3, "F8"), (3, "C3")}
    assert (3, "O1") in cells(found, MUSCLE, CLEAN)
    for site in ("T7", "F8"):
        size = found.strength[MUSCLE, 3, found.sites.index(site)]
        assert size == pytest.approx(sizes[site], rel=0.06)


def test_slow_activity_is_no_muscle():
    found = labelled("ears", {"muscle": {"T7": sine(N, RATE, 10.0, 50.0)}})
    assert cells(found, MUSCLE, PRESENT) == set()


def test_kinds_that_were_not_put_in_are_unknown_everywhere():
    found = labelled("ears", {"pop": {"F3": step(N, RATE, 3.5, 200.0)}})
    assert (found.truth[[EYE, MUSCLE, MAINS]] == UNKNOWN).all()
    assert np.isnan(found.strength[[EYE, MUSCLE, MAINS]]).all()
    assert (found.truth[POP] != UNKNOWN).all()
