"""Channel labels, places on the head and neighbours."""

import importlib.util
import re
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from artifactlens.sites import (
    POSITIONS_FILE,
    canonical_site,
    head_to_site_frame,
    names_other_signal,
    neighbour_weights,
    parse_label,
    reference_name,
    site_position,
)


def words(text):
    return text.split()


SITES_1020 = words("Fp1 Fp2 F7 F3 Fz F4 F8 T7 C3 Cz C4 T8 P7 P3 Pz P4 P8 O1 O2")
SITES_1010 = words(
    "Fp1 Fpz Fp2 AF7 AF3 AFz AF4 AF8 F9 F7 F5 F3 F1 Fz F2 F4 F6 F8 F10 FT9 FT7 FC5 FC3 FC1 "
    "FCz FC2 FC4 FC6 FT8 FT10 T9 T7 C5 C3 C1 Cz C2 C4 C6 T8 T10 TP9 TP7 CP5 CP3 CP1 CPz CP2"
    " CP4 CP6 TP8 TP10 P9 P7 P5 P3 P1 Pz P2 P4 P6 P8 P10 PO7 PO3 POz PO4 PO8 O1 Oz O2 Iz"
)
SITE_FORMS = [
    *(
        "{}",
        "{}.",
        "{}..",
        " {} ",
        "{}-0",
        "EEG {}",
        "EEG_{}",
        "EEG-{}",
        "eeg {}",
        "POL {}",
    ),
    *("{}-Ref", "{}_REF", "{}REF", "{}-AVG", "{}-Av", "{}-A1A2", "EEG {}-REF", "EEG {}-LE"),
    *("EEG {} - Ref", "EEG {}-Ref-1"),
]
NO_ELECTRODES = [
    *("ECG X1", "EKG", "ECG ECG", "EOG L", "LOC", "ROC", "Pg1", "EEG Pg2-REF", "VEOG"),
    *("E1-M2", "EEG E2-A1", "LOC-A2", "Fp1-Pg1", "EMG", "EMG1-EMG2", "ECG1-ECG2"),
    *("Resp", "SpO2", "SaO2", "EtCO2", "O2 Sat", "PR", "Pulse", "Chin1-Chin2", "Photic"),
    *("DC1", "STI 014", "Status", "X1", "EDF Annotations", "Trigger"),
]
SCRIPT = Path(__file__).resolve().parent.parent / "scripts" / "make_site_positions.py"


@pytest.mark.parametrize(
    ("label", "plus", "minus", "canonical"),
    [
        ("T3", "T3", None, "T7"),
        ("EEG T6", "T6", None, "P8"),
        ("EEG Fp1-REF", "Fp1", "REF", "Fp1"),
        ("EEG FP1-REF", "FP1", "REF", "Fp1"),
        ("EEG Fp1-Ref", "Fp1", "Ref", "Fp1"),
        ("FP1-LE", "FP1", "LE", "Fp1"),
        ("Fp1_REF", "Fp1", "REF", "Fp1"),
        ("Fp1 Ref", "Fp1", "Ref", "Fp1"),
        ("Fp1Ref", "Fp1", "Ref", "Fp1"),
        ("Fp1-AVG", "Fp1", "AVG", "Fp1"),
        ("Fp1-Av", "Fp1", "Av", "Fp1"),
        ("Fp1-(A1+A2)/2", "Fp1", "(A1+A2)/2", "Fp1"),
        ("Fp1.", "Fp1", None, "Fp1"),
        ("Fc5.", "Fc5", None, "FC5"),
        ("C5..", "C5", None, "C5"),
        ("POL Fp1", "Fp1", None, "Fp1"),
        ("EEG:Fp1", "Fp1", None, "Fp1"),
        ("EEGFP1", "FP1", None, "Fp1"),
        ("  cz  ", "cz", None, "Cz"),
        ("Cz\x00\x00", "Cz", None, "Cz"),
        ("Fp1-0", "Fp1", None, "Fp1"),
        ("Oz-Ref-1", "Oz", "Ref", "Oz"),
        ("M1", "M1", None, "M1"),
        ("EEG A2-REF", "A2", "REF", "A2"),
        ("FFC5h", "FFC5h", None, "FFC5h"),
        ("O2", "O2", None, "O2"),
    ],
)
def test_a_label_of_one_electrode_is_a_site(label, plus, minus, canonical):
    parsed = parse_label(label)
    assert (parsed.role, parsed.plus, parsed.minus) == ("site", plus, minus)
    assert parsed.canonical == canonical
    assert parsed.canonical_minus is None
    assert parsed.original == label
    assert not names_other_signal(label)


