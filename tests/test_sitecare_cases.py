"""Short invented recordings with one fault each, through the whole job."""

import numpy as np
import pytest
from rows import invented
from signals import SITES, row

from artifactlens.advice import SITE_VERDICTS
from artifactlens.pipeline import triage
from artifactlens.recording import Filters, from_array
from artifactlens.simulation import electrode, mains
from artifactlens.simulation.scene import Scene
from artifactlens.sites import site_position
from artifactlens.training.sitechecks.backgrounds import MONTAGES, Bed, double_banana
from artifactlens.training.sitechecks.cases import case

RATE, SECONDS, HIGH_PASS_HZ = 200.0, 50.0, 0.3
PLACES = np.array([site_position(site) for site in SITES])


@pytest.fixture(scope="module")
def bed():
    return Bed("invented", invented(SECONDS, RATE, kept_to_hz=None), SITES)


def scene():
    """The sites and, last, a reference behind the vertex."""
    behind = (site_position("Cz") + site_position("Pz")) / 2
    return Scene(np.vstack([PLACES, behind]), round(SECONDS * RATE), RATE)


def advice_of(channels, montage, **options):
    data, labels = channels, [f"{site}-REF" for site in SITES]
    if montage == "double banana":
        data, labels = double_banana(channels, SITES, SITES)
    filters = [Filters(HIGH_PASS_HZ, None, None)] * len(labels)
    return triage(
        from_array(data.astype(np.float32), RATE, labels, filters=filters), **options
    )


def recorded(bed, field):
    """The background with potentials at the sites and the reference, as recorded."""
    seen = field[:-1] - field[-1]
    kept = electrode.high_pass_first_order(seen.astype(float), HIGH_PASS_HZ, RATE)
    return bed.background.potentials + kept


def verdicts_of(result):
    return {site.site: site.verdict for site in result.sites}


@pytest.mark.parametrize("montage", MONTAGES)
def test_an_undisturbed_recording_asks_for_no_work(bed, montage):
    result = advice_of(bed.background.potentials, montage)
    assert [entry for entry in result.advice if entry.verdict == "re-prep"] == []
    assert "re-prep" not in verdicts_of(result).values()
    assert set(verdicts_of(result).values()) <= set(SITE_VERDICTS)
    assert result.setup.unfit == ()


@pytest.mark.parametrize("montage", MONTAGES)
def test_an_electrode_that_pops_is_named_first_with_its_pops(bed, montage):
    onsets = [4.3, 11.1, 17.6, 23.2, 30.9, 38.4, 45.2]
    field = electrode.pops(
        scene(), np.random.default_rng(3), row("P3"), onsets, forms=("step",),
        sizes_uv=[120.0, -90.0, 150.0, -110.0, 100.0, 140.0, -130.0],
    ).potentials  # fmt: skip
    result = advice_of(recorded(bed, field), montage)
    first = result.advice[0]
    assert (first.verdict, first.cause, first.sites) == ("re-prep", "site", ("P3",))
    assert first.sign in ("pops", "loose lead")
    assert "pops in 50 s" in first.reason
    assert first.checks[0].startswith("check")
    assert verdicts_of(result)["P3"] == "re-prep"
    others = {site for site, said in verdicts_of(result).items() if said == "re-prep"}
    assert others == {"P3"}
    assert [name for name, _ in result.setup.unfit] == ["P3"]


@pytest.mark.parametrize("montage", MONTAGES)
@pytest.mark.parametrize("seed", [1, 2])
def test_a_bridge_is_named_by_its_sites(bed, montage, seed):
    one = case(seed, [bed], fault="bridge", strength="plain", montage=montage,
               course="throughout")  # fmt: skip
    result = triage(one.recording, line_frequency=50)
    first = result.advice[0]
    assert (first.verdict, first.cause) == ("re-prep", "bridge")
    assert set(first.sites) == set(one.truth.sites)
    assert "clean between the sites" in first.checks[0]


def with_hum(bed, rows, common, size_uv=25.0):
    """Mains at these rows, the last of which is the reference."""
    field = mains.hum(
        scene(), np.random.default_rng(5), size_uv=size_uv, rows=rows, common=common
    ).potentials
    return recorded(bed, field)


def test_mains_of_the_reference_is_one_entry_and_gone_from_derivations(bed):
    channels = with_hum(bed, [len(SITES)], True)
    result = advice_of(channels, "referential", line_frequency=50)
    mains_entries = [entry for entry in result.advice if entry.sign == "mains"]
    assert [(e.verdict, e.cause, e.sites) for e in mains_entries] == [
        ("re-prep", "reference", ("reference",))
    ]
    assert result.advice[0] == mains_entries[0]
    said = verdicts_of(result)
    assert said.pop("reference") == "re-prep"
    assert "re-prep" not in said.values()
    bipolar = advice_of(channels, "double banana", line_frequency=50)
    assert [entry for entry in bipolar.advice if entry.sign == "mains"] == []


@pytest.mark.parametrize("montage", MONTAGES)
def test_mains_of_the_ground_is_to_be_looked_for_before_any_electrode(bed, montage):
    result = advice_of(with_hum(bed, None, False), montage, line_frequency=50)
    first = result.advice[0]
    assert (first.verdict, first.cause, first.sign) == ("check", "ground", "mains")
    assert "touch no other electrode before that" in first.checks
    assert "re-prep" not in verdicts_of(result).values()
    assert [name for name, _ in result.setup.unfit] == ["ground"]


@pytest.mark.parametrize("montage", MONTAGES)
@pytest.mark.parametrize("site", ["T8", "P3"])
def test_mains_at_one_site_is_the_site(bed, montage, site):
    result = advice_of(with_hum(bed, [row(site)], False), montage, line_frequency=50)
    first = result.advice[0]
    assert (first.verdict, first.cause, first.sign) == ("re-prep", "site", "mains")
    assert first.sites == (site,)


@pytest.mark.parametrize("montage", MONTAGES)
@pytest.mark.parametrize("fault", ["tonic muscle", "muscle bursts", "blinks"])
def test_what_the_patient_does_asks_and_prepares_nothing(bed, montage, fault):
    asked = 0
    for seed in (1, 2):
        one = case(seed, [bed], fault=fault, strength="plain", montage=montage)
        result = triage(one.recording, line_frequency=50)
        assert "re-prep" not in verdicts_of(result).values()
        assert result.setup.unfit == ()
        asked += any(
            entry.verdict == "ask" and entry.cause == "patient" for entry in result.advice
        )
    assert asked >= (2 if fault == "tonic muscle" else 0)


@pytest.mark.parametrize("montage", MONTAGES)
def test_a_lead_plugged_in_late_is_lost_and_then_well(bed, montage):
    """Without samples to half of the recording: what is past asks for no work now."""
    channels = bed.background.potentials.copy()
    channels[row("O2"), : round(25 * RATE)] = np.nan
    result = advice_of(channels, montage)
    entries = [entry for entry in result.advice if "O2" in entry.sites]
    assert [(entry.sign, entry.state, entry.verdict) for entry in entries] == [
        ("lost", "cured", "watch")
    ]
    assert entries[0].stretches == ((0.0, 30.0),)
    assert verdicts_of(result)["O2"] == "watch"
