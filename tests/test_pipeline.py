"""The whole job on recordings whose truth is known, and what must hold of any result."""

import dataclasses
import json
import math

import mne
import numpy as np
import pytest

import artifactlens
from artifactlens.closeups import closeups, display_filter
from artifactlens.curves import load_model
from artifactlens.demo import DEMO_SITES, demo_signals, demo_truth
from artifactlens.errors import ModelError, RecordingError
from artifactlens.kinds import KIND_NAMES, KINDS
from artifactlens.pipeline import conclude, measure_recording, triage
from artifactlens.recording import Filters, Segment, from_array
from artifactlens.result import Result

SFREQ = 256.0
FILTERS = Filters(0.3, 70.0, None)
DOUBLE_BANANA = (
    "Fp1-F7", "F7-T3", "T3-T5", "T5-O1", "Fp2-F8", "F8-T4", "T4-T6", "T6-O2",
    "Fp1-F3", "F3-C3", "C3-P3", "P3-O1", "Fp2-F4", "F4-C4", "C4-P4", "P4-O2",
    "Fz-Cz", "Cz-Pz",
)  # ACNS guideline 3 (2016)  # fmt: skip
FLAG_COLUMNS = [
    "flag", "onset", "duration", "kind", "sites", "probability", "driver", "driver_value",
    "driver_unit", "driver_usual", "evidence", "look_alike", "sentence",
]  # fmt: skip


@pytest.fixture(scope="module")
def signals():
    """What the demonstration's recorder shows, without its ear lead: (19, n) microvolt."""
    names, data = demo_signals()
    assert names[:19] == DEMO_SITES
    data.flags.writeable = False
    return data[:19]


@pytest.fixture(scope="module")
def result(demo):
    return artifactlens.triage(demo.path)


def cut(data, onset, end):
    return data[:, round(onset * SFREQ) : round(end * SFREQ)].copy()


def recording_of(data, labels, **options):
    return from_array(data, SFREQ, labels, filters=[FILTERS] * len(data), **options)


def referential(data):
    return recording_of(data, [f"{name}-REF" for name in DEMO_SITES])


def bipolar(data):
    rows = {name: row for name, row in zip(DEMO_SITES, data, strict=True)}
    pairs = [pair.split("-") for pair in DOUBLE_BANANA]
    return recording_of(np.array([rows[a] - rows[b] for a, b in pairs]), DOUBLE_BANANA)


def averaged(data):
    return recording_of(data - data.mean(axis=0), [f"{name}-Av" for name in DEMO_SITES])


def over(flags, kind, onset, end):
    return [f for f in flags if f.kind == kind and f.onset < end and f.end > onset]


def gist(flags):
    """What of a flag does not hang on the order of sites that score alike."""
    return [
        (f.kind, f.onset, f.duration, frozenset(f.sites), round(f.probability, 4))
        for f in flags
    ]


# ---------------------------------------------------------------- truth of the demonstration


FAINT = ("twitch of the forehead", "pop (settling)", "slow roving eyes")
"""A twitch of 0.16 s, a pop that rises slowly and eyes that drift at a third of a hertz are
seen in the demonstration by whoever knows where to look."""

SMALL = ("gaze up", "gaze down")
"""60 to 70 uV at the forehead: plainly there, but "sure" is meant to mark little."""


def missed(flags, kind):
    """Events of a kind that no flag of that kind at one of their sites covers."""
    found = []
    for event in demo_truth():
        if event.kind == kind:
            names = {"reference" if site == "REF" else site for site in event.sites}
            near = over(flags, kind, event.onset, event.onset + event.duration)
            if not any(names & set(flag.sites) for flag in near):
                found.append(event)
    print(f"missed {kind}:", [(e.onset, e.what) for e in found])  # noqa: T201
    return [event for event in found if event.what not in FAINT]


@pytest.fixture(scope="module")
def doubtful(demo):
    return artifactlens.triage(demo.path, mark="doubtful")


