"""artifactlens: which seconds and which electrode sites of a scalp EEG carry artifact, and why.

>>> import artifactlens
>>> result = artifactlens.triage("night.edf")  # doctest: +SKIP
>>> [flag.sentence for flag in result.flags][:1]  # doctest: +SKIP
"""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from artifactlens.pipeline import triage, triage_to_folder
    from artifactlens.recording import open_recording
    from artifactlens.result import CAUTION, Flag, Result

__version__ = "0.1.0"

__all__ = [
    "CAUTION",
    "Flag",
    "Result",
    "__version__",
    "open_recording",
    "triage",
    "triage_to_folder",
]

_HOMES = {
    "CAUTION": "artifactlens.result",
    "Flag": "artifactlens.result",
    "Result": "artifactlens.result",
    "open_recording": "artifactlens.recording",
    "triage": "artifactlens.pipeline",
    "triage_to_folder": "artifactlens.pipeline",
}


def __getattr__(name: str) -> Any:  # noqa: ANN401 - any public object
    """Load public names when first used, so that the import itself stays quick."""
    import importlib

    if name not in _HOMES:
        raise AttributeError(f"module 'artifactlens' has no attribute {name!r}")
    value = getattr(importlib.import_module(_HOMES[name]), name)
    globals()[name] = value
    return value
