"""The page of a watch: its sentence, its rows, who may open it, and what it shows when old."""

from __future__ import annotations

import dataclasses
import http.client
import itertools
import json
import os
import re
import shutil
import socket
import subprocess
import sys
import threading
import urllib.error
import urllib.request
from http.cookiejar import CookieJar

import pytest
from result_factory import HOSTILE, make_result, with_advice
from test_page import Reader

from artifactlens.advice import SITE_VERDICTS, VERDICTS
from artifactlens.errors import OutputError
from artifactlens.kinds import KIND_NAMES
from artifactlens.live.server import HEADERS, Door, LiveServer, live_app
from artifactlens.live.state import NOTHING_YET, PHASES, LiveState, Prompt
from artifactlens.page.live import (
    ROWS,
    live_fragments,
    live_page,
    live_script,
    live_style,
    setup_line,
    since,
    stream_words,
    what_to_do_now,
)
from artifactlens.result import CAUTION

ADVISED = with_advice(make_result(0))
GROUND, P3, BRIDGE, SWAPPED, MUSCLE, CURED = ADVISED.advice
HOST = "127.0.0.1:4711"
PARTS = {"map", "marked", "setup", "stream", "notes"}


def state_of(result=ADVISED, **changes):
    usual = {
        "phase": "watching",
        "stream": "amp",
        "seconds": 760.0,
        "result": result,
        "marked_now": {},
        "filled": 0,
        "outages": 0,
        "delay": 0.08,
        "slowest": 0.21,
        "prompt": None,
        "notes": (),
    }
    return LiveState(**usual | changes)


def with_entries(*entries):
    numbered = (dataclasses.replace(e, number=n) for n, e in enumerate(entries, 1))
    return state_of(dataclasses.replace(ADVISED, advice=tuple(numbered)))


def changed(entry, **changes):
    return dataclasses.replace(entry, **changes)


def words(markup):
    return Reader(markup).text


# What it says


@pytest.mark.parametrize(
    ("entry", "sentence"),
    [
        (P3, "Re-prep P3. First check the lead."),
        (GROUND, "Ground: check the ground electrode."),
        (BRIDGE, "Re-prep F4 and C4. First clean between."),
        (SWAPPED, "T5 and T6: check placement."),
        (MUSCLE, "Patient: ask to loosen the jaw."),
        (changed(CURED, state="present"), "Watch O1. No re-prep now."),
        (CURED, "No site asks for care."),
        (
            changed(P3, cause="reference", sites=("reference",)),
            "Re-prep the reference. First check the lead.",
        ),
        (changed(P3, checks=()), "Re-prep P3."),
    ],
)
def test_the_sentence_says_what_to_do_now(entry, sentence):
    assert what_to_do_now(with_entries(entry))[0] == sentence


def test_the_sentence_is_about_the_first_entry_that_still_holds():
    state = with_entries(CURED, P3, MUSCLE)
    sentence, more = what_to_do_now(state)
    assert sentence == "Re-prep P3. First check the lead."
    assert more.startswith("In all: P3 to re-prep, patient to ask.")
    assert "1 earlier fault is gone" in more


@pytest.mark.parametrize(
    ("state", "sentence"),
    [
        (NOTHING_YET, "Waiting for a stream."),
        (state_of(None, phase="gathering", seconds=3.0), "Listening to the stream."),
        (state_of(phase="lost", seconds=12.4), "The source is gone since 0:00:12."),
        (state_of(None, phase="refused"), "This stream cannot be watched."),
        (state_of(phase="stopped"), "The watch has stopped by a failure of its own."),
        (state_of(silent=3.0), "Ground: check the ground electrode."),
        (state_of(silent=3.2), "Nothing new from the stream for 3 s."),
        (state_of(silent=59.9), "Nothing new from the stream for 50 s."),
        (state_of(silent=200.0), "Nothing new from the stream for 3 min."),
        (
            state_of(None, phase="gathering", silent=9.9),
            "Nothing new from the stream for 9 s.",
        ),
        (with_entries(), "No site asks for care."),
    ],
)
def test_every_phase_has_its_sentence(state, sentence):
    assert live_fragments(state)["sentence"] == sentence


