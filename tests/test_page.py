"""The page: its order, its words, its geometry, and that no name can break it."""

from __future__ import annotations

import base64
import dataclasses
import hashlib
import math
import re
import xml.etree.ElementTree as ET
from collections import Counter
from html.parser import HTMLParser
from itertools import pairwise

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from result_factory import PAIR, make_result

from artifactlens.features.catalogue import FEATURES
from artifactlens.kinds import KIND_NAMES
from artifactlens.page.balance import HALF, MOST_BARS, balance_rows, bar_svg, reach
from artifactlens.page.headmap import CENTRE, RADIUS, head_svg, place, rim_degrees, unplaced
from artifactlens.page.need import by_need, need
from artifactlens.page.report import (
    FULL_ENTRIES,
    amount_sentence,
    filter_words,
    report_html,
)
from artifactlens.page.ribbon import LEFT, WIDTH, fold, line_seconds, ribbon_svg
from artifactlens.page.traces import (
    CLIP_MM,
    MM_PER_SECOND,
    SENSITIVITIES,
    TraceWindow,
    about_middle,
    closeup,
    sensitivity,
    thin_out,
    y_units,
)
from artifactlens.page.words import clean, clock, cut, names, number, per_hundred, span
from artifactlens.result import CAUTION, Contribution, Measure

VOID = {"meta", "input", "br", "hr", "img", "link"}


class Reader(HTMLParser):
    """Reads a page and complains about elements that are not closed in order."""

    def __init__(self, page):
        super().__init__()
        self.elements, self.open, self.words, self.inside = [], [], [], {}
        self.feed(page)
        self.close()
        assert self.open == []

    def handle_starttag(self, tag, attrs):
        self.elements.append((tag, dict(attrs)))
        if tag not in VOID:
            self.open.append(tag)

    def handle_endtag(self, tag):
        assert self.open, f"</{tag}> closes nothing"
        assert self.open.pop() == tag

    def handle_data(self, data):
        if not {"style", "script"} & set(self.open):
            self.words.append(data)
        if self.open and self.open[-1] in ("script", "title"):
            self.inside.setdefault(self.open[-1], []).append(data)

    def all(self, tag, **wanted):
        return [
            attrs
            for name, attrs in self.elements
            if name == tag and all(attrs.get(key) == value for key, value in wanted.items())
        ]

    @property
    def text(self):
        return " ".join(" ".join(self.words).split())


def with_flag(result, **changes):
    return dataclasses.replace(
        result, flags=(dataclasses.replace(result.flags[0], **changes),)
    )


def of_length(result, seconds, **changes):
    facts = dataclasses.replace(result.recording, duration=seconds, **changes)
    return dataclasses.replace(result, recording=facts)


def window(data_uv, rate=100.0, onset=10.0, flag=1, labels=None):
    data_uv = np.atleast_2d(np.asarray(data_uv, dtype=np.float32))
    n = len(data_uv)
    return TraceWindow(
        flag=flag,
        onset=onset,
        sampling_rate=rate,
        labels=labels or tuple(f"Fp{i}-F{i}" for i in range(n)),
        data_uv=data_uv,
        involved=(True,) + (False,) * (n - 1),
        description="double banana, 1-70 Hz",
    )


def picture(figure, look):
    """The picture of a close-up that carries this class, as a tree."""
    tree = ET.fromstring(str(figure))
    return next(svg for svg in tree.iter("svg") if svg.get("class") == look)


def points(path):
    """Absolute points of path data of the form ``M x y l dx dy dx dy ...``."""
    start, _, moves = path[1:].partition("l")
    at = np.array([[int(value) for value in start.split()]])
    steps = np.array([int(value) for value in re.findall(r"-?\d+", moves)]).reshape(-1, 2)
    return np.concatenate([at, at + np.cumsum(steps, axis=0)])


# Order and words


