"""The close-up: the traces of one flag, drawn in millimetres as the trade reads them."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from markupsafe import Markup
from numpy.typing import NDArray

from artifactlens.page.svg import joined, tag
from artifactlens.page.words import clock, cut, names, plain
from artifactlens.result import Flag

MM_PER_SECOND = 30.0  # time base, common practice
SENSITIVITIES = (7.0, 10.0, 15.0, 20.0, 30.0, 50.0, 70.0)
"""uV/mm; the first is common practice for a first look, larger means a smaller trace."""

UNITS_PER_MM = 20
"""The picture counts in twentieths of a millimetre: whole numbers keep the file small."""

ROW_MM = 10.0
CLIP_MM = 15.0
"""A trace is drawn this far from its own line at most, lest it bury its neighbours."""

BINS_PER_MM = 2
"""Each bin gives a smallest and a largest value: four points a millimetre."""

NAMES_MM, TIMES_MM, FOOT_MM = 19.0, 4.0, 12.0
SCALE_UV, SCALE_SECONDS = (50, 100, 200, 500), 0.5


@dataclass(frozen=True)
class TraceWindow:
    """What the close-up of one flag shows.

    Attributes
    ----------
    flag : int
        Number of the flag.
    onset : float, seconds from the start of the recording
        Of the first sample.
    sampling_rate : float, hertz
    labels : tuple of str
        Derivations such as ``'Fp1-F7'``, the involved ones first.
    data_uv : array, shape (n_derivations, n_samples), microvolt, float32
        Filtered, input 1 minus input 2. NaN where nothing was recorded.
    involved : tuple of bool
        Whether the derivation contains a site of the flag.
    description : str
        Montage and filters in words, such as ``'double banana, 1-70 Hz'``.
    """

    flag: int
    onset: float
    sampling_rate: float
    labels: tuple[str, ...]
    data_uv: NDArray[np.float32]
    involved: tuple[bool, ...]
    description: str

    @property
    def seconds(self) -> float:
        """Length of the window."""
        return int(self.data_uv.shape[1]) / self.sampling_rate


def sensitivity(data_uv: NDArray[np.float32]) -> float:
    """The first step at which no trace spends a fiftieth of its time in another's row.

    Parameters
    ----------
    data_uv : array, shape (n_derivations, n_samples), microvolt
        Each row about its own middle.

    Returns
    -------
    float, uV/mm
        One of ``SENSITIVITIES``, the coarsest if none is enough.
    """
    size = np.abs(data_uv[np.isfinite(data_uv).any(axis=1)])
    if not size.size:
        return SENSITIVITIES[0]
    widest = float(np.nanquantile(size, 0.98, axis=1).max())
    fitting = (step for step in SENSITIVITIES if widest / step <= ROW_MM)
    return next(fitting, SENSITIVITIES[-1])


def about_middle(data_uv: NDArray[np.float32]) -> NDArray[np.float32]:
    """Each row less its median, so that it runs along its own line; NaN rows stay."""
    middle = np.zeros((len(data_uv), 1), dtype=data_uv.dtype)
    alive = np.isfinite(data_uv).any(axis=1)
    middle[alive, 0] = np.nanmedian(data_uv[alive], axis=1)
    return data_uv - middle


def thin_out(
    row: NDArray[np.float32], sampling_rate: float
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Keep the smallest and the largest sample of each bin, in the order they came.

    Parameters
    ----------
    row : array, shape (n_samples,), microvolt
        One derivation.
    sampling_rate : float, hertz
        Its samples a second.

    Returns
    -------
    seconds : array, shape (n_points,)
        From the start of the window.
    values : array, shape (n_points,), microvolt
        The row itself where it holds four samples a millimetre or fewer.
    """
    bins_per_second = BINS_PER_MM * MM_PER_SECOND
    at = np.arange(len(row)) / sampling_rate
    if sampling_rate <= 2 * bins_per_second:
        return at, row.astype(np.float64)
    bins = np.floor(at * bins_per_second + 1e-9).astype(np.int64)
    starts = np.flatnonzero(np.diff(bins, prepend=-1))
    counts = np.diff(starts, append=len(row))
    table = starts[:, None] + np.minimum(np.arange(counts.max()), counts[:, None] - 1)
    held = row[table]
    low = np.where(np.isnan(held), np.inf, held).argmin(axis=1)
    high = np.where(np.isnan(held), -np.inf, held).argmax(axis=1)
    order = np.sort(np.stack([low, high], axis=1), axis=1)
    kept = np.unique(table[np.arange(len(table))[:, None], order])
    return at[kept], row[kept].astype(np.float64)