def test_a_stream_that_cannot_tell_is_no_good_news():
    sites = tuple(dataclasses.replace(s, verdict="cannot tell") for s in ADVISED.sites)
    state = state_of(dataclasses.replace(ADVISED, sites=sites, advice=()))
    assert "cannot tell" in what_to_do_now(state)[0]


@pytest.mark.parametrize("phase", PHASES)
@pytest.mark.parametrize("result", [None, ADVISED])
def test_the_fragments_of_every_phase_are_json_with_the_same_places(phase, result):
    fragments = json.loads(json.dumps(live_fragments(state_of(result, phase=phase))))
    assert fragments["phase"] == phase
    assert set(fragments["parts"]) == PARTS
    for markup in fragments["parts"].values():
        Reader(markup)  # complains about what is not closed


@pytest.mark.parametrize(
    ("stretches", "state", "told"),
    [
        (((220.0, 760.0),), "present", "since 0:03:40"),
        (((0.0, 760.0),), "present", "since the start"),
        (((60.0, 90.0), (700.0, 760.0)), "present", "on and off since 0:01:00"),
        (((30.0, 60.0), (80.0, 95.0)), "cured", "until 0:01:35, cured"),
        ((), "present", ""),
        ((), "past", "past"),
    ],
)
def test_since_when(stretches, state, told):
    assert since(changed(P3, stretches=stretches, state=state)) == told


def test_a_row_tells_site_verdict_confidence_since_reason_and_next_check():
    row = live_fragments(with_entries(P3))["rows"][0]
    for told in (
        "1. P3", "re-prep (high)", "14.5\u00a0kΩ".replace("\u00a0", " "), "since 0:00:20",
        "14 pops in 2 min, unlike its neighbours", "check the lead then re-prep",
    ):  # fmt: skip
        assert told in words(row["html"])


def test_what_is_cured_asks_for_nothing():
    told = words(live_fragments(with_entries(CURED))["rows"][0]["html"])
    assert "nothing to do now" in told
    assert CURED.checks[0] not in told


def test_what_is_only_watched_is_not_told_as_an_order():
    told = words(
        live_fragments(with_entries(changed(CURED, state="present")))["rows"][0]["html"]
    )
    assert "if it goes on: look again in 10 min" in told


def test_rows_come_in_order_of_number_and_the_rest_is_counted():
    entries = [changed(P3, sites=(f"E{n}",)) for n in range(1, 15)]
    state = with_entries(*entries)
    backwards = dataclasses.replace(state.result, advice=state.result.advice[::-1])
    fragments = live_fragments(dataclasses.replace(state, result=backwards))
    assert [row["name"] for row in fragments["rows"]] == [
        f"E{n}" for n in range(1, ROWS + 1)
    ]
    assert fragments["further"].startswith("Further: 7. E7 re-prep, 8. E8 re-prep,")
    assert fragments["further"].endswith("and 2 more.")


def test_an_entry_keeps_its_key_while_its_number_and_reason_change():
    def keys(*entries):
        return {
            row["name"]: row["key"]
            for row in live_fragments(with_entries(*entries))["rows"]
        }

    before = keys(P3, BRIDGE)
    after = keys(GROUND, BRIDGE, changed(P3, reason="15 pops in 2 min", sign="loose lead"))
    assert after["P3"] == before["P3"]
    assert after["F4 and C4"] == before["F4 and C4"]
    assert len(set(after.values())) == 3
    assert (
        len(set(live_fragments(with_entries(P3, P3))["rows"][i]["key"] for i in (0, 1)))
        == 2
    )


def test_muscle_keeps_its_row_whomever_it_marks():
    one, two = (
        live_fragments(with_entries(changed(MUSCLE, sites=sites)))["rows"][0]["key"]
        for sites in (("T3",), ("T4", "F8"))
    )
    assert one == two


def test_all_kinds_always_stand_there_marked_or_not_or_not_judged():
    marked = live_fragments(state_of(marked_now={"pop": ("P3",), "eye": ()}))["parts"][
        "marked"
    ]
    told = words(marked)
    assert re.findall("|".join(KIND_NAMES), told)[:4] == list(KIND_NAMES)
    assert "eye no site" in told
    assert "pop P3" in told
    assert "mains not judged: A 50 Hz notch filter" in told
    assert all(f"c-{kind} " in marked for kind in KIND_NAMES)


