"""How often each flag fires, and how large the errors are where it does.

light_flags.py DATA.npz      photographs whose light was measured with a chart (as for light_fit.py)
light_flags.py --packaged    photographs that scikit-image and scikit-learn package (no known light)
light_flags.py --two-lights DATA.npz    the right half of each photograph under another light
"""

from __future__ import annotations

import sys
from collections import Counter

import numpy as np
import skimage.data
import sklearn.datasets

from grader.cast import measure, plane, vote
from grader.colour.white import linear_from_xy
from grader.model import Frame

SHIFTS = {0.03: "about 45 mired", 0.06: "about 90 mired", 0.10: "about 150 mired"}


def packaged():
    """Return the packaged photographs of everyday scenes by name, as frames."""
    names = ("astronaut", "coffee", "chelsea", "rocket")
    frames = {name: Frame.from_array(getattr(skimage.data, name)(), space="sRGB") for name in names}
    for name in ("china.jpg", "flower.jpg"):
        frames[name] = Frame.from_array(np.asarray(sklearn.datasets.load_sample_image(name)), space="sRGB")
    return frames


def frames_of(path):
    z = np.load(path)
    for pixels in z["pixels"].astype(np.float32):
        yield Frame.from_array(pixels, space="Rec.2020", linear=True, referred="scene")


def errors_of(path, casts):
    z = np.load(path)
    t = z["sensor_from_rec2020"].astype(float)[z["sensor"]]
    found = np.array([linear_from_xy(cast.white_xy) for cast in casts])
    both = (np.einsum("nij,nj->ni", t, each) for each in (found, z["light"].astype(float)))
    return vote.angle_deg(*both)


def print_rates(path):
    casts = [measure(frame) for frame in frames_of(path)]
    errors = errors_of(path, casts)
    print(f"{'flag':20} {'frames':>7} {'mean error with':>16} {'without':>8}")
    for flag in sorted({flag for cast in casts for flag in cast.flags}):
        on = np.array([flag in cast.flags for cast in casts])
        print(f"{flag:20} {on.mean():7.1%} {errors[on].mean():16.2f} {errors[~on].mean():8.2f}")


def print_two_lights(path):
    for shift, words in SHIFTS.items():
        gain = plane.LMS_FROM_REC2020 @ plane.linear_from_ab(np.array([0.0, shift]))
        other_light = np.linalg.inv(plane.LMS_FROM_REC2020) @ np.diag(gain) @ plane.LMS_FROM_REC2020
        counts = Counter()
        for frame in frames_of(path):
            half = frame.pixels.shape[1] // 2
            frame.pixels[:, half:] = frame.pixels[:, half:] @ other_light.T
            counts["two-lights" in measure(frame).flags] += 1
        print(f"{words}: found in {counts[True] / counts.total():.0%}")


def main():
    match sys.argv[1:]:
        case ["--packaged"]:
            for name, frame in packaged().items():
                cast = measure(frame)
                print(
                    f"{name:12} {cast.mired:4.0f} mired  Duv {cast.duv:+.4f}  doubt {cast.doubt_deg:4.1f}  {' '.join(cast.flags)}"
                )
        case ["--two-lights", path]:
            print_two_lights(path)
        case [path]:
            print_rates(path)
        case _:
            print(__doc__)


if __name__ == "__main__":
    main()
