"""A user's mistake: what, where, what would be right; exit code 2 or 1, never a traceback."""

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

GOOD = """\
title = "oscillator"
tolerance = 0.05
[propagator]
adapter = "function"
function = "motion:propagate"
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
[expansion]
degree = 1
[check]
runs = 3
"""
MOTION = """\
import time
import numpy as np
from scipy.integrate import solve_ivp

def propagate(x0, times, forcing, parameters):
    rates = lambda t, x: [x[1], -x[0] + forcing(t)[0]]
    return solve_ivp(rates, (times[0], times[-1]), x0, t_eval=times, rtol=1e-8).y.T
"""


def study(tmp_path: Path, text: str = GOOD, motion: str = MOTION) -> Path:
    (tmp_path / "motion.py").write_text(motion)
    path = tmp_path / "study.toml"
    path.write_text(text)
    return path


def nipc_command(*words: str) -> subprocess.CompletedProcess[str]:
    return subprocess.run(
        [sys.executable, "-m", "nipc", *words], capture_output=True, text=True, timeout=120
    )


BAD = [
    ('title = "oscillator"\n', "", "title", "is missing"),
    ("tolerance = 0.05", "tolerence = 0.05", "tolerence", "did you mean 'tolerance'"),
    ("tolerance = 0.05", 'tolerance = "small"', "tolerance", "found text 'small'"),
    ("std = 0.1", "std = -0.1", "state[1].std", "greater than or equal to 0"),
    ("end = 2.0", "end = -2.0", "clock", "must come after start"),
    ('name = "v"', 'name = "x"', "state[2].name", "already the name of state 1"),
    ("box = [-1.0, 1.0]", "box = [1.0, 1.0]", "quantity[1]", "must lie below"),
    ("box = [-1.0, 1.0]", 'component = "y"', "quantity[1].component", "no state component"),
    ("box = [-1.0, 1.0]", 'expression = "x + z"', "quantity[1].expression", "unknown name 'z'"),
    ('adapter = "function"', 'adapter = "magic"', "propagator.adapter", "there is no adapter"),
    ('"motion:propagate"', '"missing:propagate"', "propagator", "there is no module 'missing'"),
    ("terms = 3", "terms = 0", "noise[1].terms", "greater than or equal to 1"),
    ("terms = 3", 'kind = "gauss-markov"', "noise[1]", "needs its time_constant"),
    (
        "[expansion]",
        "[start]\ncovariance = [[1.0, 0.5], [0.2, 1.0]]\n[expansion]",
        "start.covariance",
        "not symmetric",
    ),
    (
        "[expansion]",
        "[start]\ncovariance = [[1.0, 2.0], [2.0, 1.0]]\n[expansion]",
        "start.covariance",
        "correlations lie in [-1, 1]",
    ),
    ("[clock]", "[clock", "the file", "not valid TOML"),
    (
        "terms = 3",
        'terms = 3\nenters = "multiplicative"\ncalculus = "ito"',
        "noise[1].calculus",
        "Stratonovich",
    ),
]


@pytest.mark.parametrize(("old", "new", "key", "words"), BAD)
def test_refused_with_place_and_remedy(tmp_path, old, new, key, words):
    assert old in GOOD
    path = study(tmp_path, GOOD.replace(old, new, 1))
    with pytest.raises(nipc.NipcError) as caught:
        nipc.load_study(path)
    text = str(caught.value)
    assert caught.value.exit_code == 2
    assert str(path) in text
    assert key in text
    assert words in text
    if new and not new.startswith("[start]"):
        line = GOOD.replace(old, new, 1).splitlines()
        assert any(f"line {n}," in text for n in range(1, len(line) + 1))


def test_a_covariance_that_is_not_semidefinite(tmp_path):
    text = GOOD.replace("std = 0.1\n", "") + (
        '[[state]]\nname = "u"\n[start]\n'
        "covariance = [[1.0, 0.9, -0.9], [0.9, 1.0, 0.9], [-0.9, 0.9, 1.0]]\n"
    )
    with pytest.raises(nipc.NipcError, match="not positive semidefinite"):
        nipc.load_study(study(tmp_path, text))


def test_all_errors_at_once_and_no_traceback(tmp_path):
    text = GOOD.replace("std = 0.1", "std = -1").replace("end = 2.0", "end = -2.0")
    done = nipc_command("check", str(study(tmp_path, text.replace("terms", "term"))))
    assert done.returncode == 2
    assert "3 things are wrong" in done.stderr
    assert "Traceback" not in done.stderr + done.stdout


