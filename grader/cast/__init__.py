"""Measure the light of frames: proxy, readings, vote."""

from grader.cast.measure import measure, measure_proxy
from grader.cast.proxy import build_proxy

__all__ = ["build_proxy", "measure", "measure_proxy"]
