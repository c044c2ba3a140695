"""Few sites, chains and nets: advice says no more than the geometry of a recording can tell."""

import itertools

import numpy as np
import pytest
from signals import noise

from artifactlens.errors import SitesError
from artifactlens.pipeline import triage
from artifactlens.recording import Filters, from_array
from artifactlens.simulation import brain, electrode, mains
from artifactlens.simulation.scene import Scene
from artifactlens.sitecare import placement
from artifactlens.sitecare.signs import LONGEST_LOG, SignKeeper, Signs
from artifactlens.sites import HEAD_CENTRE_M, POSITIONS_FILE, site_position

RATE, SECONDS, HIGH_PASS_HZ = 200.0, 50.0, 0.3
TEN_TWENTY = (
    "Fp1", "Fp2", "F7", "F3", "Fz", "F4", "F8", "T7", "C3", "Cz",
    "C4", "T8", "P7", "P3", "Pz", "P4", "P8", "O1", "O2",
)  # fmt: skip
EIGHT = ("Fp1", "Fp2", "C3", "C4", "T7", "T8", "O1", "O2")
LOOPS = (
    ("Fp1", "F7", "T7", "P7", "O1"), ("Fp2", "F8", "T8", "P8", "O2"),
    ("Fp1", "F3", "C3", "P3", "O1"), ("Fp2", "F4", "C4", "P4", "O2"),
)  # fmt: skip
MIDLINE = ("Fz", "Cz", "Pz")
ACROSS = (("F3", "Fz", "F4"), ("C3", "Cz", "C4"), ("P3", "Pz", "P4"))


def chains(*lines):
    return tuple(pair for line in lines for pair in itertools.pairwise(line))


def against(reference, *sites):
    return tuple((site, reference) for site in sites)


def ears(*sites):
    """Left sites against the left ear, right ones against the right."""
    return tuple((site, "A1" if site[-1] in "13579" else "A2") for site in sites)


LATERAL = tuple(site for site in TEN_TWENTY if not site.endswith("z"))
WIDE = {
    "eight sites": against("REF", *EIGHT),
    "double banana": chains(*LOOPS, MIDLINE),
    "linked banana": chains(*LOOPS, MIDLINE, *ACROSS),
    "transverse": chains(
        ("F7", "Fp1", "Fp2", "F8", "F4", "Fz", "F3", "F7"),
        ("T7", "C3", "Cz", "C4", "T8"),
        ("P7", "P3", "Pz", "P4", "P8", "O2", "O1", "P7"),
    ),
    "each ear": ears(*LATERAL),
    "ears, eight sites": ears(*EIGHT),
    "vertex": against("Cz", *(site for site in TEN_TWENTY if site != "Cz")),
    "average": against("AVG", *TEN_TWENTY),
}
NARROW = {
    "two sites": against("REF", "C3", "C4"),
    "three sites": against("REF", "C3", "C4", "Cz"),
    "two chains": chains(("Fp1", "C3", "O1"), ("Fp2", "C4", "O2")),
    "eight in loops": chains(
        ("Fp1", "C3", "O1", "T7", "Fp1"), ("Fp2", "C4", "O2", "T8", "Fp2")
    ),
    "two derivations": chains(MIDLINE),
    "two pairs": (("Fp1", "O1"), ("Fp2", "O2")),
    "crossed ears": (("C3", "A2"), ("C4", "A1")),
}
MONTAGES = WIDE | NARROW
BEHIND = (site_position("Cz") + site_position("Pz")) / 2


def electrodes(montage):
    return [name for name in dict.fromkeys(itertools.chain(*montage)) if name != "AVG"]


def place(name):
    return BEHIND if name == "REF" else site_position(name)


def head(names, seconds=SECONDS, rate=RATE):
    return Scene(np.array([place(name) for name in names]), round(seconds * rate), rate)


