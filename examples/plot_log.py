"""Plot a log with pandas: the light of every frame over the shoot, and a table of the stretches.

    pip install pandas
    python examples/plot_log.py graded/grader-log.jsonl light.html

The cells (``# %%``) run one by one in editors that know notebooks.
"""

# %% The log: one JSON object a line; for each file the last line stands.
from __future__ import annotations

import json
import sys
from pathlib import Path

import pandas as pd
import plotly.express as px


def read_frames(path: str | Path) -> pd.DataFrame:
    """Return a row for each frame whose light was measured, in the order of the shoot."""
    with Path(path).open(encoding="utf-8") as log:
        lines = [json.loads(line) for line in log]
    frames = pd.json_normalize([line for line in lines if line["kind"] == "frame"])
    frames = frames.drop_duplicates("file", keep="last")
    frames = frames[frames["cast.mired"].notna()].copy()
    frames["time"] = pd.to_datetime(frames["taken_at"], errors="coerce", utc=True, format="ISO8601")
    return frames.sort_values(["time", "file"]).reset_index(drop=True)


# %% Stretches: how long, how many frames, which light, how far it moved.
def stretches(frames: pd.DataFrame) -> pd.DataFrame:
    """Return a row for each body and stretch."""
    groups = frames.groupby(["body", "stretch"], dropna=False, sort=False)
    return groups.agg(
        frames=("file", "size"),
        begins=("time", "min"),
        ends=("time", "max"),
        mired=("cast.mired", "median"),
        duv=("cast.duv", "median"),
        spread_mired=("cast.mired", lambda m: m.quantile(0.9) - m.quantile(0.1)),
        doubt_deg=("cast.doubt_deg", "median"),
    ).reset_index()


# %% The picture: mired over time, cool light at the bottom; size tells the doubt.
def plot(frames: pd.DataFrame):
    """Return a figure of the measured light over the shoot."""
    timed = frames["time"].notna().all()
    return px.scatter(
        frames,
        x="time" if timed else frames.index,
        y="cast.mired",
        color="body",
        symbol="body",
        size=frames["cast.doubt_deg"].fillna(1.0),
        size_max=12,
        hover_data=["file", "stretch", "cast.duv", "cast.doubt_deg"],
        labels={"cast.mired": "light [mired]", "index": "frame"},
        title="Measured light over the shoot",
    )


if __name__ == "__main__":
    if len(sys.argv) != 3:
        sys.exit(__doc__)
    frames = read_frames(sys.argv[1])
    print(stretches(frames).to_string(index=False))
    plot(frames).write_html(sys.argv[2], include_plotlyjs=True)