@pytest.mark.parametrize(
    ("label", "plus", "minus", "canonical", "canonical_minus"),
    [
        ("Fp1-F7", "Fp1", "F7", "Fp1", "F7"),
        ("EEG FP1-F7", "FP1", "F7", "Fp1", "F7"),
        ("T3-T5", "T3", "T5", "T7", "P7"),
        ("EEG C3 - Cz", "C3", "Cz", "C3", "Cz"),
        ("EEG A2-A1", "A2", "A1", "A2", "A1"),
        ("Fp1-A1", "Fp1", "A1", "Fp1", "A1"),
        ("C3-M2", "C3", "M2", "C3", "M2"),
        ("C4A1", "C4", "A1", "C4", "A1"),
        ("C3\u2013P3", "C3", "P3", "C3", "P3"),
        ("Fp1_F7", "Fp1", "F7", "Fp1", "F7"),
        ("T8-P8-1", "T8", "P8", "T8", "P8"),
        ("EEG Fpz-Cz", "Fpz", "Cz", "Fpz", "Cz"),
    ],
)
def test_a_label_of_two_electrodes_is_a_derivation(
    label, plus, minus, canonical, canonical_minus
):
    parsed = parse_label(label)
    assert (parsed.role, parsed.plus, parsed.minus) == ("derivation", plus, minus)
    assert (parsed.canonical, parsed.canonical_minus) == (canonical, canonical_minus)


@pytest.mark.parametrize("label", NO_ELECTRODES)
def test_what_is_no_scalp_electrode_is_other_and_named_as_such(label):
    assert parse_label(label).role == "other"
    assert names_other_signal(label)


@pytest.mark.parametrize(
    "label", ["E12", "EEG 053", "EEG", "", "-", "EEG C3P-REF", "Pz quality"]
)
def test_an_unknown_name_is_other_without_an_electrode(label):
    parsed = parse_label(label)
    assert (parsed.role, parsed.plus, parsed.minus) == ("other", None, None)
    assert not names_other_signal(label)


def test_an_electrode_against_an_unknown_word_is_other_but_keeps_both():
    parsed = parse_label("EEG Pz-like")
    assert (parsed.role, parsed.plus, parsed.minus) == ("other", "Pz", "like")


@pytest.mark.parametrize(
    ("old", "new"),
    [("T3", "T7"), ("T4", "T8"), ("T5", "P7"), ("T6", "P8"), ("T1", "FT9"), ("T2", "FT10")],
)
def test_old_names_stand_for_the_newer_ones(old, new):
    assert canonical_site(old) == new
    assert canonical_site(old.lower()) == new


def test_names_outside_the_system_have_neither_canonical_name_nor_place():
    assert canonical_site("E12") is None
    assert canonical_site("REF") is None
    assert site_position("E12") is None
    assert site_position("T3") is None


def test_reference_names_are_told_from_electrodes():
    assert reference_name("(A1 + A2)/2") == "A1A22"
    assert reference_name("avg") == "AVG"
    assert reference_name("A1") is None


