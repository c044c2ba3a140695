"""From findings to advice: courses, ranks, echoes, what is said of each site and the setup."""

import ast
import dataclasses
import itertools
from pathlib import Path

import numpy as np
import pytest
from care import evidence, frame_of, marks, with_noise
from signals import SITES

from artifactlens import sitecare
from artifactlens.advice import (
    CAUSES,
    CONFIDENCES,
    SIGNS,
    SITE_VERDICTS,
    STATES,
    VERDICTS,
)
from artifactlens.sitecare import verdicts
from artifactlens.sitecare.evidence import Finding
from artifactlens.sitecare.setup import setup_check
from artifactlens.sitecare.verdicts import CHECKS, advise, findings_of, site_verdicts

FRAME = frame_of()
PACKAGE = Path(sitecare.__file__).parent


def row(site):
    return FRAME.sites.index(site)


def finding(cause="site", sign="pops", sites=("P3",), *, held=True, known=True, **options):
    """A finding of a minute, six stretches, or of as many as ``held`` has."""
    held = np.atleast_1d(np.asarray(held, dtype=bool))
    held = np.repeat(held, 6) if len(held) == 1 else held
    return Finding(
        cause=cause,
        sign=sign,
        rows=tuple(row(site) for site in sites),
        held=held,
        known=np.broadcast_to(known, held.shape),
        **{"plain": True, "weight": 1.0, "reason": "seen"} | options,
    )


def advised(*findings, made=None):
    return advise(evidence() if made is None else made, findings)


def only(*findings, made=None):
    (entry,) = advised(*findings, made=made)
    return entry


# Ranks ---------------------------------------------------------------------------------


def test_what_may_explain_the_rest_stands_first_and_what_may_wait_last():
    found = [
        finding("patient", "muscle", ("T7",), weight=90.0),
        finding("placement", "swapped", ("F3", "F4"), weight=80.0),
        finding(weight=5.0, plain=False),
        finding("site", "flat", ("O1",), weight=30.0),
        finding("bridge", "bridged", ("C3", "C4"), weight=40.0),
        finding("reference", "pops", ("reference",), weight=2.0),
        finding("ground", "mains", (), weight=1.0),
    ]
    for order in (found, found[::-1]):
        entries = advised(*order)
        assert [entry.cause for entry in entries] == [
            "ground", "reference", "bridge", "site", "placement", "patient", "site",
        ]  # fmt: skip
        assert [entry.number for entry in entries] == [1, 2, 3, 4, 5, 6, 7]
        assert [entry.verdict for entry in entries] == [
            "check", "re-prep", "re-prep", "re-prep", "check", "ask", "watch",
        ]  # fmt: skip


def test_among_sites_the_worst_is_the_first():
    entries = advised(
        finding(sites=("O1",), weight=3.0),
        finding("site", "flat", ("T8",), weight=30.0),
        finding("site", "mains", ("C3",), weight=12.0),
    )
    assert [entry.sites for entry in entries] == [("T8",), ("C3",), ("O1",)]


def test_every_word_is_one_of_the_advice():
    entries = advised(
        *(finding(cause, sign, ("P3",)) for cause, sign in sorted(products()))
    )
    assert len(entries) > 10
    for entry in entries:
        assert entry.verdict in VERDICTS
        assert entry.cause in CAUSES
        assert entry.sign in SIGNS
        assert entry.confidence in CONFIDENCES
        assert entry.state in STATES
        assert entry.checks


def test_a_finding_with_checks_of_its_own_keeps_them():
    own = finding("site", "no response", ("F8",), checks=("do it again",), standing=True)
    assert only(own).checks == ("do it again",)
    assert only(finding("site", "pops")).checks == CHECKS["site", "pops"]


# Courses -------------------------------------------------------------------------------


def parts(text):
    """'..xx' as booleans: a letter for each ten seconds."""
    return [letter == "x" for letter in text]


def touched(seconds, site="P3", size_uv=900.0, usual_uv=60.0, n=100):
    swing = np.full((n, len(FRAME.sites)), usual_uv)
    swing[seconds, row(site)] = size_uv
    return evidence(seconds=n, swing=swing)


