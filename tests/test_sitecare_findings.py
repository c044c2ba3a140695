"""What each search finds in evidence made by hand, and what it leaves alone."""

import numpy as np
import pytest
from care import (
    BANANA,
    REFERENTIAL,
    evidence,
    field,
    frame_of,
    gist,
    marks,
    measured,
    named,
    one,
    solved,
    with_noise,
)
from signals import SITES, row, sine, ten_twenty

from artifactlens.sitecare.bridging import bridges, electrical_distance
from artifactlens.sitecare.contact import contacts, prediction_errors, unpredicted
from artifactlens.sitecare.humming import hums, own_hum
from artifactlens.sitecare.losses import losses
from artifactlens.sitecare.patients import patients
from artifactlens.sitecare.popping import STEP_OVER_FAST, popping
from artifactlens.sitecare.reference_noise import noisy_references
from artifactlens.sitecare.short_chains import short_chains

FRAME, CHAINS = frame_of(), frame_of(BANANA)
ONE_CHAIN = np.zeros(20, dtype=np.intp)
RATE = 200.0
SEARCHES = (bridges, contacts, hums, losses, patients, popping)


def all_found(made):
    return [found for search in SEARCHES for found in search(made)]


@pytest.mark.parametrize("labels", [REFERENTIAL, BANANA])
def test_nothing_is_found_where_nothing_is_wrong(labels):
    assert all_found(evidence(frame_of(labels))) == []


# Bridges -------------------------------------------------------------------------------


def test_the_electrical_distance_is_the_variance_of_the_difference():
    """Tenke & Kayser 2001 and Alschuler et al. 2014, from memory: var(x_i - x_j)."""
    rng = np.random.default_rng(2)
    traces = rng.normal(size=(5, 5)) @ rng.normal(size=(5, 400))
    distance = electrical_distance(np.cov(traces, bias=True))
    for i in range(5):
        for j in range(5):
            assert distance[i, j] == pytest.approx(np.var(traces[i] - traces[j]), abs=1e-9)


def test_the_electrical_distance_by_hand():
    """4 + 9 - 2 x 2 = 9; in stretches, and unknown where a covariance is."""
    matrix = np.array([[4.0, 2.0], [2.0, 9.0]])
    np.testing.assert_allclose(electrical_distance(matrix), [[0, 9], [9, 0]])
    both = np.array([matrix, [[4.0, np.nan], [np.nan, 9.0]]])
    assert electrical_distance(both)[0, 0, 1] == 9.0
    assert np.isnan(electrical_distance(both)[1, 0, 1])


def bridged(frame, *sites, noise_uv=0.3, when=slice(None), seconds=60):
    """Covariance for each second: these sites show their mean and an amplifier's noise."""
    rows = [frame.sites.index(site) for site in sites]
    mixing = np.eye(len(frame.sites))
    mixing[rows] = 0.0
    mixing[np.ix_(rows, rows)] = 1 / len(rows)
    joined = mixing @ field(frame) @ mixing.T
    joined[rows, rows] += noise_uv**2
    each = np.repeat(solved(frame, field(frame))[None], seconds, axis=0)
    each[when] = solved(frame, joined)
    return each


@pytest.mark.parametrize("frame", [FRAME, CHAINS])
def test_a_bridge_names_both_sites_and_how_little_they_differ(frame):
    made = evidence(frame, covariance=bridged(frame, "C3", "P3"))
    found = one(bridges(made))
    assert named([found], made) == [("bridge", "bridged", found_names(made, "C3", "P3"))]
    assert found.held.all()
    assert found.plain
    # Two amplifiers of 0.3 uV each: sqrt(2) x 0.3 = 0.42 uV.
    assert "differ by 0.42 uV only" in found.reason


def found_names(made, *names):
    """Names in the order of the frame."""
    return tuple(site for site in made.frame.sites if site in names)


