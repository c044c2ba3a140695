"""What is usual at a site while little was seen of it yet."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from artifactlens.epochs import median_of_known
from artifactlens.features import usual_values

PRIOR_EPOCHS = 10.0
"""A site's usual value leans on that of the whole head as if on so many seconds."""


def leaning_usual(
    values: NDArray[np.float32], sites: NDArray[np.bool_]
) -> NDArray[np.float32]:
    """Usual value of each feature at each site, leaning on the head's while it is young.

    Parameters
    ----------
    values : array, shape (n_measured, n_epochs, n_sites)
        NaN where a site was not there: its own seconds count, not those of the stream.
    sites : array, shape (n_sites,), bool
        Who makes up the head: references do not.

    Returns
    -------
    array, shape (n_measured, n_sites)
    """
    own = usual_values(values)
    head = median_of_known(own[:, sites].T)[:, None]
    lean = PRIOR_EPOCHS / (np.isfinite(values[0]).sum(axis=0) + PRIOR_EPOCHS)
    known = np.where(np.isfinite(own), own, head)
    leaning = (1 - lean) * known + lean * np.where(np.isfinite(head), head, own)
    return np.asarray(leaning, dtype=np.float32)
