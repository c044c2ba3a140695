"""The last minutes of a recording: which samples stay, and at what time."""

import math
from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from artifactlens.epochs import epoch_grid
from artifactlens.errors import OptionError
from artifactlens.last_minutes import last_minutes_of
from artifactlens.recording import Segment, from_array


def recording(seconds=180, rate=10.0, segments=None):
    data = np.tile(np.arange(round(seconds * rate), dtype=float), (2, 1))
    return from_array(data, rate, ["Fp1", "Fp2"], segments=segments)


def test_the_last_minute_keeps_its_samples_and_its_times():
    cut = last_minutes_of(recording(), 1)
    assert cut.segments == (Segment(1200, 600, 120.0),)
    assert cut.duration == 180.0
    grid = epoch_grid(cut)
    assert (grid.onset[0], grid.onset[-1], len(grid)) == (120.0, 179.0, 60)
    assert cut.read(int(grid.start[0]), int(grid.start[0]) + 1)[0, 0] == 1200.0
    assert cut.notes == ("Judged: the last 1 min.",)


def test_it_begins_at_a_second_of_the_whole_and_keeps_no_less_than_was_asked_for():
    cut = last_minutes_of(recording(seconds=180.5), 1)
    assert cut.segments == (Segment(1200, 605, 120.0),)


@pytest.mark.parametrize("minutes", [3, 3.5, 1000])
def test_what_is_no_longer_stays_as_it_is(minutes):
    whole = recording()
    assert last_minutes_of(whole, minutes) is whole


def test_gaps_count_by_the_clock():
    parts = (Segment(0, 600, 0.0), Segment(600, 600, 90.0), Segment(1200, 600, 300.0))
    whole = recording(segments=parts)
    assert whole.duration == 360.0
    assert last_minutes_of(whole, 2).segments == parts[2:]  # begins within the gap
    assert last_minutes_of(whole, 4).segments == (Segment(900, 300, 120.0), parts[2])
    assert last_minutes_of(whole, 4.75).segments == parts[1:]
    assert last_minutes_of(whole, 5.5).segments == (Segment(300, 300, 30.0), *parts[1:])


def test_annotations_that_ended_before_are_left_out():
    whole = replace(recording(), annotations=((5.0, 1.0, "a"), (100.0, 30.0, "b"),
                                              (150.0, 0.0, "c")))  # fmt: skip
    assert [text for *_, text in last_minutes_of(whole, 1).annotations] == ["b", "c"]


@pytest.mark.parametrize("minutes", [0, -1, 0.01, math.nan, math.inf])
def test_no_time_at_all_is_refused_with_what_was_given(minutes):
    with pytest.raises(OptionError, match=f"given was {minutes!r}"):
        last_minutes_of(recording(), minutes)


@settings(deadline=None)
@given(
    st.sampled_from([10.0, 100.0, 99.7, 173.61, 256.0]),
    st.lists(st.tuples(st.integers(1, 900), st.floats(0, 40)), min_size=1, max_size=4),
    st.floats(1 / 60, 1.0),
)
def test_the_epochs_that_stay_are_those_of_the_whole(rate, stretches, minutes):
    """One sample off at most, where a second is no whole number of samples."""
    segments, start, onset = [], 0, 0.0
    for n_samples, gap in stretches:
        segments.append(Segment(start, n_samples, onset))
        start, onset = start + n_samples, onset + n_samples / rate + gap
    whole = from_array(np.zeros((2, start)), rate, ["Fp1", "Fp2"], segments=segments)
    cut = last_minutes_of(whole, minutes)
    assert cut.duration == pytest.approx(whole.duration, abs=1e-9)
    begin = whole.duration - 60 * minutes
    all_of_it, kept = epoch_grid(whole), epoch_grid(cut)
    wanted = all_of_it.onset + 1 > begin + 1e-6
    late = all_of_it.onset[wanted]
    assert len(kept) in (len(late), len(late) + 1)
    np.testing.assert_allclose(kept.onset[len(kept) - len(late) :], late, atol=1.01 / rate)
