import re

import pytest

from grader.report import table
from grader.report.terminal import columns, cut


def test_columns_are_aligned_and_hold_the_logs_figures(lines):
    shown = table(lines, colour=False, width=200).splitlines()
    head = next(k for k, line in enumerate(shown) if line.startswith("stretch"))
    rows = shown[head + 1 : head + 1 + len(lines[-1]["stretches"])]
    for row, stretch in zip(rows, lines[-1]["stretches"], strict=True):
        assert row.startswith(stretch["stretch"])
        assert f" {round(stretch['cct_k'], -1):.0f} " in row
        assert f"{stretch['drift_mired_per_hour']:+.1f}" in row
    end = shown[head].index("light K") + len("light K")
    assert {row[end - 1].isdigit() and row[end] == " " for row in rows} == {True}


@pytest.mark.parametrize("width", [40, 60, 80, 120, 300])
def test_no_line_is_wider_than_the_terminal(lines, width):
    for line in table(lines, colour=False, width=width).splitlines():
        assert columns(line) <= width


def test_colour_only_when_asked(lines):
    assert "\x1b" not in table(lines, colour=False, width=100)
    coloured = table(lines, colour=True, width=100)
    assert re.sub(r"\x1b\[\d+m", "", coloured) == table(lines, colour=False, width=100)
    assert "\x1b" in coloured


def test_a_summary_alone_will_do(lines):
    shown = table(lines[-1], colour=False, width=200)
    assert all(stretch["stretch"] in shown for stretch in lines[-1]["stretches"])
    assert "matched" in shown


def test_wide_and_combining_characters():
    # Unicode Standard Annex 11: fullwidth and wide characters take two columns, combining marks none
    assert [columns(one) for one in ("abc", "写真", "\uff46", "e\u0301", "\u200b")] == [3, 4, 2, 1, 0]
    assert cut("写真写真", 5) == "写真…"
    assert cut("e\u0301e\u0301e\u0301", 3) == "e\u0301e\u0301e\u0301"


def test_names_cannot_reach_the_terminal(lines):
    evil = [line | {"file": line["file"] + "\x1b]0;x\x07\n"} if "file" in line else line for line in lines]
    assert not re.search(r"[\x00-\x09\x0b-\x1f]", table(evil, colour=False, width=300))


def test_nothing_to_show():
    assert (
        table([], colour=False, width=80)
        == "The log holds no frames.\n\nNo stretches of light in this log.\n"
    )
