"""Everything that artifactlens says of one recording, in one folder beside it."""

from __future__ import annotations

import os
from collections.abc import Iterator
from contextlib import contextmanager, suppress
from datetime import datetime
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

_OURS = frozenset(
    {
        "flags.tsv", "flags.json", "sites.tsv", "sites.json", "scores.npz", "report.html",
        "result.json",
    }
)  # fmt: skip
_LITTER = frozenset({".DS_Store", "Thumbs.db", "desktop.ini"})


@contextmanager
def prepared_folder(folder: Path) -> Iterator[None]:
    """Make sure before any work that results can go into ``folder``.

    Results of an earlier run are replaced; a folder that holds anything else is left alone.
    If the work fails, a folder that was made for it is taken away again.

    Raises
    ------
    OutputError
        If the folder cannot be written, or holds files that no triage wrote.
    """
    made = [path for path in (folder, *folder.parents) if not os.path.exists(path)]
    probe_folder(folder)
    foreign = sorted(path.name for path in folder.iterdir() if not _is_ours(path.name))
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


def _is_ours(name: str) -> bool:
    """Whether a file is one that a triage wrote, or one that desktops leave everywhere."""
    return (
        name in _OURS
        or name in _LITTER
        or name.endswith("_marks.edf")
        or name.startswith("._")
        or (name.startswith(".") and name.endswith(".part"))
    )


def write_all(
    result: Result, folder: Path, *, start: datetime | None, report_html: str
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
    report_html : str
        The finished page.

    Returns
    -------
    dict of str to Path
        ``flags, flags_columns, sites, sites_columns, scores`` (only if the result carries
        scores), ``marks, report, result``.

    Raises
    ------
    OutputError
        If the folder cannot be written or the disk is full.
    """
    channels = {row.site: row.channel for row in result.sites}
    outputs: dict[str, tuple[str, bytes | str | None]] = {
        "flags": ("flags.tsv", flags_tsv(result)),
        "flags_columns": ("flags.json", flags_columns_json()),
        "sites": ("sites.tsv", sites_tsv(result)),
        "sites_columns": ("sites.json", sites_columns_json()),
        "scores": ("scores.npz", None if result.scores is None else scores_npz(result)),
        "marks": (
            f"{_file_stem(result.recording.name)}_marks.edf",
            marks_edf(result, start=start, channels=channels),
        ),
        "report": ("report.html", report_html),
        "result": ("result.json", result.to_json()),
    }
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
