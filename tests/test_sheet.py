"""The technologist's sheet: its words, its shapes, its one page, and its one safe file."""

from __future__ import annotations

import dataclasses
import math
import re
import xml.etree.ElementTree as ET
from collections import Counter

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from result_factory import SITES, make_result, with_advice
from test_page import Reader

from artifactlens.advice import SITE_VERDICTS, VERDICTS
from artifactlens.page.caremap import BELOW, care_svg, marks, spots
from artifactlens.page.careshapes import LINES, SHAPES, symbol
from artifactlens.page.sheet import (
    IN_FULL,
    LETTERS_OF_LINE,
    LINES_OF_LIST,
    ROOMY,
    ROOMY_LETTERS,
    ROOMY_LINES,
    impedance_words,
    judged_words,
    setup_words,
    sheet_html,
    what_to_do,
    when,
)
from artifactlens.page.template import part
from artifactlens.page.words import clean
from artifactlens.result import CAUTION, Setup

ADVISED = with_advice(make_result(3))


def with_entries(*changes):
    """The advised result with entries like the first but for these changes, numbered."""
    entries = tuple(
        dataclasses.replace(ADVISED.advice[0], **{"number": i, "cause": "site", **change})
        for i, change in enumerate(changes, 1)
    )
    return dataclasses.replace(ADVISED, advice=entries)


def many(n, **change):
    return with_entries(
        *({"verdict": "re-prep", "sites": (SITES[i % 19],)} | change for i in range(n))
    )


def cap(n, *changes):
    """A cap of n sites spread evenly from the vertex to below the ears."""
    sites = []
    for i in range(n):
        polar, turn = math.radians(110) * math.sqrt((i + 0.5) / n), 2.399963 * i
        flat = 0.095 * math.sin(polar)
        at = (flat * math.cos(turn), flat * math.sin(turn), 0.095 * math.cos(polar))
        sites.append(
            dataclasses.replace(
                make_result(0).sites[0], site=f"E{i + 1}", canonical=None, position=at
            )
        )
    return dataclasses.replace(with_entries(*changes), sites=tuple(sites))


def head(result):
    return ET.fromstring(str(care_svg(marks(result), result.advice)))


def groups(result):
    """The marks of the map: name in the hover text -> its group."""
    found = (g for g in head(result).iter("g") if g.get("data-verdict"))
    return {g.find("title").text.split(":")[0]: g for g in found}


def labels(result):
    """The names written beside the marks, without numbers and impedances."""
    return [t.text for t in head(result).iter("text") if "name" in t.get("class")]


def rows(result):
    return Reader(sheet_html(result)).all("tr")


# What to do


def test_the_sheet_says_first_what_to_do():
    text = Reader(sheet_html(ADVISED)).text
    order = [
        text.index(words)
        for words in (
            "Electrode sheet: invented-01",
            "2 min, 19 sites, referential",
            "3 sites to re-prep, ground and T5 and T6 to check first, patient to ask.",
            "1 earlier fault is gone. 1 site cannot be judged.",
            "First 2 min: 17 of 19 sites fit to start.",
            "Shapes",
            "What was done",
            "14 pops in 2 min, unlike its neighbours",
            CAUTION,
        )
    ]
    assert order == sorted(order)


@pytest.mark.parametrize(
    ("changes", "sentence"),
    [
        ([], "No site asks for care."),
        ([{"verdict": "re-prep", "sites": ("P3",)}], "P3 to re-prep."),
        ([{"verdict": "watch", "sites": ("P3", "P4")}], "P3 and P4 to watch."),
        (
            [
                {"verdict": "check", "cause": "ground", "sites": ()},
                {"verdict": "re-prep", "sites": ("P3", "O1", "F8")},
            ],
            "3 sites to re-prep, ground to check first.",
        ),
        (
            [
                {"verdict": "re-prep", "sites": ("P3",)},
                {"verdict": "check", "cause": "ground", "sites": ()},
            ],
            "P3 to re-prep, ground to check.",
        ),
        (
            [
                {"verdict": "re-prep", "cause": "reference", "sites": ("reference",)},
                {"verdict": "re-prep", "sites": ("P3",)},
            ],
            "Reference and P3 to re-prep.",
        ),
        ([{"verdict": "ask", "cause": "patient", "sites": ("T3",)}], "Patient to ask."),
    ],
)
def test_the_sentence(changes, sentence):
    assert what_to_do(with_entries(*changes))[0] == sentence


