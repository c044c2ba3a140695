"""Swapped electrodes or labels: what the likeness of neighbours tells of places."""

import dataclasses
from itertools import pairwise

import numpy as np
import pytest
from signals import SITES, batch_of, row

from artifactlens.epochs import batches, epoch_grid
from artifactlens.features.spatial import slow_traces
from artifactlens.frames import build_frame
from artifactlens.recording import open_recording
from artifactlens.simulation.brain import alpha, background
from artifactlens.simulation.scene import Scene
from artifactlens.sitecare import placement
from artifactlens.sitecare.placement import (
    doubtful_places,
    exchange_gain,
    placement_moments,
    spline_inverse,
    spline_kernel,
)
from artifactlens.sites import site_position

BANANA = (
    "Fp1-F7", "F7-T7", "T7-P7", "P7-O1", "Fp2-F8", "F8-T8", "T8-P8", "P8-O2",
    "Fp1-F3", "F3-C3", "C3-P3", "P3-O1", "Fp2-F4", "F4-C4", "C4-P4", "P4-O2",
    "Fz-Cz", "Cz-Pz",
)  # fmt: skip
SECONDS, RATE = 32, 100.0
PLACES = np.array([site_position(site) for site in SITES])
ONE_CHAIN = np.zeros(len(SITES), dtype=np.intp)


def referential(sites=SITES):
    return build_frame([f"{site}-REF" for site in sites], [None] * len(sites), None)


def brain(seed):
    """Invented EEG of the 19 sites and a bit of noise of each electrode's own."""
    scene = Scene(PLACES, int((SECONDS + 2) * RATE), RATE)
    rng = np.random.default_rng(seed)
    field = background(scene, rng, rms_uv=12.0, dipoles=300)
    field = field + alpha(scene, rng, 0.0, SECONDS + 2.0, amplitude_uv=20.0)
    return field.potentials + rng.standard_normal(field.potentials.shape)


@pytest.fixture(scope="module")
def heads():
    return [brain(seed) for seed in range(6)]


def swapped(data, *names):
    """Each named channel carries the signal of the next one's electrode."""
    out = data.copy()
    for name, source in zip(names, (*names[1:], names[0]), strict=True):
        out[row(name)] = data[row(source)]
    return out


def solved(data, frame):
    """Site potentials of these electrode potentials in the order of ``SITES``."""
    order = [SITES.index(site) if site in SITES else None for site in frame.canonical]
    known = np.array([0.0 * data[0] if k is None else data[k] for k in order])
    return frame.matrix() @ (frame.incidence @ known)


def moments_of(data, frame=None, keep=None):
    slow = slow_traces(batch_of(solved(data, frame or referential()), RATE))
    whole = np.ones((slow.shape[1] - 2, len(slow)), dtype=bool)
    return placement_moments(slow, whole if keep is None else keep)


def doubts(data, frame=None):
    frame = frame or referential()
    found = doubtful_places(moments_of(data, frame).covariance(), frame, SECONDS)
    return {frozenset(frame.sites[site] for site in doubt.sites) for doubt in found}


def correlation(data):
    size = data - data.mean(axis=0)
    return np.corrcoef(np.diff(size, axis=1))


def pairs(*names):
    return {frozenset(pair) for pair in names}


@pytest.mark.parametrize(
    "pair",
    [
        ("F3", "F4"), ("C3", "C4"), ("P3", "P4"), ("F7", "F8"), ("T7", "T8"), ("O1", "O2"),
        ("F3", "C3"), ("T7", "P7"), ("F3", "P4"),
    ],
)  # fmt: skip
def test_an_exchanged_pair_is_named_and_no_other(heads, pair):
    hits = [doubts(swapped(data, *pair)) for data in heads]
    assert sum(found == pairs(pair) for found in hits) >= 5
    assert all(found <= pairs(pair) for found in hits)


def test_undisturbed_heads_give_no_doubt(heads):
    assert [doubts(data) for data in heads] == [set()] * len(heads)
    frame = build_frame(BANANA, [None] * len(BANANA), None)
    assert [doubts(data, frame) for data in heads] == [set()] * len(heads)


@pytest.mark.parametrize("pair", [("C3", "C4"), ("F3", "C3"), ("P7", "P8")])
def test_a_double_banana_shows_exchanges_within_and_across_its_chains(heads, pair):
    frame = build_frame(BANANA, [None] * len(BANANA), None)
    hits = [doubts(swapped(data, *pair), frame) for data in heads]
    assert sum(found == pairs(pair) for found in hits) >= 4