@pytest.mark.parametrize(
    ("course", "state", "stretches"),
    [
        ("xxxxxxxxxx", "present", ((0.0, 100.0),)),
        ("....xxxxxx", "present", ((40.0, 100.0),)),
        ("xxxxxxxxx.", "present", ((0.0, 90.0),)),  # away for ten seconds only
        ("xxxxxx....", "past", ((0.0, 60.0),)),
        ("xx.....xxx", "present", ((0.0, 20.0), (70.0, 100.0))),
        ("xx..xx....", "past", ((0.0, 60.0),)),  # a pause of twenty seconds parts nothing
    ],
)
def test_what_lasts_is_present_until_it_has_been_away(course, state, stretches):
    entry = only(finding("site", "mains", held=parts(course)), made=evidence(seconds=100))
    assert entry.state == state
    assert entry.stretches == stretches
    assert entry.share == pytest.approx(course.count("x") / 10)
    assert entry.verdict == ("re-prep" if state == "present" else "watch")


@pytest.mark.parametrize(
    ("sign", "cured"),
    [("swing", True), ("lost", True), ("small", False), ("usual", False), ("early", False)],
)
def test_a_fault_that_stops_at_a_touch_is_cured(sign, cured):
    """A great swing of the site, or its loss, within fifteen seconds of the end at 60 s."""
    ok = np.ones((100, len(FRAME.sites)), dtype=bool)
    ok[62:64, row("P3")] = False
    made = {
        "swing": touched(slice(62, 64)),
        "lost": evidence(seconds=100, ok=ok),
        "small": touched(slice(62, 64), size_uv=200.0, usual_uv=20.0),
        "usual": touched(slice(62, 64), size_uv=500.0, usual_uv=200.0),
        "early": touched(slice(20, 22)),
    }[sign]
    entry = only(finding("site", "mains", held=parts("xxxxxx....")), made=made)
    assert entry.state == ("cured" if cured else "past")
    assert entry.verdict == "watch"


def test_a_touch_of_another_site_cures_nothing():
    made = touched(slice(62, 64), site="O2")
    assert (
        only(finding("site", "mains", held=parts("xxxxxx....")), made=made).state == "past"
    )


def test_pops_are_present_until_they_have_been_away_for_long():
    """Over after a minute, or after four of their usual pauses."""
    made = evidence(seconds=400)
    for tens, state in ((22, "past"), (33, "past"), (34, "present")):
        often = np.isin(np.arange(40), [tens - 2, tens - 1, tens])
        assert only(finding(held=often, lasting=False), made=made).state == state
    seldom = np.isin(np.arange(40), [0, 10])  # a pause of 90 s: they may come again
    assert only(finding(held=seldom, lasting=False), made=made).state == "present"


def test_what_was_not_known_does_not_count_as_over():
    """The site was lost at the end: nobody knows that its mains has gone."""
    known = parts("xxxxxxx...")
    entry = only(
        finding("site", "mains", held=parts("xxxxxxx..."), known=known),
        made=evidence(seconds=100),
    )
    assert entry.state == "present"
    assert entry.share == 1.0


def test_what_held_once_is_watched_in_a_short_recording_and_left_out_of_a_long_one():
    once = finding("site", "mains", held=[False, True, True])
    assert only(once, made=evidence(seconds=30)).verdict == "re-prep"
    brief = finding("site", "mains", held=[False, False, True])
    assert only(brief, made=evidence(seconds=30)).verdict == "watch"
    assert advised(finding("site", "mains", held=parts(".....x")), made=evidence()) == ()
    stands = finding("placement", "swapped", held=parts("x....."), standing=True)
    assert only(stands).state == "present"


# The patient, the reference ------------------------------------------------------------


@pytest.mark.parametrize("sign", ["muscle", "eye", "drift"])
def test_the_patient_is_asked_and_no_site_is_to_be_prepared(sign):
    made = evidence()
    entry = only(finding("patient", sign, ("T7", "T8")), made=made)
    assert entry.verdict == "ask"
    said, _ = site_verdicts(made, (entry,))
    assert set(said) == {"leave"}
    assert advised(finding("patient", sign, held=parts("xxx...")), made=made) == ()


def test_muscle_and_blinks_at_many_sites_lead_to_no_re_prep():
    muscle = marks(FRAME, 60, ["T7", "T8", "F7", "F8", "Fp1"])
    eyes = marks(FRAME, 60, ["Fp1", "Fp2"])
    made = evidence(probability={"muscle": muscle, "eye": eyes}, fast_power=15.0)
    entries = advise(made)
    assert {(entry.verdict, entry.sign) for entry in entries} == {
        ("ask", "muscle"),
        ("ask", "eye"),
    }
    assert set(site_verdicts(made, entries)[0]) == {"leave"}


