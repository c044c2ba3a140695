"""The shipped model: step curves of features and a few pairs of them, as plain numbers.

A boosted forest in which no branch uses more than two features *is* a sum of step functions
of one feature and of two, so it is stored as such: edges, the value of every step, and
values for a missing measurement. Nothing in the file is executable.
"""

from __future__ import annotations

import hashlib
import json
from dataclasses import dataclass, field
from importlib import resources
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from artifactlens.errors import ModelError
from artifactlens.features.catalogue import FEATURE_NAMES, feature_table_sha256
from artifactlens.kinds import KIND_NAMES

if TYPE_CHECKING:
    from artifactlens.features import FeatureTable

MODEL_VERSION = 2
SHIPPED = "scalp-1.json"


def step_of(edges: NDArray[np.float64], x: NDArray[np.floating]) -> NDArray[np.intp]:
    """Number of the step on which measurements of any shape lie.

    Step ``k`` is ``edges[k - 1] < x <= edges[k]``; the missing have a step of their own
    after the last one, ``len(edges) + 1``.
    """
    exact = np.asarray(x, dtype=np.float64)
    step = np.searchsorted(edges, exact, side="left")
    return np.where(np.isnan(exact), len(edges) + 1, step)


@dataclass(frozen=True, slots=True)
class Curve:
    """A step function of one feature.

    ``values[k]`` holds for ``edges[k - 1] < x <= edges[k]``; shapes (n_edges,) and
    (n_edges + 1,); ``missing`` is added where the feature could not be measured.
    Log-odds, calibrated.
    """

    edges: NDArray[np.float64]
    values: NDArray[np.float64]
    missing: float

    def __call__(self, x: NDArray[np.floating]) -> NDArray[np.float64]:
        """What measurements of any shape add to the score."""
        return np.append(self.values, self.missing)[step_of(self.edges, x)]


@dataclass(frozen=True, slots=True)
class Table:
    """A step function of two features: what they say together beyond each alone.

    ``values[j, k]`` holds on step ``j`` of the first feature, with edges ``rows``, and
    step ``k`` of the second, with edges ``columns``, both as in :class:`Curve`; shape
    (n_rows + 2, n_columns + 2), the last row and the last column for what could not be
    measured. Log-odds, calibrated.
    """

    rows: NDArray[np.float64]
    columns: NDArray[np.float64]
    values: NDArray[np.float64]

    def __call__(
        self, x: NDArray[np.floating], y: NDArray[np.floating]
    ) -> NDArray[np.float64]:
        """What measurements of both, of one shape, add to the score."""
        return self.values[step_of(self.rows, x), step_of(self.columns, y)]


@dataclass(frozen=True, slots=True)
class Head:
    """The score of one kind: base, one curve per feature, a table per pair, in log-odds.

    ``sure`` and ``doubtful`` are the two operating points, as probabilities. A pair stands
    once, in one of both orders.
    """

    kind: str
    base: float
    curves: dict[str, Curve]
    sure: float
    doubtful: float
    pairs: dict[tuple[str, str], Table] = field(default_factory=dict)

    def limit(self, mark: str) -> float:
        """Probability from which a cell is marked: "sure" or "doubtful"."""
        return self.sure if mark == "sure" else self.doubtful


@dataclass(frozen=True, slots=True)
class Model:
    """The four heads with where they come from."""

    name: str
    sha256: str
    heads: tuple[Head, ...]
    training: dict[str, Any]

    def scores(self, table: FeatureTable) -> NDArray[np.float64]:
        """Log-odds of every kind, shape (n_kinds, n_epochs, n_sites)."""
        shape = table.values.shape[1:]
        scores = np.empty((len(self.heads), *shape))
        for row, head in enumerate(self.heads):
            scores[row] = head.base
        for name in FEATURE_NAMES:
            users = [
                (row, head.curves[name])
                for row, head in enumerate(self.heads)
                if name in head.curves
            ]
            if not users:
                continue
            # One search over the edges of all kinds serves all of them.
            edges = np.unique(np.concatenate([curve.edges for _, curve in users]))
            step = step_of(edges, table.column(name))
            probes = np.concatenate([edges, [np.inf, np.nan]])
            for row, curve in users:
                scores[row] += curve(probes)[step]
        for row, head in enumerate(self.heads):
            for (first, second), pair in head.pairs.items():
                scores[row] += pair(table.column(first), table.column(second))
        return scores


def logistic(score: NDArray[np.float64]) -> NDArray[np.float64]:
    """Probability of a log-odds score, without overflow."""
    small = np.exp(-np.abs(score))
    return np.where(score >= 0, 1, small) / (1 + small)


