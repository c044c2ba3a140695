"""Many cases: which ones, and what the advice made of them."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import joblib

from artifactlens.advice import Advice
from artifactlens.pipeline import triage
from artifactlens.training.sitechecks.backgrounds import Bed, Source, Untouched
from artifactlens.training.sitechecks.cases import MIX, PATIENT_MIX, Case, case
from artifactlens.training.sitechecks.scoring import Outcome, score

FIRST_SEEDS = {"development": 1_000_000, "check": 2_000_000}
PATIENT_SEEDS = {"development": 1_500_000, "check": 2_500_000}
"""Seeds of two sets never meet."""


@dataclass(frozen=True, slots=True)
class Ran:
    """One case that was run: how to make it again, its background, and how it went.

    ``before`` holds the sites that were to be prepared again on the same recording before
    muscle or eyes were put in; looked for only where the outcome blames somebody.
    """

    seed: int
    bed: str
    outcome: Outcome
    before: tuple[str, ...] = ()


@dataclass(frozen=True, slots=True)
class Left:
    """What was advised on a recording into which nothing was put."""

    name: str
    corpus: str
    montage: str
    seen: bool
    re_prep: tuple[str, ...]
    """Sites to be prepared again."""
    lines: tuple[str, ...]


def orders(count: int, first_seed: int, mix: dict[str, int]) -> list[tuple[int, str]]:
    """Seed and fault of ``count`` cases: each fault as often as ``mix`` has it, in turn."""
    turn = [fault for fault, times in mix.items() for _ in range(times)]
    return [(first_seed + number, turn[number % len(turn)]) for number in range(count)]


def fault_orders(count: int, split: str) -> list[tuple[int, str]]:
    """Cases of electrode faults."""
    return orders(count, FIRST_SEEDS[split], MIX)


def patient_orders(count: int, split: str) -> list[tuple[int, str]]:
    """Cases in which all that is wrong comes from the patient."""
    return orders(count, PATIENT_SEEDS[split], PATIENT_MIX)


def score_case(one: Case) -> Outcome:
    """Triage a case and score the advice."""
    result = triage(one.recording, line_frequency=one.line_frequency)
    return score(one.truth, result.advice)


def run_cases(
    wanted: Sequence[tuple[int, str]], sources: Sequence[Source | Bed], jobs: int
) -> list[Ran]:
    """Make, triage and score cases, in their order whatever the number of jobs."""
    made = joblib.Parallel(n_jobs=jobs)(
        joblib.delayed(_run)(seed, fault, sources) for seed, fault in wanted
    )
    return list(made)


def run_untouched(recordings: Sequence[Untouched], jobs: int) -> list[Left]:
    """Triage recordings as they are."""
    made = joblib.Parallel(n_jobs=jobs)(joblib.delayed(_left)(one) for one in recordings)
    return list(made)


def _run(seed: int, fault: str, sources: Sequence[Source | Bed]) -> Ran:
    one = case(seed, sources, fault=fault)
    outcome = score_case(one)
    blamed: tuple[str, ...] = ()
    if one.truth.cause == "patient" and outcome.innocent:
        before = triage(one.before, line_frequency=one.line_frequency)
        blamed = _prepared(before.advice)
    return Ran(seed, one.bed, outcome, blamed)


def _prepared(advice: Sequence[Advice]) -> tuple[str, ...]:
    """Sites that are to be prepared again."""
    return tuple(
        site
        for entry in advice
        if entry.verdict == "re-prep"
        for site in (entry.sites or (entry.subject,))
    )


def _left(one: Untouched) -> Left:
    result = triage(one.recording(), line_frequency=one.line_frequency)
    listed = sorted(result.advice, key=lambda entry: entry.number)
    return Left(
        name=one.path.stem,
        corpus=one.corpus,
        montage=one.montage,
        seen=one.seen,
        re_prep=_prepared(listed),
        lines=tuple(f"{entry.number}. {entry.line}" for entry in listed),
    )
