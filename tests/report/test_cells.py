import csv
import io
from pathlib import Path

import pytest

from grader.errors import WriteFailed
from grader.report import write_csv
from grader.report.cells import csv_text, safe_cell


def rows_of(records):
    return list(csv.DictReader(io.StringIO(csv_text(records), newline="")))


def test_one_row_a_frame_with_the_logs_figures(lines):
    rows = rows_of(lines)
    frames = lines[1:-1]
    assert [row["file"] for row in rows] == [line["file"] for line in frames]
    for row, line in zip(rows, frames, strict=True):
        if line["status"] == "failed":
            assert (row["CCT [K]"], row["error"], row["what to do"]) == (
                "",
                "the file ends early",
                "copy it from the card again",
            )
            continue
        assert float(row["yellow-blue [Oklab]"]) == line["cast"]["yellow_blue"]
        assert float(row["white x [CIE 1931]"]) == line["cast"]["white_xy"][0]
        assert float(row["correction [mired]"]) == line["correction"]["shift_mired"]
        assert float(row["left [Delta E 2000]"]) == line["residual"]["delta_e_2000"]
        assert row["look by eye [1 = yes]"] == str(int(bool(line["flags"])))


@pytest.mark.parametrize(
    "start", ["=", "+", "-", "@", "\t", "\r", "\n", "\uff1d", "\uff0b", "\uff0d", "\uff20", " ="]
)
def test_no_spreadsheet_runs_a_cell(start):
    # OWASP, "CSV Injection": cells that begin with one of these are formulas to spreadsheets
    assert safe_cell(f"{start}cmd|'/C calc'!A0")[0] == "'"
    assert safe_cell("plain = text") == "plain = text"
    assert safe_cell(-1.5) == -1.5


def test_names_and_bodies_cannot_be_formulas():
    record = {"kind": "frame", "file": '=HYPERLINK("http://x")', "body": "@SUM(1)", "notes": ["-2+3"],
              "flags": ["=1"], "cast": {"yellow_blue": -0.5}}  # fmt: skip
    (row,) = rows_of([record])
    assert (row["file"], row["body"], row["notes"], row["flags"]) == (
        '\'=HYPERLINK("http://x")',
        "'@SUM(1)",
        "'-2+3",
        "'=1",
    )
    assert row["yellow-blue [Oklab]"] == "-0.5"


def test_the_header_tells_the_opponent_space(lines):
    other = {"kind": "frame", "file": "a", "cast": {"opponent": "ciecam16", "yellow_blue": 3.0}}
    assert rows_of([other])[0]["yellow-blue [CIECAM16-UCS]"] == "3.0"


def test_written_whole_or_not_at_all(tmp_path, lines):
    write_csv(lines, tmp_path / "frames.csv")
    assert (tmp_path / "frames.csv").read_bytes().decode("utf-8") == csv_text(lines)
    with pytest.raises(WriteFailed):
        write_csv(lines, tmp_path / "nowhere" / "frames.csv")


def test_every_column_is_documented():
    page = (Path(__file__).parents[2] / "docs" / "REPORT.md").read_text(encoding="utf-8")
    header = next(csv.reader(io.StringIO(csv_text([]))))
    assert [name for name in header if f"`{name}`" not in page] == []