@pytest.mark.parametrize("kind", KIND_NAMES)
def test_every_plain_artifact_of_the_demonstration_is_flagged_at_its_sites(result, kind):
    assert [event for event in missed(result.flags, kind) if event.what not in SMALL] == []


@pytest.mark.parametrize("kind", KIND_NAMES)
def test_what_is_doubtful_in_the_demonstration_takes_in_the_small_ones(doubtful, kind):
    assert missed(doubtful.flags, kind) == []


def test_most_of_what_the_brain_does_in_the_demonstration_stays_unflagged(result):
    flagged = []
    events = [event for event in demo_truth() if event.kind == "brain"]
    for event in events:
        end = event.onset + event.duration
        flags = [f for f in result.flags if f.onset < end and f.end > event.onset]
        touched = sum(min(f.end, end) - max(f.onset, event.onset) for f in flags)
        if touched > 0.2 * event.duration and set(event.sites) & {
            s for f in flags for s in f.sites
        }:
            flagged.append((event.onset, event.what, [(f.kind, f.sites) for f in flags]))
    print("brain flagged:", flagged)  # noqa: T201
    assert len(events) >= 6
    assert len(flagged) <= len(events) // 3


def test_little_is_flagged_where_nothing_was_put(result):
    """Seconds without any artifact of the truth, a second either side left out."""
    clear = np.ones(240, dtype=bool)
    for event in demo_truth():
        if event.kind != "brain":
            low, high = (
                math.floor(event.onset - 1),
                math.ceil(event.onset + event.duration + 1),
            )
            clear[max(low, 0) : high] = False
    touched = np.zeros(240, dtype=bool)
    for flag in result.flags:
        touched[math.floor(flag.onset) : math.ceil(flag.end - 1e-6)] = True
    wrong = np.flatnonzero(clear & touched)
    print("flagged without artifact:", wrong.tolist(), "of", int(clear.sum()))  # noqa: T201
    assert clear.sum() > 60
    assert len(wrong) <= 0.05 * clear.sum()


def test_a_step_of_the_reference_names_the_reference_and_no_other_site(result):
    """A pop in the reference shows alike in every referential channel: one flag, not 19."""
    (event,) = [e for e in demo_truth() if e.kind == "pop" and e.sites == ("REF",)]
    flags = [f for f in result.flags if f.onset < event.onset + 0.5 and f.end > event.onset]
    assert [(f.kind, f.sites) for f in flags] == [("pop", ("reference",))]
    assert flags[0].onset == pytest.approx(event.onset, abs=0.1)
    assert flags[0].sentence.startswith("Reference (the same shape in every")


def test_the_loose_lead_and_the_humming_lead_stand_out_among_the_sites(result):
    sites = {site.site: site for site in result.sites}
    most_pops = max(sites.values(), key=lambda site: site.pops_per_minute)
    most_mains = max(sites.values(), key=lambda site: site.share["mains"])
    assert most_pops.site == "P3"
    assert most_mains.site == "T6"


MONTAGES = {"referential": referential, "bipolar": bipolar, "average": averaged}


@pytest.fixture(scope="module")
def by_montage(signals):
    """The same 110 s in three montages, from second 90."""
    part = cut(signals, 90, 200)
    return {name: triage(make(part)) for name, make in MONTAGES.items()}


@pytest.mark.parametrize("montage", MONTAGES)
@pytest.mark.parametrize(
    ("kind", "onset", "end", "sites"),
    [
        ("eye", 97.3, 97.62, {"Fp1", "Fp2"}),
        ("pop", 128.9, 129.2, {"P3"}),
        ("pop", 147.2, 147.5, {"P3"}),
        ("mains", 165.0, 185.0, {"T6"}),
        ("muscle", 107.2, 109.4, {"T3", "T4", "F7", "F8"}),
    ],
)
def test_every_montage_flags_the_same_site(by_montage, montage, kind, onset, end, sites):
    result = by_montage[montage]
    assert result.recording.montage == montage
    flags = over(result.flags, kind, onset - 90, end - 90)
    assert flags, [gist([f])[0][:4] for f in result.flags]
    low, high = onset - 90, end - 90
    main = max(flags, key=lambda flag: min(flag.end, high) - max(flag.onset, low))
    assert main.strongest_site in sites
    if kind in ("pop", "mains"):
        assert set(main.sites) == sites


