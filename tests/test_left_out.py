"""Heads that saw nothing of somebody, and the final check on the reserved people."""

from pathlib import Path
from types import SimpleNamespace

import numpy as np
import pytest
import sklearn.ensemble  # noqa: F401 - only libraries loaded by then obey one_thread
from rows import EYE, MAINS, MUSCLE, POP, examples, invented, table_of
from threadpoolctl import threadpool_limits

from artifactlens.curves import Curve, logistic
from artifactlens.features.catalogue import FEATURE_NAMES, MEASURED
from artifactlens.kinds import KIND_NAMES
from artifactlens.recording import Filters, from_array
from artifactlens.training import leaving_out, reserved
from artifactlens.training.compilation import Compiled
from artifactlens.training.corpora import backgrounds
from artifactlens.training.evaluation.baselines import (
    BlinkSeconds,
    blink_peak_seconds,
    muscle_zscore_seconds,
)
from artifactlens.training.examples import CLEAN, UNKNOWN
from artifactlens.training.fit import FittedHead
from artifactlens.training.gathering import RESERVED_PEOPLE, SEEDS, Gathered
from artifactlens.training.leaving_out import FOLDS, as_model, heads_without
from artifactlens.training.simulated import simulate


@pytest.fixture(scope="module", autouse=True)
def one_thread():
    """Small forests on a busy machine: threads that wait for each other take a minute."""
    with threadpool_limits(1):
        yield


# Heads without somebody ----------------------------------------------------------------


def gathered(people, *, setting=True, seconds=None, truth=None):
    """Rows of these people; ``setting`` says which may set operating points."""
    n = len(people)
    features = np.zeros((n, len(FEATURE_NAMES)), np.float32)
    features[:, FEATURE_NAMES.index("swing")] = np.arange(n)
    rows = examples(
        np.arange(n) % 2 if truth is None else truth, features=features,
        person=np.array(people), second=np.arange(n) if seconds is None else seconds,
    )  # fmt: skip
    return Gathered(rows, np.broadcast_to(np.asarray(setting), n))


@pytest.fixture
def watched(monkeypatch):
    """What heads are fitted from: rows, groups and held-out scores, nothing fitted."""
    seen = SimpleNamespace(folds=[], heads=[])

    def fit_folds(kind, rows, *, groups, folds):
        seen.folds.append((kind, rows, groups, folds))
        return SimpleNamespace(decision=lambda features, of: features[:, 0].astype(float))

    def fit_head(kind, rows, held_out):
        seen.heads.append((kind, rows, held_out))
        return f"head of {kind}"

    monkeypatch.setattr(leaving_out, "fit_folds", fit_folds)
    monkeypatch.setattr(leaving_out, "fit_head", fit_head)
    return seen


def test_heads_see_the_rows_that_they_may_see_and_no_others(watched):
    whole = gathered(["a", "b", "c", "a", "b", "c"])
    heads = heads_without(whole, whole.examples.person != "b", ("eye", "pop"))
    assert heads == {"eye": "head of eye", "pop": "head of pop"}
    for kind, rows, groups, folds in watched.folds:
        assert kind in heads
        assert rows.person.tolist() == groups.tolist() == ["a", "c", "a", "c"]
        assert folds == FOLDS
    for _, rows, held_out in watched.heads:
        np.testing.assert_array_equal(rows.features[:, 0], [0, 2, 3, 5])
        np.testing.assert_array_equal(held_out, [0, 2, 3, 5])


def test_only_rows_that_may_set_operating_points_have_a_held_out_score(watched):
    whole = gathered(["a", "b", "c", "a"], setting=[True, True, False, False])
    heads_without(whole, whole.examples.person != "b", ("eye",))
    ((_, _, held_out),) = watched.heads
    np.testing.assert_array_equal(held_out, [0, np.nan, np.nan])


def test_where_no_row_may_set_operating_points_all_do(watched):
    whole = gathered(["a", "b", "c", "a"], setting=[False, True, False, False])
    heads_without(whole, whole.examples.person != "b", ("eye",))
    ((_, _, held_out),) = watched.heads
    np.testing.assert_array_equal(held_out, [0, 2, 3])


