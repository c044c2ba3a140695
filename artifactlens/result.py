"""The one serialisable result: everything before builds it, everything after reads it."""

from __future__ import annotations

import dataclasses
import json
import math
from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any

from artifactlens.advice import Advice
from artifactlens.errors import ResultError

if TYPE_CHECKING:
    import numpy as np
    from numpy.typing import NDArray

RESULT_VERSION = 3

CAUTION = (
    "artifactlens is a research and technical aid, not a medical device. A flag does not "
    "exclude cerebral activity, and no flag does not mean clean. The interpreting "
    "physician and the technologist decide, and local procedure rules."
)


@dataclass(frozen=True, slots=True)
class Measure:
    """What was measured of one feature.

    ``value`` and ``usual`` are in ``unit``; ``usual`` is the median over the quiet epochs
    of this recording. Both are None where the feature could not be measured.
    """

    feature: str
    label: str
    unit: str
    value: float | None
    usual: float | None


@dataclass(frozen=True, slots=True)
class Contribution:
    """What one feature, or two of them together, add to a flag's score.

    For one feature the fields are those of :class:`Measure`, and ``pair`` is empty. For
    two, ``log_odds`` is what they say together beyond each alone, ``pair`` holds both
    measures, ``feature`` joins their names by "+" and ``label`` their labels in words;
    ``unit`` is empty then, ``value`` and ``usual`` are None.
    """

    feature: str
    label: str
    unit: str
    value: float | None
    usual: float | None
    log_odds: float
    pair: tuple[Measure, ...] = ()

    @classmethod
    def of(cls, measures: tuple[Measure, ...], log_odds: float) -> Contribution:
        """What one measure, or two together, add to the score."""
        if len(measures) == 1:
            (one,) = measures
            return cls(one.feature, one.label, one.unit, one.value, one.usual, log_odds)
        return cls(
            feature="+".join(measure.feature for measure in measures),
            label=" together with ".join(measure.label for measure in measures),
            unit="",
            value=None,
            usual=None,
            log_odds=log_odds,
            pair=measures,
        )

    @property
    def measures(self) -> tuple[Measure, ...]:
        """The one measure, or both of a pair."""
        return self.pair or (
            Measure(self.feature, self.label, self.unit, self.value, self.usual),
        )


def driver_of(parts: tuple[Contribution, ...]) -> Contribution:
    """The contribution that speaks for the kind most strongly.

    Single features come first, for a reader can look at one number: a pair drives only
    where no single feature speaks for the kind.
    """
    return max(parts, key=lambda part: (not part.pair and part.log_odds > 0, part.log_odds))


@dataclass(frozen=True, slots=True)
class Flag:
    """A segment that deserves a look.

    ``onset``, ``duration`` and ``moment`` (where the driving trace is strongest) are in
    seconds from the start of the recording. ``contributions`` are those of the strongest
    epoch and site, largest absolute log-odds first; with ``base`` they add up to
    ``score``, and ``probability`` is its logistic.
    """

    number: int
    onset: float
    duration: float
    kind: str
    sites: tuple[str, ...]
    probability: float
    score: float
    base: float
    strongest_site: str
    moment: float
    contributions: tuple[Contribution, ...]
    look_alike: str
    sentence: str

    @property
    def end(self) -> float:
        """End of the segment, seconds."""
        return self.onset + self.duration

    @property
    def driver(self) -> Contribution:
        """The single feature that speaks for the kind most strongly; a pair only if none does."""
        return driver_of(self.contributions)


@dataclass(frozen=True, slots=True)
class Assessment:
    """Whether a kind can be judged in this recording: "yes", "limited" or "no"."""

    kind: str
    verdict: str
    reason: str


