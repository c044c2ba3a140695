"""The LSL client library, as far as it is used here."""

from __future__ import annotations

import os
from functools import cache
from importlib import import_module
from pathlib import Path
from typing import Protocol, cast

import numpy as np
from numpy.typing import NDArray

from artifactlens.errors import StreamError

__all__ = ["Client", "Element", "Info", "Outlet", "Source", "load_client"]


class Element(Protocol):
    """An element of a stream's description."""

    def append_child(self, name: str) -> Element: ...
    def append_child_value(self, name: str, value: str) -> Element: ...


class Info(Protocol):
    """What a stream says of itself; only the full header has a description."""

    def name(self) -> str: ...
    def type(self) -> str: ...
    def channel_count(self) -> int: ...
    def channel_format(self) -> int: ...
    def nominal_srate(self) -> float: ...
    def source_id(self) -> str: ...
    def uid(self) -> str: ...
    def created_at(self) -> float: ...
    def desc(self) -> Element: ...
    def as_xml(self) -> str: ...


class Source(Protocol):
    """The receiving end of a stream."""

    def open_stream(self, timeout: float) -> None: ...
    def info(self, timeout: float) -> Info: ...
    def time_correction(self, timeout: float) -> float: ...
    def pull_chunk(
        self, timeout: float, max_samples: int, *, min_samples: int, as_numpy: bool
    ) -> tuple[NDArray[np.generic], NDArray[np.float64]]: ...


class Outlet(Protocol):
    """The sending end of a stream."""

    def push_chunk(self, x: NDArray[np.float32], timestamp: float) -> None: ...
    def have_consumers(self) -> bool: ...
    def wait_for_consumers(self, timeout: float) -> bool: ...


class Resolver(Protocol):
    """A search that goes on in the background."""

    def results(self) -> list[Info]: ...


class Errors(Protocol):
    """The client's own errors."""

    LostError: type[Exception]
    TimeoutError: type[Exception]


class Client(Protocol):
    """The functions and classes of the client."""

    util: Errors

    def ContinuousResolver(self, *, forget_after: float) -> Resolver: ...  # noqa: N802
    def StreamInfo(  # noqa: N802 - the client's spelling
        self,
        name: str,
        type: str,
        channel_count: int,
        nominal_srate: float,
        channel_format: str,
        source_id: str,
    ) -> Info: ...
    def StreamInlet(  # noqa: N802
        self, info: Info, *, max_buflen: int, recover: bool
    ) -> Source: ...
    def StreamOutlet(self, info: Info, *, max_buffered: int) -> Outlet: ...  # noqa: N802
    def local_clock(self) -> float: ...
    def set_config_content(self, content: str) -> None: ...


@cache
def load_client() -> Client:
    """The client.

    Raises
    ------
    StreamError
        If it is not installed, or its library does not load.
    """
    try:
        client = cast(Client, import_module("pylsl"))
    except ImportError:
        raise StreamError(
            "Live streams need the LSL client, which is not installed.",
            "Run: pip install 'artifactlens[live]'",
        ) from None
    except RuntimeError:  # what the client raises without its compiled library
        raise StreamError(
            "The LSL client is installed, but its library liblsl does not load.",
            "Run: pip install --force-reinstall 'artifactlens[live]'",
        ) from None
    _keep_quiet(client)
    return client


def _keep_quiet(client: Client) -> None:
    """Keep the library from writing into the terminal, unless somebody configured it.

    A configuration given here replaces the file, in which a laboratory may have set its
    network: hence only without one. The places are those that the library looks in (from
    memory of its documentation).
    """
    places = ("lsl_api.cfg", "~/lsl_api/lsl_api.cfg", "/etc/lsl_api/lsl_api.cfg")
    files = [Path(os.path.expanduser(place)) for place in places]
    if "LSLAPICFG" not in os.environ and not any(file.is_file() for file in files):
        client.set_config_content("[log]\nlevel = -3\n")
