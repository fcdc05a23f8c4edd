import json
import math
import re
import subprocess
import sys
from html.parser import HTMLParser

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from grader.report import write_html
from grader.report.page import BUDGET_BYTES, MOST_DRAWN, render_html, short_names

NASTY = "</script><img src=x onerror=alert(1)> & \"q\" 's' <!--"


class Page(HTMLParser):
    """What a reader of the page finds: text by section, figures, scripts, addresses."""

    VOID = ("meta", "link", "img", "br", "input", "circle", "path", "hr")

    def __init__(self, source):
        super().__init__()
        self.open, self.tags, self.figures, self.scripts, self.addresses = [], [], {}, {}, []
        self.text, self.section = {}, None
        self.feed(source)
        self.close()

    def handle_starttag(self, tag, attrs):
        attrs = dict(attrs)
        self.tags.append((tag, attrs))
        if tag not in self.VOID:
            self.open.append((tag, attrs))
        if tag == "section":
            self.section = attrs["id"]
        if tag == "data":
            self.figures.setdefault(self.section, []).append(attrs["value"])
        self.addresses += [
            attrs[key] for key in ("src", "href", "action", "data", "poster", "srcset") if key in attrs
        ]

    def handle_startendtag(self, tag, attrs):
        self.tags.append((tag, dict(attrs)))

    def handle_endtag(self, tag):
        if tag not in self.VOID:
            assert self.open[-1][0] == tag, f"</{tag}> closes <{self.open[-1][0]}>"
            self.open.pop()

    def handle_data(self, content):
        if self.open and self.open[-1][0] == "script":
            name = self.open[-1][1].get("id", "")
            self.scripts[name] = self.scripts.get(name, "") + content
        elif self.section:
            self.text[self.section] = self.text.get(self.section, "") + content

    @property
    def data(self):
        return json.loads(self.scripts["data"])


@pytest.fixture(scope="module")
def page(lines, bank):
    return Page(render_html(lines, thumbnails=bank))


def test_sections_stand_in_the_order_of_what_matters(page):
    sections = [attrs["id"] for tag, attrs in page.tags if tag == "section"]
    assert sections == ["verdict", "look", "course", "plane", "stretches", "bodies", "residuals", "run"]
    assert not page.open


def test_figures_of_the_page_are_the_logs(page, lines):
    stated = [float(value) for value in page.figures["stretches"]]
    keys = ("frames", "cct_k", "duv", "doubt_deg", "yellow_blue", "green_magenta", "spread_delta_e_2000",
            "drift_mired_per_hour", "drift_mired_low", "drift_mired_high", "drift_duv_per_hour", "drift_duv_low",
            "drift_duv_high")  # fmt: skip
    assert stated == [stretch[key] for stretch in lines[-1]["stretches"] for key in keys]
    bodies = [float(value) for value in page.figures["bodies"]]
    keys = ("frames", "yellow_blue", "green_magenta", "offset_deg", "doubt_deg", "shared_stretches")
    stated = [body[key] for body in lines[-1]["bodies"] for key in keys]
    assert bodies == [value for value in stated if value is not None]
    flagged = sorted((x for x in lines if x.get("flags")), key=lambda x: -x["cast"]["doubt_deg"])
    look = [float(value) for value in page.figures["look"]]
    assert look == [x["cast"][key] for x in flagged for key in ("doubt_deg", "yellow_blue", "green_magenta")]


