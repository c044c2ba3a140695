"""Searching for LSL streams and holding on to one, without blocking for long."""

from __future__ import annotations

import math
import time
from collections.abc import Callable

import numpy as np

from artifactlens.live.lsl_client import Client, Info
from artifactlens.live.stream_grid import Samples
from artifactlens.live.stream_header import StreamFacts, read_facts

__all__ = ["CONNECT_SECONDS", "SEARCH_SECONDS", "Link", "Search", "listed", "refusal"]

BUFFER_SECONDS = 30
"""What the client keeps of a stream that is not pulled; the oldest is dropped first."""

CONNECT_SECONDS = 8.0
"""An outlet that is announced should have answered by then."""

SEARCH_SECONDS = 3.0
"""A stream that has not answered for so long has left the network."""

_CLOCK_SECONDS = 3.0
_CLOCK_EVERY_SECONDS = 5.0
_CLOCK_FOLLOW = 0.2
# The client asks by multicast at once, but known peers one by one only half a second later.
_SETTLE_SECONDS = 0.8
_GATHER_SECONDS = 0.04
_LONGEST_PIECE_SECONDS = 4.0
_NAP_SECONDS = 0.02
_STRING_FORMAT = 3  # cf_string in the protocol's numbering


class Search:
    """Who is on the network, asked again and again in the background."""

    def __init__(self, client: Client) -> None:
        self._resolver = client.ContinuousResolver(forget_after=SEARCH_SECONDS)
        self._since = time.monotonic()

    @property
    def age(self) -> float:
        return time.monotonic() - self._since

    @property
    def settled(self) -> bool:
        """Whether a second stream of the same kind would have answered by now."""
        return self.age > _SETTLE_SECONDS

    def found(self) -> list[Info]:
        """Each stream once, though it may answer over several network cards."""
        return list({info.uid(): info for info in self._resolver.results()}.values())

    def wait_for(self, fits: Callable[[Info], bool], seconds: float) -> list[Info]:
        """Streams that fit, once there is one and all have had the time to answer."""
        while True:
            waited = self.age >= seconds
            fitting = [info for info in self.found() if fits(info)]
            if waited or (fitting and self.settled):
                return fitting
            time.sleep(_NAP_SECONDS)


class Link:
    """A connection to one outlet, made step by step so that no call blocks for long."""

    facts: StreamFacts

    def __init__(self, client: Client, info: Info) -> None:
        self.name, self.uid, self.source_id = info.name(), info.uid(), info.source_id()
        self.heard = self._since = time.monotonic()
        self._client = client
        # No time stamp is processed by the client.
        # - Dejittering fits a line through stamps against the count of samples: after a
        #   drop-out it bends all stamps for minutes. The assembler tells the two apart.
        # - Monotonising would hide an outlet's own mistakes from it.
        # - Clock synchronisation is the same as adding `time_correction`, but asks for it
        #   within a pull and may block there for seconds; here it is asked for beforehand.
        # Recovery is ours, too: the client's own keeps the old channel count and cannot
        # tell that it happened.
        self._inlet = client.StreamInlet(info, max_buflen=BUFFER_SECONDS, recover=False)
        self._opened = False
        self._offset = 0.0
        self._clock_asked = -math.inf

    @property
    def age(self) -> float:
        return time.monotonic() - self._since

    def advance(self, deadline: float) -> bool:
        """Go on with connecting until ``deadline``; whether all is done.

        Raises the client's ``LostError`` if the outlet has gone, and StreamError if it
        cannot be used.
        """
        too_late = self._client.util.TimeoutError
        try:
            if not self._opened:
                self._inlet.open_stream(_left(deadline))
                self._opened = True
            if not hasattr(self, "facts"):
                self._describe(self._inlet.info(_left(deadline)))
        except too_late:
            return False
        try:
            self._offset = self._inlet.time_correction(_left(deadline, _CLOCK_SECONDS))
        except too_late:
            if self.age < _CLOCK_SECONDS:
                return False
            # Its clock cannot be asked (it goes by UDP, which firewalls like to stop): its
            # own time serves as well, it only means nothing on this computer.
            self._offset = 0.0
        self.heard = self._clock_asked = time.monotonic()
        return True

    def _describe(self, info: Info) -> None:
        rate = info.nominal_srate()
        self.facts = read_facts(
            info.as_xml(),
            name=info.name(),
            sampling_rate=rate,
            n_channels=info.channel_count(),
        )
        self._fewest = max(1, round(_GATHER_SECONDS * rate))
        self._most = max(self._fewest, round(_LONGEST_PIECE_SECONDS * rate))

    def pull(self, timeout: float) -> Samples | None:
        values, stamps = self._inlet.pull_chunk(
            timeout, self._most, min_samples=self._fewest, as_numpy=True
        )
        if not len(stamps):
            return None
        self.heard = time.monotonic()
        if self.heard - self._clock_asked > _CLOCK_EVERY_SECONDS:
            self._clock_asked = self.heard
            self._follow_clock()
        rows = values[:, self.facts.rows].T.astype(np.float64)
        uv = rows * self.facts.scale_to_uv[:, np.newaxis]
        return Samples(uv.astype(np.float32, order="C"), stamps + self._offset)

    def _follow_clock(self) -> None:
        """Follow the drift of the source's clock, but not each wobble of its measurement."""
        try:
            measured = self._inlet.time_correction(0.0)  # known from the background
        except self._client.util.TimeoutError:
            return
        self._offset += _CLOCK_FOLLOW * (measured - self._offset)


def _left(deadline: float, most: float = math.inf) -> float:
    return min(max(deadline - time.monotonic(), 0.0), most)


def refusal(info: Info) -> str | None:
    """Why a stream cannot be used, as far as its announcement tells."""
    if info.channel_format() == _STRING_FORMAT:
        return "carries text"
    if not 0 < info.nominal_srate() < math.inf:
        return "has no sampling rate (irregular samples)"
    return None


def listed(infos: list[Info]) -> str:
    shown = [
        f"{info.name()!r} ({info.type() or 'no type'}, {info.channel_count()} channels)"
        for info in infos[:6]
    ]
    more = [f"and {len(infos) - 6} more"] if len(infos) > 6 else []
    return ", ".join(shown + more)
