"""What simpler or well-known methods make of the same cells and the same seconds.

Cell by cell: a fixed peak-to-peak limit, a logistic regression and a forest with all
interactions, on the features that the kind's head sees. Second by second, from the signal:
two functions of MNE-Python (Gramfort et al. 2013, doi:10.3389/fnins.2013.00267).
"""

from __future__ import annotations

from collections.abc import Callable
from typing import TYPE_CHECKING, NamedTuple

import numpy as np
from numpy.typing import NDArray

from artifactlens.epochs import FLAT_UV, EpochGrid, epoch_grid
from artifactlens.features.catalogue import FEATURE_NAMES
from artifactlens.frames import build_frame
from artifactlens.kinds import KIND_NAMES
from artifactlens.sites import parse_label
from artifactlens.training.examples import Examples
from artifactlens.training.fit import HEAD_FEATURES, fit_forest

if TYPE_CHECKING:
    import mne

    from artifactlens.recording import Recording

Array = NDArray[np.float64]

Scorer = Callable[[NDArray[np.floating]], Array]
"""From rows in the order of ``FEATURE_NAMES``, (n_rows, n_features), to (n_rows,) scores."""

SWING_LIMIT_UV = 100.0
"""Peak-to-peak from which an epoch is often rejected (common practice)."""

MOST_CELLS = 200_000

MUSCLE_BAND_HZ = (110.0, 140.0)
"""Default of ``annotate_muscle_zscore``, after Muthukumaraswamy 2013."""
LOW_MUSCLE_HZ = 30.0
NARROWEST_BAND_HZ = 5.0
LEAST_SECONDS = 20
"""The filters of both functions are up to 20 s long (10 s made a power of two) and must fit
into the recording."""

FOREHEAD = (
    {"Fp1", "Fpz", "Fp2"},
    {"AF7", "AF3", "AFz", "AF4", "AF8"},
    {"F7", "F3", "Fz", "F4", "F8"},
)
"""Where blinks are looked for: the first of these groups that the recording has."""


class BlinkSeconds(NamedTuple):
    """Per epoch, shape (n_epochs,).

    ``found`` is true where ``find_eog_events`` puts an event; ``peak_uv`` is the largest
    absolute value of the same 1-10 Hz trace, over the same channels, NaN where the method
    cannot be applied.
    """

    found: NDArray[np.bool_]
    peak_uv: Array


def swing_of(features: NDArray[np.floating]) -> Array:
    """Peak-to-peak swing of every cell, microvolt; mark from ``SWING_LIMIT_UV`` on."""
    return np.asarray(features[:, FEATURE_NAMES.index("swing")], dtype=np.float64)


def fit_logistic(
    kind: str, training: Examples, *, most: int = MOST_CELLS, seed: int = 0
) -> Scorer:
    """Logistic regression on the features that the kind's head sees.

    Missing values become the feature's median and an indicator of its own; all columns are
    standardised; L2 penalty with C = 1 (the library's default). Cells beyond ``most`` are
    left out by a seeded choice.

    Parameters
    ----------
    kind : str
    training : Examples
        With present and clean cells of the kind.
    most, seed : int

    Returns
    -------
    Scorer
        Log-odds.
    """
    from sklearn.impute import SimpleImputer
    from sklearn.linear_model import LogisticRegression
    from sklearn.pipeline import make_pipeline
    from sklearn.preprocessing import StandardScaler

    columns = np.array([FEATURE_NAMES.index(name) for name in HEAD_FEATURES[kind]])
    truth = training.truth[:, KIND_NAMES.index(kind)]
    rows = np.flatnonzero(truth >= 0)
    if len(rows) > most:
        rows = np.sort(np.random.default_rng(seed).choice(rows, most, replace=False))
    pipeline = make_pipeline(
        SimpleImputer(strategy="median", add_indicator=True, keep_empty_features=True),
        StandardScaler(),
        LogisticRegression(max_iter=2000),
    )
    pipeline.fit(training.features[np.ix_(rows, columns)].astype(np.float64), truth[rows])

    def score(features: NDArray[np.floating]) -> Array:
        return np.asarray(
            pipeline.decision_function(features[:, columns].astype(np.float64))
        )

    return score


def fit_interactions(kind: str, training: Examples, *, seed: int = 0) -> Scorer:
    """Forest whose trees may use several features; returns its log-odds, not calibrated."""
    forest, columns = fit_forest(kind, training, interactions=True, seed=seed)

    def score(features: NDArray[np.floating]) -> Array:
        return np.asarray(forest.decision_function(features[:, columns].astype(np.float64)))

    return score


def muscle_band(sampling_rate: float, low_pass: float | None) -> tuple[float, float] | None:
    """Band for the muscle z-score that sampling rate and low-pass leave, or None.

    110-140 Hz where it is carried, else from 30 Hz to the lower of 0.45 times the sampling
    rate and the low-pass, if that is at least 5 Hz wide.
    """
    top = min(0.45 * sampling_rate, np.inf if low_pass is None else low_pass)
    if top >= MUSCLE_BAND_HZ[1]:
        return MUSCLE_BAND_HZ
    return (LOW_MUSCLE_HZ, top) if top >= LOW_MUSCLE_HZ + NARROWEST_BAND_HZ else None


