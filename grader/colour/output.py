"""Which colour space a graded frame is written in."""

from __future__ import annotations

from typing import Final

from grader.colour.spaces import SPACES, space_by_name
from grader.model import Header, Output, Space

RAW_SPACE: Final = "Rec.2020"
"""Where a raw frame goes at 16 bit: LibRaw hands it over in these very primaries, so nothing is squeezed and
nothing is gained by wider ones; they are real lights with a D65 white, as screens have.  At 16 bit its steps
are far below what can be seen."""

RAW_SPACE_8_BIT: Final = "sRGB"
"""Where a raw frame goes in a JPEG: 256 steps would show bands if they were spread over wide primaries, and
software that ignores profiles takes a JPEG to be sRGB."""


def output_space(source: Space, header: Header, output: Output) -> Space:
    """Return the space of the graded frame.

    Parameters
    ----------
    source : Space
        Space of the frame as it was read.
    header : Header
        Of that frame; only ``format`` counts.
    output : Output
        ``space`` names a space or is ``"source"``.

    Returns
    -------
    Space
        The named one; for ``"source"`` the frame's own, since its tones and colours were made for it.  A raw
        file has none: it goes to `RAW_SPACE`, or to `RAW_SPACE_8_BIT` where a JPEG is asked for.

    Raises
    ------
    PresetError
        The name is unknown.

    Examples
    --------
    >>> decoded = SPACES["linear Rec.2020"]
    >>> output_space(decoded, Header(format="raw"), Output()).name
    'Rec.2020'
    >>> output_space(decoded, Header(format="raw"), Output(format="jpeg")).name
    'sRGB'
    >>> output_space(decoded, Header(format="tiff"), Output()).name
    'linear Rec.2020'
    """
    if output.space != "source":
        return space_by_name(output.space)
    if header.format == "raw":
        return SPACES[RAW_SPACE_8_BIT if output.format == "jpeg" else RAW_SPACE]
    return source
