"""From channels to site potentials."""

import os
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from artifactlens.errors import SitesError
from artifactlens.frames import build_frame
from artifactlens.sites import site_position


def words(text):
    return text.split()


SITES = words("Fp1 Fp2 F7 F3 Fz F4 F8 T3 C3 Cz C4 T4 T5 P3 Pz P4 T6 O1 O2")
# Double banana, as in the project's table of facts.
BANANA = words(
    "Fp1-F7 F7-T3 T3-T5 T5-O1 Fp2-F8 F8-T4 T4-T6 T6-O2 Fp1-F3 F3-C3 C3-P3 P3-O1 "
    "Fp2-F4 F4-C4 C4-P4 P4-O2 Fz-Cz Cz-Pz"
)
PATTERNS = st.lists(st.booleans(), min_size=18, max_size=18)


def frame_of(labels, types=None, positions=None, **options):
    return build_frame(labels, types or [None] * len(labels), positions, **options)


def reasons(frame):
    return dict(frame.set_aside)


def potentials(n, seed=0):
    return np.random.default_rng(seed).normal(scale=20, size=n)


def without_mean(values):
    return values - values.mean()


# Referential ---------------------------------------------------------------------------


def test_a_referential_file_gains_its_reference_as_last_row():
    frame = frame_of([f"EEG {site}-REF" for site in SITES])
    assert frame.montage == "referential"
    assert frame.sites == (*SITES, "reference")
    assert frame.roles == ("site",) * 19 + ("reference",)
    assert frame.canonical[7] == "T7"
    assert frame.canonical[-1] is None
    assert frame.channel == (*(f"EEG {site}-REF" for site in SITES), None)
    assert np.isnan(frame.positions[-1]).all()
    np.testing.assert_array_equal(frame.positions[7], site_position("T7"))
    np.testing.assert_array_equal(frame.chain, 0)


def test_the_reference_row_is_its_potential_less_the_mean_over_all_electrodes():
    frame = frame_of(SITES)
    truth = potentials(20)  # the last is the reference
    solved = frame.matrix() @ (truth[:19] - truth[19])
    np.testing.assert_allclose(solved, without_mean(truth), atol=1e-4)


def test_the_star_solution_is_channel_less_the_mean_of_n_plus_one():
    matrix = frame_of(["F3-REF", "F4-REF", "Cz-REF"]).matrix()
    # Potentials (a, b, c, 0) have the mean (a + b + c) / 4.
    np.testing.assert_allclose(matrix[:3], np.eye(3) - 1 / 4, atol=1e-7)
    np.testing.assert_allclose(matrix[3], [-1 / 4] * 3, atol=1e-7)
    assert matrix.dtype == np.float32


def test_an_unavailable_channel_drops_out_of_the_star_alone():
    frame = frame_of(["F3-REF", "F4-REF", "Cz-REF"])
    matrix = frame.matrix(np.array([True, False, True]))
    assert np.isnan(matrix[1]).all()
    np.testing.assert_allclose(matrix[0], [2 / 3, 0, -1 / 3], atol=1e-7)
    np.testing.assert_allclose(matrix[2], [-1 / 3, 0, 2 / 3], atol=1e-7)
    np.testing.assert_allclose(matrix[3], [-1 / 3, 0, -1 / 3], atol=1e-7)


def test_without_any_channel_no_site_is_solved():
    for labels in (["F3-REF", "F4-REF"], ["F3-AVG", "F4-AVG"], ["F3-C3", "C3-P3"]):
        frame = frame_of(labels)
        matrix = frame.matrix(np.zeros(2, bool))
        assert matrix.shape == (len(frame.sites), 2)
        assert np.isnan(matrix).all()


def test_a_named_common_reference_has_a_place():
    frame = frame_of(["F3-Cz", "F4-Cz", "P3-Cz"])
    assert frame.montage == "referential"
    assert frame.sites == ("F3", "F4", "P3", "reference")
    assert frame.canonical[-1] == "Cz"
    np.testing.assert_array_equal(frame.positions[-1], site_position("Cz"))
    assert frame.channel == ("F3-Cz", "F4-Cz", "P3-Cz", None)


def test_a_reference_against_itself_is_not_a_second_electrode():
    frame = frame_of(["F3-Cz", "F4-Cz", "Cz-Cz"])
    assert frame.sites == ("F3", "F4", "reference")
    assert "itself" in reasons(frame)["Cz-Cz"]