def muscle_zscore_seconds(
    recording: Recording,
    *,
    low_pass: float | None = None,
    line_frequency: float | None = None,
) -> Array:
    """Highest muscle z-score of every second, shape (n_epochs,), the same for all sites.

    The trace is that of ``mne.preprocessing.annotate_muscle_zscore``: band-pass, envelope,
    z-score per channel over the recording, sum over channels by the root of their number,
    low-pass at 4 Hz. Segments are run through as stored, one behind the other.

    Parameters
    ----------
    recording : Recording
    low_pass : float, optional
        Hertz, where the recorder's band ends; what the header states if not given.
    line_frequency : float, optional
        Taken out with its harmonics before, as one does for this method; hertz.

    Returns
    -------
    array, shape (n_epochs,)
        On the grid of ``epochs.epoch_grid``. NaN where no channel has a signal, and
        everywhere if the band is not carried or there are fewer than 20 s.
    """
    from mne.preprocessing import annotate_muscle_zscore

    if low_pass is None:
        stated = [entry.low_pass for entry in recording.filters if entry.low_pass]
        low_pass = min(stated, default=None)
    rate = recording.sampling_rate
    band = muscle_band(rate, low_pass)
    frame = build_frame(recording.labels, recording.types, recording.positions)
    data, missing = _signals(recording, frame.channels)
    if band is None or not len(data):
        return np.full(len(missing), np.nan)
    raw = _raw(data, rate)
    if line_frequency is not None:
        lines = np.arange(line_frequency, 0.49 * rate, line_frequency)
        if len(lines):
            raw.notch_filter(lines, verbose="error")
    _, trace = annotate_muscle_zscore(raw, ch_type="eeg", filter_freq=band, verbose="error")
    return _highest_per_epoch(recording, trace, missing)


def blink_peak_seconds(recording: Recording) -> BlinkSeconds:
    """Seconds in which ``mne.preprocessing.find_eog_events`` finds a blink at the forehead.

    Default settings: 1-10 Hz, the strongest of the given channels, peaks that stand out by
    a quarter of the trace's range over the recording. Where the forehead has no site, or
    there are fewer than 20 s, nothing is found and the peaks are NaN.

    Parameters
    ----------
    recording : Recording
        Derivations count by their first input.
    """
    from mne.filter import filter_data
    from mne.preprocessing import find_eog_events

    rate = recording.sampling_rate
    data, missing = _signals(recording, _forehead(recording))
    if not len(data):
        nothing = np.full(len(missing), np.nan)
        return BlinkSeconds(np.zeros(len(missing), dtype=bool), nothing)
    raw = _raw(data, rate)
    events = find_eog_events(raw, ch_name=raw.ch_names, verbose="error")[:, 0]
    grid = epoch_grid(recording)
    owner = np.searchsorted(grid.start, events, side="right") - 1
    inside = (owner >= 0) & (events < grid.start[owner] + grid.n_samples)
    found = np.zeros(len(grid), dtype=bool)
    found[owner[inside]] = True
    # The trace in which find_eog_events looks for its peaks.
    trace = filter_data(
        data, rate, 1, 10, filter_length="10s", l_trans_bandwidth=0.5, h_trans_bandwidth=0.5,
        phase="zero-double", fir_window="hann", fir_design="firwin2", verbose="error",
    )  # fmt: skip
    peak = _highest_per_epoch(recording, np.abs(trace).max(axis=0), missing)
    return BlinkSeconds(found & ~missing, peak)


def _forehead(recording: Recording) -> NDArray[np.intp]:
    names = [parse_label(label).canonical for label in recording.labels]
    for group in FOREHEAD:
        rows = np.flatnonzero([name in group for name in names])
        if len(rows):
            return rows
    return np.zeros(0, dtype=np.intp)


def _signals(
    recording: Recording, channels: NDArray[np.intp]
) -> tuple[Array, NDArray[np.bool_]]:
    """Channels with a signal, (n_channels, n_samples) microvolt, and lost epochs.

    An epoch is lost if all channels lack a sample at once. Missing samples are set to the
    channel's median. No channel is given back where the recording is too short for the
    filters.
    """
    grid = epoch_grid(recording)
    data = recording.read(0, recording.n_samples)[channels].astype(np.float64)
    absent = ~np.isfinite(data)
    alive = (~absent).any(axis=1)
    data, absent = data[alive], absent[alive]
    data = data - np.nanmedian(np.where(absent, np.nan, data), axis=1, keepdims=True)
    data[absent] = 0.0
    moving = np.ptp(data, axis=1) >= FLAT_UV
    data, absent = data[moving], absent[moving]
    missing = np.asarray(absent.all(axis=0)[_samples_of(grid)].any(axis=1), dtype=bool)
    if recording.n_samples < LEAST_SECONDS * recording.sampling_rate:
        data = data[:0]
    return data, missing


def _raw(data_uv: Array, rate: float) -> mne.io.BaseRaw:
    """Without the file's labels: they may repeat, and take no part."""
    import mne

    info = mne.create_info([f"E{row}" for row in range(len(data_uv))], rate, "eeg")
    return mne.io.RawArray(1e-6 * data_uv, info, verbose="error")


def _highest_per_epoch(
    recording: Recording, trace: Array, missing: NDArray[np.bool_]
) -> Array:
    grid = epoch_grid(recording)
    return np.where(missing, np.nan, trace[_samples_of(grid)].max(axis=1))


def _samples_of(grid: EpochGrid) -> NDArray[np.int64]:
    """Indices of the samples of every epoch, shape (n_epochs, n_samples)."""
    return grid.start[:, None] + np.arange(grid.n_samples)