def background(scene, seed=0):
    """Cortical sources, posterior alpha, and each electrode's own noise."""
    rng = np.random.default_rng(seed)
    field = brain.background(scene, rng).potentials.astype(float)
    field += brain.alpha(scene, rng, 5, scene.length - 10, amplitude_uv=25).potentials
    return field + 0.4 * rng.standard_normal(field.shape)


def faulty(names, fault, *sites, size_uv=25.0):
    """Potentials of a fault at the electrodes named."""
    scene, rng = head(names), np.random.default_rng(7)
    rows = [names.index(site) for site in sites]
    if fault == "pops":
        onsets = [4.3, 11.1, 17.6, 23.2, 30.9, 38.4, 45.2]
        sizes = [230.0, -220.0, 250.0, -270.0, 210.0, 240.0, -230.0]
        return electrode.pops(scene, rng, rows[0], onsets, sizes_uv=sizes).potentials
    if fault == "hum":
        return mains.hum(scene, rng, size_uv=size_uv, rows=rows or None).potentials
    field = np.zeros((scene.n_sites, scene.n_samples))
    field[rows[0]] = noise(1, scene.n_samples, RATE, rms_uv=50.0)[0]
    return field


def recorded(montage, field=0.0, *, flat=(), clipped=(), lost=(), seed=0):
    """The montage's channels; ``flat``, ``clipped`` (derivations) all the time, ``lost``
    (electrodes) from 20 s to the end."""
    names = electrodes(montage)
    at = background(head(names), seed) + field
    average = at.mean(axis=0)
    data = np.stack(
        [
            at[names.index(a)] - (average if b == "AVG" else at[names.index(b)])
            for a, b in montage
        ]
    )
    data = electrode.high_pass_first_order(data, HIGH_PASS_HZ, RATE)
    for row, (first, second) in enumerate(montage):
        if f"{first}-{second}" in flat:
            data[row] = 0
        if f"{first}-{second}" in clipped:
            data[row] = np.clip(30 * data[row], -300, 300)
        if {first, second} & set(lost):
            data[row, round(20 * RATE) :] = np.nan
    return from_array(
        data.astype(np.float32),
        RATE,
        [f"{a}-{b}" for a, b in montage],
        filters=[Filters(HIGH_PASS_HZ, None, None)] * len(montage),
    )


def with_fault(name, fault, *sites, **options):
    montage = MONTAGES[name]
    return triage(
        recorded(montage, faulty(electrodes(montage), fault, *sites, **options)),
        line_frequency=50,
    )


def said_of(result):
    return {site.site: site.verdict for site in result.sites}


def why_of(result):
    return {site.site: site.why for site in result.sites}


def work(result):
    """What asks for more than patience, the patient's part left out."""
    return [e for e in result.advice if e.verdict in ("re-prep", "check")]


def gist(entries):
    return [(e.verdict, e.cause, e.sign, tuple(sorted(e.sites))) for e in entries]


# Nothing wrong -------------------------------------------------------------------------


@pytest.mark.parametrize("name", MONTAGES)
@pytest.mark.parametrize("seed", [1, 2])
def test_in_no_montage_does_a_sound_recording_ask_for_work(name, seed):
    result = triage(recorded(MONTAGES[name], seed=seed))
    assert work(result) == []
    expected = {"leave"} if name in WIDE else {"cannot tell"}
    assert set(said_of(result).values()) == expected
    assert result.setup.unfit == ()
    assert bool(result.setup.cannot_tell) == (name in NARROW)


@pytest.mark.parametrize(
    ("name", "site", "why"),
    [
        (
            "two pairs",
            "Fp1",
            "only the derivation with O1, which cannot tell the two apart",
        ),
        ("crossed ears", "C4", "only the derivation with reference A1, which"),
        ("two derivations", "Cz", "only 3 electrodes to compare with each other, too few"),
        ("three sites", "C3", "only 4 electrodes to compare with each other, too few"),
    ],
)
def test_why_nothing_can_be_told_is_said_plainly(name, site, why):
    assert why_of(triage(recorded(MONTAGES[name])))[site].startswith(why)


