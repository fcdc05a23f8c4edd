from datetime import datetime

import numpy as np
import pytest
from scipy.stats import theilslopes

from grader.report.recount import read_shoot, theil_sen


def test_slope_of_sens_own_example():
    # Sen, JASA 63(324), 1968, section 6: the slope is 4 (data as in scipy's own test of theilslopes)
    hours, values = [1, 2, 3, 4, 10, 12, 18], [9, 15, 19, 20, 45, 55, 78]
    assert theil_sen([3600 * hour for hour in hours], values).slope == pytest.approx(4.0)


def test_slope_and_interval_are_scipys():
    chance = np.random.default_rng(3)
    clock_s = np.sort(chance.uniform(0, 7200, 80))
    values = 200 + 12 * clock_s / 3600 + chance.standard_t(2, 80)
    found, expected = (
        theil_sen(clock_s.tolist(), values.tolist()),
        theilslopes(values, clock_s / 3600, alpha=0.95),
    )
    assert (found.slope, found.low, found.high) == pytest.approx(
        (expected.slope, expected.low_slope, expected.high_slope)
    )


@pytest.mark.parametrize(
    ("clock_s", "values"), [([], []), ([0, 60], [1.0, 2.0]), ([5, 5, 5], [1.0, 2.0, 3.0])]
)
def test_no_slope_without_frames_or_time(clock_s, values):
    assert theil_sen(clock_s, values) is None


def test_a_long_stretch_is_thinned_not_choked_on():
    clock_s = np.arange(20_000.0)
    assert theil_sen(clock_s.tolist(), (clock_s / 360).tolist()).slope == pytest.approx(10.0)


def test_without_a_summary_stretches_are_counted_again(lines):
    whole, torn = read_shoot(lines), read_shoot(lines[:-1])
    assert not whole.notes
    assert any("ended early" in note for note in torn.notes)
    assert any("counted again" in note for note in torn.notes)
    assert {s.stretch: s.frames for s in torn.stretches} == {s.stretch: s.frames for s in whole.stretches}
    for again in torn.stretches:
        own = [line for line in lines if line.get("stretch") == again.stretch]
        hours = [datetime.fromisoformat(line["taken_at"]).timestamp() / 3600 for line in own]
        fit = theilslopes([line["cast"]["mired"] for line in own], hours)
        assert again.drift_mired_per_hour == pytest.approx(fit.slope)
        assert (again.drift_mired_low, again.drift_mired_high) == pytest.approx(
            (fit.low_slope, fit.high_slope)
        )
        (stated,) = (s for s in whole.stretches if s.stretch == again.stretch)
        assert again.cct_k == pytest.approx(stated.cct_k, rel=1e-3)
        assert 0.3 * stated.spread_delta_e_2000 < again.spread_delta_e_2000 < 1.5 * stated.spread_delta_e_2000
        assert again.yellow_blue == pytest.approx(stated.yellow_blue, abs=1e-4)


def test_what_the_summary_says_stands(lines):
    shoot = read_shoot(lines)
    stated = lines[-1]["stretches"]
    assert [s.stretch for s in shoot.stretches] == [s["stretch"] for s in stated]
    assert [s.drift_mired_low for s in shoot.stretches] == [s["drift_mired_low"] for s in stated]
    told = [(b.label, b.offset_to, b.is_reference, b.applied, b.shared_stretches) for b in shoot.bodies]
    assert told == [("A", None, True, None, None), ("B", "A", False, True, 4)]


def test_the_reader_is_told_what_is_wrong_with_a_log(shoots, lines):
    def notes(records):
        return " ".join(read_shoot(records).notes)

    assert "first line is missing" in notes(lines[1:])
    assert "grader-log/0" in notes([shoots.run_line(schema="grader-log/0"), *lines[1:]])
    assert "2 lines of the log could not be used" in notes([*lines, None, {"kind": "?"}])
    assert "speaks of 120 frames, but the log has lines of 119" in notes([lines[0], *lines[2:]])
