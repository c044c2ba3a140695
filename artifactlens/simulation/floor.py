"""The fast end of a scalp spectrum, for recordings whose recorder cut it off.

Without it, "power above 45 Hz" would tell a recorder with a low-pass from one without, and
a model trained on both would take that for muscle.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from artifactlens.errors import SamplingRateError
from artifactlens.simulation.brain import mixing

if TYPE_CHECKING:
    from numpy.typing import ArrayLike, NDArray

FLOOR_EXPONENT = 2.9
"""Fall of scalp power with frequency under complete paralysis, that is without muscle.

Our own straight-line fits of log10 power on log10 frequency, 30 to 98 Hz without 48 to
52 Hz, to six spectra of two people digitised from figure 1 of Whitham et al. (2007), Clin
Neurophysiol 118:1877: mean 2.9, single spectra 2.6 to 3.1, residual 0.08 decades rms. From
20 Hz on, beta makes it steeper: mean 3.4, 2.9 to 3.7, residual 0.13 decades.
"""

FLOOR_AT_45_HZ = 0.030
"""Level of the same fits at 45 Hz, square microvolt per hertz: mean, 0.020 to 0.036."""

_WHITE_BAND_HZ = 100.0


def floor_power(freqs: ArrayLike) -> NDArray[np.float64]:
    """Power of scalp EEG without muscle above about 30 Hz, square microvolt per hertz.

    ``freqs`` in hertz, any shape, above 0. A straight line in log-log: ``FLOOR_EXPONENT``
    and ``FLOOR_AT_45_HZ``.
    """
    ratio = np.asarray(freqs, dtype=np.float64) / 45.0
    return np.asarray(FLOOR_AT_45_HZ * ratio**-FLOOR_EXPONENT)


def extend_above(
    x: ArrayLike,
    sfreq: float,
    from_hz: float,
    rng: np.random.Generator,
    *,
    sites: ArrayLike | None = None,
    amplifier_uv: float = 0.4,
) -> NDArray[np.float32]:
    """Clean recording with the fast activity filled in that its recorder took out.

    For each row the power between 0.65 and 0.85 of ``from_hz`` is continued with the
    exponent of :func:`floor_power`; white noise of the amplifier is added to that. Only
    what is missing is filled: target less measured power, so that the roll-off and a notch
    above it are made good and nothing is doubled. Only for rows without muscle, whose
    strength just below ``from_hz`` is that of brain.

    Parameters
    ----------
    x : array, shape (n_rows, n_samples)
        The recording, microvolt.
    sfreq : float
        Sampling rate, hertz.
    from_hz : float
        Hertz, where the recorder's low-pass begins to act.
    rng : numpy Generator
        Where chance comes from.
    sites : array, shape (n_rows, 3), or None
        With positions (metre) the filled-in activity is that of random cortical dipoles,
        alike at neighbouring sites as brain is; without, each row has its own.
    amplifier_uv : float
        Root mean square of the amplifier's noise in 100 Hz, microvolt; 0.2 to 0.6 is usual
        (common practice).

    Returns
    -------
    array, shape (n_rows, n_samples), float32, microvolt

    Raises
    ------
    SamplingRateError
        If there is no room above ``from_hz``, or less than 4 s to measure from.
    """
    from scipy.fft import irfft, next_fast_len, rfft, rfftfreq
    from scipy.signal import welch

    signal = np.atleast_2d(np.asarray(x, dtype=np.float64))
    n_rows, n_samples = signal.shape
    if from_hz >= sfreq / 2 or n_samples < 4 * sfreq:
        raise SamplingRateError(
            f"Filling in above {from_hz:g} Hz needs a higher sampling rate than "
            f"{2 * from_hz:g} Hz and 4 s of signal; given {sfreq:g} Hz and "
            f"{n_samples / sfreq:.1f} s.",
            "Leave this recording as it is.",
        )
    grid, measured = welch(signal, sfreq, nperseg=int(sfreq), average="median", axis=-1)
    anchor = (grid >= 0.65 * from_hz) & (grid <= 0.85 * from_hz)
    level = np.mean(measured[:, anchor] / floor_power(grid[anchor]), axis=1)
    padded = next_fast_len(n_samples, real=True)
    freqs = rfftfreq(padded, 1 / sfreq)
    have = np.stack([np.interp(freqs, grid, row) for row in measured])
    white = amplifier_uv**2 / _WHITE_BAND_HZ
    brain = level[:, None] * floor_power(np.maximum(freqs, 1.0))
    missing = np.where(freqs > 0.85 * from_hz, np.maximum(brain + white - have, 0.0), 0.0)
    of_amplifier = np.minimum(missing, white)

    def filled(
        power: NDArray[np.float64], unit: NDArray[np.float64]
    ) -> NDArray[np.float64]:
        return np.asarray(irfft(rfft(unit) * np.sqrt(power * sfreq / 2), padded))

    fast = rng.standard_normal((n_rows, padded))
    if sites is not None:
        seen = mixing(sites, 4 * n_rows + 40, rng)
        seen /= np.linalg.norm(seen, axis=1, keepdims=True)
        fast = seen @ rng.standard_normal((seen.shape[1], padded))
    noise = rng.standard_normal((n_rows, padded))
    added = filled(missing - of_amplifier, fast) + filled(of_amplifier, noise)
    return np.asarray(signal + added[:, :n_samples], dtype=np.float32)
