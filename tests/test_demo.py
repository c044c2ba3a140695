"""The invented demonstration: its truth is what the signal shows, and the file reads back."""

from __future__ import annotations

import subprocess
import sys

import edfio
import mne
import numpy as np
import pytest

from artifactlens import demo
from artifactlens.errors import OutputError
from artifactlens.kinds import KIND_NAMES

SFREQ = 256.0
BANDS = {"eye": (0.5, 8.0), "muscle": (20.0, 69.0), "mains": (49.0, 51.0)}
BRAIN_BANDS = {
    "posterior alpha": (8.0, 12.0),
    "sleep spindle": (11.5, 14.5),
    "K-complex": (0.5, 4.0),
    "frontal rhythmic delta": (1.5, 3.5),
}


@pytest.fixture(scope="module")
def path(tmp_path_factory):
    return demo.write_demo(tmp_path_factory.mktemp("demo") / "not" / "there yet")


@pytest.fixture(scope="module")
def channels(path):
    recording = edfio.read_edf(path)
    return {
        signal.label.removeprefix("EEG ").removesuffix("-REF"): signal.data
        for signal in recording.signals
    }


@pytest.fixture(scope="module")
def sites_uv(channels):
    """The nineteen sites against their average, shape (19, n_samples), microvolt."""
    field = np.stack([channels[name] for name in demo.DEMO_SITES])
    return field - field.mean(axis=0)


def banded(signal: np.ndarray, band: tuple[float, float]) -> np.ndarray:
    from scipy.signal import butter, sosfiltfilt

    return sosfiltfilt(butter(3, band, "bandpass", fs=SFREQ, output="sos"), signal, axis=-1)


def samples(onset: float, end: float) -> slice:
    return slice(int(onset * SFREQ), int(end * SFREQ))


def of_kind(kind: str) -> list[demo.DemoEvent]:
    return [event for event in demo.demo_truth() if event.kind == kind]


def test_the_file_is_edf_plus_without_a_person_and_says_that_it_is_invented(path):
    recording = edfio.read_edf(path)
    assert path.name == "workshop.edf"
    assert recording.reserved == "EDF+C"
    assert recording.local_patient_identification == "X X X X"
    assert "INVENTED" in recording.local_recording_identification
    assert recording.annotations[0].text == "Invented recording, nobody was measured"
    labels = [signal.label for signal in recording.signals]
    expected = [f"EEG {name}-REF" for name in (*demo.DEMO_SITES, "A1")]
    assert labels == [*expected, "ECG"]
    assert {signal.prefiltering for signal in recording.signals} == {"HP:0.3Hz LP:70Hz"}
    assert {signal.sampling_frequency for signal in recording.signals} == {256.0}
    assert recording.duration == 240.0


def test_mne_reads_the_file_with_its_notes(path):
    raw = mne.io.read_raw_edf(path, preload=False, verbose="error")
    assert raw.n_times == 240 * 256
    assert "Clench teeth" in set(raw.annotations.description)
    o1 = raw.get_data(["EEG O1-REF"])[0]
    assert 5e-6 < o1.std() < 100e-6


def test_the_bytes_are_the_same_every_time(path, tmp_path):
    assert demo.write_demo(tmp_path).read_bytes() == path.read_bytes()
    assert list(tmp_path.iterdir()) == [tmp_path / "workshop.edf"]


def test_a_folder_that_cannot_be_had_is_an_error_with_a_remedy(tmp_path):
    blocked = tmp_path / "file"
    blocked.write_text("in the way")
    with pytest.raises(OutputError, match=r"cannot be written.*folder that may be written"):
        demo.write_demo(blocked)


def test_importing_the_demonstration_loads_nothing_heavy():
    code = (
        "import sys, artifactlens.demo; "
        "print([name for name in ('scipy', 'mne', 'edfio', 'sklearn') if name in sys.modules])"
    )
    said = subprocess.run(
        [sys.executable, "-c", code], capture_output=True, text=True, check=True
    )
    assert said.stdout.strip() == "[]"


def test_the_truth_holds_every_kind_and_look_alikes_in_order():
    truth = demo.demo_truth()
    assert {event.kind for event in truth} == {*KIND_NAMES, "brain"}
    assert {event.what for event in of_kind("brain")} == set(BRAIN_BANDS)
    onsets = [event.onset for event in truth]
    assert onsets == sorted(onsets)
    assert min(onsets) >= 0
    assert max(event.onset + event.duration for event in truth) <= 240
    assert {site for event in truth for site in event.sites} <= {*demo.DEMO_SITES, "REF"}