def test_the_setup_counts_down_and_then_says_how_it_began():
    early = state_of(dataclasses.replace(ADVISED, setup=None), setup_left=85.8)
    assert setup_line(early) == "Setup check: 1:26 left."
    assert (
        setup_line(state_of(None, phase="gathering", setup_left=130.0))
        == "Setup check: 2:10 left."
    )
    late = setup_line(state_of())
    assert late.startswith("First 2 min: 17 of 19 sites fit to start.")
    assert late.endswith("Blinks were seen at both frontal poles.")
    assert "left" not in setup_line(state_of(phase="lost", setup_left=85.8))


def test_the_quiet_line_tells_name_time_losses_and_delay():
    assert stream_words(state_of()) == (
        "Stream amp, 0:12:40 seen, none missing, no outage, "
        "judged 0.08 s after its samples came, slowest 0.21 s."
    )
    worse = stream_words(state_of(filled=512, outages=2, delay=None))
    assert "512 samples of each channel missing, source gone 2 times." in worse
    broken = stream_words(state_of(breaks=1, delay=None))
    assert broken == "Stream amp, 0:12:40 seen, 1 break of more than 2 s."
    assert "2 breaks of" in stream_words(state_of(breaks=2, outages=1))
    assert stream_words(NOTHING_YET) == "No stream yet."


def test_the_request_to_the_patient_with_its_seconds_and_step():
    prompt = Prompt("Look left", 2.6, 4, 13)
    assert live_fragments(state_of(prompt=prompt))["prompt"] == {
        "words": "Look left", "left": "3 s", "step": "4 of 13",
    }  # fmt: skip
    assert live_fragments(state_of())["prompt"] is None


def test_the_last_notes_are_shown():
    notes = tuple(f"Note {n}." for n in range(5))
    assert (
        words(live_fragments(state_of(notes=notes))["parts"]["notes"]) == "Note 3. Note 4."
    )


def test_the_page_holds_caution_places_and_all_shapes_but_no_state():
    page = live_page()
    reader = Reader(page)
    assert CAUTION in reader.text
    assert "Nothing is recorded here." in reader.text
    for name in (*VERDICTS, *SITE_VERDICTS):
        assert name in reader.text
    ids = {attrs["id"] for _, attrs in reader.elements if "id" in attrs}
    assert (
        PARTS | {"sentence", "more", "rows", "further", "prompt", "words", "left", "step"}
        <= ids
    )
    (heading,) = reader.all("h1")
    assert heading["aria-live"] == "polite"


def test_the_script_and_page_agree_on_places_and_rows():
    named = set(re.findall(r'at\("(\w+)"\)', live_script()))
    ids = {attrs.get("id") for _, attrs in Reader(live_page()).elements}
    assert named <= ids
    assert len(Reader(live_page()).all("li")) >= ROWS
    assert f"repeat({ROWS}," in live_style()


def test_the_page_asks_for_nothing_from_elsewhere_and_holds_no_inline_code():
    page = Reader(live_page())
    assert page.all("script") == [{"src": "/live.js", "defer": None}]
    assert "style" not in {name for name, _ in page.elements}
    assert not [
        a for _, a in page.elements if "style" in a or any(k[:2] == "on" for k in a)
    ]
    for text in (live_page(), live_script(), live_style()):
        assert not re.search(r"https?://(?!www\.w3\.org)", text)
    for fragment in live_fragments(state_of())["parts"].values():
        assert "style=" not in fragment  # the policy forbids it


HOSTILE_STATE = state_of(
    with_advice(make_result(0, hostile=True)),
    stream="<img src=x onerror=alert(1)>",
    marked_now={"eye": tuple(HOSTILE.values())},
    notes=("</script><script>alert(2)</script>",),
    prompt=Prompt("<b>Blink</b>", 1.0, 1, 2),
)