def test_three_joined_sites_are_one_bridge():
    made = evidence(covariance=bridged(FRAME, "C3", "P3", "Pz"))
    found = one(bridges(made))
    assert found_names(made, "C3", "P3", "Pz") == named([found], made)[0][2]


def test_two_bridges_are_two():
    both = bridged(FRAME, "C3", "P3")
    mixing = np.eye(20)
    pair = [row("F4"), row("C4")]
    mixing[np.ix_(pair, pair)] = 0.5
    made = evidence(covariance=mixing @ both @ mixing.T + 1e-3 * np.eye(20))
    found = {frozenset(sites) for _, _, sites in named(bridges(made), made)}
    assert found == {frozenset({"C3", "P3"}), frozenset({"F4", "C4"})}


@pytest.mark.parametrize(
    ("sites", "noise_uv"),
    [
        (("Fp1", "O2"), 0.3),  # gel does not run from the forehead to the back
        (("C3", "P3"), 4.0),  # too different for gel: neighbours that are much alike
    ],
)
def test_what_gel_does_not_do_is_no_bridge(sites, noise_uv):
    assert bridges(evidence(covariance=bridged(FRAME, *sites, noise_uv=noise_uv))) == []


def test_gel_does_not_come_and_go():
    when = np.isin(np.arange(100) // 10, [1, 5, 9])
    made = evidence(
        seconds=100, covariance=bridged(FRAME, "C3", "P3", when=when, seconds=100)
    )
    assert bridges(made) == []
    since = bridged(FRAME, "C3", "P3", when=slice(40, None), seconds=100)
    found = one(bridges(evidence(seconds=100, covariance=since)))
    assert found.held.tolist() == [False] * 4 + [True] * 6
    assert found.known.all()


def test_half_a_head_alike_is_no_bridge():
    assert bridges(evidence(covariance=bridged(FRAME, *SITES[:10], noise_uv=0.1))) == []


def test_a_flat_derivation_between_two_sites_seen_otherwise_is_a_bridge():
    flat = np.zeros((60, len(BANANA)), dtype=bool)
    flat[:, BANANA.index("C3-P3")] = True
    made = evidence(CHAINS, flat=flat)
    assert named(bridges(made), made) == [
        ("bridge", "bridged", found_names(made, "C3", "P3"))
    ]
    ok = np.ones((60, len(CHAINS.sites)), dtype=bool)
    ok[:, CHAINS.sites.index("P3")] = False
    assert bridges(evidence(CHAINS, flat=flat, ok=ok)) == []


# Contact -------------------------------------------------------------------------------


def errors_of(covariance):
    """Weights of sites that belong together."""
    return prediction_errors(covariance, np.zeros(covariance.shape[1], dtype=np.intp))


def mixture(noise_uv=3.0):
    """Covariance of site 0 = 0.7 x site 1 + 0.3 x site 2 + noise; 1 to 6 of their own, 10 uV."""
    mixing = np.eye(7)
    mixing[0] = [noise_uv / 10, 0.7, 0.3, 0, 0, 0, 0]
    return (mixing @ (100.0 * np.eye(7)) @ mixing.T)[None]


def test_what_others_do_not_predict_is_the_noise_of_the_site():
    """Of 49 + 9 + 9 uV^2 the 9 of its own noise are left; a ridge of 1e-3 adds little."""
    weights = errors_of(mixture())
    share, size = unpredicted(mixture(), weights)
    assert size[0, 0] == pytest.approx(3.0, rel=0.01)
    assert share[0, 0] == pytest.approx(9 / 67, rel=0.02)
    # Sites 3 to 6 are like no other: all of them is their own, and more.
    assert (share[0, 3:] >= 1.0).all()


def test_weights_leave_the_site_less_what_predicts_it():
    weights = errors_of(mixture())
    np.testing.assert_array_equal(np.diag(weights), 1.0)
    np.testing.assert_allclose(weights[0, 1:3], [-0.7, -0.3], rtol=0.01)


def test_what_is_left_of_a_site_is_the_same_against_any_reference():
    """A common potential of 50 uV is in every row: weights that sum to one take it off."""
    weights = errors_of(mixture())
    np.testing.assert_allclose(weights.sum(axis=1), 0.0, atol=1e-9)
    _, alone = unpredicted(mixture(), weights)
    _, shared = unpredicted(mixture() + 2500.0, weights)
    np.testing.assert_allclose(shared, alone, rtol=1e-6)


def test_a_site_that_is_barred_predicts_nobody():
    barred = np.array([False, True, False, False, False, False, False])
    weights = prediction_errors(mixture(), np.zeros(7, dtype=np.intp), barred)
    np.testing.assert_array_equal(weights[:, 1], np.arange(7) == 1)
    # ... and is itself still held against the others.
    assert (weights[1] != 0).sum() > 1


def test_the_prediction_knows_neither_gain_nor_order():
    share, size = unpredicted(mixture(), errors_of(mixture()))
    louder = 25.0 * mixture()
    share5, size5 = unpredicted(louder, errors_of(louder))
    np.testing.assert_allclose(share5, share, rtol=1e-6)
    np.testing.assert_allclose(size5, 5 * size, rtol=1e-6)
    mixing = np.random.default_rng(4).normal(size=(9, 9))
    any_head = (mixing @ mixing.T)[None]
    share, _ = unpredicted(any_head, errors_of(any_head))
    order = np.array([4, 0, 6, 2, 8, 5, 1, 3, 7])
    turned = any_head[:, order[:, None], order]
    share_t, _ = unpredicted(turned, errors_of(turned))
    np.testing.assert_allclose(share_t[0], share[0, order], atol=1e-9)


@pytest.mark.parametrize("noise_uv", [80.0, 400.0])
def test_noise_that_leaks_into_a_whole_chain_is_still_the_sites_own(noise_uv):
    """Noise of one electrode leaks with -1/8 to the seven others, which could tell it all."""
    place = CHAINS.sites.index("P3")
    covariance = with_noise(CHAINS, P3=noise_uv)[None]
    _, size = unpredicted(covariance, prediction_errors(covariance, CHAINS.chain))
    assert (CHAINS.chain == CHAINS.chain[place]).sum() == 8
    assert size[0, place] == pytest.approx(noise_uv, rel=0.1)


def test_without_one_that_predicts_it_a_site_is_not_known():
    weights = errors_of(np.repeat(mixture(), 2, axis=0))
    lost = np.repeat(mixture(), 2, axis=0)
    lost[1, 1] = lost[1, :, 1] = np.nan
    share, size = unpredicted(lost, weights)
    assert np.isfinite(share[0]).all()
    assert np.isnan(share[1, :2]).all()
    assert np.isnan(size[1, :2]).all()


def test_a_site_with_noise_of_its_own_stands_apart():
    made = evidence(covariance=with_noise(FRAME, P3=80.0))
    found = one(contacts(made))
    assert named([found], made) == [("site", "apart", ("P3",))]
    assert found.plain
    assert found.held.all()
    assert "uV that no other site shares" in found.reason
    weaker = one(contacts(evidence(covariance=with_noise(FRAME, P3=60.0))))
    assert weaker.weight < found.weight


def test_what_is_little_above_the_others_does_not_stand_apart():
    assert contacts(evidence(covariance=with_noise(FRAME, P3=10.0))) == []


def test_muscle_is_no_poor_contact_but_poor_contact_may_look_like_muscle():
    """What is slow, held against what is fast: 20 dB over 15 Hz are 39 uV, -10 dB 1.2 uV."""
    noisy = with_noise(FRAME, P3=80.0)
    muscle = marks(FRAME, 60, ["P3"])
    loud = evidence(covariance=noisy, probability={"muscle": muscle}, fast_power=20.0)
    assert loud.fast_uv()[0, 0] == pytest.approx(np.sqrt(1500.0))
    assert contacts(loud) == []
    soft = evidence(covariance=noisy, probability={"muscle": muscle}, fast_power=-10.0)
    assert named(contacts(soft), soft) == [("site", "apart", ("P3",))]


def test_noise_in_the_reference_is_one_finding_and_none_of_the_sites():
    made = evidence(covariance=with_noise(FRAME, reference=60.0))
    found = one(noisy_references(made))
    assert named([found], made) == [("reference", "apart", ("reference",))]
    assert "in every channel alike" in found.reason


def head(seconds):
    """Channels of a smooth field; the reference is quiet."""
    alike = np.linalg.cholesky(field(FRAME)[:19, :19])
    return alike @ ten_twenty(seconds, RATE, seed=7, exponent=1.5, rms_uv=1.0)


def swaying(*sites, size_uv=200.0, seconds=60):
    """Sites that sway, each with another period of about ten seconds."""
    channels = head(seconds)
    for number, site in enumerate(sites):
        hz = 0.09 + 0.013 * number
        channels[row(site)] += sine(channels.shape[1], RATE, hz, size_uv)
    return measured(channels)


def test_a_site_that_wanders_alone_drifts():
    made = swaying("T8")
    found = one(contacts(made))
    assert named([found], made) == [("site", "drift", ("T8",))]
    assert found.plain
    # A sine of 200 uV has 141 uV rms.
    size = float(found.reason.removeprefix("wanders by ").split()[0])
    assert size == pytest.approx(141, abs=20)


def test_sites_that_wander_together_are_the_skin_and_no_electrode():
    wet = ("F3", "C4", "P3", "T8", "O1")
    made = swaying(*wet)
    found = one(contacts(made))
    assert (found.cause, found.sign) == ("patient", "drift")
    assert {made.frame.sites[k] for k in found.rows} == set(wet)
    assert "consistent with sweat" in found.reason


def test_a_chain_of_three_names_the_noisiest_and_says_that_it_cannot_be_sure():
    made = evidence(CHAINS, covariance=with_noise(CHAINS, Cz=90.0))
    found = one(short_chains(made))
    assert named([found], made) == [("site", "apart", ("Cz",))]
    assert "in the chain Fz, Cz, Pz" in found.reason
    assert "cannot tell for sure" in found.reason
    calm = evidence(CHAINS, covariance=with_noise(CHAINS, Cz=90.0),
                    probability={"muscle": marks(CHAINS, 60, ["Cz"])})  # fmt: skip
    assert short_chains(calm) == []


# Mains ---------------------------------------------------------------------------------


def mean_zero(hum):
    return hum - hum.mean(axis=-1, keepdims=True)


def test_the_leak_of_a_frame_of_mean_zero_is_taken_off():
    """A at one of n sites is A (1 - 1/n) there and -A/n elsewhere; its own is A, theirs 0."""
    hum = np.zeros((2, 20), dtype=complex)
    hum[:, 7] = 40.0 * np.exp(1j * np.array([0.3, 2.0]))
    found = own_hum(mean_zero(hum), np.ones((2, 20), dtype=bool), ONE_CHAIN)
    expected = np.zeros((2, 20))
    expected[:, 7] = 40.0
    np.testing.assert_allclose(found, expected, atol=1e-4)


def test_a_site_that_is_not_there_has_no_hum_and_moves_no_other():
    ok = np.ones((1, 5), dtype=bool)
    ok[0, 2] = False
    hum = np.array([[1.0, 1.0, 500.0, 1.0, 4.0]], dtype=complex)
    found = own_hum(hum, ok, ONE_CHAIN[:5])
    np.testing.assert_allclose(found, [[0, 0, np.nan, 0, 3]], atol=1e-6)


def humming(frame, sizes, seconds=60, **columns):
    """Evidence with this complex amplitude at each electrode, seen in a frame of mean zero."""
    whole = np.zeros(len(frame.sites), dtype=complex)
    for site, size in sizes.items():
        whole[frame.sites.index(site)] = size
    solving = frame.matrix().astype(float) @ frame.incidence
    return evidence(frame, seconds, hum=solving @ whole, mains_ratio=20.0, **columns)


def test_each_chain_has_its_own_median_and_a_short_one_none():
    hum = np.array([[9.0, 1, 1, 1, 1, 5, 5, 5, 25, 5, 7, 8, 9]], dtype=complex)
    chain = np.repeat([0, 1, 2], [5, 5, 3])
    found = own_hum(hum, np.ones(hum.shape, dtype=bool), chain)
    np.testing.assert_allclose(found[0, :10], [8, 0, 0, 0, 0, 0, 0, 0, 20, 0], atol=1e-6)
    assert np.isnan(found[0, 10:]).all()


@pytest.mark.parametrize("frame", [FRAME, CHAINS])
@pytest.mark.parametrize(("site", "other"), [("T8", "C3"), ("P3", "F4")])
def test_mains_at_one_site_names_the_site(frame, site, other):
    made = humming(frame, {site: 20.0, other: 0.2})
    found = one(hums(made))
    assert named([found], made) == [("site", "mains", (site,))]
    assert found.plain
    assert "mains at 50 Hz, 20 uV" in found.reason


def test_mains_in_the_reference_names_the_reference_and_no_site():
    made = humming(FRAME, {"reference": 20.0, "C3": 0.3})
    found = one(hums(made))
    assert named([found], made) == [("reference", "mains", ("reference",))]
    assert "in every channel alike in size and phase" in found.reason


def everywhere(frame, size_uv=20.0, seed=3):
    rng = np.random.default_rng(seed)
    sizes = size_uv * rng.uniform(0.2, 1.0, len(frame.sites))
    turns = rng.uniform(0, 2 * np.pi, len(frame.sites))
    return dict(zip(frame.sites, sizes * np.exp(1j * turns), strict=True))


@pytest.mark.parametrize("frame", [FRAME, CHAINS])
def test_mains_of_differing_size_and_phase_at_all_sites_is_the_ground(frame):
    made = humming(frame, everywhere(frame))
    found = one(hums(made))
    assert (found.cause, found.sign, found.rows) == ("ground", "mains", ())
    assert found.plain
    assert "differing size and phase" in found.reason


@pytest.mark.parametrize(
    "quiet", [{"line_frequency": None}, {"mains_ratio": 3.0}], ids=["no line", "no peak"]
)
def test_where_no_line_stands_out_there_is_no_mains(quiet):
    columns = {"mains_ratio": 20.0} | quiet
    hum = np.zeros(20, dtype=complex)
    hum[3] = 30.0
    assert hums(evidence(hum=mean_zero(hum), **columns)) == []


# Losses --------------------------------------------------------------------------------


def at_channels(labels, channels, when=slice(None), seconds=60):
    found = np.zeros((seconds, len(labels)), dtype=bool)
    for label in channels:
        found[when, labels.index(label)] = True
    return found


@pytest.mark.parametrize(
    ("fault", "sign"), [("flat", "flat"), ("missing", "lost"), ("clipped", "clipped")]
)
def test_a_channel_without_a_signal_names_its_site(fault, sign):
    faulty = at_channels(REFERENTIAL, ["C3-REF"], when=slice(30, 60))
    made = evidence(**{fault: faulty})
    found = one(losses(made))
    assert named([found], made) == [("site", sign, ("C3",))]
    assert found.held.tolist() == [False] * 3 + [True] * 3
    assert "50 % of the time" in found.reason


@pytest.mark.parametrize(
    ("channels", "sites"),
    [
        (["F7-T7", "T7-P7"], ["T7"]),  # all derivations of T7
        (["F7-T7"], []),  # one derivation does not tell which of its electrodes it is
        (["P3-O1", "P7-O1", "P4-O2"], ["O1"]),
    ],
)
def test_among_derivations_a_site_is_lost_if_all_of_its_own_are(channels, sites):
    made = evidence(CHAINS, flat=at_channels(BANANA, channels))
    assert named(losses(made), made) == [("site", "flat", (site,)) for site in sites]


def test_what_is_lost_at_most_sites_at_once_is_none_of_them():
    made = evidence(flat=at_channels(REFERENTIAL, REFERENTIAL[:15], when=slice(20, 60)))
    found = one(losses(made))
    assert (found.cause, found.sign, found.rows) == ("ground", "flat", ())
    assert found.held.tolist() == [False] * 2 + [True] * 4


def test_a_reference_all_of_whose_channels_are_lost_is_not_to_blame_for_it():
    """Its own loss would look the same, but then the channels would not be flat."""
    labels = (
        "Fp1-A1",
        "F3-A1",
        "C3-A1",
        *(f"{site}-A2" for site in SITES if site[-1] in "2468"),
    )
    frame = frame_of(labels)
    assert "reference A1" in frame.sites
    made = evidence(frame, flat=at_channels(labels, labels[:3]))
    assert {sites for _, _, sites in named(losses(made), made)} == {
        ("Fp1",),
        ("F3",),
        ("C3",),
    }


def test_a_second_or_two_without_a_signal_name_no_site():
    assert losses(evidence(missing=at_channels(REFERENTIAL, ["C3-REF"], slice(4, 6)))) == []


# Pops and loose leads ------------------------------------------------------------------


def pops_at(site, *moments, frame=FRAME):
    return [(moment, (frame.sites.index(site),)) for moment in moments]


def test_pops_are_counted_at_their_site():
    made = evidence(pops=[*pops_at("P3", 9.9, 19.5, 31.0, 49.9), *pops_at("O2", 50.1)])
    found = one(popping(made))
    assert named([found], made) == [("site", "pops", ("P3",))]
    assert found.reason == "4 pops in 60 s, unlike its neighbours"
    assert found.held.tolist() == [True, True, False, True, True, False]
    assert found.plain
    assert not found.lasting


def test_two_pops_are_watched_only():
    assert not one(popping(evidence(pops=pops_at("P3", 3.2, 44.4)))).plain


def test_rare_pops_of_a_long_recording_are_watched_only():
    """Three within any six minutes are plain; here one in every quarter of an hour."""
    rare = evidence(seconds=3600, pops=pops_at("P3", 100.5, 1000.5, 1900.5, 2800.5))
    assert not one(popping(rare)).plain
    close = evidence(seconds=3600, pops=pops_at("P3", 100.5, 200.5, 300.5, 2800.5))
    assert one(popping(close)).plain


def test_spikes_of_muscle_are_no_pops():
    """A lone step is far above what is fast; 15 dB over 15 Hz are 21.8 uV rms."""
    fast_uv = np.sqrt(15 * 10**1.5)
    columns = {
        "pops": pops_at("T7", 3.2, 17.5, 31.0, 44.4),
        "probability": {"muscle": marks(FRAME, 60, ["T7", "F7", "T8"])},
        "fast_power": 15.0,
    }
    assert popping(evidence(step=0.9 * STEP_OVER_FAST * fast_uv, **columns)) == []
    steep = evidence(step=1.1 * STEP_OVER_FAST * fast_uv, **columns)
    assert named(popping(steep), steep) == [("site", "pops", ("T7",))]


def test_what_springs_back_at_once_is_no_pop():
    pops = pops_at("T7", 3.2, 17.5, 31.0, 44.4)
    assert popping(evidence(pops=pops, step_stays=0.1)) == []
    assert len(popping(evidence(pops=pops, step_stays=0.9))) == 1


def test_pops_of_the_reference_name_the_reference():
    made = evidence(pops=pops_at("reference", 3.2, 17.5, 31.0))
    found = one(popping(made))
    assert named([found], made) == [("reference", "pops", ("reference",))]
    assert found.reason == "3 pops in 60 s in every channel alike"


def wild(site, seconds, size_uv=600.0, frame=FRAME):
    swing = np.full((60, len(frame.sites)), 60.0)
    swing[seconds, frame.sites.index(site)] = size_uv
    return swing


def test_a_site_that_runs_wild_now_and_then_has_a_loose_lead():
    swings = wild("F3", [5, 6, 7, 30, 31, 32, 50])
    pop = ((5.4, (FRAME.sites.index("F3"),)),)
    made = evidence(swing=swings, pops=pop, step_stays=0.8)
    found = one(popping(made))
    assert named([found], made) == [("site", "loose lead", ("F3",))]
    assert found.reason.startswith("comes and goes")
    assert "7 s and 1 pop in 60 s" in found.reason
    assert found.plain
    # Large swings without a single step may be muscle.
    assert popping(evidence(swing=swings)) == []


def test_wild_seconds_of_two_sites_or_of_eyes_are_no_loose_lead():
    both = np.maximum(
        wild("Fp1", [5, 6, 7, 30, 31, 32]), wild("Fp2", [5, 6, 7, 30, 31, 32])
    )
    assert popping(evidence(swing=both)) == []
    unequal = np.maximum(wild("Fp1", slice(None)), wild("Fp2", slice(None), size_uv=200.0))
    eyes = {"eye": marks(FRAME, 60, ["Fp1", "Fp2"])}
    assert popping(evidence(swing=unequal, probability=eyes)) == []


def test_a_step_in_a_chain_of_three_is_the_one_with_the_largest_part():
    """A step at Cz is 2/3 of it there and -1/3 at Fz and Pz."""
    step = np.full((60, len(CHAINS.sites)), 5.0)
    rise = np.zeros_like(step)
    for second in (4, 20, 41):
        for site, part in (("Fz", 1), ("Cz", 2), ("Pz", 1)):
            step[second, CHAINS.sites.index(site)] = 40.0 * part
            rise[second, CHAINS.sites.index(site)] = 20.0
    made = evidence(CHAINS, step=step, step_rise=rise)
    assert named(popping(made), made) == [("site", "pops", ("Cz",))]
    rise[[4, 20, 41], CHAINS.sites.index("O1")] = 15.0  # the whole head stepped
    assert popping(evidence(CHAINS, step=step, step_rise=rise)) == []


# The patient ---------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("sites", "words"),
    [
        (("T7", "T8"), "at the temples"),
        (("Fp1", "Fp2"), "at the front"),
        (("O1", "O2"), "at the back"),
    ],
)
def test_muscle_is_told_by_its_place(sites, words):
    muscle = marks(FRAME, 60, sites, when=slice(0, 30))
    found = one(patients(evidence(probability={"muscle": muscle})))
    assert (found.cause, found.sign) == ("patient", "muscle")
    assert found.reason.startswith(
        f"marked as muscle {words} in 50 of 100 seconds, consistent"
    )
    assert {FRAME.sites[k] for k in found.rows} == set(sites)
    assert found.held.tolist() == [True] * 3 + [False] * 3


