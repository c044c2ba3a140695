"""artifactlens: which seconds and which electrode sites of a scalp EEG carry artifact, and why."""

__version__ = "0.1.0"