def test_a_midline_of_three_is_held_against_the_long_chains_beside_it():
    assert said_of(triage(recorded(WIDE["double banana"])))["Cz"] == "leave"


def test_a_single_derivation_alone_is_refused_with_what_is_needed():
    with pytest.raises(SitesError, match="At least 2 EEG channels"):
        triage(recorded((("Fz", "Cz"),)))


def test_four_sites_of_one_region_do_not_accuse_the_reference_of_what_they_share():
    result = triage(recorded(against("REF", "Fp1", "Fp2", "F7", "F3"), seed=3))
    assert [e.verdict for e in result.advice if e.cause == "reference"] in ([], ["watch"])


# Without a signal ----------------------------------------------------------------------


@pytest.mark.parametrize(
    ("name", "flat", "sites"),
    [
        ("two derivations", ["Fz-Cz"], ("Cz", "Fz")),
        ("two chains", ["C3-O1"], ("C3", "O1")),
        ("two chains", ["Fp1-C3", "C3-O1"], ("C3", "Fp1", "O1")),
        ("two pairs", ["Fp2-O2"], ("Fp2", "O2")),
        ("crossed ears", ["C3-A2"], ("C3", "reference A2")),
        ("double banana", ["Cz-Pz"], ("Cz", "Pz")),
    ],
)
def test_a_flat_derivation_at_the_end_of_a_chain_names_all_it_may_be(name, flat, sites):
    result = triage(recorded(MONTAGES[name], flat=flat))
    (entry,) = work(result)
    assert gist([entry]) == [("check", "site", "flat", tuple(sorted(sites)))]
    assert entry.confidence == "moderate"
    assert entry.checks[0].startswith("check their leads")
    for site in sites:
        assert said_of(result)[site] == "cannot tell"
        assert site in why_of(result)[site]
    assert {name for name, _ in result.setup.unfit} == set(sites)


@pytest.mark.parametrize(
    ("name", "flat", "site"),
    [
        ("two sites", ["C3-REF"], "C3"),
        ("ears, eight sites", ["C3-A1"], "C3"),
        ("average", ["C3-AVG"], "C3"),
        ("eight in loops", ["Fp1-C3", "C3-O1"], "C3"),
        ("double banana", ["F7-T7", "T7-P7"], "T7"),
    ],
)
def test_what_is_flat_needs_no_neighbours_where_all_of_one_site_is(name, flat, site):
    result = triage(recorded(MONTAGES[name], flat=flat))
    (entry,) = work(result)
    assert gist([entry]) == [("re-prep", "site", "flat", (site,))]
    assert entry.confidence == "high"
    assert said_of(result)[site] == "re-prep"


def test_what_is_clipped_at_the_end_of_a_chain_is_laid_to_the_end_with_less_confidence():
    (entry,) = work(triage(recorded(NARROW["two derivations"], clipped=["Cz-Pz"])))
    assert gist([entry]) == [("re-prep", "site", "clipped", ("Pz",))]
    assert entry.confidence == "moderate"


@pytest.mark.parametrize("name", ["double banana", "each ear", "transverse", "average"])
@pytest.mark.parametrize("site", ["F8", "P3"])
def test_a_site_lost_half_way_makes_no_faults_of_the_others(name, site):
    result = triage(recorded(WIDE[name], lost=[site]))
    assert gist(result.advice) == [("re-prep", "site", "lost", (site,))]