def test_the_sections_answer_the_questions_in_their_order():
    reader = Reader(report_html(make_result(4)))
    ids = [attrs["id"] for attrs in reader.all("section")]
    assert ids == ["judged", "where", "queue", "sites", "run"]
    order = [
        reader.text.index(words)
        for words in (
            "invented-01",
            CAUTION,
            "What can be judged here",
            "of 100 seconds are touched",
            "On the head",
            "What deserves your eyes",
            "Why it was marked",
            "Site by site",
            "model SHA-256",
        )
    ]
    assert order == sorted(order)


def test_the_caution_stands_once():
    assert Reader(report_html(make_result(4))).text.count(CAUTION) == 1


def test_each_kind_has_a_line_with_verdict_and_reason():
    text = Reader(report_html(make_result(4))).text
    assert "eye judged Fp1 and Fp2 are present" in text
    assert "muscle partly judged The low-pass filter at 70 Hz" in text
    assert "mains cannot be judged A 50 Hz notch filter was applied" in text


def test_the_sentence_counts_out_of_a_hundred_recorded_seconds():
    """738 / 1800 = 0.41, 684 / 1800 = 0.38, 396 / 1800 = 0.22, 9 / 1800 = 0.005."""
    touched = {"any": 738.0, "eye": 396.0, "muscle": 684.0, "pop": 9.0, "mains": 0.0}
    result = of_length(
        dataclasses.replace(make_result(0), touched=touched), 1800.0, gaps=()
    )
    assert amount_sentence(result) == (
        "30 min, 19 sites. 41 of 100 seconds are touched: muscle 38, eye 22, pop below 1. "
        "Mains cannot be judged."
    )


def test_gaps_do_not_count_among_the_hundred_seconds():
    touched = {"any": 50.0, "eye": 50.0, "muscle": 0.0, "pop": 0.0, "mains": 0.0}
    result = dataclasses.replace(make_result(0), touched=touched)
    half = of_length(result, 200.0, gaps=((0.0, 60.0), (100.0, 40.0)))
    assert "50 of 100 seconds are touched: eye 50, muscle none" in amount_sentence(half)


def test_no_flag_and_nothing_judged_are_told_apart():
    quiet = dataclasses.replace(
        make_result(0), touched=dict.fromkeys(["any", *KIND_NAMES], 0.0)
    )
    assert "No second is touched by a flag. Mains cannot be judged." in amount_sentence(
        quiet
    )
    assert "This does not mean that the recording is clean." in report_html(quiet)
    blind = dataclasses.replace(
        quiet,
        assessable=tuple(dataclasses.replace(e, verdict="no") for e in quiet.assessable),
    )
    assert amount_sentence(blind).endswith("None of the four kinds can be judged.")


def test_filters_that_are_not_known_are_said_to_be_so():
    facts = make_result(0).recording
    assert filter_words(facts) == "high-pass 0.5 Hz, low-pass 70 Hz, notch 50 Hz"
    unknown = dataclasses.replace(facts, high_pass=None, low_pass=None, notch=None)
    assert (
        filter_words(unknown) == "high-pass not known, low-pass not known, no notch known"
    )


@pytest.mark.parametrize(
    ("seconds", "words"), [(0, "0:00:00"), (1061.2, "0:17:41"), (86399.99, "23:59:59")]
)
def test_clock(seconds, words):
    assert clock(seconds) == words


@pytest.mark.parametrize(
    ("seconds", "words"),
    [
        (2.5, "2.5 s"),
        (1800, "30 min"),
        (1782, "29 min 42 s"),
        (86400, "24 h"),
        (12000, "3 h 20 min"),
    ],
)
def test_span(seconds, words):
    assert span(seconds) == words


@pytest.mark.parametrize(
    ("value", "words"),
    [
        (142.27, "142"),
        (14.806, "14.8"),
        (-1.62, "−1.62"),
        (0.0, "0"),
        (-0.001, "−0.001"),
        (None, "–"),
    ],
)
def test_number_keeps_three_digits_and_a_true_minus(value, words):
    assert number(value) == words


