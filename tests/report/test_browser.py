"""The page in a real browser: Debian's chromium, driven by playwright; axe-core (npm) looks for barriers."""

import os
import tempfile
from pathlib import Path

import pytest

from grader.report.page import render_html

playwright = pytest.importorskip("playwright.sync_api", reason="playwright is not installed")

CHROMIUM = Path("/usr/bin/chromium")
ARGUMENTS = [
    "--headless", "--no-sandbox", "--disable-gpu", "--disable-background-networking", "--disable-component-update",
    "--disable-sync", "--no-first-run",
]  # fmt: skip
AXE = Path(os.environ.get("AXE_CORE") or Path(tempfile.gettempdir(), "grader-axe", "package", "axe.min.js"))
DESKTOP, PHONE = {"width": 1360, "height": 900}, {"width": 390, "height": 844}

pytestmark = pytest.mark.skipif(
    not CHROMIUM.exists(), reason="chromium is not installed at /usr/bin/chromium"
)


@pytest.fixture(scope="module")
def browser():
    with playwright.sync_playwright() as driver:
        chromium = driver.chromium.launch(executable_path=str(CHROMIUM), args=ARGUMENTS)
        yield chromium
        chromium.close()


@pytest.fixture(scope="module")
def few(shoots):
    return shoots.shoot(60)


@pytest.fixture(scope="module")
def source(tmp_path_factory, few, bank):
    file = tmp_path_factory.mktemp("page") / "report.html"
    file.write_text(render_html(few, thumbnails=bank), encoding="utf-8")
    return file


class Opened:
    """A page that was opened, and everything it said and asked for meanwhile."""

    def __init__(self, browser, file, **options):
        self.said, self.asked = [], []
        self.context = browser.new_context(reduced_motion="reduce", **options)
        self.page = self.context.new_page()
        self.page.on("console", lambda message: self.said.append(message.text))
        self.page.on("pageerror", lambda error: self.said.append(str(error)))
        self.page.on("request", lambda request: self.asked.append(request.url))
        self.page.goto(file.as_uri())
        self.page.wait_for_selector("html[data-ready]", timeout=60_000)


@pytest.fixture(scope="module")
def desktop(browser, source):
    opened = Opened(browser, source, viewport=DESKTOP)
    yield opened
    opened.context.close()


@pytest.fixture(scope="module")
def phone(browser, source):
    opened = Opened(browser, source, viewport=PHONE, color_scheme="dark", has_touch=True, is_mobile=True)
    yield opened
    opened.context.close()


def place_of_point(page, chart, index):
    """Scroll a frame's mark into view and return its middle on the screen."""
    found = page.evaluate(
        """([id, index]) => {
            const chart = document.getElementById(id);
            chart.scrollIntoView({behavior: 'instant', block: 'center'});
            for (const trace of chart.querySelectorAll('.trace.scatter'))
                for (const mark of trace.querySelectorAll('.points path'))
                    if (mark.__data__?.data === index) {
                        const box = mark.getBoundingClientRect();
                        return [box.x + box.width / 2, box.y + box.height / 2];
                    }
            return null;
        }""",
        [chart, index],
    )
    assert found is not None, f"frame {index} is not drawn in {chart}"
    return found


def test_nothing_is_said_and_nothing_leaves(desktop, phone):
    for opened in (desktop, phone):
        assert opened.said == []
        assert [url for url in opened.asked if not url.startswith(("file:", "data:", "blob:"))] == []


@pytest.mark.parametrize("chart", ["course-chart", "plane-chart"])
def test_hover_tells_the_file_and_a_click_jumps_to_its_pictures(desktop, few, chart):
    page = desktop.page
    index = page.evaluate("JSON.parse(document.getElementById('data').textContent).frames.eye.lastIndexOf(1)")
    x, y = place_of_point(page, chart, index)
    page.evaluate("document.activeElement.blur()")
    page.mouse.move(x, y)
    page.wait_for_selector(f"#{chart} .hovertext")
    told = page.locator(f"#{chart} .hovertext").first.text_content()
    page.mouse.click(x, y)
    page.wait_for_function("document.activeElement.id === 'frame-name'")
    name = page.locator("#frame-name").text_content()
    assert name in told  # the frame's own mark, or a nearer one where marks meet
    (line,) = (one for one in few[1:-1] if one["file"].removeprefix("cards/") == name)
    assert f"yellow\u2013blue {line['cast']['yellow_blue']:+.3f}".replace("-", "\u2212") in told
    assert f"{line['cast']['cct_k']:.0f} K, doubt {line['cast']['doubt_deg']:.1f}°" in told
    assert page.locator("#frame-pair img").count() == 2
    assert page.evaluate(
        "[...document.querySelectorAll('#frame-pair img')].every(img => img.naturalWidth > 0)"
    )
    page.mouse.move(5, 5)


