"""Cost of measuring one decoded 24 MP frame: proxy, and proxy to cast, beside a copy of the same pixels.

light_cost.py

The least of twenty runs, wall clock.  On a busy machine look at the ratio to the copy.
"""

from __future__ import annotations

import time

import numpy as np
import skimage.data

from grader.cast import build_proxy, measure_proxy
from grader.model import Frame

RUNS = 20


def least_ms(call):
    times = []
    for _ in range(RUNS):
        start = time.perf_counter()
        call()
        times.append(time.perf_counter() - start)
    return 1e3 * min(times)


def main():
    rng = np.random.default_rng(0)
    photograph = np.tile(skimage.data.coffee(), (10, 10, 1))[:4000, :6000].astype(np.uint16)
    frame = Frame.from_array(
        photograph * 250 + rng.integers(0, 250, photograph.shape, np.uint16), space="sRGB"
    )
    proxy = build_proxy(frame)
    measure_proxy(proxy)
    copy = least_ms(frame.pixels.copy)
    reduce, measured = least_ms(lambda: build_proxy(frame)), least_ms(lambda: measure_proxy(proxy))
    print(
        f"copy {copy:.1f} ms   proxy {reduce:.1f} ms ({reduce / copy:.2f} copies)   proxy to cast {measured:.1f} ms"
    )
    print(f"together {reduce + measured:.1f} ms ({(reduce + measured) / copy:.2f} copies)")


if __name__ == "__main__":
    main()
