"""Eye leads as an independent reference for eye movements.

The classifier sees scalp sites only: eye leads never enter the frame of a recording.

In ``clinical_absence`` the traces show where the leads stand: a blink deflects Pg1
*opposite* to Fp1 (below the eye) and Pg2 *with* Fp2, about as large (above or beside it).
So vertical and lateral movements both drive Pg1 and Pg2 apart, while a field from behind
the forehead moves both the same way and nearly cancels between them.
"""

from __future__ import annotations

import re
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from artifactlens.curves import Model
from artifactlens.epochs import EpochGrid
from artifactlens.errors import RecordingError
from artifactlens.flagging import MARKS
from artifactlens.pipeline import Measured
from artifactlens.recording import Recording
from artifactlens.sites import parse_label, without_prefix
from artifactlens.training.corpora.absence import CALIBRATION_SECONDS
from artifactlens.training.realchecks.agreement import (
    NO,
    NOT_CALLED,
    YES,
    Separation,
    separation,
    separation_text,
    share,
)
from artifactlens.training.realchecks.judged import Judged, judge_recording

BAND_HZ = (0.5, 10.0)

EYE_UV, NO_EYE_UV = 120.0, 40.0
"""Peak-to-peak limits between the two leads: design of this check, fixed beforehand."""

COMMON_FIELD_UV, COMMON_CORRELATION = 60.0, 0.5
OWN_SCORE = ", own score"
"""Suffix for seconds whose own score reaches the operating point, flag or not."""

POSTERIOR = ("P3", "P4", "Pz", "O1", "O2")


@dataclass(frozen=True, slots=True)
class WitnessCheck:
    """Eye scores of a recording against its eye leads.

    ``definition`` says how seconds were called. ``common`` seconds are those in which both
    leads move together by 60 uV or more, against an eye movement; ``common_flagged`` is the
    share of them marked as eye, per way of marking (NaN if there are none).
    """

    definition: str
    separation: Separation
    common: int
    common_flagged: dict[str, float]

    def text(self) -> str:
        """The check in plain lines."""
        lines = [separation_text(self.definition, self.separation)]
        if self.common:
            shares = ", ".join(f"{m} {s:.3f}" for m, s in self.common_flagged.items())
            lines.append(f"  both leads move together: {self.common} s; marked: {shares}")
        return "\n".join(lines)


def opposed(
    one: NDArray[np.floating],
    other: NDArray[np.floating],
    *,
    eye_uv: float = EYE_UV,
    no_eye_uv: float = NO_EYE_UV,
) -> NDArray[np.int8]:
    """Call each second by whether two leads on either side of the eye are driven apart.

    YES where the difference swings by more than ``eye_uv`` peak to peak and the two are
    negatively correlated, NO where it swings by less than ``no_eye_uv``, else NOT_CALLED.

    Parameters
    ----------
    one, other : array, shape (n_epochs, n_samples), microvolt
        Against a common reference far from the eyes, 0.5-10 Hz.

    Returns
    -------
    array, shape (n_epochs,)
    """
    apart = np.ptp(one - other, axis=1)
    truth = np.full(len(one), NOT_CALLED, dtype=np.int8)
    truth[(apart > eye_uv) & (covariance(one, other) < 0)] = YES
    truth[apart < no_eye_uv] = NO
    return truth


def together(one: NDArray[np.floating], other: NDArray[np.floating]) -> NDArray[np.bool_]:
    """Seconds in which two leads move together, as one field of the brain moves them.

    Correlation of at least 0.5 and a mean that swings by at least 60 uV peak to peak;
    shapes as for :func:`opposed`.
    """
    norm = np.sqrt(covariance(one, one) * covariance(other, other))
    alike = covariance(one, other) >= COMMON_CORRELATION * norm
    return np.asarray(alike & (np.ptp((one + other) / 2, axis=1) >= COMMON_FIELD_UV))


def covariance(
    one: NDArray[np.floating], other: NDArray[np.floating]
) -> NDArray[np.float64]:
    """Covariance per row, the row's own mean taken off; shape (n_epochs,)."""
    centred = one - one.mean(axis=1, keepdims=True)
    return np.asarray((centred * other).mean(axis=1), dtype=np.float64)


def single_lead(
    lead: NDArray[np.floating], *, eye_uv: float = EYE_UV, no_eye_uv: float = NO_EYE_UV
) -> NDArray[np.int8]:
    """Call each second by the swing of one eye channel; limits as in :func:`opposed`."""
    swing = np.ptp(lead, axis=1)
    truth = np.full(len(lead), NOT_CALLED, dtype=np.int8)
    truth[swing > eye_uv] = YES
    truth[swing < no_eye_uv] = NO
    return truth