@pytest.mark.parametrize(
    "event",
    [event for event in demo.demo_truth() if event.kind in ("eye", "muscle", "mains")],
    ids=lambda event: f"{event.what} at {event.onset:g} s",
)
def test_power_rises_at_the_sites_of_the_event(event, sites_uv):
    field = banded(sites_uv, BANDS[event.kind])
    rows = [demo.DEMO_SITES.index(site) for site in event.sites]
    inside = field[:, samples(event.onset, event.onset + event.duration)].std(axis=1)
    usual = np.median(np.abs(field), axis=1) / 0.6745
    assert np.all(inside[rows] > 1.8 * usual[rows])
    others = np.setdiff1d(np.arange(19), rows)
    assert inside[rows].min() > 1.5 * np.median(inside[others])


@pytest.mark.parametrize(
    "event", of_kind("brain"), ids=lambda event: f"{event.what} {event.onset:g}"
)
def test_brain_patterns_are_there_too(event, sites_uv):
    field = banded(sites_uv, BRAIN_BANDS[event.what])
    rows = [demo.DEMO_SITES.index(site) for site in event.sites]
    inside = field[:, samples(event.onset, event.onset + event.duration)].std(axis=1)
    usual = np.median(np.abs(field), axis=1) / 0.6745
    assert np.all(inside[rows] > 1.8 * usual[rows])


def test_blinks_deflect_down_and_gaze_splits_the_temporal_chains(channels):
    """Fp1/Fp2 positive in a blink; right gaze: Fp1-F7 > 0, Fp2-F8 < 0 (Lins et al. 1993)."""
    left = channels["Fp1"] - channels["F7"]
    right = channels["Fp2"] - channels["F8"]
    for event in of_kind("eye"):
        during = samples(event.onset + 0.08, event.onset + 0.2)
        before = samples(event.onset - 0.15, event.onset)
        moved = [float(row[during].mean() - row[before].mean()) for row in (left, right)]
        if event.what == "blink":
            assert min(moved) > 30
        elif event.what == "gaze to the right":
            assert moved[0] > 15
            assert moved[1] < -15
        elif event.what == "gaze to the left":
            assert moved[0] < -15
            assert moved[1] > 15


def test_pops_are_steps_of_their_own_electrode_only(channels):
    for event in of_kind("pop"):
        jump = {
            name: channels[name][int((event.onset + 0.045) * SFREQ)]
            - channels[name][int((event.onset - 0.01) * SFREQ)]
            for name in (*demo.DEMO_SITES, "A1")
        }
        if event.sites == ("P3",):
            others = np.array([jump[name] for name in jump if name != "P3"])
            assert abs(jump["P3"]) > 60
            assert abs(jump["P3"]) > 2 * np.abs(others).max()
        else:
            steps = np.array(list(jump.values()))
            assert event.sites == ("REF",)
            assert np.all(steps < -150)
            assert np.ptp(steps) < 80


def test_a_pop_decays_with_the_high_pass_of_the_header(channels):
    """0.3 Hz: tau 0.531 s (derived). The step of 420 uV at P3 stands alone for 2 s."""
    wave = channels["P3"] - (channels["C3"] + channels["Pz"] + channels["O1"]) / 3
    start = int((128.9 + 0.05) * SFREQ)
    early, late = (
        wave[start + int(s * SFREQ) : start + int((s + 0.25) * SFREQ)].mean()
        for s in (0, 0.531)
    )
    assert early / late == pytest.approx(np.e, rel=0.15)


def test_mains_is_at_its_site_while_the_lamp_is_on(sites_uv):
    (event,) = of_kind("mains")
    field = banded(sites_uv, (49.0, 51.0))
    row = demo.DEMO_SITES.index("T6")
    on = samples(event.onset + 1, event.onset + event.duration - 1)
    off = samples(10, 100)
    assert field[row, on].std() > 30 * field[row, off].std()
    assert (
        field[row, on].std() > 10 * np.delete(field[:, on], row, axis=0).std(axis=1).max()
    )


def test_the_heart_beats_at_a_resting_rate(channels):
    peaks = np.flatnonzero(np.diff((channels["ECG"] > 500).astype(int)) == 1)
    assert 60 < 60 * len(peaks) / 240 < 72


def test_another_recording_of_the_same_name_is_left_alone(tmp_path):
    mine = tmp_path / demo.DEMO_NAME
    mine.write_bytes(b"a real recording")
    with pytest.raises(OutputError, match="another file has it"):
        demo.write_demo(tmp_path)
    assert mine.read_bytes() == b"a real recording"
    assert list(tmp_path.iterdir()) == [mine]
