"""Evidence made by hand for the tests of the site verdicts: nothing wrong unless put in."""

from __future__ import annotations

import dataclasses

import numpy as np
from signals import SITES

from artifactlens.epochs import batches, epoch_grid
from artifactlens.frames import build_frame
from artifactlens.kinds import KIND_NAMES
from artifactlens.recording import from_array
from artifactlens.sitecare.evidence import COLUMNS, Evidence
from artifactlens.sitecare.placement import PlaceMoments
from artifactlens.sitecare.signs import SignKeeper, Signs, signs_of
from artifactlens.sites import site_position
from artifactlens.survey import Conditions

BANANA = (
    "Fp1-F7", "F7-T7", "T7-P7", "P7-O1", "Fp2-F8", "F8-T8", "T8-P8", "P8-O2",
    "Fp1-F3", "F3-C3", "C3-P3", "P3-O1", "Fp2-F4", "F4-C4", "C4-P4", "P4-O2",
    "Fz-Cz", "Cz-Pz",
)  # ACNS guideline 3 (2016)  # fmt: skip
REFERENTIAL = tuple(f"{site}-REF" for site in SITES)
FIELD_UV, REACH_M, OWN_UV = 20.0, 0.06, 1.0
"""Invented potentials: their size, how far they are alike, and each electrode's own noise."""

USUAL = {"swing": 60.0, "step": 5.0, "step_stays": 0.8, "fast_power": -10.0}
"""Of features; others are 0."""

CONDITIONS = Conditions(
    sampling_rate=200.0,
    high_pass=0.3,
    low_pass=100.0,
    low_pass_source="sampling rate",
    notch=None,
    notch_source="",
    line_frequency=50.0,
    line_found_db=20.0,
    amplitude_uv=20.0,
    average_reference=False,
)


def frame_of(labels=REFERENTIAL):
    return build_frame(labels, [None] * len(labels), None)


def places_of(frame):
    """Where each electrode is; the reference, which has no name, behind the vertex."""
    behind = (site_position("Cz") + site_position("Pz")) / 2
    return np.array(
        [behind if name is None else site_position(name) for name in frame.canonical]
    )


def field(frame):
    """Covariance of the electrodes' potentials by a smooth field and noise, uV^2."""
    places = places_of(frame)
    apart = np.linalg.norm(places[:, None] - places[None], axis=2)
    alike = np.exp(-((apart / REACH_M) ** 2) / 2)
    return FIELD_UV**2 * alike + OWN_UV**2 * np.eye(len(places))


def solved(frame, potentials):
    """Covariance of the solved sites, mean zero per chain, of that of the electrodes."""
    matrix = frame.matrix().astype(float) @ frame.incidence
    return matrix @ potentials @ matrix.T


def with_noise(frame, **uv):
    """The field, and noise of one electrode's own at each of the sites named."""
    potentials = field(frame)
    for site, size in uv.items():
        row = frame.sites.index(site)
        potentials[row, row] += size**2
    return solved(frame, potentials)


def evidence(frame=None, seconds=60, *, covariance=None, onset=None, **columns):
    """Evidence of so many seconds in which everything is as it should be.

    ``covariance`` (n_sites, n_sites) or one for each second; ``probability`` as a dict of
    kind to (n_epochs, n_sites) or a number; other columns by the names of ``Signs`` and
    ``Evidence``, anything that numpy can broadcast to their shape.
    """
    frame = frame or frame_of()
    onset = np.arange(float(seconds)) if onset is None else np.asarray(onset, dtype=float)
    n, n_sites, n_channels = len(onset), len(frame.sites), len(frame.channels)
    covariance = solved(frame, field(frame)) if covariance is None else covariance

    def column(name, usual, shape, dtype):
        value = columns.pop(name, usual)
        return np.broadcast_to(np.asarray(value, dtype=dtype), shape).copy()

    at_sites, at_channels = (n, n_sites), (n, n_channels)
    ok = column("ok", True, at_sites, bool)
    signs = Signs(
        ok=ok,
        flat=column("flat", False, at_channels, bool),
        missing=column("missing", False, at_channels, bool),
        clipped=column("clipped", False, at_channels, bool),
        level=column("level", 0.0, (n, 2, n_sites), np.float32),
        hum=column("hum", 0.0, at_sites, np.complex64),
    )
    each = np.broadcast_to(covariance, (n, n_sites, n_sites)).astype(np.float32)
    there = ok[:, :, None] & ok[:, None]
    keeper = SignKeeper(n, n_sites)
    no_places = np.zeros((n_sites, n_sites))
    keeper.add(onset, signs, np.where(there, each, 0), PlaceMoments(no_places, no_places))
    judged = {kind: 0.0 for kind in KIND_NAMES} | columns.pop("probability", {})
    kinds = [np.broadcast_to(judged[kind], at_sites) for kind in KIND_NAMES]
    made = Evidence(
        frame=frame,
        log=keeper.log(),
        probability=np.array(kinds, dtype=np.float32),
        doubtful=np.full(len(KIND_NAMES), 0.4),
        sure=np.full(len(KIND_NAMES), 0.8),
        pops=tuple(columns.pop("pops", ())),
        **{
            name: column(name, USUAL.get(name, 0.0), at_sites, np.float32)
            for name in COLUMNS
        },
        line_frequency=columns.pop("line_frequency", 50.0),
    )
    assert not columns, columns
    return made


def marks(frame, n_epochs, sites, when=slice(None), value=0.9):
    """Probability of a kind, (n_epochs, n_sites): zero but at these sites then."""
    found = np.zeros((n_epochs, len(frame.sites)), dtype=np.float32)
    for site in sites:
        found[when, frame.sites.index(site)] = value
    return found


def measured(channels, labels=REFERENTIAL, *, batch_epochs=32, sfreq=200.0, **columns):
    """Evidence whose log is measured on channels, (n_channels, n_samples) microvolt."""
    recording = from_array(channels, sfreq, labels)
    frame = frame_of(labels)
    grid = epoch_grid(recording)
    keeper = SignKeeper(len(grid), len(frame.sites))
    conditions = dataclasses.replace(CONDITIONS, sampling_rate=sfreq)
    swings = []
    for batch in batches(recording, frame, grid, batch_epochs):
        onset = grid.onset[batch.first : batch.first + len(batch)]
        keeper.add(onset, *signs_of(batch, frame, conditions))
        swings.append(np.ptp(batch.windows(batch.starts[1:-1], batch.n_samples), axis=2).T)
    usual = evidence(frame, onset=grid.onset, swing=np.concatenate(swings), **columns)
    return dataclasses.replace(usual, log=keeper.log())


def gist(findings, evidence):
    """What of findings does not hang on the order of sites: for comparison of two runs."""
    return sorted(
        (
            found.cause,
            found.sign,
            tuple(sorted(evidence.frame.sites[row] for row in found.rows)),
            tuple(found.held.tolist()),
            found.plain,
        )
        for found in findings
    )


def named(findings, evidence):
    """(cause, sign, sites) of each finding, in order."""
    return [
        (found.cause, found.sign, tuple(evidence.frame.sites[row] for row in found.rows))
        for found in findings
    ]


def one(findings):
    (only,) = findings
    return only
