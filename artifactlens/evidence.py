"""Why a score is what it is: exact contributions, and a sentence a person can read."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from artifactlens.epochs import median_of_known
from artifactlens.features.catalogue import BY_NAME, FEATURE_NAMES
from artifactlens.kinds import KIND_NAMES
from artifactlens.result import Contribution, Measure, amount, driver_of, finite_or_none

if TYPE_CHECKING:
    from collections.abc import Callable

    from artifactlens.curves import Model
    from artifactlens.features import FeatureTable

Cells = NDArray[np.intp]


def values_at(
    table: FeatureTable, epochs: Cells, sites: Cells
) -> dict[str, NDArray[np.float64]]:
    """Every feature at single cells, (n_cells,) each, NaN where not measured."""
    return {
        name: table.column(name)[epochs, sites].astype(np.float64) for name in FEATURE_NAMES
    }


def explain(
    model: Model,
    kind: str,
    measured: dict[str, NDArray[np.float64]],
    usual: dict[str, NDArray[np.float32]],
    sites: Cells,
) -> list[tuple[Contribution, ...]]:
    """Contributions at single cells, largest absolute log-odds first.

    All features and pairs that the kind's head looks at are listed; nothing else adds to it.

    Parameters
    ----------
    model, kind
        Whose score is explained.
    measured : dict of array, shape (n_cells,)
        See :func:`values_at`.
    usual : dict of array, shape (n_sites,)
        Each feature's value on the quiet epochs of this recording.
    sites : array of int, shape (n_cells,)
        The site of each cell.
    """
    head = model.heads[KIND_NAMES.index(kind)]
    sources: list[tuple[tuple[str, ...], Callable[..., NDArray[np.float64]]]] = [
        *(((name,), head.curves[name]) for name in FEATURE_NAMES if name in head.curves),
        *head.pairs.items(),
    ]
    if not sources:
        return [()] * len(sites)
    parts = np.stack([step(*(measured[name] for name in names)) for names, step in sources])
    order = np.argsort(-np.abs(parts), axis=0, kind="stable")

    def measure(name: str, cell: int) -> Measure:
        return Measure(
            feature=name,
            label=BY_NAME[name].label,
            unit=BY_NAME[name].unit,
            value=finite_or_none(measured[name][cell]),
            usual=finite_or_none(usual[name][sites[cell]]),
        )

    def part(row: int, cell: int) -> Contribution:
        measures = tuple(measure(name, cell) for name in sources[row][0])
        return Contribution.of(measures, float(parts[row, cell]))

    return [
        tuple(part(int(row), cell) for row in order[:, cell]) for cell in range(len(sites))
    ]


def quiet_values(
    table: FeatureTable, quiet: NDArray[np.bool_]
) -> dict[str, NDArray[np.float32]]:
    """Median of every feature over the quiet cells of each site, (n_sites,) per feature.

    ``quiet`` (n_epochs, n_sites) is true where no kind reaches its lower operating point; a
    site without a quiet epoch falls back on all its epochs.
    """
    from artifactlens.features import USUAL_EPOCHS

    stride = max(1, -(-len(quiet) // USUAL_EPOCHS))
    chosen = quiet[::stride]
    chosen = chosen | ~chosen.any(axis=0)
    return {
        name: median_of_known(
            np.where(chosen, table.column(name)[::stride], np.float32("nan"))
        )
        for name in FEATURE_NAMES
    }


def sentence(
    kind: str,
    sites: tuple[str, ...],
    site: str,
    values: dict[str, float | None],
    parts: tuple[Contribution, ...],
    *,
    at_reference: bool,
    line_frequency: float,
    field_count: int,
) -> str:
    """One or two sentences: where, consistent with what, the measures, and the driver.

    Parameters
    ----------
    kind : str
    sites : tuple of str
        All sites of the flag.
    site : str
        The strongest site; ``values`` and ``parts`` belong to it.
    values : dict
        Measured value of each feature at the strongest epoch and site.
    parts : tuple of Contribution
        Largest first.
    at_reference : bool
        Whether the strongest site is the recording's reference electrode.
    line_frequency : float, hertz
    field_count : int
        Sites in the field, this one included.
    """
    where = _site_words(sites)
    if at_reference:
        what = {
            "pop": "a pop of the reference electrode",
            "mains": "mains picked up at the reference electrode",
            "muscle": "muscle at the reference electrode",
            "eye": "an eye movement reaching the reference electrode",
        }[kind]
        where = "Reference (the same shape in every referential channel)"
        body = _measures(kind, site, values, line_frequency, field_count)
    elif kind == "eye":
        what, body = _eye_words(values, field_count)
    else:
        what = {
            "muscle": "muscle activity",
            "pop": "an electrode pop",
            "mains": f"mains interference at {line_frequency:.3g} Hz",
        }[kind]
        body = _measures(kind, site, values, line_frequency, field_count)
    driver = driver_of(parts)
    speaks_for = sum(part.log_odds for part in parts if part.log_odds > 0)
    share = f"{driver.log_odds:+.1f} of {speaks_for:+.1f}"
    reason = f"{_capital(driver.label)} drove this mark ({share}){_driver_words(driver)}"
    return f"{where} - consistent with {what}: {body}. {reason}."


def _driver_words(driver: Contribution) -> str:
    """The measures of the driver and their usual values, as far as known."""

    def words(measure: Measure, value: float | None) -> str:
        signed = measure.feature.startswith("front_") and measure.unit == "uV"
        return amount(value, measure.unit, signed=signed)

    measures = driver.measures
    if all(measure.value is None for measure in measures):
        return ""
    text = ": " + " and ".join(words(measure, measure.value) for measure in measures)
    # What is itself measured against usual needs no usual value.
    plain = any(not BY_NAME[measure.feature].usual_of for measure in measures)
    if plain and all(None not in (measure.value, measure.usual) for measure in measures):
        usual = " and ".join(words(measure, measure.usual) for measure in measures)
        text += f", usually {usual} here"
    return text


def _site_words(sites: tuple[str, ...]) -> str:
    if len(sites) <= 6:
        return ", ".join(sites)
    return f"{', '.join(sites[:5])} and {len(sites) - 5} more sites"


def _capital(text: str) -> str:
    return text[:1].upper() + text[1:]


def _field_words(count: int) -> str:
    return "field at this site alone" if count <= 1 else f"field over {count} sites"


def _eye_words(values: dict[str, float | None], field_count: int) -> tuple[str, str]:
    vertical, lateral = values["front_vertical"], values["front_lateral"]
    field = _field_words(field_count)
    if vertical is None and lateral is None:
        return "an eye movement", field
    if lateral is not None and abs(lateral) > 1.2 * abs(vertical or 0.0):
        side = "right" if lateral > 0 else "left"
        return (
            f"a gaze to the {side} (or the return from the other side)",
            f"{lateral:+.0f} uV at the right temple against the left, {field}",
        )
    size = vertical or 0.0
    what = "a blink or upward gaze" if size > 0 else "a downward gaze or the end of a blink"
    return what, f"{size:+.0f} uV at the front against the sites behind, {field}"


def _measures(
    kind: str,
    site: str,
    values: dict[str, float | None],
    line_frequency: float,
    field_count: int,
) -> str:
    if kind == "muscle":
        rise = values["fast_rise"]
        words = f"spectral slope {amount(values['slope'], '')} at {site}"
        if values["slope"] is None:
            words = f"power at 18-30 Hz {amount(values['beta_power'], 'dB')} at {site}"
        if rise is not None and rise > 1:
            words += f", power at 30-45 Hz {rise:.0f} dB above its usual"
        return words
    if kind == "pop":
        words = f"a step of {amount(values['step'], 'uV')} within 16 ms at {site}"
        alone = values["step_alone"]
        if alone is not None and alone > 5:
            words += f", {10 ** (alone / 20):.0f} times that of its neighbours"
        stays = values["step_stays"]
        if stays is not None and stays > 0.2:
            words += f", {100 * min(stays, 1.0):.0f} % of it still there 0.1 s later"
        return words
    if kind == "mains":
        return (
            f"{amount(values['mains_level'], 'uV')} at {line_frequency:.4g} Hz over 5 s at "
            f"{site}, {amount(values['mains_steady'], 'dB')} over its flanks"
        )
    return (
        f"{amount(values['front_vertical'], 'uV', signed=True)} at the front, "
        f"{_field_words(field_count)}"
    )
