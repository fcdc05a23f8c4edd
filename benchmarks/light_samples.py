"""Angle between measured and true light on the sample photographs: each reading, the vote, the shoot's plan.

``python benchmarks/light_samples.py [sample_images]``: mean and median recovery angle in working light, stage light
aside; the truth is ``truth.json`` of the script that made the pictures.
"""

import json
import sys
from pathlib import Path

import numpy as np

import grader
from grader.colour.opponent import xy_from_cast
from grader.colour.white import linear_from_xy


def angle_deg(first_xy, second_xy):
    """Return the angle between two lights in degrees."""
    one, two = (np.asarray(linear_from_xy(xy), float) for xy in (first_xy, second_xy))
    return float(np.degrees(np.arctan2(np.linalg.norm(np.cross(one, two)), one @ two)))


def main(folder):
    truth = json.loads((folder / "truth.json").read_text(encoding="utf-8"))
    names = sorted(truth)
    casts = [grader.measure(grader.read(folder / name)) for name in names]
    errors = {}
    for name, cast, correction in zip(names, casts, grader.plan(casts), strict=True):
        if truth[name]["coloured"]:
            continue
        white = truth[name]["white_xy"]
        for method, reading in cast.readings.items():
            light = xy_from_cast(reading.yellow_blue, reading.green_magenta, cast.opponent)
            errors.setdefault(method, []).append(angle_deg(light, white))
        errors.setdefault("vote", []).append(angle_deg(cast.white_xy, white))
        errors.setdefault("vote, with the shoot", []).append(angle_deg(correction.from_xy, white))
    print(f"{'method':24} {'frames':>6} {'mean':>6} {'median':>6}  [degrees]")
    for method, found in errors.items():
        print(f"{method:24} {len(found):6} {np.mean(found):6.2f} {np.median(found):6.2f}")


if __name__ == "__main__":
    main(Path(sys.argv[1] if len(sys.argv) > 1 else "sample_images"))
