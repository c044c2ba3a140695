"""Write results into a text between markers, so that no number is typed by hand."""

from __future__ import annotations

import re

from artifactlens.errors import LabelsError


def fill(text: str, name: str, content: str) -> str:
    """The text with new content in one block.

    A block stands between ``<!-- results: NAME -->`` and ``<!-- end results -->``, each on
    a line of its own.

    Raises
    ------
    LabelsError
        If the text does not have exactly one such block.
    """
    block = re.compile(
        rf"(<!-- results: {re.escape(name)} -->\n).*?(<!-- end results -->)", re.DOTALL
    )
    if len(block.findall(text)) != 1:
        raise LabelsError(
            f"One block of results named {name} is needed; there are "
            f"{len(block.findall(text))}.",
            f"Put '<!-- results: {name} -->' and '<!-- end results -->' around its place.",
        )
    return block.sub(lambda found: f"{found[1]}{content.strip()}\n{found[2]}", text)