def test_charts_are_drawn_with_the_stretches_named(desktop, few):
    drawn = desktop.page.locator("#course-chart").text_content()
    for stretch in few[-1]["stretches"]:
        assert stretch["stretch"] in drawn
    assert "10000 K" in desktop.page.locator("#plane-chart").text_content()
    assert desktop.page.locator("#residual-chart .bars .point").count() > 10


def test_the_keyboard_reaches_everything_in_order(browser, source):
    opened = Opened(browser, source, viewport=DESKTOP)
    page, reached = opened.page, []
    for _ in range(80):
        page.keyboard.press("Tab")
        reached.append(
            page.evaluate(
                """() => { const e = document.activeElement;
                return e.id || e.className || e.closest('section')?.id || e.tagName; }"""
            )
        )
    order = [reached.index(name) for name in ("skip", "to-course", "step", "step-eye")]
    assert order == sorted(order)
    assert reached[1] == "verdict"
    page.focus("#step")
    first = page.locator("#frame-name").text_content()
    page.keyboard.press("ArrowRight")
    second = page.locator("#frame-name").text_content()
    assert first != second
    assert second in page.locator("#step").get_attribute("aria-valuetext")
    page.focus("#step-eye")
    page.keyboard.press("Enter")
    assert page.locator("#frame-facts .reasons li").count() >= 1
    page.locator(".to-course").nth(1).focus()
    page.keyboard.press("Enter")
    card = page.locator(".card").nth(1).locator("h3").text_content()
    assert page.locator("#frame-name").text_content() == card
    assert opened.said == []
    opened.context.close()


def test_a_phone_needs_no_sideways_scrolling(phone):
    assert phone.page.evaluate("document.documentElement.scrollWidth") <= PHONE["width"]


def test_light_and_dark(desktop, phone):
    grounds = [
        opened.page.evaluate("getComputedStyle(document.body).backgroundColor") for opened in (desktop, phone)
    ]
    levels = [int(ground.split("(")[1].split(",")[0]) for ground in grounds]
    assert levels[0] > 200
    assert levels[1] < 60
    for ground in grounds:  # a ground with a cast of its own would mislead the eye
        assert len(set(ground[4:-1].split(", "))) == 1


def test_printing_gives_a_light_page(browser, source):
    opened = Opened(browser, source, viewport=DESKTOP, color_scheme="dark")
    assert opened.page.pdf()[:5] == b"%PDF-"
    opened.page.evaluate("dispatchEvent(new Event('beforeprint'))")
    assert (
        opened.page.evaluate("getComputedStyle(document.documentElement).getPropertyValue('--sheet')").strip()
        == "#ffffff"
    )
    assert opened.said == []
    opened.context.close()


def test_without_scripts_the_figures_still_stand(browser, source):
    context = browser.new_context(java_script_enabled=False, viewport=DESKTOP)
    page = context.new_page()
    page.goto(source.as_uri())
    assert page.locator(".card img").count() > 0
    assert page.locator(".stretches data").count() > 20
    assert not page.locator("#viewer").is_visible()
    context.close()


@pytest.mark.skipif(not AXE.exists(), reason="axe-core is not there (npm pack axe-core; set AXE_CORE)")
@pytest.mark.parametrize("which", ["desktop", "phone"])
def test_no_serious_barrier(request, which):
    page = request.getfixturevalue(which).page
    page.evaluate("document.querySelectorAll('details').forEach(one => one.open = true)")
    page.evaluate(AXE.read_text(encoding="utf-8") + ";0")
    result = page.evaluate("axe.run(document)")
    serious = [
        (one["id"], [node["target"] for node in one["nodes"]][:3])
        for one in result["violations"]
        if one["impact"] in {"serious", "critical"}
    ]
    assert serious == []
    assert len(result["passes"]) > 20
