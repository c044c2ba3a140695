"""Writing so that a killed run leaves either the old file or the new, never half a file."""

from __future__ import annotations

import contextlib
import errno
import os
import secrets
from collections.abc import Mapping
from pathlib import Path

from artifactlens.errors import OutputError

_REMEDIES = {
    errno.ENOSPC: "Free some space on that disk, or choose another output folder.",
    errno.EDQUOT: "Free some of your quota there, or choose another output folder.",
    errno.EACCES: "Choose an output folder that you may write to.",
    errno.EPERM: "Choose an output folder that you may write to.",
    errno.EROFS: "That disk is read-only; choose an output folder on another one.",
}
_OTHER_REMEDY = "Choose another output folder, or make this one writable."


def write_atomically(path: Path, content: bytes | str) -> None:
    """Write one file under a temporary name, then put it in place in one step.

    Parameters
    ----------
    path : Path
        An existing file is replaced.
    content : bytes or str
        Text is written as UTF-8 with its line ends as they are.

    Raises
    ------
    OutputError
        If the folder cannot be written or the disk is full; an existing file is as before
        and no temporary file stays.
    """
    write_together({path: content})


def write_together(contents: Mapping[Path, bytes | str | None]) -> None:
    """Write files that belong together, the last of which says that all are there.

    All are first written under temporary names, where a full disk shows; only then are
    they put in place. An older last file is taken away before the first is replaced, so
    its presence always means that the files beside it are of the same run.

    Parameters
    ----------
    contents : mapping of Path to bytes, str or None
        In the order of writing; None takes away what an earlier run left there.

    Raises
    ------
    OutputError
        As for :func:`write_atomically`; if it arises before the first file is put in
        place, nothing has changed.
    """
    staged: dict[Path, Path] = {}
    *others, last = contents
    path = last
    try:
        for path, content in contents.items():
            if content is not None:
                staged[path] = path.with_name(f".{secrets.token_hex(8)}.part")
                _write_synced(staged[path], content)
        if others:
            last.unlink(missing_ok=True)
        for path in contents:
            if path in staged:
                os.replace(staged[path], path)
            else:
                path.unlink(missing_ok=True)
    except OSError as error:
        raise OutputError(
            f"{path.name} could not be written into the folder {path.parent}: "
            f"{error.strerror or type(error).__name__}.",
            _REMEDIES.get(error.errno or 0, _OTHER_REMEDY),
        ) from error
    finally:
        for temporary in staged.values():
            with contextlib.suppress(OSError):
                temporary.unlink()


def _write_synced(path: Path, content: bytes | str) -> None:
    # A lone surrogate from a damaged label has no UTF-8 form; its escape \udcxx is valid
    # inside JSON and harmless elsewhere.
    data = (
        content.encode("utf-8", "backslashreplace") if isinstance(content, str) else content
    )
    with path.open("xb") as file:
        file.write(data)
        file.flush()
        os.fsync(file.fileno())


def probe_folder(folder: Path) -> None:
    """Create the folder if need be and make sure that it takes files, before any work.

    Raises
    ------
    OutputError
        If a file stands in its place or on the way to it, or if it cannot be written.
    """
    probe = folder / f".{secrets.token_hex(8)}.part"
    try:
        folder.mkdir(parents=True, exist_ok=True)
        probe.touch(exist_ok=False)
        probe.unlink()
    except (FileExistsError, NotADirectoryError) as error:
        raise OutputError(
            f"A folder is needed at {folder}, but a file stands there or on the way to it.",
            "Move that file, or choose another output folder.",
        ) from error
    except OSError as error:
        raise OutputError(
            f"The folder {folder} cannot be written: "
            f"{error.strerror or type(error).__name__}.",
            _REMEDIES.get(error.errno or 0, _OTHER_REMEDY),
        ) from error