@dataclass(frozen=True, slots=True)
class SiteEvidence:
    """What was measured at one site over the recording, and what follows for it.

    ``site`` is the file's own spelling of the electrode; ``channel`` the full label of the
    channel that carries it, None for sites solved from derivations and for the reference.
    ``position`` is in metres, x to the right, y to the nose, z up, origin at the centre
    of the head. ``share`` maps a kind to the share of judged epochs flagged (0 to 1), None
    where the kind cannot be judged. ``verdict`` is one of
    :data:`~artifactlens.advice.SITE_VERDICTS`, ``why`` a clause for it, empty where there is
    nothing to say; ``impedance_kohm`` None where none is known.
    """

    site: str
    channel: str | None
    canonical: str | None
    role: str
    position: tuple[float, float, float] | None
    seconds_judged: float
    share: dict[str, float | None]
    pops_per_minute: float | None
    mains_uv: float | None
    mains_db: float | None
    isolation_db: float | None
    fault: str
    verdict: str = "leave"
    why: str = ""
    impedance_kohm: float | None = None


@dataclass(frozen=True, slots=True)
class Setup:
    """Whether the sites were fit to start, judged from the first ``seconds``.

    ``fit`` and ``unfit`` hold site names, the latter each with a reason; ``cannot_tell``
    those that could not be judged. ``responses`` say what the biological calibration showed,
    one sentence each, empty where none was announced.
    """

    seconds: float
    fit: tuple[str, ...]
    unfit: tuple[tuple[str, str], ...]
    cannot_tell: tuple[str, ...]
    responses: tuple[str, ...] = ()


@dataclass(frozen=True, slots=True)
class RecordingFacts:
    """What is known of the recording, without anything that identifies a person.

    Frequencies in hertz, times in seconds. ``gaps`` holds (onset, duration);
    ``set_aside`` (channel label, reason); ``annotation_onsets`` the recording's own marks.
    """

    name: str
    format: str
    duration: float
    sampling_rate: float
    montage: str
    high_pass: float | None
    low_pass: float | None
    notch: float | None
    line_frequency: float | None
    gaps: tuple[tuple[float, float], ...]
    set_aside: tuple[tuple[str, str], ...]
    annotation_onsets: tuple[float, ...]
    notes: tuple[str, ...]


@dataclass(frozen=True, slots=True)
class Scores:
    """Calibrated probabilities, NaN where not assessable.

    ``onset`` (n_epochs,) in seconds, ``probability`` float32
    (n_kinds, n_epochs, n_sites).
    """

    kinds: tuple[str, ...]
    onset: NDArray[np.float64]
    sites: tuple[str, ...]
    probability: NDArray[np.float32]


@dataclass(frozen=True, slots=True)
class Result:
    """All that artifactlens says of one recording.

    ``touched`` maps each kind, and "any", to the seconds under at least one flag.
    ``advice`` is the technologist's list in order of work. ``scores`` is kept beside the JSON
    (in ``scores.npz``) and takes no part in equality.
    """

    tool_version: str
    model_name: str
    model_sha256: str
    parameters: dict[str, str]
    recording: RecordingFacts
    assessable: tuple[Assessment, ...]
    touched: dict[str, float]
    flags: tuple[Flag, ...]
    sites: tuple[SiteEvidence, ...]
    advice: tuple[Advice, ...] = ()
    setup: Setup | None = None
    scores: Scores | None = field(default=None, compare=False, repr=False)

    def assessment(self, kind: str) -> Assessment:
        """The assessment of one kind.

        Raises
        ------
        KeyError
            If ``kind`` is none of the four kinds.
        """
        return {entry.kind: entry for entry in self.assessable}[kind]

    def flag_counts(self) -> dict[str, int]:
        """Number of flags per kind."""
        counts = {entry.kind: 0 for entry in self.assessable}
        for flag in self.flags:
            counts[flag.kind] += 1
        return counts

    def sites_flagged_most(self, kind: str, most: int) -> list[str]:
        """At most ``most`` sites with a flagged share of the kind, highest share first."""
        shares = [(site.share[kind] or 0.0, site.site) for site in self.sites]
        shares.sort(key=lambda entry: -entry[0])
        return [name for share, name in shares[:most] if share > 0]

    def to_json(self) -> str:
        """Everything but the scores, as strict JSON (no NaN)."""
        body = dataclasses.asdict(dataclasses.replace(self, scores=None))
        del body["scores"]
        return json.dumps(
            {"result_version": RESULT_VERSION, "caution": CAUTION, **body},
            indent=1,
            ensure_ascii=False,
            allow_nan=False,
        )

    @classmethod
    def from_json(cls, text: str) -> Result:
        """Read back what :meth:`to_json` wrote.

        Raises
        ------
        ResultError
            If the text is no result, or one of another version.
        """
        try:
            body = json.loads(text)
            version = body["result_version"]
        except (json.JSONDecodeError, KeyError, TypeError) as error:
            raise ResultError(
                "A result needs JSON with a result_version; this text has none.",
                "Give the result.json that artifactlens wrote.",
            ) from error
        if version != RESULT_VERSION:
            raise ResultError(
                f"This artifactlens reads results of version {RESULT_VERSION}; "
                f"the file has version {version!r}.",
                "Triage the recording again with this version.",
            )
        try:
            return _result_from(body)
        except (KeyError, TypeError) as error:
            raise ResultError(
                f"The result is damaged: {error!r} does not fit.",
                "Triage the recording again.",
            ) from error


