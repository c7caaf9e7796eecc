"""A chain that is killed between and within its arcs goes on, and ends with the same numbers."""

from __future__ import annotations

import json
import os
import signal
import subprocess
import sys
import time
from pathlib import Path

import xarray as xr

STUDY = """\
title = "pendulum that takes its time (invented)"
seed = 2
tolerance = 0.05
[propagator]
adapter = "function"
function = "motion:propagate"
[clock]
end = 9.0
outputs = 10
period = 6.3
[[state]]
name = "q"
mean = 0.8
std = 0.05
[[state]]
name = "v"
[[noise]]
name = "push"
intensity = 0.03
terms = 3
[[quantity]]
name = "q"
[chain]
arcs = 6
rounds = 0
[ensemble]
members = 1000
[check]
runs = 4
"""
MOTION = """\
import time
import numpy as np

def propagate(x0, times, forcing, parameters):
    time.sleep(0.01)
    x, out = np.array(x0), [np.array(x0)]
    for a, b in zip(times[:-1], times[1:]):
        steps = max(1, int(np.ceil((b - a) / 0.1)))
        h = (b - a) / steps
        for k in range(steps):
            t = a + (k + 0.5) * h
            rate = lambda s: np.array([s[1], -np.sin(s[0]) + forcing(t)[0]])
            x = x + h * rate(x + h / 2 * rate(x))
        out.append(x)
    return np.array(out)
"""


def begin(folder: Path) -> subprocess.Popen:
    command = [sys.executable, "-m", "nipc", "run", "study.toml", "--jobs", "2", "-q", "--no-page"]
    return subprocess.Popen(command, cwd=folder, start_new_session=True)


def test_kill_and_resume(tmp_path):
    results = {}
    for name in ("whole", "killed"):
        folder = tmp_path / name
        folder.mkdir()
        (folder / "motion.py").write_text(MOTION)
        (folder / "study.toml").write_text(STUDY)
        told = folder / "study.work" / "arcs.json"
        for arcs in (1, 4) if name == "killed" else ():
            process, deadline = begin(folder), time.monotonic() + 60
            while process.poll() is None and time.monotonic() < deadline:
                if told.exists() and len(json.loads(told.read_text())) >= arcs:
                    break
                time.sleep(0.01)
            assert process.poll() is None, "it was to be killed while at work"
            os.killpg(process.pid, signal.SIGKILL)
            process.wait()
        assert begin(folder).wait(timeout=120) == 0
        results[name] = xr.load_dataset(folder / "study.work" / "results.nc")
    killed, whole = results["killed"], results["whole"]
    assert int(killed.attrs["reused_runs"]) > 0
    assert killed.attrs["run_equivalents"] == whole.attrs["run_equivalents"]
    assert killed.drop_attrs().identical(whole.drop_attrs())
