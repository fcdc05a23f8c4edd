import colour
import numpy as np
import pytest

from grader.report import charts
from grader.report.recount import read_shoot

LIGHTS = [(0.4476, 0.4074), (0.3127, 0.3290), (0.38, 0.41)]


@pytest.mark.parametrize("xy", LIGHTS)
def test_a_lights_colour_on_the_screen_is_colour_sciences(xy):
    linear = colour.XYZ_to_sRGB(colour.xy_to_XYZ(xy), apply_cctf_encoding=False)
    encoded = colour.cctf_encoding(np.clip(linear / linear.max(), 0, 1), function="sRGB")
    shown = [int(charts.light_hex(xy)[k : k + 2], 16) for k in (1, 3, 5)]
    assert shown == pytest.approx(255 * encoded, abs=1.0)


@pytest.mark.parametrize("xy", LIGHTS)
def test_one_degree_is_one_degree(xy):
    # Oklab and the Rec.2020 matrix of colour-science; the angle is between working-light RGB, as recovery errors are
    space = colour.RGB_COLOURSPACES["ITU-R BT.2020"]
    along, across = charts.per_degree(xy, "oklab")
    lab = colour.XYZ_to_Oklab(colour.xy_to_XYZ(xy))
    for step in ((0, 0, along), (0, across, 0)):
        first, second = (
            space.matrix_XYZ_to_RGB @ colour.Oklab_to_XYZ(at) for at in (lab, lab + np.array(step))
        )
        angle = np.degrees(np.arccos(first @ second / np.linalg.norm(first) / np.linalg.norm(second)))
        assert angle == pytest.approx(1.0, rel=0.03)


def test_the_locus_is_colour_sciences():
    # Ohno 2013 as colour-science has it
    for line, kelvin in zip(
        charts.plane("oklab")["isotherms"], (2000, 2500, 3000, 4000, 5000, 6500, 10000), strict=True
    ):
        for k, duv in enumerate((0.02, -0.02)):
            uv = colour.temperature.CCT_to_uv_Ohno2013([kelvin, duv])
            lab = colour.XYZ_to_Oklab(colour.xy_to_XYZ(colour.UCS_uv_to_xy(uv)))
            assert (line["yb"][k], line["gm"][k]) == pytest.approx((lab[2], lab[1]), abs=1.5e-3)


def test_the_histogram_counts_every_frame():
    casts = [0.0, 0.2, *[4.9] * 150, 500.0]
    shoot = read_shoot(
        {"kind": "frame", "file": str(k), "cast": {"delta_e_2000": v}, "residual": {"delta_e_2000": v / 10}}
        for k, v in enumerate(casts)
    )
    found = charts.histogram(shoot)
    assert (sum(found["before"]), sum(found["after"])) == (153, 153)
    assert found["width"] == 0.25
    assert (found["before"][0], found["before"][-1], found["after"][-1]) == (2, 151, 1)
    assert sum(charts.histogram(read_shoot([]))["before"]) == 0


def test_a_night_is_cut_out_of_the_time_axis():
    def frame(day, hour):
        return {"kind": "frame", "file": f"{day}{hour}", "taken_at": f"2031-05-0{day}T{hour}:00:00"}

    two_days = read_shoot([frame(3, 17), frame(3, 18), frame(4, 10), frame(4, 11)]).frames
    ((begin, length),) = charts.pauses(two_days)
    assert two_days[1].clock_s * 1e3 < begin < begin + length < two_days[2].clock_s * 1e3
    assert charts.pauses(two_days[:2]) == []
    assert charts.pauses([]) == []


@pytest.mark.parametrize("opponent", ["oklab", "ciecam16", "cielab"])
def test_every_opponent_space_can_be_drawn(lines, opponent):
    other = [
        line | {"cast": line["cast"] | {"opponent": opponent}} if line.get("cast") else line for line in lines
    ]
    shoot = read_shoot(other)
    data = charts.chart_data(shoot, shoot.frames)
    assert data["opponent"] == charts.OPPONENT_NAMES[opponent]
    assert max(half for half in data["frames"]["halfYb"] if half is not None) > 0
