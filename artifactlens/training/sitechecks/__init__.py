"""Injected electrode faults over real background, to see whether the advice is right.

A single case, looked at by hand; ``scripts/evaluate_sites.py`` prints seed and fault of
those that failed::

    from pathlib import Path
    from artifactlens.training.sitechecks.backgrounds import sources
    from artifactlens.training.sitechecks.cases import case
    from artifactlens.training.sitechecks.runs import score_case

    beds = sources(Path("../shared/corpora"), "development")
    one = case(1_000_007, beds, fault="loose lead")
    print(one.truth.words)
    print(*score_case(one).lines)

``one.recording`` and ``one.line_frequency`` are what ``pipeline.triage`` takes.
``case(..., fault=, strength=, montage=, course=)`` makes any other case.
"""
