"""What two features say together, apart from what each says alone."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]


class Purified(NamedTuple):
    """``pure[j, k] + rows[j] + columns[k] + mean`` is the table that was given."""

    pure: Array
    rows: Array
    columns: Array
    mean: float


def purify(values: Array, counts: NDArray[np.integer]) -> Purified:
    r"""Take out of a two-way table all that one of its features says alone.

    The functional analysis of variance with respect to the cells' weights [1]_: every row
    and every column of ``pure`` has the weighted mean zero, and so have ``rows`` and
    ``columns``. Centring rows and columns in turn gets there step by step, but slowly
    where both features go together; its limit is the weighted least-squares fit of
    ``rows[j] + columns[k] + mean``, which is solved for here.

    Parameters
    ----------
    values : array, shape (n_rows, n_columns)
    counts : array, shape (n_rows, n_columns)
        How often each cell was met. One more, spread evenly over all cells, keeps the
        parts of cells that were never met determined.

    References
    ----------
    .. [1] Lengerich et al. (2020), AISTATS, PMLR 108, "Purifying interaction effects with
       the functional ANOVA: an efficient algorithm for recovering identifiable additive
       models".
    """
    weight = counts + 1 / counts.size
    weight /= weight.sum()
    of_row, of_column = weight.sum(axis=1), weight.sum(axis=0)
    pure = values
    rows, columns = np.zeros(len(of_row)), np.zeros(len(of_column))
    # Normal equations with the rows eliminated; the last term asks for a mean of zero.
    system = np.diag(of_column) - weight.T @ (weight / of_row[:, None])
    system += np.outer(of_column, of_column)
    for _ in range(2):  # the second time takes off the rounding of the first
        row_mean = (weight * pure).sum(axis=1) / of_row
        step = np.linalg.solve(system, (weight * (pure - row_mean[:, None])).sum(axis=0))
        row_step = row_mean - weight @ step / of_row
        pure = pure - row_step[:, None] - step
        rows, columns = rows + row_step, columns + step
    mean = float(of_row @ rows)
    return Purified(pure, rows - mean, columns, mean)