def test_a_bad_reference_is_one_entry_and_none_of_the_sites():
    made = evidence(covariance=with_noise(FRAME, reference=60.0))
    (entry,) = advise(made)
    assert (entry.cause, entry.sites) == ("reference", ("reference",))
    said, why = site_verdicts(made, (entry,))
    assert dict(zip(FRAME.sites, said, strict=True)).pop("reference") == "re-prep"
    assert said[:-1] == ["leave"] * 19
    assert why[-1] == entry.reason
    assert set(why[:-1]) == {""}


# Echoes --------------------------------------------------------------------------------


@pytest.fixture
def found(monkeypatch):
    """The findings of all searches are what the test says."""

    def say(*findings):
        for name in (
            "losses",
            "hums",
            "bridges",
            "popping",
            "contacts",
            "short_chains",
            "noisy_references",
            "patients",
        ):
            monkeypatch.setattr(verdicts, name, lambda made: [])
        monkeypatch.setattr(verdicts, "losses", lambda made: list(findings))
        return findings_of(evidence())

    return say


def told(findings):
    return [(item.cause, item.sign, item.rows) for item in findings]


def test_two_signs_of_one_site_at_one_time_are_one_entry(found):
    kept = found(
        finding(sign="mains", held=parts(".xxxx."), weight=4.0, reason="hums"),
        finding(
            sign="loose lead", held=parts("xxxxxx"), weight=9.0, reason="comes and goes"
        ),
    )
    assert told(kept) == [("site", "loose lead", (row("P3"),))]
    assert kept[0].reason == "comes and goes; hums"
    assert kept[0].weight == 11.0


def test_signs_at_different_times_are_one_entry_too_named_by_the_graver(found):
    kept = found(
        finding(sign="mains", held=parts("....xx"), known=parts("...xxx"), reason="hums"),
        finding(sign="pops", held=parts("xxx..."), known=parts("xxx..."), reason="pops"),
    )
    assert told(kept) == [("site", "pops", (row("P3"),))]
    assert kept[0].held.tolist() == parts("xxx.xx")
    assert kept[0].known.all()
    assert kept[0].reason == "pops; hums"


@pytest.mark.parametrize(
    ("when", "is_a_hand"),
    [("..xx..", True), ("...x..", True), ("x..x..", False), (".....x", False)],
)
def test_a_hand_that_ends_a_fault_is_no_loose_lead(found, when, is_a_hand):
    """Hum for half a minute, then swings within 25 s of its end, or at other times too."""
    kept = found(
        finding(sign="mains", held=parts("xxx..."), reason="hums"),
        finding(sign="loose lead", held=parts(when), lasting=False, reason="swings"),
    )
    assert kept[0].sign == ("mains" if is_a_hand else "loose lead")
    assert ("swings" in kept[0].reason) is not is_a_hand


def test_signs_of_two_sites_stay_two(found):
    kept = found(finding(sign="mains"), finding(sign="pops", sites=("O1",)))
    assert {item.rows for item in kept} == {(row("P3"),), (row("O1"),)}


def test_what_is_plain_silences_what_is_doubtful_at_the_same_site(found):
    plain = finding(sign="pops", held=parts("xxx..."))
    faint = finding(sign="mains", held=parts("...xxx"), plain=False)
    (kept,) = found(faint, plain)
    assert kept is plain


def test_a_bridged_site_does_not_stand_apart_as_well_but_may_pop(found):
    bridge = finding("bridge", "bridged", ("C3", "P3"))
    assert told(found(bridge, finding(sign="apart"))) == [told([bridge])[0]]
    assert len(found(bridge, finding(sign="pops"))) == 2


def test_reference_and_site_do_not_silence_each_other(found):
    kept = found(finding("reference", "pops", ("reference",)), finding(sign="pops"))
    assert {item.cause for item in kept} == {"reference", "site"}


# What is said of each site -------------------------------------------------------------


def said_of(made, *findings):
    said, why = site_verdicts(made, advise(made, findings))
    assert set(said) <= set(SITE_VERDICTS)
    return {
        site: (verdict, reason)
        for site, verdict, reason in zip(made.frame.sites, said, why, strict=True)
    }


