"""The full-resolution kernel against a copy, against float64, and against what one would write otherwise."""

from __future__ import annotations

import warnings
from collections.abc import Callable, Iterator

with warnings.catch_warnings():
    warnings.simplefilter("ignore")  # it misses matplotlib
    import colour

import material
import numpy as np
import timing
from numpy.typing import NDArray
from timing import Row, by_turns

from grader import _pixels_plain, cast, pixels
from grader._pixels_steps import prepare
from grader.colour.frames import frame_from_array
from grader.model import Correction, Frame, Header, Output

Codes = NDArray[np.uint16]


def rows(megapixels: float, seconds: float) -> Iterator[Row]:
    codes = material.codes(material.linear_picture(megapixels))
    frame, given_away = frame_from_array(codes), frame_from_array(codes.copy())
    correction = material.correction()
    _, counts = pixels.correct(frame, correction)

    def in_place(threads: int) -> None:  # as the batch does it
        pixels.correct(given_away, correction, threads=threads, overwrite=True)

    functions = {
        "copy": codes.copy,
        "one": lambda: in_place(1),
        "two": lambda: in_place(2),
        "fresh": lambda: pixels.correct(frame, correction),
        "measure": lambda: cast.measure(frame),
    }
    if timing.cpu:
        del functions["two"]
    times = by_turns(functions, seconds=seconds, before=lambda: np.copyto(given_away.pixels, codes))
    copy, two = times["copy"], times.get("two", times["one"] / 2)
    made = f"{megapixels:g} MP, copy {copy * 1e3:.1f} ms"
    yield Row("kernel, uint16, one thread / copy", times["one"] / copy, 6, detail=made)
    out = f"out of gamut {counts.out_of_gamut_fraction:.1%}"
    if "two" in times:
        yield Row("kernel, uint16, two threads / copy", two / copy, 3.5, detail=out)
    yield Row("kernel, one thread / copy, into a new array", times["fresh"] / copy)
    yield from _other_frames(codes, correction, copy)
    yield from _differences(frame, correction)
    ms = f"{times['measure'] * 1e3:.0f} ms"
    yield Row("proxy + readings + vote of a decoded frame / copy", times["measure"] / copy, 2.5, detail=ms)
    yield from _otherwise(codes[: len(codes) // 4], correction, two / 4)


def _other_frames(codes: Codes, correction: Correction, copy: float) -> Iterator[Row]:
    """Harder and other kinds of frames, for which there is no goal."""
    worst = np.random.default_rng(0).integers(0, 65536, codes.shape, np.uint16)
    raw = Frame(codes, material.SPACES["linear Rec.2020"], Header(format="raw", referred="scene"))
    others = {
        "random codes: every chunk clipped and out of gamut": frame_from_array(worst),
        "a pure gamma (opRGB): tables": frame_from_array(codes, space="opRGB"),
        "a raw frame with the tone curve": raw,
    }
    for name, frame in others.items():
        best = by_turns({name: lambda frame=frame: pixels.correct(frame, correction)}, rounds=3)[name]
        yield Row(f"kernel, one thread / copy, {name}", best / copy)
    eight = (codes >> 8).astype(np.uint8)
    frame = frame_from_array(eight)
    best = by_turns({"one": lambda: pixels.correct(frame, correction)}, rounds=5)
    yield Row("kernel, one thread / copy of the 16-bit frame, the same picture at 8 bit", best["one"] / copy)


def _differences(frame: Frame, correction: Correction) -> Iterator[Row]:
    part = Frame(frame.pixels[: len(frame.pixels) // 8], frame.space)
    graded, _ = pixels.correct(part, correction)
    exact = np.empty_like(part.pixels)
    steps = prepare(part, correction, Output(), part.space).steps
    _pixels_plain.grade(part.pixels, exact, steps, (part.space.curves,) * 2, toned=False)
    off = np.abs(graded.pixels.astype(int) - exact)
    yield Row("largest difference from float64 numpy", float(off.max()), 1, digits=0, unit=" code")
    yield Row("share of values off", 100 * float(np.mean(off > 0)), 1.5, unit=" %")


def _otherwise(codes: Codes, correction: Correction, kernel: float) -> Iterator[Row]:
    """Time what people would write instead: the matrix alone, without highlights or gamut."""
    for name, function in _pipelines(codes, correction).items():
        best = by_turns({name: function}, rounds=2)[name]
        goal = 100 if name.startswith("colour-science") else None
        threads = "on one thread, halved" if timing.cpu else "on two threads"
        yield Row(f"{name} / kernel {threads}", best / kernel, goal, at_least=True, digits=1)


def _pipelines(codes: Codes, correction: Correction) -> dict[str, Callable[[], object]]:
    to_rec2020 = material.SRGB.rec2020_from_linear
    matrix = np.linalg.inv(to_rec2020) @ correction.matrix @ to_rec2020
    found: dict[str, Callable[[], object]] = {}

    def colour_science() -> object:
        linear = colour.models.eotf_sRGB(codes / 65535)
        corrected = colour.algebra.vecmul(matrix, linear)
        encoded = colour.models.eotf_inverse_sRGB(np.clip(corrected, 0, 1))
        return np.rint(encoded * 65535).astype(np.uint16)

    def numpy_32() -> object:
        x = codes.astype(np.float32) / 65535
        x = np.where(x <= 0.04045, x / 12.92, ((x + 0.055) / 1.055) ** 2.4)
        x = np.clip(np.einsum("ij,hwj->hwi", matrix.astype(np.float32), x), 0, 1)
        x = np.where(x <= 0.0031308, x * 12.92, 1.055 * x ** (1 / 2.4) - 0.055)
        return (x * 65535 + 0.5).astype(np.uint16)

    found["colour-science, float64"] = colour_science
    found["plain numpy, float32"] = numpy_32
    for make in (_opencv, _opencolorio):
        try:
            found |= make(codes, matrix)
        except ImportError:
            continue
    return found


def _opencv(codes: Codes, matrix: NDArray[np.float64]) -> dict[str, Callable[[], object]]:
    """OpenCV: decode by a table (numpy's take), its own matrix, encode by its power."""
    import cv2

    table = material.transfer_table()

    def run() -> object:
        x = cv2.transform(table[codes], matrix.astype(np.float32))
        x = np.clip(x, 0, 1, out=x)
        x = np.where(x <= 0.0031308, x * 12.92, 1.055 * cv2.pow(x, 1 / 2.4) - 0.055)
        return (x * 65535 + 0.5).astype(np.uint16)

    return {"OpenCV, float32": run}


def _opencolorio(codes: Codes, matrix: NDArray[np.float64]) -> dict[str, Callable[[], object]]:
    """OpenColorIO: its two monitor curves and the matrix between, 16 bit in and out, on one thread."""
    import PyOpenColorIO as ocio

    values = np.eye(4)
    values[:3, :3] = matrix
    group = ocio.GroupTransform()
    curve = {"gamma": [2.4, 2.4, 2.4, 1.0], "offset": [0.055, 0.055, 0.055, 0.0]}
    group.appendTransform(ocio.ExponentWithLinearTransform(**curve))
    group.appendTransform(ocio.MatrixTransform(values.ravel().tolist()))
    group.appendTransform(
        ocio.ExponentWithLinearTransform(**curve, direction=ocio.TransformDirection.TRANSFORM_DIR_INVERSE)
    )
    depth = ocio.BitDepth.BIT_DEPTH_UINT16
    processor = ocio.Config.CreateRaw().getProcessor(group)
    cpu = processor.getOptimizedCPUProcessor(depth, depth, ocio.OptimizationFlags.OPTIMIZATION_DEFAULT)
    height, width = codes.shape[:2]

    def run() -> object:
        out = codes.copy()
        described = [
            ocio.PackedImageDesc(
                a, width, height, ocio.ChannelOrdering.CHANNEL_ORDERING_RGB, depth, 2, 6, 6 * width
            )
            for a in (codes, out)
        ]
        cpu.apply(*described)
        return out

    return {"OpenColorIO": run}
