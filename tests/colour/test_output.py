"""Which space a frame is written in."""

import pytest

from grader.colour.output import output_space
from grader.colour.spaces import SPACES
from grader.errors import PresetError
from grader.model import Header, Output

LINEAR = SPACES["linear Rec.2020"]


@pytest.mark.parametrize("format_", ["tiff", "jpeg", "png", "array"])
def test_pictures_keep_their_space(format_):
    assert output_space(SPACES["opRGB"], Header(format=format_), Output()) is SPACES["opRGB"]


@pytest.mark.parametrize(
    ("format_", "name"), [("same", "Rec.2020"), ("tiff", "Rec.2020"), ("png", "Rec.2020"), ("jpeg", "sRGB")]
)
def test_raw_frames_go_wide_at_16_bit_and_to_srgb_at_8(format_, name):
    assert output_space(LINEAR, Header(format="raw"), Output(format=format_)).name == name


def test_a_named_space_stands():
    assert output_space(LINEAR, Header(format="raw"), Output(space="display p3")).name == "Display P3"
    with pytest.raises(PresetError):
        output_space(LINEAR, Header(), Output(space="teal"))