@pytest.mark.parametrize(
    ("share", "words"),
    [(0, "none"), (0.004, "below 1"), (0.385, "38"), (0.997, "above 99"), (1, "100")],
)
def test_small_shares_never_round_to_nothing(share, words):
    assert per_hundred(share) == words


def test_many_sites_are_counted():
    assert names(("Fp1", "Fp2")) == "Fp1, Fp2"
    assert names(tuple("abcdefgh"), 3) == "a, b, c and 5 more"


# Names from a file


def test_hostile_names_add_no_element_and_no_attribute():
    plain, hostile = (Reader(report_html(make_result(8, bad))) for bad in (False, True))
    assert Counter(tag for tag, _ in plain.elements) == Counter(
        tag for tag, _ in hostile.elements
    )
    for (_, before), (_, after) in zip(plain.elements, hostile.elements, strict=True):
        assert before.keys() == after.keys()
    assert "</script><script>alert(1)</script>" in hostile.text
    assert 'Fp2" onload="x' in hostile.text


@settings(max_examples=20, deadline=None)
@given(st.text(max_size=40), st.text(max_size=40))
def test_any_name_is_text(recording_name, site_name):
    result = make_result(1)
    result = with_flag(
        result, sites=(site_name,), strongest_site=site_name, sentence=site_name
    )
    site = dataclasses.replace(result.sites[0], site=site_name)
    result = dataclasses.replace(
        result,
        recording=dataclasses.replace(
            result.recording,
            name=recording_name,
            notes=(site_name,),
            set_aside=((site_name, recording_name),),
        ),
        sites=(site, *result.sites[1:]),
        parameters={recording_name: site_name},
    )
    reader = Reader(report_html(result))
    assert len(reader.all("script")) == 1
    assert reader.all("h1") == [{"title": clean(recording_name)}]


def test_long_names_are_cut_and_stand_in_full_on_hover():
    long = "x<" * 5000 + "\N{BRAIN}"
    result = make_result(1)
    site = dataclasses.replace(result.sites[0], site=long)
    result = dataclasses.replace(with_flag(result, sites=(long,)), sites=(site,))
    reader = Reader(report_html(result))
    assert max(len(words) for words in reader.words) < 500
    assert {attrs.get("title") for attrs in reader.all("th")} >= {long}
    assert cut(long) == long[:23] + "…"


def test_controls_and_direction_marks_are_shown_as_replaced():
    assert clean("a\tb\x1b[31m\u202eabc\ud800") == "a b�[31m�abc�"
    assert "\u202e" not in report_html(make_result(4, hostile=True))


# The ribbon


@pytest.mark.parametrize(
    ("duration", "seconds"),
    [(10, 60), (600, 60), (601, 300), (7200, 300), (7201, 3600), (86400, 3600)],
)
def test_length_of_a_line(duration, seconds):
    assert line_seconds(duration) == seconds


def bars(result):
    """(x in seconds on the line, seconds, number of the line) of every bar."""
    found = []
    tree = ET.fromstring(str(ribbon_svg(result)))
    lines = [g for g in tree if (g.get("transform") or "").startswith("translate")]
    unit = WIDTH / line_seconds(result.recording.duration)
    for number_, line in enumerate(lines):
        for link in line.iter("a"):
            bar = link.find("rect")
            start = (float(bar.get("x")) - LEFT) / unit
            found.append((start, float(bar.get("width")) / unit, number_))
    return found


def test_a_flag_over_a_line_end_becomes_two_bars():
    result = with_flag(make_result(1), onset=59.0, duration=3.0)
    assert bars(result) == [
        (pytest.approx(59.0, abs=0.001), pytest.approx(1.0, abs=0.001), 0),
        (pytest.approx(0.0, abs=0.001), pytest.approx(2.0, abs=0.001), 1),
    ]


def test_a_flag_that_ends_with_its_line_stays_on_it():
    assert fold(55.0, 5.0, 60) == [(0, 55.0, 5.0)]
    assert fold(59.9, 0.1, 60)[-1].line == 0