def test_what_was_cured_is_told_but_not_asked_for():
    result = with_entries({"verdict": "re-prep", "sites": ("P3",), "state": "cured"})
    assert what_to_do(result)[0] == "No site asks for care."
    assert "1 earlier fault is gone" in what_to_do(result)[1]


def test_a_recording_that_cannot_tell_is_no_good_news():
    sites = tuple(
        dataclasses.replace(site, verdict="cannot tell", why="chain end")
        for site in ADVISED.sites
    )
    result = dataclasses.replace(ADVISED, sites=sites, advice=())
    text = Reader(sheet_html(result)).text
    assert "This recording cannot tell whether a site asks for care." in text
    assert "No site asks" not in text
    assert "Cannot tell Fp1, Fp2, F7, F3, Fz, F4 and 14 more (chain end)." in text


def test_sites_that_cannot_be_judged_are_listed_with_their_reason():
    assert "Cannot tell O2 (flat from 90 s on)." in Reader(sheet_html(ADVISED)).text


def test_the_setup_says_who_is_not_fit_and_why():
    assert setup_words(ADVISED.setup) == (
        "First 2 min: 17 of 19 sites fit to start. Not yet: P3 (pops). Cannot tell: O2."
    )
    assert "Blinks were seen at both frontal poles." in sheet_html(ADVISED)
    lost = Setup(60.0, (), tuple((site, "flat") for site in SITES[:6]), ())
    assert setup_words(lost) == (
        "First 60 s: 0 of 6 sites fit to start. "
        "Not yet: Fp1 (flat), Fp2 (flat), F7 (flat) and 3 more."
    )
    assert "fit to start" not in sheet_html(dataclasses.replace(ADVISED, setup=None))


def test_ground_and_reference_are_not_counted_among_the_sites():
    unfit = (("ground", "mains"), ("reference", "pops"), ("P3", "pops"))
    assert setup_words(Setup(120.0, ("Fz", "Cz"), unfit, ())) == (
        "First 2 min: 2 of 3 sites fit to start. "
        "Not yet: ground (mains), reference (pops), P3 (pops)."
    )


def test_answers_to_the_calibration_are_told_without_their_measures():
    said = ("0:01:41 jaw: as expected, F7 +27 dB, T3 +23 dB above 20 Hz.",)
    setup = dataclasses.replace(ADVISED.setup, responses=said)
    page = sheet_html(dataclasses.replace(ADVISED, setup=setup))
    assert "0:01:41 jaw: as expected.</p>" in page
    assert "27 dB" not in page


@pytest.mark.parametrize(
    ("seconds", "notes", "words"),
    [
        (120.0, (), ""),
        (108.0, (), ""),
        (60.0, ("One gap.", "Judged: the last 1 min."), "judged: the last 1 min"),
        (60.0, ("One gap.",), "60 s of it judged"),
    ],
)
def test_the_head_says_how_much_was_judged(seconds, notes, words):
    result = dataclasses.replace(
        ADVISED,
        recording=dataclasses.replace(ADVISED.recording, notes=notes),
        sites=tuple(dataclasses.replace(s, seconds_judged=seconds) for s in ADVISED.sites),
    )
    assert judged_words(result) == words
    facts = "2 min, 19 sites, referential" + (f"; {words}" if words else " 3 sites")
    assert facts in Reader(sheet_html(result)).text


def test_impedances_are_judged_by_the_usual_bounds():
    """100 ohm to 5 k good, 5-10 k acceptable if even: common practice."""
    words = impedance_words(ADVISED.sites)
    assert words.startswith(
        "Small numbers, 2 to 14.5 kΩ at 19 electrodes; above 10: P3 14.5."
    )
    assert "100 Ω to 5 kΩ is good, 5 to 10 acceptable if even (common practice)" in words
    good = [s for s in ADVISED.sites if s.site == "F3"]
    assert impedance_words(good).startswith("Small numbers, 2 kΩ at 1 electrode. 100 Ω")


