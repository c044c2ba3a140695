"""Play a recording into LSL as if it were recorded now: for rehearsals and tests."""

from __future__ import annotations

import hashlib
import math
import time
from collections.abc import Callable, Iterator
from threading import Event

import numpy as np
from numpy.typing import NDArray

from artifactlens.errors import OptionError
from artifactlens.live.lsl_client import Client, Info, Outlet, load_client
from artifactlens.recording import Recording
from artifactlens.sites import AVERAGE_NAMES, parse_label, reference_name

__all__ = ["replay"]

_READ_SECONDS = 10.0
_BUFFER_SECONDS = 30
_LONGEST_PAUSE_SECONDS = 3.0
_LINGER_SECONDS = 1.0
_NAP_SECONDS = 0.1


def replay(
    recording: Recording,
    *,
    name: str = "artifactlens replay",
    speed: float = 1.0,
    loop: bool = False,
    chunk_seconds: float = 0.1,
    wait_for_consumer: float = 0.0,
    progress: Callable[[float, float], object] | None = None,
    stop: Event | None = None,
) -> None:
    """Send a recording as an LSL stream of type EEG; returns when all is sent.

    The header states labels, types, the unit and the reference if the labels agree on one;
    nothing of the patient, the date or the file. (LSL itself announces the computer's
    name.) Values are float32 in microvolt, NaN where the recording has none.

    Consecutive samples are stamped 1 / rate apart at any speed, so that a receiver sees
    the recording's own time: at ``speed`` 20 the stamps run ahead of the clock. A gap of
    the recording is a gap of the stamps; the wait for it is cut to 3 s. In a loop the
    first sample follows the last as if recorded right after it.

    Chunks are due at a fixed time from the start, so that lateness does not add up.
    Memory: 10 s of the recording, and what LSL buffers for a slow receiver (30 s).

    Parameters
    ----------
    recording : Recording
    name : str
        Of the stream.
    speed : float
        Times real time. LSL cannot hold a sender back: a receiver that is slower loses
        samples.
    loop : bool
        Begin again at the end, until ``stop``.
    chunk_seconds : float
        Length of a chunk in the recording's time.
    wait_for_consumer : float, seconds
        How long to wait for a receiver before the first sample; plays on without one.
    progress : function of (seconds sent, seconds in all)
        Called after each chunk; gaps count.
    stop : threading.Event
        Ends the replay when set.

    Raises
    ------
    OptionError
        If ``speed`` or ``chunk_seconds`` is not above 0, or the name is empty.
    StreamError
        If the LSL client is missing.
    RecordingError
        If the file of the recording has gone.
    """
    _check(name, speed, chunk_seconds)
    stop = Event() if stop is None else stop
    client = load_client()
    info = _header(client, recording, name)
    outlet = client.StreamOutlet(info, max_buffered=_BUFFER_SECONDS)
    _wait_for_consumer(outlet, wait_for_consumer, stop)
    rate = recording.sampling_rate
    total = recording.duration - recording.segments[0].onset
    origin, begun = client.local_clock(), time.monotonic()
    sent = not_waited = passed = 0.0  # seconds of the stream's time
    while not stop.is_set():
        for onset, values in _chunks(recording, max(1, round(chunk_seconds * rate))):
            seconds = len(values) / rate
            not_waited += max(passed + onset - sent - _LONGEST_PAUSE_SECONDS * speed, 0.0)
            sent = passed + onset + seconds
            due = begun + (sent - not_waited) / speed
            if stop.wait(max(due - time.monotonic(), 0.0)):
                break
            # The stamp is that of the last sample; the client deduces the others.
            outlet.push_chunk(values, origin + sent - 1 / rate)
            if progress is not None:
                progress(onset + seconds, total)
        passed += total
        if not loop:
            break
    if outlet.have_consumers():
        stop.wait(_LINGER_SECONDS)  # what is still on its way is lost with the outlet


def _check(name: str, speed: float, chunk_seconds: float) -> None:
    if not (0 < speed < math.inf and 0 < chunk_seconds < math.inf):
        raise OptionError(
            f"Speed and chunks must be above 0; given were {speed:g} and "
            f"{chunk_seconds:g} s.",
            "Give a speed such as 1 or 20.",
        )
    if not name.strip():
        raise OptionError("A stream needs a name; the one given is empty.", "Give a name.")


def _wait_for_consumer(outlet: Outlet, seconds: float, stop: Event) -> None:
    """In short steps, so that ``stop`` is heard."""
    last = time.monotonic() + seconds
    while not stop.is_set():
        left = last - time.monotonic()
        if left <= 0 or outlet.wait_for_consumers(min(left, _NAP_SECONDS)):
            return


def _chunks(
    recording: Recording, per_chunk: int
) -> Iterator[tuple[float, NDArray[np.float32]]]:
    """Seconds from the first sample, and samples (n, n_channels), through all segments."""
    rate = recording.sampling_rate
    per_read = per_chunk * max(1, round(_READ_SECONDS * rate / per_chunk))
    for segment in recording.segments:
        onset = segment.onset - recording.segments[0].onset
        for read in range(0, segment.n_samples, per_read):
            start = segment.start + read
            stop = segment.start + min(read + per_read, segment.n_samples)
            block = np.ascontiguousarray(recording.read(start, stop).T)
            for first in range(0, len(block), per_chunk):
                yield onset + (read + first) / rate, block[first : first + per_chunk]


def _header(client: Client, recording: Recording, name: str) -> Info:
    """The stream's description, laid out as the XDF meta-data for EEG have it."""
    info = client.StreamInfo(
        name,
        "EEG",
        len(recording.labels),
        recording.sampling_rate,
        "float32",
        _source_id(recording),
    )
    channels = info.desc().append_child("channels")
    for label, kind in zip(recording.labels, recording.types, strict=True):
        channel = channels.append_child("channel")
        channel.append_child_value("label", label)
        channel.append_child_value("unit", "microvolts")
        if kind is not None:  # without, a receiver judges by the label as for the file
            channel.append_child_value("type", kind.upper())
    reference = _reference(recording.labels)
    if reference is not None:
        element = info.desc().append_child("reference")
        element.append_child_value("label", reference)
        average = reference_name(reference) in AVERAGE_NAMES
        element.append_child_value("common_average", "Yes" if average else "No")
    return info


def _source_id(recording: Recording) -> str:
    """The same for each replay of a recording, so that receivers find it again.

    Made of what the stream tells anyway: the name of a file may be that of a person, whom
    even a digest of it would give away to whoever tries names.
    """
    segments = [(s.start, s.n_samples, s.onset) for s in recording.segments]
    layout = repr((recording.labels, recording.sampling_rate, segments))
    digest = hashlib.sha256(layout.encode("utf-8", "surrogatepass")).hexdigest()
    return f"artifactlens-replay-{digest[:16]}"


def _reference(labels: tuple[str, ...]) -> str | None:
    """The second input that all electrodes share, if the labels name one and only one."""
    parsed = [parse_label(label) for label in labels]
    seconds = {label.minus for label in parsed if label.role != "other"}
    return seconds.pop() if len(seconds) == 1 else None