def test_eyes_ask_for_rest_if_they_move_much():
    often = evidence(probability={"eye": marks(FRAME, 60, ["Fp1"], when=slice(0, 20))})
    found = one(patients(often))
    assert (found.cause, found.sign) == ("patient", "eye")
    assert "33 of 100 seconds" in found.reason
    seldom = evidence(probability={"eye": marks(FRAME, 60, ["Fp1"], when=slice(0, 6))})
    assert patients(seldom) == []
    doubtful = marks(FRAME, 60, ["Fp1"], value=0.6)
    assert patients(evidence(probability={"eye": doubtful})) == []


def test_what_is_not_judged_asks_nobody():
    unknown = {"eye": np.nan, "muscle": np.nan}
    made = evidence(probability=unknown)
    assert not made.judged("muscle")
    assert not made.marked("muscle").any()
    assert patients(made) == []


# Invariance ----------------------------------------------------------------------------


def troubled(seconds=40.0):
    """Channels with mains at T8, noise at P3, a bridge of F4 and C4, and O1 flat at last."""
    n, channels = round(seconds * RATE), head(seconds)
    channels[row("T8")] += sine(n, RATE, 50.0, 30.0)
    channels[row("P3")] += 8.0 * ten_twenty(seconds, RATE, seed=8)[0]
    channels[row("F4")] = channels[row("C4")]
    channels[row("F4")] += 0.2 * np.random.default_rng(9).normal(size=n)
    channels[row("O1"), n // 2 :] = 0.0
    return channels


@pytest.fixture(scope="module")
def trouble():
    made = measured(troubled(), mains_ratio=20.0)
    return gist(all_found(made), made)


def test_each_trouble_is_found_at_its_place(trouble):
    found = {(cause, sign, sites) for cause, sign, sites, _, _ in trouble}
    assert ("site", "mains", ("T8",)) in found
    assert ("bridge", "bridged", ("C4", "F4")) in found
    assert ("site", "flat", ("O1",)) in found
    assert any(cause == "site" and sites == ("P3",) for cause, _, sites in found)


@pytest.mark.parametrize("size", [1, 7, 100])
def test_no_finding_depends_on_how_much_is_held_in_memory(trouble, size):
    made = measured(troubled(), batch_epochs=size, mains_ratio=20.0)
    assert gist(all_found(made), made) == trouble


@pytest.mark.parametrize("seed", [1, 2])
def test_no_finding_depends_on_the_order_of_the_sites(trouble, seed):
    order = np.random.default_rng(seed).permutation(19)
    labels = tuple(REFERENTIAL[k] for k in order)
    made = measured(troubled()[order], labels, mains_ratio=20.0)
    assert gist(all_found(made), made) == trouble


def test_which_sites_stand_apart_does_not_depend_on_the_gain():
    """Sizes in microvolt have limits of their own; above them the gain tells nothing."""
    plain = with_noise(FRAME, P3=90.0, O2=70.0)
    for gain in (1.0, 2.0, 5.0):
        made = evidence(covariance=gain**2 * plain)
        assert {sites for _, _, sites in named(contacts(made), made)} == {("P3",), ("O2",)}
        pair = evidence(covariance=gain**2 * bridged(FRAME, "C3", "P3", noise_uv=0.2))
        assert len(bridges(pair)) == 1


def quiet_channel(site, part, seconds=60):
    """Covariance of a head in which one channel shows only a part of what is there."""
    channels = field(FRAME)[:19, :19].copy()
    channels[row(site)] *= part
    channels[:, row(site)] *= part
    solve = FRAME.matrix().astype(float)
    return (solve @ channels @ solve.T).astype(np.float32)


def test_a_channel_without_eeg_is_told_though_it_is_not_flat():
    """A tenth of the amplitude is a hundredth of the power; a third of it is a quiet site."""
    made = evidence(covariance=quiet_channel("C3", 0.1))
    found = one(losses(made))
    assert named([found], made) == [("site", "flat", ("C3",))]
    assert found.reason.startswith("carries no EEG")
    assert losses(evidence(covariance=quiet_channel("C3", 0.35))) == []


def test_slow_swings_of_both_frontal_poles_are_no_two_electrodes():
    found = one(contacts(swaying("Fp1", "Fp2")))
    assert (found.cause, found.sign) == ("patient", "drift")
    assert "near the eyes" in found.reason
    alone = one(contacts(swaying("Fp1")))
    assert (alone.cause, alone.sign) == ("site", "drift")


def test_a_step_of_the_reference_on_the_border_of_two_seconds_counts_once():
    place = FRAME.sites.index("reference")
    step = np.full((60, 20), 5.0)
    step[[10, 11, 30, 31, 50, 51], place] = 200.0
    made = evidence(
        step=step, step_alone=np.full((60, 20), 20.0), step_crest=np.full((60, 20), 20.0),
        step_stays=0.9,
    )  # fmt: skip
    found = one(popping(made))
    assert found.reason.startswith("3 pops")
