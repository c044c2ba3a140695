"""Invented recordings, byte by byte, and the command as a person calls it."""

from __future__ import annotations

import json
import os
from pathlib import Path
from types import SimpleNamespace

import numpy as np
import pytest
from click.testing import CliRunner

from artifactlens.cli import main
from artifactlens.demo import DEMO_SITES
from artifactlens.simulation import brain, eye
from artifactlens.simulation.scene import Scene
from artifactlens.sites import canonical_site, site_position

ROOT = Path(__file__).resolve().parents[1]
CORPORA = Path(os.environ.get("ARTIFACTLENS_CORPORA", ROOT.parent / "shared" / "corpora"))


@pytest.fixture(scope="session")
def corpora():
    """The folder of recordings described in data_cards/."""
    if not CORPORA.is_dir():
        pytest.skip(
            "ARTIFACTLENS_CORPORA and ../shared/corpora name no folder of recordings"
        )
    return CORPORA


@pytest.fixture(scope="session")
def invoke():
    """Call the command; ``invoke("triage", path)`` gives exit_code, stdout and stderr."""

    def call(*arguments, width=100):
        runner = CliRunner(env={"COLUMNS": str(width), "NO_COLOR": "1"})
        return runner.invoke(main, [str(argument) for argument in arguments])

    return call


@pytest.fixture(scope="session")
def triage_json(invoke):
    """Triage one file and give its result.json, read back, with the folder."""

    def call(path, *options):
        done = invoke("triage", path, "--quiet", *options)
        assert done.exit_code == 0, done.stderr
        folder = path.with_name(f"{path.stem}.triage")
        body = json.loads((folder / "result.json").read_text(encoding="utf-8"))
        return body, folder

    return call


@pytest.fixture(scope="session")
def quiet_eeg():
    """Function of seconds and rate: invented background at 19 sites, (19, n) microvolt.

    Cortical sources seen against a reference between Cz and Pz, with amplifier noise;
    blinks of 200 uV at the forehead where they are wanted (seconds).
    """

    def make(seconds, sfreq=256.0, *, seed=1, rms_uv=10.0, blinks_at=()):
        places = [site_position(canonical_site(name)) for name in DEMO_SITES]
        places.append((site_position("Cz") + site_position("Pz")) / 2)
        scene = Scene(np.array(places), round(seconds * sfreq), sfreq)
        rng = np.random.default_rng(seed)
        field = brain.background(scene, rng, rms_uv=rms_uv).potentials.astype(np.float64)
        field += 0.3 * rng.standard_normal(field.shape)
        field += eye.blinks(
            scene, rng, list(blinks_at), amplitude_uv=(200.0, 200.0), duration=(0.32, 0.32)
        ).potentials
        return field[:-1] - field[-1]

    return make


@pytest.fixture(scope="session")
def write_edf():
    """Write an EDF or EDF+ byte by byte, by no code of the package and of no library."""
    return _write_edf


