"""The features of a recording, measured a batch of epochs at a time.

``catalogue.FEATURES`` is the one literal list of what is measured. *Measured*
features come from :func:`measure`; *against usual* features compare a measured one with
the site's own usual value over the recording and are derived when the whole table is known.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from artifactlens.epochs import median_of_known
from artifactlens.features import amplitude, spatial, spectral
from artifactlens.features.catalogue import BY_NAME, IN_MICROVOLT, MEASURED

if TYPE_CHECKING:
    from artifactlens.epochs import EpochBatch
    from artifactlens.frames import Frame
    from artifactlens.survey import Conditions

Array = NDArray[np.float32]


@dataclass(frozen=True, slots=True)
class Measures:
    """What one batch yields.

    ``values`` float32 (n_measured, n_epochs, n_sites) in the order of ``MEASURED``;
    ``pace`` float16 (n_epochs, n_sites, 10) mean step in tenths of a second, microvolt;
    ``step_at`` float16 (n_epochs, n_sites) and ``front_at`` float16 (n_epochs,) the place
    within the epoch, 0..1.
    """

    values: Array
    pace: NDArray[np.float16]
    step_at: NDArray[np.float16]
    front_at: NDArray[np.float16]


def measure(
    batch: EpochBatch, frame: Frame, leads: spatial.EyeLeads, conditions: Conditions
) -> Measures:
    """All measured features of a batch; NaN where a site or the band is not there."""
    neighbours = frame.neighbours.astype(np.float32)
    ok = batch.ok[:, 1:-1]
    found: dict[str, Array] = {"swing": amplitude.swing(batch)}

    steps = amplitude.fastest_steps(batch, neighbours)
    size = np.abs(steps.size)
    found["step"] = size
    mean_step = steps.pace.mean(axis=2)
    small = amplitude.SMALL_UV
    found["step_crest"] = 20 * np.log10((size + small) / (mean_step + small))
    found["step_alone"] = 20 * np.log10((size + small) / (steps.elsewhere + small))
    found["step_stays"] = steps.retention
    found["burst"] = steps.pace.max(axis=2)
    middle = np.median(steps.pace, axis=2)
    found["burst_even"] = 20 * np.log10((middle + small) / (found["burst"] + small))

    psd, freqs = spectral.epoch_spectra(batch)
    found |= _spectral(psd, freqs, ok, frame, conditions)
    found["fast_alone"] = found["fast_power"] - _neighbour_mean(
        found["fast_power"], ok, neighbours
    )
    fast = np.where(ok, found["fast_power"], np.float32(np.nan))
    found["fast_lead"] = found["fast_power"] - median_of_known(fast)

    slow = spatial.slow_traces(batch)
    covariance = spatial.field_covariance(slow)
    found["spread"] = spatial.field_spread(covariance)
    found["isolation"] = spatial.isolation(covariance, neighbours)
    polarity = spatial.frontal_polarity(slow, batch.ok, leads)
    found["eye_reach"] = polarity.reach
    found["eye_part"] = polarity.part
    found["eye_agree"] = polarity.agree
    found["eye_swing"] = polarity.swing
    front_size = np.fmax(np.abs(polarity.vertical), np.abs(polarity.lateral))
    for name, per_epoch in (
        ("front_vertical", polarity.vertical),
        ("front_lateral", polarity.lateral),
        ("front_rhythm", polarity.rhythm),
        ("front_swing", polarity.front_swing),
        ("side_swing", polarity.side_swing),
        ("eye_match", polarity.match),
        ("eye_span", polarity.span),
        ("front_size", front_size),
    ):
        found[name] = np.broadcast_to(per_epoch, ok.shape)

    values = np.stack(
        [np.where(ok, found[name], np.float32(np.nan)).T for name in MEASURED]
    )
    return Measures(
        values=values,
        pace=np.minimum(steps.pace, 60000).transpose(1, 0, 2).astype(np.float16),
        step_at=(steps.at.T / batch.n_samples).astype(np.float16),
        front_at=polarity.at.astype(np.float16),
    )


def _spectral(
    psd: Array,
    freqs: NDArray[np.float64],
    ok: NDArray[np.bool_],
    frame: Frame,
    conditions: Conditions,
) -> dict[str, Array]:
    usable = 0.95 * conditions.low_pass
    line = conditions.line_frequency
    nothing = np.full(psd.shape[:2], np.nan, dtype=np.float32)
    harmonics = tuple(line * k for k in range(1, 4))
    found = {
        "slow_power": spectral.band_density(psd, freqs, 2, 4),
        "beta_power": spectral.band_density(psd, freqs, 18, 30, usable=usable),
        "fast_power": spectral.band_density(psd, freqs, 30, 45, usable=usable),
        "high_power": spectral.band_density(
            psd, freqs, *spectral.HIGH_BAND_HZ, without=harmonics, usable=usable
        ),
        "slope": spectral.spectral_slope(psd, freqs, usable=usable),
        "beta_peak": spectral.peakedness(psd, freqs, 12, min(30, usable)),
    }
    found["fast_share"] = spectral.band_density(
        psd, freqs, 18, min(45, usable)
    ) - spectral.band_density(psd, freqs, 2, 14)
    found["fast_over_beta"] = found["fast_power"] - found["beta_power"]
    found["high_over_fast"] = found["high_power"] - found["fast_power"]
    for name in ("mains_ratio", "mains_size", "mains_harmonic"):
        found[name] = nothing
    if mains_is_carried(conditions):
        found["mains_ratio"] = spectral.mains_ratio(psd, freqs, mains_hz=line)
        size = spectral.mains_amplitude(psd, freqs, mains_hz=line)
        found["mains_size"] = spectral.beyond_the_mean(size, ok, frame.chain)
        ratios = [
            spectral.mains_ratio(psd, freqs, mains_hz=harmonic)
            for harmonic in harmonics[1:]
            if harmonic + spectral.LINE_MARGIN_HZ <= min(freqs[-1], usable)
        ]
        if ratios:
            found["mains_harmonic"] = np.fmax.reduce(ratios)
    return found


def mains_is_carried(conditions: Conditions) -> bool:
    """Whether the recording lets mains through: sampled fast enough, no notch, no low-pass.

    A line that stands out by 6 dB is there, whatever the header says.
    """
    line = conditions.line_frequency
    if round(line, -1) + spectral.LINE_MARGIN_HZ > conditions.sampling_rate / 2:
        return False
    if conditions.line_found_db >= 6 and conditions.notch_source != "measured":
        return True
    return conditions.notch is None and line <= conditions.low_pass


def _neighbour_mean(decibel: Array, ok: NDArray[np.bool_], neighbours: Array) -> Array:
    weight = neighbours @ ok.astype(np.float32)
    total = neighbours @ np.where(ok, np.nan_to_num(decibel), np.float32(0))
    with np.errstate(divide="ignore", invalid="ignore"):
        return np.where(weight > 0, total / weight, np.float32(np.nan))


@dataclass(frozen=True, slots=True)
class FeatureTable:
    """The features of a whole recording.

    ``values`` float32 (n_measured, n_epochs, n_sites) in the order of ``MEASURED``;
    ``usual`` float32 (n_measured, n_sites) the median over the recording (in decibel for
    those in ``IN_MICROVOLT``). ``pace``, ``step_at`` and ``front_at`` as in
    :class:`Measures`; ``segment`` (n_epochs,) the stretch between gaps that an epoch is of.
    """

    values: Array
    usual: Array
    pace: NDArray[np.float16]
    step_at: NDArray[np.float16]
    front_at: NDArray[np.float16]
    segment: NDArray[np.int64]

    def column(self, name: str) -> Array:
        """One feature of the model, measured or derived, (n_epochs, n_sites)."""
        feature = BY_NAME[name]
        if feature.steady_of:
            return _steady(self.values[MEASURED.index(feature.steady_of)], self.segment)
        if feature.usual_of:
            row = MEASURED.index(feature.usual_of)
            return in_decibel(feature.usual_of, self.values[row]) - self.usual[row]
        return self.values[MEASURED.index(name)]


def _steady(values: Array, segment: NDArray[np.int64]) -> Array:
    """Median over five epochs of one segment, its ends repeated; NaN where not measured."""
    epoch = np.arange(len(values))
    first = np.searchsorted(segment, segment, side="left")
    last = np.searchsorted(segment, segment, side="right") - 1
    shifts = [values[np.clip(epoch + shift, first, last)] for shift in range(-2, 3)]
    middle = median_of_known(np.stack(shifts))
    return np.where(np.isnan(values), np.float32(np.nan), middle)


USUAL_EPOCHS = 3000
"""At most so many epochs, evenly spread, are used for a site's usual value."""


def in_decibel(name: str, values: Array) -> Array:
    """Values of a feature on the scale on which it is compared with its usual value."""
    if name not in IN_MICROVOLT:
        return values
    return 20 * np.log10(np.maximum(values, amplitude.SMALL_UV))


def usual_values(values: Array) -> Array:
    """Usual value of each measured feature at each site, (n_measured, n_sites).

    ``values`` (n_measured, n_epochs, n_sites) as in :class:`FeatureTable`.
    """
    stride = max(1, -(-values.shape[1] // USUAL_EPOCHS))
    return np.stack(
        [
            in_decibel(name, median_of_known(values[row, ::stride]))
            for row, name in enumerate(MEASURED)
        ]
    )


def feature_table(parts: list[Measures], segment: NDArray[np.int64]) -> FeatureTable:
    """Join the batches of a recording and find each site's usual values.

    ``segment`` (n_epochs,) is that of the grid.
    """
    values = np.concatenate([part.values for part in parts], axis=1)
    return FeatureTable(
        values=values,
        usual=usual_values(values),
        pace=np.concatenate([part.pace for part in parts]),
        step_at=np.concatenate([part.step_at for part in parts]),
        front_at=np.concatenate([part.front_at for part in parts]),
        segment=segment,
    )