@given(st.floats(0, 1e5), st.floats(0.01, 1e4), st.sampled_from([60, 300, 3600]))
def test_pieces_make_up_the_whole(onset, duration, line):
    pieces = fold(onset, duration, line)
    assert math.fsum(piece.seconds for piece in pieces) == pytest.approx(duration, abs=1e-6)
    assert pieces[0].line * line + pieces[0].start == pytest.approx(onset)
    for before, after in pairwise(pieces):
        assert (after.line, after.start) == (before.line + 1, 0)
    assert all(0 <= piece.start <= line and piece.seconds <= line for piece in pieces)


def test_lanes_keep_the_order_of_the_kinds():
    result = make_result(1)
    flags = tuple(
        dataclasses.replace(result.flags[0], number=i, kind=kind, probability=1.0)
        for i, kind in enumerate(KIND_NAMES)
    )
    tree = ET.fromstring(str(ribbon_svg(dataclasses.replace(result, flags=flags))))
    rows = [
        (float(bar.get("y")), bar.get("class"))
        for a in tree.iter("a")
        for bar in a.iter("rect")
    ]
    assert [look for _, look in sorted(rows)] == ["k-eye", "k-muscle", "k-pop", "k-mains"]


def test_bars_tell_and_link():
    tree = ET.fromstring(str(ribbon_svg(make_result(1))))
    link = next(tree.iter("a"))
    assert link.get("href") == "#flag-1"
    assert link.findtext("title").startswith(
        "0:00:12, 2 s, eye, Fp1, Fp2, probability 0.79"
    )


def test_gaps_annotations_and_lanes_not_judged_are_drawn():
    result = of_length(make_result(0), 130.0)
    looks = Counter(e.get("class") for e in ET.fromstring(str(ribbon_svg(result))).iter())
    assert (looks["gap"], looks["mark"]) == (1, 2)
    assert looks["unjudged"] == 3  # mains, on each of three lines
    grounds = [
        float(e.get("width")) / WIDTH * 60
        for e in ET.fromstring(str(ribbon_svg(result))).iter("rect")
        if e.get("class") == "strip-ground"
    ]
    assert grounds == pytest.approx(
        [60, 60, 10], abs=0.01
    )  # the last line ends with the record


# The head


def test_the_nose_is_up_and_left_is_left():
    sites = {site.site: site for site in make_result(0).sites}
    rim = rim_degrees(list(sites.values()))
    (x1, y1), (x2, _), (_, y_back) = (
        place(sites[name], rim) for name in ("Fp1", "Fp2", "O1")
    )
    assert x1 < CENTRE[0] < x2
    assert y1 < CENTRE[1] < y_back
    assert place(sites["Cz"], rim) == pytest.approx(CENTRE)
    assert math.dist(place(sites["T3"], rim), CENTRE) == pytest.approx(
        0.8 * RADIUS, rel=0.02
    )


def test_the_share_goes_around_each_site_and_stands_as_a_number():
    result = make_result(0)
    site = dataclasses.replace(result.sites[0], share=dict.fromkeys(KIND_NAMES, 0.38))
    tree = ET.fromstring(str(head_svg("muscle", [site])))
    arc = next(e for e in tree.iter("path") if e.get("class") == "arc")
    assert (arc.get("pathLength"), arc.get("stroke-dasharray")) == ("100", "38.0 100")
    assert [e.text for e in tree.iter("text")] == ["38", "Fp1"]
    assert "Fp1: 38 of 100 seconds" in [e.text for e in tree.iter("title")]