def test_an_ear_against_the_ear_that_is_the_reference_is_one_more_row():
    frame = frame_of(["F3-A1", "F4-A1", "A2-A1"])
    assert frame.montage == "referential"
    assert frame.sites == ("F3", "F4", "A2", "reference")
    assert frame.roles == ("site", "site", "ear", "reference")


def test_each_side_on_its_own_ear_gives_two_chains():
    frame = frame_of(["Fp1-A1", "F3-A1", "Fp2-A2", "F4-A2", "C4-A2"])
    assert frame.montage == "referential"
    assert frame.sites[:5] == ("Fp1", "F3", "Fp2", "F4", "C4")
    assert frame.sites[5:] == ("reference A1", "reference A2")
    assert frame.chain.tolist() == [0, 0, 1, 1, 1, 0, 1]
    truth = potentials(7)
    channels = truth[[0, 1, 2, 3, 4]] - truth[[5, 5, 6, 6, 6]]
    solved = frame.matrix() @ channels
    left, right = [0, 1, 5], [2, 3, 4, 6]
    np.testing.assert_allclose(solved[left], without_mean(truth[left]), atol=1e-4)
    np.testing.assert_allclose(solved[right], without_mean(truth[right]), atol=1e-4)
    assert not frame.neighbours[np.ix_(left, right)].any()
    assert any("2 separate references" in note for note in frame.notes)


def test_crossed_ear_references_joined_by_a_channel_make_one_chain():
    frame = frame_of(["C3-M2", "C4-M1", "O1-M2", "M1-M2"])
    assert frame.montage == "referential"
    np.testing.assert_array_equal(frame.chain, 0)
    assert dict(zip(frame.sites, frame.roles, strict=True)) == {
        "C3": "site",
        "C4": "site",
        "O1": "site",
        "M1": "ear",
        "reference": "reference",
    }


def test_an_electrode_against_both_ears_is_solved_from_two_channels():
    frame = frame_of(["C3-A1", "C3-A2", "C4-A2"])
    assert frame.montage == "referential"
    assert frame.channel == (None, "C4-A2", None, None)
    truth = potentials(4)
    np.testing.assert_allclose(
        frame.matrix() @ (frame.incidence @ truth), without_mean(truth), atol=1e-4
    )


def test_an_unnamed_reference_is_the_one_that_the_other_labels_name():
    frame = frame_of(["F3-REF", "F4-REF", "Cz"])
    assert frame.sites == ("F3", "F4", "Cz", "reference")


def test_two_common_references_are_two_rows():
    frame = frame_of(["F3-REF", "F4-REF", "P3-LE", "P4-LE"])
    assert frame.sites[-2:] == ("reference REF", "reference LE")
    assert frame.chain.tolist() == [0, 0, 1, 1, 0, 1]


def test_an_unknown_word_shared_by_three_channels_is_their_reference():
    frame = frame_of(["F3-Org", "F4-Org", "Cz-Org", "Pz-like"])
    assert frame.sites == ("F3", "F4", "Cz", "reference")
    assert "no known scalp site" in reasons(frame)["Pz-like"]


# Average -------------------------------------------------------------------------------


@pytest.mark.parametrize("suffix", ["AVG", "Av", "AVE", "CAR"])
def test_average_reference_by_label_has_no_reference_row(suffix):
    frame = frame_of([f"{site}-{suffix}" for site in SITES])
    assert frame.montage == "average"
    assert frame.sites == tuple(SITES)
    np.testing.assert_allclose(frame.matrix(), np.eye(19) - 1 / 19, atol=1e-7)
    np.testing.assert_allclose(frame.incidence, np.eye(19) - 1 / 19, atol=1e-12)


def test_a_step_at_f3_alone_shows_0947_there_and_minus_0053_elsewhere():
    # +V at F3 alone under the average of 19 sites: 18/19 and -1/19 (derived).
    frame = frame_of(SITES, measured_average=True)
    assert frame.montage == "average"
    assert any("sum to about zero" in note for note in frame.notes)
    step = np.where(np.array(SITES) == "F3", 1.0, 0.0)
    solved = frame.matrix() @ step
    assert solved[SITES.index("F3")] == pytest.approx(0.947, abs=5e-4)
    np.testing.assert_allclose(np.delete(solved, SITES.index("F3")), -0.053, atol=5e-4)


