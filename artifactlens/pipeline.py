"""The main job: one recording in, one result out, and its folder of outputs."""

from __future__ import annotations

import dataclasses
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np

from artifactlens import __version__
from artifactlens.assessable import assess
from artifactlens.curves import Model, load_model
from artifactlens.epochs import BATCH_EPOCHS, SLOWEST_HZ, EpochGrid, batches, epoch_grid
from artifactlens.errors import OptionError, RecordingError
from artifactlens.features import FeatureTable, feature_table, mains_is_carried, measure
from artifactlens.features.spatial import EyeLeads, eye_leads
from artifactlens.flagging import (
    MARKS,
    Judgement,
    judge,
    make_flags,
    pop_moments,
    touched_seconds,
)
from artifactlens.frames import Frame, build_frame
from artifactlens.impedances import impedances_of, read_impedances
from artifactlens.kinds import KIND_NAMES
from artifactlens.recording import Recording, from_raw, open_recording
from artifactlens.result import RecordingFacts, Result, Scores, finite_or_none
from artifactlens.sitecare.answers import answer_findings
from artifactlens.sitecare.biocal import calibrate
from artifactlens.sitecare.evidence import Evidence
from artifactlens.sitecare.setup import setup_check
from artifactlens.sitecare.shares import site_evidence
from artifactlens.sitecare.signs import SignKeeper, SignLog, signs_of
from artifactlens.sitecare.verdicts import advise, site_verdicts
from artifactlens.survey import LINE_FREQUENCIES, PLAUSIBLE_UV, Conditions, survey

if TYPE_CHECKING:
    import mne
    from numpy.typing import NDArray

Progress = Callable[[int, int], None]
"""Called with seconds done and seconds in all."""

CLOSEUPS = 60


@dataclass(frozen=True, slots=True)
class Measured:
    """Everything measured on a recording before any model is asked."""

    recording: Recording
    frame: Frame
    leads: EyeLeads
    conditions: Conditions
    grid: EpochGrid
    table: FeatureTable
    log: SignLog
    faults: dict[str, NDArray[np.float64]]


def measure_recording(
    recording: Recording,
    *,
    line_frequency: float | None = None,
    batch_epochs: int = BATCH_EPOCHS,
    progress: Progress | None = None,
) -> Measured:
    """Resolve the sites, survey the recording and measure all features in one pass.

    Parameters
    ----------
    recording : Recording
    line_frequency : float, optional
        50 or 60 hertz if known; found by itself otherwise.
    batch_epochs : int
        Epochs held in memory at a time; no result depends on it.
    progress : callable, optional

    Raises
    ------
    RecordingError, SitesError
        If there is no whole second to judge, no signal, too few samples a second, or no
        electrode site.
    """
    frame = build_frame(recording.labels, recording.types, recording.positions)
    grid = epoch_grid(recording)
    if not len(grid):
        raise RecordingError(
            f"At least one whole second of signal is needed; {recording.name} has "
            f"{recording.n_samples} samples at {recording.sampling_rate:g} Hz.",
            "Check that the recording was exported completely.",
        )
    if recording.sampling_rate < SLOWEST_HZ:
        raise RecordingError(
            f"At least {SLOWEST_HZ:g} samples a second are needed; {recording.name} has "
            f"{recording.sampling_rate:g}.",
            "Give the recording itself, not a trend of it.",
        )
    conditions = survey(recording, frame, line_frequency)
    if conditions.average_reference and frame.montage == "referential":
        frame = build_frame(
            recording.labels, recording.types, recording.positions, measured_average=True
        )
    leads = eye_leads(frame)
    parts = []
    keeper = SignKeeper(len(grid), len(frame.sites))
    for batch in batches(recording, frame, grid, batch_epochs, conditions.levels_uv):
        parts.append(measure(batch, frame, leads, conditions))
        onset = grid.onset[batch.first : batch.first + len(batch)]
        keeper.add(onset, *signs_of(batch, frame, conditions))
        if progress is not None:
            progress(batch.first + len(batch), len(grid))
    table = feature_table(parts, grid.segment)
    log = keeper.log()
    faults = {
        name: getattr(log.signs, name).mean(axis=0)
        for name in ("flat", "missing", "clipped")
    }
    if not np.isfinite(table.values).any():
        raise _no_signal(faults, conditions.amplitude_uv)
    return Measured(recording, frame, leads, conditions, grid, table, log, faults)