def test_seconds_are_dealt_where_one_person_is_alone(watched):
    whole = gathered(["a", "a", "a", "b"], seconds=[4, 4, 5, 6])
    heads_without(whole, whole.examples.person == "a", ("eye",))
    ((_, _, groups, _),) = watched.folds
    np.testing.assert_array_equal(groups, [4, 4, 5])


def test_what_only_one_person_shows_is_not_known_without_them():
    # With "odd" small swings are artifact, with the others large ones.
    rng = np.random.default_rng(0)
    people = np.array(["odd", "b", "c", "d"])[np.arange(1600) % 4]
    swing = rng.normal(size=1600).astype(np.float32)
    truth = (np.where(people == "odd", -swing, swing) > 0).astype(int)
    whole = gathered(people, truth=truth)
    whole.examples.features[:, FEATURE_NAMES.index("swing")] = swing
    (head,) = heads_without(whole, people != "odd", ("eye",)).values()
    probability = head.probability(whole.examples.features)
    assert ((probability > 0.5) == (swing > 0)).mean() > 0.98
    (alone,) = heads_without(whole, people == "odd", ("eye",)).values()
    probability = alone.probability(whole.examples.features)
    assert ((probability > 0.5) == (swing < 0)).mean() > 0.95


def test_four_heads_make_a_model_in_the_order_of_the_kinds():
    column = MEASURED.index("swing")
    curve = Curve(np.array([10.0]), np.array([-2.0, 3.0]), 0.0)
    heads = {
        kind: FittedHead(
            kind, Compiled(number - 1.0, {FEATURE_NAMES.index("swing"): curve}),
            2.0, 0.5, 0.9, 0.4,
        )
        for number, kind in reversed(list(enumerate(KIND_NAMES)))
    }  # fmt: skip
    model = as_model(heads)
    assert [head.kind for head in model.heads] == list(KIND_NAMES)
    values = np.zeros((len(MEASURED), 1, 2))
    values[column] = [[5.0, 20.0]]
    table = table_of(values)
    by_hand = [[[0.5 + 2 * (k - 1 - 2), 0.5 + 2 * (k - 1 + 3)]] for k in range(4)]
    np.testing.assert_allclose(model.scores(table), by_hand)
    features = np.zeros((2, len(FEATURE_NAMES)))
    features[:, FEATURE_NAMES.index("swing")] = [5.0, 20.0]
    for number, kind in enumerate(KIND_NAMES):
        expected = logistic(np.array(by_hand[number][0]))
        np.testing.assert_allclose(heads[kind].probability(features), expected)
    with pytest.raises(KeyError, match="mains"):
        as_model({kind: heads[kind] for kind in KIND_NAMES[:3]})


# The reserved people -------------------------------------------------------------------


@pytest.fixture(scope="module")
def copy():
    return simulate(invented(seconds=24.0, seed=4), 5)


def test_methods_that_read_the_signal_say_of_every_row_what_they_say_of_its_second(
    monkeypatch, copy
):
    told = {}

    def muscle(recording, **given):
        told.update(given, muscle=recording)
        return np.arange(24) / 10

    def blinks(recording):
        told.update(blinks=recording)
        return BlinkSeconds(np.arange(24) % 3 == 0, 100.0 + np.arange(24))

    monkeypatch.setattr(reserved, "simulate", lambda background, seed: copy)
    monkeypatch.setattr(reserved, "muscle_zscore_seconds", muscle)
    monkeypatch.setattr(reserved, "blink_peak_seconds", blinks)
    found = reserved._copy(None, 0)
    second = copy.examples.second
    assert found.examples is copy.examples
    np.testing.assert_array_equal(found.muscle_z, second / 10)
    np.testing.assert_array_equal(found.blink_uv, 100.0 + second)
    np.testing.assert_array_equal(found.blink_found, second % 3 == 0)
    conditions = copy.measured.conditions
    assert told == {
        "muscle": copy.recording, "blinks": copy.recording,
        "low_pass": conditions.low_pass, "line_frequency": conditions.line_frequency,
    }  # fmt: skip


