"""Runs out as cards and back as results; a job that a batch queue ends."""

from __future__ import annotations

import csv
import signal
import subprocess
import sys
import time
import tomllib
from pathlib import Path

import numpy as np
import pytest
import xarray as xr

STUDY = """\
title = "oscillator run elsewhere (invented)"
seed = 3
tolerance = 0.05
[propagator]
adapter = "function"
function = "motion:propagate"
[clock]
end = 4.0
outputs = 5
period = 6.3
[[state]]
name = "x"
mean = 1.0
std = 0.1
[[state]]
name = "v"
[[noise]]
name = "push"
intensity = 0.05
terms = 2
[[quantity]]
name = "x"
box = [-2.0, 2.0]
[chain]
arcs = 2
[ensemble]
members = 500
[check]
runs = 3
"""
MOTION = """\
import time
import numpy as np

def propagate(x0, times, forcing, parameters):
    time.sleep(PAUSE)
    x, out = np.array(x0, float), [np.array(x0, float)]
    for a, b in zip(times[:-1], times[1:]):
        h = (b - a) / 20
        for k in range(20):
            xi = forcing(a + (k + 0.5) * h)[0]
            rate = lambda s: np.array([s[1], -s[0] + xi])
            x = x + h * rate(x + h / 2 * rate(x))
        out.append(x)
    return np.array(out)
"""


def place(folder: Path, pause: float = 0.0) -> Path:
    folder.mkdir()
    (folder / "motion.py").write_text(MOTION.replace("PAUSE", str(pause)))
    (folder / "study.toml").write_text(STUDY)
    return folder / "study.toml"


def run_cards(folder: Path, motion) -> int:
    """What someone does on a machine without nipc: the forcing from its table."""
    homes = sorted(folder.glob("run-*"))
    for home in homes:
        card = tomllib.loads((home / "card.toml").read_text())
        with (home / "forcing.csv").open() as file:
            table = np.array([[float(v) for v in row] for row in list(csv.reader(file))[1:]])
        start, times = np.array(list(card["start"].values())), np.array(card["times"])
        states = motion(
            start, times, lambda t, table=table: [np.interp(t, table[:, 0], table[:, 1])], {}
        )
        np.savetxt(home / "result.csv", np.column_stack([times, states]), fmt="%.17g")
    return len(homes)


def test_stop_and_go(tmp_path, command, monkeypatch):
    study = place(tmp_path / "away")
    names: dict = {}
    exec((study.parent / "motion.py").read_text().replace("PAUSE", "0"), names)
    batches, runs = 0, 0
    while True:
        out = tmp_path / f"cards {batches}"
        told = command("export", study, out)
        assert told.code == 0
        if "Nothing is missing" in told.out:
            break
        runs += run_cards(out, names["propagate"])
        assert command("import", study, out).code == 0
        batches += 1
        assert batches < 20
    assert batches >= 4  # a check and a design for each of two arcs
    assert command("run", study, "-q", "--no-page").code == 0
    away = xr.load_dataset(study.parent / "study.work" / "results.nc")
    assert int(away.attrs["reused_runs"]) == int(away.attrs["propagator_runs"]) == runs
    home = place(tmp_path / "home")
    assert command("run", home, "-q", "--no-page").code == 0
    here = xr.load_dataset(home.parent / "study.work" / "results.nc")
    # the noise went through a table, interpolated: a thousandth of the spread
    assert away["std"].values[0] == pytest.approx(here["std"].values[0], rel=5e-3)


def test_a_result_that_does_not_fit_is_refused(tmp_path, command):
    study = place(tmp_path / "away")
    out = tmp_path / "cards"
    assert command("export", study, out).code == 0
    home = sorted(out.glob("run-*"))[0]
    (home / "result.csv").write_text("0.0, 1.0\n")
    told = command("import", study, out)
    assert told.code == 1
    assert "1 refused" in told.out
    assert home.name in told.out


def test_engine_and_scheduler_go_together(tmp_path, command):
    study = place(tmp_path / "a")
    assert "go together" in command("run", study, "--engine", "dask").err
    told = command("run", study, "--scheduler", "tcp://127.0.0.1:1")
    assert told.code == 2
    assert "go together" in told.err


def test_failed_runs_can_be_made_anew(tmp_path, command):
    study = place(tmp_path / "a")
    text = study.read_text() + "[runs]\nretries = 0\ntolerated_failures = 0.9\n"
    study.write_text(text)
    motion = study.parent / "motion.py"
    flag = tmp_path / "broken"
    flag.touch()
    good = motion.read_text()
    # the file stays as it is: what is outside it decides whether runs fail
    motion.write_text(good.replace(
        "    time.sleep(0.0)\n",
        f"    import os\n    if os.path.exists({str(flag)!r}) and x0[0] > 1.05:\n"
        "        raise ValueError('no licence')\n",
    ))  # fmt: skip
    command("run", study, "-q", "--no-page")
    flag.unlink()
    assert command("run", study, "-q", "--no-page", "--retry-failed").code == 0
    data = xr.load_dataset(study.parent / "study.work" / "results.nc")
    assert int(data.attrs["failed_runs"]) == 0


def test_a_batch_queue_ends_a_job(tmp_path):
    """SIGTERM: exit code 143 and a word; no worker is left; the same command goes on."""
    study = place(tmp_path / "a", pause=0.1)
    words = [sys.executable, "-m", "nipc", "run", "study.toml", "-q", "--no-page", "--jobs", "2"]
    process = subprocess.Popen(words, cwd=study.parent, stderr=subprocess.PIPE, text=True)
    ledger = study.parent / "study.work" / "runs.sqlite"
    deadline = time.monotonic() + 60
    while time.monotonic() < deadline and process.poll() is None:
        if any((study.parent / "study.work").glob("arcs.json")):
            break
        time.sleep(0.02)
    assert process.poll() is None, ledger
    process.send_signal(signal.SIGTERM)
    _, told = process.communicate(timeout=30)
    assert process.returncode == 143
    assert "goes on from there" in told or "kept" in told
    assert "Traceback" not in told
    assert subprocess.run(words, cwd=study.parent, timeout=120).returncode == 0
    data = xr.load_dataset(study.parent / "study.work" / "results.nc")
    assert int(data.attrs["reused_runs"]) > 0
