"""Reports of a run: hands the log's records and small before/after pictures to `grader.report`."""

from __future__ import annotations

import io
from collections.abc import Iterable, Mapping
from typing import Any

import numpy as np

from grader import files, pixels, report
from grader.errors import GraderError
from grader.log import Line
from grader.model import Correction, Frame, Output, ReadLimits

_SIDE_PX = 240
_QUALITY = 70
Pictures = tuple[bytes | None, bytes | None]


def write_extras(
    records: Iterable[Line],
    limits: ReadLimits,
    *,
    report_file: str | None = None,
    contact_sheet: str | None = None,
    csv_file: str | None = None,
) -> None:
    """Write the report, the contact sheet and the table of a run, as far as they are asked for.

    Parameters
    ----------
    records : iterable of dict
        The log's lines, or at least the one that stands for each frame.
    limits : ReadLimits
        For reading the pictures again.
    report_file, contact_sheet, csv_file : str, optional
        Where to write.

    Raises
    ------
    WriteFailed
        A file could not be written; nothing is left in its place.
    """
    records = list(records)

    def thumbnails(record: Mapping[str, Any]) -> Pictures:
        return before_and_after(record, limits)

    if csv_file:
        report.write_csv(records, csv_file)
    if report_file:
        report.write_html(records, report_file, thumbnails=thumbnails)
    if contact_sheet:
        report.write_contact_sheet(records, contact_sheet, thumbnails=thumbnails)


def before_and_after(record: Mapping[str, Any], limits: ReadLimits) -> Pictures:
    """Return small JPEG pictures of a frame before and after its correction; None where it cannot be read.

    Both go through the same tone and encoding, so that only the cast differs.
    """
    if record.get("status") in ("failed", "skipped"):
        return None, None  # a file that cost a worker must not cost the report
    try:
        frame = files.read_reduced(record["file"], limits, target_px=_SIDE_PX)
        before = _jpeg(frame, np.eye(3))
        matrix = (record.get("correction") or {}).get("matrix")
        return before, None if matrix is None else _jpeg(frame, np.array(matrix, dtype=np.float64))
    except (GraderError, ValueError, TypeError, KeyError):
        return None, None


def _jpeg(frame: Frame, matrix: np.ndarray) -> bytes:
    from PIL import Image  # noqa: PLC0415 - only where pictures are asked for

    correction = Correction(from_xy=None, toward_xy=(0.3127, 0.3290), matrix=matrix)
    shown, _ = pixels.correct(frame, correction, Output(space="sRGB"))
    encoded = shown.pixels
    if encoded.dtype == np.uint16:
        encoded = (encoded >> 8).astype(np.uint8)
    elif encoded.dtype != np.uint8:
        encoded = (np.clip(encoded, 0.0, 1.0) * 255.0 + 0.5).astype(np.uint8)
    image = upright(Image.fromarray(encoded), frame.header.orientation)
    image.thumbnail((_SIDE_PX, _SIDE_PX))
    buffer = io.BytesIO()
    image.save(buffer, "JPEG", quality=_QUALITY, optimize=True)
    return buffer.getvalue()


def upright(image: Any, orientation: int) -> Any:
    """Return the picture turned as its orientation tag (1 to 8) asks."""
    from PIL import Image  # noqa: PLC0415

    turn = {
        2: Image.Transpose.FLIP_LEFT_RIGHT,
        3: Image.Transpose.ROTATE_180,
        4: Image.Transpose.FLIP_TOP_BOTTOM,
        5: Image.Transpose.TRANSPOSE,
        6: Image.Transpose.ROTATE_270,
        7: Image.Transpose.TRANSVERSE,
        8: Image.Transpose.ROTATE_90,
    }.get(orientation)
    return image if turn is None else image.transpose(turn)