def test_line_power_is_never_taken_for_impedance():
    """Ferree et al. 2001: 60 Hz noise is nearly independent of impedance mismatch."""
    for result in (ADVISED, make_result(0)):
        text = Reader(sheet_html(result)).text
        assert text.count("Line power is no impedance meter (Ferree et al. 2001)") == 1


def test_impedances_stand_beside_their_sites():
    told = {
        t.text: [(s.text, s.get("font-weight")) for s in t.findall("tspan")]
        for t in head(ADVISED).iter("text")
        if "name" in t.get("class")
    }
    assert told["P3"] == [(" 14.5", "700")]
    assert told["Cz"] == [(" 2", None)]
    assert told["ground"] == []
    assert "re-prep (high) 2, 2 kΩ" in Reader(sheet_html(ADVISED)).text
    assert '<span class="ohms"><b>14.5</b>&nbsp;kΩ</span>' in sheet_html(ADVISED)


def test_the_checks_stand_in_the_order_of_the_trade():
    assert (
        "Order of checks cables, electrode, placement, bridge, impedance, "
        "ground and reference, montage." in Reader(sheet_html(ADVISED)).text
    )


@pytest.mark.parametrize(
    ("stretches", "state", "words"),
    [
        (((200.0, 300.0),), "cured", ("0:03:20–0:05:00", "", "gone after handling")),
        (
            ((10.0, 20.0), (200.0, 300.0), (400.0, 450.0)),
            "past",
            ("0:03:20–0:05:00", "and 2 more", "earlier, gone"),
        ),
        (
            ((0.0, 600.0), (900.0, 1800.0)),
            "present",
            ("0:15:00 to the end", "and 1 before", "now"),
        ),
        (((200.0, 1700.0),), "present", ("0:03:20–0:28:20", "", "now")),
        (((0.0, 900.0), (1080.0, 1800.0)), "present", ("throughout", "", "")),
        (
            ((0.0, 900.0), (1081.0, 1800.0)),
            "present",
            ("0:18:01 to the end", "and 1 before", "now"),
        ),
        (((0.0, 1750.0),), "past", ("0:00:00–0:29:10", "", "earlier, gone")),
        ((), "present", ("", "", "now")),
    ],
)
def test_the_stretch_that_matters_is_told(stretches, state, words):
    entry = dataclasses.replace(ADVISED.advice[0], stretches=stretches, state=state)
    assert when(entry, 1800.0) == words


# Shapes


def test_every_verdict_has_a_shape_of_its_own_and_a_word():
    assert set(SHAPES) == {*VERDICTS, *SITE_VERDICTS}
    drawn = {
        verdict: re.sub(r"<text.*?</text>", "", str(symbol(verdict, 0, 0, 10, "1")))
        for verdict in SHAPES
    }
    assert len(set(drawn.values())) == len(SHAPES)
    text = Reader(sheet_html(ADVISED)).text
    for word, (shape, meaning) in (SHAPES | LINES).items():
        assert f"{word} ({shape}): {meaning}" in text


@pytest.mark.parametrize(
    ("result", "words"),
    [
        (make_result(0), ["leave"]),
        (with_entries({"verdict": "watch", "sites": ("P3",)}),
         ["re-prep", "watch", "cannot tell", "leave"]),
        (with_entries({"sign": "bridged", "sites": ("F4", "C4"), "verdict": "re-prep"}),
         ["re-prep", "watch", "cannot tell", "leave", "bridged"]),
    ],
)  # fmt: skip
def test_only_shapes_and_lines_that_occur_are_explained(result, words):
    page = sheet_html(result)
    legend = page[page.index('class="legend"') : page.index("</ul>")]
    assert re.findall(r"<b>([^<]+)</b>", legend) == words


def test_shapes_need_neither_colour_nor_the_background_that_browsers_do_not_print():
    style = part("sheet.css")
    assert style.count("background") == 1  # the paper on screen
    printed = style[style.index("@media print") :]
    assert set(re.findall(r"#([0-9a-f]+)", printed)) <= {"fff", "000", "222", "777"}
    assert "fill=" not in sheet_html(ADVISED)
    assert "stroke=" not in sheet_html(ADVISED)


