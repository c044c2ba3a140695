"""Contributions, usual values, and the sentences that a person reads."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from artifactlens.curves import Curve, Head, Model, Table
from artifactlens.evidence import amount, explain, quiet_values, sentence, values_at
from artifactlens.features import FeatureTable
from artifactlens.features.catalogue import BY_NAME, FEATURE_NAMES, MEASURED
from artifactlens.kinds import KIND_NAMES
from artifactlens.lookalikes import SIGNS, look_alike
from artifactlens.result import Contribution, Measure

DRIVERS = {
    "eye": "front_vertical",
    "muscle": "slope",
    "pop": "step",
    "mains": "mains_level",
}
VALUES = dict.fromkeys(FEATURE_NAMES, 1.0) | {
    "front_vertical": 142.4,
    "front_lateral": -6.0,
    "slope": 0.213,
    "beta_power": 3.21,
    "fast_rise": 12.4,
    "step": 182.6,
    "step_alone": 18.0,
    "step_stays": 0.714,
    "mains_level": 3.456,
    "mains_steady": 17.8,
}


def part(feature, log_odds, value=None, usual=None):
    entry = BY_NAME[feature]
    shown = VALUES[feature] if value is None else value
    return Contribution(feature, entry.label, entry.unit, shown, usual, log_odds)


def pair_of(first, second, log_odds, values=(12.0, 3.0), usual=(None, None)):
    measures = tuple(
        Measure(name, BY_NAME[name].label, BY_NAME[name].unit, value, as_usual)
        for name, value, as_usual in zip((first, second), values, usual, strict=True)
    )
    return Contribution.of(measures, log_odds)


def told(kind, sites=("Fp1", "Fp2"), site="Fp1", parts=None, *, reference=False, field=7,
         line=50.0, **changes):  # fmt: skip
    return sentence(
        kind,
        sites,
        site,
        VALUES | changes,
        parts or (part(DRIVERS[kind], 3.1), part("swing", 0.9), part("spread", -1.2)),
        at_reference=reference,
        line_frequency=line,
        field_count=field,
    )


def table_of(values):
    values = np.asarray(values, dtype=np.float32)
    n_epochs, n_sites = values.shape[1:]
    return FeatureTable(
        values=values,
        usual=np.zeros((len(MEASURED), n_sites), np.float32),
        pace=np.zeros((n_epochs, n_sites, 10), np.float16),
        step_at=np.zeros((n_epochs, n_sites), np.float16),
        front_at=np.zeros(n_epochs, np.float16),
        segment=np.zeros(n_epochs, np.int64),
    )


# Safety --------------------------------------------------------------------------------


@pytest.mark.parametrize("reference", [False, True])
@pytest.mark.parametrize("kind", KIND_NAMES)
def test_every_sentence_says_consistent_with_and_denies_nothing(kind, reference):
    text = told(kind, reference=reference)
    assert text.count("consistent with") == 1
    for word in ("not epileptiform", "is not", "no seizure", "harmless", "certain"):
        assert word not in text
    assert "nan" not in text
    assert "None" not in text


@settings(max_examples=200, deadline=None)
@given(
    kind=st.sampled_from(KIND_NAMES),
    values=st.fixed_dictionaries(
        {name: st.none() | st.floats(-1e3, 1e3, allow_nan=False) for name in FEATURE_NAMES}
    ),
    reference=st.booleans(),
    data=st.data(),
)
def test_any_values_give_a_sentence_without_gaps(kind, values, reference, data):
    driver = data.draw(st.sampled_from(FEATURE_NAMES))
    parts = (
        Contribution(driver, BY_NAME[driver].label, BY_NAME[driver].unit, values[driver],
                     None, 2.0),
    )  # fmt: skip
    text = sentence(
        kind, ("Cz",), "Cz", values, parts, at_reference=reference, line_frequency=60.0,
        field_count=3,
    )  # fmt: skip
    assert " - consistent with " in text
    assert text.endswith(".")
    for wrong in ("None", "nan", "  ", " .", ",,", "{", "e+"):
        assert wrong not in text


# The words of each kind ------------------------------------------------------------------


def test_a_blink():
    assert told("eye") == (
        "Fp1, Fp2 - consistent with a blink or upward gaze: +142 uV at the front against "
        "the sites behind, field over 7 sites. Frontal polarity drove this mark (+3.1 of "
        "+4.0): +142 uV."
    )


@pytest.mark.parametrize(
    ("vertical", "lateral", "words"),
    [
        (90.0, 10.0, "a blink or upward gaze: +90 uV at the front"),
        (-90.0, 10.0, "a downward gaze or the end of a blink: -90 uV at the front"),
        (10.0, 90.0, "a gaze to the right (or the return from the other side): +90 uV at"),
        (10.0, -90.0, "a gaze to the left (or the return from the other side): -90 uV at"),
        (90.0, 100.0, "a blink or upward gaze"),  # lateral by no more than a fifth
        (90.0, 109.0, "a gaze to the right"),
        (90.0, None, "a blink or upward gaze"),
        (None, -90.0, "a gaze to the left"),
    ],
)
def test_which_movement_of_the_eyes(vertical, lateral, words):
    assert words in told("eye", front_vertical=vertical, front_lateral=lateral)


def test_an_eye_deflection_that_was_not_measured_is_not_told_as_a_gaze():
    text = told("eye", front_vertical=None, front_lateral=None)
    assert "+0 uV" not in text
    assert "downward gaze" not in text
    assert "consistent with an eye movement: field over 7 sites" in text


@pytest.mark.parametrize("count", [0, 1])
def test_a_field_of_one_site_is_told_as_that_site_alone(count):
    text = told("eye", ("Fp1",), field=count)
    assert "field at this site alone" in text
    assert "sites" not in text.split("behind")[1]


def test_muscle():
    text = told("muscle", ("T3", "F7"), "T3")
    assert text.startswith("T3, F7 - consistent with muscle activity: spectral slope 0.21 ")
    assert "at T3, power at 30-45 Hz 12 dB above its usual. Spectral slope" in text
    assert "above its usual" not in told("muscle", fast_rise=0.9)
    assert "above its usual" not in told("muscle", fast_rise=None)
    assert "power at 18-30 Hz 3.2 dB at Fp1" in told("muscle", slope=None)


def test_a_pop():
    text = told("pop", ("P3",), "P3")
    assert text.startswith(
        "P3 - consistent with an electrode pop: a step of 183 uV within 16 ms at P3, "
        "8 times that of its neighbours, 71 % of it still there 0.1 s later. "
    )
    # 5 dB are a ratio of 1.8; what rounds to 1 times is not told.
    assert "times" not in told("pop", step_alone=5.0)
    assert ", 2 times that of its neighbours" in told("pop", step_alone=5.1)
    assert "still there" not in told("pop", step_stays=0.2)
    assert "100 % of it still there" in told("pop", step_stays=1.7)


def test_a_step_little_above_the_neighbours_is_not_one_times_theirs():
    assert ", 1 times that of its neighbours" not in told("pop", step_alone=3.2)


def test_mains():
    text = told("mains", ("O1",), "O1")
    assert text.startswith(
        "O1 - consistent with mains interference at 50 Hz: 3.46 uV at 50 Hz over 5 s at O1, "
        "17.8 dB over its flanks. "
    )
    assert "interference at 59.5 Hz: 3.46 uV at 59.5 Hz" in told("mains", line=59.5)


@pytest.mark.parametrize(
    ("kind", "words"),
    [
        ("pop", "a pop of the reference electrode: a step of 183 uV"),
        ("mains", "mains picked up at the reference electrode: 3.46 uV"),
        ("muscle", "muscle at the reference electrode: spectral slope"),
        ("eye", "an eye movement reaching the reference electrode: +142 uV at the front"),
    ],
)
def test_at_the_reference_the_reference_is_named_and_not_19_sites(kind, words):
    text = told(kind, ("reference",), "reference", reference=True)
    assert text.startswith(
        "Reference (the same shape in every referential channel) - consistent with "
    )
    assert words in text


# Where -----------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("count", "where"),
    [
        (1, "A1"),
        (6, "A1, A2, A3, A4, A5, A6"),
        (7, "A1, A2, A3, A4, A5 and 2 more sites"),
        (19, "A1, A2, A3, A4, A5 and 14 more sites"),
    ],
)
def test_up_to_six_sites_are_listed(count, where):
    sites = tuple(f"A{k}" for k in range(1, count + 1))
    assert told("muscle", sites, "A1").startswith(f"{where} - consistent with")


# The driver ------------------------------------------------------------------------------


def test_the_driver_is_what_speaks_most_for_the_kind_even_if_more_speaks_against():
    parts = (part("spread", -5.0), part("step", 2.5), part("swing", 1.0))
    assert "Fastest step drove this mark (+2.5 of +3.5): 183 uV." in told(
        "pop", parts=parts
    )


def test_a_pair_counts_in_the_sum_but_does_not_drive_beside_a_feature_that_speaks_for():
    parts = (pair_of("step", "spread", 4.0), part("step", 2.5), part("swing", 1.0))
    text = told("pop", parts=parts)
    assert text.endswith("Fastest step drove this mark (+2.5 of +7.5): 183 uV.")


def test_a_pair_drives_where_no_single_feature_speaks_for_the_kind():
    parts = (part("step", -2.5), pair_of("burst", "high_power", 1.2), part("swing", -0.3))
    assert told("muscle", parts=parts).endswith(
        ". Highest pace within a tenth of a second together with power at 55-95 Hz drove "
        "this mark (+1.2 of +1.2): 12 uV and 3.0 dB."
    )


@pytest.mark.parametrize(
    ("names", "values", "usual", "words"),
    [
        (("burst", "high_power"), (12.0, 3.0), (4.0, -2.0),
         ": 12 uV and 3.0 dB, usually 4 uV and -2.0 dB here."),
        (("burst", "high_power"), (12.0, 3.0), (4.0, None), ": 12 uV and 3.0 dB."),
        (("burst", "high_power"), (12.0, None), (4.0, -2.0), ": 12 uV and not measurable."),
        (("burst", "high_power"), (None, None), (4.0, -2.0), "(+1.2 of +1.2)."),
        (("burst_rise", "high_rise"), (12.0, 3.0), (0.1, 0.2), ": 12.0 dB and 3.0 dB."),
        (("front_lateral", "spread"), (12.0, 0.5), (-3.0, 0.2),
         ": +12 uV and 0.50, usually -3 uV and 0.20 here."),
    ],
)  # fmt: skip
def test_a_pair_that_drives_tells_both_of_its_measures(names, values, usual, words):
    text = told("muscle", parts=(pair_of(*names, 1.2, values, usual),))
    assert text.endswith(words)


def test_the_usual_value_stands_beside_the_value():
    parts = (part("step", 2.5, usual=11.4),)
    assert told("pop", parts=parts).endswith(": 183 uV, usually 11.4 uV here.")
    # What is itself measured against usual needs no usual value.
    parts = (part("step_rise", 2.5, value=24.0, usual=0.1),)
    assert told("pop", parts=parts).endswith("(+2.5 of +2.5): 24.0 dB.")


def test_a_driver_that_could_not_be_measured_gives_no_number():
    entry = BY_NAME["slope"]
    parts = (Contribution("slope", entry.label, entry.unit, None, None, 0.7),)
    text = told("muscle", parts=parts)
    assert text.endswith("Spectral slope, 14-42 Hz drove this mark (+0.7 of +0.7).")


def test_frontal_polarity_keeps_its_sign():
    parts = (part("front_lateral", 2.0, value=88.0, usual=-3.0),)
    assert told("eye", parts=parts).endswith(": +88 uV, usually -3 uV here.")


@pytest.mark.parametrize(
    ("value", "unit", "signed", "text"),
    [
        (None, "uV", False, "not measurable"),
        (142.37, "uV", False, "142 uV"),
        (142.37, "uV", True, "+142 uV"),
        (-6.04, "uV", True, "-6.04 uV"),
        (1234.5, "uV", False, "1234 uV"),
        (99999.0, "uV", False, "99999 uV"),
        (0.71349, "", False, "0.71"),
        (0.0, "uV", False, "0 uV"),
        (12.345, "dB", False, "12.3 dB"),
        (0.00099, "uV", False, "0 uV"),
        (-0.00099, "uV", True, "+0 uV"),
        (0.00123, "uV", False, "0.00123 uV"),
    ],
)
def test_amounts_in_words(value, unit, signed, text):
    assert amount(value, unit, signed=signed) == text


def test_a_tiny_amount_is_not_told_with_an_exponent():
    assert "e" not in amount(0.0000123, "uV")


# Contributions and usual values ----------------------------------------------------------


def small_model():
    curves = {
        "step": Curve(np.array([50.0]), np.array([-1.0, 2.0]), 0.25),
        "slope": Curve(np.array([0.0]), np.array([3.0, -4.0]), 0.5),
    }
    return Model(
        "small", "", tuple(Head(k, -1.0, curves, 0.9, 0.5) for k in KIND_NAMES), {}
    )


def test_contributions_come_largest_first_with_value_unit_and_usual():
    values = np.zeros((len(MEASURED), 2, 3), dtype=np.float32)
    values[MEASURED.index("step"), 1, 2] = 80.0
    values[MEASURED.index("slope"), 1, 2] = 0.5
    usual = {name: np.arange(3, dtype=np.float32) for name in FEATURE_NAMES}
    sites = np.array([2])
    measured = values_at(table_of(values), np.array([1]), sites)
    assert set(measured) == set(FEATURE_NAMES)
    (parts,) = explain(small_model(), "pop", measured, usual, sites)
    # What the head does not look at adds nothing and is not listed.
    assert [(p.feature, p.log_odds) for p in parts] == [("slope", -4.0), ("step", 2.0)]
    assert (parts[1].value, parts[1].unit, parts[1].usual) == (80.0, "uV", 2.0)
    assert parts[1].label == "fastest step"


def test_a_pair_is_one_contribution_with_both_measures():
    table = Table(np.array([0.0]), np.array([50.0]), np.arange(9.0).reshape(3, 3))
    single = small_model().heads[0].curves
    heads = tuple(
        Head(k, -1.0, single, 0.9, 0.5, {("slope", "step"): table}) for k in KIND_NAMES
    )
    measured = {name: np.zeros(2) for name in FEATURE_NAMES} | {
        "slope": np.array([0.5, np.nan]),
        "step": np.array([80.0, 20.0]),
    }
    usual = {name: np.arange(3, dtype=np.float32) for name in FEATURE_NAMES}
    first, second = explain(
        Model("pair", "", heads, {}), "pop", measured, usual, np.array([2, 1])
    )
    assert [(p.feature, p.log_odds) for p in first] == [
        ("slope", -4.0),
        ("slope+step", 4.0),  # beyond both edges: row 1, column 1
        ("step", 2.0),
    ]
    assert [(p.feature, p.log_odds) for p in second] == [
        ("slope+step", 6.0),  # the first missing, the second below its edge
        ("step", -1.0),
        ("slope", 0.5),
    ]
    pair = first[1]
    assert pair.label == "spectral slope, 14-42 Hz together with fastest step"
    assert (pair.unit, pair.value, pair.usual) == ("", None, None)
    assert (
        pair.pair
        == pair.measures
        == (
            Measure("slope", "spectral slope, 14-42 Hz", "", 0.5, 2.0),
            Measure("step", "fastest step", "uV", 80.0, 2.0),
        )
    )
    assert second[0].pair[0].value is None
    assert second[1].pair == ()
    assert second[1].measures == (Measure("step", "fastest step", "uV", 20.0, 1.0),)


def test_contributions_of_a_cell_add_up_to_its_score_and_the_missing_is_none():
    values = np.random.default_rng(3).normal(size=(len(MEASURED), 4, 3), scale=60)
    values[:, 2, 1] = np.nan
    table, model = table_of(values), small_model()
    usual = {name: np.full(3, np.nan, dtype=np.float32) for name in FEATURE_NAMES}
    epochs, sites = np.array([0, 2, 3]), np.array([0, 1, 2])
    scores = model.scores(table)
    for parts, epoch, site in zip(
        explain(model, "eye", values_at(table, epochs, sites), usual, sites),
        epochs,
        sites,
        strict=True,
    ):
        assert len(parts) == 2
        total = -1.0 + sum(entry.log_odds for entry in parts)
        assert total == pytest.approx(scores[0, epoch, site], abs=1e-9)
        assert all(entry.usual is None for entry in parts)
        if epoch == 2:
            assert all(entry.value is None for entry in parts)


def test_usual_values_are_the_medians_of_the_quiet_seconds_of_each_site():
    values = np.zeros((len(MEASURED), 6, 3), dtype=np.float32)
    step = np.array([[1, 2, 3, 90, 95, 99], [5, 5, 70, 5, 5, 5], [7, 8, 9, 10, 11, 12]]).T
    values[MEASURED.index("step")] = step
    quiet = np.ones((6, 3), dtype=bool)
    quiet[3:, 0] = False
    quiet[2, 1] = False
    quiet[:, 2] = False  # never quiet: all its seconds serve
    np.testing.assert_array_equal(
        quiet_values(table_of(values), quiet)["step"], [2.0, 5.0, 9.5]
    )


# Look-alikes -----------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("kind", "values", "words"),
    [
        ("eye", {"front_rhythm": 0.46, "eye_match": 0.9}, "frontal rhythmic delta"),
        ("eye", {"front_rhythm": 0.2, "eye_match": 0.49}, "frontal slow waves"),
        ("muscle", {"beta_peak": 8.1, "slope": 0.0}, "beta activity or spindles"),
        ("muscle", {"beta_peak": 2.0, "slope": -1.3}, "fast cerebral activity"),
        ("pop", {"step_stays": 0.14, "spread": 0.1}, "a focal spike or sharp wave"),
        ("pop", {"step_stays": 0.9, "spread": 0.36}, "a focal discharge"),
        ("mains", {"mains_steady": 3.9}, "fast activity near the line frequency"),
    ],
)
def test_a_look_alike_is_named_when_its_sign_is_present(kind, values, words):
    assert look_alike(kind, values).startswith(words)


@pytest.mark.parametrize(
    ("kind", "values"),
    [
        ("eye", {"front_rhythm": 0.45, "eye_match": 0.5}),
        ("muscle", {"beta_peak": 8.0, "slope": -1.2}),
        ("pop", {"step_stays": 0.15, "spread": 0.35}),
        ("mains", {"mains_steady": 4.0}),
        ("eye", {}),
        ("muscle", {"beta_peak": None, "slope": None}),
        ("pop", {"front_rhythm": 0.9}),
    ],
)
def test_no_look_alike_is_named_without_its_sign(kind, values):
    assert look_alike(kind, values) == ""


def test_several_look_alikes_are_all_named():
    found = look_alike("pop", {"step_stays": -0.3, "spread": 0.8})
    assert found.split("; ") == [
        "a focal spike or sharp wave: the step does not stay",
        "a focal discharge: other sites take part in the field",
    ]


def test_every_kind_has_a_look_alike_and_none_is_denied():
    assert {sign.kind for sign in SIGNS} == set(KIND_NAMES)
    assert not any("is not epileptiform" in sign.words for sign in SIGNS)