# ---------------------------------------------------------------- invariants


@pytest.fixture(scope="module")
def minute(signals):
    return referential(cut(signals, 100, 160))


def test_no_result_depends_on_how_much_is_held_in_memory(minute):
    """To the rounding of float32: the sums of a matrix product depend on its shape."""
    model = load_model()
    results = {}
    for size in (1, 7, 32, 100):
        measured = measure_recording(minute, batch_epochs=size)
        results[size] = conclude(measured, model, mark="sure", line_frequency=None)
    plain = results.pop(32)
    assert plain.flags
    for size, other in results.items():
        assert gist(other.flags) == gist(plain.flags), size
        assert [f.sentence for f in other.flags] == [f.sentence for f in plain.flags], size
        assert other.touched == plain.touched
        np.testing.assert_allclose(
            other.scores.probability, plain.scores.probability, rtol=0, atol=1e-3
        )


def test_the_order_of_the_channels_changes_nothing(signals, minute):
    order = np.random.default_rng(11).permutation(19)
    shuffled = recording_of(
        cut(signals, 100, 160)[order], [f"{DEMO_SITES[k]}-REF" for k in order]
    )
    plain, other = triage(minute), triage(shuffled)
    assert sorted(gist(other.flags), key=str) == sorted(gist(plain.flags), key=str)
    assert {s.site: s.share for s in other.sites} == {s.site: s.share for s in plain.sites}


def test_a_longer_name_of_the_sites_changes_nothing_but_the_spelling(signals, minute):
    """T3 is the older name of T7 (ACNS guideline 2, 2016)."""
    newer = {"T3": "T7", "T4": "T8", "T5": "P7", "T6": "P8"}
    labels = [f"EEG {newer.get(name, name)}-REF" for name in DEMO_SITES]
    other = triage(recording_of(cut(signals, 100, 160), labels))
    renamed = [
        (kind, onset, length, frozenset(newer.get(site, site) for site in sites), p)
        for kind, onset, length, sites, p in gist(triage(minute).flags)
    ]
    assert gist(other.flags) == renamed


def test_an_mne_raw_gives_the_flags_of_its_file(demo, result):
    raw = mne.io.read_raw_edf(demo.path, verbose="error")
    assert gist(artifactlens.triage(raw).flags) == gist(result.flags)


def test_a_raw_is_left_as_it_was(demo):
    raw = (
        mne.io.read_raw_edf(demo.path, verbose="error")
        .crop(100, 130)
        .load_data(verbose="error")
    )
    before, marks, bads = (
        raw.get_data().copy(),
        len(raw.annotations),
        list(raw.info["bads"]),
    )
    artifactlens.triage(raw)
    np.testing.assert_array_equal(raw.get_data(), before)
    assert (len(raw.annotations), list(raw.info["bads"])) == (marks, bads)


def test_the_public_function_is_not_hidden_by_the_module_of_its_name(demo):
    artifactlens.triage_to_folder  # noqa: B018 - loads the pipeline and all below it
    assert callable(artifactlens.triage)


def test_progress_rises_to_the_whole(minute):
    told = []
    triage(minute, progress=lambda done, total: told.append((done, total)))
    assert told[-1] == (60, 60)
    assert [done for done, _ in told] == sorted({done for done, _ in told})


