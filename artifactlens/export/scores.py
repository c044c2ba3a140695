"""The calibrated probabilities of every second and site, as compressed numpy arrays."""

from __future__ import annotations

import io

import numpy as np

from artifactlens.errors import ResultError
from artifactlens.result import CAUTION, Result


def scores_npz(result: Result) -> bytes:
    """The scores as an ``.npz`` archive that loads without pickle.

    Returns
    -------
    bytes
        Arrays ``kinds`` (n_kinds,) and ``sites`` (n_sites,) of text, ``onset`` (n_epochs,)
        float64 in seconds, ``probability`` (n_kinds, n_epochs, n_sites) float32 from 0 to
        1, NaN where not assessable, and ``caution``, a text. Equal scores give equal bytes.

    Raises
    ------
    ResultError
        If the result carries no scores, as one read back from JSON.
    """
    scores = result.scores
    if scores is None:
        raise ResultError(
            "Saving scores needs a result that carries them; this one has none.",
            "Triage the recording again: result.json alone does not hold the scores.",
        )
    buffer = io.BytesIO()
    np.savez_compressed(
        buffer,
        kinds=np.array(scores.kinds, dtype=np.str_),
        onset=np.asarray(scores.onset, dtype=np.float64),
        sites=np.array(scores.sites, dtype=np.str_),
        probability=np.asarray(scores.probability, dtype=np.float32),
        caution=np.array(CAUTION, dtype=np.str_),
    )
    return buffer.getvalue()