@settings(deadline=None)
@given(st.text() | st.text(alphabet="EGPOLFCTpz0123456789-_ .:/AMRV", max_size=16))
def test_parsing_never_raises_and_never_invents(label):
    parsed = parse_label(label)
    assert parsed.original == label
    assert (parsed.canonical is None) == (parsed.plus is None)
    assert (parsed.role == "other") or parsed.canonical is not None
    for part in (parsed.plus, parsed.minus):
        assert part is None or part in label
    assert (parsed.canonical_minus is not None) == (parsed.role == "derivation")
    assert names_other_signal(label) in (True, False)


@settings(deadline=None)
@given(
    site=st.sampled_from(SITES_1010),
    form=st.sampled_from(SITE_FORMS),
    case=st.sampled_from([str, str.upper, str.lower, str.title]),
)
def test_every_1010_name_comes_back_from_every_form(site, form, case):
    parsed = parse_label(form.format(case(site)))
    assert parsed.role == "site"
    assert parsed.canonical == site
    assert parsed.plus == case(site)


@settings(deadline=None)
@given(
    first=st.sampled_from(SITES_1010),
    second=st.sampled_from(SITES_1010),
    form=st.sampled_from(
        ["{}-{}", "EEG {}-{}", "{} - {}", "{}_{}", "EEG {}-{}-1", "{}/{}"]
    ),
)
def test_every_pair_of_1010_names_comes_back_from_every_form(first, second, form):
    parsed = parse_label(form.format(first, second))
    assert parsed.role == "derivation"
    assert (parsed.canonical, parsed.canonical_minus) == (first, second)


def places(names):
    return np.array([site_position(name) for name in names])


def test_axes_are_right_nose_up():
    # x right, y nose, z up; the vertex is about one radius (98 mm) above the centre.
    assert places(["T8"])[0, 0] > 0.08
    assert places(["T7"])[0, 0] < -0.08
    assert places(["Fpz"])[0, 1] > 0.08
    assert places(["Oz"])[0, 1] < -0.08
    assert places(["Cz"])[0, 2] == pytest.approx(0.1, abs=0.005)


def test_the_origin_is_the_centre_of_the_sphere_through_the_scalp_electrodes():
    names = [
        line.split("\t")[0] for line in POSITIONS_FILE.read_text("utf-8").splitlines()[1:]
    ]
    scalp = places([name for name in names if not re.fullmatch("[AM][12]|Nz", name)])
    assert len(scalp) == 335
    # Shifting the centre by d adds 2 p.d to |p|^2: at the fit |p|^2 does not depend on p.
    residual = (scalp**2).sum(axis=1) - (scalp**2).sum(axis=1).mean()
    slope = np.linalg.lstsq(scalp - scalp.mean(axis=0), residual, rcond=None)[0]
    np.testing.assert_allclose(slope / 2, 0, atol=1e-4)
    assert np.linalg.norm(scalp, axis=1).mean() == pytest.approx(0.098, abs=0.001)


def test_1020_neighbours_are_56_to_74_mm_apart():
    # Computed from mne's standard_1020 template for the project's table of facts.
    distance = np.linalg.norm(
        places(SITES_1020)[:, None] - places(SITES_1020)[None], axis=2
    )
    np.fill_diagonal(distance, np.inf)
    nearest = distance.min(axis=1)
    assert nearest.min() == pytest.approx(0.056, abs=0.0005)
    assert nearest.max() == pytest.approx(0.074, abs=0.0005)
    within = (distance < 0.10).sum(axis=1)
    assert (within.min(), within.max()) == (4, 8)
    fewest = {site for site, count in zip(SITES_1020, within, strict=True) if count == 4}
    assert fewest == {"F7", "F8", "P7", "P8", "O1", "O2"}


def test_a_position_cannot_be_changed_for_others():
    site_position("Cz")[:] = 0
    assert np.linalg.norm(site_position("Cz")) > 0.09


