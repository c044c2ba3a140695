"""The four kinds of artifact, in the one order used everywhere."""

from __future__ import annotations

from typing import NamedTuple


class Kind(NamedTuple):
    """One kind of artifact.

    ``mark_text`` is the fixed text of an EDF+ annotation: identical events carry
    identical texts (EDF+ specification). ``look_alike`` names the cerebral patterns the
    kind can be mistaken for.
    """

    name: str
    label: str
    mark_text: str
    look_alike: str


KINDS: tuple[Kind, ...] = (
    Kind(
        "eye",
        "eye movement or blink",
        "Artifact: eye",
        "frontal intermittent rhythmic delta activity or frontal slow waves",
    ),
    Kind(
        "muscle",
        "muscle",
        "Artifact: muscle",
        "beta activity, breach rhythm or a fast ictal onset",
    ),
    Kind(
        "pop",
        "electrode pop",
        "Artifact: electrode pop",
        "a focal spike or a discharge at the end of a chain",
    ),
    Kind(
        "mains",
        "mains interference",
        "Artifact: mains",
        "sustained high gamma activity close to the line frequency",
    ),
)

KIND_NAMES: tuple[str, ...] = tuple(kind.name for kind in KINDS)
