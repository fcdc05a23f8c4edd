"""Write docs/FORMATS.md: every kind of file in the tests' matrix is made, read and written, and the outcome told.

Run from the project's folder: ``python docs/make_formats.py``.
"""

from __future__ import annotations

import re
import sys
import tempfile
from pathlib import Path

HERE = Path(__file__).resolve().parent
sys.path.insert(0, str(HERE.parent))

from grader import files  # noqa: E402
from grader.errors import GraderError  # noqa: E402
from grader.model import FLAGS, Frame  # noqa: E402
from tests.files.variants import Variant, all_variants  # noqa: E402

COMPRESSIONS = {
    1: "none", 5: "LZW", 7: "JPEG", 8: "deflate", 32773: "PackBits", 32946: "deflate", 34712: "JPEG 2000", 34887: "LERC",
    34925: "LZMA", 34933: "PNG", 50000: "zstd", 50001: "WebP", 50002: "JPEG XL",
}  # fmt: skip
DEPTHS = {"uint8": "8", "uint16": "16", "float32": "32 float"}
KEYS = (
    "kind",
    "bits",
    "sample",
    "alpha",
    "planar",
    "byteorder",
    "bigtiff",
    "tile",
    "min_is_white",
    "predictor",
)
TITLES = {"tiff": "TIFF", "libtiff": "TIFF", "Pillow": "TIFF", "png": "PNG", "jpeg": "JPEG"}

HEAD = """# Kinds of files

What grader reads, what it writes back, and what it refuses. The tables below are made by `docs/make_formats.py` from the
matrix of files that the tests use (`tests/files/variants.py`): each kind is made, read, graded with nothing to correct, and
written. Other readers (libtiff, libpng, libjpeg-turbo, Pillow, LittleCMS) agree with the pixels within one code value, most of
them exactly; for everything called *the same*, an identity correction gives back the very same integers. What a file is, is
told by its contents, never by its name.

## Rules

- **Depth stays.** 8 bits stay 8, 16 stay 16, half, single and double floats stay what they are (a frame holds 24 bits of
  a double, and of 24- and 32-bit integers). 10, 12 and 14 bits are spread over 16 for grading and packed again.
- **The profile stays** with `--space source`. Without one, 8- and 16-bit files are taken as sRGB (16-bit ones say so in the
  log), floating-point TIFFs as linear light with Rec.709 primaries; nothing is embedded then that was not there. A JPEG that names
  the optional wide space of the DCF standard in Exif (R03) is taken as opRGB. PNG's cICP, iCCP, sRGB, gAMA and cHRM count in that order.
- **A profile that no matrix and curves explain** (look-up tables, inks, Lab) is evaluated by LittleCMS, relative
  colorimetric, in floating point; the frame becomes 16-bit Rec.2020, is written as RGB, and carries the flag `converted`. CMYK without a
  profile is taken as ideal inks, which is a guess, and says so.
- **Greys stay grey** as long as the correction leaves them so; else they are written as RGB.
- **Alpha is kept, not graded.** Colours that are stored multiplied by it are divided first and multiplied again at
  the end, without losing an integer.
- **The orientation is a tag**: pixels are never turned, the tag is never applied twice.
- **JPEG** is written with the source's quantisation tables and sampling, or finer ones where they cannot be repeated (4:1:1 and
  4:4:0 become 4:4:4). It is coded anew, so that values move by rounding even where nothing was corrected.
- **Several pictures in one file**: the largest that is neither a preview nor a mask is taken, the first of equal ones; the
  choice is flagged (`page-chosen`), and only that picture is written.
- **Damage is an error.** A JPEG's coded data are walked code by code, a PNG's checksums verified, a TIFF's strips and tiles
  located before anything is decoded: a file that is cut short is refused, never shown with a grey remainder. (A changed byte in uncompressed
  data, or one that still makes valid codes, cannot be noticed by anyone.)
- **Size is limited by the header** before memory is taken: 500 million pixels unless `--max-pixels` says otherwise.
- **Raw files** are whatever LibRaw opens; they are written as 16-bit TIFF unless a format is asked for.
"""


def main() -> None:
    """Write the page."""
    (HERE / "FORMATS.md").write_text(page(), encoding="utf-8")


