"""The one literal table of what is measured per epoch and site."""

from __future__ import annotations

import hashlib
from typing import NamedTuple


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
        "burst_even", "evenness of the pace over the second", "dB", "muscle power",
        "20 log10(median / max over tenths of mean |x(t + 16 ms) - x(t)|)",
        "a spike is over in a tenth of a second, a contraction is not (common practice)",
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
        "fast_over_beta", "power at 30-45 Hz over power at 18-30 Hz", "dB", "spectral slope",
        "fast_power - beta_power", "Fitzgibbon et al. 2016 (from memory)",
    ),
    Feature(
        "high_over_fast", "power at 55-95 Hz over power at 30-45 Hz", "dB", "spectral slope",
        "high_power - fast_power", "Whitham et al. 2007: without muscle power falls steeply",
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
        "front_swing", "frontal swing", "uV", "frontal polarity",
        "max - min over the epoch of the frontal poles less the row behind them",
        "Picton et al. 2000: eye movements fall off quickly behind the poles",
    ),
    Feature(
        "front_swing_rise", "frontal swing against usual", "dB", "frontal polarity",
        "20 log10(front_swing / its median)", "", "front_swing",
    ),
    Feature(
        "side_swing", "swing between the temples", "uV", "frontal polarity",
        "max - min over the epoch of the right temple less the left",
        "Picton et al. 2000: gaze aside moves F7 and F8 oppositely",
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
        "eye_swing", "swing here that fits the eyes", "uV", "frontal polarity",
        "max - min over the epoch of what the two eye maps predict here",
        "V = p.r / r^3 at both eyes; Lins et al. 1993 on ocular sources",
    ),
    Feature(
        "eye_agree", "agreement of this site with the eyes", "", "frontal polarity",
        "site x predicted / (larger of both)^2 at the frontal moment", "design of this tool",
    ),
    Feature(
        "eye_span", "fit of the whole second's field to eye dipoles", "", "frontal polarity",
        "share of the field's power over the second explained by the two eye maps",
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
IN_MICROVOLT = frozenset({"swing", "step", "burst", "front_size", "front_swing"})
"""Measured in microvolt and compared with its usual value as a ratio in decibel."""


def feature_table_sha256() -> str:
    """Hash of the feature table: a model made for another table is refused."""
    rows = "\n".join("\t".join(feature) for feature in FEATURES)
    return hashlib.sha256(rows.encode()).hexdigest()
