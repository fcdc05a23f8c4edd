"""Made-up logs and pictures of an invented event, for the report's tests."""

from __future__ import annotations

import io
import math
import random
from collections.abc import Callable, Iterator
from datetime import datetime, timedelta
from typing import Any

import numpy as np
from PIL import Image

from grader.colour.difference import grey_delta_e_2000
from grader.colour.opponent import cast_from_xy
from grader.colour.white import cct_duv_from_xy, linear_from_xy, xy_from_cct_duv

Line = dict[str, Any]
BODIES = ("Northlight N1 20071", "Northlight N1 20388")
START = datetime(2031, 5, 3, 15, 2, 0)
# (name, minutes from the start, length in minutes, colour temperature, Duv, drift in mired per hour)
LIGHTS = (
    ("window", 0, 55, 5600, 0.002, 14.0),
    ("hall", 62, 80, 2950, 0.001, 0.0),
    ("stage", 150, 30, 4200, 0.013, 0.0),
    ("flash", 185, 40, 5450, -0.002, 0.0),
)
BODY_SHIFT_DUV = 0.0025


def run_line(**changes: Any) -> Line:
    return {
        "kind": "run",
        "schema": "grader-log/1",
        "version": "0.1.0",
        "command": ["grader", "neutralise", "cards", "--out", "graded", "--report", "report.html"],
        "preset": {
            "schema": "grader-preset/1",
            "name": "full-neutral",
            "kind": "recipe",
            "settings": {"toward": "neutral"},
        },
        "started": "2031-05-04T09:00:00+02:00",
        **changes,
    }


def shoot(frames: int = 200, *, seed: int = 1, failed: int = 2, status: str = "graded") -> list[Line]:
    """Return a whole log: run line, frame lines in file order, summary."""
    lines = list(frame_lines(frames, seed=seed, failed=failed, status=status))
    return [run_line(), *lines, summary_line(lines)]


