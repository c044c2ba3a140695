"""Time and peak memory of a triage beside a plain read and spectrum of the same file.

    python scripts/benchmark.py [--hours 4] [--sites 21] [--rate 256] [--runs 3]

Writes an EDF of pink noise with mains, bursts and steps into a temporary folder, then runs, in
turn and each in its own process, `artifactlens triage` and `edfio` + `scipy.signal.welch`.
Prints seconds and peak memory of whole processes, median of the runs.
"""

from __future__ import annotations

import argparse
import os
import subprocess
import sys
import tempfile
import time
from pathlib import Path

import numpy as np

LABELS = (
    "Fp1", "Fp2", "F7", "F3", "Fz", "F4", "F8", "T3", "C3", "Cz", "C4", "T4", "T5", "P3", "Pz",
    "P4", "T6", "O1", "O2", "A1", "A2", "FT9", "FT10", "TP9", "TP10", "F9", "F10", "P9", "P10",
    "AFz", "POz", "Oz",
)  # fmt: skip

PLAIN = """
import sys, edfio, scipy.signal
for signal in edfio.read_edf(sys.argv[1]).signals:
    rate = signal.sampling_frequency
    scipy.signal.welch(signal.data, rate, nperseg=round(rate))
"""


def write_recording(path: Path, hours: float, n_sites: int, rate: int) -> None:
    """Pink noise of 20 uV with artifact in one second of ten, site by site."""
    import edfio

    rng = np.random.default_rng(0)
    n = int(hours * 3600) * rate
    freqs = np.fft.rfftfreq(n, 1 / rate)
    shape = 1 / np.sqrt(np.maximum(freqs, 0.5))
    marks = rng.random(int(hours * 3600))
    signals = []
    for site in range(n_sites):
        x = np.fft.irfft(np.fft.rfft(rng.standard_normal(n)) * shape, n)
        x *= 20 / x.std()
        for second in np.flatnonzero(marks < 0.1):
            part = slice(second * rate, (second + 1) * rate)
            if marks[second] < 0.05 and second % n_sites == site:
                x[part] += 30 * rng.standard_normal(rate)
            elif marks[second] >= 0.05 and second % n_sites == site:
                x[part] += 200 * np.exp(-np.arange(rate) / (0.3 * rate))
        signals.append(
            edfio.EdfSignal(
                x, rate, label=f"EEG {LABELS[site]}-REF", physical_dimension="uV",
                physical_range=(-1000, 1000),
            )
        )  # fmt: skip
    edfio.Edf(signals).write(path)


def run(command: list[str]) -> tuple[float, float]:
    """Seconds and peak resident megabytes of one process."""
    began = time.perf_counter()
    process = subprocess.Popen(command, stdout=subprocess.DEVNULL)
    _, status, usage = os.wait4(process.pid, 0)
    seconds = time.perf_counter() - began
    if os.waitstatus_to_exitcode(status):
        raise SystemExit(f"{command[0]} failed")
    return seconds, usage.ru_maxrss / 1024


def main() -> int:
    """Measure and print."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--hours", type=float, default=4)
    parser.add_argument("--sites", type=int, default=21)
    parser.add_argument("--rate", type=int, default=256)
    parser.add_argument("--runs", type=int, default=3)
    arguments = parser.parse_args()
    with tempfile.TemporaryDirectory() as scratch:
        path = Path(scratch) / "long.edf"
        write_recording(path, arguments.hours, arguments.sites, arguments.rate)
        commands = {
            "edfio + welch": [sys.executable, "-c", PLAIN, str(path)],
            "artifactlens triage": [
                sys.executable, "-m", "artifactlens", "triage", str(path), "--quiet",
            ],
        }  # fmt: skip
        found: dict[str, list[tuple[float, float]]] = {name: [] for name in commands}
        for _ in range(arguments.runs):
            for name, command in commands.items():
                found[name].append(run(command))
    print(
        f"{arguments.hours:g} h, {arguments.sites} sites, {arguments.rate} Hz; whole "
        f"processes, median of {arguments.runs}"
    )
    medians = {name: np.median(np.array(rows), axis=0) for name, rows in found.items()}
    for name, (seconds, megabytes) in medians.items():
        print(f"{name:22s}{seconds:8.1f} s{megabytes:8.0f} MB")
    ratio = medians["artifactlens triage"][0] / medians["edfio + welch"][0]
    print(f"ratio of seconds: {ratio:.2f}")
    return 0


if __name__ == "__main__":
    sys.exit(main())