def test_two_exchanges_are_both_named(heads):
    data = swapped(swapped(heads[0], "F3", "F4"), "P7", "P8")
    assert doubts(data) == pairs(("F3", "F4"), ("P7", "P8"))


def test_a_round_of_three_is_named_in_its_order(heads):
    frame = referential()
    data = swapped(heads[0], "F3", "C3", "P3")
    found = doubtful_places(moments_of(data).covariance(), frame, SECONDS)
    assert [tuple(frame.sites[site] for site in doubt.sites) for doubt in found] == [
        ("F3", "C3", "P3")
    ]
    assert found[0].reason == (
        "better than their own F3 fits the place of C3, C3 that of P3, P3 that of F3"
    )


def test_the_words_name_the_pair_and_the_gain_is_above_the_bar(heads):
    frame = referential()
    found = doubtful_places(
        moments_of(swapped(heads[0], "C3", "C4")).covariance(), frame, SECONDS
    )
    assert found[0].reason == "C3 and C4 fit each other's places better than their own"
    assert found[0].gain_db >= placement.PAIR_DB


def test_a_wholly_mirrored_head_looks_like_the_head(heads):
    mirrored = heads[0]
    for pair in (("Fp1", "Fp2"), ("F7", "F8"), ("F3", "F4"), ("T7", "T8"), ("C3", "C4"),
                 ("P7", "P8"), ("P3", "P4"), ("O1", "O2")):  # fmt: skip
        mirrored = swapped(mirrored, *pair)
    assert doubts(mirrored) == set()


def test_noise_at_one_electrode_is_no_exchange(heads):
    rng = np.random.default_rng(5)
    for site in ("F3", "T8", "O1", "Cz"):
        data = heads[0].copy()
        data[row(site)] = 40 * rng.standard_normal(data.shape[1])
        assert doubts(data) == set()


def test_what_fits_nowhere_does_not_gain_by_a_place_that_is_less_well_known(heads):
    frame = build_frame(BANANA, [None] * len(BANANA), None)
    data = heads[1].copy()
    data[row("C4")] = 12 * np.random.default_rng(5).standard_normal(data.shape[1])
    covariance = moments_of(data, frame).covariance()
    size = 1 / np.sqrt(np.diag(covariance))
    alike = covariance * size[:, None] * size
    noisy, across = frame.sites.index("C4"), frame.sites.index("C3")
    assert _every_gain(alike, frame.positions, frame.chain)[noisy, across] > 1
    assert exchange_gain(alike, frame.positions, frame.chain)[noisy, across] == -np.inf


def test_exchanging_a_pair_of_one_chain_turns_its_gain_over(heads):
    alike = correlation(heads[0])
    order = np.arange(len(SITES))
    order[[row("C3"), row("P3")]] = order[[row("P3"), row("C3")]]
    before = _every_gain(alike)[row("C3"), row("P3")]
    after = _every_gain(alike[np.ix_(order, order)])[row("C3"), row("P3")]
    assert after == pytest.approx(-before)
    assert after > 1


def _every_gain(alike, places=PLACES, chain=ONE_CHAIN):
    """Gains with the pairs that fit nowhere left in."""
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(placement, "WORSE", np.inf)
        return exchange_gain(alike, places, chain)


def test_gains_are_those_of_leaving_out_two_sites_by_hand(heads):
    alike = correlation(heads[1])
    i, j = row("F3"), row("Cz")
    rest = np.array([k for k in range(len(SITES)) if k not in (i, j)])
    unit = PLACES / np.linalg.norm(PLACES, axis=1, keepdims=True)
    kernel = spline_kernel(unit @ unit.T)
    noise = placement.NOISE_SHARE * kernel[0, 0]
    gram = kernel[np.ix_(rest, rest)] + noise * np.eye(len(rest))
    one = np.ones(len(rest))
    system = np.block([[gram, one[:, None]], [one[None], np.zeros((1, 1))]])
    ask = np.vstack([kernel[np.ix_(rest, [i, j])], np.ones((1, 2))])
    answer = np.linalg.solve(system, ask)
    due = kernel[np.ix_([i, j], [i, j])] + noise * np.eye(2) - ask.T @ answer
    sizes = []
    for here, at in (((0, 1), due), ((1, 0), due[::-1, ::-1])):
        weights = np.zeros((2, len(SITES)))
        weights[[0, 1], [i, j]] = 1.0
        weights[:, rest] -= answer[:-1, list(here)].T
        sizes.append(np.trace(np.linalg.solve(at, weights @ alike @ weights.T)))
    expected = 10 * np.log10(sizes[0] / sizes[1])
    assert _every_gain(alike)[i, j] == pytest.approx(expected)


