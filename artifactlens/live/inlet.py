"""A live stream of scalp voltages over LSL, through losses and returns of its source."""

from __future__ import annotations

import time
from dataclasses import dataclass
from typing import Self, TypeAlias

from artifactlens.errors import StreamError
from artifactlens.live.lsl_client import Info, load_client
from artifactlens.live.lsl_link import (
    CONNECT_SECONDS,
    SEARCH_SECONDS,
    Link,
    Search,
    listed,
    refusal,
)
from artifactlens.live.stream_grid import Assembler, Samples, Stretch
from artifactlens.live.stream_header import StreamFacts, read_facts

__all__ = [
    "Assembler",
    "Changed",
    "Gone",
    "Inlet",
    "Piece",
    "Samples",
    "StreamFacts",
    "Stretch",
    "read_facts",
]

_CONTENT = "eeg"
_SILENT_SECONDS = 2.0
_NAP_SECONDS = 0.02


@dataclass(frozen=True, slots=True)
class Gone:
    """The source was lost at ``at``, seconds of this computer's LSL clock."""

    at: float


@dataclass(frozen=True, slots=True)
class Changed:
    """The source is back; ``facts`` may be other than before."""

    facts: StreamFacts


Piece: TypeAlias = Samples | Gone | Changed


class Inlet:
    """One stream of type EEG, or of the name given; a context manager.

    The source may be stopped, restarted, moved to another computer or come back with other
    channels: :meth:`pull` tells, looks for it by its source id or name and goes on.

    Memory: the client buffers at most 30 s at the nominal rate (8 MB for 64 channels at
    1 kHz); a piece holds at most 4 s.

    Parameters
    ----------
    name : str, optional
        Of the stream.
    wait_seconds : float
        How long to look for it at first.

    Attributes
    ----------
    facts : StreamFacts
        Of the stream as it is now; known once the context is entered.
    """

    facts: StreamFacts

    def __init__(self, name: str | None = None, *, wait_seconds: float = 10.0) -> None:
        self._name = name
        self._wait_seconds = wait_seconds
        self._entered = False
        self._source_id = ""
        self._link: Link | None = None
        self._next_link: Link | None = None
        self._search: Search | None = None
        self._refused: set[str] = set()

    def __enter__(self) -> Self:
        """Find the stream and connect.

        Raises
        ------
        StreamError
            If there is none, there are several, it does not answer, or it carries no
            evenly sampled numbers.
        """
        self._client = load_client()
        link = Link(self._client, self._find())
        deadline = time.monotonic() + CONNECT_SECONDS
        ready = False
        try:
            while not ready and time.monotonic() < deadline:
                ready = link.advance(deadline)
        except self._client.util.LostError:
            pass
        if not ready:
            raise StreamError(
                f"The stream {link.name!r} is announced but sends nothing.",
                "Restart its source, and see that no firewall stands between.",
            )
        self._take(link)
        self._entered = True
        return self

    def __exit__(self, *_: object) -> None:
        """Disconnect."""
        self._entered = False
        self._link = self._next_link = self._search = None

    def pull(self, timeout: float) -> list[Piece]:
        """What came since the last call.

        Waits for some hundredths of a second of samples, at most ``timeout`` seconds; a
        search for a lost source takes no longer either. When a source goes, samples that
        were not pulled yet go with it.

        Returns
        -------
        list
            :class:`Samples` (microvolt; seconds of this computer's LSL clock, as the
            source stamped them: see :class:`Assembler`), :class:`Gone`, :class:`Changed`.

        Raises
        ------
        StreamError
            Outside of the context.
        """
        if not self._entered:
            raise StreamError("The stream is not connected.", "Use Inlet in a with block.")
        deadline = time.monotonic() + timeout
        pieces: list[Piece] = []
        link = self._link
        if link is None:
            link = self._look_again(deadline)
            if link is None:
                return pieces
            self._take(link)
            pieces.append(Changed(self.facts))
        try:
            samples = link.pull(max(deadline - time.monotonic(), 0.0))
        except self._client.util.LostError:
            return [*pieces, self._lose()]
        if samples is not None:
            self._search = None
            pieces.append(samples)
        elif self._has_fallen_silent(link):
            pieces.append(self._lose())
        return pieces

    def _take(self, link: Link) -> None:
        self._link, self.facts = link, link.facts
        self._source_id = link.source_id
        self._next_link = self._search = None

    def _lose(self) -> Gone:
        self._link = self._search = None
        return Gone(self._client.local_clock())

    def _has_fallen_silent(self, link: Link) -> bool:
        """Whether a source that sends nothing has left the network, too.

        A cable pulled out breaks no connection. A source that is only paused still
        answers a search.
        """
        if time.monotonic() - link.heard < _SILENT_SECONDS:
            return False
        if self._search is None:
            self._search = Search(self._client)
        found = any(info.uid() == link.uid for info in self._search.found())
        return not found and self._search.age > SEARCH_SECONDS

    def _look_again(self, deadline: float) -> Link | None:
        """A connection to the source that was lost, once there is one."""
        while True:
            link = self._next_link = self._next_link or self._candidate()
            try:
                if link is not None and link.advance(deadline):
                    return link
                if link is not None and link.age > CONNECT_SECONDS:
                    self._next_link = self._search = None
            except self._client.util.LostError:
                self._next_link = self._search = None
            except StreamError:  # no channel of it can be used
                if link is not None:
                    self._refused.add(link.uid)
                self._next_link = None
            left = deadline - time.monotonic()
            if left <= 0:
                return None
            time.sleep(min(left, _NAP_SECONDS))

    def _candidate(self) -> Link | None:
        """The same source; or else the one stream of its name.

        Many outlets have a new source id after each restart. Two others of the same name
        are two amplifiers, perhaps on two heads: neither is taken.
        """
        if self._search is None:
            self._search = Search(self._client)
        usable = [
            info
            for info in self._search.found()
            if info.uid() not in self._refused and refusal(info) is None
        ]
        source_id = self._source_id
        same = [info for info in usable if source_id and info.source_id() == source_id]
        if same:  # one that died moments ago may still be listed beside its successor
            return Link(self._client, max(same, key=lambda info: info.created_at()))
        named = [info for info in usable if info.name() == self.facts.name]
        if self._name is None:
            named = [info for info in named if _is_eeg(info)]
        if len(named) == 1 and self._search.settled:
            return Link(self._client, named[0])
        return None

    def _find(self) -> Info:
        """The one stream that fits."""
        search = Search(self._client)

        def fits(info: Info) -> bool:
            return _is_eeg(info) if self._name is None else info.name() == self._name

        fitting = search.wait_for(fits, self._wait_seconds)
        wanted = "of type EEG" if self._name is None else f"named {self._name!r}"
        if not fitting:
            others = listed(search.found())
            raise StreamError(
                f"No LSL stream {wanted} was found in {self._wait_seconds:g} s"
                + (f"; there are {others}." if others else "."),
                "Start the LSL outlet of the amplifier, see that both computers are on one "
                "network and that no firewall stands between, or name another stream. "
                "For a rehearsal, start: artifactlens replay RECORDING",
            )
        usable = [info for info in fitting if refusal(info) is None]
        if not usable:
            raise StreamError(
                f"The LSL stream {fitting[0].name()!r} {refusal(fitting[0])}.",
                "Name a stream of evenly sampled numbers.",
            )
        if len(usable) > 1:
            raise StreamError(
                f"There are {len(usable)} LSL streams {wanted}: {listed(usable)}.",
                "Name the one that is meant."
                if self._name is None
                else "Stop the others, or give each a name of its own.",
            )
        return usable[0]


def _is_eeg(info: Info) -> bool:
    return info.type().casefold() == _CONTENT