def test_names_that_could_be_markup_are_text():
    fragments = live_fragments(HOSTILE_STATE)
    markup = [*fragments["parts"].values(), *(row["html"] for row in fragments["rows"])]
    for part in markup:
        reader = Reader(part)
        assert not reader.all("script")
        assert not reader.all("img")
        assert not any("onload" in attrs for _, attrs in reader.elements)
    assert "</script><script>alert(…: leave" in words(fragments["parts"]["map"])
    assert "\u202e" not in json.dumps(fragments, ensure_ascii=False)


# Who may look


@pytest.fixture
def door():
    return Door(4711)


@pytest.fixture
def client(door):
    return live_app(lambda: HOSTILE_STATE, door).test_client()


def get(client, path, host=HOST, **options):
    return client.get(path, base_url=f"http://{host}", **options)


@pytest.fixture
def inside(client, door):
    """A browser that was let in."""
    assert get(client, f"/?token={door.token}").status_code == 303
    return client


def test_the_token_is_exchanged_for_a_cookie_and_leaves_the_address(client, door):
    answer = get(client, f"/?token={door.token}")
    assert answer.status_code == 303
    assert answer.headers["Location"] == "/"
    cookie = answer.headers["Set-Cookie"]
    assert "HttpOnly" in cookie
    assert "SameSite=Strict" in cookie
    assert door.token not in cookie
    assert get(client, "/").text == live_page()


def test_the_token_opens_once(client, door):
    get(client, f"/?token={door.token}")
    assert get(client, f"/?token={door.token}").status_code == 303  # who was in stays in
    client.delete_cookie(door.cookie, domain="127.0.0.1")
    again = get(client, f"/?token={door.token}")
    assert again.status_code == 403
    assert "used before" in again.text
    assert "Set-Cookie" not in again.headers


def test_of_twenty_at_once_one_is_let_in(door):
    start = threading.Barrier(20)
    let_in = []

    def try_it():
        start.wait()
        let_in.append(door.spend(door.token))

    threads = [threading.Thread(target=try_it) for _ in range(20)]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    assert let_in.count(True) == 1


@pytest.mark.parametrize(
    "path", ["/", "/now", "/live.js", "/live.css", "/?token=", "/?token=ä"]
)
def test_nothing_is_shown_without_token_or_cookie(client, path):
    answer = get(client, path)
    assert answer.status_code == 403
    assert "P3" not in answer.text
    assert "Set-Cookie" not in answer.headers


def test_a_wrong_cookie_does_not_open(client, door):
    client.set_cookie(door.cookie, "wrong", domain="127.0.0.1")
    assert get(client, "/now").status_code == 403


@pytest.mark.parametrize(
    "host", ["evil.example:4711", "127.0.0.1", "127.0.0.1:80", "localhost", "0.0.0.0:4711"]
)
def test_only_this_computer_by_its_own_name_and_port(door, host):
    """A name of somebody else that leads to 127.0.0.1 (DNS rebinding) gets nothing."""
    client = live_app(lambda: HOSTILE_STATE, door).test_client(use_cookies=False)
    cookie = {"Cookie": f"{door.cookie}={door.secret}"}
    assert get(client, "/now", host=host, headers=cookie).status_code == 403
    assert get(client, f"/?token={door.token}", host=host).status_code == 403
    for own in (HOST, "localhost:4711"):
        assert get(client, "/now", host=own, headers=cookie).status_code == 200


@pytest.mark.parametrize("origin", ["http://evil.example", "null", "http://127.0.0.1:4712"])
def test_no_other_origin_may_ask(inside, origin):
    assert get(inside, "/now", headers={"Origin": origin}).status_code == 403
    assert get(inside, "/now", headers={"Origin": f"http://{HOST}"}).status_code == 200


@pytest.mark.parametrize("method", ["post", "put", "delete", "patch", "head", "options"])
def test_the_page_can_only_be_looked_at(inside, method):
    answer = getattr(inside, method)("/now", base_url=f"http://{HOST}")
    assert answer.status_code == 405


@pytest.mark.parametrize(
    "path",
    [
        "/static/live.js",
        "/live.py",
        "/../server.py",
        "/%2e%2e/%2e%2e/etc/passwd",
        "/now/",
    ],
)
def test_no_path_leads_to_a_file(inside, path):
    answer = get(inside, path)
    assert answer.status_code == 404
    assert answer.text == "There is nothing here.\n"


