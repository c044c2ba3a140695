"""Delay and memory of a watch over hours of stream time, on a real LSL stream.

    python scripts/benchmark_watch.py [--hours 2] [--speed 6] [--sites 64] [--rate 1000]

Another process sends an invented head (background, then a noisy site and pops) on loopback,
``--speed`` times faster than real; this one watches with one thread for its arithmetic.
The delay runs from the moment the samples that end an epoch are taken in until its result
is there; samples that were never taken in are counted as missing. Half way through the
sender is killed and started again.
"""

from __future__ import annotations

import os

os.environ.update(OMP_NUM_THREADS="1", OPENBLAS_NUM_THREADS="1", MKL_NUM_THREADS="1")

import argparse
import subprocess
import sys
import threading
import time
from dataclasses import replace
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from artifactlens.recording import Recording

TILE_SECONDS = 60
NAME = "artifactlens benchmark"


def invented_recording(hours: float, n_sites: int, rate: int) -> Recording:
    """A minute of an invented head, again and again: only the minute is in memory."""
    from artifactlens.recording import Segment, from_array
    from artifactlens.simulation.brain import background
    from artifactlens.simulation.electrode import pops
    from artifactlens.simulation.scene import Scene
    from artifactlens.sites import site_position

    names = [name for name in _names() if site_position(name) is not None][:n_sites]
    places = np.array([site_position(name) for name in names])
    rng = np.random.default_rng(0)
    scene = Scene(places, TILE_SECONDS * rate, float(rate))
    field = background(scene, rng).potentials.astype(np.float32)
    field += pops(scene, rng, 7, [11.0, 29.0, 47.0], high_pass_hz=0.3).potentials
    field += rng.standard_normal(field.shape).astype(np.float32)
    n = TILE_SECONDS * rate
    one = from_array(field, float(rate), names, name=NAME)
    total = int(hours * 3600 * rate)

    def read(start: int, stop: int) -> np.ndarray:
        return field[:, np.arange(start, stop) % n]

    whole = Segment(0, total, 0.0)
    return replace(one, n_samples=total, segments=(whole,), _read=read)


def _names() -> list[str]:
    rows = ("Fp", "AF", "F", "FC", "C", "CP", "P", "PO", "O")
    columns = ("z", "1", "2", "3", "4", "5", "6", "7", "8")
    spelt = [row + column for row in rows for column in columns]
    ring = ["T7", "T8", "FT7", "FT8", "TP7", "TP8", "Iz", "T9", "T10", "F9", "F10"]
    return list(dict.fromkeys([*ring, *spelt]))


def send(arguments: argparse.Namespace) -> None:
    """The other process."""
    from artifactlens.live.replay import replay

    recording = invented_recording(arguments.hours, arguments.sites, arguments.rate)
    replay(recording, name=NAME, speed=arguments.speed, wait_for_consumer=30.0)


def resident_mb() -> float:
    """Memory of this process now, megabyte."""
    pages = int(Path("/proc/self/statm").read_text().split()[1])
    return pages * os.sysconf("SC_PAGE_SIZE") / 1e6


def sender(arguments: argparse.Namespace, hours: float) -> subprocess.Popen[bytes]:
    """Start the other process."""
    words = [
        sys.executable, __file__, "--send", "--hours", f"{hours}", "--speed",
        f"{arguments.speed}", "--sites", f"{arguments.sites}", "--rate", f"{arguments.rate}",
    ]  # fmt: skip
    return subprocess.Popen(words, stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL)


def watch(arguments: argparse.Namespace) -> None:
    """Watch both halves and print what it took."""
    from artifactlens.live.watching import Watch

    half = arguments.hours / 2
    source = sender(arguments, half)
    delays: list[float] = []
    rows: list[tuple[float, float]] = []
    started, cpu = time.monotonic(), time.process_time()
    with Watch(NAME, wait_seconds=60.0) as watched:
        stop = threading.Event()
        worker = threading.Thread(target=watched.run, args=(stop,))
        worker.start()
        killed, last = False, 0.0
        limit = started + 60 + 1.5 * arguments.hours * 3600 / arguments.speed
        while time.monotonic() < limit and worker.is_alive():
            time.sleep(0.05)
            state = watched.state()
            if state.seconds > last and state.delay is not None:
                delays.append(state.delay)
                last = state.seconds
            if not rows or state.seconds >= rows[-1][0] + 600:
                rows.append((state.seconds, resident_mb()))
            if not killed and state.seconds > half * 3600 - 30:
                source.kill()
                source.wait()
                source = sender(arguments, half)
                killed = True
            if killed and state.seconds > arguments.hours * 3600 - 120:
                break
        stop.set()
        worker.join()
        state = watched.state()
    source.kill()
    wall, cpu = time.monotonic() - started, time.process_time() - cpu
    rows.append((state.seconds, resident_mb()))
    print(f"{arguments.sites} sites, {arguments.rate} Hz, speed {arguments.speed:g}")
    print(f"stream time {state.seconds / 3600:.2f} h in {wall / 60:.1f} min")
    low, high = np.quantile(delays, [0.5, 0.99])
    print(f"delay: median {low:.3f} s, 99 % {high:.3f} s, largest {max(delays):.3f} s")
    print(f"processor: {cpu / state.seconds:.3f} s per second of stream")
    print(f"missing samples per channel {state.filled}, outages {state.outages}")
    print("memory: " + ", ".join(f"{s / 60:.0f} min {mb:.0f} MB" for s, mb in rows))
    for note in state.notes:
        print(f"note: {note}")
    for entry in state.result.advice if state.result else ():
        print(f"{entry.number}. {entry.line}")


def main() -> int:
    """Parse and run."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--hours", type=float, default=2.0, help="stream time")
    parser.add_argument("--speed", type=float, default=6.0, help="times real time")
    parser.add_argument("--sites", type=int, default=64)
    parser.add_argument("--rate", type=int, default=1000, help="hertz")
    parser.add_argument("--send", action="store_true", help="be the sender")
    arguments = parser.parse_args()
    (send if arguments.send else watch)(arguments)
    return 0


if __name__ == "__main__":
    sys.exit(main())