def test_the_shipped_table_is_what_the_script_makes_of_the_template():
    pytest.importorskip("mne")
    spec = importlib.util.spec_from_file_location("make_site_positions", SCRIPT)
    script = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(script)
    try:
        made = script.table_text()
    except LookupError as error:
        pytest.skip(str(error))
    assert POSITIONS_FILE.read_text(encoding="utf-8") == made


def test_digitised_positions_move_to_the_centre_and_implausible_ones_are_unknown():
    given_m = np.array(
        [[0, 0, 0.14], [0, 0, 0], [np.nan] * 3, [0, 85.0, 30.0], [0, 0, 0.05]]
    )
    moved = head_to_site_frame(given_m)
    np.testing.assert_allclose(moved[0], [0, 0, 0.10])
    assert np.isnan(moved[1:]).all()  # zeros, NaN, millimetres, inside the head


def row(*x_cm):
    return np.array([[x / 100, 0.0, 0.09] for x in x_cm])


def weights_of(positions, chain=None, reference=()):
    n = len(positions)
    chain = np.zeros(n, int) if chain is None else np.array(chain)
    return neighbour_weights(positions, chain, np.isin(np.arange(n), reference))


def test_neighbours_within_9_cm_weigh_by_inverse_squared_distance():
    weights, near = weights_of(row(0, 3, 6, 20))
    # From the first site 3 and 6 cm away: 1/9 and 1/36, that is 4/5 and 1/5.
    np.testing.assert_allclose(weights[0], [0, 0.8, 0.2, 0])
    # The last has none within 9 cm: the two nearest, 14 and 17 cm away.
    # (1/14^2) / (1/14^2 + 1/17^2) = 17^2 / (14^2 + 17^2).
    np.testing.assert_allclose(weights[3], [0, 196 / 485, 289 / 485, 0])
    assert near[3].tolist() == [False, True, True, False]
    assert near[1].tolist() == [True, False, True, True]
    np.testing.assert_array_equal(near, near.T)


def test_at_most_five_neighbours_are_taken():
    weights, _ = weights_of(row(0, 1, 2, 3, 4, 5, 6))
    assert (weights[0] > 0).tolist() == [False, True, True, True, True, True, False]


def test_equally_near_sites_are_chosen_by_place_not_by_order():
    # Six sites 5 cm around one: which one is left out may not depend on their order.
    around = 0.05 * np.array([[1, 0], [-1, 0], [0, 1], [0, -1], [0.6, 0.8], [0.8, 0.6]])
    positions = np.column_stack([np.vstack([[0, 0], around]), np.full(7, 0.09)])
    forward, _ = weights_of(positions)
    backward, _ = weights_of(positions[::-1])
    assert np.count_nonzero(forward[0]) == 5
    np.testing.assert_array_equal(forward[0], backward[6, ::-1])


def test_another_chain_gives_no_neighbours():
    weights, near = weights_of(row(0, 3, 6, 9), chain=[0, 1, 0, 2])
    np.testing.assert_array_equal(weights[0], [0, 0, 1, 0])
    np.testing.assert_array_equal(weights[3], 0)  # alone in its chain
    assert not near[3].any()


def test_a_hidden_reference_is_no_neighbour_but_has_all_sites_as_its_own():
    positions = np.vstack([row(0, 3, 6), [[np.nan] * 3]])
    weights, near = weights_of(positions, reference=[3])
    np.testing.assert_array_equal(weights[:3, 3], 0)
    np.testing.assert_allclose(weights[3], [1 / 3, 1 / 3, 1 / 3, 0])
    assert not near[3].any()
    lone, _ = weights_of(positions[[0, 3]], reference=[1])
    np.testing.assert_array_equal(lone, [[0, 0], [1, 0]])


def test_sites_without_positions_are_compared_with_all_others_alike():
    weights, near = weights_of(np.full((4, 3), np.nan))
    np.testing.assert_allclose(weights, (1 - np.eye(4)) / 3)
    assert not near.any()