@pytest.mark.parametrize("path", ["/", "/now", "/live.js", "/live.css", "/nothing"])
def test_every_answer_carries_the_headers(inside, path):
    headers = get(inside, path).headers
    for name, value in HEADERS.items():
        assert headers[name] == value
    policy = headers["Content-Security-Policy"]
    for rule in (
        "default-src 'none'", "script-src 'self'", "style-src 'self'", "connect-src 'self'",
        "img-src data:",
    ):  # fmt: skip
        assert rule in policy
    assert "unsafe" not in policy
    assert headers["X-Content-Type-Options"] == "nosniff"
    assert headers["Referrer-Policy"] == "no-referrer"
    assert headers["Cache-Control"] == "no-store"


def test_refusals_carry_the_headers_too(client):
    assert get(client, "/now").headers["X-Content-Type-Options"] == "nosniff"


def test_now_gives_the_fragments(inside):
    answer = get(inside, "/now")
    assert answer.content_type == "application/json"
    assert answer.json == json.loads(json.dumps(live_fragments(HOSTILE_STATE)))
    assert b"</script>" not in answer.data.replace(b"&lt;/script", b"").split(b'"parts"')[1]


def test_an_error_is_told_without_its_words(door):
    def broken():
        raise RuntimeError("P3 of patient X")

    client = live_app(broken, door).test_client()
    get(client, f"/?token={door.token}")
    answer = get(client, "/now")
    assert answer.status_code == 500
    assert answer.text == "The page cannot be made (RuntimeError).\n"


# What is old


@pytest.mark.parametrize("phase", ["gathering", "watching"])
def test_what_is_shown_is_old_once_the_stream_is_silent(phase):
    assert live_fragments(state_of(phase=phase, silent=3.1))["old"]
    assert not live_fragments(state_of(phase=phase, silent=2.9))["old"]
    assert "of 0:12:40" in live_fragments(state_of(phase=phase, silent=3.1))["more"]


@pytest.mark.parametrize("phase", ["watching", "lost", "stopped"])
def test_only_a_stream_that_goes_on_says_who_is_marked(phase):
    told = words(live_fragments(state_of(phase=phase))["parts"]["marked"])
    assert ("no site" in told) == (phase == "watching")


# The server itself


@pytest.fixture
def server():
    with LiveServer(lambda: HOSTILE_STATE) as running:
        yield running


def browser():
    """Keeps cookies, and asks no proxy."""
    return urllib.request.build_opener(
        urllib.request.HTTPCookieProcessor(CookieJar()), urllib.request.ProxyHandler({})
    )


def test_a_browser_opens_the_page_and_asks_for_the_state(server):
    address = re.fullmatch(r"(http://127\.0\.0\.1:\d+/)\?token=[\w-]{32}", server.url)[1]
    surf = browser()
    with surf.open(server.url, timeout=5) as answer:
        assert answer.url == address
        assert answer.read().decode() == live_page()
    with surf.open(f"{address}now", timeout=5) as answer:
        assert json.load(answer)["phase"] == "watching"
    with pytest.raises(urllib.error.HTTPError) as refused:
        browser().open(server.url, timeout=5)
    refused.value.close()
    assert refused.value.code == 403


def test_it_listens_on_the_loopback_alone(server):
    port = int(re.search(r":(\d+)/", server.url)[1])
    others = {info[4][0] for info in socket.getaddrinfo(socket.gethostname(), None)}
    for address in {a for a in others if not a.startswith("127.") and ":" not in a} | {
        "127.0.0.2"
    }:
        with socket.socket() as attempt:
            attempt.settimeout(2)
            assert attempt.connect_ex((address, port)) != 0


def test_closing_frees_the_port_with_a_browser_still_connected():
    server = LiveServer(lambda: HOSTILE_STATE)
    port = int(re.search(r":(\d+)/", server.url)[1])
    connection = http.client.HTTPConnection("127.0.0.1", port, timeout=5)
    connection.request("GET", "/now")
    assert connection.getresponse().read()
    server.close()
    server.close()
    assert not [t for t in threading.enumerate() if t.name == "artifactlens page"]
    connection.close()
    LiveServer(lambda: HOSTILE_STATE, port).close()