def test_the_splines_are_those_of_a_reference_library():
    from mne.channels.interpolation import _make_interpolation_matrix

    unit = PLACES / np.linalg.norm(PLACES, axis=1, keepdims=True)
    left, right = np.arange(0, 15), np.arange(15, 19)
    kernel = spline_kernel(unit @ unit.T)
    chain = np.zeros(len(left), dtype=np.intp)
    inverse = spline_inverse(kernel[np.ix_(left, left)], 1e-5, chain)
    ask = np.hstack([kernel[np.ix_(right, left)], np.ones((len(right), 1))])
    ours = (ask @ inverse)[:, : len(left)]
    theirs = _make_interpolation_matrix(PLACES[left], PLACES[right], alpha=1e-5)
    np.testing.assert_allclose(ours, theirs, atol=1e-8)


def test_the_splines_reproduce_a_constant():
    unit = PLACES / np.linalg.norm(PLACES, axis=1, keepdims=True)
    kernel = spline_kernel(unit @ unit.T)
    inverse = spline_inverse(kernel[:18, :18], 1e-4, np.zeros(18, dtype=np.intp))
    answer = np.hstack([kernel[18:, :18], [[1.0]]]) @ inverse
    assert answer[0, :18].sum() == pytest.approx(1.0)


def test_the_kernel_at_its_own_place_sums_the_series_by_hand():
    # P_n(1) = 1: 3/16 + 5/1296 + 7/20736 + ... over 4 pi.
    n = np.arange(1, 51)
    expected = np.sum((2 * n + 1) / (n * (n + 1.0)) ** 4) / (4 * np.pi)
    assert spline_kernel(np.array(1.0)) == pytest.approx(expected)
    assert expected == pytest.approx(
        (3 / 16 + 5 / 1296 + 7 / 20736) / (4 * np.pi), rel=1e-3
    )
    # The first term is 3/16 x: half way round, P_1 = -1 leads.
    assert spline_kernel(np.array(-1.0)) < 0


def test_neither_gain_nor_the_order_of_sites_matters(heads):
    data = swapped(heads[2], "P3", "P4")
    plain = doubtful_places(moments_of(data).covariance(), referential(), SECONDS)
    louder = doubtful_places(moments_of(7.0 * data).covariance(), referential(), SECONDS)
    assert [doubt.sites for doubt in louder] == [doubt.sites for doubt in plain]
    assert louder[0].gain_db == pytest.approx(plain[0].gain_db, rel=1e-3)
    backwards = referential(SITES[::-1])
    found = doubtful_places(moments_of(data, backwards).covariance(), backwards, SECONDS)
    names = [{backwards.sites[site] for site in doubt.sites} for doubt in found]
    assert names == [{"P3", "P4"}]
    assert found[0].gain_db == pytest.approx(plain[0].gain_db, rel=1e-3)


def test_one_loud_second_counts_no_more_than_another(heads):
    data = heads[0].copy()
    loud = swapped(data, "C3", "C4")[:, 500:600]
    data[:, 500:600] = 1000 * loud
    total = moments_of(data)
    quiet = moments_of(heads[0])
    assert np.trace(total.total) == pytest.approx(np.trace(quiet.total), rel=0.05)
    assert doubts(data) == set()


def test_a_straight_slope_has_no_steps_that_vary():
    slope = np.linspace(0, 1000, 4 * 50, dtype=np.float32).reshape(1, 4, 50)
    slow = np.tile(slope, (3, 1, 1))
    slow[2] += np.random.default_rng(0).standard_normal((4, 50)).astype(np.float32)
    moments = placement_moments(slow, np.ones((2, 3), dtype=bool))
    np.testing.assert_array_equal(np.diag(moments.seconds), [0, 0, 2])
    assert moments.total[2, 2] == pytest.approx(2.0)


