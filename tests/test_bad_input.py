"""A study that is wrong: what, where, what would be right; exit code 2, never a traceback."""

from __future__ import annotations

import re
from pathlib import Path

import pytest

import nipc

GOOD = """\
title = "oscillator"
seed = 7
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
    ("seed = 7\n", "seed = 7.5\n", "seed", "found 7.5"),
    ("tolerance = 0.05", "tolerance = 1.5", "tolerance", "less than 1"),
    ("tolerance = 0.05", "tolerance = nan", "tolerance", "found nan"),
    ("outputs = 5", "outputs = 1", "clock.outputs", "greater than or equal to 2"),
    ("outputs = 5", "outputs = [0.0, 1.0, 0.5]", "clock", "must increase"),
    ("outputs = 5", "outputs = [0.0, 9.0]", "clock", "between start and end"),
    ("end = 2.0", "end = inf", "clock.end", "finite"),
    ("intensity = 0.1", "intensity = 0.0", "noise[1].intensity", "greater than 0"),
    ("intensity = 0.1", 'intensity = "0.1"', "noise[1].intensity", "found text '0.1'"),
    ("terms = 3", "terms = 3.0", "noise[1].terms", "found 3.0"),
    ("intensity = 0.1", "intensity = true", "noise[1].intensity", "found True"),
    ("terms = 3", 'basis = "fourier"', "noise[1].basis", "'legendre', 'karhunen-loeve'"),
    ('name = "force"', 'name = "v"', "noise[1].name", "already the name of state 2"),
    ('name = "force"', 'name = "start"', "noise[1].name", "choose another name"),
    ('name = "force"', 'name = "no good"', "noise[1].name", "found text 'no good'"),
    (
        "[expansion]",
        '[[quantity]]\nname = "x"\n[expansion]',
        "quantity[2].name",
        "two quantities are called 'x'",
    ),
    ("box = [-1.0, 1.0]", "box = [-1.0]", "quantity[1].box", "at least 2"),
    ("box = [-1.0, 1.0]", 'expression = "x +"', "quantity[1].expression", "x +"),
    ("box = [-1.0, 1.0]", 'expression = "__import__(1)"', "quantity[1].expression", "__import__"),
    ("degree = 1", "degree = -1", "expansion.degree", "greater than or equal to 0"),
    ("runs = 3", "runs = 1", "check.runs", "greater than or equal to 2"),
    ("runs = 3", "runs = 3\n[runs]\ntime_limit = -1.0", "runs.time_limit", "greater than 0"),
    ("runs = 3", 'runs = 3\n[chart]\nname = "mercator"', "chart", "must be one of"),
    (
        "runs = 3",
        'runs = 3\n[[parameter]]\nname = "k"\nlaw = "cauchy"',
        "parameter[1]",
        "must be one of",
    ),
    (
        "runs = 3",
        'runs = 3\n[[parameter]]\nname = "k"\nlaw = "uniform"\nlower = 2.0\nupper = 1.0',
        "parameter[1]",
        "lower",
    ),
    (
        "terms = 3",
        'terms = 3\nenters = "multiplicative"\ncalculus = "ito"',
        "noise[1].calculus",
        "Stratonovich",
    ),
    (
        "runs = 3",
        'runs = 3\n[[parameter]]\nname = "k"\nlaw = "normal"\nmean = 0.0\nstd = "1"',
        "parameter[1].std",
        "found text '1'",
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
    lines = GOOD.replace(old, new, 1).splitlines()
    good = GOOD.splitlines()
    differ = (i for i, (a, b) in enumerate(zip(good, lines, strict=False)) if a != b)
    first = next(differ, len(good))
    header = max([i for i in range(first + 1) if lines[i].startswith("[")], default=0)
    finding = next(f for f in caught.value.findings if f.key.startswith(key) or not f.key)
    if words != "is missing":  # what is missing stands on no line
        assert header + 1 <= finding.line <= first + 1 + new.count("\n")


def test_a_covariance_that_is_not_semidefinite(tmp_path):
    text = GOOD.replace("std = 0.1\n", "") + (
        '[[state]]\nname = "u"\n[start]\n'
        "covariance = [[1.0, 0.9, -0.9], [0.9, 1.0, 0.9], [-0.9, 0.9, 1.0]]\n"
    )
    with pytest.raises(nipc.NipcError, match="not positive semidefinite"):
        nipc.load_study(study(tmp_path, text))


def test_all_errors_at_once_in_the_order_of_the_file(command, tmp_path):
    text = GOOD.replace("std = 0.1", "std = -1").replace("end = 2.0", "end = -2.0")
    path = study(tmp_path, text.replace("terms", "term"))
    for name in ("check", "plan", "run"):
        done = command(name, path)
        assert (done.code, done.out) == (2, "")
        head, *rest = done.err.splitlines()
        assert head == f"nipc: {path}: 3 things are wrong"
        assert [re.sub(r"\d+", "N", row.split(":")[0].strip()) for row in rest] == [
            "line N, clock", "line N, state[N].std", "line N, noise[N].term",
        ]  # fmt: skip
    assert not (tmp_path / "study.work").exists()


@pytest.mark.parametrize(
    ("data", "words"),
    [
        (b"title = 'caf\xe9'\n", "not a text file in UTF-8 (byte 12)"),
        (b"", "title: is missing"),
        (b"title = 'a'\ntitle = 'b'\n", "line 2, the file: not valid TOML"),
        (b"x = " + b"[" * 100_000, "not valid TOML"),
        (b"state = 3\nnoise = 'loud'\n", "found 3; it should be a valid list"),
        (b"\x00\x01\x02", "not valid TOML"),
    ],
)
def test_files_that_are_no_studies(command, tmp_path, data, words):
    path = tmp_path / "study.toml"
    path.write_bytes(data)
    done = command("check", path)
    assert done.code == 2
    assert words in done.err


def test_a_covariance_file(command, tmp_path):
    text = GOOD.replace("std = 0.1\n", "") + '[start]\ncovariance_file = "start.txt"\n'
    path = study(tmp_path, text)
    for content, words in (
        (None, "cannot read 'start.txt'"),
        ("1.0 0.0\n0.0 one\n", "start.covariance_file"),
        ("1.0 0.0 0.0\n0.0 1.0 0.0\n0.0 0.0 1.0\n", "it must be 2 x 2"),
        ("1.0 2.0\n2.0 1.0\n", "correlations lie in [-1, 1]"),
    ):
        if content is not None:
            (tmp_path / "start.txt").write_text(content)
        done = command("check", path)
        assert done.code == 2
        assert words in done.err
        assert f"line {len(text.splitlines())}, " in done.err
    (tmp_path / "start.txt").write_text("0.01 0.002\n0.002 0.01\n")
    assert command("check", path).code == 0


def test_a_good_study_passes_and_its_code_is_not_run(command, tmp_path):
    path = study(tmp_path, motion="raise SystemExit('was run')\ndef propagate(): pass\n")
    for name in ("check", "plan"):
        done = command(name, path)
        assert done.code == 0, done.err
        assert "was run" not in done.out + done.err
        assert max(map(len, done.out.replace(str(path), "STUDY").splitlines())) <= 80


def test_a_budget_that_is_too_small(command, tmp_path):
    done = command("plan", study(tmp_path, "budget = 5\n" + GOOD))
    assert done.code == 2
    assert "the budget is 5" in done.err