def test_the_methods_themselves_give_a_number_for_every_second_of_a_copy(copy):
    n_epochs = len(copy.measured.grid)
    z = muscle_zscore_seconds(copy.recording, low_pass=copy.measured.conditions.low_pass)
    blinks = blink_peak_seconds(copy.recording)
    assert z.shape == blinks.peak_uv.shape == blinks.found.shape == (n_epochs,)
    assert np.isfinite(z).all()
    assert np.isfinite(blinks.peak_uv).all()


def test_copies_of_the_reserved_people_alone_are_joined_row_by_row(monkeypatch, tmp_path):
    opened = []

    def open_recording(path):
        opened.append(Path(path))
        data = np.random.default_rng(0).normal(size=(2, 62 * 100))
        return from_array(data.astype(np.float32), 100.0, ["EEG Fp1", "EEG O1"])

    def one(background, seed):
        rows = examples(
            [CLEAN] * 2, person=[background.person] * 2, second=np.array([0, 0])
        )
        number = float(seed - SEEDS["reserved"])
        return reserved.Reserved(
            rows, np.full(2, number), np.full(2, -number), np.array([True, False])
        )

    for person in range(36):
        (tmp_path / f"Subject{person:02d}_1.edf").touch()
    monkeypatch.setattr(backgrounds, "open_recording", open_recording)
    monkeypatch.setattr(reserved, "_copy", one)
    found = reserved.reserved_copies(tmp_path, 1)
    people = [f"eegmat-{person}" for person in RESERVED_PEOPLE]
    assert [path.name for path in opened] == [f"Subject{p}_1.edf" for p in RESERVED_PEOPLE]
    n = 6 * reserved.COPIES
    assert len(found.examples) == len(found.muscle_z) == len(found.blink_found) == 2 * n
    assert set(found.examples.person) == set(people)
    assert len(np.unique(found.examples.second)) == n
    # Background by background, copy by copy, with what was found on them beside.
    numbers = [1000 * copy + k for k in range(6) for copy in range(reserved.COPIES)]
    np.testing.assert_array_equal(found.muscle_z[::2], numbers)
    np.testing.assert_array_equal(found.blink_uv, -found.muscle_z)
    np.testing.assert_array_equal(found.blink_found, [True, False] * n)
    np.testing.assert_array_equal(found.examples.person[::32], people)


@pytest.mark.parametrize("notch", [None, 50.0])
def test_recordings_as_distributed_are_clean_of_every_kind_that_can_be_judged(
    monkeypatch, tmp_path, notch
):
    opened = []

    def open_recording(path):
        opened.append(path.name)
        data = 10 * np.random.default_rng(len(opened)).normal(size=(5, 4 * 128))
        labels = [f"EEG {site}" for site in ("Fp1", "Fp2", "C3", "O1", "O2")]
        filters = [Filters(0.5, None, notch)] * 5
        return from_array(data.astype(np.float32), 128.0, labels, filters=filters)

    for person in (6, 7, 8, 30):
        for run in (1, 2):
            (tmp_path / f"Subject{person:02d}_{run}.edf").touch()
    monkeypatch.setattr(reserved, "open_recording", open_recording)
    found = reserved.as_distributed(tmp_path, range(7, 9))
    assert opened == [f"Subject0{person}_{run}.edf" for person in (7, 8) for run in (1, 2)]
    assert (found.truth[:, [EYE, MUSCLE, POP]] == CLEAN).all()
    assert (found.truth[:, MAINS] == (CLEAN if notch is None else UNKNOWN)).all()
    assert (found.strength == 0).all()
    assert set(found.person) == {"eegmat-07", "eegmat-08"}
    assert set(found.origin) == {"real: eegmat as distributed"}
    assert set(found.condition) == {f"Subject0{p}_{run}" for p in (7, 8) for run in (1, 2)}
    assert len(np.unique(found.second)) == 4 * 4