# Pops ----------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("name", "site", "confidence"),
    [
        ("two sites", "C3", "moderate"),
        ("three sites", "Cz", "moderate"),
        ("two chains", "C4", "moderate"),
        ("eight in loops", "C3", "moderate"),
        ("ears, eight sites", "C4", "moderate"),
        ("transverse", "T8", "moderate"),
        ("each ear", "P3", "high"),
        ("linked banana", "P3", "high"),
    ],
)
def test_pops_are_told_with_the_confidence_that_neighbours_lend(name, site, confidence):
    result = with_fault(name, "pops", site)
    (entry,) = work(result)
    assert (entry.verdict, entry.cause, entry.sites) == ("re-prep", "site", (site,))
    assert entry.confidence == confidence
    few = "so few electrodes cannot tell for sure" in entry.reason
    assert few == (name in NARROW)


@pytest.mark.parametrize(
    ("name", "reference"), [("two sites", "REF"), ("ears, eight sites", "A1")]
)
def test_pops_of_a_reference_are_its_own_however_few_the_sites(name, reference):
    (entry,) = work(with_fault(name, "pops", reference))
    assert (entry.cause, entry.sign) == ("reference", "pops")
    assert entry.sites in (("reference",), (f"reference {reference}",))


def test_a_pair_that_pops_is_not_laid_to_either():
    result = with_fault("two pairs", "pops", "Fp1")
    assert work(result) == []
    assert set(said_of(result).values()) == {"cannot tell"}


# Mains ---------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("name", "at", "expected"),
    [
        ("three sites", "Cz", ("re-prep", "site", "mains", ("Cz",))),
        ("three sites", "REF", ("re-prep", "reference", "mains", ("reference",))),
        ("two chains", "O1", ("re-prep", "site", "mains", ("O1",))),
        ("eight in loops", "T7", ("re-prep", "site", "mains", ("T7",))),
        ("double banana", "Fz", ("re-prep", "site", "mains", ("Fz",))),
        ("two pairs", "Fp1", ("check", "site", "mains", ("Fp1", "O1"))),
        ("crossed ears", "A1", ("check", "site", "mains", ("C4", "reference A1"))),
    ],
)
def test_mains_in_a_short_chain_names_one_electrode_or_all_it_may_be(name, at, expected):
    (entry,) = work(with_fault(name, "hum", at))
    assert gist([entry]) == [expected]
    assert entry.confidence == "moderate"
    assert "tell" in entry.reason


@pytest.mark.parametrize(
    "name", ["two chains", "eight in loops", "two pairs", "crossed ears"]
)
def test_mains_in_all_short_chains_is_looked_for_at_the_ground(name):
    (entry,) = work(with_fault(name, "hum"))
    assert gist([entry]) == [("check", "ground", "mains", ())]
    assert entry.confidence == "moderate"


# Noise ---------------------------------------------------------------------------------


@pytest.mark.parametrize("name", ["two sites", "two chains", "two pairs"])
def test_where_noise_cannot_be_told_from_muscle_the_words_say_so(name):
    result = with_fault(name, "noise", MONTAGES[name][0][0])
    asked = [entry for entry in result.advice if entry.cause == "patient"]
    assert asked
    for entry in asked:
        assert entry.confidence != "high"
        assert entry.reason.endswith("tell it from the noise of a poor contact")
    assert work(result) == []


# Names and places ----------------------------------------------------------------------


@pytest.mark.parametrize(("digitised", "confidence"), [(True, "high"), (False, "moderate")])
def test_sites_without_known_names_are_judged_by_place_or_with_less_confidence(
    digitised, confidence
):
    montage = against("REF", *TEN_TWENTY)
    named = recorded(montage, faulty(electrodes(montage), "pops", "F3"))
    places = np.array([site_position(site) for site in TEN_TWENTY]) + HEAD_CENTRE_M
    result = triage(
        from_array(
            named.read(0, named.n_samples),
            RATE,
            [f"E{number:03d}" for number in range(len(montage))],
            types=["eeg"] * len(montage),
            positions=places if digitised else None,
            filters=named.filters,
        )
    )
    (entry,) = work(result)
    assert entry.sites == (f"E{TEN_TWENTY.index('F3'):03d}",)
    assert entry.confidence == confidence


