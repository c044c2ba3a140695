"""What a model learns from: whose recordings, which seeds, and which rows set its limits."""

from pathlib import Path

import joblib
import numpy as np
import pytest
from rows import EYE, MAINS, MUSCLE, POP, examples, invented, same

from artifactlens.errors import LabelsError, RecordingError
from artifactlens.recording import from_array
from artifactlens.training import gathering, reserved
from artifactlens.training.corpora import backgrounds
from artifactlens.training.corpora.labelled import Label, LabelledRecording
from artifactlens.training.corpora.readers import READERS
from artifactlens.training.examples import CLEAN, PRESENT, UNKNOWN, Examples
from artifactlens.training.gathering import (
    AT_HAND,
    FIXED_BY_NOBODY,
    NEVER_LEARNT,
    RESERVED_PEOPLE,
    SEEDS,
    TRAINING_PEOPLE,
    copies,
    folders,
    gather,
)

ROOT = Path(__file__).resolve().parents[1]
RATE = 100.0


class Opened:
    """Stands for open_recording: remembers what was asked for, gives invented signal."""

    def __init__(self):
        self.paths = []

    def __call__(self, path):
        self.paths.append(Path(path))
        data = np.random.default_rng(0).normal(size=(3, int(62 * RATE)))
        return from_array(data.astype(np.float32), RATE, ["EEG Fp1", "EEG C3", "EEG O1"])


class Simulating:
    """Stands for simulate: remembers seeds and kinds, gives one row a copy."""

    def __init__(self):
        self.calls = []

    def __call__(self, background, seed, kinds=("eye", "muscle", "pop", "mains")):
        self.calls.append((background.origin, seed, kinds))
        made = examples(
            [CLEAN], person=[background.person], origin=[f"simulated: {background.origin}"]
        )
        return type("Copy", (), {"examples": made})


@pytest.fixture
def root(tmp_path):
    """The corpora at hand and kept for checks, as far as names of files go."""
    for name in (*AT_HAND, *NEVER_LEARNT):
        (tmp_path / name).mkdir()
    for person in range(36):
        for run in (1, 2):
            (tmp_path / "eegmat" / f"Subject{person:02d}_{run}.edf").touch()
    (tmp_path / "eegmmidb_s001" / "S001R01.edf").touch()
    (tmp_path / "clinical_absence" / "absence.edf").touch()
    return tmp_path


@pytest.fixture
def stubbed(monkeypatch):
    """Nothing is read or simulated; what is asked for is remembered."""
    opened, simulating = Opened(), Simulating()
    monkeypatch.setattr(backgrounds, "open_recording", opened)
    monkeypatch.setattr(gathering, "READERS", dict.fromkeys(READERS, lambda folder: []))
    monkeypatch.setattr(gathering, "simulate", simulating)
    return opened, simulating


def labelled(person, corpus="bids", seconds=4):
    """A recording with eyes present in its first second and clean from its third on."""

    def make():
        data = np.random.default_rng(1).normal(size=(5, int(seconds * RATE)))
        labels = ["Fp1-REF", "Fp2-REF", "C3-REF", "O1-REF", "O2-REF"]
        return from_array(data.astype(np.float32) * 10, RATE, labels)

    labels = (
        Label("eye", 0.0, 1.0, ("Fp1", "Fp2"), "present", "eye"),
        Label("eye", 2.0, float(seconds), (), "clean", "clean"),
    )
    return LabelledRecording(corpus, person, "one", make, labels, 50.0)


# Which folders -------------------------------------------------------------------------


def test_the_corpora_at_hand_lie_in_one_folder(tmp_path):
    assert folders(tmp_path, []) == {name: tmp_path / name for name in AT_HAND}
    assert set(AT_HAND) <= set(READERS)


def test_another_corpus_is_added_and_another_place_is_taken(tmp_path):
    found = folders(tmp_path, ["bids=some where/my=data", "eegmat=/elsewhere"])
    assert found["bids"] == Path("some where/my=data")
    assert found["eegmat"] == Path("/elsewhere")
    assert set(found) == {*AT_HAND, "bids"}


@pytest.mark.parametrize(
    "entry", ["bids", "bids=", "=path", "", "sleep=there", "BIDS=there", "a/path"]
)
def test_what_is_no_name_and_path_is_refused_with_the_names_that_are(tmp_path, entry):
    with pytest.raises(LabelsError, match="NAME=PATH") as raised:
        folders(tmp_path, [entry])
    assert f"given was {entry!r}" in str(raised.value)
    assert "bids" in str(raised.value)
    assert "data_cards/" in raised.value.remedy