def test_missing_samples_are_missing_and_nothing_beside_them_is(signals):
    """NaN in one channel for 5 s: that site is not judged then, the others are."""
    data = cut(signals, 100, 160)
    data[DEMO_SITES.index("C3"), round(20 * SFREQ) : round(25 * SFREQ)] = np.nan
    result = triage(referential(data))
    scores = result.scores
    c3 = scores.sites.index("C3")
    assert np.isnan(scores.probability[:, 20:25, c3]).all()
    others = [k for k, site in enumerate(scores.sites) if site not in ("C3", "reference")]
    assert np.isfinite(scores.probability[:, 20:25, others]).all()
    assert np.isfinite(scores.probability[:, :18, c3]).all()
    (site,) = [s for s in result.sites if s.site == "C3"]
    assert site.seconds_judged == 55.0
    assert site.fault == "missing 8 % of the time"


def test_a_flat_channel_is_a_fault_and_not_a_clean_site(signals):
    data = cut(signals, 100, 160)
    data[DEMO_SITES.index("O1")] = 0.0
    result = triage(referential(data))
    (site,) = [s for s in result.sites if s.site == "O1"]
    assert site.fault == "flat 100 % of the time"
    assert site.seconds_judged == 0.0
    assert set(site.share.values()) == {None}
    assert all("O1" not in flag.sites for flag in result.flags)


def test_no_flag_crosses_a_gap_whatever_lies_beside_it(signals):
    data = cut(signals, 100, 160)
    halves = [
        Segment(0, round(8 * SFREQ), 0.0),
        Segment(round(8 * SFREQ), round(52 * SFREQ), 30.0),
    ]
    recording = from_array(
        data,
        SFREQ,
        [f"{n}-REF" for n in DEMO_SITES],
        filters=[FILTERS] * 19,
        segments=halves,
    )
    result = triage(recording)
    assert any(flag.end <= 8.0 + 1e-6 for flag in result.flags)  # the jaw lies at the seam
    assert any(flag.onset >= 30.0 for flag in result.flags)
    assert not [f for f in result.flags if f.end > 8.0 + 1e-6 and f.onset < 30.0]


def test_a_damaged_model_is_told_before_the_recording_is_read(demo, tmp_path, monkeypatch):
    from artifactlens import curves, pipeline

    (tmp_path / "scalp.json").write_text("{}")
    monkeypatch.setattr(curves, "_shipped_path", lambda: tmp_path / "scalp.json")
    monkeypatch.setattr(pipeline, "measure_recording", None)
    with pytest.raises(ModelError, match="damaged"):
        artifactlens.triage_to_folder(demo.path, tmp_path / "out")
    assert not (tmp_path / "out").exists()


def test_less_than_a_second_is_refused():
    with pytest.raises(RecordingError, match="At least one whole second"):
        triage(referential(np.ones((19, 200))))


# ---------------------------------------------------------------- what is written


def test_result_json_reads_back_as_the_result(demo, result):
    text = (demo.folder / "result.json").read_text(encoding="utf-8")
    assert Result.from_json(text) == result
    assert Result.from_json(text).to_json() == text


def test_scores_have_one_number_per_kind_second_and_site(demo, result):
    with np.load(demo.folder / "scores.npz", allow_pickle=False) as scores:
        assert tuple(scores["kinds"]) == KIND_NAMES
        assert list(scores["sites"]) == [site.site for site in result.sites]
        np.testing.assert_array_equal(scores["onset"], np.arange(240.0))
        p = scores["probability"]
    assert p.shape == (4, 240, 21)
    assert p.dtype == np.float32
    # The reference is judged only where it can be told from what its channels share.
    assert np.isfinite(p[:, :, :-1]).all()
    assert np.nanmin(p) >= 0
    assert np.nanmax(p) <= 1
    np.testing.assert_array_equal(p, result.scores.probability)


def test_every_flag_is_the_sum_of_its_contributions(demo):
    assert len(demo.body["flags"]) > 20
    for flag in demo.body["flags"]:
        total = math.fsum(
            [flag["base"], *(part["log_odds"] for part in flag["contributions"])]
        )
        assert total == pytest.approx(flag["score"], abs=1e-9)
        # The probability passes through the float32 of the scores.
        assert 1 / (1 + math.exp(-flag["score"])) == pytest.approx(
            flag["probability"], abs=1e-6
        )


