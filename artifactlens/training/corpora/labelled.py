"""What every reader of a corpus gives: recordings, opened late, and their labels."""

from __future__ import annotations

import csv
import math
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import NamedTuple

from artifactlens.errors import LabelsError, RecordingError
from artifactlens.recording import Recording

PRESENT, CLEAN, UNKNOWN = "present", "clean", "unknown"


class Label(NamedTuple):
    """One label of a corpus.

    Attributes
    ----------
    kind : str
        One of ``KIND_NAMES``; "brain" for a cerebral pattern, named in ``text``; "other".
    onset, end : float, seconds of the recording
        ``end`` may be infinite: to the end, whenever that is.
    channels : tuple of str
        Sites or derivations as the corpus spells them. None at all means every site where
        the label is clean or unknown. Where it is present it means the second as a whole:
        somewhere in it, at sites that the label does not tell.
    state : str
        "present", "clean" or "unknown".
    text : str
        The corpus's own word.
    """

    kind: str
    onset: float
    end: float
    channels: tuple[str, ...]
    state: str
    text: str = ""


@dataclass(frozen=True, slots=True)
class LabelledRecording:
    """A recording of a corpus with its labels; the signal is read when it is opened.

    Attributes
    ----------
    corpus, person, name : str
        ``person`` is the same for all recordings of one person and differs between any two
        people of all corpora, so that people can be kept apart.
    open : callable
        Opens the recording.
    labels : tuple of Label
    line_frequency : float or None, hertz
        50 or 60 where the corpus is known to come from such a place.
    montage : tuple of str
        Derivations that whoever labelled looked at; empty where labels name sites, or where
        the recording's own derivations are meant.
    notes : tuple of str
        Sentences for a person: what was left out and why.
    """

    corpus: str
    person: str
    name: str
    open: Callable[[], Recording]
    labels: tuple[Label, ...]
    line_frequency: float | None = None
    montage: tuple[str, ...] = ()
    notes: tuple[str, ...] = ()


def need_folder(path: Path, corpus: str) -> Path:
    """The folder of a corpus.

    Raises
    ------
    RecordingError
        If it is not there.
    """
    if not path.is_dir():
        raise RecordingError(
            f"The corpus {corpus} is needed as a folder; {path} is none.",
            "Give the folder that holds it; data_cards/ tells how to get each corpus.",
        )
    return path


def need_labelled(
    found: list[LabelledRecording], corpus: str, needed: str, unlabelled: list[str]
) -> list[LabelledRecording]:
    """Refuse a folder without a labelled recording.

    Raises
    ------
    LabelsError
        With the names of up to three recordings that have no labels beside them.
    """
    if found:
        return found
    beside = f" ({', '.join(unlabelled[:3])}...)" if unlabelled else ""
    raise LabelsError(
        f"{corpus} needs {needed}; there are {len(unlabelled)} recordings without{beside}.",
        "Check that the folder given is the right one and was copied completely.",
    )


def split(
    paths: Sequence[Path], table_of: Callable[[Path], Path]
) -> tuple[list[Path], list[str]]:
    """Recordings with their table of labels beside them, and the names of those without."""
    labelled = [path for path in paths if table_of(path).is_file()]
    return labelled, [path.name for path in paths if not table_of(path).is_file()]


def edf_with(suffix: str, folder: Path) -> tuple[list[Path], list[str]]:
    """As :func:`split`: EDF files at any depth, their tables of the same name beside them."""
    return split(sorted(folder.rglob("*.edf")), lambda path: path.with_suffix(suffix))


def read_edf_with(
    suffix: str, folder: Path, corpus: str, read_one: Callable[[Path], LabelledRecording]
) -> list[LabelledRecording]:
    """Read every EDF file that has a table of this suffix beside it.

    Raises
    ------
    RecordingError, LabelsError
        If the folder is not there or holds nothing to read, and what ``read_one`` raises.
    """
    labelled, bare = edf_with(suffix, need_folder(folder, corpus))
    needed = f"EDF files with a {suffix} file of the same name beside them"
    return need_labelled([read_one(path) for path in labelled], corpus, needed, bare)


def read_text(path: Path) -> str:
    """A file of labels as text.

    Raises
    ------
    LabelsError
        If it is not there or no UTF-8.
    """
    try:
        return path.read_text(encoding="utf-8-sig")
    except OSError:
        raise LabelsError(
            f"The labels are needed in {path.name}, which could not be read.",
            "Check that the corpus was copied completely.",
        ) from None
    except UnicodeDecodeError:
        raise LabelsError(
            f"{path.name} needs to be UTF-8 text; it is not.", "Save it as UTF-8."
        ) from None


def rows_in(path: Path, columns: Sequence[str]) -> Iterator[tuple[str, list[str]]]:
    """Rows of a table whose first line names its columns, cells separated by tabs.

    Yields
    ------
    where : str
        File and line, for messages.
    cells : list of str, one per column

    Raises
    ------
    LabelsError
        If the file is missing, or a line has other columns.
    """
    lines = csv.reader(read_text(path).splitlines() or [""], delimiter="\t")
    for number, cells in enumerate(lines, start=1):
        where = f"{path.name}, line {number}"
        if len(cells) != len(columns) or (number == 1 and cells != list(columns)):
            raise LabelsError(
                f"{where}: {len(columns)} cells are needed, the first line with the columns "
                f"{', '.join(columns)}; given were {len(cells)} cells.",
                "Take the file as it comes with the corpus.",
            )
        if number > 1:
            yield where, cells


def seconds_in(cell: str, what: str, where: str) -> float:
    """A time in seconds from the start of the recording.

    Parameters
    ----------
    cell : str
        As in the file.
    what, where : str
        Its column; the file and line, for the message.

    Raises
    ------
    LabelsError
        If it is no finite number of at least 0.
    """
    try:
        value = float(cell)
    except ValueError:
        value = math.nan
    if not 0 <= value < math.inf:
        raise LabelsError(
            f"{where}: {what} needs seconds from the start of the recording, 0 or more; "
            f"given was {cell[:20]!r}.",
            "Correct the line.",
        )
    return value


def check_order(onset: float, end: float, where: str) -> None:
    """Refuse a label that ends before it begins.

    Raises
    ------
    LabelsError
    """
    if end < onset:
        raise LabelsError(
            f"{where}: a label needs to end after its start; given were {onset:g} to {end:g} s.",
            "Correct the line.",
        )