def _write_edf(
    path,
    data,
    sfreq,
    labels=None,
    *,
    unit="uV",
    limit=3276.7,
    prefilter="",
    patient="X X X X",
    recording="Startdate X X X X",
    reserved="",
    onsets=None,
    texts=(),
    text_bytes=0,
):
    """Write ``data`` (n_channels, n_samples) in ``unit`` as data records of one second.

    ``limit`` is the largest value that can be stored. ``onsets`` (seconds, one per record)
    and ``texts`` (onset, text) go into an annotation signal of ``text_bytes`` a record.
    """
    labels = [f"EEG {site}-REF" for site in DEMO_SITES] if labels is None else labels
    data = np.atleast_2d(np.asarray(data, dtype=float))
    n_records = int(data.shape[1] // sfreq)
    stored = np.rint(data[:, : int(n_records * sfreq)] / limit * 32767)
    blocks = [
        row.astype("<i2").reshape(n_records, -1).view(np.uint8)
        for row in stored.clip(-32767, 32767)
    ]
    channels = [
        (label, unit, f"{-limit:.7g}"[:8], f"{limit:.7g}"[:8], "-32767", "32767", prefilter)
        for label in labels
    ]
    if onsets is not None or texts:
        starts = range(n_records) if onsets is None else onsets
        size = text_bytes or 120
        tals = [f"+{start:g}\x14\x14\x00".encode() for start in starts]
        for onset, text in texts:
            tals[0] += f"+{onset:g}\x14{text}\x14\x00".encode()
        padded = b"".join(tal.ljust(size, b"\x00") for tal in tals)
        blocks.append(np.frombuffer(padded, np.uint8).reshape(n_records, size))
        channels.append(("EDF Annotations", "", "-1", "1", "-32768", "32767", ""))

    def field(text, size):
        raw = text if isinstance(text, bytes) else str(text).encode("latin-1")
        assert len(raw) <= size, raw
        return raw.ljust(size)

    header = [
        field("0", 8), field(patient, 80), field(recording, 80), field("03.02.0113.14.15", 16),
        field(256 * (len(channels) + 1), 8), field(reserved, 44), field(n_records, 8),
        field("1", 8), field(len(channels), 4),
    ]  # fmt: skip
    columns = list(zip(*channels, strict=True))
    columns.insert(1, [""] * len(channels))
    columns += [[block.shape[1] // 2 for block in blocks], [""] * len(channels)]
    for column, size in zip(columns, (16, 80, 8, 8, 8, 8, 8, 80, 8, 32), strict=True):
        header += [field(text, size) for text in column]
    path.write_bytes(b"".join(header) + np.concatenate(blocks, axis=1).tobytes())
    return path


@pytest.fixture(scope="session")
def demo(invoke, tmp_path_factory):
    """The demonstration as ``artifactlens demo`` leaves it; read only."""
    home = tmp_path_factory.mktemp("demo")
    done = invoke("demo", home)
    assert done.exit_code == 0, done.stderr
    folder = home / "workshop.triage"
    body = json.loads((folder / "result.json").read_text(encoding="utf-8"))
    return SimpleNamespace(
        home=home, path=home / "workshop.edf", folder=folder, body=body, printed=done.stdout
    )


@pytest.fixture(scope="session", autouse=True)
def lsl_session(tmp_path_factory):
    """Keep LSL to this machine, out of the sight of other programs, whoever uses it first."""
    session = f"artifactlens-test-{os.getpid()}"
    config = tmp_path_factory.mktemp("lsl") / "lsl_api.cfg"
    config.write_text(
        "[ports]\nIPv6 = disable\n[multicast]\nResolveScope = machine\n"
        f"[lab]\nKnownPeers = {{127.0.0.1}}\nSessionID = {session}\n[log]\nlevel = -3\n"
        # Comparing clocks takes the library 0.6 s otherwise.
        "[tuning]\nTimeProbeCount = 4\nTimeProbeInterval = 0.01\n"
        "TimeProbeMaxRTT = 0.05\nTimeUpdateMinProbes = 2\n"
    )
    with pytest.MonkeyPatch.context() as patch:
        patch.setenv("LSLAPICFG", str(config))
        yield session


@pytest.fixture(scope="module")
def lsl(lsl_session):
    """The client, where a stream can be found over the loopback of this machine."""
    from artifactlens.live import lsl_link
    from artifactlens.live import replay as replay_module

    pylsl = pytest.importorskip("pylsl", reason="the LSL client is not installed")
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(lsl_link, "_SETTLE_SECONDS", 0.1)
        patch.setattr(replay_module, "_LINGER_SECONDS", 0.4)
        outlet = pylsl.StreamOutlet(
            pylsl.StreamInfo("reachable", "probe", 1, 1, "float32", "r")
        )
        if outlet.get_info().session_id() != lsl_session:
            pytest.skip("LSL was set up in this process before, for another network")
        if not pylsl.resolve_byprop("name", "reachable", 1, 3.0):
            pytest.skip("no LSL stream can be found over the loopback of this machine")
        del outlet
        yield pylsl
