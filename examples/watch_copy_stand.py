"""Watch a copy stand's folder: grade each new frame with one saved correction, and say when the light moved.

    grader sample card.dng --save stand.json
    python examples/watch_copy_stand.py incoming/ graded/ stand.json --patch 45%,1%,10%,3% --tolerance 1.0

With ``--patch`` a grey that is in every frame is measured, and what the correction leaves of its cast is told in
Delta E 2000 of a mid grey.  ``--once`` takes what is there and ends, with exit code 4 beyond the tolerance.
"""

from __future__ import annotations

import argparse
import sys
import time
from collections.abc import Iterator
from pathlib import Path

import grader
from grader.cast.correction import corrected_xy, fixed_correction
from grader.cast.sample import parse_box, sample_patch, stored_box
from grader.colour.difference import grey_delta_e_2000
from grader.files import suffix_for

SUFFIXES = {".dng", ".nef", ".cr2", ".cr3", ".arw", ".raf", ".tif", ".tiff", ".jpg", ".jpeg", ".png"}


def new_files(folder: Path, seconds: float, *, once: bool) -> Iterator[Path]:
    """Yield each file as it stops growing."""
    done: set[Path] = set()
    sizes: dict[Path, int] = {}
    while True:
        for path in sorted(p for p in folder.iterdir() if p.suffix.lower() in SUFFIXES and p not in done):
            size = path.stat().st_size
            if once or (size and sizes.get(path) == size):
                done.add(path)
                yield path
            sizes[path] = size
        if once:
            return
        time.sleep(seconds)


def grade(path: Path, out: Path, fixed: grader.Fixed, patch: str | None) -> float | None:
    """Grade one file; return what is left of the patch's cast, as Delta E 2000 of a mid grey."""
    frame = grader.read(path)
    correction = fixed_correction(fixed, frame.header)
    target = out / (path.stem + suffix_for(frame.header, fixed.output))
    grader.write(grader.correct(frame, correction, fixed.output), target, fixed.output, correction=correction)
    if patch is None:
        return None
    seen = sample_patch(frame, stored_box(parse_box(patch), frame.header))
    return grey_delta_e_2000(corrected_xy(seen.light_xy, frame.header, correction))


def main(arguments: list[str] | None = None) -> int:
    """Run the watch until it is interrupted."""
    parser = argparse.ArgumentParser(
        description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter
    )
    parser.add_argument("folder", type=Path)
    parser.add_argument("out", type=Path)
    parser.add_argument("preset", help="a fixed preset: name or file")
    parser.add_argument(
        "--patch", help="X,Y,W,H of a grey in every frame, upright; pixels, fractions or per cent"
    )
    parser.add_argument("--tolerance", type=float, default=1.0, help="Delta E 2000 [1.0]")
    parser.add_argument("--seconds", type=float, default=2.0, help="between looks into the folder [2]")
    parser.add_argument("--once", action="store_true")
    given = parser.parse_args(arguments)
    fixed = grader.load_preset(given.preset).fixed
    if fixed is None:
        parser.error(f"{given.preset} is a recipe; a copy stand needs a fixed preset (grader sample)")
    given.out.mkdir(parents=True, exist_ok=True)
    beyond = False
    for path in new_files(given.folder, given.seconds, once=given.once):
        try:
            left = grade(path, given.out, fixed, given.patch)
        except grader.GraderError as error:
            print(error, file=sys.stderr)
            continue
        moved = left is not None and left > given.tolerance
        beyond = beyond or moved
        told = "" if left is None else f"  Delta E 2000 {left:.2f}"
        print(f"{path.name}{told}{'  THE LIGHT HAS MOVED' if moved else ''}", flush=True)
    return 4 if beyond else 0


if __name__ == "__main__":
    try:
        sys.exit(main())
    except KeyboardInterrupt:
        sys.exit(130)