def test_sites_without_a_place_go_beside_or_below_or_into_the_list():
    site = dataclasses.replace(make_result(0).sites[0], position=None)
    ear = dataclasses.replace(site, canonical="A2")
    reference = dataclasses.replace(site, canonical=None, role="reference")
    shares = dict.fromkeys(KIND_NAMES, 0.02)
    lost = dataclasses.replace(site, site="X9", canonical=None, share=shares)
    assert place(ear, 110.0)[0] > CENTRE[0] + RADIUS
    assert unplaced([ear, reference, lost]) == [lost]
    result = make_result(1)
    page = report_html(dataclasses.replace(result, sites=(*result.sites, lost)))
    assert "Without a known place: X9 2" in page


# The queue


def test_need_by_hand():
    flag = dataclasses.replace(make_result(1).flags[0], look_alike="", duration=2.0)
    doubtful = dataclasses.replace(flag, probability=0.62)
    assert need(doubtful, 1000.0) == (pytest.approx(1.02), "uncertain: 0.62")
    fading = dataclasses.replace(flag, probability=0.9)
    assert need(fading, 1000.0)[0] == pytest.approx(0.52)
    sure = dataclasses.replace(flag, probability=0.99, duration=120.0)
    assert need(sure, 1000.0) == (pytest.approx(1.05), "covers 12 % of the record")
    alike = dataclasses.replace(doubtful, look_alike="a focal spike", duration=50.0)
    score, reason = need(alike, 1000.0)
    assert score == pytest.approx(2.5)
    assert reason == "uncertain: 0.62; look-alike signs; covers 5 % of the record"
    clear = dataclasses.replace(flag, probability=0.999)
    assert need(clear, 1000.0)[1] == "plain: 1.00"


def test_the_queue_goes_by_need_and_knows_the_time():
    result = make_result(8)
    ranked = [flag.number for flag, _ in by_need(result.flags, result.recording.duration)]
    entries = Reader(report_html(result)).all("details")
    assert [entry["id"] for entry in entries] == [f"flag-{n}" for n in ranked]
    assert [int(entry["data-need"]) for entry in entries] == list(range(1, 9))
    onsets = {f"flag-{flag.number}": flag.onset for flag in result.flags}
    assert {entry["id"]: float(entry["data-time"]) for entry in entries} == onsets


def test_signs_of_a_look_alike_are_spelled_out():
    result = make_result(1)
    assert result.flags[0].look_alike in Reader(report_html(result)).text
    assert "Look with care." not in report_html(with_flag(result, look_alike=""))


# The close-up


def test_positive_deflects_down():
    """Input 1 more positive than input 2 deflects down (common practice of the trade)."""
    data = np.zeros(200)
    data[100] = 70.0
    figure = closeup(window(data), make_result(1).flags[0])
    trace = next(
        e for e in picture(figure, "traces").iter("path") if "trace" in e.get("class")
    )
    at = points(trace.get("d"))
    assert at[100, 1] - at[0, 1] == 10 * 20  # 70 uV at 7 uV/mm are 10 mm, 20 units each
    assert y_units(np.array([-7.0]), 7.0) == -20


def test_a_second_is_thirty_millimetres():
    svg = picture(closeup(window(np.zeros(400)), make_result(1).flags[0]), "traces")
    assert svg.get("width") == "120mm"
    wide, tall = (float(value) for value in svg.get("viewBox").split()[2:])
    assert wide / float(svg.get("width")[:-2]) == 20
    assert tall / float(svg.get("height")[:-2]) == 20
    trace = next(e for e in svg.iter("path") if "trace" in e.get("class"))
    at = points(trace.get("d"))
    assert at[100, 0] - at[0, 0] == MM_PER_SECOND * 20


def test_the_scale_bar_is_as_long_as_it_says():
    data = np.zeros(400)
    data[:100] = 140.0  # a quarter of the time: 140 uV need 15 uV/mm to stay within 10 mm
    figure = closeup(window(data), make_result(1).flags[0])
    assert "30 mm/s, 15 uV/mm; negative is up." in "".join(
        ET.fromstring(str(figure)).itertext()
    )
    corner = next(
        e for e in picture(figure, "labels").iter("g") if e.get("class") == "corner"
    )
    top, foot, along = re.fullmatch(
        r"M\S+ ([\d.]+)V([\d.]+)h([\d.]+)", corner.find("path").get("d")
    ).groups()
    microvolt, seconds = float(corner.get("data-uv")), float(corner.get("data-seconds"))
    assert (float(foot) - float(top)) / 20 == pytest.approx(microvolt / 15, abs=0.01)
    assert float(along) / 20 == pytest.approx(seconds * 30)
    assert [e.text for e in corner.iter("text")] == ["100 uV", "0.5 s"]


