"""``artifactlens watch`` and ``replay``: the terminal, the log, and how they end."""

from __future__ import annotations

import dataclasses
import io
import os
import re
import signal
import socket
import subprocess
import sys
import textwrap
import threading
import time
import urllib.request
from pathlib import Path
from types import SimpleNamespace

import numpy as np
import pytest
from result_factory import HOSTILE, make_result, with_advice
from rich.console import Console

from artifactlens.cli.watch import Log, follow, picture, screen
from artifactlens.errors import StreamError
from artifactlens.live.state import NOTHING_YET, LiveState, Prompt
from artifactlens.result import CAUTION

ADVISED = with_advice(make_result(0))
GROUND, P3, BRIDGE, _, MUSCLE, CURED = ADVISED.advice
TESTS = Path(__file__).parent


def state_of(*entries, seconds=760.0, **changes):
    numbered = (dataclasses.replace(e, number=n) for n, e in enumerate(entries, 1))
    usual = {
        "phase": "watching",
        "stream": "amp",
        "seconds": seconds,
        "result": dataclasses.replace(ADVISED, advice=tuple(numbered)),
        "marked_now": {},
        "filled": 0,
        "outages": 0,
        "delay": 0.08,
        "slowest": 0.21,
        "prompt": None,
        "notes": (),
    }
    return LiveState(**usual | changes)


class MadeUp:
    """A watch that has seen what it is told, one state after the other."""

    given: dict
    states: list
    problem = None
    runs = 0

    def __init__(self, stream, **options):
        type(self).given = {"stream": stream, **options}
        self._now = NOTHING_YET

    def __enter__(self):
        if self.problem is not None:
            raise self.problem
        return self

    def __exit__(self, *_):
        type(self).given["left"] = True

    def run(self, stop):
        for state in self.states:
            self._now = state
            if stop.wait(0.05):
                return

    def state(self):
        return self._now


@pytest.fixture
def made_up(monkeypatch):
    """Puts a made-up watch in the place of the real one; the clock of the command runs fast."""

    def put(*states, problem=None):
        made = type("Watch", (MadeUp,), {"states": list(states), "problem": problem})
        module = SimpleNamespace(Watch=made)
        monkeypatch.setitem(sys.modules, "artifactlens.live.watching", module)
        monkeypatch.setattr("artifactlens.cli.watch.EVERY_SECONDS", 0.01)
        return made

    return put


def log_of(*states):
    """What the log prints of states, without the times."""
    log = Log()
    with pytest.MonkeyPatch.context() as patch:
        out = io.StringIO()
        patch.setattr(sys, "stdout", out)
        for state in states:
            log(state)
    return out.getvalue().splitlines()


# The log


def test_each_change_of_advice_is_one_line_with_the_time_of_the_stream():
    more_pops = dataclasses.replace(P3, reason="15 pops in 2 min, unlike its neighbours")
    cured = dataclasses.replace(P3, state="cured", verdict="watch")
    assert log_of(
        NOTHING_YET,
        state_of(seconds=20.0),
        state_of(seconds=21.0),
        state_of(P3, seconds=80.0),
        state_of(more_pops, seconds=81.0),
        state_of(GROUND, more_pops, seconds=90.0),
        state_of(GROUND, cured, seconds=100.0),
        state_of(seconds=110.0),
    ) == [
        "0:00:00 Waiting for a stream.",
        "0:00:20 No site asks for care.",
        "0:01:20 P3 re-prep: 14 pops in 2 min, unlike its neighbours; "
        "check the lead, then re-prep (since 0:00:20)",
        "0:01:30 ground check: mains at all sites with differing size, also between neighbours; "
        "check the ground electrode, then cables (since the start)",
        f"0:01:40 {cured.line} (until 0:01:58, cured)",
        "0:01:40 P3 re-prep: no longer on the list",
        "0:01:50 ground check: no longer on the list",
        "0:01:50 P3 watch: no longer on the list",
        "0:01:50 No site asks for care.",
    ]


def test_losses_notes_and_requests_are_told_once():
    lost = state_of(P3, phase="lost", notes=("The source was lost at 0:12:40.",))
    ask = Prompt("Blink five times", 7.5, 2, 13)
    lines = log_of(
        state_of(P3, prompt=ask),
        state_of(P3, prompt=dataclasses.replace(ask, left=6.5)),
        lost,
        lost,
        state_of(P3, notes=lost.notes),
    )
    assert [line.partition(" ")[2] for line in lines if "P3" not in line] == [
        "Say to the patient: Blink five times.",
        "The source was lost at 0:12:40.",
        "The source is gone since 0:12:40.",
        "The source is back.",
    ]
    assert sum("P3" in line for line in lines) == 1


