"""Elements of HTML and SVG, built so that no text or attribute can escape its place."""

from __future__ import annotations

from markupsafe import Markup, escape

from artifactlens.page.words import clean

Attribute = str | float | int | None


def coordinate(value: float) -> str:
    """A coordinate to a hundredth of a unit, as short as possible."""
    text = f"{value:.2f}".rstrip("0").rstrip(".")
    return "0" if text == "-0" else text


def tag(element: str, *children: str, **attributes: Attribute) -> Markup:
    """One element with its children.

    Parameters
    ----------
    element : str
        Name of the element.
    *children : str
        Plain text is escaped, markup is kept.
    **attributes : str, float, int or None
        ``None`` leaves an attribute out; ``class_`` writes ``class`` and ``data_x``
        ``data-x``. Names with a capital letter (``viewBox``) are kept.
    """
    written = "".join(
        f' {name.removesuffix("_").replace("_", "-")}="{_attribute(value)}"'
        for name, value in attributes.items()
        if value is not None
    )
    inner = Markup("").join(
        child if isinstance(child, Markup) else clean(child) for child in children
    )
    return Markup(f"<{element}{written}>{inner}</{element}>")


def _attribute(value: str | float | int) -> str:
    return str(escape(clean(value))) if isinstance(value, str) else coordinate(value)


def joined(parts: list[Markup]) -> Markup:
    """Many elements in a row."""
    return Markup("").join(parts)