def test_numbers_and_verdicts_on_the_map_are_those_of_the_list():
    listed = {
        int(row["data-number"]): row["data-verdict"]
        for row in rows(ADVISED)
        if "data-number" in row
    }
    assert listed == {entry.number: entry.verdict for entry in ADVISED.advice}
    shown = set()
    for group in groups(ADVISED).values():
        if group.get("data-number"):
            number = int(group.get("data-number"))
            inside = [t.text for t in group.iter("text")]
            assert inside == [str(number)]
            assert group.get("data-verdict") == listed[number]
            shown.add(number)
    assert shown == set(listed)


def test_sites_without_an_entry_show_the_verdict_said_of_them():
    found = groups(ADVISED)
    assert found["O2"].get("data-verdict") == "cannot tell"
    assert [t.text for t in found["O2"].iter("text")] == ["?"]
    assert found["Cz"].get("data-verdict") == "leave"
    assert list(found["Cz"].iter("text")) == []


def test_the_gravest_of_several_entries_gives_the_shape():
    result = with_entries(
        {"verdict": "ask", "cause": "patient", "sites": ("T3", "F7")},
        {"verdict": "re-prep", "sites": ("T3",)},
        {"verdict": "re-prep", "sites": ("F7",), "state": "cured"},
    )
    found = groups(result)
    assert found["T3"].get("data-verdict") == "re-prep"
    assert found["T3"].get("data-number") == "2 1"
    assert found["F7"].get("data-verdict") == "ask"
    also = [t.text for t in head(result).iter("tspan") if t.get("class") == "also"]
    assert also == [" +3", " +1"]
    assert "+3 a further entry" in sheet_html(result)


def test_a_bridge_and_a_swap_join_their_sites():
    shown = marks(ADVISED)
    at = {shown[i].site.site: spot for i, spot in spots(shown).items()}
    drawn = {g.get("data-line"): g for g in head(ADVISED).iter("g") if g.get("data-line")}
    assert set(drawn) == {"bridged", "swapped"}
    (ax, ay), (bx, by) = at["F4"], at["C4"]
    outer, inner = drawn["bridged"].findall("path")
    numbers = [float(n) for n in re.findall(r"[\d.]+", outer.get("d"))]
    assert numbers == pytest.approx([ax, ay, bx, by], abs=0.01)
    assert float(outer.get("stroke-width")) > 2 * float(inner.get("stroke-width"))
    assert drawn["swapped"].find("path").get("stroke-dasharray")


# Places


@pytest.mark.parametrize("result", [ADVISED, make_result(0), cap(2), cap(256)])
def test_there_is_always_a_ground(result):
    shown = marks(result)
    (index,) = [i for i, mark in enumerate(shown) if mark.site.role == "ground"]
    assert spots(shown)[index][1] == BELOW
    assert "ground" in labels(result)


def test_a_ground_of_which_nothing_is_said_is_no_site_to_leave_alone():
    titles = [t.text for t in head(make_result(0)).iter("title")]
    assert "ground: not judged" in titles
    (mark,) = [
        g
        for g in head(make_result(0)).iter("g")
        if (g.findtext("title") or "")[:6] == "ground"
    ]
    assert [part.get("class") for part in mark.findall("*")[1:]] == ["earth"]
    assert mark.get("data-verdict") is None


def test_a_ground_with_a_place_of_its_own_is_not_drawn_twice():
    ground = dataclasses.replace(ADVISED.sites[4], site="AFz", role="ground")
    result = dataclasses.replace(ADVISED, sites=(*ADVISED.sites, ground))
    shown = marks(result)
    (mark,) = [mark for mark in shown if mark.site.role == "ground"]
    assert mark.verdict == "check"
    assert all(spots(shown)[i][1] < BELOW for i, m in enumerate(shown) if m is mark)


def test_entries_about_what_has_no_place_get_one_below_the_head():
    changes = (
        {"verdict": "re-prep", "cause": "reference", "sites": ("reference",)},
        {"verdict": "ask", "cause": "patient", "sites": ()},
    )
    result = with_entries(*changes)
    bare = dataclasses.replace(result, sites=result.sites[:-1])  # no reference among them
    for one in (result, bare):
        found = groups(one)
        assert found["reference"].get("data-number") == "1"
        assert found["the patient"].get("data-number") == "2"


