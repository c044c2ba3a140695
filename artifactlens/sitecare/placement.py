"""Swapped electrodes or labels: a site that behaves like another place on the head.

The potential of a site is much like that of the sites around it. Each site is therefore
predicted from the others by spherical splines (Perrin et al. 1989, [1]_), once at its own
place and once at the place of another site, and the two errors are compared. The splines are
taken as what they are in statistics, the best linear prediction of a smooth random field of
unknown mean (Wahba 1990, from memory), which says how large either error should be; where
derivations fall into several chains, each chain has an unknown mean of its own.

What cannot be seen from likeness alone: all sites exchanged with their mirror images, left
for right or front for back, have the same neighbours as before; half of them exchanged looks
like the other half exchanged. A site cannot be told from another nearby that shows nearly the
same. One site on a wrong place without a partner is not named either: in undisturbed
recordings single sites fit another place by as much. A lesion, a skull defect or a poor
contact may make a head uneven: a doubt asks for a look at placement and labels, it proves
nothing. Sites that are known to be faulty or bridged should be left out beforehand.

References
----------
.. [1] Perrin, Pernier, Bertrand & Echallier (1989), Electroencephalogr Clin Neurophysiol
   72:184, doi:10.1016/0013-4694(89)90180-6
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

if TYPE_CHECKING:
    from artifactlens.frames import Frame

Array = NDArray[np.float64]
Index = NDArray[np.intp]
Bools = NDArray[np.bool_]

SPLINE_ORDER = 4
SPLINE_TERMS = 50
"""Order m and number of Legendre terms of the splines, as in the source (m = 4)."""

NOISE_SHARE = 0.04
"""What is a site's own, neither field nor shared, as a share of the field's variance."""

FEWEST_SITES = 12
"""Placed sites without which no neighbourhood can be told from another."""

FEWEST_IN_CHAIN = 3
"""Sites of a chain that are of use: two of them only say how they differ."""

FEWEST_ACROSS = 5
"""Sites that both chains need if a site of one is compared with a site of the other."""

LEAST_SECONDS = 10.0

PAIR_DB, ACROSS_DB = 1.3, 1.75
"""How much smaller the errors must be with two sites exchanged: within one chain, and where
several chains leave their means open. The largest in undisturbed recordings at hand were
1.0 and 1.6 dB."""

WORSE = 1.5
"""How many times larger either site's own error (power) may be at the other's place."""

FEWEST_PASSES, MOST_PAIRS = 6, 64**3
"""The search stops after so many exchanges, or when so many pairs have been compared: nets of
256 electrodes would take minutes if their labels were all wrong."""

QUIET_UV2 = 1e-3
"""Variance of the steps below which a site is without signal."""


@dataclass(frozen=True, slots=True, eq=False)
class PlaceMoments:
    """Sums over epochs from which places are judged; those of two stretches add up.

    ``total`` (n_sites, n_sites) covariances, each epoch's divided by its mean variance over
    the sites, without unit; ``seconds`` (n_sites, n_sites) epochs in which both sites served.
    """

    total: Array
    seconds: Array

    @classmethod
    def none(cls, n_sites: int) -> PlaceMoments:
        """Of nothing seen."""
        return cls(np.zeros((n_sites, n_sites)), np.zeros((n_sites, n_sites)))

    def __add__(self, other: PlaceMoments) -> PlaceMoments:
        """Both stretches together."""
        return PlaceMoments(self.total + other.total, self.seconds + other.seconds)

    def covariance(self) -> Array:
        """Mean over the epochs, (n_sites, n_sites); NaN where fewer than ten were there."""
        known = self.seconds >= LEAST_SECONDS
        return np.where(known, self.total / np.maximum(self.seconds, 1), np.nan)


def placement_moments(slow: NDArray[np.float32], keep: Bools) -> PlaceMoments:
    """Covariance of the sites' steps, each epoch weighing alike.

    Steps from sample to sample instead of the traces themselves: slow waves, which are large
    and wide, would hide how neighbours differ. An epoch is divided by its mean variance, so
    that one loud second counts no more than a quiet one.

    Parameters
    ----------
    slow : array, shape (n_sites, n_epochs + 2, n_slow), microvolt
        Of :func:`artifactlens.features.spatial.slow_traces`, context epochs included.
    keep : array, shape (n_epochs, n_sites), bool
        Where a site's signal is there and no fault is known of it.
    """
    steps = np.diff(slow[:, 1:-1].transpose(1, 0, 2).astype(np.float64), axis=2)
    steps -= steps.mean(axis=2, keepdims=True)
    variance = np.mean(steps**2, axis=2)
    used = keep & (variance > QUIET_UV2)
    count = used.sum(axis=1)
    usual = np.where(used, variance, 0).sum(axis=1) / np.maximum(count, 1)
    scale = used / np.sqrt(np.where(usual > 0, usual, 1.0) * steps.shape[2])[:, None]
    scaled = steps * scale[:, :, None]
    there = used.astype(np.float64)
    return PlaceMoments(
        np.asarray((scaled @ scaled.transpose(0, 2, 1)).sum(axis=0)), there.T @ there
    )


@dataclass(frozen=True, slots=True)
class PlaceDoubt:
    """Sites that fit each other's places better than their own.

    Attributes
    ----------
    sites : tuple of int
        Rows of the frame, two of a pair; of a longer round each fits the place of the next,
        and the last that of the first.
    gain_db : float
        How much smaller the errors of prediction are at the other places, decibel of power,
        each error against what it should be; the largest of the exchanges if there are more.
    reason : str
        A clause: "F3 and F4 fit each other's places better than their own".
    """

    sites: tuple[int, ...]
    gain_db: float
    reason: str


def doubtful_places(
    covariance: NDArray[np.floating], frame: Frame, seconds: float
) -> tuple[PlaceDoubt, ...]:
    """Sites that behave as if they had been exchanged, the plainest first.

    The exchange of two sites that lessens the errors most is taken as made, and the search
    goes on from there, so that several exchanges and rounds of three or more are found.

    Parameters
    ----------
    covariance : array, shape (n_sites, n_sites)
        Of :meth:`PlaceMoments.covariance`; NaN where two sites never served together. Rows
        and columns of sites that are known to be faulty are best set to NaN.
    frame : Frame
    seconds : float
        Time over which it was taken.

    Returns
    -------
    tuple of PlaceDoubt
        Empty as well where it cannot be told: fewer than twelve placed sites that serve, or
        less than ten seconds.
    """
    matrix = np.asarray(covariance, dtype=np.float64)
    rows = _serving(matrix, frame)
    if len(rows) < FEWEST_SITES or seconds < LEAST_SECONDS:
        return ()
    alike = matrix[np.ix_(rows, rows)]
    size = 1 / np.sqrt(np.diag(alike))
    alike = alike * size[:, None] * size
    chain = np.unique(frame.chain[rows], return_inverse=True)[1].ravel()
    places = frame.positions[rows]
    place = np.arange(len(rows))
    bar = PAIR_DB if chain.max() == 0 else ACROSS_DB
    gains: dict[int, float] = {}
    for _ in range(min(len(rows) - 1, max(FEWEST_PASSES, MOST_PAIRS // len(rows) ** 2))):
        gain = exchange_gain(alike, places[place], chain)
        first, second = np.unravel_index(int(gain.argmax()), gain.shape)
        best = float(gain[first, second])
        if best < bar:
            break
        place[[first, second]] = place[[second, first]]
        for site in (int(first), int(second)):
            gains[site] = max(best, gains.get(site, 0.0))
    rounds = _rounds(place)
    found = [
        PlaceDoubt(
            tuple(int(rows[site]) for site in members),
            max(gains[site] for site in members),
            _reason([frame.sites[rows[site]] for site in members]),
        )
        for members in rounds
    ]
    return tuple(sorted(found, key=lambda doubt: -doubt.gain_db))


def _serving(matrix: Array, frame: Frame) -> Index:
    """Rows with a place, a signal, a known covariance with each other, and company."""
    placed = np.isfinite(frame.positions).all(axis=1) & (np.diag(matrix) > 0)
    rows = np.flatnonzero(placed & (np.array(frame.roles) != "reference"))
    while len(rows):
        lost = ~np.isfinite(matrix[np.ix_(rows, rows)])
        if not lost.any():
            break
        rows = np.delete(rows, lost.sum(axis=1).argmax())
    company = np.bincount(frame.chain[rows], minlength=1)[frame.chain[rows]]
    return rows[company >= FEWEST_IN_CHAIN]


def _rounds(place: Index) -> list[list[int]]:
    """Who stands where, as rounds of sites that each fit the place of the next."""
    left = set(np.flatnonzero(place != np.arange(len(place))).tolist())
    rounds = []
    while left:
        members = [min(left)]
        left.discard(members[0])
        while int(place[members[-1]]) != members[0]:
            members.append(int(place[members[-1]]))
            left.discard(members[-1])
        rounds.append(members)
    return rounds


def _reason(names: list[str]) -> str:
    if len(names) == 2:
        return f"{names[0]} and {names[1]} fit each other's places better than their own"
    steps = ", ".join(
        f"{name} that of {following}"
        for name, following in zip(names[1:], [*names[2:], names[0]], strict=True)
    )
    return f"better than their own {names[0]} fits the place of {names[1]}, {steps}"


def spline_kernel(cosine: Array) -> Array:
    r"""Likeness of two places by the cosine of the angle between them.

    :math:`g(x) = \frac{1}{4 \pi} \sum_{n=1} \frac{2 n + 1}{n^m (n + 1)^m} P_n(x)`,
    equation 3 of Perrin et al. (1989).
    """
    n = np.arange(1, SPLINE_TERMS + 1, dtype=np.float64)
    series = (2 * n + 1) / (n * (n + 1)) ** SPLINE_ORDER / (4 * np.pi)
    legendre = np.polynomial.legendre.legval(cosine, np.concatenate([[0.0], series]))
    return np.asarray(legendre, dtype=np.float64)


def exchange_gain(alike: Array, places: Array, chain: Index) -> Array:
    r"""What the exchange of any two sites would gain.

    The spline system with one constant for each chain has the inverse :math:`B`. Leaving out
    the sites :math:`S = (i, j)`, the errors at their own places are
    :math:`e = K (B y)_S`, :math:`K = (B_{SS})^{-1}` being their covariance (Dubrule 1983,
    Math Geol 15:687, from memory). At each other's places they are
    :math:`\tilde e = (y_i - \hat y(s_j), y_j - \hat y(s_i))`, of covariance
    :math:`\tilde K`. The gain is :math:`10 \log_{10}` of
    :math:`\langle e' K^{-1} e \rangle / \langle \tilde e' \tilde K^{-1} \tilde e \rangle`.

    Parameters
    ----------
    alike : array, shape (n_sites, n_sites)
        Correlation of the sites.
    places : array, shape (n_sites, 3)
        From the centre of the head; only the direction counts.
    chain : array, shape (n_sites,)
        Number of the connected chain, from 0.

    Returns
    -------
    array, shape (n_sites, n_sites), decibel
        Symmetric, -inf on the diagonal and where it cannot be told. Positive: together the
        two fit better at each other's places.
    """
    n, n_chains = len(places), int(chain.max()) + 1
    directions = places / np.linalg.norm(places, axis=1, keepdims=True)
    kernel = spline_kernel(np.clip(directions @ directions.T, -1, 1))
    noise = NOISE_SHARE * kernel[0, 0]
    inverse = spline_inverse(kernel, noise, chain)
    # What is asked for at place s in chain c, and the answer of all sites: row s n_chains + c.
    asked = np.concatenate(
        [np.repeat(kernel, n_chains, axis=0), np.tile(np.eye(n_chains), (n, 1))], axis=1
    )
    answer = asked @ inverse
    # y, B y and the answers, and how they vary together.
    linear = np.concatenate([np.eye(n), inverse[:n, :n], answer[:, :n]])
    moments = linear @ alike @ linear.T

    i, j = np.triu_indices(n, 1)
    pair = np.stack([i, j], axis=1)
    due = np.asarray(np.linalg.inv(inverse[_blocks(pair)]), dtype=np.float64)
    error = due @ moments[_blocks(n + pair)] @ due
    own = _against(due, error)

    # The other's place in the own chain, without the two: y - answer + weight (B y)_S.
    row = pair[:, ::-1] * n_chains + chain[pair]
    weight = answer[row[:, :, None], pair[:, None, :]] @ due
    one = np.broadcast_to(np.eye(2), weight.shape)
    parts = np.concatenate([one, -one, weight], axis=2)
    terms = np.concatenate([pair, 2 * n + row, n + pair], axis=1)
    other_error = parts @ moments[_blocks(terms)] @ parts.transpose(0, 2, 1)
    told = answer[row] @ asked[row].transpose(0, 2, 1)
    told -= weight @ answer[row[:, :, None], pair[:, None, :]].transpose(0, 2, 1)
    other_due = kernel[_blocks(pair)] + noise * np.eye(2) - told
    other = _against(other_due, other_error)

    company = np.bincount(chain)[chain]
    known = (own > 0) & (other > 0)
    known &= (chain[i] == chain[j]) | (company[pair].min(axis=1) >= FEWEST_ACROSS)
    # At a place that is less well known much error is due: what fits nowhere must not gain.
    known &= (_each(other_error) <= WORSE * _each(error)).all(axis=1)
    gain = np.full((n, n), -np.inf)
    gain[i[known], j[known]] = 10 * np.log10(own[known] / other[known])
    gain[j, i] = gain[i, j]
    return gain


def spline_inverse(kernel: Array, noise: float, chain: Index) -> Array:
    """Inverse of the spline system: the sites' weights, then one constant for each chain.

    ``kernel`` (n_sites, n_sites) of :func:`spline_kernel`, ``noise`` on its diagonal; shape
    (n_sites + n_chains, n_sites + n_chains).
    """
    n, n_chains = len(kernel), int(chain.max()) + 1
    member = np.eye(n_chains)[chain]
    system = np.zeros((n + n_chains, n + n_chains))
    system[:n, :n] = kernel + noise * np.eye(n)
    system[:n, n:], system[n:, :n] = member, member.T
    return np.asarray(np.linalg.inv(system), dtype=np.float64)


def _blocks(rows: Index) -> tuple[Index, Index]:
    """Index of the square block of each pair's rows."""
    return rows[:, :, None], rows[:, None, :]


def _against(due: Array, error: Array) -> Array:
    """Size of errors against what is due: trace of due^-1 error, for each pair."""
    return np.asarray(np.einsum("paa->p", np.linalg.solve(due, error)))


def _each(matrices: Array) -> Array:
    return np.asarray(np.einsum("paa->pa", matrices))