def test_every_site_has_a_verdict_and_the_first_entry_counts():
    said = said_of(
        evidence(),
        finding(sites=("P3",), weight=9.0, reason="pops"),
        finding("site", "mains", ("P3",), weight=1.0, reason="hums", plain=False),
        finding("bridge", "bridged", ("C4", "F4"), reason="alike"),
        finding("site", "drift", ("O1",), plain=False, reason="wanders"),
        finding("ground", "mains", (), reason="everywhere"),
    )
    assert said.pop("P3") == ("re-prep", "pops")
    assert said.pop("C4") == said.pop("F4") == ("re-prep", "alike")
    assert said.pop("O1") == ("watch", "wanders")
    assert set(said.values()) == {("leave", "")}


def test_doubtful_places_are_watched_and_never_to_be_prepared():
    swap = finding("placement", "swapped", ("F3", "F4"), reason="fit each other's places")
    said = said_of(evidence(), swap, finding(sites=("F4",), weight=2.0, reason="pops"))
    assert said["F3"] == ("watch", "fit each other's places")
    assert said["F4"] == ("re-prep", "pops")
    assert only(swap).confidence == "low"
    assert only(swap).verdict == "check"


def test_of_a_site_without_a_signal_nothing_can_be_told():
    ok = np.ones((60, len(FRAME.sites)), dtype=bool)
    ok[:, row("T8")] = False
    said = said_of(evidence(ok=ok))
    assert said.pop("T8") == ("cannot tell", "no signal at any time")
    assert set(said.values()) == {("leave", "")}


def test_of_a_site_without_neighbours_nothing_can_be_told():
    """Two ears and two sites, each pair its own chain of one derivation."""
    frame = frame_of(("F3-C3", "C3-P3", "Fz-Cz", "Fp1-A1", "O2-A1"))
    lonely = dataclasses.replace(frame, neighbours=np.where(
        np.array([site == "Fz" for site in frame.sites])[:, None], 0.0, frame.neighbours
    ))  # fmt: skip
    said = said_of(evidence(lonely))
    assert said["Fz"] == (
        "cannot tell",
        "no neighbour in this recording to compare it with",
    )
    assert said["C3"] == (
        "cannot tell",
        "only 3 electrodes to compare with each other, too few to tell",
    )


def test_with_fewer_than_two_neighbours_a_site_is_judged_with_less_confidence():
    near = FRAME.near.copy()
    near[row("P3")] = np.arange(len(near)) == row("C3")
    lonely = evidence(dataclasses.replace(FRAME, near=near))
    for sign, confidence in (("apart", "moderate"), ("pops", "moderate"), ("flat", "high")):
        assert only(finding("site", sign), made=lonely).confidence == confidence
        assert only(finding("site", sign)).confidence == "high"
        assert only(finding("site", sign, plain=False)).confidence == "low"


# Setup ---------------------------------------------------------------------------------


def test_setup_says_who_is_fit_and_who_is_not():
    ok = np.ones((60, len(FRAME.sites)), dtype=bool)
    ok[:, row("T8")] = False
    pops = [(moment, (row("P3"),)) for moment in (5.5, 15.5, 35.5, 45.5)]
    setup = setup_check(evidence(ok=ok, pops=pops), ("Blinks were seen.",))
    assert setup.seconds == 60.0
    assert dict(setup.unfit) == {"P3": "4 pops in 60 s, unlike its neighbours"}
    assert setup.cannot_tell == ("T8",)
    assert set(setup.fit) == set(SITES) - {"P3", "T8"}
    assert setup.responses == ("Blinks were seen.",)


def test_of_too_little_signal_the_setup_says_nothing():
    assert setup_check(evidence(seconds=19)) is None
    assert setup_check(evidence(seconds=20)) is not None


def test_what_comes_later_does_not_make_a_site_unfit():
    late = [(moment, (row("P3"),)) for moment in (150.5, 160.5, 170.5, 190.5)]
    made = evidence(seconds=240, pops=late)
    assert [entry.sites for entry in advise(made)] == [("P3",)]
    setup = setup_check(made)
    assert setup.seconds == 120.0
    assert setup.unfit == ()
    assert set(setup.fit) == set(SITES)  # the reference is no site


def test_ground_and_reference_are_unfit_by_their_names():
    made = evidence(covariance=with_noise(FRAME, reference=60.0))
    assert [name for name, _ in setup_check(made).unfit] == ["reference"]
    rng = np.random.default_rng(1)
    hum = 30 * rng.uniform(0.3, 1, 20) * np.exp(2j * np.pi * rng.random(20))
    humming = evidence(hum=hum - hum.mean(), mains_ratio=20.0)
    assert [name for name, _ in setup_check(humming).unfit] == ["ground"]