def test_sites_without_a_known_place_are_named_beside():
    lost = tuple(
        dataclasses.replace(ADVISED.sites[0], site=f"X{i}", canonical=None, position=None)
        for i in range(12)
    )
    text = Reader(
        sheet_html(dataclasses.replace(ADVISED, sites=(*ADVISED.sites, *lost)))
    ).text
    assert "Without a known place: X0 leave, X1 leave" in text
    assert "X7 leave and 4 more." in text


@pytest.mark.parametrize("n_sites", [2, 19, 64, 256])
def test_marks_that_ask_for_something_keep_name_and_number(n_sites):
    result = cap(
        n_sites,
        {"verdict": "re-prep", "sites": ("E1", "E2"), "sign": "bridged"},
        {"verdict": "watch", "sites": (f"E{n_sites}",)},
    )
    assert {"E1", "E2", f"E{n_sites}"} <= set(labels(result))
    found = groups(result)
    assert found["E1"].get("data-number") == "1"
    assert str(found[f"E{n_sites}"].get("data-number")).endswith("2")


def test_names_of_the_others_drop_out_where_there_is_no_room():
    assert len(labels(cap(19))) == 20  # and the ground
    assert labels(cap(256)) == ["ground"]


# One page


def test_the_first_page_fits_both_papers():
    """A4 is 297 mm high, US Letter 279.4 mm (ISO 216, ANSI Y14.1)."""
    style = part("sheet.css")
    margin = float(re.search(r"@page \{ size: auto; margin: (\d+)mm", style)[1])
    height = float(re.search(r"\.page \{[^}]*height: (\d+)mm", style)[1])
    assert height + 2 * margin < 279.4


@pytest.mark.parametrize("n_entries", range(1, IN_FULL + 1))
def test_reasons_are_cut_to_the_lines_that_the_page_has(n_entries):
    first = "y" * 40
    page = sheet_html(many(n_entries, reason="x" * 900, checks=(first, "z" * 900)))
    letters, lines = (
        (ROOMY_LETTERS, ROOMY_LINES)
        if n_entries <= ROOMY
        else (LETTERS_OF_LINE, LINES_OF_LIST)
    )
    longest = max(map(len, re.findall("x+…", page)))
    assert longest >= letters - 1
    used = math.ceil(longest / letters) + math.ceil(1.1 * len(first) / letters)
    assert n_entries * used <= lines
    assert "zz" not in page


@pytest.mark.parametrize("n_entries", [1, IN_FULL, IN_FULL + 3])
def test_what_to_do_now_is_never_cut_and_reasons_only_between_words(n_entries):
    first = "check the lead, " * 30 + "then stop"
    reason = " ".join(["swings"] * 90)
    page = sheet_html(many(n_entries, reason=reason, checks=(first, "re-prep " * 90)))
    assert page.count(f"<b>{first}</b>") == n_entries
    told = re.findall(r"(?:<p>|<td>)([^<]*)…", page)
    assert len(told) == n_entries
    assert all(re.fullmatch("(swings )*swings", text) for text in told)
    assert "then re-prep" not in page


def test_what_is_watched_asks_first_for_a_look_or_for_nothing():
    page = sheet_html(
        with_entries(
            {"verdict": "watch", "state": "present", "checks": ("check the lead",)},
            {"verdict": "watch", "state": "past", "checks": ("check the lead",)},
        )
    )
    assert "<b>look again; if it goes on: check the lead</b>" in page
    assert "<b>nothing to do now; if it comes back: check the lead</b>" in page


def test_up_to_twelve_entries_stand_on_the_first_page():
    reader = Reader(sheet_html(many(IN_FULL)))
    assert reader.all("section") == []
    assert "follow" not in reader.text


def test_further_entries_follow_on_the_next_page_in_a_line_each():
    page = sheet_html(many(IN_FULL + 3))
    first, _, rest = page.partition('<section class="rest">')
    numbers = [re.findall(r'<tr data-number="(\d+)"', half) for half in (first, rest)]
    assert numbers == [[str(i) for i in range(1, 13)], ["13", "14", "15"]]
    assert "3 more entries follow." in first
    assert ".rest { break-before: page" in page
    assert rest.count("<p") == 0