def page() -> str:
    """Return the page."""
    rows: dict[tuple[str, ...], list[str]] = {}
    with tempfile.TemporaryDirectory() as folder:
        for variant in all_variants():
            title = TITLES[variant.name.split()[0]]
            what = re.sub(r"^(tiff|png|jpeg) |\b\d+ bit( float)?\s*", "", variant.name).strip() or "plain"
            if what == variant.name and title == "TIFF":
                what = f"by {what}"
            depth, *told = outcome(variant, Path(folder))
            if told[0] == "refused":
                what = variant.name.split(" ", 1)[1]
            rows.setdefault((title, what, *told), []).append(depth)
    return HEAD + "".join(section(title, rows) for title in ("TIFF", "PNG", "JPEG")) + flags()


def section(title: str, rows: dict[tuple[str, ...], list[str]]) -> str:
    """Return the tables of one format: what is read, then what is refused."""
    mine = {
        key[1:]: ", ".join(dict.fromkeys(filter(None, depths)))
        for key, depths in rows.items()
        if key[0] == title
    }
    read = [f"| {k[0]} | {d} | {k[1]} | {k[2]} | {k[3]} |" for k, d in mine.items() if k[1] != "refused"]
    refused = [f"| {k[0]} | {k[2]} |" for k in mine if k[1] == "refused"]
    text = (
        f"\n## {title}\n\n| stored | bits | read as | written as | flags |\n|---|---|---|---|---|\n"
        + "\n".join(read)
        + "\n"
    )
    if refused:
        text += "\n| refused | what the user reads |\n|---|---|\n" + "\n".join(refused) + "\n"
    return text


def outcome(variant: Variant, folder: Path) -> tuple[str, str, str, str]:
    """Return the depths of a kind, how it is read, how it is written, and its flags; or why it is refused."""
    source, target = folder / f"in{variant.suffix}", folder / f"out{variant.suffix}"
    source.write_bytes(variant.make())
    bits = re.search(r"\b(\d+) bit\b( float)?", variant.name)
    stored = f"{bits[1]}{bits[2] or ''}" if bits else ""
    try:
        frame = files.read(source)
    except GraderError as refusal:
        return stored, "refused", f"{refusal.message}; {refusal.hint}", ""
    files.write(frame, target, overwrite=True)
    told = [f for f in frame.header.flags if f != "profile-assumed" or frame.encoding["kind"] == "cmyk"]
    depth = DEPTHS[frame.pixels.dtype.name]
    depths = stored if stored in ("", depth) else f"{stored} (as {depth})"
    copy = files.read(target)
    written = png_as(source, target) if variant.suffix == ".png" else written_as(frame, copy)
    return depths or depth, read_as(frame), written, ", ".join(f"`{f}`" for f in told)


def read_as(frame: Frame) -> str:
    """Return colours and space of a frame."""
    colours = "grey, " if frame.encoding["kind"] == "grey" else ""
    alpha = ", alpha" if frame.alpha is not None else ""
    return f"{colours}{frame.space.name}{alpha}"


def png_as(source: Path, target: Path) -> str:
    """Return what the header of a PNG's copy says differently."""
    old, new = (path.read_bytes()[24:29] for path in (source, target))
    changes = []
    if old[:2] != new[:2]:
        changes.append(
            f"{new[0]} bit {('grey', '', 'RGB', '', 'grey with alpha', '', 'RGB with alpha')[new[1]]}"
        )
    if old[4] != new[4]:
        changes.append("not interlaced")
    return ", ".join(changes) or "the same"


def written_as(before: Frame, after: Frame) -> str:
    """Return what differs between the file and its copy, or that nothing does."""
    if before.header.format == "jpeg" and before.encoding["kind"] != "cmyk":
        same = all(
            before.encoding[k] == after.encoding[k] for k in ("quantisation", "sampling", "progressive")
        )
        return "the same tables and sampling" if same else "the same tables, 4:4:4"
    changes = []
    old, new = (COMPRESSIONS.get(f.encoding.get("compression", 0), "") for f in (before, after))
    if old != new:
        changes.append(f"{new} instead of {old}")
    if "converted" in before.header.flags:
        changes.append(f"{DEPTHS[after.pixels.dtype.name]} bit RGB")
    elif any(
        before.encoding.get(k) != after.encoding.get(k) for k in KEYS if not (k == "predictor" and old != new)
    ):
        changes.append("another layout")
    return ", ".join(changes) or "the same"


def flags() -> str:
    """Return what the flags of reading mean."""
    mine = ("converted", "page-chosen", "profile-assumed", "profile-broken")
    return "\n## Flags\n\n| flag | meaning |\n|---|---|\n" + "".join(
        f"| `{name}` | {FLAGS[name]} |\n" for name in mine
    )


if __name__ == "__main__":
    main()