def test_muscle_is_told_once_whomever_it_marks():
    others = dataclasses.replace(MUSCLE, sites=MUSCLE.sites[::-1])
    lines = log_of(*(state_of(entry) for entry in (MUSCLE, others, MUSCLE)), state_of())
    assert len(lines) == 3
    assert " ask: " in lines[0]
    assert lines[1].endswith(" ask: no longer on the list")


def test_silence_of_a_paused_source_is_told_once():
    lines = log_of(*(state_of(P3, silent=s) for s in (0.2, 2.9, 3.1, 4.1, 60.0, 0.1)))
    assert [line.partition(" ")[2] for line in lines[1:]] == [
        "Nothing new from the stream for 3 s.",
        "It goes on.",
    ]


def test_low_confidence_is_told():
    doubtful = dataclasses.replace(P3, confidence="low", stretches=())
    assert log_of(state_of(doubtful))[0].endswith("then re-prep (low confidence)")


# The terminal


def seen(state, width=100):
    console = Console(file=io.StringIO(), width=width, height=60, no_color=True)
    console.print(picture(state))
    return console.file.getvalue()


def test_the_terminal_shows_sentence_list_marks_setup_and_stream():
    told = seen(state_of(P3, BRIDGE, marked_now={"pop": ("P3",), "eye": ()}), width=200)
    for words in (
        "Re-prep P3. First check the lead.",
        "1.  P3 re-prep: 14 pops in 2 min, unlike its neighbours; check the lead, then re-prep",
        "2.  F4 and C4 re-prep:",
        "marked now  pop P3\n",
        "setup       First 2 min: 17 of 19 sites fit to start.",
        "stream      Stream amp, 0:12:40 seen, none missing",
    ):
        assert words in re.sub(" +\n", "\n", told)


@pytest.mark.parametrize(
    ("changes", "sentence"),
    [
        ({"silent": 12.3}, "Nothing new from the stream for 10 s."),
        ({"phase": "lost"}, "The source is gone since 0:12:40."),
        ({"phase": "stopped"}, "The watch has stopped by a failure of its own."),
    ],
)
def test_the_terminal_shows_nothing_old_as_if_it_were_now(changes, sentence):
    told = seen(state_of(P3, **changes))
    assert told.strip().startswith(sentence)
    assert "marked now" not in told
    assert "marked now  no site" in seen(state_of(P3, silent=2.9))


def test_the_terminal_shows_the_request_to_the_patient():
    told = seen(state_of(prompt=Prompt("Look left", 2.6, 4, 13)))
    assert "Say to the patient:  Look left  3 s, 4 of 13" in told


def test_the_words_are_those_of_the_sites_command():
    assert ADVISED.advice[1].line in seen(state_of(P3), width=200)


def test_no_name_steers_the_terminal():
    hostile = dataclasses.replace(
        with_advice(make_result(0, hostile=True)),
    )
    state = state_of(result=hostile, stream="\x1b]0;x\x07", notes=("\x1b[2J",),
                     marked_now={"eye": tuple(HOSTILE.values())})  # fmt: skip
    assert "\x1b" not in seen(state)
    assert "\x07" not in seen(state)
    assert "\x1b" not in "\n".join(log_of(state))


def test_names_in_brackets_are_no_markup_of_the_terminal():
    named = dataclasses.replace(P3, sites=("[red]P3[/red]",))
    assert "[red]P3[/red] re-prep" in seen(state_of(named), width=200)


def test_the_list_is_renewed_in_its_place_and_gone_in_the_end():
    console = Console(file=io.StringIO(), force_terminal=True, width=100, height=40)
    with screen(console) as show:
        show(state_of(P3))
        show(state_of(BRIDGE))
    text = console.file.getvalue()
    assert "Re-prep P3" in text
    assert "Re-prep F4 and C4" in text
    assert text.count("\x1b[1A") > 10  # the cursor goes up again


# The command


def test_a_watch_ends_with_the_last_list_and_the_caution(invoke, made_up):
    made = made_up(state_of(seconds=20.0), state_of(P3, CURED, seconds=80.0))
    done = invoke("watch", "--no-page")
    assert done.exit_code == 0, done.output
    assert made.given["left"]
    last = done.stdout.partition("At 0:01:20 of the stream:")[2]
    assert "1. P3 re-prep: 14 pops" in last
    assert "2. O1 watch:" in last
    assert "(until 0:01:00, cured)" in last
    assert done.stdout.endswith(f"{CAUTION}\n")
    assert "page " not in done.stdout