# Nets ----------------------------------------------------------------------------------


def net(count):
    """So many names of the 10-05 system, spread as evenly as may be above the ears."""
    rows = [line.split("\t") for line in POSITIONS_FILE.read_text().splitlines()[1:]]
    ears_and_below = ("A1", "A2", "M1", "M2")
    rows = [row for row in rows if float(row[3]) > -0.06 and row[0] not in ears_and_below]
    places = np.array([[float(value) for value in row[1:]] for row in rows])
    chosen = [0]
    nearest = np.linalg.norm(places - places[0], axis=1)
    while len(chosen) < count:
        chosen.append(int(nearest.argmax()))
        away = np.linalg.norm(places - places[chosen[-1]], axis=1)
        nearest = np.minimum(nearest, away)
    return tuple(rows[row][0] for row in sorted(chosen))


def net_recording(names, change=None, seconds=30.0, rate=100.0):
    field = background(head((*names, "REF"), seconds, rate), 3)
    if change is not None:
        change(field)
    seen = (field[:-1] - field[-1]).astype(np.float32)
    return from_array(seen, rate, [f"{name}-REF" for name in names])


@pytest.mark.parametrize("count", [64, 128, 256])
def test_sites_close_together_are_no_bridge_by_that(count):
    result = triage(net_recording(net(count)))
    assert work(result) == []
    assert set(said_of(result).values()) == {"leave"}


@pytest.mark.parametrize("count", [128, 256])
def test_a_bridge_between_close_sites_is_told_from_their_closeness(count):
    names = net(count)
    places = np.array([site_position(name) for name in names])
    first = names.index("Cz") if "Cz" in names else count // 2
    apart = np.linalg.norm(places - places[first], axis=1)
    second = int(np.argsort(apart)[1])

    def joined(field):
        rng = np.random.default_rng(1)
        mean = field[[first, second]].mean(axis=0)
        for row in (first, second):
            field[row] = mean + 0.3 * rng.standard_normal(field.shape[1])

    (entry,) = work(triage(net_recording(names, joined)))
    assert entry.cause == "bridge"
    assert set(entry.sites) == {names[first], names[second]}


def test_a_net_with_all_labels_wrong_is_not_searched_for_minutes(monkeypatch):
    names = net(128)
    passes = []
    gain = placement.exchange_gain

    def counted(*arguments):
        passes.append(1)
        return gain(*arguments)

    monkeypatch.setattr(placement, "exchange_gain", counted)
    order = np.random.default_rng(1).permutation(len(names))

    def shuffled(field):
        field[:-1] = field[:-1][order]

    result = triage(net_recording(names, shuffled))
    assert any(entry.cause == "placement" for entry in result.advice)
    assert sum(passes) == max(
        placement.FEWEST_PASSES, placement.MOST_PAIRS // len(names) ** 2
    )


def test_the_log_of_a_net_keeps_to_its_size_however_long_the_recording():
    n_sites, hours = 257, 12
    keeper = SignKeeper(hours * 3600, n_sites)
    kept = hours * 3600 / keeper.stretch_seconds * n_sites**2 * 4
    assert kept <= LONGEST_LOG
    stream = SignKeeper(None, n_sites)
    nothing = np.zeros((10, n_sites), dtype=bool)
    signs = Signs(
        ok=~nothing,
        flat=nothing[:, 1:],
        missing=nothing[:, 1:],
        clipped=nothing[:, 1:],
        level=np.zeros((10, 2, n_sites), np.float32),
        hum=np.zeros((10, n_sites), np.complex64),
    )
    flat = np.ones((10, n_sites, n_sites), np.float32)
    for first in range(0, 300, 10):
        stream.add(
            first + np.arange(10.0), signs, flat, placement.PlaceMoments.none(n_sites)
        )
        stream.forget(first - 100.0)
    assert len(stream.log()) == 11
