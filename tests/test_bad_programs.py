"""Propagators that fail, work folders that cannot be used, and work that is stopped half-way."""

from __future__ import annotations

import json
import os
import signal
import subprocess
import sys
import time
from pathlib import Path

import numpy as np
import pytest

import nipc
from nipc.runs.ledger import Ledger
from nipc.runs.status import status

STUDY = """\
title = "oscillator"
tolerance = 0.05
[propagator]
{propagator}
[clock]
end = 2.0
outputs = 5
[[state]]
name = "x"
std = 0.1
[[state]]
name = "v"
[[noise]]
name = "force"
intensity = 0.1
terms = 3
[[quantity]]
name = "x"
box = [-1.0, 1.0]
[design]
runs = {runs}
[expansion]
degree = 1
[check]
runs = 3
[runs]
retries = 0
{more}
"""
FUNCTION = 'adapter = "function"\nfunction = "motion:propagate"'
MOTION = """\
import time
import numpy as np
from scipy.integrate import solve_ivp

def propagate(x0, times, forcing, parameters):
    rates = lambda t, x: [x[1], -x[0] + forcing(t)[0]]
    return solve_ivp(rates, (times[0], times[-1]), x0, t_eval=times, rtol=1e-8).y.T
"""
PROGRAM = """\
adapter = "executable"
command = ["program"]
time_limit = 1.0
[propagator.forcing]
file = "forcing.dat"
step = 0.1
[propagator.output]
file = "motion.out"
time_column = 1
columns = [2, 3]
"""


def write(folder: Path, motion: str = MOTION, runs: int = 12, more: str = "") -> Path:
    folder.mkdir(exist_ok=True)
    (folder / "motion.py").write_text(motion)
    path = folder / "study.toml"
    path.write_text(STUDY.format(propagator=FUNCTION, runs=runs, more=more))
    return path


def before_rates(lines: str) -> str:
    return MOTION.replace("    rates", f"{lines}\n    rates")


FAULTS = [
    ("import nothing_like_this\n" + MOTION, "No module named 'nothing_like_this'", 2),
    ("def propagate(x:\n", "SyntaxError", 2),
    ("def other(): pass\n", "has no function 'propagate'; it has: other", 2),
    (before_rates("    raise ValueError('no fuel')"), "ValueError: no fuel", 1),
    (before_rates("    return np.full((len(times), 2), np.nan)"), "not finite", 1),
    (before_rates("    return np.zeros((3, 2))"), "shape (3, 2)", 1),
    (before_rates("    return None"), "it must be (5, 2)", 1),
    (before_rates("    return 'fine'"), "fine", 1),
    (before_rates("    import os; os._exit(9)"), "exit code 9", 1),
    (before_rates("    import sys; sys.exit('enough')"), "enough", 1),
]


@pytest.mark.parametrize(("motion", "words", "code"), FAULTS)
def test_a_faulty_function(command, tmp_path, motion, words, code):
    done = command("run", write(tmp_path, motion), "--no-page")
    assert done.code == code
    assert words in done.err
    assert done.out == ""
    # what comes next is said: where to look, or what to mend
    assert "nipc status" in done.err or code == 2


def test_a_function_that_never_ends(command, tmp_path):
    endless = before_rates("    while True:\n        time.sleep(0.01)")
    done = command("run", write(tmp_path, endless, more="time_limit = 0.5"), "--no-page")
    assert done.code == 1
    assert "time limit" in done.err


def program(folder: Path, body: str) -> Path:
    path = folder / "study.toml"
    path.write_text(STUDY.format(propagator=PROGRAM, runs=12, more=""))
    (folder / "program").write_text(f"#!{sys.executable}\n{body}\n")
    (folder / "program").chmod(0o755)
    return path


ROWS = "0.0 0.1 0.0\\n0.5 0.1 0.0\\n1.0 0.1 0.0\\n1.5 0.1 0.0\\n"
PROGRAMS = {
    "non-zero": ("import sys; sys.exit('no fuel')", "no fuel"),
    "prints nothing": ("pass", "no file motion.out"),
    "an empty table": ("open('motion.out', 'w')", "has 0 rows"),
    "half a table": (f"open('motion.out', 'w').write('{ROWS}')", "has 4 rows"),
    "a row cut short": (f"open('motion.out', 'w').write('{ROWS}2.0 0.1')", "line 5"),
    "no number": (f"open('motion.out', 'w').write('{ROWS}2.0 0.1 ****')", "'****'"),
    "other times": (
        f"open('motion.out', 'w').write('{ROWS}9.0 0.1 0.0')",
        "row 5: its time is 9; 2 is expected",
    ),
    "not a number": (f"open('motion.out', 'w').write('{ROWS}2.0 nan 0.0')", "not finite"),
    "killed": ("import os; os.kill(os.getpid(), 11)", "SIGSEGV"),
    "never ends": ("import time; time.sleep(60)", "within 1 s"),
}