def eye_band(
    recording: Recording, rows: NDArray[np.float64], grid: EpochGrid
) -> NDArray[np.float64]:
    """Traces in 0.5-10 Hz cut into the seconds of the grid.

    Second-order Butterworth forwards and backwards, over each uninterrupted stretch.

    Parameters
    ----------
    rows : array, shape (n, n_samples), microvolt

    Returns
    -------
    array, shape (n, n_epochs, samples of a second), microvolt
    """
    import scipy.signal

    sections = scipy.signal.butter(
        2, BAND_HZ, "bandpass", fs=recording.sampling_rate, output="sos"
    )
    smooth = np.zeros_like(rows)
    for stretch in recording.segments:
        at = slice(stretch.start, stretch.start + stretch.n_samples)
        smooth[:, at] = scipy.signal.sosfiltfilt(sections, rows[:, at], axis=1)
    return smooth[:, grid.start[:, None] + np.arange(grid.n_samples)]


def clinical_witness(
    measured: Measured, *, with_scalp: bool = False
) -> tuple[NDArray[np.int8], NDArray[np.bool_]]:
    """Truth of each second by Pg1 and Pg2, and the seconds in which they move together.

    Both leads are taken against the mean of P3, P4, Pz, O1, O2 (it cancels between them and
    takes part only in the sign of their correlation). ``with_scalp`` takes Fp1, a site that
    the classifier sees, in place of Pg2: less independent. The first 60 s are not called.

    Raises
    ------
    RecordingError
        If the recording has no such leads, or they are among the sites of the frame.
    """
    recording = measured.recording
    names = ("Pg1", "Fp1") if with_scalp else ("Pg1", "Pg2")
    places = [_channel(recording, name) for name in (*names, *POSTERIOR)]
    leads = {_channel(recording, name) for name in ("Pg1", "Pg2")}
    if leads & set(measured.frame.channels.tolist()):
        raise RecordingError(
            "The eye leads need to stay out of the sites that are judged; they are among them.",
            "Give a recording whose eye leads are named Pg1 and Pg2.",
        )
    data = recording.read(0, recording.n_samples)[places].astype(np.float64)
    one, other = eye_band(recording, data[:2] - data[2:].mean(axis=0), measured.grid)
    truth, common = opposed(one, other), together(one, other)
    early = measured.grid.onset < CALIBRATION_SECONDS
    truth[early], common[early] = NOT_CALLED, False
    return truth, common


def _channel(recording: Recording, name: str) -> int:
    for place, label in enumerate(recording.labels):
        first = re.split(r"[-\s]", without_prefix(label))[0]
        if first.upper() == name.upper() and parse_label(label).role != "derivation":
            return place
    raise RecordingError(
        f"A channel {name} is needed; {recording.name} has none.",
        "Give the recording of the corpus clinical_absence.",
    )


def clinical_check(
    model: Model, measured: Measured, judged: Judged | None = None
) -> tuple[WitnessCheck, WitnessCheck]:
    """Eye scores against the eye leads alone, and against Pg1 with Fp1.

    Parameters
    ----------
    model : Model
    measured : Measured
        Of ``clinical_absence/absence.edf``.
    judged : Judged, optional
        The same recording judged by the same model, if it is at hand.
    """
    seen = judge_recording(measured, model) if judged is None else judged
    limits = f"apart by > {EYE_UV:g} uV and opposed; no: apart by < {NO_EYE_UV:g} uV"
    pairs = (("eye leads alone, Pg1 and Pg2", False), ("Pg1 and Fp1 (a site)", True))
    first, second = (
        _compare(
            f"{name}, 0.5-10 Hz, yes: {limits}",
            *clinical_witness(measured, with_scalp=with_scalp),
            seen,
        )
        for name, with_scalp in pairs
    )
    return first, second


def eog_check(model: Model, measured: Measured) -> WitnessCheck:
    """Eye scores against the one EOG channel of ``sample_60eeg``: 24 s, an anecdote.

    Raises
    ------
    RecordingError
        If the recording has no channel of the type "eog".
    """
    recording = measured.recording
    if "eog" not in recording.types:
        raise RecordingError(
            f"An EOG channel is needed; {recording.name} has none.",
            "Give the recording of the corpus sample_60eeg.",
        )
    place = recording.types.index("eog")
    data = recording.read(0, recording.n_samples)[[place]].astype(np.float64)
    truth = single_lead(eye_band(recording, data, measured.grid)[0])
    return _compare(
        f"EOG channel (24 s only), 0.5-10 Hz, yes: > {EYE_UV:g} uV; no: < {NO_EYE_UV:g} uV",
        truth,
        np.zeros(len(truth), dtype=bool),
        judge_recording(measured, model),
    )


def _compare(
    definition: str, truth: NDArray[np.int8], common: NDArray[np.bool_], seen: Judged
) -> WitnessCheck:
    marked = {mark: seen.flagged(mark, "eye") for mark in MARKS}
    marked |= {f"{mark}{OWN_SCORE}": seen.reached(mark, "eye") for mark in MARKS}
    return WitnessCheck(
        definition,
        separation(truth, seen.second_score("eye"), marked),
        int(common.sum()),
        {mark: share(seconds[common]) for mark, seconds in marked.items()},
    )
