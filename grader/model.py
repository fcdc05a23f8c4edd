"""The values that the parts hand to each other: frozen, plain, picklable.

Nothing here reads a file or computes a colour.  Arrays are never changed in place.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any, Final, Literal

import numpy as np
from numpy.typing import NDArray

Matrix = NDArray[np.float64]
Referred = Literal["scene", "display"]
Opponent = Literal["oklab", "ciecam16", "cielab"]
Transform = Literal["cat16", "bradford", "cat02", "von-kries"]
XY = tuple[float, float]

FLAGS: Final[dict[str, str]] = {
    "few-usable-pixels": "few pixels could be measured: the rest is clipped, black or empty",
    "readings-disagree": "the methods disagree about this light",
    "coloured-light": "the light is coloured (outside what lamps and daylight look like); left as it is",
    "one-coloured": "nearly the whole frame has one colour, which may be the subject and not the light",
    "clipped": "a large part of the frame is clipped",
    "dark": "the frame is very dark",
    "two-lights": "two different lights seem to fall on this frame; one correction cannot suit both",
    "high-doubt": "the measurement is less sure than usual; look at this frame by eye",
    "odd-frame": "this frame does not agree with its neighbours",
    "light-of-stretch": "no light could be measured in this frame itself; the light of its stretch was used",
    "no-time": "no capture time in the file; the file order is used",
    "profile-broken": "the colour profile in the file cannot be used; the default was taken",
    "profile-assumed": "no colour profile in the file; a default was taken",
    "converted": "the file's colour kind cannot be written back; written as RGB",
    "balance-unusable": "the camera's own balance is missing or nonsense; its daylight setting was taken",
    "matrix-missing": "the camera's colour matrix is unknown; colours are approximate",
    "nothing-measured": "no light could be measured in this frame; it was not corrected",
    "other-body": "the preset was measured on another camera body",
    "other-kind": "the preset was measured on another kind of file (raw against developed)",
    "grey": "a picture without colours; there is no cast to measure or to correct",
    "page-chosen": "the file holds several pictures; the full-size one was taken",
}
"""Flag codes as they stand in the log, with the words that a reader sees."""

EYE_FLAGS: Final = frozenset(
    {
        "few-usable-pixels",
        "readings-disagree",
        "coloured-light",
        "one-coloured",
        "dark",
        "two-lights",
        "high-doubt",
        "odd-frame",
        "profile-broken",
        "balance-unusable",
        "matrix-missing",
        "nothing-measured",
        "other-body",
        "other-kind",
    }
)
"""Flags that ask a person to look at the frame."""


@dataclass(frozen=True, slots=True, eq=False)
class Curve:
    """A transfer curve from encoded values to linear light, both 0 to 1.

    Parametric as in ICC.1:2022 `parametricCurveType` function 4:
    ``Y = (a X + b)**g + e`` where ``X >= d``, else ``Y = c X + f``; or, when ``samples`` is given,
    linear interpolation in ``samples`` at equal steps of X.
    """

    g: float = 1.0
    a: float = 1.0
    b: float = 0.0
    c: float = 1.0
    d: float = 0.0
    e: float = 0.0
    f: float = 0.0
    samples: NDArray[np.float64] | None = None


@dataclass(frozen=True, slots=True, eq=False)
class Space:
    """An RGB colour space: its primaries as a matrix to working light, its curves, its profile.

    ``rec2020_from_linear`` carries the space's linear RGB to linear Rec.2020 with a D65 white, the
    adaptation from the space's own white included, so that (1, 1, 1) stays (1, 1, 1).
    """

    name: str
    rec2020_from_linear: Matrix
    curves: tuple[Curve, Curve, Curve]
    icc: bytes | None = field(default=None, repr=False)


@dataclass(frozen=True, slots=True, eq=False)
class Sensor:
    """What a raw file says about its camera's colour.

    ``sensor_from_rec2020`` carries linear Rec.2020 (D65) to the sensor's own RGB *balanced for D65*
    (row sums 1: a D65 neutral is (1, 1, 1)).  ``daylight_neutral`` and ``as_shot_neutral`` are the
    unbalanced sensor responses to a D65 neutral and to the camera's chosen white, green = 1.
    """

    sensor_from_rec2020: Matrix
    daylight_neutral: NDArray[np.float64]
    as_shot_neutral: NDArray[np.float64]


@dataclass(frozen=True, slots=True, eq=False)
class Header:
    """What is known of a frame besides its pixels; small, and crosses process boundaries.

    ``daylight_from_decoded`` (3, 3) carries working light as decoded (the camera's own balance baked in)
    to working light as it would be at the camera's daylight (D65) setting; None means they are the same.
    The measured light of a frame is always stated in the latter, so that it means the same for all frames.
    """

    file: str | None = None
    format: Literal["raw", "tiff", "jpeg", "png", "array"] = "array"
    width_px: int = 0
    height_px: int = 0
    referred: Referred = "display"
    body: str = ""
    """Make, model and serial number as the metadata give them, joined by one space."""
    taken_at: str | None = None
    """ISO 8601 local capture time with sub-seconds, and the offset where the file gives it."""
    exposure_time_s: float | None = None
    f_number: float | None = None
    iso: float | None = None
    flash: bool | None = None
    orientation: int = 1
    daylight_from_decoded: Matrix | None = None
    sensor: Sensor | None = None
    sha256: str | None = None
    flags: tuple[str, ...] = ()
    notes: tuple[str, ...] = ()
    """Automatic choices made while reading, in plain words, for the log."""


@dataclass(frozen=True, slots=True, eq=False)
class Metadata:
    """Metadata as bytes, to be carried over whole."""

    exif: bytes | None = None
    """A TIFF structure (II or MM first) with IFD0, Exif and GPS directories."""
    xmp: bytes | None = None
    iptc: bytes | None = None
    resources: bytes | None = None
    """Image resource blocks other than IPTC that stay true, clipping paths above all."""
    xmp_extension: bytes | None = None
    """What of the XMP does not fit into one JPEG segment (outputs only)."""
    notes: tuple[str, ...] = ()
    """What could not be carried over, in plain words."""


@dataclass(frozen=True, slots=True, eq=False)
class Frame:
    """One photograph: encoded pixels, the space that explains them, and the header.

    ``pixels`` is (H, W, 3) uint8, uint16 or float32, in the stored orientation (never rotated);
    1.0 (float) or the type's maximum (integers) is the file's white.  ``alpha`` is (H, W) of the same
    type.  ``encoding`` holds what a writer needs to give the file back as it came (compression,
    quantisation tables, resolution, ...), keys as ``grader.files`` documents them.
    """

    pixels: NDArray[Any]
    space: Space
    header: Header = field(default_factory=Header)
    metadata: Metadata = field(default_factory=Metadata)
    alpha: NDArray[Any] | None = None
    encoding: Mapping[str, Any] = field(default_factory=dict)

    @staticmethod
    def from_array(
        pixels: NDArray[Any],
        *,
        space: str = "sRGB",
        linear: bool = False,
        referred: Referred = "display",
        **facts: Any,
    ) -> Frame:
        """Return a frame made from an (H, W, 3) array (see ``grader.colour.frames.frame_from_array``)."""
        from grader.colour.frames import frame_from_array  # noqa: PLC0415 - the model stays a leaf

        return frame_from_array(pixels, space=space, linear=linear, referred=referred, **facts)


@dataclass(frozen=True, slots=True, eq=False)
class Proxy:
    """The small linear picture that measurement works on.

    ``linear`` (h, w, 3) float32 is working light *at the daylight setting* (``daylight_from_decoded``
    applied); ``usable`` (h, w) float32, 0 to 1, is the share of each cell's pixels that were neither
    clipped, nor at the noise floor, nor empty: ``linear`` averages only those.
    """

    linear: NDArray[np.float32]
    usable: NDArray[np.float32]
    header: Header
    clipped_fraction: float = 0.0
    dark_fraction: float = 0.0
    empty_fraction: float = 0.0


@dataclass(frozen=True, slots=True)
class Reading:
    """What one method makes of one frame, in the opponent plane."""

    yellow_blue: float
    green_magenta: float


@dataclass(frozen=True, slots=True, eq=False)
class Evidence:
    """What pass 1 hands to the plan about one frame: the data's log-likelihood over the candidates.

    ``log_likelihood`` (C,) uint8: ``-log`` of the normalised likelihood relative to its peak, in steps of
    1/16, 255 = that or less.  C and the candidates' places are those of ``grader.cast.vote`` for ``grid``.
    The prior is *not* in it: the plan adds it once.
    """

    grid: str
    log_likelihood: NDArray[np.uint8]
    cells: int
    """Number of proxy cells that voted."""


@dataclass(frozen=True, slots=True, eq=False)
class Cast:
    """The measured light of one frame, and how sure it is.

    ``yellow_blue`` (+ = yellow) and ``green_magenta`` (+ = magenta) are where the light puts a neutral of
    Y = 1 in the opponent plane.  The light (``white_xy``) is stated at the camera's daylight setting for
    scene-referred frames, relative to the file's own white (D65 in working light) for display-referred ones.
    Everything is None where nothing could be measured.
    """

    header: Header
    opponent: Opponent = "oklab"
    yellow_blue: float | None = None
    green_magenta: float | None = None
    white_xy: XY | None = None
    cct_k: float | None = None
    duv: float | None = None
    mired: float | None = None
    delta_e_2000: float | None = None
    doubt_deg: float | None = None
    readings: Mapping[str, Reading] = field(default_factory=dict)
    flags: tuple[str, ...] = ()
    evidence: Evidence | None = None


@dataclass(frozen=True, slots=True, eq=False)
class Correction:
    """One frame's correction: a 3x3 on working light *as decoded*, and how it came about.

    ``from_xy`` is the light that is taken as this frame's (at the daylight setting), ``toward_xy`` where a
    neutral goes.  ``shift_mired`` (negative cools) and ``shift_duv`` (negative adds magenta) tell the
    correction as what cancels the cast.  ``use`` as ``linear @ matrix.T``.
    """

    from_xy: XY | None
    toward_xy: XY
    matrix: Matrix
    transform: Transform = "cat16"
    degree: float = 1.0
    keep_yellow_blue: float = 0.0
    keep_green_magenta: float = 0.0
    shift_mired: float | None = None
    shift_duv: float | None = None
    stretch: str | None = None
    doubt_deg: float | None = None
    """Doubt of the light used, after pooling."""
    reason: str = ""
    flags: tuple[str, ...] = ()


OutputFormat = Literal["same", "tiff", "jpeg", "png", "dng"]


@dataclass(frozen=True, slots=True)
class Output:
    """How graded frames are encoded."""

    format: OutputFormat = "same"
    space: str = "source"
    tone: Literal["standard", "linear"] = "standard"
    exposure_ev: float = 0.0
    strip_location: bool = False


@dataclass(frozen=True, slots=True)
class Recipe:
    """How to measure and correct: the settings of a run, one frozen value."""

    opponent: Opponent = "oklab"
    toward: str = "neutral"
    """``neutral``, a colour temperature in kelvin, or (resolved before the plan) ``x,y``."""
    keep_yellow_blue: float = 0.0
    keep_green_magenta: float = 0.0
    adaptation: Transform = "cat16"
    degree: float = 1.0
    pooling: bool = True
    match_bodies: bool = True
    coloured_light: Literal["leave", "correct"] = "leave"
    linear_tiff: Referred = "display"
    """What floating-point TIFFs in linear light hold: finished pictures, or the light of the scene as a raw
    developer at the camera's daylight setting leaves it."""
    tolerance_delta_e_2000: float | None = None
    output: Output = field(default_factory=Output)


@dataclass(frozen=True, slots=True)
class Fixed:
    """A correction measured once, to be applied as it is."""

    from_xy: XY
    toward_xy: XY
    adaptation: Transform = "cat16"
    degree: float = 1.0
    keep_yellow_blue: float = 0.0
    keep_green_magenta: float = 0.0
    output: Output = field(default_factory=Output)
    measured_on_body: str = ""
    measured_doubt_deg: float | None = None
    measured_by: Literal["", "patch", "grey-card", "target", "frame", "frames"] = ""
    """What was measured: a patch by its place, a grey card that was found, a target's grey row, or whole frames."""
    measured_on_file: str = ""
    measured_on_sha256: str = ""
    measured_patch_px: tuple[int, int, int, int] | None = None
    """x, y, width, height in the stored orientation."""
    measured_referred: Referred | None = None
    """Light of a scene-referred frame is absolute, of a display-referred one relative to the file's white."""


@dataclass(frozen=True, slots=True)
class Counts:
    """What the kernel had to do to pixels beyond the matrix, as fractions of the frame."""

    clipped_fraction: float = 0.0
    out_of_gamut_fraction: float = 0.0
    notes: tuple[str, ...] = ()
    """Automatic choices made on the way, in plain words, for the log."""


@dataclass(frozen=True, slots=True)
class Written:
    """One output, as it stands on disk."""

    file: str
    sha256: str
    format: str
    space: str
    bytes: int = 0
    notes: tuple[str, ...] = ()


@dataclass(frozen=True, slots=True)
class ReadLimits:
    """What a reader refuses from the header, before anything is allocated."""

    max_pixels: int = 500_000_000
    max_metadata_bytes: int = 64 << 20
