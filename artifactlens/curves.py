"""The shipped model: one step curve per feature and kind, as plain numbers.

A boosted forest whose trees each use one feature *is* a sum of step functions of single
features, so it is stored as such: edges, the value of every step, and one value for a
missing measurement. Nothing in the file is executable.
"""

from __future__ import annotations

import hashlib
import json
from dataclasses import dataclass
from importlib import resources
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from artifactlens.errors import ModelError
from artifactlens.features import FEATURE_NAMES, feature_table_sha256
from artifactlens.kinds import KIND_NAMES

if TYPE_CHECKING:
    from artifactlens.features import FeatureTable

MODEL_VERSION = 1
SHIPPED = "scalp-1.json"


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
        flat = np.asarray(x, dtype=np.float64)
        step = self.values[
            np.searchsorted(self.edges, flat, side="left").clip(max=len(self.edges))
        ]
        return np.where(np.isnan(flat), self.missing, step)


@dataclass(frozen=True, slots=True)
class Head:
    """The score of one kind: base rate plus one curve per feature, in log-odds.

    ``sure`` and ``doubtful`` are the two operating points, as probabilities.
    """

    kind: str
    base: float
    curves: dict[str, Curve]
    sure: float
    doubtful: float

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
            column = table.column(name)
            # One search over the edges of all kinds serves all of them.
            edges = np.unique(np.concatenate([curve.edges for _, curve in users]))
            place = np.searchsorted(edges, column.astype(np.float64), side="left")
            place[np.isnan(column)] = len(edges) + 1
            probes = np.append(edges, np.inf)
            for row, curve in users:
                scores[row] += np.append(curve(probes), curve.missing)[place]
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
        return _model_from(body, hashlib.sha256(raw).hexdigest())
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


def _model_from(body: dict[str, Any], sha256: str) -> Model:
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
        heads.append(Head(kind, base, curves, sure, doubtful))
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
