"""A page of traces for a person who looks at one flag offline."""

from __future__ import annotations

from collections.abc import Collection
from typing import TYPE_CHECKING

import numpy as np

from artifactlens.closeups import DOUBLE_BANANA
from artifactlens.recording import Recording
from artifactlens.sites import canonical_site, parse_label

if TYPE_CHECKING:
    from matplotlib.figure import Figure

SECONDS, LEAD_SECONDS = 10.0, 4.0
BAND_HZ = (0.5, 70.0)
MM_PER_SECOND, MM_PER_ROW = 30.0, 11.0
SENSITIVITY = 7.0
"""Sensitivity (uV/mm) and time base (mm/s) of a clinical page: common practice."""

BAR_MM = 10.0
MARGIN_MM, FOOT_MM = 22.0, 14.0
FILTER_SECONDS = 2.0
"""Read on either side of the page, so that the filter has settled within it."""


def picture(
    recording: Recording,
    onset: float,
    sites: Collection[str],
    *,
    uv_per_mm: float = SENSITIVITY,
) -> Figure:
    """Ten seconds around a flag: double banana, 0.5-70 Hz, negative up, to scale.

    At the figure's own size 1 mm is ``uv_per_mm`` and 30 mm are 1 s. Eye leads of the
    recording stand below, against the mean of P3, P4, Pz, O1 and O2. Derivations that
    hold one of ``sites`` are drawn bold; the onset is marked by a line.

    Parameters
    ----------
    recording : Recording
        Referential, in one uninterrupted stretch.
    onset : float, seconds
    sites : collection of str
        As a flag names them.
    uv_per_mm : float
        Larger for a smaller trace: 7 is common practice, a seizure needs about 30.
    """
    import scipy.signal
    from matplotlib.figure import Figure

    rate = recording.sampling_rate
    begin = min(max(onset - LEAD_SECONDS, 0.0), max(recording.duration - SECONDS, 0.0))
    first = max(round((begin - FILTER_SECONDS) * rate), 0)
    stop = min(round((begin + SECONDS + FILTER_SECONDS) * rate), recording.n_samples)
    data = recording.read(first, stop).astype(np.float64)
    top = min(BAND_HZ[1], 0.45 * rate)
    sections = scipy.signal.butter(2, (BAND_HZ[0], top), "bandpass", fs=rate, output="sos")
    data = scipy.signal.sosfiltfilt(sections, data, axis=1)
    labels = [parse_label(label) for label in recording.labels]
    at = {label.canonical: row for row, label in enumerate(labels) if label.role == "site"}
    involved = {canonical_site(name) for name in sites}
    traces = [
        (f"{labels[at[a]].plus}-{labels[at[b]].plus}", data[at[a]] - data[at[b]],
         bool(involved & {a, b}))
        for a, b in DOUBLE_BANANA
        if a in at and b in at
    ]  # fmt: skip
    behind = [at[name] for name in ("P3", "P4", "Pz", "O1", "O2") if name in at]
    traces += [
        (label, data[row] - data[behind].mean(axis=0), False)
        for row, label in enumerate(recording.labels)
        if "PG1" in label.upper() or "PG2" in label.upper()
    ]

    width = MARGIN_MM + SECONDS * MM_PER_SECOND + 6
    height = FOOT_MM + len(traces) * MM_PER_ROW + 6
    figure = Figure(figsize=(width / 25.4, height / 25.4))
    axes = figure.add_axes(
        (
            MARGIN_MM / width,
            FOOT_MM / height,
            SECONDS * MM_PER_SECOND / width,
            len(traces) * MM_PER_ROW / height,
        )
    )
    time = first / rate + np.arange(stop - first) / rate
    rows = -MM_PER_ROW * np.arange(len(traces))
    for row, (_, trace, bold) in zip(rows, traces, strict=True):
        # A derivation is input 1 less input 2 and its negative deflects up.
        axes.plot(
            time, row - trace / uv_per_mm, color="black", linewidth=1.1 if bold else 0.5
        )
    axes.axvline(onset, color="tab:blue", linewidth=0.8)
    axes.plot([begin + 0.05] * 2, [rows[-1], rows[-1] + BAR_MM], color="tab:red")
    axes.text(
        begin + 0.1, rows[-1] + 1, f"{BAR_MM * uv_per_mm:g} uV", color="tab:red", fontsize=7
    )
    axes.set(
        xlim=(begin, begin + SECONDS),
        ylim=(rows[-1] - MM_PER_ROW / 2, MM_PER_ROW / 2),
        xlabel=(
            f"seconds; {uv_per_mm:g} uV/mm, {BAND_HZ[0]:g}-{top:g} Hz, double banana, "
            "negative up"
        ),
    )
    axes.set_xticks(np.arange(np.ceil(begin), begin + SECONDS + 1e-6))
    axes.set_yticks(rows, [name for name, _, _ in traces], fontsize=7)
    axes.grid(axis="x", linewidth=0.3)
    return figure