def test_every_flag_lies_in_the_scores_it_was_made_of(demo, result):
    scores = result.scores
    for flag in result.flags:
        kind, site = KIND_NAMES.index(flag.kind), scores.sites.index(flag.strongest_site)
        low, high = math.floor(flag.onset) - 1, math.ceil(flag.end) + 1
        assert flag.probability in scores.probability[kind, max(low, 0) : high, site]
        assert flag.strongest_site in flag.sites
        assert flag.onset <= flag.moment <= flag.end


def test_flags_lie_inside_the_recording_in_order_and_are_numbered(demo):
    flags = demo.body["flags"]
    assert [flag["number"] for flag in flags] == list(range(1, len(flags) + 1))
    assert [flag["onset"] for flag in flags] == sorted(flag["onset"] for flag in flags)
    for flag in flags:
        assert flag["onset"] >= 0
        assert flag["duration"] > 0
        assert flag["onset"] + flag["duration"] <= 240.0 + 1e-9


def test_touched_seconds_are_the_union_of_the_flags(demo):
    """On a raster of 10 ms, the resolution of onsets and durations."""
    for kind, seconds in demo.body["touched"].items():
        raster = np.zeros(24000, dtype=bool)
        for flag in demo.body["flags"]:
            if kind in ("any", flag["kind"]):
                low, length = round(flag["onset"] * 100), round(flag["duration"] * 100)
                raster[low : low + length] = True
        assert seconds == pytest.approx(raster.sum() / 100, abs=0.005), kind


def table(path):
    header, *rows = path.read_text(encoding="utf-8").splitlines()
    names = header.split("\t")
    return names, [dict(zip(names, row.split("\t"), strict=True)) for row in rows]


def test_flags_tsv_has_its_columns_and_the_flags(demo):
    names, rows = table(demo.folder / "flags.tsv")
    assert names == FLAG_COLUMNS
    meaning = json.loads((demo.folder / "flags.json").read_text(encoding="utf-8"))
    assert set(names) < set(meaning)
    for row, flag in zip(rows, demo.body["flags"], strict=True):
        assert float(row["onset"]) == flag["onset"]
        assert float(row["duration"]) == flag["duration"]
        assert row["kind"] == flag["kind"]
        assert row["sites"].split("|") == flag["sites"]
        assert row["sentence"] == flag["sentence"]
        driver = max(
            flag["contributions"],
            key=lambda part: (not part["pair"] and part["log_odds"] > 0, part["log_odds"]),
        )
        assert row["driver"] == driver["feature"]
        assert float(row["evidence"]) == pytest.approx(driver["log_odds"], abs=5e-4)


def test_sites_tsv_has_a_row_for_every_site_and_the_reference(demo):
    _, rows = table(demo.folder / "sites.tsv")
    assert [row["site"] for row in rows] == [*DEMO_SITES, "A1", "reference"]
    assert [row["channel"] for row in rows[:2]] == ["EEG Fp1-REF", "EEG Fp2-REF"]
    assert (rows[-1]["channel"], rows[-1]["role"]) == ("n/a", "reference")


def test_marks_read_back_with_the_onsets_durations_and_channels_of_the_flags(demo):
    marks = mne.read_annotations(demo.folder / "workshop_marks.edf")
    texts = {kind.name: kind.mark_text for kind in KINDS}
    _, rows = table(demo.folder / "flags.tsv")
    wanted = set()
    for row in rows:
        onset, duration = float(row["onset"]), float(row["duration"])
        linked = [
            f"EEG {site}-REF" for site in row["sites"].split("|") if site != "reference"
        ]
        for channel in linked or [None]:
            wanted.add((texts[row["kind"]], onset, duration, channel))
    found = set()
    for onset, duration, text in zip(
        marks.onset, marks.duration, marks.description, strict=True
    ):
        words, _, channel = text.partition("@@")
        if words in texts.values():
            found.add(
                (words, round(float(onset), 3), round(float(duration), 3), channel or None)
            )
    assert found == wanted