def test_moments_of_two_halves_add_up(heads):
    frame = referential()
    slow = slow_traces(batch_of(solved(heads[0], frame), RATE))
    keep = np.random.default_rng(0).random((SECONDS, len(slow))) > 0.2
    whole = placement_moments(slow, keep)
    first = placement_moments(slow[:, :18], keep[:16])
    second = placement_moments(slow[:, 16:], keep[16:])
    both = first + second
    np.testing.assert_allclose(both.total, whole.total)
    np.testing.assert_array_equal(both.seconds, whole.seconds)


def test_epochs_that_are_not_kept_do_not_count_for_the_site(heads):
    keep = np.ones((SECONDS, len(SITES) + 1), dtype=bool)
    keep[8:, row("F3")] = False
    moments = moments_of(heads[0], keep=keep)
    assert moments.seconds[row("F3"), row("F3")] == 8
    assert moments.seconds[row("C3"), row("C3")] == SECONDS
    covariance = moments.covariance()
    assert np.isnan(covariance[row("F3")]).all()
    assert np.isfinite(covariance[row("C3"), row("C4")])


def test_a_site_left_out_by_nan_is_not_named_and_the_others_still_are(heads):
    frame = referential()
    data = swapped(swapped(heads[0], "F3", "F4"), "P3", "P4")
    covariance = moments_of(data).covariance()
    covariance[row("F3")] = covariance[:, row("F3")] = np.nan
    found = doubtful_places(covariance, frame, SECONDS)
    names = [{frame.sites[site] for site in doubt.sites} for doubt in found]
    assert {"P3", "P4"} in names
    assert all("F3" not in pair for pair in names)


def test_flat_sites_and_silence_are_passed_over(heads):
    data = heads[0].copy()
    data[row("Cz")] = data[row("Pz")] = 0.0
    slow = slow_traces(batch_of(data, RATE))
    keep = np.ones((SECONDS, len(SITES)), dtype=bool)
    frame = build_frame([f"{site}-AVG" for site in SITES], [None] * len(SITES), None)
    assert doubtful_places(placement_moments(slow, keep).covariance(), frame, SECONDS) == ()
    nothing = placement_moments(np.zeros_like(slow), keep)
    assert np.isnan(nothing.covariance()).all()
    assert doubtful_places(nothing.covariance(), frame, SECONDS) == ()


def test_few_sites_or_little_time_cannot_tell(heads):
    data = swapped(heads[0], "C3", "C4")
    covariance = moments_of(data).covariance()
    frame = referential()
    assert doubtful_places(covariance, frame, SECONDS) != ()
    assert doubtful_places(covariance, frame, 9.0) == ()
    places = frame.positions.copy()
    places[[row(site) for site in ("Fp1", "Fp2", "O1", "O2", "F7", "F8", "P7", "P8")]] = (
        np.nan
    )
    few = dataclasses.replace(frame, positions=places)
    assert doubtful_places(covariance, few, SECONDS) == ()


def test_a_chain_of_two_does_not_help_to_tell(heads):
    chain = ("F7", "F3", "Fz", "F4", "F8", "C4", "Cz", "C3", "P3", "Pz", "P4", "P8")
    data = swapped(heads[0], "C3", "C4")
    joined = [f"{one}-{two}" for one, two in pairwise(chain)]
    whole = build_frame(joined, [None] * len(joined), None)
    assert doubts(data, whole) == pairs(("C3", "C4"))
    apart = [label for label in joined if label != "Pz-P4"]
    broken = build_frame(apart, [None] * len(apart), None)
    assert len(broken.sites) == len(chain)
    assert doubts(data, broken) == set()


@pytest.mark.corpora
def test_a_real_head_is_undoubted_until_two_of_its_labels_are_exchanged(corpora):
    recording = open_recording(corpora / "eegmat" / "Subject00_2.edf")
    frame = build_frame(recording.labels, recording.types, recording.positions)
    slow = np.concatenate(
        [slow_traces(b)[:, 1:-1] for b in batches(recording, frame, epoch_grid(recording))],
        axis=1,
    )
    keep = np.ones((slow.shape[1] - 2, len(slow)), dtype=bool)

    def named(traces):
        covariance = placement_moments(traces, keep).covariance()
        found = doubtful_places(covariance, frame, float(len(keep)))
        return [{frame.canonical[site] for site in doubt.sites} for doubt in found]

    assert named(slow) == []
    order = np.arange(len(slow))
    one, two = frame.canonical.index("C3"), frame.canonical.index("C4")
    order[[one, two]] = two, one
    assert named(slow[order]) == [{"C3", "C4"}]