def test_extent_and_moment_stand_at_their_seconds():
    flag = dataclasses.replace(
        make_result(1).flags[0], onset=12.0, duration=2.0, moment=12.4
    )
    svg = picture(closeup(window(np.zeros(600), onset=10.0), flag), "traces")
    extent = next(e for e in svg.iter("rect") if e.get("class") == "extent")
    moment = next(e for e in svg.iter("path") if e.get("class") == "moment")
    assert float(extent.get("x")) / 600 == pytest.approx(2.0)
    assert float(extent.get("width")) / 600 == pytest.approx(2.0)
    assert moment.get("d").startswith("M1440 ")


def test_involved_derivations_stand_out():
    svg = picture(closeup(window(np.zeros((3, 200))), make_result(1).flags[0]), "traces")
    looks = [e.get("class") for e in svg.iter("path") if "trace" in e.get("class")]
    assert looks == ["trace involved", "trace", "trace"]


def test_sensitivity_takes_the_first_step_that_fits():
    rows = np.ones((2, 100), dtype=np.float32)
    assert sensitivity(rows * 70) == 7
    assert sensitivity(rows * 71) == 10
    assert sensitivity(rows * 690) == 70
    assert sensitivity(rows * 5000) == SENSITIVITIES[-1]
    assert sensitivity(np.full((1, 9), np.nan, dtype=np.float32)) == 7


def test_clipped_traces_are_said_to_be_clipped():
    data = np.zeros(400)
    data[100:104] = 4000.0
    figure = closeup(window(data), make_result(1).flags[0])
    svg = picture(figure, "traces")
    trace = next(e for e in svg.iter("path") if "trace" in e.get("class"))
    at = points(trace.get("d"))
    assert at[:, 1].max() - at[0, 1] == CLIP_MM * 20
    assert [e.get("class") for e in svg.iter("path")].count("beyond") == 1
    assert "drawn to ±15 mm at most" in str(figure)
    assert "at most" not in str(closeup(window(data / 100), make_result(1).flags[0]))


def test_missing_samples_break_the_trace():
    data = np.zeros((2, 200))
    data[0, 50:60] = np.nan
    data[1] = np.nan
    svg = picture(closeup(window(data), make_result(1).flags[0]), "traces")
    paths = [e.get("d") for e in svg.iter("path") if "trace" in e.get("class")]
    assert [path.count("M") for path in paths] == [2, 0]


def test_thinning_keeps_every_extreme_and_four_points_a_millimetre():
    rate = 1000.0
    row = np.random.default_rng(3).normal(size=5000).astype(np.float32)
    row[1234], row[4321] = 50, -60
    seconds, values = thin_out(row, rate)
    assert (values.max(), values.min()) == (50, -60)
    assert seconds[values.argmax()] == pytest.approx(1.234)
    assert np.all(np.diff(seconds) > 0)
    assert len(values) <= 4 * 30 * 5
    assert np.array_equal(values, row[np.rint(seconds * rate).astype(int)])


def test_a_slow_recording_is_drawn_sample_by_sample():
    row = np.arange(50, dtype=np.float32)
    assert np.array_equal(thin_out(row, 100.0)[1], row)


def test_each_row_runs_along_its_own_middle():
    data = np.array([[5, 5, 9], [np.nan] * 3], dtype=np.float32)
    assert np.array_equal(about_middle(data)[0], [0, 0, 4])


