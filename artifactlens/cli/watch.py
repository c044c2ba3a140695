"""``artifactlens watch``: which electrodes to look after while the patient is in the chair."""

from __future__ import annotations

import sys
import threading
from collections.abc import Callable, Iterable, Iterator
from contextlib import ExitStack, contextmanager
from pathlib import Path
from typing import TYPE_CHECKING, NoReturn

import click

from artifactlens.cli.options import LINE_FREQUENCY
from artifactlens.cli.outcome import print_failure, unknown
from artifactlens.cli.printing import HANG, detail, echo, place, shown

if TYPE_CHECKING:
    from rich.console import Console, RenderableType
    from rich.table import Table

    from artifactlens.advice import Advice
    from artifactlens.live.state import LiveState

    Show = Callable[[LiveState], None]

EVERY_SECONDS = 1.0
SECONDS_TO_END = 5.0


@click.command(
    "watch",
    epilog="Exit codes: 0 ended by you; 1 no stream was found, or it cannot be used; "
    "2 wrong usage.",
    short_help="Say it while recording, from a live stream.",
)
@click.option(
    "--stream",
    metavar="NAME",
    help="Name of the LSL stream; without it, the one of type EEG.",
)
@click.option(
    "--wait",
    type=click.FloatRange(min=0, min_open=True),
    default=10.0,
    show_default=True,
    metavar="SECONDS",
    help="How long to look for the stream before giving up.",
)
@click.option(
    "--minutes",
    type=click.FloatRange(min=1, max=120),
    default=10.0,
    show_default=True,
    metavar="M",
    help="How far the advice looks back.",
)
@click.option(
    "--calibration",
    is_flag=True,
    help="Lead the patient through blinks, gaze and jaw clench at the start, to test the leads.",
)
@LINE_FREQUENCY
@click.option(
    "--impedances",
    type=click.Path(path_type=Path),
    metavar="TABLE",
    help="Two columns, site and kilo-ohm; without it, those that the stream offers.",
)
@click.option(
    "--port",
    type=click.IntRange(1, 65535),
    metavar="N",
    help="Port of the local page; without it, a free one.",
)
@click.option("--no-page", is_flag=True, help="Show the list in the terminal only.")
def watch_command(
    stream: str | None,
    wait: float,
    minutes: float,
    calibration: bool,
    line_frequency: float | None,
    impedances: Path | None,
    port: int | None,
    no_page: bool,
) -> None:
    """Say during the recording which electrodes to look after: in which order, why, what to do.

    Listens to an LSL stream and renews the list every second, here and on a page of this
    computer that no other one can open. Nothing is recorded. Where the output is no
    terminal, each change of the advice is one line. End it with ctrl-C.
    """
    from artifactlens.errors import ArtifactlensError
    from artifactlens.live.state import NOTHING_YET

    last = NOTHING_YET

    def keep(state: LiveState) -> LiveState:
        nonlocal last
        last = state
        return state

    try:
        from artifactlens.impedances import read_table
        from artifactlens.live.watching import Watch

        watch = Watch(
            stream,
            wait_seconds=wait,
            minutes=minutes,
            calibration=calibration,
            line_frequency=line_frequency,
            impedances=None if impedances is None else read_table(impedances),
        )
        with ExitStack() as stack:
            if not no_page:
                from artifactlens.live.server import LiveServer

                server = stack.enter_context(LiveServer(watch.state, port or 0))
                place("page", server.url)
            echo("Waiting for a stream. End with ctrl-C.", err=True)
            stack.enter_context(watch)
            show = stack.enter_context(display())
            follow(watch.run, lambda: keep(watch.state()), show)
    except KeyboardInterrupt:
        pass
    except ArtifactlensError as error:
        _fail(stream, last, error.problem, error.remedy)
    except Exception as error:
        remedy = "Start it again, and please report what was going on."
        _fail(stream, last, unknown(error), remedy)
    print_last(last)


def _fail(stream: str | None, last: LiveState, problem: str, remedy: str) -> NoReturn:
    print_last(last)
    name = "the stream" if stream is None else f"stream {stream}"
    print_failure({"recording": name, "problem": problem, "remedy": remedy})
    raise SystemExit(1)


def follow(
    run: Callable[[threading.Event], None], get_state: Callable[[], LiveState], show: Show
) -> None:
    """Show the state every second while ``run`` works in a thread of its own.

    Ends when ``run`` does, with its error if it has one, or by ctrl-C.
    """
    stop, ended = threading.Event(), threading.Event()
    problems: list[BaseException] = []

    def work() -> None:
        try:
            run(stop)
        except BaseException as error:
            problems.append(error)
        finally:
            ended.set()

    worker = threading.Thread(target=work, name="artifactlens watch", daemon=True)
    worker.start()
    try:
        show(get_state())
        while not ended.wait(EVERY_SECONDS):
            show(get_state())
    finally:
        stop.set()
        worker.join(SECONDS_TO_END)
    show(get_state())
    if problems:
        raise problems[0]


@contextmanager
def display() -> Iterator[Show]:
    """A list that is renewed in its place on a terminal, else a log of changes."""
    if not sys.stdout.isatty():
        yield Log()
        return
    from rich.console import Console

    with screen(Console(highlight=False)) as show:
        yield show