def test_figures_of_the_charts_are_the_logs(page, lines):
    frames = page.data["frames"]
    by_name = {line["file"].removeprefix("cards/"): line for line in lines[1:-1]}
    assert set(frames["name"]) == {name for name, line in by_name.items() if line.get("cast")}
    assert frames["x"] == sorted(frames["x"])
    for k, name in enumerate(frames["name"]):
        line = by_name[name]
        assert frames["yb"][k] == pytest.approx(line["cast"]["yellow_blue"], abs=1e-5)
        assert frames["leftGm"][k] == pytest.approx(line["residual"]["green_magenta"], abs=1e-5)
        assert frames["doubt"][k] == pytest.approx(line["cast"]["doubt_deg"], abs=0.01)
        assert frames["cct"][k] == round(line["cast"]["cct_k"])
        assert page.data["stretches"][frames["stretch"][k]]["name"] == line["stretch"]
    histogram = page.data["histogram"]
    assert sum(histogram["before"]) == sum(histogram["after"]) == len(frames["name"])


def test_the_page_needs_nothing_else(page):
    assert all(address.startswith(("data:", "#")) for address in page.addresses)
    (policy,) = (
        a["content"] for t, a in page.tags if t == "meta" and a.get("http-equiv") == "Content-Security-Policy"
    )
    assert policy.startswith("default-src 'none'")
    assert "unsafe-inline'" not in policy.split("script-src")[1]
    assert not [name for _, attrs in page.tags for name in attrs if name.startswith("on")]


def test_names_that_look_like_html_stay_names(shoots, bank):
    lines = shoots.shoot(12)
    lines[0]["command"] = ["grader", NASTY]
    lines[0]["preset"] = {"name": NASTY, "settings": {"toward": NASTY}}
    for k, line in enumerate(lines[1:-1]):
        line["file"] = f"{NASTY}{k}\u2028"
        line["body"] = line["stretch"] = NASTY
        line["flags"] = ["odd-frame", NASTY]
        if line.get("correction"):
            line["correction"] = line["correction"] | {"reason": NASTY}
    lines[-1]["bodies"] = [{"body": NASTY, "label": NASTY, "offset_to": NASTY}]
    lines[-1]["stretches"] = [
        s | {"stretch": NASTY, "body": NASTY, "first_file": NASTY} for s in lines[-1]["stretches"]
    ]
    source = render_html(lines, thumbnails=bank)
    page = Page(source)
    assert "<img src=x" not in source
    assert "\u2028" not in source
    assert (
        page.data["frames"]["name"][0].startswith("script><img src=x")
        or NASTY in page.data["frames"]["name"][0]
    )
    assert len(re.findall("<script", source)) == 4
    assert not [name for _, attrs in page.tags for name in attrs if name.startswith("on")]


@pytest.mark.parametrize("body", [[], ["run"], ["summary"], ["run", "summary"]])
def test_a_log_without_frames(shoots, body):
    made = {"run": shoots.run_line(), "summary": {"kind": "summary", "frames": 0}}
    page = Page(render_html([made[kind] for kind in body]))
    assert "No frame stands out" in page.text["look"]
    assert page.data["frames"]["x"] == []


def test_a_torn_log_and_an_older_one(shoots, lines):
    page = Page(render_html([shoots.run_line(schema="grader-log/0"), *lines[1:40]]))
    assert "ended early" in page.text["verdict"]
    assert "grader-log/0" in page.text["verdict"]
    assert "counted again" in page.text["verdict"]


def test_pictures_that_are_gone(lines):
    without = Page(render_html(lines))
    assert "without pictures" in without.text["look"]
    gone = Page(render_html(lines, thumbnails=lambda record: (None, b"no JPEG")))
    assert gone.text["look"].count("no picture") == 2 * sum(bool(line.get("flags")) for line in lines)

    def broken(record):
        raise OSError("the card was taken out")

    assert "no picture" in Page(render_html(lines, thumbnails=broken)).text["look"]


def test_all_failed_and_only_measured(shoots):
    lines = shoots.shoot(6, status="planned")
    for line in lines[1:-1]:
        line.pop("residual", None)
        line.pop("output", None)
    lines[-1] = lines[-1] | {"mean_cast_after": None}
    assert "no picture was changed" in Page(render_html(lines)).text["verdict"]
    error = {"code": "damaged", "message": "cut short", "hint": "copy it again"}
    failed = [{"kind": "frame", "file": f"{k}", "status": "failed", "error": error} for k in range(3)]
    page = Page(render_html([lines[0], *failed]))
    assert "Cut short. Copy it again." in page.text["look"]
    assert "3 frames failed" in page.text["look"]