@pytest.mark.parametrize("fault", PROGRAMS)
def test_a_faulty_program(command, tmp_path, fault):
    body, words = PROGRAMS[fault]
    done = command("run", program(tmp_path, body), "--no-page")
    assert done.code == 1
    assert words in done.err


def test_a_program_that_is_not_there_or_cannot_be_executed(command, tmp_path):
    path = program(tmp_path, "pass")
    (tmp_path / "program").chmod(0o644)
    for name in ("check", "run"):
        done = command(name, path)
        assert done.code == 2
        assert "chmod +x" in done.err
    (tmp_path / "program").unlink()
    done = command("run", path)
    assert done.code == 2
    assert "no program 'program'" in done.err
    assert not (tmp_path / "study.work").exists()


def test_some_failed_runs_are_reported_and_survived(tmp_path):
    motion = before_rates("    if x0[0] > 0.14:\n        raise ValueError('too far')")
    path = write(tmp_path, motion, 40, "tolerated_failures = 0.5")
    result = nipc.run(nipc.load_study(path), backend="inline")
    failed = result.dataset.attrs["failed_runs"]
    assert 0 < failed < 20
    reasons = json.loads(result.dataset.attrs["failures"])
    assert sum(reason["count"] for reason in reasons) == failed
    assert any("too far" in reason["reason"] for reason in reasons)
    assert "failed" in " ".join(json.loads(result.dataset.attrs["notes"]))
    assert np.isfinite(result.dataset["std"].values).all()


def test_mended_and_started_again(command, tmp_path):
    """The failed runs of other code are not held against the mended one."""
    path = write(tmp_path, before_rates("    raise ValueError('no fuel')"))
    assert command("run", path, "--no-page").code == 1
    write(tmp_path)
    done = command("run", path, "--no-page", "--json")
    assert done.code == 0, done.err
    assert json.loads(done.out)["failed_runs"] == 0


def test_a_work_folder_that_cannot_be_used(command, tmp_path):
    path = write(tmp_path)
    work = tmp_path / "study.work"
    with Ledger.open(work):
        done = command("run", path, "--no-page")
        assert done.code == 1
        assert str(os.getpid()) in done.err
    for file in work.iterdir():
        file.unlink()
    work.rmdir()
    work.write_text("a file of that name")
    done = command("run", path, "--no-page")
    assert done.code == 1
    assert str(work) in done.err
    assert work.read_text() == "a file of that name"
    work.unlink()
    work.symlink_to("/proc/nothing-can-be-made-here")
    done = command("run", path, "--no-page")
    assert done.code == 1
    assert "cannot be made" in done.err


def test_interrupted_and_started_again_gives_the_same_numbers(tmp_path):
    slow = before_rates("    time.sleep(0.15)")
    broken, whole = write(tmp_path / "a", slow, 30), write(tmp_path / "b", slow, 30)
    folder = broken.parent / "study.work"
    process = subprocess.Popen(
        [sys.executable, "-m", "nipc", "run", str(broken), "--no-page"],
        stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True,
    )  # fmt: skip
    deadline = time.monotonic() + 60
    while time.monotonic() < deadline and (_done(folder) < 3):
        time.sleep(0.05)
    os.kill(process.pid, signal.SIGINT)
    _, stderr = process.communicate(timeout=60)
    assert process.returncode == 130, stderr
    assert "are kept, and the next start goes on from here" in stderr
    assert "Traceback" not in stderr
    kept = _done(folder)
    assert 3 <= kept < 33
    first, second = (nipc.run(nipc.load_study(path), n_jobs=2).dataset for path in (broken, whole))
    assert int(first.attrs["reused_runs"]) >= kept
    assert int(second.attrs["reused_runs"]) == 0
    assert first.drop_attrs().identical(second.drop_attrs())


def _done(folder: Path) -> int:
    try:
        return status(folder).done
    except nipc.NipcError:  # not there yet, or just being made
        return 0
