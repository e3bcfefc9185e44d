"""Reads files in a process of its own, so that a crash of a reader is seen as one."""

from __future__ import annotations

import json
import subprocess
import sys
from pathlib import Path

_CODE = """
import json, sys
import numpy as np
import unturn.io
from unturn.errors import UnturnError
for path in json.load(sys.stdin):
    print(json.dumps([path, "begun", ""]), flush=True)
    try:
        opened = unturn.io.open_result(path)
        for step in range(len(opened.steps) if opened.steps else 1):
            result = opened.read(step)
            for block in result.blocks:
                float(np.nansum(result.points[block.connectivity.ravel()].astype(float)))
        print(json.dumps([path, "read", ""]), flush=True)
    except UnturnError as error:
        print(json.dumps([path, type(error).__name__, str(error)]), flush=True)
    except BaseException as error:
        print(json.dumps([path, "FAULT " + repr(error), ""]), flush=True)
"""


def read_in_child(paths: list[Path], timeout: float = 120) -> dict[Path, tuple[str, str]]:
    """Return what became of each file: ``read``, the name of an error of ours with its text, or a fault.

    The process must end by itself, print nothing to stderr and come to the end of the list.
    """
    done = subprocess.run(
        [sys.executable, "-X", "faulthandler", "-c", _CODE],
        input=json.dumps([str(p) for p in paths]),
        capture_output=True,
        text=True,
        timeout=timeout,
        check=False,
    )
    lines = [json.loads(line) for line in done.stdout.splitlines()]
    last = lines[-1][0] if lines else "nothing"
    assert done.returncode == 0, (
        f"the interpreter ended with {done.returncode} at {last}: {done.stderr[-2000:]}"
    )
    assert done.stderr == "", done.stderr[-2000:]
    return {Path(path): (outcome, text) for path, outcome, text in lines if outcome != "begun"}