def y_units(values_uv: NDArray[np.float64], step: float) -> NDArray[np.float64]:
    """Picture units below the trace's own line: positive is down, clipped.

    A derivation is input 1 minus input 2, and input 1 more negative deflects up (common
    practice of the trade), so a positive value has the larger y.
    """
    clipped = np.clip(values_uv / step, -CLIP_MM, CLIP_MM)
    return np.rint(clipped * UNITS_PER_MM)


def trace_path(
    seconds: NDArray[np.float64], values_uv: NDArray[np.float64], step: float, base: float
) -> str:
    """Path data of one trace about ``base`` (picture units), broken where data miss."""
    x = np.rint(seconds * MM_PER_SECOND * UNITS_PER_MM)
    y = y_units(values_uv, step) + round(base)
    runs = []
    for start, stop in _runs(np.isfinite(y)):
        points = np.stack([x[start:stop], y[start:stop]], axis=1).astype(np.int64)
        moves = np.diff(points, axis=0).ravel().tolist()
        body = " ".join(map(str, moves)).replace(" -", "-")
        runs.append(f"M{points[0, 0]} {points[0, 1]}" + (f"l{body}" if moves else "h1"))
    return "".join(runs)


def beyond_path(
    seconds: NDArray[np.float64], values_uv: NDArray[np.float64], step: float, base: float
) -> str:
    """Strokes that dot the trace wherever it was clipped; empty if it never was."""
    size = np.nan_to_num(values_uv) / step
    parts = []
    for side in (-1, 1):
        y = round(base + side * CLIP_MM * UNITS_PER_MM)
        for start, stop in _runs(side * size > CLIP_MM):
            edges = seconds[[start, stop - 1]] * MM_PER_SECOND * UNITS_PER_MM
            parts.append(f"M{edges[0] - 6:.0f} {y}H{edges[1] + 6:.0f}")
    return "".join(parts)


def _runs(inside: NDArray[np.bool_]) -> NDArray[np.int64]:
    """First and past-the-last index of each run of True, shape (n_runs, 2)."""
    return np.flatnonzero(np.diff(inside.astype(np.int8), prepend=0, append=0)).reshape(
        -1, 2
    )


@dataclass(frozen=True)
class _Sheet:
    """Where things stand on the picture, in picture units."""

    window: TraceWindow
    above_mm: float
    below_mm: float

    @property
    def foot(self) -> float:
        rows = ROW_MM * (len(self.window.labels) - 1)
        return (self.above_mm + rows + self.below_mm) * UNITS_PER_MM

    @property
    def tall(self) -> float:
        return self.foot + FOOT_MM * UNITS_PER_MM

    @property
    def right(self) -> float:
        return self.window.seconds * MM_PER_SECOND * UNITS_PER_MM

    def base(self, index: int) -> float:
        return (self.above_mm + ROW_MM * index) * UNITS_PER_MM

    def across(self, seconds: float) -> float:
        return (seconds - self.window.onset) * MM_PER_SECOND * UNITS_PER_MM


def _sheet(window: TraceWindow, data: NDArray[np.float32], step: float) -> _Sheet:
    """Leave as much room above and below as the traces need."""
    above = below = ROW_MM * 0.6
    last = len(data) - 1
    for index, row in enumerate(data):
        alive = row[np.isfinite(row)]
        if alive.size:
            up = min(CLIP_MM, -float(alive.min()) / step)
            down = min(CLIP_MM, float(alive.max()) / step)
            above = max(above, up - ROW_MM * index + 1)
            below = max(below, down - ROW_MM * (last - index) + 1)
    return _Sheet(window, above, below + TIMES_MM)


def closeup(window: TraceWindow, flag: Flag) -> Markup:
    """The figure of one flag: names that stay in place, traces, and a line of words."""
    data = about_middle(window.data_uv)
    step = sensitivity(data)
    sheet = _sheet(window, data, step)
    parts = [_time_grid(sheet), _extent(sheet, flag)]
    clipped = False
    for index, (row, involved) in enumerate(zip(data, window.involved, strict=True)):
        seconds, values = thin_out(row, window.sampling_rate)
        path = trace_path(seconds, values, step, sheet.base(index))
        parts.append(tag("path", class_="trace involved" if involved else "trace", d=path))
        if beyond := beyond_path(seconds, values, step, sheet.base(index)):
            parts.append(tag("path", class_="beyond", d=beyond))
            clipped = True
    aloud = (
        f"{len(window.labels)} derivations over {plain(window.seconds)} s from "
        f"{clock(window.onset)}, the {flag.kind} flag shaded"
    )
    picture = _picture("traces", sheet.right, sheet.tall, parts, aloud)
    strip = tag(
        "div",
        _name_column(sheet, step),
        picture,
        class_="strip",
        tabindex=0,  # so that the arrow keys can scroll it
        role="region",
        aria_label=f"Close-up of flag {flag.number}",
        data_moment=f"{sheet.across(flag.moment) / sheet.right:.4f}",
    )
    caption = _caption(window, flag, step, clipped=clipped)
    return tag("figure", strip, caption, class_=f"closeup c-{flag.kind}")