def test_close_ups_stand_with_their_flags():
    result = make_result(4)
    page = report_html(result, [window(np.zeros((2, 300)), flag=2, onset=39.0)])
    assert page.count('<figure class="closeup') == 1
    assert page.index('id="flag-2"') < page.index('<figure class="closeup')


# The balance


def test_bars_add_up_to_the_score():
    result = make_result(4)
    page = report_html(result)
    tables = re.findall(r'data-score="([^"]+)">(.*?)</table>', page, re.S)
    assert len(tables) == 4
    for score, table in tables:
        parts = [float(part) for part in re.findall(r'data-log-odds="([^"]+)"', table)]
        assert math.fsum(parts) == pytest.approx(float(score), abs=1e-9)


def test_small_parts_are_gathered_into_the_rest():
    weights = [0.9, -0.8, 0.7, 0.6, 0.5, 0.4, 0.3, 0.2, 0.15, 0.05, -0.02]
    parts = tuple(
        Contribution(f"f{i}", f"f {i}", "uV", 1.0, 2.0, w) for i, w in enumerate(weights)
    )
    flag = dataclasses.replace(
        make_result(1).flags[0],
        contributions=parts,
        base=-2.0,
        score=math.fsum(weights) - 2.0,
    )
    rows = balance_rows(flag)
    assert [row.role for row in rows] == ["feature"] * MOST_BARS + ["rest", "base"]
    assert [row.log_odds for row in rows[:3]] == [0.9, -0.8, 0.7]
    assert rows[-2].measured == "3 small ones"
    assert rows[-2].log_odds == pytest.approx(0.18)
    assert math.fsum(row.log_odds for row in rows) == pytest.approx(flag.score, abs=1e-9)


def test_bars_name_value_unit_and_usual_value():
    rows = balance_rows(make_result(1).flags[0])
    assert (rows[0].label, rows[0].measured, rows[0].usual) == (
        "frontal polarity",
        "142\u00a0uV",
        "3.5\u00a0uV",
    )
    missing = dataclasses.replace(
        make_result(1).flags[0],
        contributions=(Contribution("x", "a label", "dB", None, None, 1.0),),
    )
    assert balance_rows(missing)[0].measured == "not measured"


def with_pair(flag):
    return dataclasses.replace(
        flag,
        contributions=(PAIR, *flag.contributions),
        score=flag.score + PAIR.log_odds,
    )


def test_the_bar_of_a_pair_names_both_features_and_measures():
    flag = with_pair(make_result(2).flags[1])
    row = balance_rows(flag)[0]
    assert row.label == (
        "highest pace within a tenth of a second together with power at 55-95 Hz"
    )
    assert (row.measured, row.usual) == (
        "12.3\u00a0uV and −3.0\u00a0dB",
        "4\u00a0uV and not known",
    )
    assert row.log_odds == PAIR.log_odds
    result = dataclasses.replace(make_result(2), flags=(flag,))
    text = Reader(report_html(result)).text
    told = f"{row.label} {row.measured} {row.usual}"
    assert " ".join(told.split()) in text


def test_bars_with_a_pair_add_up_to_the_score():
    flag = with_pair(make_result(1).flags[0])
    rows = balance_rows(flag)
    assert len(rows) == len(make_result(1).flags[0].contributions) + 2
    assert math.fsum(row.log_odds for row in rows) == pytest.approx(flag.score, abs=1e-9)


@pytest.mark.parametrize("one", FEATURES)
def test_no_label_of_a_pair_is_cut(one):
    other = max(FEATURES, key=lambda feature: len(feature.label))
    measures = tuple(
        Measure(feature.name, feature.label, feature.unit, None, None)
        for feature in (one, other)
    )
    flag = dataclasses.replace(
        make_result(1).flags[0], contributions=(Contribution.of(measures, 1.0),)
    )
    text = Reader(report_html(dataclasses.replace(make_result(1), flags=(flag,)))).text
    assert f"{one.label} together with {other.label} not measured and not measured" in text