def load_model(path: Path | None = None) -> Model:
    """Read and check a model file; the shipped one by default.

    Raises
    ------
    ModelError
        If the file is missing, damaged, or made for another feature table.
    """
    source = path or _shipped_path()
    try:
        raw = Path(source).read_bytes()
    except OSError as error:
        raise ModelError(
            f"A model file is needed, but {source} cannot be read ({error.strerror}).",
            "Install artifactlens again, or train a model with scripts/train.py.",
        ) from error
    try:
        body = json.loads(raw)
        return model_from(body, hashlib.sha256(raw).hexdigest())
    except ModelError:
        raise
    except (
        ValueError,
        KeyError,
        TypeError,
        AttributeError,
        OverflowError,
        RecursionError,
    ) as error:
        raise ModelError(
            f"The model file {Path(source).name} is damaged: {error}.",
            "Install artifactlens again, or train a model with scripts/train.py.",
        ) from error


def _shipped_path() -> Path:
    """The wheel carries ``models/`` inside the package; a checkout has it beside it."""
    inside = Path(str(resources.files("artifactlens"))) / "models" / SHIPPED
    if inside.exists():
        return inside
    return Path(str(resources.files("artifactlens"))).parent / "models" / SHIPPED


def model_from(body: dict[str, Any], sha256: str) -> Model:
    """The model that a file's body describes, checked.

    Raises
    ------
    ModelError
        If it is of another version or for another feature table.
    ValueError, KeyError, TypeError
        If it is damaged; :func:`load_model` turns these into a :class:`ModelError`.
    """
    if body["model_version"] != MODEL_VERSION:
        raise ModelError(
            f"This artifactlens reads models of version {MODEL_VERSION}; the file has "
            f"version {body['model_version']!r}.",
            "Train the model again with this version.",
        )
    if body["feature_table_sha256"] != feature_table_sha256():
        raise ModelError(
            "The model was made for another feature table than this artifactlens measures.",
            "Train the model again with this version.",
        )
    heads = []
    for kind in KIND_NAMES:
        entry = body["heads"][kind]
        slope, offset = (float(entry["calibration"][key]) for key in ("slope", "offset"))
        curves = {
            name: _curve_from(name, curve, slope) for name, curve in entry["curves"].items()
        }
        unknown = sorted(set(curves) - set(FEATURE_NAMES))
        if unknown:
            raise ValueError(f"unknown features {unknown}")
        sure, doubtful = float(entry["sure"]), float(entry["doubtful"])
        if not 0 < doubtful <= sure < 1:
            raise ValueError(f"operating points of {kind} are not 0 < doubtful <= sure < 1")
        base = offset + slope * float(entry["base"])
        if not np.isfinite(base) or not slope > 0:
            raise ValueError(f"calibration of {kind} is not finite and rising")
        pairs = _pairs_from(entry["pairs"], slope)
        heads.append(Head(kind, base, curves, sure, doubtful, pairs))
    return Model(str(body["name"]), sha256, tuple(heads), body["training"])


def _curve_from(name: str, entry: dict[str, Any], slope: float) -> Curve:
    edges = np.array(entry["edges"], dtype=np.float64)
    values = np.array(entry["values"], dtype=np.float64)
    missing = float(entry["missing"])
    fitting = edges.ndim == 1 and values.shape == (len(edges) + 1,)
    if not fitting or np.any(np.diff(edges) <= 0):
        raise ValueError(
            f"the curve of {name} needs rising edges and one value more than edges"
        )
    if not (
        np.isfinite(values).all() and np.isfinite(edges).all() and np.isfinite(missing)
    ):
        raise ValueError(f"the curve of {name} holds a number that is not finite")
    return Curve(edges, slope * values, slope * missing)


def _pairs_from(
    entries: list[dict[str, Any]], slope: float
) -> dict[tuple[str, str], Table]:
    if not isinstance(entries, list):
        raise TypeError("pairs are not a list")
    pairs: dict[tuple[str, str], Table] = {}
    for entry in entries:
        first, second = entry["features"]
        for name in (first, second):
            if name not in FEATURE_NAMES:
                raise ValueError(f"a pair of the unknown feature {name!r}")
        if first == second:
            raise ValueError(f"{first} is paired with itself")
        if (first, second) in pairs or (second, first) in pairs:
            raise ValueError(f"the pair of {first} and {second} stands twice")
        pairs[first, second] = _table_from(f"{first} and {second}", entry, slope)
    return pairs


def _table_from(names: str, entry: dict[str, Any], slope: float) -> Table:
    rows, columns = (np.array(edges, dtype=np.float64) for edges in entry["edges"])
    values = np.array(entry["values"], dtype=np.float64)
    fitting = rows.ndim == columns.ndim == 1 and values.shape == (
        len(rows) + 2,
        len(columns) + 2,
    )
    if not fitting or np.any(np.diff(rows) <= 0) or np.any(np.diff(columns) <= 0):
        raise ValueError(
            f"the table of {names} needs rising edges, and two rows and two columns more "
            "than edges"
        )
    if not all(np.isfinite(numbers).all() for numbers in (rows, columns, values)):
        raise ValueError(f"the table of {names} holds a number that is not finite")
    return Table(rows, columns, slope * values)