def frame_lines(frames: int, *, seed: int = 1, failed: int = 2, status: str = "graded") -> Iterator[Line]:
    chance = random.Random(seed)
    minutes = sorted(chance.choice(LIGHTS)[1] + 0.0 for _ in range(0))
    total = sum(light[2] for light in LIGHTS)
    for light in LIGHTS:
        share = round(frames * light[2] / total)
        minutes += [light[1] + light[2] * (k + 0.5) / share for k in range(share)]
    minutes = (minutes + [minutes[-1]] * frames)[:frames]
    for number, minute in enumerate(minutes):
        body = 1 if number % 3 == 2 else 0
        light = next(one for one in reversed(LIGHTS) if minute >= one[1])
        odd = chance.random() < 0.03
        yield _frame(
            number,
            minute,
            body,
            light,
            chance,
            odd=odd,
            failed=number and number % max(frames // failed, 1) == 7 if failed else False,
            status=status,
        )


def _frame(number, minute, body, light, chance, *, odd, failed, status) -> Line:
    name = f"cards/{'AB'[body]}/{'hall' if body else 'aisle'}-{number:04d}.{'dng' if number % 2 else 'tif'}"
    base = {
        "kind": "frame",
        "file": name,
        "sha256": f"{number:064x}",
        "body": BODIES[body],
        "taken_at": (START + timedelta(minutes=minute, seconds=7 * body)).isoformat(timespec="milliseconds"),
    }
    if failed:
        error = {"code": "damaged", "message": "the file ends early", "hint": "copy it from the card again"}
        return base | {"status": "failed", "flags": [], "error": error, "seconds": 0.1}
    stretch = f"{'AB'[body]}{LIGHTS.index(light) + 1}"
    true_mired = 1e6 / light[3] + light[5] * (minute - light[1] - light[2] / 2) / 60
    duv = light[4] + BODY_SHIFT_DUV * body
    used = xy_from_cct_duv(1e6 / true_mired, duv)
    doubt = abs(chance.gauss(1.4, 0.4)) + (3.5 * chance.random() + 1.5 if odd else 0)
    own = xy_from_cct_duv(
        1e6 / (true_mired + chance.gauss(0, 40 if odd else 9)),
        duv + chance.gauss(0, 0.008 if odd else 0.0018),
    )
    flags = ["odd-frame", "high-doubt"] if odd else []
    if light[0] == "stage" and chance.random() < 0.08:
        flags.append("two-lights")
        doubt += 2
    left = _left(own, used)
    return base | {
        "status": status,
        "readings": {"grey-world": dict(zip(("yellow_blue", "green_magenta"), cast_from_xy(tuple(own)), strict=True))},
        "cast": _cast(own) | {"doubt_deg": round(doubt, 3), "opponent": "oklab"},
        "stretch": stretch,
        "flags": flags,
        "notes": [],
        "correction": {
            "from_xy": [float(v) for v in used],
            "toward_xy": [0.3127, 0.329],
            "shift_mired": 1e6 / 6504 - true_mired,
            "shift_duv": 0.0032 - duv,
            "transform": "cat16",
            "degree": 1.0,
            "keep": {"yellow_blue": 0.0, "green_magenta": 0.0},
            "matrix": np.diag(1 / np.asarray(linear_from_xy(used))).tolist(),
            "doubt_deg": 0.6,
            "reason": f"the steady light of stretch {stretch}",
        },
        "residual": left,
        "output": {"file": name.replace("cards", "graded"), "sha256": f"{number + 1:064x}", "format": "tiff",
                   "space": "Rec.2020", "clipped_fraction": 0.001, "out_of_gamut_fraction": 0.0002},
        "error": None,
        "seconds": 0.8,
    }  # fmt: skip


def _cast(xy: Any) -> Line:
    yellow_blue, green_magenta = cast_from_xy(tuple(xy))
    cct_k, duv = cct_duv_from_xy(xy)
    return {
        "yellow_blue": float(yellow_blue),
        "green_magenta": float(green_magenta),
        "white_xy": [float(v) for v in xy],
        "cct_k": cct_k,
        "duv": duv,
        "mired": None if cct_k is None else 1e6 / cct_k,
        "delta_e_2000": grey_delta_e_2000(tuple(xy)),
    }


def _left(own: Any, used: Any) -> Line:
    """Return the cast that is left when the light used is not the frame's own (a per-channel model will do)."""
    from grader.colour.white import xy_from_linear

    xy = xy_from_linear(np.asarray(linear_from_xy(own)) / np.asarray(linear_from_xy(used)))
    return {key: _cast(xy)[key] for key in ("yellow_blue", "green_magenta", "delta_e_2000")}


def summary_line(lines: list[Line], **changes: Any) -> Line:
    from scipy.stats import theilslopes

    done = [line for line in lines if line.get("cast")]
    stretches = []
    for name in sorted({line["stretch"] for line in done}, key=lambda s: (s[1:], s[0])):
        own = [line for line in done if line["stretch"] == name]
        hours = [datetime.fromisoformat(line["taken_at"]).timestamp() / 3600 for line in own]
        xy = np.median([line["correction"]["from_xy"] for line in own], axis=0)
        slopes = {}
        for key, unit in (("mired", "mired"), ("duv", "duv")):
            fit = theilslopes([line["cast"][key] for line in own], hours) if len(own) > 2 else None
            slopes |= {
                f"drift_{unit}_per_hour": fit and float(fit.slope),
                f"drift_{unit}_low": fit and float(fit.low_slope),
                f"drift_{unit}_high": fit and float(fit.high_slope),
            }
        stretches.append(
            {"stretch": name, "body": own[0]["body"], "referred": "scene", "first_file": own[0]["file"],
             "last_file": own[-1]["file"], "first_taken_at": own[0]["taken_at"], "last_taken_at": own[-1]["taken_at"],
             "frames": len(own), **{k: v for k, v in _cast(xy).items() if k not in ("mired", "delta_e_2000")},
             "spread_delta_e_2000": float(np.mean([line["residual"]["delta_e_2000"] for line in own])),
             **slopes, "largest_jump_deg": 0.4, "doubt_deg": 0.6, "shift_mired": own[0]["correction"]["shift_mired"],
             "shift_duv": own[0]["correction"]["shift_duv"]}
        )  # fmt: skip
    counts = [sum(line["body"] == body for line in lines) for body in BODIES]
    first = {"body": BODIES[0], "label": "A", "frames": counts[0], "offset_to": None, "yellow_blue": None,
             "green_magenta": None, "offset_deg": None, "doubt_deg": None, "applied": None, "shared_stretches": None}  # fmt: skip
    offset = {"body": BODIES[1], "label": "B", "frames": counts[1], "offset_to": BODIES[0], "yellow_blue": 0.0011,
              "green_magenta": -0.0068, "offset_deg": 0.62, "doubt_deg": 0.12, "applied": True, "shared_stretches": 4}  # fmt: skip
    return {
        "kind": "summary",
        "frames": len(lines),
        "graded": sum(line["status"] == "graded" for line in lines),
        "failed": sum(line["status"] == "failed" for line in lines),
        "by_eye": sum(bool(line["flags"]) for line in lines),
        "mean_cast_before": _mean(done, "cast"),
        "mean_cast_after": _mean(done, "residual"),
        "stretches": stretches,
        "bodies": [first, offset],
        "seconds": 512.0,
        **changes,
    }


def _mean(lines: list[Line], where: str) -> Line:
    keys = ("yellow_blue", "green_magenta", "delta_e_2000")
    return {key: float(np.mean([line[where][key] for line in lines])) for key in keys}


def pictures(side_px: int = 320) -> Callable[[Line], tuple[bytes | None, bytes | None]]:
    """Return a callable that draws each frame's invented scene under its light, and without."""

    def draw(record: Line) -> tuple[bytes | None, bytes | None]:
        if not record.get("cast"):
            return None, None
        scene = _scene(int(record["sha256"], 16), side_px)
        own = np.asarray(linear_from_xy(record["cast"]["white_xy"]))
        used = np.asarray(linear_from_xy(record["correction"]["from_xy"]))
        return _jpeg(scene * own / own.max()), _jpeg(scene * own / used * (used / own).min())

    return draw


def _scene(seed: int, side_px: int) -> np.ndarray:
    """Return a table before a wall with plates and cloths, linear, (h, w, 3)."""
    chance = np.random.default_rng(seed)
    h, w = side_px * 2 // 3, side_px
    y, x = np.mgrid[0:h, 0:w] / side_px
    light = 0.55 + 0.4 * np.cos(3 * (x - chance.uniform(0, 1))) * np.exp(-2 * y)
    picture = np.full((h, w, 3), (0.42, 0.40, 0.37)) * light[..., None]
    picture[y > 0.42] = np.array((0.16, 0.10, 0.06)) * 1.2
    for _ in range(7):
        cx, cy, radius = chance.uniform(0.05, 0.95), chance.uniform(0.25, 0.6), chance.uniform(0.03, 0.12)
        colour = np.array((0.75, 0.74, 0.72)) if chance.random() < 0.4 else chance.uniform(0.03, 0.6, 3)
        inside = ((x - cx) ** 2 + ((y - cy) * 1.6) ** 2) < radius**2
        picture[inside] = (colour * (0.7 + 0.5 * (cx - x[inside])[:, None] / radius * 0.5)).clip(0)
    return picture * math.exp(chance.normal(0, 0.15))


def _jpeg(linear: np.ndarray) -> bytes:
    encoded = np.clip(linear, 0, 1) ** (1 / 2.2) * 255
    buffer = io.BytesIO()
    Image.fromarray(encoded.round().astype(np.uint8)).save(buffer, "JPEG", quality=88)
    return buffer.getvalue()