def test_every_entry_has_empty_ruled_boxes():
    page = sheet_html(ADVISED)
    head_row = page[page.index("<thead>") : page.index("</thead>")]
    assert [*re.findall(r'class="box[^"]*">([^<]+)<', head_row)] == [
        "What was done",
        "Initials",
        "Clock time",
    ]
    n_rows = len(ADVISED.advice) + 1  # and a free one
    assert page.count('<td class="box"></td>') == 2 * n_rows
    ticks = ["lead", "re-prep", "replaced", "moved"]
    assert re.findall(r'<span class="tick">([^<]+)<', page) == ticks * n_rows
    assert page.count('<span class="after">kΩ after</span>') == n_rows


def test_a_sheet_without_entries_has_free_rows_on_paper_and_on_screen():
    page = sheet_html(make_result(0))
    assert "No site asks for care." in page
    assert page.count('<tr class="blank">') == 4
    assert not re.search(r"\.blank[^{]*\{[^}]*display: none", part("sheet.css"))


def test_the_list_goes_by_number():
    shuffled = dataclasses.replace(ADVISED, advice=ADVISED.advice[::-1])
    assert sheet_html(shuffled) == sheet_html(ADVISED)


# One safe file


def test_the_caution_stands_once():
    for result in (ADVISED, make_result(0), many(30)):
        assert Reader(sheet_html(result)).text.count(CAUTION) == 1


def test_nothing_is_fetched_and_nothing_runs():
    page = sheet_html(with_advice(make_result(3, hostile=True)))
    reader = Reader(page)
    assert reader.all("script") == []
    for _, attrs in reader.elements:
        assert not {"href", "src", "action", "xlink:href"} & attrs.keys()
        assert not [name for name in attrs if name.startswith("on")]
    assert re.search(r"https?:|@import|@font-face|url\(", page) is None
    (policy,) = reader.all("meta", **{"http-equiv": "Content-Security-Policy"})
    assert policy["content"].startswith("default-src 'none'; style-src 'unsafe-inline'")
    assert "script-src" not in policy["content"]


def test_hostile_names_add_no_element_and_no_attribute():
    plain, hostile = (
        Reader(sheet_html(with_advice(make_result(3, bad)))) for bad in (False, True)
    )
    # Longer names may find no room on the map, so its texts are left out of the count.
    letters = {"text", "tspan"}
    before, after = (
        Counter((tag, *sorted(attrs)) for tag, attrs in page.elements if tag not in letters)
        for page in (plain, hostile)
    )
    assert before == after
    assert "=HYPERLINK(1)" in hostile.text
    assert "../<b>night & day</b> 1" in hostile.text


@settings(max_examples=15, deadline=None)
@given(st.text(max_size=40), st.text(max_size=40))
def test_any_name_is_text(recording_name, site_name):
    entry = dataclasses.replace(
        ADVISED.advice[1], sites=(site_name,), reason=site_name, checks=(site_name,)
    )
    result = dataclasses.replace(
        ADVISED,
        recording=dataclasses.replace(
            ADVISED.recording, name=recording_name, montage=site_name
        ),
        sites=(dataclasses.replace(ADVISED.sites[0], site=site_name), *ADVISED.sites[1:]),
        advice=(entry,),
        setup=Setup(120.0, (), ((site_name, site_name),), (site_name,), (site_name,)),
    )
    reader = Reader(sheet_html(result))
    assert reader.all("script") == []
    assert reader.all("h1") == [{"title": clean(recording_name)}]


def test_pictures_have_names_and_headings_go_down_one_step():
    reader = Reader(sheet_html(many(20)))
    assert [tag for tag, _ in reader.elements if re.fullmatch("h[1-6]", tag)] == [
        "h1",
        "h2",
        "h2",
    ]
    for attrs in reader.all("svg"):
        assert attrs.get("aria-hidden") == "true" or (attrs["role"] and attrs["aria-label"])
    (care,) = reader.all("svg", **{"class": "care"})
    assert care["aria-label"].startswith("Head from above: Fp1 re-prep")


def test_the_same_result_gives_the_same_sheet():
    assert sheet_html(with_advice(make_result(3))) == sheet_html(ADVISED)
