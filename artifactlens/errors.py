"""Errors a person can act on: what was needed, what was given, what to do."""

from __future__ import annotations


class ArtifactlensError(Exception):
    """Base of all errors raised on purpose.

    Parameters
    ----------
    problem : str
        What was needed and what was given, as one or two plain sentences.
    remedy : str
        What the person can do about it.
    """

    def __init__(self, problem: str, remedy: str = "") -> None:
        self.problem = problem
        self.remedy = remedy
        super().__init__(f"{problem} {remedy}".strip())


class RecordingError(ArtifactlensError, ValueError):
    """A file or object cannot be used as a scalp EEG recording."""


class SitesError(ArtifactlensError, ValueError):
    """The channels cannot be resolved into electrode sites."""


class SamplingRateError(ArtifactlensError, ValueError):
    """A feature was asked for that the sampling rate cannot carry."""


class ModelError(ArtifactlensError, ValueError):
    """A model file is missing, damaged or made for another feature table."""


class ResultError(ArtifactlensError, ValueError):
    """A result file is damaged or of a version that this tool cannot read."""


class OutputError(ArtifactlensError, OSError):
    """An output cannot be written where it was asked for."""


class OptionError(ArtifactlensError, ValueError):
    """An option was given a value that it does not know."""


class LabelsError(ArtifactlensError, ValueError):
    """A file of labels is missing, malformed or does not fit its recording."""


class ImpedanceError(ArtifactlensError, ValueError):
    """A table of electrode impedances cannot be read or does not fit its recording."""


class StreamError(ArtifactlensError, ConnectionError):
    """A live stream cannot be found, reached or used."""
