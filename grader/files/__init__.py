"""Photographs in and out: raw, TIFF, JPEG and PNG files, their profiles and their metadata.

``Frame.encoding`` holds what a writer needs to write the same kind of file again:

================  ==================================================================================
key               meaning
================  ==================================================================================
kind              ``grey``, ``rgb``, ``cmyk`` or ``lab``: the colours that the file stored
bits              significant bits of a stored sample
sample            ``uint`` or ``float``
alpha             ``straight``, ``associated`` (the frame's colours are divided by it),
                  ``kept-associated`` (they are not) or ``unspecified``
untagged          name of the space that was taken because the file embeds no profile
compression       TIFF: the tag's number;  predictor, planar (bool), min_is_white (bool), byteorder
                  (``<`` or ``>``), bigtiff (bool), tile ((length, width) or None), rows_per_strip,
                  sample_bytes
resolution        ((x, n), (y, n), unit) or None: fractions across and down, and their unit: 1 none (a ratio),
                  2 inch, 3 cm
quantisation      JPEG: one table of 64 in natural order for each component;  sampling ((h, v), ...),
                  progressive (bool), stored_rgb (bool), comment
texts             PNG: text chunks but metadata packets, ((type, body), ...);  interlaced (bool),
                  colour_chunks ((type, body), ...)
================  ==================================================================================
"""

from grader.files.digest import hash_file
from grader.files.dng import rewrite_raw
from grader.files.profile_build import profile_bytes
from grader.files.raw import sensor_multipliers
from grader.files.reading import kind_of, read, read_reduced
from grader.files.writing import suffix_for, write

__all__ = [
    "hash_file",
    "kind_of",
    "profile_bytes",
    "read",
    "read_reduced",
    "rewrite_raw",
    "sensor_multipliers",
    "suffix_for",
    "write",
]