def test_a_thousand_frames_fit_in_a_mail(shoots, lines, bank):
    frames = [line for line in lines[1:-1] if line.get("cast")]
    many = [frames[k % len(frames)] | {"file": f"{k}.tif", "sha256": f"{k:x}"} for k in range(1000)]
    source = render_html([lines[0], *many, lines[-1]], thumbnails=bank)
    assert len(source.encode()) <= BUDGET_BYTES
    page = Page(source)
    shown = len(json.loads(page.scripts["pictures"])) + sum(tag == "img" for tag, _ in page.tags) // 2
    assert shown == 1000


def test_fifty_thousand_frames_are_summarised(lines):
    frames = [line for line in lines[1:-1] if line.get("cast")]
    many = [frames[k % len(frames)] | {"file": f"{k}.tif"} for k in range(50_000)]
    source = render_html([lines[0], *many, lines[-1]])
    page = Page(source)
    assert len(page.data["frames"]["x"]) == MOST_DRAWN
    assert len(source.encode()) <= BUDGET_BYTES
    assert "Of 50000 frames, 3000 are drawn" in page.text["course"]
    assert sum(page.data["histogram"]["before"]) == 50_000


def test_frames_without_times_are_drawn_in_their_order(lines):
    untimed = [line | {"taken_at": None} for line in lines[1:-1]]
    data = Page(render_html([lines[0], *untimed])).data
    assert data["timed"] is False
    assert data["frames"]["x"] == [k for k, line in enumerate(untimed, 1) if line["status"] != "failed"]
    some = [line | {"taken_at": None} if k < 9 else line for k, line in enumerate(lines[1:-1])]
    page = Page(render_html([lines[0], *some]))
    assert page.data["timed"] is True
    assert "8 frames without a capture time are not drawn" in page.text["course"]


@settings(max_examples=20, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(
    st.lists(
        st.fixed_dictionaries(
            {"kind": st.sampled_from(["frame", "run", "summary"]), "file": st.text(max_size=5)},
            optional={
                key: st.none() | st.text(max_size=3) | st.lists(st.floats(), max_size=2)
                | st.dictionaries(st.sampled_from(["white_xy", "from_xy", "cct_k", "doubt_deg", "yellow_blue"]),
                                  st.floats() | st.lists(st.floats(0, 1), min_size=2, max_size=2))
                for key in ("cast", "correction", "residual", "stretch", "flags", "stretches", "bodies", "taken_at",
                            "preset", "status", "mean_cast_before")
            },
        ),
        max_size=5,
    )
)  # fmt: skip
def test_any_log_gives_a_whole_page(records):
    page = Page(render_html(records))
    assert not page.open
    values = [value for values in page.figures.values() for value in values]
    assert all(math.isfinite(float(value)) for value in values)


def test_the_file_replaces_an_older_one(tmp_path, lines):
    target = tmp_path / "report.html"
    target.write_text("old")
    write_html(lines, target)
    assert target.read_text(encoding="utf-8") == render_html(lines)


def test_shared_folders_are_left_out_of_names():
    assert short_names(["a/b/1.tif", "a/c/1.tif"]) == {"a/b/1.tif": "b/1.tif", "a/c/1.tif": "c/1.tif"}
    assert short_names(["C:\\cards\\1.tif"]) == {"C:\\cards\\1.tif": "1.tif"}
    assert short_names([]) == {}


def test_reports_load_heavy_libraries_only_when_needed():
    code = "import sys, grader.report; print([m for m in ('plotly', 'scipy', 'colour', 'ruptures') if m in sys.modules])"
    assert (
        subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True).stdout
        == "[]\n"
    )
