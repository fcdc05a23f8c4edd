import math

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from grader.report.records import (
    body_labels,
    flag_words,
    frame_rows,
    number,
    point,
    sort_lines,
    text,
)
from grader.report.recount import read_shoot

ANYTHING = st.recursive(
    st.none() | st.booleans() | st.integers() | st.floats() | st.text(),
    lambda inner: st.lists(inner, max_size=3) | st.dictionaries(st.text(), inner, max_size=3),
    max_leaves=8,
)


def test_the_later_line_for_a_file_stands():
    first = {"kind": "frame", "file": "a.tif", "status": "measured"}
    later = {"kind": "frame", "file": "a.tif", "status": "graded"}
    other = {"kind": "frame", "file": "b.tif", "status": "failed"}
    rows = read_shoot([first, other, later]).frames
    assert [(row.file, row.status) for row in rows] == [("a.tif", "graded"), ("b.tif", "failed")]


def test_worst_doubt_comes_first_and_no_doubt_at_all_before():
    def frame(name, doubt, flags):
        return {
            "kind": "frame",
            "file": name,
            "status": "graded",
            "cast": {"doubt_deg": doubt},
            "flags": flags,
        }

    shoot = read_shoot(
        [
            frame("fine", 9.0, []),
            frame("two", 2.0, ["high-doubt"]),
            frame("five", 5.0, ["odd-frame"]),
            frame("none", None, ["nothing-measured"]),
            frame("file", 7.0, ["converted"]),
        ]
    )
    assert [row.file for row in shoot.to_look_at] == ["none", "five", "two"]


def test_a_flag_of_a_later_version_stands_for_itself():
    assert flag_words("from-the-future") == "from-the-future"


def test_the_body_of_the_earliest_frame_is_a():
    late, early = ({"body": b, "taken_at": f"2031-05-03T1{h}:00:00"} for b, h in (("late", 4), ("early", 2)))
    assert body_labels([{"body": "untimed"}, late, early], {}) == {"early": "A", "late": "B", "untimed": "C"}


def test_bodies_are_lettered_by_first_appearance_around_the_summarys_labels():
    records = [{"body": "second"}, {"body": "first"}, {"body": "third"}]
    assert body_labels(records, {}) == {"second": "A", "first": "B", "third": "C"}
    known = {"bodies": [{"body": "first", "label": "A"}]}
    assert body_labels(records, known) == {"first": "A", "second": "B", "third": "C"}
    many = body_labels([{"body": str(k)} for k in range(30)], {})
    assert (many["25"], many["26"], many["29"]) == ("Z", "AA", "AD")


@pytest.mark.parametrize(
    ("taken", "apart_s"),
    [
        (("2031-05-03T12:00:00+02:00", "2031-05-03T11:30:00+01:00"), 1800),  # two zones, one clock
        (("2031-05-03T12:00:00", "2031-05-03T11:30:00"), -1800),
        (
            ("2031-05-03T12:00:00", "2031-05-03T11:30:00+01:00"),
            -1800,
        ),  # one without a zone: as the clocks showed
    ],
)
def test_times_with_and_without_zone(taken, apart_s):
    rows = read_shoot(
        {"kind": "frame", "file": str(k), "taken_at": when} for k, when in enumerate(taken)
    ).frames
    assert rows[1].clock_s - rows[0].clock_s == apart_s


@pytest.mark.parametrize(
    "odd", ["yesterday", "", 5, None, "0001-01-01T00:00:00+14:00", "2031-13-03T12:00:00"]
)
def test_times_that_are_none(odd):
    (row,) = read_shoot([{"kind": "frame", "file": "a", "taken_at": odd}]).frames
    assert row.clock_s is None or math.isfinite(row.clock_s)


def test_control_and_direction_characters_are_shown_as_escapes():
    assert text("a\x1b[2Jb\u202ec\ud800\n\u2028") == "a\\x1b[2Jb\\u202ec\\ud800\\n\\u2028"
    assert text("Fête 写真 é") == "Fête 写真 é"


def test_numbers_and_points_that_mean_nothing():
    assert [number(value) for value in (1, 2.5, True, "3", None, math.nan, -math.inf, 10**400)] == [
        1.0, 2.5, None, None, None, None, None, None,
    ]  # fmt: skip
    assert point([0.3, 0.3]) == (0.3, 0.3)
    assert [
        point(value) for value in ([0.3], [0.0, 0.3], [0.6, 0.6], "ab", [None, 0.3], [0.3, 0.3, 0.3])
    ] == [None] * 6


@settings(deadline=None, max_examples=60)
@given(st.lists(ANYTHING | st.fixed_dictionaries({"kind": st.just("frame"), "file": st.text()}), max_size=4))
def test_anything_may_stand_in_a_log(records):
    lines = sort_lines(records)
    assert len(frame_rows(lines)) == len(lines.frames)


@settings(deadline=None, max_examples=60)
@given(
    st.sampled_from(["cast", "correction", "residual", "error", "flags", "taken_at", "body", "stretch"]),
    ANYTHING,
)
def test_any_value_may_be_anything(shoots, key, value):
    record = dict(shoots.shoot(4, failed=0)[1])
    record[key] = value
    (row,) = read_shoot([record]).frames
    assert all(
        x is None or math.isfinite(x) for x in (row.yellow_blue, row.cct_k, row.doubt_deg, row.shift_mired)
    )