def test_average_is_taken_over_the_available_channels_only():
    frame = frame_of(["F3-AVG", "F4-AVG", "Cz-AVG"])
    matrix = frame.matrix(np.array([True, True, False]))
    np.testing.assert_allclose(matrix[:2], [[0.5, -0.5, 0], [-0.5, 0.5, 0]], atol=1e-7)
    assert np.isnan(matrix[2]).all()
    assert np.isnan(frame.matrix(np.array([True, False, False]))).all()


def test_the_smaller_part_with_another_reference_is_set_aside():
    frame = frame_of(["F3-AVG", "F4-AVG", "Cz-AVG", "A1-REF"])
    assert frame.montage == "average"
    assert frame.sites == ("F3", "F4", "Cz")
    assert "average" in reasons(frame)["A1-REF"]
    other = frame_of(["F3-REF", "F4-REF", "Cz-AVG"])
    assert other.montage == "referential"
    assert "average" in reasons(other)["Cz-AVG"]


def test_a_closed_bipolar_ring_is_not_taken_for_an_average():
    ring = frame_of(["F3-C3", "C3-P3", "P3-F3"], measured_average=True)
    assert ring.montage == "bipolar"


def test_two_references_are_not_taken_for_an_average():
    frame = frame_of(["F3-A1", "P3-A1", "F4-A2", "P4-A2"], measured_average=True)
    assert frame.montage == "referential"


# Bipolar -------------------------------------------------------------------------------


def banana_channels(frame, truth):
    where = {site: number for number, site in enumerate(frame.sites)}
    pairs = [label.split("-") for label in BANANA]
    return np.array([truth[where[a]] - truth[where[b]] for a, b in pairs])


def test_double_banana_is_solved_back_up_to_the_mean_of_each_chain():
    frame = frame_of(BANANA)
    assert frame.montage == "bipolar"
    assert sorted(frame.sites) == sorted(SITES)
    assert frame.channel == (None,) * 19
    assert "reference" not in frame.roles
    truth = potentials(19)
    solved = frame.matrix() @ banana_channels(frame, truth)
    # The two chains of a side share Fp and O; the midline stands alone.
    chains = {frozenset(np.array(frame.sites)[frame.chain == c]) for c in range(3)}
    assert chains == {
        frozenset(words("Fp1 F7 T3 T5 O1 F3 C3 P3")),
        frozenset(words("Fp2 F8 T4 T6 O2 F4 C4 P4")),
        frozenset(words("Fz Cz Pz")),
    }
    for chain in range(3):
        members = frame.chain == chain
        np.testing.assert_allclose(solved[members], without_mean(truth[members]), atol=1e-4)


def test_double_banana_with_cross_links_is_solved_back_up_to_one_mean():
    labels = [*BANANA, "Fp1-Fp2", "C3-Cz"]
    frame = frame_of(labels)
    np.testing.assert_array_equal(frame.chain, 0)
    truth = potentials(19)
    np.testing.assert_allclose(
        frame.matrix() @ (frame.incidence @ truth), without_mean(truth), atol=1e-4
    )


def test_nothing_leaks_between_chains():
    frame = frame_of(BANANA)
    matrix = frame.matrix()
    carries = np.abs(frame.incidence).argmax(axis=1)
    apart = frame.chain[:, None] != frame.chain[carries][None]
    assert apart.any()
    np.testing.assert_array_equal(matrix[apart], 0)


def test_a_vertex_that_links_two_derivations_is_not_a_reference():
    frame = frame_of(["Fz-Cz", "Cz-A1", "F3-A1"])
    assert frame.montage == "bipolar"
    assert frame.sites == ("Fz", "Cz", "A1", "F3")
    assert frame.roles == ("site", "site", "ear", "site")


def test_incidence_holds_plus_one_for_the_first_input_and_minus_one_for_the_second():
    frame = frame_of(["Fp1-F3", "F3-C3"])
    assert frame.sites == ("Fp1", "F3", "C3")
    np.testing.assert_array_equal(frame.incidence, [[1, -1, 0], [0, 1, -1]])


def test_a_chain_of_three_by_hand():
    # Fp1 - F3 = a, F3 - C3 = b, sum 0: F3 = (b - a) / 3.
    matrix = frame_of(["Fp1-F3", "F3-C3"]).matrix()
    np.testing.assert_allclose(matrix * 3, [[2, 1], [-1, 1], [-1, -2]], atol=1e-6)


