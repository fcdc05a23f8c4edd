"""Measure the light of frames (proxy, readings, vote), plan the correction of a shoot, sample known neutrals."""

from grader.cast.correction import (
    corrected_xy,
    correction_for,
    correction_moved,
    fixed_correction,
    residual,
)
from grader.cast.measure import measure, measure_proxy
from grader.cast.proxy import build_proxy
from grader.cast.sample import sample_patch
from grader.cast.shoot import plan, plan_shoot
from grader.cast.shoot_summary import shoot_summary, stretch_table_rows, summarise

__all__ = [
    "build_proxy",
    "corrected_xy",
    "correction_for",
    "correction_moved",
    "fixed_correction",
    "measure",
    "measure_proxy",
    "plan",
    "plan_shoot",
    "residual",
    "sample_patch",
    "shoot_summary",
    "stretch_table_rows",
    "summarise",
]