def test_marks_open_beside_the_recording_at_its_start(demo):
    marks = demo.folder / "workshop_marks.edf"
    start = slice(168, 184)  # date and time of an EDF header
    assert marks.read_bytes()[start] == demo.path.read_bytes()[start]
    raw = mne.io.read_raw_edf(demo.path, verbose="error")
    annotations = mne.read_annotations(marks)
    raw.set_annotations(annotations)  # warns, and so fails, if one lies outside
    assert len(raw.annotations) == len(annotations)


def test_the_demonstration_gives_the_same_bytes_twice(invoke, demo, tmp_path):
    assert invoke("demo", tmp_path / "again", "--quiet").exit_code == 0
    first = {
        p.relative_to(demo.home): p.read_bytes()
        for p in demo.home.rglob("*")
        if p.is_file()
    }
    second = {
        p.relative_to(tmp_path / "again"): p.read_bytes()
        for p in (tmp_path / "again").rglob("*")
        if p.is_file()
    }
    assert set(first) == set(second)
    assert len(first) == 10
    assert [str(name) for name in first if first[name] != second[name]] == []


# ---------------------------------------------------------------- close-ups for the page


@pytest.mark.parametrize(
    ("hz", "gain"), [(1.0, 0.7071), (2.0, 0.9701), (10.0, 0.9997), (70.0, 0.7071)]
)
def test_the_display_filter_has_its_half_power_at_1_and_70_hz(hz, gain):
    """By hand: 1/sqrt(1 + (1/f)^4) / sqrt(1 + (f/70)^4)."""
    time = np.arange(round(60 * SFREQ)) / SFREQ
    shown = display_filter(np.sin(2 * np.pi * hz * time)[None].astype(np.float32), SFREQ)
    middle = shown[0, round(20 * SFREQ) : round(40 * SFREQ)]
    assert np.sqrt(2) * middle.std() == pytest.approx(gain, abs=2e-3)


def test_the_display_filter_moves_no_peak_in_time():
    trace = np.zeros((1, 2048), dtype=np.float32)
    trace[0, 1000:1020] = 100.0 * np.hanning(20)
    assert abs(int(display_filter(trace, SFREQ)[0].argmax()) - 1009) <= 1


@pytest.fixture(scope="module")
def cuts(minute):
    """Every flag of a minute with what the page shows beside it."""
    measured = measure_recording(minute)
    result = conclude(measured, load_model(), mark="sure", line_frequency=None)
    return list(
        zip(result.flags, closeups(minute, measured.frame, result.flags), strict=True)
    )


def test_every_close_up_shows_the_moment_of_its_flag_at_its_sites(cuts):
    assert len(cuts) > 8
    for flag, window in cuts:
        assert window.flag == flag.number
        length = window.data_uv.shape[1] / window.sampling_rate
        assert window.onset <= flag.moment <= window.onset + length
        assert length <= 10.01
        assert window.data_uv.shape[0] == len(window.labels) == len(window.involved)
        assert np.isfinite(window.data_uv).all()
        involved = [
            name
            for name, is_one in zip(window.labels, window.involved, strict=True)
            if is_one
        ]
        assert list(window.labels[: len(involved)]) == involved  # they stand first
        assert flag.strongest_site in involved[0].split("-"), (
            flag.strongest_site,
            involved,
        )
        assert 1 <= len(involved) <= 10


def test_a_close_up_holds_the_difference_of_its_two_sites(cuts, signals):
    """Sites cancel their common reference: Fp1-F7 is that of the channels themselves."""
    rows = {name: row for name, row in zip(DEMO_SITES, signals, strict=True)}
    _, window = next((f, w) for f, w in cuts if "P3" in f.sites and f.kind == "pop")
    label = window.labels[0]
    first, second = (rows[name] for name in label.split("-"))
    low = round((window.onset + 100) * SFREQ)
    own = (first - second)[None, low - 1024 : low + window.data_uv.shape[1] + 1024]
    expected = display_filter(own.astype(np.float32), SFREQ)[0, 1024:-1024]
    # The cut has a margin of 2 s for the filter, this one of 4 s.
    np.testing.assert_allclose(window.data_uv[0], expected, atol=0.05 * np.ptp(expected))
    assert np.ptp(expected) > 50


