"""The feature table and its measurement, a batch of epochs at a time.

``FEATURES`` is the one literal list of what is measured per epoch and site. *Measured*
features come from :func:`measure`; *against usual* features compare a measured one with
the site's own usual value over the recording and are derived when the whole table is known.
"""

from __future__ import annotations

import hashlib
from dataclasses import dataclass
from typing import TYPE_CHECKING, NamedTuple

import numpy as np
from numpy.typing import NDArray

from artifactlens.epochs import median_of_known
from artifactlens.features import amplitude, spatial, spectral

if TYPE_CHECKING:
    from artifactlens.epochs import EpochBatch
    from artifactlens.frames import Frame
    from artifactlens.survey import Conditions

Array = NDArray[np.float32]


class Feature(NamedTuple):
    """One measured number.

    ``usual_of`` names the measured feature that this one compares with its usual value:
    the difference from the site's median over the recording, in decibel. ``steady_of``
    names the measured feature whose median over five seconds this one is.
    """

    name: str
    label: str
    unit: str
    family: str
    formula: str
    source: str
    usual_of: str = ""
    steady_of: str = ""


FEATURES: tuple[Feature, ...] = (
    Feature(
        "swing", "peak-to-peak swing", "uV", "amplitude",
        "max - min over the epoch", "common practice",
    ),
    Feature(
        "swing_rise", "swing against usual", "dB", "amplitude",
        "20 log10(swing / site's median swing)", "", "swing",
    ),
    Feature(
        "step", "fastest step", "uV", "isolation",
        "max |x(t + 16 ms) - x(t)|", "SCORE, Beniczky et al. 2017: steep rise of a pop",
    ),
    Feature(
        "step_rise", "fastest step against usual", "dB", "isolation",
        "20 log10(step / site's median step)", "", "step",
    ),
    Feature(
        "step_crest", "fastest step over the mean step", "dB", "isolation",
        "20 log10(step / mean |x(t + 16 ms) - x(t)|)", "crest factor",
    ),
    Feature(
        "step_alone", "fastest step over the neighbours' step", "dB", "isolation",
        "20 log10(step / rms step of the neighbours within 8 ms)", "design of this tool",
    ),
    Feature(
        "step_stays", "share of the step that stays", "", "isolation",
        "(mean 30-130 ms after - mean 20-120 ms before) / step",
        "decay of a step through a high-pass, tau = 1/(2 pi fc)",
    ),
    Feature(
        "slow_power", "slow power, 2-4 Hz", "dB", "spectral slope",
        "10 log10 of the mean density in uV^2/Hz", "Welch 1967",
    ),
    Feature(
        "beta_power", "power at 18-30 Hz", "dB", "muscle power",
        "10 log10 of the mean density in uV^2/Hz", "Welch 1967",
    ),
    Feature(
        "beta_rise", "power at 18-30 Hz against usual", "dB", "muscle power",
        "beta_power - site's median", "", "beta_power",
    ),
    Feature(
        "fast_power", "power at 30-45 Hz", "dB", "muscle power",
        "10 log10 of the mean density in uV^2/Hz",
        "Whitham et al. 2007: scalp power above 20 Hz is mostly muscle",
    ),
    Feature(
        "fast_rise", "power at 30-45 Hz against usual", "dB", "muscle power",
        "fast_power - site's median", "", "fast_power",
    ),
    Feature(
        "fast_alone", "power at 30-45 Hz over the neighbours'", "dB", "muscle power",
        "fast_power - weighted mean of the neighbours", "design of this tool",
    ),
    Feature(
        "fast_lead", "power at 30-45 Hz over the head's median", "dB", "muscle power",
        "fast_power - median over all sites of the epoch",
        "muscle exceeds brain increasingly away from the vertex (PMC9480942)",
    ),
    Feature(
        "burst", "highest pace within a tenth of a second", "uV", "muscle power",
        "max over tenths of mean |x(t + 16 ms) - x(t)|", "design of this tool",
    ),
    Feature(
        "burst_rise", "highest pace against usual", "dB", "muscle power",
        "20 log10(burst / site's median burst)", "", "burst",
    ),
    Feature(
        "high_power", "power at 55-95 Hz", "dB", "muscle power",
        "10 log10 of the mean density in uV^2/Hz, line frequency left out",
        "Muthukumaraswamy 2013: EMG spans about 20-300 Hz",
    ),
    Feature(
        "high_rise", "power at 55-95 Hz against usual", "dB", "muscle power",
        "high_power - site's median", "", "high_power",
    ),
    Feature(
        "slope", "spectral slope, 14-42 Hz", "", "spectral slope",
        "slope of log10 power over log10 frequency",
        "Fitzgibbon et al. 2016 (from memory)",
    ),
    Feature(
        "slope_rise", "spectral slope against usual", "", "spectral slope",
        "slope - site's median", "", "slope",
    ),
    Feature(
        "fast_share", "power at 18-45 Hz over power at 2-14 Hz", "dB", "spectral slope",
        "10 log10 of the ratio of mean densities", "Welch 1967",
    ),
    Feature(
        "beta_peak", "peakedness of 12-30 Hz", "dB", "spectral slope",
        "10 log10(max / mean density)", "design of this tool",
    ),
    Feature(
        "mains_ratio", "mains over its flanks", "dB", "line frequency",
        "10 log10(mean density within 1 Hz / mean density 2-6 Hz away)", "Harris 1978",
    ),
    Feature(
        "mains_steady", "mains over its flanks, over 5 s", "dB", "line frequency",
        "median of mains_ratio over the epoch and two either side",
        "mains lasts; EN 50160 rates it by means of 10 s", "", "mains_ratio",
    ),
    Feature(
        "mains_size", "mains amplitude", "uV", "line frequency",
        "sqrt(2 x power above the flanks) beyond the mean's share; 0 if under 5 dB above them",
        "a sine of amplitude a has power a^2/2",
    ),
    Feature(
        "mains_level", "mains amplitude over 5 s", "uV", "line frequency",
        "median of mains_size over the epoch and two either side",
        "mains lasts; EN 50160 rates it by means of 10 s", "", "mains_size",
    ),
    Feature(
        "mains_harmonic", "second or third harmonic over its flanks", "dB", "line frequency",
        "the larger of both ratios, as mains_ratio", "Harris 1978",
    ),
    Feature(
        "spread", "share of sites in the field", "", "field spread",
        "share of other sites with |cov / var| >= 0.3",
        "Srinivasan et al. 1998: volume conduction reaches 10-12 cm",
    ),
    Feature(
        "isolation", "what the neighbours do not share", "dB", "isolation",
        "10 log10(1 - max(0, r)^2), r with the neighbours' mean",
        "one electrode alone is artifact until proven otherwise (common practice)",
    ),
    Feature(
        "front_vertical", "frontal polarity", "uV", "frontal polarity",
        "frontal poles less the sites behind, largest departure from the 3 s median",
        "Picton et al. 2000: cornea positive",
    ),
    Feature(
        "front_lateral", "lateral frontal polarity", "uV", "frontal polarity",
        "right temple less left temple, largest departure from the 3 s median",
        "Picton et al. 2000: gaze to the right makes F8 positive",
    ),
    Feature(
        "front_rise", "frontal deflection against usual", "dB", "frontal polarity",
        "20 log10(larger of both polarities / its median)", "", "front_size",
    ),
    Feature(
        "front_rhythm", "rhythm of the frontal deflection", "", "frontal polarity",
        "highest autocorrelation at 0.3-0.6 s over 3 s", "design of this tool",
    ),
    Feature(
        "eye_reach", "deflection at this site", "uV", "frontal polarity",
        "|site less the sites behind| at the frontal moment", "design of this tool",
    ),
    Feature(
        "eye_part", "deflection here that fits the eyes", "uV", "frontal polarity",
        "|what the two eye maps predict here less at the sites behind|",
        "V = p.r / r^3 at both eyes; Lins et al. 1993 on ocular sources",
    ),
    Feature(
        "eye_match", "fit of the field to eye dipoles", "", "frontal polarity",
        "share of the field explained by a vertical and a lateral eye map",
        "V = p.r / r^3 at both eyes; Lins et al. 1993 on ocular sources",
    ),
)  # fmt: skip

