"""The technologist's job: one recording in, the sites to look after out, on one sheet."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path
from typing import TYPE_CHECKING

from artifactlens.curves import load_model
from artifactlens.errors import OptionError
from artifactlens.impedances import impedances_of, read_impedances
from artifactlens.last_minutes import last_minutes_of
from artifactlens.pipeline import (
    Progress,
    check_options,
    conclude,
    default_folder,
    measure_recording,
)
from artifactlens.recording import open_recording

if TYPE_CHECKING:
    from artifactlens.result import Result


def sites_to_folder(
    path: str | Path,
    folder: str | Path | None = None,
    *,
    last_minutes: float | None = None,
    impedances: str | Path | None = None,
    calibration: bool = False,
    line_frequency: float | None = None,
    progress: Progress | None = None,
) -> tuple[Result, Path]:
    """Judge the sites of a file and write the sheet; the recording itself is only read.

    Parameters
    ----------
    path : path
    folder : path, optional
        Made if need be; ``x.sites`` beside ``x.edf`` if not given. Results of an earlier
        run in it are replaced.
    last_minutes : float, optional
        Judge only so much of the end. Times stay counted from the start, and whether the
        sites were fit to start is not told then.
    impedances : path, optional
        A table, see :func:`artifactlens.impedances.read_impedances`.
    calibration : bool
        Look for the answers to blinks, gaze left and right and jaw clench even where no
        annotation announces them.
    line_frequency, progress
        As for :func:`artifactlens.pipeline.triage`.

    Returns
    -------
    Result, Path
        The folder as the second.

    Raises
    ------
    ArtifactlensError
        With what was needed, what was given and what to do; nothing is written half.
    """
    from artifactlens.export.folder import SITES_FILES, prepared_folder, write_sites
    from artifactlens.page.sheet import sheet_html

    # What can fail at once fails before the long pass over the recording.
    if calibration and last_minutes is not None:
        raise OptionError(
            "A calibration is done at the start; only the last minutes were to be judged.",
            "Leave out --last, or --calibration.",
        )
    check_options("sure", line_frequency)
    model = load_model()
    whole = open_recording(path)
    recording = whole if last_minutes is None else last_minutes_of(whole, last_minutes)
    values = read_impedances(recording, None if impedances is None else Path(impedances))
    target = sites_folder(path) if folder is None else Path(folder)
    with prepared_folder(target, SITES_FILES):
        measured = measure_recording(
            recording, line_frequency=line_frequency, progress=progress
        )
        result = conclude(
            measured,
            model,
            mark="sure",
            line_frequency=line_frequency,
            impedances_kohm=impedances_of(measured.frame, values) if values else None,
            calibration=calibration,
        )
        if recording is not whole:
            result = replace(result, setup=None)  # the start was not looked at
        write_sites(result, target, sites_html=sheet_html(result))
    return result, target


def sites_folder(path: str | Path) -> Path:
    """``x.sites`` beside ``x.edf`` or ``x.fif.gz``."""
    return default_folder(Path(path)).with_suffix(".sites")
