"""Foreign text (site names, channel labels) made fit for one line of an output."""

from __future__ import annotations

import unicodedata

# Unicode categories that end lines or cells, steer terminals, or cannot be encoded:
# controls, lone surrogates, line and paragraph separators.
_BREAKING = frozenset({"Cc", "Cs", "Zl", "Zp"})
# Bidirectional embeddings, overrides and isolates: they would reorder the cells beside
# them on the screen (Unicode Standard Annex 9, section 2).
_REORDERING = frozenset("\u202a\u202b\u202c\u202d\u202e\u2066\u2067\u2068\u2069")


def one_line(text: str) -> str:
    """The text with everything that could break its line replaced by spaces.

    Parameters
    ----------
    text : str
        Any text; channel labels come from files and can hold anything.

    Returns
    -------
    str
        Without tabs, line ends, control characters, lone surrogates and characters that
        reorder their neighbours, and without blanks at either end. Other characters are
        kept, one for one.
    """
    return "".join(
        " " if char in _REORDERING or unicodedata.category(char) in _BREAKING else char
        for char in text
    ).strip()