def _no_signal(
    faults: dict[str, NDArray[np.float64]], amplitude_uv: float
) -> RecordingError:
    """Say what is there instead of a signal, and which unit would make it one."""
    n_channels = len(faults["flat"])
    needed = "A signal is needed on at least two EEG channels"
    if faults["missing"].sum() > faults["flat"].sum():
        return RecordingError(
            f"{needed}; all {n_channels} hold no numbers (NaN).", "Check the export."
        )
    if amplitude_uv > 0:
        return RecordingError(
            f"{needed}; all {n_channels} are flat: their median amplitude is "
            f"{_microvolts(amplitude_uv)}; {_unit_advice(amplitude_uv)}.",
            "Check the unit in the header, and export the recording again with the right one.",
        )
    return RecordingError(
        f"{needed}; all {n_channels} are flat.",
        "Check that the recorder was connected and that the right channels were exported.",
    )


def conclude(
    measured: Measured,
    model: Model,
    *,
    mark: str,
    line_frequency: float | None,
    impedances_kohm: NDArray[np.float64] | None = None,
    calibration: bool = False,
) -> Result:
    """Judge what was measured and put the result together.

    Parameters
    ----------
    measured, model, mark, line_frequency
        What was measured, and how it is judged.
    impedances_kohm : array, shape (n_sites,), kilo-ohm, optional
        NaN where unknown; shown beside the sites, and used for nothing else.
    calibration : bool
        Look for the answers to a biological calibration that no annotation announces.
    """
    recording, frame, conditions = measured.recording, measured.frame, measured.conditions
    amplitude = conditions.amplitude_uv
    implausible = not PLAUSIBLE_UV[0] <= amplitude <= PLAUSIBLE_UV[1]
    assessable = assess(
        frame, measured.leads, conditions, float(len(measured.grid)), implausible
    )
    judgement = judge(model, measured.table, frame, assessable)
    end = recording.duration
    flags = make_flags(
        model, judgement, measured.table, measured.grid, frame, conditions, mark, end
    )
    sites = site_evidence(
        model,
        judgement.probability,
        measured.table,
        frame,
        assessable,
        flags,
        measured.faults,
        mark,
    )
    evidence = _evidence(measured, model, judgement)
    asked = calibrate(recording, frame, asked=calibration)
    advice = advise(evidence, answer_findings(asked, frame, measured.log))
    verdicts, reasons = site_verdicts(evidence, advice)
    ohms = np.full(len(sites), np.nan) if impedances_kohm is None else impedances_kohm
    sites = tuple(
        dataclasses.replace(
            site, verdict=verdict, why=why, impedance_kohm=finite_or_none(kohm)
        )
        for site, verdict, why, kohm in zip(sites, verdicts, reasons, ohms, strict=True)
    )
    notes = [*recording.notes, *frame.notes]
    if implausible:
        notes.append(unit_note(amplitude))
    return Result(
        tool_version=__version__,
        model_name=model.name,
        model_sha256=model.sha256,
        parameters={
            "mark": mark,
            "line_frequency": f"{line_frequency:g}" if line_frequency else "auto",
        },
        recording=_facts(measured, tuple(notes)),
        assessable=assessable,
        touched=touched_seconds(flags, end),
        flags=flags,
        sites=sites,
        advice=advice,
        setup=setup_check(evidence, asked.sentences),
        scores=Scores(
            kinds=KIND_NAMES,
            onset=measured.grid.onset,
            sites=frame.sites,
            probability=judgement.probability,
        ),
    )


def _evidence(measured: Measured, model: Model, judgement: Judgement) -> Evidence:
    """What the search for electrode faults looks at; its operating points are fixed."""
    table, conditions = measured.table, measured.conditions
    return Evidence.of(
        measured.frame,
        measured.log,
        model,
        judgement.probability,
        pop_moments(model, judgement.probability, table.step_at, measured.grid),
        table,
        conditions.line_frequency if mains_is_carried(conditions) else None,
    )


def unit_note(amplitude_uv: float) -> str:
    """Say that the amplitudes cannot be those of scalp EEG and which unit would fit."""
    low, high = PLAUSIBLE_UV
    return (
        f"The median amplitude is {_microvolts(amplitude_uv)}, where scalp EEG has {low:g} to "
        f"{high:g} uV: {_unit_advice(amplitude_uv)}. Check the unit in the header; nothing "
        "was rescaled."
    )


def _microvolts(amplitude_uv: float) -> str:
    digits = ".0f" if amplitude_uv >= 100 else ".2g"
    return f"{amplitude_uv:{digits}} uV"


def _unit_advice(amplitude_uv: float) -> str:
    low, high = PLAUSIBLE_UV
    for unit, factor in (("mV", 1e3), ("V", 1e6), ("nV", 1e-3)):
        if low <= amplitude_uv * factor <= high:
            return f"the values would fit scalp EEG if they were in {unit}"
    return "no usual unit would make them fit"