def test_options_reach_the_watch(invoke, made_up, tmp_path):
    made = made_up(state_of())
    table = tmp_path / "ohms.tsv"
    table.write_text("site\tkohm\nP3\t14.5\n", encoding="utf-8")
    done = invoke(
        "watch", "--stream", "amp", "--wait", "3", "--minutes", "5", "--calibration",
        "--line-frequency", "60", "--impedances", table, "--no-page",
    )  # fmt: skip
    assert done.exit_code == 0, done.output
    assert made.given == {
        "stream": "amp", "wait_seconds": 3.0, "minutes": 5.0, "calibration": True,
        "line_frequency": 60.0, "impedances": {"P3": 14.5}, "left": True,
    }  # fmt: skip


def test_without_options_the_watch_finds_things_by_itself(invoke, made_up):
    made = made_up(state_of())
    invoke("watch", "--no-page")
    assert made.given == {
        "stream": None, "wait_seconds": 10.0, "minutes": 10.0, "calibration": False,
        "line_frequency": None, "impedances": None, "left": True,
    }  # fmt: skip


def test_no_stream_is_a_failure_with_a_remedy(invoke, made_up):
    made_up(problem=StreamError("No LSL stream was found in 10 s.", "Start the outlet."))
    done = invoke("watch", "--no-page")
    assert done.exit_code == 1
    assert "No LSL stream was found in 10 s." in done.stderr
    assert "Start the outlet." in done.stderr
    assert "Nothing was judged." in done.stdout


def test_a_stream_that_turns_out_unfit_is_a_failure_after_the_last_list(invoke, made_up):
    made = made_up()

    def fail(self, stop):
        self._now = state_of(P3)
        raise StreamError("It broke.", "Mend it.")

    made.run = fail
    done = invoke("watch", "--stream", "amp", "--no-page")
    assert done.exit_code == 1
    assert "Failed: stream amp" in done.stderr
    assert "Mend it." in done.stderr
    assert "1. P3 re-prep" in done.stdout


def test_an_unknown_error_prints_no_trace_across_the_list(invoke, made_up):
    made_up(problem=IndexError("P3 of patient X"))
    done = invoke("watch", "--no-page")
    assert done.exit_code == 1
    assert "does not know: IndexError." in done.stderr
    assert "patient X" not in done.output


@pytest.mark.parametrize("content", [b"\xff\xfe\x00P3", b"", b"P3\tten\n"])
def test_a_table_of_impedances_that_cannot_be_read_is_a_failure(
    invoke, made_up, tmp_path, content
):
    made_up(state_of())
    table = tmp_path / "ohms.tsv"
    table.write_bytes(content)
    done = invoke("watch", "--no-page", "--impedances", table)
    assert done.exit_code == 1
    assert "ohms.tsv" in done.stderr


def test_a_table_of_impedances_that_is_not_there_is_a_failure(invoke, made_up, tmp_path):
    made_up(state_of())
    done = invoke("watch", "--no-page", "--impedances", tmp_path / "ohms.tsv")
    assert done.exit_code == 1
    assert "ohms.tsv could not be opened" in done.stderr


def test_ctrl_c_while_waiting_ends_quietly(invoke, made_up):
    made_up(problem=KeyboardInterrupt())
    done = invoke("watch", "--no-page")
    assert done.exit_code == 0
    assert done.stdout.endswith(f"{CAUTION}\n")


def test_the_page_is_served_while_the_watch_goes_on(invoke, made_up):
    looked = []

    def look(self, stop):
        self._now = state_of(P3)
        stop.wait(0.1)

    made = made_up()
    made.run = look
    opener = urllib.request.build_opener(
        urllib.request.HTTPCookieProcessor(), urllib.request.ProxyHandler({})
    )
    with pytest.MonkeyPatch.context() as patch:

        def place(word, url):
            with opener.open(url, timeout=5) as answer:
                looked.append((word, answer.status, answer.read()))

        patch.setattr("artifactlens.cli.watch.place", place)
        done = invoke("watch")
    assert done.exit_code == 0, done.output
    ((word, status, page),) = looked
    assert (word, status) == ("page", 200)
    assert b"In order of work" in page
    assert not [t for t in threading.enumerate() if t.name.startswith("artifactlens")]


def test_a_taken_port_is_a_failure(invoke, made_up):
    made_up(state_of())
    with socket.socket() as taken:
        taken.bind(("127.0.0.1", 0))
        taken.listen()
        port = taken.getsockname()[1]
        done = invoke("watch", "--port", port)
    assert done.exit_code == 1
    assert f"port {port}" in done.stderr
    assert "--port" in done.stderr


def test_the_help_says_that_nothing_is_recorded(invoke):
    done = invoke("watch", "--help")
    assert "Nothing is recorded." in " ".join(done.stdout.split())


