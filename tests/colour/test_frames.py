import numpy as np
import pytest

from grader.colour.frames import frame_from_array
from grader.errors import PresetError, UnsupportedFile
from grader.model import Frame, Metadata


@pytest.mark.parametrize(
    ("given_type", "kept"),
    [
        ("u1", "uint8"),
        ("u2", "uint16"),
        (">u2", "uint16"),
        ("f2", "float32"),
        ("f4", "float32"),
        ("f8", "float32"),
    ],
)
def test_types(given_type, kept):
    frame = frame_from_array(np.ones((2, 3, 3), given_type))
    assert frame.pixels.dtype == kept
    assert frame.pixels.dtype.isnative
    assert (frame.pixels == 1).all()
    assert (frame.header.height_px, frame.header.width_px) == (2, 3)
    assert frame.header.format == "array"


def test_grey_is_repeated():
    frame = frame_from_array(np.arange(6, dtype=np.uint8).reshape(2, 3))
    assert frame.pixels.shape == (2, 3, 3)
    np.testing.assert_array_equal(frame.pixels[..., 0], frame.pixels[..., 2])


def test_linear_means_the_same_primaries_without_curve():
    frame = Frame.from_array(np.ones((1, 1, 3)), space="Rec.2020", linear=True, referred="scene")
    assert frame.space.name == "linear Rec.2020"
    assert frame.header.referred == "scene"
    frame = Frame.from_array(np.ones((1, 1, 3)), space="display p3", linear=True)
    assert frame.space.name == "linear Display P3"
    assert frame.space.curves[1].g == 1


def test_facts_land_where_they_belong():
    alpha = np.ones((1, 1), np.uint8)
    metadata = Metadata(xmp=b"<x/>")
    frame = frame_from_array(
        np.ones((1, 1, 3), np.uint8), body="Lumen One 42", iso=800.0, alpha=alpha, metadata=metadata
    )
    assert (frame.header.body, frame.header.iso) == ("Lumen One 42", 800.0)
    assert frame.alpha is alpha
    assert frame.metadata is metadata


@pytest.mark.parametrize("shape", [(3,), (2, 2, 4), (2, 2, 2), (0, 2, 3), (1, 2, 2, 3)])
def test_what_is_not_a_picture_is_refused(shape):
    with pytest.raises(UnsupportedFile, match="not a picture"):
        frame_from_array(np.ones(shape, np.uint8))


@pytest.mark.parametrize("kind", ["i2", "u4", "bool", "c8"])
def test_other_types_are_refused(kind):
    with pytest.raises(UnsupportedFile, match="pixels of type"):
        frame_from_array(np.ones((2, 2, 3), kind))


@pytest.mark.parametrize("wrong", [{"space": "x"}, {"referred": "x"}, {"shutter": 3}])
def test_unknown_settings_are_refused(wrong):
    with pytest.raises(PresetError):
        frame_from_array(np.ones((2, 2, 3), np.uint8), **wrong)