def test_a_redundant_link_keeps_a_chain_whole_without_one_channel():
    frame = frame_of(["F3-C3", "C3-P3", "F3-P3"])
    truth = potentials(3)
    available = np.array([True, False, True])
    channels = np.where(available, frame.incidence @ truth, 0)
    np.testing.assert_allclose(
        frame.matrix(available) @ channels, without_mean(truth), atol=1e-4
    )


def test_a_broken_chain_falls_into_pieces_each_of_mean_zero():
    frame = frame_of(["Fp1-F3", "F3-C3", "C3-P3", "P3-O1", "F4-C4", "C4-P4"])
    available = np.array([True, False, True, False, True, True])
    matrix = frame.matrix(available)
    lost = frame.sites.index("O1")
    assert np.isnan(matrix[lost]).all()
    assert np.isfinite(np.delete(matrix, lost, axis=0)).all()
    np.testing.assert_array_equal(np.delete(matrix, lost, axis=0)[:, ~available], 0)
    where = {site: number for number, site in enumerate(frame.sites)}
    # Fp1-F3 alone: plus and minus half; likewise C3-P3; nothing leaks between pieces.
    np.testing.assert_allclose(matrix[where["Fp1"]], [0.5, 0, 0, 0, 0, 0], atol=1e-7)
    np.testing.assert_allclose(matrix[where["F3"]], [-0.5, 0, 0, 0, 0, 0], atol=1e-7)
    np.testing.assert_allclose(matrix[where["P3"]], [0, 0, -0.5, 0, 0, 0], atol=1e-7)
    assert np.count_nonzero(matrix[where["C4"]]) == 2


def test_availability_of_another_length_is_refused():
    frame = frame_of(["F3-REF", "F4-REF"])
    with pytest.raises(SitesError, match=r"2 used channels.*\(3,\)"):
        frame.matrix(np.ones(3, bool))


# Properties ----------------------------------------------------------------------------


@settings(deadline=None, max_examples=40)
@given(order=st.permutations(range(18)), available=PATTERNS)
@pytest.mark.parametrize("montage", ["referential", "average", "bipolar"])
def test_permuting_channels_permutes_rows(montage, order, available):
    labels = {
        "referential": [f"{site}-REF" for site in SITES[:18]],
        "average": [f"{site}-AVG" for site in SITES[:18]],
        "bipolar": BANANA,
    }[montage]
    available = np.array(available)
    order = np.array(order)
    first, second = frame_of(labels), frame_of([labels[number] for number in order])
    rows = [first.sites.index(site) for site in second.sites]
    np.testing.assert_allclose(
        second.matrix(available[order]), first.matrix(available)[rows][:, order], atol=1e-6
    )
    np.testing.assert_allclose(
        second.neighbours, first.neighbours[np.ix_(rows, rows)], atol=1e-12
    )
    np.testing.assert_array_equal(second.near, first.near[np.ix_(rows, rows)])


@settings(deadline=None, max_examples=40)
@given(available=PATTERNS, seed=st.integers(0, 99))
def test_solved_sites_explain_every_available_derivation(available, seed):
    available = np.array(available)
    frame = frame_of(BANANA)
    channels = np.where(available, frame.incidence @ potentials(19, seed), 0)
    matrix = frame.matrix(available).astype(float)
    solved = np.isfinite(matrix).all(axis=1)
    reached = frame.incidence[available].any(axis=0)
    np.testing.assert_array_equal(solved, reached)
    sites = np.where(solved, np.where(solved[:, None], matrix, 0) @ channels, 0)
    np.testing.assert_allclose(
        frame.incidence[available] @ sites, channels[available], atol=1e-3
    )
    assert abs(sites.sum()) < 1e-3


# What is used and what is set aside ----------------------------------------------------


def test_derivations_beside_referential_channels_are_set_aside():
    frame = frame_of([*SITES, "EEG A2-A1", "ECG ECG"])
    assert frame.sites == (*SITES, "reference")
    assert "derivation" in reasons(frame)["EEG A2-A1"]
    assert "witness" in reasons(frame)["ECG ECG"]
    np.testing.assert_array_equal(frame.channels, np.arange(19))


def test_referential_channels_beside_derivations_are_set_aside():
    frame = frame_of(["A1-REF", *BANANA])
    assert frame.montage == "bipolar"
    assert "referential" in reasons(frame)["A1-REF"]
    np.testing.assert_array_equal(frame.channels, np.arange(1, 19))