def test_an_error_of_the_watch_reaches_the_command():
    def run(stop):
        raise ValueError("inside")

    with pytest.raises(ValueError, match="inside"):
        follow(run, lambda: NOTHING_YET, lambda state: None)


def test_ctrl_c_stops_the_watch_before_the_command_goes_on():
    stopped = []

    def run(stop):
        stop.wait(5)
        stopped.append(stop.is_set())

    def show(state):
        raise KeyboardInterrupt

    with pytest.raises(KeyboardInterrupt):
        follow(run, lambda: NOTHING_YET, show)
    assert stopped == [True]


@pytest.mark.skipif(os.name != "posix", reason="signals as on POSIX systems")
def test_ctrl_c_in_a_real_process_ends_with_the_list_and_code_0():
    script = textwrap.dedent("""
        import sys
        from types import SimpleNamespace
        from test_cli_watch import P3, MadeUp, state_of

        class Watch(MadeUp):
            def run(self, stop):
                self._now = state_of(P3)
                stop.wait(30)

        sys.modules["artifactlens.live.watching"] = SimpleNamespace(Watch=Watch)
        from artifactlens.cli import main
        main(["watch"])
    """)
    paths = os.pathsep.join([str(TESTS), str(TESTS.parent)])
    with subprocess.Popen(
        [sys.executable, "-c", script],
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
        env={**os.environ, "PYTHONPATH": paths},
    ) as process:
        printed = []
        for line in process.stdout:
            printed.append(line)
            if "P3 re-prep" in line:
                break
        process.send_signal(signal.SIGINT)
        out, err = process.communicate(timeout=20)
    assert process.returncode == 0, err
    assert "Traceback" not in err
    assert any(line.startswith("page        http://127.0.0.1:") for line in printed)
    assert "1. P3 re-prep" in out
    assert out.endswith(f"{CAUTION}\n")


# The replay


@pytest.fixture
def recording(write_edf, tmp_path):
    data = np.random.default_rng(3).normal(0, 10, (19, 64 * 3))
    return write_edf(tmp_path / "night.edf", data, 64)


def test_options_reach_the_replay(invoke, recording, monkeypatch):
    given = {}

    def replay(opened, **options):
        given.update(options, seconds=opened.duration)
        options["progress"](3.0, 3.0)

    monkeypatch.setattr("artifactlens.live.replay.replay", replay)
    done = invoke(
        "replay", recording, "--name", "rehearsal", "--speed", "20", "--loop",
        "--wait-for-watcher",
    )  # fmt: skip
    assert done.exit_code == 0, done.output
    assert callable(given.pop("progress"))
    assert given == {
        "name": "rehearsal", "speed": 20.0, "loop": True, "wait_for_consumer": float("inf"),
        "seconds": 3.0,
    }  # fmt: skip
    assert done.stdout == "Played 3 s.\n"
    assert "Stream rehearsal: 3 s of night.edf; waiting for a watcher." in done.stderr


def test_a_replay_is_ended_by_ctrl_c_with_code_0(invoke, recording, monkeypatch):
    def replay(opened, **options):
        options["progress"](1.5, 3.0)
        raise KeyboardInterrupt

    monkeypatch.setattr("artifactlens.live.replay.replay", replay)
    done = invoke("replay", recording)
    assert done.exit_code == 0
    assert done.stdout == "Ended by you at 1.5 s.\n"


def test_a_recording_that_cannot_be_read_is_a_failure(invoke, tmp_path):
    done = invoke("replay", tmp_path / "missing.edf")
    assert done.exit_code == 1
    assert "missing.edf" in done.stderr


def test_an_unknown_error_of_a_replay_is_no_trace(invoke, recording, monkeypatch):
    def replay(opened, **options):
        raise KeyError("patient X")

    monkeypatch.setattr("artifactlens.live.replay.replay", replay)
    done = invoke("replay", recording)
    assert done.exit_code == 1
    assert "An error that artifactlens does not know: KeyError." in done.stderr
    assert "patient X" not in done.output
    assert "Traceback" not in done.output


@pytest.mark.parametrize("speed", ["0", "-1", "fast"])
def test_a_speed_must_be_above_0(invoke, recording, speed):
    assert invoke("replay", recording, "--speed", speed).exit_code == 2


def test_a_recording_is_played_into_a_real_stream(invoke, recording):
    pytest.importorskip("pylsl", reason="the extra 'live' is not installed")
    begun = time.monotonic()
    done = invoke("replay", recording, "--speed", "10")
    assert done.exit_code == 0, done.output
    assert 0.25 <= time.monotonic() - begun < 8  # 3 s, ten times faster
    assert done.stdout == "Played 3 s.\n"