def _result_from(body: dict[str, Any]) -> Result:
    facts = dict(body["recording"])
    for name in ("gaps", "set_aside"):
        facts[name] = tuple(tuple(pair) for pair in facts[name])
    for name in ("annotation_onsets", "notes"):
        facts[name] = tuple(facts[name])
    flags = tuple(
        Flag(
            **{
                **flag,
                "sites": tuple(flag["sites"]),
                "contributions": tuple(
                    _contribution_from(part) for part in flag["contributions"]
                ),
            }
        )
        for flag in body["flags"]
    )
    sites = tuple(
        SiteEvidence(
            **{
                **site,
                "position": None if site["position"] is None else tuple(site["position"]),
            }
        )
        for site in body["sites"]
    )
    return Result(
        tool_version=body["tool_version"],
        model_name=body["model_name"],
        model_sha256=body["model_sha256"],
        parameters=body["parameters"],
        recording=RecordingFacts(**facts),
        assessable=tuple(Assessment(**entry) for entry in body["assessable"]),
        touched=body["touched"],
        flags=flags,
        sites=sites,
        advice=tuple(_advice_from(entry) for entry in body["advice"]),
        setup=None if body["setup"] is None else _setup_from(body["setup"]),
    )


def _advice_from(entry: dict[str, Any]) -> Advice:
    return Advice(
        **{
            **entry,
            "sites": tuple(entry["sites"]),
            "stretches": tuple((float(a), float(b)) for a, b in entry["stretches"]),
            "checks": tuple(entry["checks"]),
        }
    )


def _setup_from(entry: dict[str, Any]) -> Setup:
    return Setup(
        seconds=entry["seconds"],
        fit=tuple(entry["fit"]),
        unfit=tuple((site, why) for site, why in entry["unfit"]),
        cannot_tell=tuple(entry["cannot_tell"]),
        responses=tuple(entry["responses"]),
    )


def _contribution_from(part: dict[str, Any]) -> Contribution:
    pair = tuple(Measure(**measure) for measure in part["pair"])
    return Contribution(**{**part, "pair": pair})


def finite_or_none(value: float) -> float | None:
    """A float for JSON: None where it is NaN or infinite."""
    return float(value) if math.isfinite(value) else None


def amount(value: float | None, unit: str, *, signed: bool = False) -> str:
    """A measured value with its unit.

    One decimal for decibel, two for numbers without unit, else three significant digits.
    """
    if value is None:
        return "not measurable"
    sign = "+" if signed else ""
    if abs(value) < 0.001:
        value = 0.0
    digits = {"dB": ".1f", "": ".2f"}.get(unit, ".0f" if abs(value) >= 100 else ".3g")
    return f"{value:{sign}{digits}} {unit}".strip()