@contextmanager
def screen(console: Console) -> Iterator[Show]:
    """A list that is renewed in its place; it is gone in the end."""
    from rich.live import Live

    with Live(console=console, auto_refresh=False, transient=True) as live:
        yield lambda state: live.update(picture(state), refresh=True)


def picture(state: LiveState) -> RenderableType:
    """All that a terminal shows of a state."""
    from rich.console import Group
    from rich.padding import Padding
    from rich.text import Text

    from artifactlens.page.live import setup_line, stream_words, what_to_do_now
    from artifactlens.page.words import names

    sentence, more = what_to_do_now(state)
    parts: list[RenderableType] = []
    if state.prompt is not None:
        ask = f" {shown(state.prompt.words)} "
        left = f" {state.prompt.left:.0f} s, {state.prompt.step} of {state.prompt.steps}"
        parts += [
            Text.assemble("Say to the patient: ", (ask, "bold reverse"), left),
            Text(),
        ]
    parts += [Text(shown(sentence), style="bold"), Text(shown(more))]
    numbered = [tuple(line.split(" ", 1)) for line in advice_lines(state)]
    now = state.phase == "watching" and not state.old
    marked = "; ".join(f"{k} {names(s, 8)}" for k, s in state.marked_now.items() if s)
    details = [
        ("marked now", (marked or "no site") if now else ""),
        ("setup", setup_line(state)),
        ("stream", stream_words(state)),
        *(("note", note) for note in state.notes),
    ]
    parts += [Padding(_columns(numbered, 2), (1, 0)), _columns(details, HANG - 2)]
    return Padding(Group(*parts), (1, 0, 0, 0))


def _columns(pairs: Iterable[tuple[str, ...]], width: int) -> Table:
    """A word and a text beside it, which is broken within its column."""
    from rich.table import Table
    from rich.text import Text

    table = Table.grid(padding=(0, 2, 0, 0))
    table.add_column(min_width=width, no_wrap=True)
    table.add_column()
    for word, text in pairs:
        if text:
            table.add_row(word, Text(shown(text)))
    return table


def advice_lines(state: LiveState) -> list[str]:
    """The list in order of work, in the words of ``artifactlens sites``."""
    if state.result is None:
        return []
    return [f"{entry.number}. {_told(entry)}" for entry in state.result.advice]


def _told(entry: Advice) -> str:
    from artifactlens.page.live import since

    doubt = ", low confidence" if entry.confidence == "low" else ""
    course = f"{since(entry)}{doubt}".removeprefix(", ")
    return shown(entry.line + (f" ({course})" if course else ""))


class Log:
    """One line for each change, with the time of the stream, for a file or a pipe.

    Reasons hold counts that go on rising, and whom muscle marks changes all the time; only
    a new entry, one that changes its verdict or state or leaves the list, a request to the
    patient, a note, the phase and silence are changes.
    """

    def __init__(self) -> None:
        self._entries: dict[tuple[str, str], Advice] = {}
        self._told: tuple[str, ...] = ()
        self._phase = ""
        self._request = ""
        self._judged = False

    def __call__(self, state: LiveState) -> None:
        """Print what changed since the last state."""
        from artifactlens.page.live import what_to_do_now
        from artifactlens.page.words import clock

        lines = [note for note in state.notes if note not in self._told]
        phase = "silent" if state.old else state.phase
        if phase != self._phase:
            if phase != "watching":
                lines.append(what_to_do_now(state)[0])
            elif self._phase in ("lost", "silent"):
                back = "The source is back." if self._phase == "lost" else "It goes on."
                lines.append(back)
        request = state.prompt.words if state.prompt else ""
        if request and request != self._request:
            lines.append(f"Say to the patient: {request}.")
        lines += self._changes(state)
        self._told, self._phase, self._request = state.notes, phase, request
        for line in lines:
            echo(f"{clock(state.seconds)} {line}", wrap=False)

    def _changes(self, state: LiveState) -> list[str]:
        from artifactlens.page.live import entry_keys, what_to_do_now

        if state.result is None:
            return []
        advice, before = state.result.advice, self._entries
        keys = zip(entry_keys(advice), advice, strict=True)
        entries = {(key, entry.verdict): entry for key, entry in keys}
        lines = [
            _told(entry)
            for key, entry in entries.items()
            if key not in before or before[key].state != entry.state
        ]
        lines += [
            shown(f"{entry.subject} {entry.verdict}: no longer on the list")
            for key, entry in before.items()
            if key not in entries
        ]
        if not entries and (self._entries or not self._judged):
            lines.append(what_to_do_now(state)[0])
        self._entries = entries
        self._judged = True
        return lines


def print_last(state: LiveState) -> None:
    """The list as it was in the end, and the caution."""
    from artifactlens.page.live import setup_line, stream_words
    from artifactlens.page.sheet import what_to_do
    from artifactlens.result import CAUTION

    if state.result is None:
        echo("Nothing was judged.")
    else:
        echo(f"\nAt {_end(state)} of the stream:")
        for line in advice_lines(state):
            echo(line, hang=3)
        if not state.result.advice:
            echo(what_to_do(state.result)[0])
        if state.result.setup is not None:
            detail("setup", setup_line(state))
        detail("stream", stream_words(state))
    echo(CAUTION)


def _end(state: LiveState) -> str:
    from artifactlens.page.words import clock

    return clock(state.seconds)
