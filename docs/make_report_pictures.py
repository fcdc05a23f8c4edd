"""Make the pictures of docs/REPORT.md: the sample run's report on a wide screen and on a phone.

    python docs/make_report_pictures.py

Grades sample_images into a temporary folder and photographs the report in Chromium (playwright, in the test extra).
"""

import io
import subprocess
import sys
import tempfile
from pathlib import Path

from PIL import Image
from playwright.sync_api import sync_playwright

HERE = Path(__file__).resolve().parent
CHROMIUM = "/usr/bin/chromium"
ARGUMENTS = ["--headless", "--no-sandbox", "--disable-gpu", "--no-first-run"]
MOST_BYTES = 400_000
SIZES = {"report-desktop": (1280, 3400), "report-phone": (390, 2600)}


def main() -> None:
    """Write both pictures."""
    with tempfile.TemporaryDirectory() as folder:
        report = Path(folder, "report.html")
        command = [
            sys.executable,
            "-m",
            "grader",
            "neutralise",
            "sample_images",
            "--out",
            str(Path(folder, "graded")),
        ]
        subprocess.run([*command, "--report", str(report), "--quiet"], cwd=HERE.parent, check=False)
        with sync_playwright() as driver:
            browser = driver.chromium.launch(executable_path=CHROMIUM, args=ARGUMENTS)
            for name, (width, height) in SIZES.items():
                page = browser.new_page(viewport={"width": width, "height": 900}, reduced_motion="reduce")
                page.goto(report.as_uri())
                page.wait_for_selector("html[data-ready]")
                shot = page.screenshot(full_page=True)
                save(shot, HERE / "pictures" / f"{name}.png", height)
            browser.close()


def save(shot: bytes, path: Path, height: int) -> None:
    """Write the upper part of a screenshot with 256 colours where it would be too large."""
    with Image.open(io.BytesIO(shot)) as picture:
        part = picture.convert("RGB").crop((0, 0, picture.width, min(height, picture.height)))
    path.parent.mkdir(exist_ok=True)
    part.save(path, optimize=True)
    if path.stat().st_size > MOST_BYTES:
        part.quantize(256, method=Image.Quantize.MAXCOVERAGE, kmeans=2).save(path, optimize=True)
    print(f"{path.name}: {path.stat().st_size // 1000} kB")


if __name__ == "__main__":
    main()