def test_what_speaks_for_lies_right_and_what_speaks_against_left():
    flag = make_result(1).flags[0]
    scale = reach(flag)
    for row in balance_rows(flag):
        svg = ET.fromstring(str(bar_svg(row, scale, flag.kind)))
        bar = svg.find("rect")
        left, width = float(bar.get("x")), float(bar.get("width"))
        drawn = (width if left == 0 else left) * scale / HALF
        assert drawn == pytest.approx(row.log_odds, abs=0.01 * scale / HALF)


# Sites and run


def test_the_site_table_holds_what_was_measured():
    text = Reader(report_html(make_result(4))).text
    assert "C3 site leave 2 min 0 0 <1 – 0.5 0.81 1.5 9.5" in text
    assert "flat from 90 s on" in text


def test_notes_channels_and_versions_stand_at_the_end():
    text = Reader(report_html(make_result(1))).text
    end = text[text.index("About the recording and this run") :]
    for words in (
        "One gap of 2.5 s was left out.",
        "0:01:00 for 2.5 s",
        "ECG EKG not an electrode of the scalp",
        "operating_point sure",
        "artifactlens 0.1.0",
        "0" * 64,
    ):
        assert words in end


# One file that needs nothing


def test_nothing_is_fetched():
    page = report_html(make_result(4), [window(np.zeros((2, 300)))])
    reader = Reader(page)
    for _, attrs in reader.elements:
        for name in ("href", "src", "action", "xlink:href"):
            assert attrs.get(name, "#").startswith("#")
    assert re.search(r"https?:", page) is None
    assert re.search(r"@import|@font-face|url\((?!#)", page) is None


def test_only_the_page_s_own_script_may_run():
    page = report_html(make_result(4, hostile=True))
    reader = Reader(page)
    (script,) = reader.inside["script"]
    digest = base64.b64encode(hashlib.sha256(script.encode()).digest()).decode()
    (policy,) = reader.all("meta", **{"http-equiv": "Content-Security-Policy"})
    assert f"script-src 'sha256-{digest}'" in policy["content"]
    assert "default-src 'none'" in policy["content"]


def test_headings_go_down_one_step_at_a_time_and_pictures_have_names():
    reader = Reader(report_html(make_result(4), [window(np.zeros((2, 300)))]))
    levels = [int(tag[1]) for tag, _ in reader.elements if re.fullmatch("h[1-6]", tag)]
    assert levels[0] == 1
    assert levels.count(1) == 1
    assert all(after - before <= 1 for before, after in pairwise(levels))
    assert reader.all("html") == [{"lang": "en"}]
    for attrs in reader.all("svg"):
        assert attrs.get("aria-hidden") == "true" or (attrs["role"] and attrs["aria-label"])


def test_a_day_with_5000_flags_stays_small():
    result = make_result(5000)
    flags = tuple(
        dataclasses.replace(flag, number=i + 1, onset=i * 17.0)
        for i, flag in enumerate(result.flags)
    )
    result = of_length(dataclasses.replace(result, flags=flags), 86400.0)
    page = report_html(result)
    assert len(page.encode()) < 6e6
    assert len(str(ribbon_svg(result)).encode()) < 2e6
    reader = Reader(page)
    targets = Counter(attrs["id"] for _, attrs in reader.elements if "id" in attrs)
    assert set(targets.values()) == {1}
    assert len(reader.all("details", **{"class": "entry"})) == FULL_ENTRIES
    assert {attrs["href"][1:] for attrs in reader.all("a")} <= targets.keys()
    assert sum(name.startswith("flag-") for name in targets) == 5000
    listed = [int(attrs["id"][5:]) for attrs in reader.all("tr") if "id" in attrs]
    assert listed == sorted(listed)  # the others stand in order of time


def test_the_same_result_gives_the_same_page():
    traces = [window(np.random.default_rng(1).normal(size=(3, 900)), flag=2)]
    assert report_html(make_result(9), traces) == report_html(make_result(9), traces)
