"""Draw the pictures of docs/gallery.md again, from the sample results and the plans beside this script.

Run it anywhere: ``python docs/gallery/make.py``. A folder may be given instead of ``docs/images``.
"""

from __future__ import annotations

import sys
from dataclasses import replace
from pathlib import Path

import unturn
from unturn import io
from unturn.picture_keys import request_of
from unturn.pictures.animation import draw_series
from unturn.pictures.computing import Step
from unturn.pictures.drawing import draw_all
from unturn.pictures.plan import read_plan

HERE = Path(__file__).resolve().parent
SAMPLES = HERE.parents[1] / "sample_meshes"
RESULTS = {"bracket": "bracket.vtu", "ring": "ring.vtu", "lever": "lever.xdmf"}
ANIMATED = "lever-moving.gif"


def main(folder: Path = HERE.parent / "images") -> list[Path]:
    """Draw every picture into a folder; return them."""
    made = []
    for name, result in RESULTS.items():
        plan = read_plan(HERE / f"{name}.toml")
        step = Step(unturn.read(SAMPLES / result), plan.pictures, plan.options)
        targets = [folder / f"{picture.name}.png" for picture in plan.pictures]
        draw_all(step, plan.pictures, targets, plan.title)
        made += targets
    plan = read_plan(HERE / "lever.toml")
    opened = io.open_result(SAMPLES / RESULTS["lever"])
    moving = replace(
        request_of({"camera": "front", "factor": 1, "size": "640x480"}),
        title="from the first step to the last",
    )
    draw_series(
        lambda k: Step(opened.read(k), [moving], plan.options), 7, moving, folder / ANIMATED, plan.title
    )
    return [*made, folder / ANIMATED]


if __name__ == "__main__":
    for path in main(*map(Path, sys.argv[1:])):
        print(path)