@pytest.mark.parametrize("name", NEVER_LEARNT)
def test_a_corpus_kept_for_checks_is_refused_and_not_offered(tmp_path, name):
    assert name in READERS
    with pytest.raises(LabelsError) as raised:
        folders(tmp_path, [f"{name}=there"])
    assert name not in str(raised.value).partition("given was")[0]


# Whose recordings ----------------------------------------------------------------------


def test_nobody_is_both_learnt_from_and_reserved():
    assert set(TRAINING_PEOPLE).isdisjoint(RESERVED_PEOPLE)
    assert {*TRAINING_PEOPLE, *RESERVED_PEOPLE} == set(range(36))
    assert list(RESERVED_PEOPLE) == [30, 31, 32, 33, 34, 35]


def test_reserved_people_are_not_opened(stubbed, root):
    opened, _ = stubbed
    gather(folders(root, []), 1)
    subjects = {path.name[:9] for path in opened.paths if path.parent.name == "eegmat"}
    assert subjects == {f"Subject{person:02d}" for person in TRAINING_PEOPLE}
    assert {path.parent.name for path in opened.paths} == {"eegmat", "eegmmidb_s001"}


def test_only_the_final_check_knows_of_the_reserved_people():
    files = [
        *(ROOT / "scripts").glob("*.py"),
        *(Path(gathering.__file__).parent).rglob("*.py"),
    ]
    texts = {path.name: path.read_text(encoding="utf-8") for path in files}
    users = {name for name, text in texts.items() if "RESERVED_PEOPLE" in text}
    assert users == {"gathering.py", "reserved.py", "evaluate.py"}
    # Who reads backgrounds of eegmat names its people.
    makers = {name for name, text in texts.items() if "mental_arithmetic(" in text}
    assert makers == {"backgrounds.py", "gathering.py", "reserved.py"}
    assert "mental_arithmetic(folder, RESERVED_PEOPLE)" in texts["reserved.py"]
    assert "mental_arithmetic(eegmat, TRAINING_PEOPLE)" in texts["gathering.py"]
    assert "RESERVED_PEOPLE" not in texts["gathering.py"].partition("def folders")[2]


def test_labels_of_eegmat_are_not_learnt_and_those_of_the_others_are(
    monkeypatch, stubbed, root
):
    asked = []

    def reader(name):
        def read(folder):
            asked.append((name, folder))
            return []

        return read

    monkeypatch.setattr(gathering, "READERS", {name: reader(name) for name in READERS})
    gather(folders(root, [f"bids={root}"]), 1)
    assert asked == [
        *((name, root / name) for name in AT_HAND if name != "eegmat"), ("bids", root),
    ]  # fmt: skip


def test_real_labels_are_learnt_with_their_own_person(monkeypatch, stubbed, root):
    (root / "ward").mkdir()
    readers = dict.fromkeys(READERS, lambda folder: [])
    readers["bids"] = lambda folder: [labelled("ward-sub-01"), labelled("ward-sub-02")]
    monkeypatch.setattr(gathering, "READERS", readers)
    made = gather(folders(root, [f"bids={root / 'ward'}"]), 1)
    own = made.examples.subset(np.char.startswith(made.examples.origin, "real"))
    assert set(own.person) == {"ward-sub-01", "ward-sub-02"}
    assert set(own.origin) == {"real: bids"}
    one = own.subset(own.person == "ward-sub-01")
    # The reference, of which no label says anything, has no rows.
    assert len(one) == 4 * 5
    assert (one.truth[:, EYE] == PRESENT).sum() == 2
    assert (one.truth[:, EYE] == CLEAN).sum() == 2 * 5
    assert (one.truth[:, [MUSCLE, POP, MAINS]] == UNKNOWN).all()
    # A second is somebody's own.
    assert set(own.second).isdisjoint(
        made.examples.second[np.char.startswith(made.examples.origin, "simulated")]
    )


def test_a_folder_of_own_recordings_takes_part(write_edf, stubbed, root, monkeypatch):
    monkeypatch.setitem(gathering.READERS, "bids", READERS["bids"])
    home = root / "my-recordings" / "sub-07" / "eeg"
    home.mkdir(parents=True)
    data = 10 * np.random.default_rng(2).normal(size=(5, 8 * 128))
    names = [f"EEG {site}-REF" for site in ("Fp1", "Fp2", "C3", "O1", "O2")]
    write_edf(home / "sub-07_task-rest_eeg.edf", data, 128.0, names)
    (home / "sub-07_task-rest_events.tsv").write_text(
        "onset\tduration\ttrial_type\tchannel\n1.0\t1.0\tpop\tC3\n3.0\t4.0\tclean\tn/a\n",
        encoding="utf-8",
    )
    made = gather(folders(root, [f"bids={root / 'my-recordings'}"]), 1)
    own = made.examples.person == "my-recordings-sub-07"
    rows = made.examples.subset(own)
    assert made.setting[own].all()
    assert (rows.truth[:, POP] == PRESENT).sum() == 1
    assert (rows.truth[:, EYE] == CLEAN).sum() == 4 * 5
    assert set(made.examples.person[~own]) == {
        *(f"eegmat-{person:02d}" for person in TRAINING_PEOPLE), "eegmmidb-001",
    }  # fmt: skip