def test_ears_with_their_own_channel_are_ears_and_eye_leads_witnesses():
    frame = frame_of(["F3-REF", "A1-REF", "M2-REF", "TP9-REF", "EEG Pg1-REF", "LOC"])
    assert frame.roles == ("site", "ear", "ear", "site", "reference")
    assert reasons(frame) == {
        "EEG Pg1-REF": "not a scalp site (kept as witness)",
        "LOC": "not a scalp site (kept as witness)",
    }


def test_the_first_of_two_channels_of_one_electrode_is_kept():
    frame = frame_of(["EEG T3-REF", "EEG Cz-REF", "EEG T7-REF"])
    assert frame.sites == ("T3", "Cz", "reference")
    assert "'EEG T3-REF'" in reasons(frame)["EEG T7-REF"]


def test_the_first_of_two_equal_derivations_is_kept():
    frame = frame_of(["F7-T3", "T3-T5", "T8-P8-0", "T8-P8-1", "T7-F7"])
    assert reasons(frame) == {
        "T8-P8-1": "the same electrodes as in channel 'T8-P8-0'",
        "T7-F7": "the same electrodes as in channel 'F7-T3'",
    }


def test_a_type_given_by_the_file_overrules_the_label():
    frame = frame_of(["F3", "F4", "Fp1", "E12"], ["eeg", "", "EOG", "EEG"])
    assert frame.sites == ("F3", "F4", "E12", "reference")
    assert frame.canonical == ("F3", "F4", None, None)
    assert "typed eog" in reasons(frame)["Fp1"]


def test_an_unknown_name_without_type_or_position_is_set_aside():
    frame = frame_of(["F3", "F4", "E12"])
    assert reasons(frame) == {"E12": "its label names no known scalp site"}


def test_the_references_own_channel_is_no_site():
    frame = frame_of(["E1", "E2", "VREF"], ["eeg"] * 3)
    assert frame.sites == ("E1", "E2", "reference")
    assert "reference" in reasons(frame)["VREF"]


def test_nothing_recognisable_falls_back_to_all_but_the_plainly_other():
    frame = frame_of(["ch 1", "ch 2", "ch 3", "ECG", "Status"])
    assert frame.sites == ("ch 1", "ch 2", "ch 3", "reference")
    assert frame.canonical == (None,) * 4
    assert any("all 3 channels" in note for note in frame.notes)
    assert not frame.near.any()
    np.testing.assert_allclose(frame.neighbours, (1 - np.eye(4)) / 3)


def test_t1_and_t2_are_placed_by_common_practice_and_it_is_said():
    frame = frame_of(["T1-REF", "T2-REF", "Cz-REF"])
    assert frame.canonical[:2] == ("FT9", "FT10")
    assert [note for note in frame.notes if "common practice" in note] == [
        "T1 is taken to stand at FT9 (common practice).",
        "T2 is taken to stand at FT10 (common practice).",
    ]


@pytest.mark.parametrize(
    ("labels", "found"),
    [
        (["ECG", "Resp", "Status"], "0 of 3"),
        (["Fp1-REF", "ECG"], "1 of 2"),
        (["Fp1-F7"], "1 of 1"),
        (["T3", "T7"], "1 of 2"),
        ([], "0 of 0"),
    ],
)
def test_fewer_than_two_eeg_channels_are_refused_with_what_was_found(labels, found):
    with pytest.raises(SitesError, match="At least 2 EEG channels") as caught:
        frame_of(labels)
    assert found in caught.value.problem
    assert all(repr(label) in caught.value.problem for label in labels)
    assert "10-20" in caught.value.remedy


def test_only_five_labels_are_shown():
    with pytest.raises(SitesError) as caught:
        frame_of([f"DC{number}" for number in range(1, 9)])
    assert "'DC5'" in caught.value.problem
    assert "'DC6'" not in caught.value.problem


def test_lists_of_different_lengths_are_refused():
    with pytest.raises(SitesError, match="2 labels, 1 types, 2 positions"):
        build_frame(["F3", "F4"], [None], None)
    with pytest.raises(SitesError, match="2 labels, 2 types, 3 positions"):
        build_frame(["F3", "F4"], [None, None], np.zeros((3, 3)))


# Positions and neighbours --------------------------------------------------------------


