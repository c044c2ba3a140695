"""Everything that artifactlens says of one recording, in folders beside it."""

from __future__ import annotations

import os
from collections.abc import Iterator
from contextlib import contextmanager, suppress
from datetime import datetime
from fnmatch import fnmatchcase
from pathlib import Path

from artifactlens.errors import OutputError
from artifactlens.export.atomic import probe_folder, write_together
from artifactlens.export.flags_table import flags_columns_json, flags_tsv
from artifactlens.export.marks import marks_edf
from artifactlens.export.scores import scores_npz
from artifactlens.export.sites_table import sites_columns_json, sites_tsv
from artifactlens.result import Result

_NOT_IN_NAMES = frozenset('<>:"/\\|?*')  # separators, and what Windows reserves
_LONGEST_NAME = 60  # characters of up to four bytes; file systems take 255 bytes

SITES_FILES = frozenset({"sites.html", "sites.tsv", "sites.json", "result.json"})
"""What :func:`write_sites` leaves in its folder."""

TRIAGE_FILES = SITES_FILES | {
    "flags.tsv", "flags.json", "scores.npz", "report.html", "*_marks.edf",
}  # fmt: skip
"""What :func:`write_all` leaves in its folder, as patterns of file names."""

# What desktops leave everywhere, and what a killed run left.
_LITTER = frozenset({".DS_Store", "Thumbs.db", "desktop.ini", "._*", ".*.part"})

Outputs = dict[str, tuple[str, bytes | str | None]]


@contextmanager
def prepared_folder(folder: Path, files: frozenset[str] = TRIAGE_FILES) -> Iterator[None]:
    """Make sure before any work that results can go into ``folder``.

    Results of an earlier run are replaced; a folder that holds anything else is left alone.
    If the work fails, a folder that was made for it is taken away again.

    Parameters
    ----------
    folder : Path
    files : frozenset of str
        Patterns of the names that an earlier run may have left there.

    Raises
    ------
    OutputError
        If the folder cannot be written, or holds files that no earlier run wrote.
    """
    made = [path for path in (folder, *folder.parents) if not os.path.exists(path)]
    probe_folder(folder)
    known = files | _LITTER
    foreign = sorted(
        path.name
        for path in folder.iterdir()
        if not any(fnmatchcase(path.name, pattern) for pattern in known)
    )
    if foreign:
        raise OutputError(
            f"The folder {folder} is needed for results, but it holds other files "
            f"({', '.join(foreign[:3])}{', ...' if len(foreign) > 3 else ''}).",
            "Move them, or choose another folder with --out.",
        )
    try:
        yield
    except BaseException:
        with suppress(OSError):  # where something else has come in by now, it stays
            for path in made:
                path.rmdir()
        raise


def write_all(
    result: Result,
    folder: Path,
    *,
    start: datetime | None,
    report_html: str,
    sites_html: str,
) -> dict[str, Path]:
    """Write every output of one result.

    ``result.json`` is put in place last and an older one is taken away first: where it
    stands, the folder is complete and of one run.

    Parameters
    ----------
    result : Result
        With or without scores.
    folder : Path
        Created if need be; files of an earlier run are replaced.
    start : datetime or None
        Start of the recording, for the clock of the EDF+ marks.
    report_html, sites_html : str
        The finished report, and the finished sheet for the technologist.

    Returns
    -------
    dict of str to Path
        ``flags, flags_columns, sites, sites_columns, scores`` (only if the result carries
        scores), ``marks, report, sheet, result``.

    Raises
    ------
    OutputError
        If the folder cannot be written or the disk is full.
    """
    channels = {row.site: row.channel for row in result.sites}
    outputs: Outputs = {
        "flags": ("flags.tsv", flags_tsv(result)),
        "flags_columns": ("flags.json", flags_columns_json()),
        "scores": ("scores.npz", None if result.scores is None else scores_npz(result)),
        "marks": (
            f"{_file_stem(result.recording.name)}_marks.edf",
            marks_edf(result, start=start, channels=channels),
        ),
        "report": ("report.html", report_html),
        **_outputs_of_sites(result, sites_html),
    }
    return _write(outputs, folder)


def write_sites(result: Result, folder: Path, *, sites_html: str) -> dict[str, Path]:
    """Write what a technologist needs: the sheet, the table of sites and the result.

    Parameters
    ----------
    result : Result
    folder : Path
        As for :func:`write_all`.
    sites_html : str
        The finished sheet.

    Returns
    -------
    dict of str to Path
        ``sheet, sites, sites_columns, result``.

    Raises
    ------
    OutputError
        If the folder cannot be written or the disk is full.
    """
    return _write(_outputs_of_sites(result, sites_html), folder)


def _outputs_of_sites(result: Result, sites_html: str) -> Outputs:
    return {
        "sheet": ("sites.html", sites_html),
        "sites": ("sites.tsv", sites_tsv(result)),
        "sites_columns": ("sites.json", sites_columns_json()),
        "result": ("result.json", result.to_json()),
    }


def _write(outputs: Outputs, folder: Path) -> dict[str, Path]:
    """Write all together, the last of them being the sign that the folder is complete."""
    probe_folder(folder)
    write_together({folder / name: content for name, content in outputs.values()})
    return {
        key: folder / name
        for key, (name, content) in outputs.items()
        if content is not None
    }


def _file_stem(name: str) -> str:
    """The recording's name with everything replaced that could leave the folder."""
    kept = "".join(
        char if char.isprintable() and char not in _NOT_IN_NAMES else "_" for char in name
    )
    return kept.lstrip(" .-")[:_LONGEST_NAME] or "recording"
