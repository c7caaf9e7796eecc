"""What README.md and DEVELOPERS.md say is there, and runs as it stands."""

from __future__ import annotations

import re
import tomllib
from pathlib import Path

import numpy as np
import pytest

import nipc

ROOT = Path(__file__).parents[1]
README = (ROOT / "README.md").read_text(encoding="utf-8")
DEVELOPERS = (ROOT / "DEVELOPERS.md").read_text(encoding="utf-8")


def block(language: str) -> str:
    return re.search(rf"```{language}\n(.*?)```", README, re.DOTALL)[1]


def test_its_own_propagator_runs(tmp_path):
    (tmp_path / "motion.py").write_text(block("python"))
    (tmp_path / "study.toml").write_text(block("toml"))
    result = nipc.run(nipc.load_study(tmp_path / "study.toml"), n_jobs=2)
    # start 0.01 cos t and white force 0.02: variance 0.01^2 cos^2 t + 0.02^2 (t/2 - sin(2 t)/4)
    t = result.dataset["time"].values
    variance = (0.01 * np.cos(t)) ** 2 + 0.02**2 * (0.5 * t - 0.25 * np.sin(2 * t))
    found = result.dataset["std"].sel(quantity="x").values
    # inside the horizon the kept noise terms smooth the path; at the end they do not
    np.testing.assert_allclose(found[-1], np.sqrt(variance[-1]), rtol=1e-3)
    np.testing.assert_allclose(found, np.sqrt(variance), rtol=0.03)


@pytest.mark.parametrize("mark", ["run", "test"])
def test_its_commands_can_be_taken_out(mark):
    """As `.ci/run` does: the fenced block right after the marker."""
    lines = README.splitlines()
    place = lines.index(f"<!-- command: {mark} -->")
    assert lines[place + 1] == "```sh"
    body = lines[place + 2 : lines.index("```", place + 2)]
    assert all(line.startswith((".venv/bin/", "python3 -m venv .venv")) for line in body)


def test_the_commands_it_names_exist():
    from nipc.cli import app

    known = {command.name or command.callback.__name__ for command in app.registered_commands}
    named = set(re.findall(r"(?:`|^    |bin/)nipc ([a-z]+)", README, re.MULTILINE))
    assert named == known


def test_the_adapters_it_names_are_all_there_are():
    table = README[README.index("| your propagator is") : README.index("`examples/ring_tracking`")]
    named = re.findall(r"\| `(\w+)`", table)
    project = tomllib.loads((ROOT / "pyproject.toml").read_text())["project"]
    assert sorted(named) == sorted(project["entry-points"]["nipc.adapters"])


@pytest.mark.parametrize("text", [README, DEVELOPERS], ids=["README", "DEVELOPERS"])
def test_the_paths_they_name_exist(text):
    links = re.findall(r"\]\(([^)]+)\)", text)
    paths = re.findall(r"`((?:nipc|tests|adapters|examples|\.ci)/[\w./]*)`", text)
    assert links or paths
    made = {"examples/slot_watch/study.work/page.html"}  # by the command above it
    for name in {*links, *paths} - made:
        assert (ROOT / name).exists(), name


def test_cautions_are_there():
    told = " ".join(README[README.index("## Cautions") :].split())
    for words in ("trust horizon", "responsible authority", "licensed practice", "direct runs"):
        assert words in told
    assert "Running a study runs the program that it names" in README