def _picture(
    look: str, wide: float, tall: float, parts: list[Markup], aloud: str | None
) -> Markup:
    """A picture of true size: ``wide`` and ``tall`` in picture units."""
    return tag(
        "svg",
        joined(parts),
        class_=look,
        width=f"{wide / UNITS_PER_MM:g}mm",
        height=f"{tall / UNITS_PER_MM:g}mm",
        viewBox=f"0 0 {wide:g} {tall:g}",
        role="img" if aloud else None,
        aria_label=aloud,
        aria_hidden=None if aloud else "true",
    )


def _name_column(sheet: _Sheet, step: float) -> Markup:
    window = sheet.window
    texts = [
        tag(
            "text",
            cut(label, 12),
            x=(NAMES_MM - 2) * UNITS_PER_MM,
            y=sheet.base(index) + 20,
            class_="label involved" if involved else "label",
        )
        for index, (label, involved) in enumerate(
            zip(window.labels, window.involved, strict=True)
        )
    ]
    wide = NAMES_MM * UNITS_PER_MM
    return _picture("labels", wide, sheet.tall, [*texts, _scale_bar(sheet, step)], None)


def _time_grid(sheet: _Sheet) -> Markup:
    """A thin rule at each whole second, and its time where there is room for it."""
    start = sheet.window.onset
    end = start + sheet.window.seconds
    parts = []
    for second in range(math.ceil(start - 1e-9), math.floor(end + 1e-9) + 1):
        x = sheet.across(second)
        parts.append(tag("path", class_="second", d=f"M{x:.0f} 0V{sheet.foot:g}"))
        if sheet.right - x > 15 * UNITS_PER_MM:
            parts.append(tag("text", clock(second), x=x + 14, y=sheet.foot - 14))
    return tag("g", joined(parts), class_="grid")


def _extent(sheet: _Sheet, flag: Flag) -> Markup:
    """The flag's extent as a shade, its driving moment as a thin line."""
    start = min(max(sheet.across(flag.onset), 0.0), sheet.right)
    stop = min(max(sheet.across(flag.end), 0.0), sheet.right)
    moment = sheet.across(flag.moment)
    parts = [
        tag("rect", class_="extent", x=start, y=0, width=stop - start, height=sheet.foot)
    ]
    if 0 <= moment <= sheet.right:
        parts.append(tag("path", class_="moment", d=f"M{moment:.0f} 0V{sheet.foot:g}"))
    return tag("g", joined(parts))


def _scale_bar(sheet: _Sheet, step: float) -> Markup:
    """A corner of so many uV and half a second, under the names: it never scrolls away."""
    microvolt = max(uv for uv in SCALE_UV if uv / step <= ROW_MM)
    up = microvolt / step * UNITS_PER_MM
    along = SCALE_SECONDS * MM_PER_SECOND * UNITS_PER_MM
    x, y = 2 * UNITS_PER_MM, sheet.tall - UNITS_PER_MM
    return tag(
        "g",
        tag("path", d=f"M{x} {y - up:.1f}V{y:g}h{along:g}"),
        tag("text", f"{microvolt} uV", x=x + 18, y=y - up + 44),
        tag("text", f"{SCALE_SECONDS:g} s", x=x + along, y=y - 16, text_anchor="end"),
        class_="corner",
        data_uv=microvolt,
        data_seconds=SCALE_SECONDS,
    )


def _caption(window: TraceWindow, flag: Flag, step: float, *, clipped: bool) -> Markup:
    limit = f" Traces are drawn to ±{CLIP_MM:g} mm at most (dotted)." if clipped else ""
    return tag(
        "figcaption",
        tag("b", f"{cut(window.description, 120)}. "),
        f"{MM_PER_SECOND:g} mm/s, {step:g} uV/mm; negative is up.{limit} ",
        f"Shaded: the flag. Thin line: the moment that drove it, {clock(flag.moment)}. ",
        f"Strong traces contain {names(flag.sites, 8)}.",
        tag(
            "span",
            " Too wide for the paper it is shrunk; the scale bar holds.",
            class_="shrunk",
        ),
    )
