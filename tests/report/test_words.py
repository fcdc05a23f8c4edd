import pytest

from grader.report import verdict, words
from grader.report.records import Body, FrameRow, Stretch
from grader.report.recount import read_shoot

HOUR = {"first_taken_at": "2031-05-03T12:00:00", "last_taken_at": "2031-05-03T13:00:00"}


def stretch(slope, low, high, **more):
    return Stretch(
        "A1", drift_mired_per_hour=slope, drift_mired_low=low, drift_mired_high=high, **(HOUR | more)
    )


@pytest.mark.parametrize(
    ("one", "said"),
    [
        (stretch(12.0, 9.0, 15.0), "got warmer"),
        (stretch(-12.0, -15.0, -9.0), "got cooler"),
        (stretch(12.0, -1.0, 25.0), "nothing beyond chance"),
        (stretch(1.0, -1.0, 3.0), "steady"),  # whatever it is, nobody sees it
        (stretch(2.0, 1.0, 3.0), "steady"),  # beyond chance, but nobody sees 2 mired
        (stretch(12.0, 9.0, 15.0, last_taken_at="2031-05-03T12:10:00"), "steady"),  # 2 mired in ten minutes
        (stretch(None, None, None), "too short to tell"),
        (stretch(12.0, 9.0, 15.0, last_taken_at=None), "too short to tell"),
        (
            stretch(0.0, -1.0, 1.0, drift_duv_per_hour=0.004, drift_duv_low=0.003, drift_duv_high=0.005),
            "got greener",
        ),
    ],
)
def test_drift_is_told_when_it_is_beyond_chance_and_visible(one, said):
    assert words.drift_words(one) == said


@pytest.mark.parametrize(
    ("statuses", "flags", "said"),
    [
        ([], [], "The log holds no frames."),
        (["graded"] * 3, [], "All 3 frames are graded; none asks for a look by eye."),
        (["graded"], [], "The frame is graded; none asks for a look by eye."),
        (["graded"] * 3, ["odd-frame"], "All 3 frames are graded; look at 3 by eye."),
        (["graded", "failed"], [], "1 of 2 frames graded, 1 failed."),
        (["planned"] * 2, [], "All 2 frames are measured; none asks for a look by eye."),
        (["failed"] * 2, [], "None of the 2 frames could be used."),
        (
            ["graded", "planned", "measured"],
            [],
            "1 of 3 frames graded, 2 not done; none asks for a look by eye.",
        ),
    ],
)
def test_the_headline(statuses, flags, said):
    records = [
        {"kind": "frame", "file": str(k), "status": status, "flags": flags}
        for k, status in enumerate(statuses)
    ]
    assert verdict.headline(read_shoot(records)) == said


def answer(records, question):
    (found,) = (one for one in verdict.answers(read_shoot(records)) if question in one.question)
    return found


def test_the_answers_hold_the_logs_figures(lines):
    summary = lines[-1]
    before, after = (summary[f"mean_cast_{when}"]["delta_e_2000"] for when in ("before", "after"))
    assert f"{before:.1f} → {after:.1f}" in answer(lines, "work").figures
    assert answer(lines, "change").figures == f"{len(summary['stretches'])} stretches of light"
    assert answer(lines, "bodies").words == "No, but B was matched to A."
    assert answer(lines, "bodies").figures == "B measured 0.6\u00b0 apart from A"
    look = sum(bool(line.get("flags")) for line in lines)
    assert answer(lines, "eye").words == f"{look} frames, worst first."


def test_more_cast_than_before_is_no_success(shoots, lines):
    worse = lines[-1] | {"mean_cast_before": {"delta_e_2000": 2.0}, "mean_cast_after": {"delta_e_2000": 3.5}}
    assert answer([*lines[:-1], worse], "work").mark == "failed"


def test_what_cannot_be_told_is_not_told(lines):
    apart = [Body("x", "A"), Body("y", "B", offset_to="A", yellow_blue=0.0, shared_stretches=0)]
    assert "nobody can tell" in words.body_words(apart[1])
    alone = lines[-1] | {"bodies": []}
    assert answer([*lines[:-1], alone], "bodies").mark == "unknown"
    assert answer([], "drift").mark == "unknown"
    assert answer([], "change").mark == "unknown"
    assert answer([], "work").mark == "failed"


def test_one_light_and_one_body(lines):
    one = lines[-1] | {"stretches": lines[-1]["stretches"][:1]}
    assert "one light throughout" in answer([*lines[:-1], one], "change").words
    two = lines[-1] | {"stretches": [lines[-1]["stretches"][0], lines[-1]["stretches"][3]]}
    assert "from 5590 K to 2950 K" in answer([*lines[:-1], two], "change").words
    only = [line for line in lines[:-1] if line.get("body") == lines[1]["body"]]
    assert answer(only, "bodies").words == "There is only one body."


def test_files_beyond_the_tolerance(lines):
    summary = lines[-1] | {
        "beyond_tolerance": ["cards/A/a.tif", {"file": "cards/B/b.tif", "delta_e_2000": 2.5}, 7, None]
    }
    assert read_shoot([summary]).beyond == (("cards/A/a.tif", None), ("cards/B/b.tif", 2.5))


def test_a_file_that_could_not_be_read_is_no_body(lines):
    broken = {"kind": "frame", "file": "broken.jpg", "body": "", "status": "failed"}
    shoot = read_shoot([*lines[:-1], broken])
    assert [body.label for body in shoot.bodies] == ["A", "B"]
    unnamed = broken | {"status": "graded"}
    assert [body.label for body in read_shoot([*lines[:-1], unnamed]).bodies] == ["A", "B", "C"]


def test_no_strength_is_told_of_coloured_light():
    stage = FrameRow("a.dng", {}, yellow_blue=0.006, green_magenta=0.01, delta_e_2000=2.0)
    assert words.frame_cast(stage) == "a slight magenta and yellow cast"
    coloured = FrameRow("a.dng", {}, yellow_blue=0.006, delta_e_2000=2.0, flags=("coloured-light",))
    assert "coloured light" in words.frame_cast(coloured)