def test_unnamed_electrodes_take_their_digitised_positions():
    head = np.array([[0.08, 0, 0.04], [0, 0.09, 0.04], [0, 0, 0.14]])
    frame = frame_of(["EEG 001", "EEG 002", "EEG 003"], positions=head)
    assert frame.sites[:3] == ("EEG 001", "EEG 002", "EEG 003")
    np.testing.assert_allclose(
        frame.positions[:3], [[0.08, 0, 0], [0, 0.09, 0], [0, 0, 0.10]]
    )


def test_named_electrodes_take_the_template_and_unnamed_ones_fill_in():
    head = np.array([[0.05, 0.05, 0.09], [0.05, 0.05, 0.10], [0.0, 0.09, 0.04]])
    frame = frame_of(["F3", "F4", "E7"], ["eeg"] * 3, head)
    np.testing.assert_array_equal(frame.positions[0], site_position("F3"))
    np.testing.assert_allclose(frame.positions[2], [0, 0.09, 0])


def test_where_most_electrodes_are_unnamed_one_digitised_head_serves_all():
    head = np.array([[0.05, 0.05, 0.09], [0.05, -0.05, 0.10], [0.0, 0.09, 0.04]])
    frame = frame_of(["F3", "E6", "E7"], ["eeg"] * 3, head)
    np.testing.assert_allclose(frame.positions[0], [0.05, 0.05, 0.05])


def test_neighbours_in_the_1020_system_are_those_beside_a_site():
    frame = frame_of(SITES)
    rows = {site: number for number, site in enumerate(frame.sites)}

    def beside(site):
        return {frame.sites[i] for i in np.flatnonzero(frame.neighbours[rows[site]])}

    assert beside("Cz") == {"Fz", "C3", "C4", "Pz"}
    assert beside("F7") == {"Fp1", "F3", "T3"}
    assert beside("O1") == {"T5", "P3", "Pz", "O2"}
    assert beside("reference") == set(SITES)
    np.testing.assert_allclose(frame.neighbours.sum(axis=1), 1)
    np.testing.assert_array_equal(frame.near, frame.near.T)
    assert not frame.near[rows["reference"]].any()
    assert not frame.neighbours[:, rows["reference"]][:-1].any()


def test_sites_of_different_chains_are_never_neighbours():
    frame = frame_of(BANANA)
    apart = frame.chain[:, None] != frame.chain[None]
    assert not frame.neighbours[apart].any()
    assert not frame.near[apart].any()
    np.testing.assert_allclose(frame.neighbours.sum(axis=1), 1)


# Real recordings -----------------------------------------------------------------------

ROOT = Path(__file__).resolve().parent.parent
CORPORA = Path(os.environ.get("ARTIFACTLENS_CORPORA", ROOT.parent / "shared" / "corpora"))


def edf_labels(name):
    path = CORPORA / name
    if not path.is_file():
        pytest.skip(f"{name} is not among the corpora (set ARTIFACTLENS_CORPORA)")
    with path.open("rb") as file:
        count = int(file.read(256)[252:256])
        return [file.read(16).decode("ascii").strip() for _ in range(count)]


@pytest.mark.corpora
def test_eegmat_has_19_sites_and_an_unnamed_reference():
    frame = frame_of(edf_labels("eegmat/Subject00_1.edf"))
    assert frame.montage == "referential"
    assert frame.roles == ("site",) * 19 + ("reference",)
    assert None not in frame.canonical[:19]
    assert set(reasons(frame)) == {"EEG A2-A1", "ECG ECG", "EDF Annotations"}


@pytest.mark.corpora
def test_eegmmidb_has_64_sites_under_dotted_names():
    frame = frame_of(edf_labels("eegmmidb_s001/S001R01.edf"))
    assert frame.roles == ("site",) * 64 + ("reference",)
    assert frame.sites[:2] == ("Fc5", "Fc3")
    assert frame.canonical[:2] == ("FC5", "FC3")
    assert np.isfinite(frame.positions[:64]).all()
    assert set(reasons(frame)) == {"EDF Annotations"}


@pytest.mark.corpora
def test_clinical_absence_has_23_sites_with_ears_and_sets_eye_leads_aside():
    frame = frame_of(edf_labels("clinical_absence/absence.edf"))
    assert len(frame.sites) == 24
    assert frame.roles.count("ear") == 2
    assert frame.roles[-1] == "reference"
    assert set(reasons(frame)) == {"EEG Pg1-REF", "EEG Pg2-REF", "ECG X1"}
