"""Labelled rows, feature tables and backgrounds for the tests of training."""

from __future__ import annotations

import numpy as np
from scipy.signal import butter, sosfiltfilt
from signals import SITES

from artifactlens.features import FeatureTable
from artifactlens.features.catalogue import FEATURE_NAMES, MEASURED
from artifactlens.simulation import brain
from artifactlens.simulation.scene import Scene
from artifactlens.sites import site_position
from artifactlens.training.examples import UNKNOWN, Examples
from artifactlens.training.situation import Background

EYE, MUSCLE, POP, MAINS = range(4)


def examples(truth, *, kind=EYE, features=None, **columns):
    """Rows with this truth of one kind; everything else is plain or as given."""
    n = len(truth)
    known = np.full((n, 4), UNKNOWN, dtype=np.int8)
    known[:, kind] = truth
    values = {
        "features": np.zeros((n, len(FEATURE_NAMES)), np.float32)
        if features is None
        else np.asarray(features, np.float32),
        "truth": known,
        "person": np.full(n, "p"),
        "second": np.arange(n),
        "origin": np.full(n, "simulated: x"),
        "condition": np.full(n, ""),
        "strength": np.zeros((n, 4), np.float32),
        "look_alike": np.full(n, ""),
    }
    return Examples(**values | {name: np.asarray(value) for name, value in columns.items()})


def table_of(values):
    """A feature table of these measured values, (n_measured, n_epochs, n_sites)."""
    values = np.asarray(values, dtype=np.float32)
    n_epochs, n_sites = values.shape[1:]
    return FeatureTable(
        values=values,
        usual=np.zeros((len(MEASURED), n_sites), np.float32),
        segment=np.zeros(n_epochs, np.int64),
        pace=np.zeros((n_epochs, n_sites, 10), np.float16),
        step_at=np.zeros((n_epochs, n_sites), np.float16),
        front_at=np.zeros(n_epochs, np.float16),
    )


def same(one, other):
    """Whether two sets of examples are bit for bit alike."""
    return all(
        np.array_equal(
            getattr(one, name),
            getattr(other, name),
            equal_nan=getattr(one, name).dtype.kind == "f",
        )
        for name in Examples.__dataclass_fields__
    )


def invented(seconds=12.0, sfreq=200.0, *, kept_to_hz=45.0, seed=0, person="invented-00"):
    """A background of cortical sources; with ``kept_to_hz`` low-passed there (-40 dB at 60)."""
    places = np.array([site_position(name) for name in SITES])
    scene = Scene(places, round(seconds * sfreq), sfreq)
    rng = np.random.default_rng(seed)
    field = brain.background(scene, rng).potentials.astype(np.float64)
    field += 0.2 * rng.standard_normal(field.shape)
    if kept_to_hz is not None:
        field = sosfiltfilt(butter(8, kept_to_hz, fs=sfreq, output="sos"), field, axis=1)
    return Background(
        person=person, sites=SITES, potentials=field, sfreq=sfreq,
        reference_sites=("A1", "A2"), kept_to_hz=kept_to_hz,
        notch_hz=None if kept_to_hz is None else 50.0, origin="invented",
    )  # fmt: skip


def bare(sfreq=500.0, kept_to_hz=45.0, notch_hz=50.0, line_hz=None):
    """A background of no signal: what conditions are drawn for it."""
    return Background(
        "p", SITES, np.zeros((19, 0)), sfreq, ("A1", "A2"), kept_to_hz, notch_hz,
        "invented", line_hz=line_hz,
    )  # fmt: skip