def test_a_good_study_passes_and_its_code_is_not_run(tmp_path):
    path = study(tmp_path, motion="raise SystemExit('was run')\ndef propagate(): pass\n")
    for command in ("check", "plan"):
        done = nipc_command(command, str(path))
        assert done.returncode == 0, done.stderr
        assert "was run" not in done.stdout + done.stderr
        lines = done.stdout.replace(str(path), "STUDY").splitlines()
        assert max(map(len, lines)) <= 80


FAULTS = [
    ("import nothing_like_this\n" + MOTION, "does not import", 2),
    ("def other(): pass\n", "has no function 'propagate'", 2),
    ("def propagate(*a):\n    raise ValueError('no fuel')\n", "no fuel", 1),
    ("import numpy as np\ndef propagate(x0, t, f, p):\n    return np.full((len(t), 2), np.nan)\n",
     "not finite", 1),
    ("import numpy as np\ndef propagate(x0, t, f, p):\n    return np.zeros((3, 2))\n", "shape", 1),
]  # fmt: skip


@pytest.mark.parametrize(("motion", "words", "code"), FAULTS)
def test_faulty_propagators(tmp_path, motion, words, code):
    done = nipc_command("run", str(study(tmp_path, motion=motion)), "--no-page")
    assert done.returncode == code
    assert words in done.stderr
    assert "Traceback" not in done.stderr


def test_a_propagator_that_never_ends(tmp_path):
    motion = MOTION.replace("    rates", "    while True:\n        time.sleep(0.01)\n    rates")
    text = GOOD + "[runs]\ntime_limit = 0.5\nretries = 0\n"
    done = nipc_command("run", str(study(tmp_path, text, motion)), "--no-page")
    assert done.returncode == 1
    assert "time limit" in done.stderr
    assert "Traceback" not in done.stderr


def test_some_failed_runs_are_reported_and_survived(tmp_path):
    motion = MOTION.replace(
        "    rates", "    if x0[0] > 0.14:\n        raise ValueError('too far')\n    rates"
    )
    text = GOOD.replace("degree = 1", "degree = 1\n[design]\nruns = 40")
    text += "[runs]\ntolerated_failures = 0.5\nretries = 0\n"
    result = nipc.run(nipc.load_study(study(tmp_path, text, motion)), backend="inline")
    failed = result.dataset.attrs["failed_runs"]
    assert 0 < failed < 20
    reasons = json.loads(result.dataset.attrs["failures"])
    assert any("too far" in reason["reason"] for reason in reasons)
    assert "failed" in " ".join(json.loads(result.dataset.attrs["notes"]))
    assert np.isfinite(result.dataset["std"].values).all()


def test_budget_is_kept(tmp_path):
    path = study(tmp_path, "budget = 5\n" + GOOD)
    done = nipc_command("plan", str(path))
    assert done.returncode == 2
    assert "the budget is 5" in done.stderr


def test_interrupted_and_started_again_gives_the_same_numbers(tmp_path):
    slow = MOTION.replace("    rates", "    time.sleep(0.15)\n    rates")
    (tmp_path / "a").mkdir()
    (tmp_path / "b").mkdir()
    text = GOOD.replace("degree = 1", "degree = 1\n[design]\nruns = 30")
    broken, whole = study(tmp_path / "a", text, slow), study(tmp_path / "b", text, slow)
    process = subprocess.Popen(
        [sys.executable, "-m", "nipc", "run", str(broken), "--no-page"],
        stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True,
    )  # fmt: skip
    folder = tmp_path / "a" / "study.work"
    deadline = time.monotonic() + 60
    while time.monotonic() < deadline:
        time.sleep(0.2)
        if (folder / "ledger.sqlite").exists() and _done(broken) >= 3:
            break
    os.kill(process.pid, signal.SIGINT)
    _, stderr = process.communicate(timeout=60)
    assert process.returncode == 130, stderr
    assert "Traceback" not in stderr
    kept = _done(broken)
    assert 3 <= kept < 33
    for path in (broken, whole):
        assert nipc_command("run", str(path), "--no-page", "--jobs", "2").returncode == 0
    first, second = (nipc.load_result(p.parent / "study.work").dataset for p in (broken, whole))
    assert int(first.attrs["reused_runs"]) >= kept
    assert first.drop_attrs().identical(second.drop_attrs())


def _done(path: Path) -> int:
    found = nipc_command("status", str(path), "--json")
    return int(json.loads(found.stdout)["done"]) if found.returncode == 0 else 0


def test_a_work_folder_in_use_is_refused(tmp_path):
    from nipc.runs.ledger import Ledger

    path = study(tmp_path)
    with Ledger.open(tmp_path / "study.work"):
        done = nipc_command("run", str(path), "--no-page")
    assert done.returncode == 1
    assert str(os.getpid()) in done.stderr
    assert "Traceback" not in done.stderr