# Words ---------------------------------------------------------------------------------


def words_in(node, known):
    """All words of the advice that an expression may give; names by their assignments."""
    found = set()
    for part in ast.walk(node):
        if isinstance(part, ast.Constant) and isinstance(part.value, str):
            found.add(part.value)
        elif isinstance(part, ast.Name):
            found |= known.get(part.id, set())
    return found


def products():
    """Every (cause, sign) that the searches can make, read from their code."""
    pairs = set()
    for path in sorted(PACKAGE.glob("*.py")):
        tree = ast.parse(path.read_text(encoding="utf-8"))
        loops = {
            name.id: words_in(node.iter, {}) & set(SIGNS)
            for node in ast.walk(tree)
            if isinstance(node, ast.For)
            for name in ast.walk(node.target)
            if isinstance(name, ast.Name)
        }
        for node in ast.walk(tree):
            if not isinstance(node, ast.Call) or getattr(node.func, "id", "") != "Finding":
                continue
            given = {keyword.arg: keyword.value for keyword in node.keywords}
            if "checks" in given:
                continue  # brings its own
            causes = words_in(given["cause"], {}) & set(CAUSES)
            signs = words_in(given["sign"], loops) & set(SIGNS)
            assert causes, path.name
            assert signs, path.name
            pairs |= set(itertools.product(causes, signs))
    return pairs


def test_the_products_are_read_as_they_stand():
    pairs = products()
    assert {("site", "pops"), ("site", "lost"), ("ground", "clipped")} <= pairs
    assert {("reference", "loose lead"), ("patient", "drift"), ("site", "drift")} <= pairs


def test_whatever_can_be_found_has_its_checks():
    for cause, sign in products():
        assert CHECKS.get((cause, sign)) or CHECKS[cause, "any"], (cause, sign)
    for cause, sign in CHECKS:
        assert cause in CAUSES
        assert sign in (*SIGNS, "any")


def test_the_checks_keep_the_order_of_the_trade():
    """Cables and leads before the electrode; nobody is sent to the sites for the ground."""
    for (cause, sign), checks in CHECKS.items():
        if cause == "site" and "re-prep" in checks:
            assert checks.index("re-prep") == 1, sign
        if cause in ("ground", "patient", "placement"):
            assert not any("re-prep" in check for check in checks), (cause, sign)
    assert any("not the sites" in check for check in CHECKS["reference", "any"])
    assert any("no other electrode" in check for check in CHECKS["ground", "mains"])


def test_no_word_promises_too_much():
    """A mark is "consistent with"; nothing is called clean, epileptiform or certain."""
    never = ("clean", "epileptiform", "seizure", "certainly", "definitely", "normal")
    for path in sorted(PACKAGE.glob("*.py")):
        if path.name == "biocal_words.py":
            continue  # reads what others wrote
        tree = ast.parse(path.read_text(encoding="utf-8"))
        documented = {
            id(node.value) for node in ast.walk(tree) if isinstance(node, ast.Expr)
        }
        for node in ast.walk(tree):
            if isinstance(node, ast.Constant) and isinstance(node.value, str):
                if id(node) in documented:
                    continue
                text = node.value.replace("clean between the sites", "")
                assert not [word for word in never if word in text.lower()], (
                    path.name,
                    node.value,
                )


# Order of the sites --------------------------------------------------------------------


@pytest.mark.parametrize("seed", [0, 1, 2])
def test_the_advice_does_not_depend_on_the_order_of_the_sites(seed):
    order = np.random.default_rng(seed).permutation(19)
    turned = frame_of([f"{SITES[k]}-REF" for k in order])

    def of(frame):
        place = frame.sites.index
        hum = np.zeros(20, dtype=complex)
        hum[place("T8")] = 20.0
        pops = [(moment, (place("O1"),)) for moment in (5.5, 15.5, 35.5, 45.5)]
        muscle = marks(frame, 60, ["F7"], when=slice(None, None, 3))
        made = evidence(
            frame, covariance=with_noise(frame, P3=80.0), hum=hum - 1.0, mains_ratio=20.0,
            pops=pops, probability={"muscle": muscle},
        )  # fmt: skip
        entries = advise(made)
        said, _ = site_verdicts(made, entries)
        return entries, dict(zip(frame.sites, said, strict=True))

    plain, other = of(FRAME), of(turned)
    assert len(plain[0]) >= 4
    assert other == plain