FEATURE_NAMES: tuple[str, ...] = tuple(feature.name for feature in FEATURES)
HIDDEN = ("front_size",)
"""Measured only so that its usual value can be known."""
MEASURED: tuple[str, ...] = (
    *(feature.name for feature in FEATURES if not (feature.usual_of or feature.steady_of)),
    *HIDDEN,
)
BY_NAME: dict[str, Feature] = {feature.name: feature for feature in FEATURES}
IN_MICROVOLT = frozenset({"swing", "step", "burst", "front_size"})
"""Measured in microvolt and compared with its usual value as a ratio in decibel."""


def feature_table_sha256() -> str:
    """Hash of the feature table: a model made for another table is refused."""
    rows = "\n".join("\t".join(feature) for feature in FEATURES)
    return hashlib.sha256(rows.encode()).hexdigest()


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
    front_size = np.fmax(np.abs(polarity.vertical), np.abs(polarity.lateral))
    for name, per_epoch in (
        ("front_vertical", polarity.vertical),
        ("front_lateral", polarity.lateral),
        ("front_rhythm", polarity.rhythm),
        ("eye_match", polarity.match),
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


def feature_table(parts: list[Measures], segment: NDArray[np.int64]) -> FeatureTable:
    """Join the batches of a recording and find each site's usual values.

    ``segment`` (n_epochs,) is that of the grid.
    """
    values = np.concatenate([part.values for part in parts], axis=1)
    stride = max(1, -(-values.shape[1] // USUAL_EPOCHS))
    usual = np.stack(
        [
            in_decibel(name, median_of_known(values[row, ::stride]))
            for row, name in enumerate(MEASURED)
        ]
    )
    return FeatureTable(
        values=values,
        usual=usual,
        pace=np.concatenate([part.pace for part in parts]),
        step_at=np.concatenate([part.step_at for part in parts]),
        front_at=np.concatenate([part.front_at for part in parts]),
        segment=segment,
    )