def test_the_order_of_the_channels_does_not_change_what_a_close_up_shows(signals, cuts):
    order = np.arange(19)[::-1]
    turned = recording_of(
        cut(signals, 100, 160)[order], [f"{DEMO_SITES[k]}-REF" for k in order]
    )
    measured = measure_recording(turned)
    others = closeups(turned, measured.frame, [flag for flag, _ in cuts])
    for (flag, window), other in zip(cuts, others, strict=True):
        assert set(other.labels) >= {
            name
            for name, is_one in zip(window.labels, window.involved, strict=True)
            if is_one
        }
        assert flag.strongest_site in other.labels[0].split("-")


def test_beside_a_gap_a_close_up_stays_on_its_side(signals):
    data = cut(signals, 100, 160)
    first = round(8 * SFREQ)
    parts = [Segment(0, first, 0.0), Segment(first, data.shape[1] - first, 30.0)]
    recording = from_array(data, SFREQ, [f"{n}-REF" for n in DEMO_SITES], segments=parts)
    measured = measure_recording(recording)
    result = conclude(measured, load_model(), mark="sure", line_frequency=None)
    sides = set()
    for window in closeups(recording, measured.frame, result.flags):
        end = window.onset + window.data_uv.shape[1] / SFREQ
        assert end <= 8.0 + 1e-6 or window.onset >= 30.0 - 1e-6
        sides.add(end <= 8.0 + 1e-6)
    assert sides == {True, False}


def test_a_close_up_leaves_out_sites_without_a_signal(signals):
    data = cut(signals, 100, 160)
    data[DEMO_SITES.index("F7"), : round(20 * SFREQ)] = np.nan
    recording = referential(data)
    measured = measure_recording(recording)
    result = conclude(measured, load_model(), mark="sure", line_frequency=None)
    early = [flag for flag in result.flags if flag.end < 18]
    assert early
    windows = closeups(recording, measured.frame, early)
    assert [window.flag for window in windows] == [flag.number for flag in early]
    for window in windows:
        assert not [label for label in window.labels if "F7" in label.split("-")]
        assert np.isfinite(window.data_uv).all()


def test_a_flag_outside_the_signal_has_no_close_up_and_stops_no_other(minute, cuts):
    flags = [flag for flag, _ in cuts[:2]]
    lost = dataclasses.replace(flags[0], onset=500.0, moment=500.5)
    measured = measure_recording(minute)
    windows = closeups(minute, measured.frame, [flags[0], lost, flags[1]])
    assert [window.flag for window in windows] == [flag.number for flag in flags]


def test_close_ups_of_one_recording_invert_its_incidence_once(minute, cuts, monkeypatch):
    """With 64 sites an inversion takes as long as the rest of a close-up ten times over."""
    frame = measure_recording(minute).frame
    calls = []
    whole = type(frame).matrix

    def counted(self, available=None):
        calls.append(available)
        return whole(self, available)

    monkeypatch.setattr(type(frame), "matrix", counted)
    assert len(closeups(minute, frame, [flag for flag, _ in cuts])) == len(cuts)
    assert len(calls) == 1


@pytest.mark.parametrize("rate", [0.5, 4.0, 9.9])
def test_too_few_samples_a_second_are_refused_with_a_reason(rate):
    data = np.random.default_rng(0).normal(0, 10, (8, int(60 * max(rate, 1))))
    slow = from_array(data, rate, ["Fp1", "Fp2", "C3", "C4", "O1", "O2", "T3", "T4"])
    with pytest.raises(RecordingError, match=f"At least 10 samples a second.*{rate:g}"):
        triage(slow)
