"""The template engine of the pages: everything escaped, nothing undefined, no controls."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from importlib.resources import files
from typing import TYPE_CHECKING, Any

from markupsafe import Markup

from artifactlens.page.words import clean

if TYPE_CHECKING:
    from jinja2 import Template


def part(name: str) -> str:
    """The text of a file beside the pages: a template, a style."""
    return files("artifactlens.page").joinpath(name).read_text(encoding="utf-8")


def template(name: str, filters: Mapping[str, Callable[..., Any]]) -> Template:
    """A template that escapes every text it is given."""
    from jinja2 import Environment, StrictUndefined

    environment = Environment(
        autoescape=True,
        undefined=StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
        finalize=_printable,
    )
    environment.filters.update(filters)
    return environment.from_string(part(name))


def _printable(value: Any) -> Any:  # noqa: ANN401  (the template engine passes anything)
    """Unprintable characters leave every text at the one place all of them pass."""
    return (
        clean(value) if isinstance(value, str) and not isinstance(value, Markup) else value
    )