def test_a_taken_port_says_what_to_do(server):
    port = int(re.search(r":(\d+)/", server.url)[1])
    with pytest.raises(OutputError, match=f"port {port}") as error:
        LiveServer(lambda: HOSTILE_STATE, port)
    assert "--port" in error.value.remedy


def test_a_missing_package_says_what_to_install(monkeypatch):
    monkeypatch.setitem(sys.modules, "waitress.server", None)
    with pytest.raises(OutputError) as error:
        LiveServer(lambda: HOSTILE_STATE)
    assert "artifactlens[live]" in error.value.remedy
    assert "--no-page" in error.value.remedy


# In a real browser


@pytest.fixture(scope="module")
def dom_of(tmp_path_factory):
    """What a real browser makes of the page after so many milliseconds of its own time."""
    chromium = shutil.which("chromium")
    if chromium is None:
        pytest.skip("no chromium on PATH")

    def dump(get_state, milliseconds=3000):
        with LiveServer(get_state) as running:
            done = subprocess.run(
                [
                    chromium,
                    "--headless",
                    "--disable-gpu",
                    *(
                        ["--no-sandbox"] if os.geteuid() == 0 else []
                    ),  # it refuses root otherwise
                    f"--user-data-dir={tmp_path_factory.mktemp('browser')}",
                    f"--virtual-time-budget={milliseconds}",
                    "--dump-dom",
                    running.url,
                ],
                capture_output=True,
                text=True,
                timeout=60,
            )
        return done.stdout

    return dump


def inner(dom, name):
    return re.search(rf'id="{name}"[^>]*>(.*?)</', dom, re.DOTALL)[1]


def list_rows(dom):
    """The words in each row of the list."""
    rows = re.search(r'id="rows">(.*?)</ol>', dom, re.DOTALL)[1]
    return [words(row) for row in re.findall(r"<li[^>]*>(.*?)</li>", rows, re.DOTALL)]


def test_a_real_browser_shows_the_sentence_the_map_and_the_list_and_runs_no_name(dom_of):
    dom = dom_of(lambda: HOSTILE_STATE)
    assert inner(dom, "sentence") == "Ground: check the ground electrode."
    assert "<title>Ground: check the ground electrode. - artifactlens watch</title>" in dom
    assert 'data-verdict="re-prep"' in dom
    assert list_rows(dom)[1].startswith("2 2. =HYPERLINK(1)")
    assert "&lt;b&gt;Blink&lt;/b&gt;" in inner(dom, "words")
    assert len(re.findall("<script", dom)) == 1
    assert "<img" not in dom
    assert 'class="asking"' in dom


def test_a_real_browser_keeps_the_row_of_a_site_when_another_leaves(dom_of):
    calls = itertools.count()
    before, after = with_entries(P3, BRIDGE, MUSCLE), with_entries(BRIDGE, MUSCLE, SWAPPED)

    def state():
        number = next(calls)
        return dataclasses.replace(before if number < 2 else after, seconds=760.0 + number)

    rows = list_rows(dom_of(state))
    assert rows[0] == "P3: no longer on the list"
    assert rows[1].startswith("1 1. F4 and C4")
    assert rows[2].startswith("2 2. T3 and F7")
    assert rows[3].startswith("3 3. T5 and T6")


def test_a_real_browser_says_when_what_it_shows_is_old(dom_of):
    calls = itertools.count()

    def dying():
        if next(calls) > 1:
            raise RuntimeError
        return with_entries(P3)

    dom = dom_of(dying, 6000)
    assert "cannot be made" in inner(dom, "sentence")
    assert "What stands below is old." in inner(dom, "more")
    assert re.search(r'<body[^>]* class="old"', dom)


def test_a_real_browser_says_for_how_long_a_stream_is_silent(dom_of):
    dom = dom_of(lambda: dataclasses.replace(with_entries(P3), silent=14.0))
    assert inner(dom, "sentence") == "Nothing new from the stream for 10 s."
    assert "What stands below is old" in inner(dom, "more")
    assert re.search(r'<body[^>]* class="old"', dom)