def _facts(measured: Measured, notes: tuple[str, ...]) -> RecordingFacts:
    recording, conditions = measured.recording, measured.conditions
    rate = recording.sampling_rate
    ends = [segment.onset + segment.n_samples / rate for segment in recording.segments]
    gaps = tuple(
        (round(end, 3), round(segment.onset - end, 3))
        for end, segment in zip(ends[:-1], recording.segments[1:], strict=True)
        if segment.onset - end > 0.5 / rate
    )
    return RecordingFacts(
        name=recording.name,
        format=recording.format,
        duration=round(recording.duration, 3),
        sampling_rate=rate,
        montage=measured.frame.montage,
        high_pass=conditions.high_pass,
        low_pass=None
        if conditions.low_pass_source == "sampling rate"
        else conditions.low_pass,
        notch=conditions.notch,
        line_frequency=conditions.line_frequency if mains_is_carried(conditions) else None,
        gaps=gaps,
        set_aside=(*recording.set_aside, *measured.frame.set_aside),
        annotation_onsets=tuple(round(entry[0], 3) for entry in recording.annotations),
        notes=notes,
    )


def triage(
    source: str | Path | Recording | mne.io.BaseRaw,
    *,
    mark: str = "sure",
    line_frequency: float | None = None,
    progress: Progress | None = None,
) -> Result:
    """Triage one recording; nothing is written.

    Parameters
    ----------
    source : path, mne.io.Raw or Recording
    mark : str
        "sure" marks little and surely, "doubtful" all that is doubtful.
    line_frequency : float, optional
        50 or 60 hertz if known; found by itself otherwise.
    progress : callable, optional
        Called with seconds done and seconds in all.

    Raises
    ------
    ArtifactlensError
        With what was needed, what was given and what to do.
    """
    check_options(mark, line_frequency)
    model = load_model()
    measured = measure_recording(
        _as_recording(source), line_frequency=line_frequency, progress=progress
    )
    return conclude(
        measured,
        model,
        mark=mark,
        line_frequency=line_frequency,
        impedances_kohm=_known_impedances(measured),
    )


def _known_impedances(measured: Measured) -> NDArray[np.float64] | None:
    """Kilo-ohm of every site, by what the file or its BIDS folder states; None if nothing."""
    values = read_impedances(measured.recording, None)
    return impedances_of(measured.frame, values) if values else None


def check_options(mark: str, line_frequency: float | None) -> None:
    """Refuse what no triage takes, before any work."""
    if mark not in MARKS:
        raise OptionError(
            f"mark needs to be {' or '.join(MARKS)}; given was {mark!r}.",
            "'sure' marks little and surely, 'doubtful' all that is doubtful.",
        )
    if line_frequency is not None and line_frequency not in LINE_FREQUENCIES:
        raise OptionError(
            f"line_frequency needs to be 50 or 60 Hz; given was {line_frequency!r}.",
            "Leave it out to have it found by itself.",
        )


def _as_recording(source: str | Path | Recording | mne.io.BaseRaw) -> Recording:
    if isinstance(source, Recording):
        return source
    if isinstance(source, str | Path):
        return open_recording(source)
    return from_raw(source)


def default_folder(path: Path) -> Path:
    """``x.triage`` beside ``x.edf`` or ``x.fif.gz``."""
    packed = path.name.lower().endswith(".fif.gz")
    return path.with_name(f"{Path(path.stem).stem if packed else path.stem}.triage")


def triage_to_folder(
    path: str | Path,
    folder: str | Path | None = None,
    *,
    mark: str = "sure",
    line_frequency: float | None = None,
    progress: Progress | None = None,
) -> tuple[Result, Path]:
    """Triage a file and write all outputs; the recording itself is only read.

    Parameters
    ----------
    path : path
    folder : path, optional
        Made if need be; ``x.triage`` beside ``x.edf`` if not given. Results of an earlier
        run in it are replaced.
    mark, line_frequency, progress
        As for :func:`triage`.

    Returns
    -------
    Result, Path
        The folder as the second.

    Raises
    ------
    ArtifactlensError
        With what was needed, what was given and what to do; nothing is written half.
    """
    from artifactlens.closeups import closeups
    from artifactlens.export.folder import prepared_folder, write_all
    from artifactlens.page.need import by_need
    from artifactlens.page.report import report_html
    from artifactlens.page.sheet import sheet_html

    # What can fail at once fails before the long pass over the recording.
    check_options(mark, line_frequency)
    model = load_model()
    recording = open_recording(path)
    target = default_folder(Path(path)) if folder is None else Path(folder)
    with prepared_folder(target):
        measured = measure_recording(
            recording, line_frequency=line_frequency, progress=progress
        )
        result = conclude(
            measured,
            model,
            mark=mark,
            line_frequency=line_frequency,
            impedances_kohm=_known_impedances(measured),
        )
        chosen = by_need(result.flags, result.recording.duration)[:CLOSEUPS]
        traces = closeups(recording, measured.frame, [flag for flag, _ in chosen])
        page = report_html(result, traces)
        write_all(
            result,
            target,
            start=recording.start,
            report_html=page,
            sites_html=sheet_html(result),
        )
    return result, target