@pytest.mark.parametrize("name", AT_HAND)
def test_an_absent_corpus_is_named(stubbed, root, name):
    with pytest.raises(RecordingError, match=name):
        gather(folders(root, [f"{name}={root / 'nowhere'}"]), 1)


# Which rows set calibration and operating points -----------------------------------------


def test_labels_of_a_machine_or_an_instruction_teach_but_set_nothing(
    monkeypatch, stubbed, root
):
    readers = dict.fromkeys(READERS, lambda folder: [])
    for name in (*FIXED_BY_NOBODY, "bids", "tuh_events"):
        readers[name] = lambda folder, name=name: [labelled(f"{name}-1", corpus=name)]
    monkeypatch.setattr(gathering, "READERS", readers)
    made = gather(folders(root, [f"bids={root}", f"tuh_events={root}"]), 1)
    setting = {
        str(origin): set(made.setting[made.examples.origin == origin].tolist())
        for origin in np.unique(made.examples.origin)
    }
    assert setting == {
        "simulated: eegmat": {True},
        "simulated: eegmmidb_s001": {False},
        "real: eegmmidb_s001": {False},
        "real: gestures_one_person": {False},
        "real: bids": {True},
        "real: tuh_events": {True},
    }
    assert len(made.setting) == len(made.examples)


# Copies and seeds ----------------------------------------------------------------------


@pytest.mark.parametrize("backend", ["threading", "loky"])
def test_copies_do_not_depend_on_the_number_of_workers(backend):
    people = [invented(seconds=8.0, seed=k, person=f"invented-{k:02d}") for k in (0, 1)]
    alone = copies(people, 2, 500, 1, kinds=("pop", "mains"))
    with joblib.parallel_config(backend=backend):
        together = copies(people, 2, 500, 2, kinds=("pop", "mains"))
    assert isinstance(together, Examples)
    assert same(alone, together)
    assert len(np.unique(alone.second)) == 2 * 2 * 8
    assert (alone.truth[:, [EYE, MUSCLE]] == UNKNOWN).all()


def test_imagery_gets_no_eyes_and_no_muscle_put_in(stubbed, root):
    _, simulating = stubbed
    gather(folders(root, []), 1)
    kinds = {origin: kinds for origin, _, kinds in simulating.calls}
    assert kinds["eegmmidb_s001"] == ("pop", "mains")
    assert kinds["eegmat"] == ("eye", "muscle", "pop", "mains")


def test_seeds_of_any_two_copies_differ_the_final_ones_included(stubbed, root, monkeypatch):
    _, simulating = stubbed
    gather(folders(root, []), 1)
    learnt = [seed for _, seed, _ in simulating.calls]
    # 30 people of two recordings of 62 s, 8 copies of each; one recording, 2 copies.
    assert len(learnt) == 30 * 2 * gathering.COPIES + gathering.IMAGERY_COPIES
    final = []

    def remember(background, seed):
        final.append(seed)
        row = examples([CLEAN], person=[background.person])
        return reserved.Reserved(row, np.zeros(1), np.zeros(1), np.zeros(1, bool))

    monkeypatch.setattr(reserved, "_copy", remember)
    reserved.reserved_copies(root / "eegmat", 1)
    assert len(final) == 6 * 2 * reserved.COPIES
    assert len({*learnt, *final}) == len(learnt) + len(final)


def test_a_thousand_backgrounds_and_all_copies_fit_between_two_first_seeds():
    first = sorted(SEEDS.values())
    most = max(gathering.COPIES, gathering.IMAGERY_COPIES, reserved.COPIES)
    assert np.diff(first).min() > 1000 * most


# With the recordings -------------------------------------------------------------------


@pytest.mark.corpora
def test_gathering_opens_no_reserved_recording_of_the_corpora(
    monkeypatch, stubbed, corpora
):
    opened, _ = stubbed
    gather(folders(corpora, []), 1)
    assert opened.paths
    assert all(path.is_file() for path in opened.paths)
    taken = {path.name[:9] for path in opened.paths}
    assert not taken & {f"Subject{person}" for person in RESERVED_PEOPLE}
    assert not {path.parent.name for path in opened.paths} & set(NEVER_LEARNT)
