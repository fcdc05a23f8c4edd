"""The 24-patch chart under CIE illuminants, photographed by measured sensors, corrected from its own grey row.

Reflectances (ISO 17321-1), illuminants, the 2 degree observer, the sensors' sensitivities (measured by the National
Physical Laboratory) and the CAT16 transform all come from colour-science; tifffile reads what was written.
"""

import colour
import numpy as np
import pytest
import tifffile
from files.conftest import write_sensor_file

from grader.cli import main
from grader.colour.white import D65_XY
from grader.preset import load_preset

SHAPE = colour.SpectralShape(400, 700, 5)
OBSERVER = colour.MSDS_CMFS["CIE 1931 2 Degree Standard Observer"].copy().align(SHAPE).values
REFLECTANCES = np.array(
    [sd.copy().align(SHAPE).values for sd in colour.SDS_COLOURCHECKERS["ISO 17321-1"].values()]
)
SENSORS = {
    name: colour.MSDS_CAMERA_SENSITIVITIES[f"{name} (NPL)"].copy().align(SHAPE).values
    for name in ("Nikon 5100", "Sigma SDMerill")
}
ILLUMINANTS = ("A", "D50", "FL2", "FL11", "LED-B3")
PITCH = 48
GREYS, MIDDLE_GREYS = slice(18, 24), slice(19, 23)
GREY_PX = (3 * PITCH + PITCH // 4, 3 * PITCH + PITCH // 4, PITCH // 2, PITCH // 2)
"""Neutral 5: x, y, width, height."""
REC2020 = colour.RGB_COLOURSPACES["ITU-R BT.2020"].matrix_RGB_to_XYZ
SRGB = colour.RGB_COLOURSPACES["sRGB"].matrix_RGB_to_XYZ


ROUNDING = {".dng": 1e-3, ".tif": 1e-4}
"""Of white: the sensor's 14 bits times the matrix's gains, the 16 bits of the picture."""


def _spectrum(illuminant):
    return colour.SDS_ILLUMINANTS[illuminant].copy().align(SHAPE).values


def _balanced_sensor(sensitivities):
    """Return the response to D65 (3,) and the matrix to XYZ of a body balanced for D65 that keeps white (least squares)."""
    daylight = _spectrum("D65")
    white = daylight @ sensitivities
    seen = (REFLECTANCES * daylight) @ sensitivities / white
    xyz_white = daylight @ OBSERVER / (daylight @ OBSERVER)[1]
    xyz = (REFLECTANCES * daylight) @ OBSERVER / (daylight @ OBSERVER)[1]
    free = np.linalg.lstsq(seen[:, :2] - seen[:, 2:], xyz - seen[:, 2:] * xyz_white, rcond=None)[0]
    return white / white.max(), np.vstack([free, xyz_white - free.sum(axis=0)]).T


def _exposures(sensor, illuminant):
    """Return what the sensor makes of the patches (24, 3); no value clips, even when balanced for daylight."""
    response = (REFLECTANCES * _spectrum(illuminant)) @ SENSORS[sensor]
    return response * 0.7 / (response / _balanced_sensor(SENSORS[sensor])[0]).max()


def _laid_out(patches):
    return patches.reshape(4, 6, 3).repeat(PITCH, axis=0).repeat(PITCH, axis=1)


def _write_dng(path, sensor, illuminant):
    """Write the chart as a body set to daylight records it; return the patches' XYZ by its matrix (24, 3)."""
    neutral, xyz_from_balanced = _balanced_sensor(SENSORS[sensor])
    exposures = _exposures(sensor, illuminant)
    matrix = np.linalg.inv(xyz_from_balanced @ np.diag(1 / neutral))
    write_sensor_file(path, _laid_out(exposures), matrix=matrix, as_shot=neutral)
    return exposures / neutral @ xyz_from_balanced.T


def _write_tiff(path, sensor, illuminant):
    """Write what such a body would develop, 16 bits of sRGB; return the patches' XYZ (24, 3)."""
    neutral, xyz_from_balanced = _balanced_sensor(SENSORS[sensor])
    linear = _exposures(sensor, illuminant) / neutral @ (np.linalg.inv(SRGB) @ xyz_from_balanced).T
    linear = np.clip(linear * 0.7 / linear.max(), 0, 1)
    encoded = colour.models.eotf_inverse_sRGB(_laid_out(linear))
    tifffile.imwrite(path, (encoded * 65535 + 0.5).astype(np.uint16), photometric="rgb")
    return linear @ SRGB.T


def _patches(linear):
    """Return the mean of each patch's middle (24, 3) of a picture (H, W, 3)."""
    inner = linear.reshape(4, PITCH, 6, PITCH, 3)[:, PITCH // 4 : -PITCH // 4, :, PITCH // 4 : -PITCH // 4]
    return inner.mean(axis=(1, 3)).reshape(24, 3)


def _graded(source, folder):
    """Measure the grey, save the preset, apply it, as a copy stand would; return the light's xy and the linear picture."""
    preset, out = folder / "chart.json", folder / "graded"
    rendering = ["--tone", "linear", "--space", "linear Rec.2020", "--format", "tiff"]
    sample = [
        "sample",
        str(source),
        "--patch",
        ",".join(map(str, GREY_PX)),
        "--save",
        str(preset),
        *rendering,
    ]
    for command in (
        sample,
        ["apply", str(preset), str(source), "--out", str(out), "--workers", "0", "--quiet"],
    ):
        with pytest.raises(SystemExit) as ended:
            main(command)
        assert ended.value.code == 0
    (written,) = out.glob("*.tif*")
    return load_preset(preset).fixed.from_xy, tifffile.imread(written) / 65535


def _lab(linear):
    """Return CIELAB of linear Rec.2020 (n, 3) under D65."""
    return colour.XYZ_to_Lab(linear @ REC2020.T, D65_XY)


def _from_neutral(linear):
    lab = _lab(linear)
    return colour.delta_E(lab, lab * (1, 0, 0), method="CIE 2000")


@pytest.mark.parametrize("illuminant", ILLUMINANTS)
@pytest.mark.parametrize("sensor", SENSORS)
@pytest.mark.parametrize("write", [_write_dng, _write_tiff], ids=["chart.dng", "chart.tif"])
def test_chart_corrected_from_its_greys(write, sensor, illuminant, tmp_path):
    """White and black are reported only: in the published chart itself both are off the greys by up to 2.7."""
    source = tmp_path / ("chart.dng" if write is _write_dng else "chart.tif")
    xyz = write(source, sensor, illuminant)
    light_xy, picture = _graded(source, tmp_path)
    after = _patches(picture)
    cat16 = colour.adaptation.matrix_chromatic_adaptation_VonKries(
        colour.xy_to_XYZ(light_xy), colour.xy_to_XYZ(D65_XY), transform="CAT16"
    )
    expected = xyz @ cat16.T @ np.linalg.inv(REC2020).T
    off = np.abs(after - expected).max(axis=1)
    apart = colour.delta_E(_lab(after), _lab(expected), method="CIE 2000")
    before = _from_neutral(xyz[GREYS] @ np.linalg.inv(REC2020).T)
    with np.printoptions(precision=2, suppress=True):
        print(
            f"\n{source.name} {sensor} {illuminant}: greys from neutral {before} -> {_from_neutral(after[GREYS])}"
        )
        print(f"  all 24 from CAT16 of colour-science {apart}")
    assert _from_neutral(after[MIDDLE_GREYS]).max() <= 1.0
    assert off.max() <= ROUNDING[source.suffix]
