"""The command line as a newcomer meets it."""

from __future__ import annotations

import json
import subprocess
import sys

import pytest


def nipc_command(*words: str) -> subprocess.CompletedProcess[str]:
    return subprocess.run(
        [sys.executable, "-m", "nipc", *words], capture_output=True, text=True, timeout=180
    )


@pytest.mark.parametrize("command", ["check", "plan", "run", "report", "status", "new"])
def test_every_command_has_help_within_eighty_columns(command):
    done = nipc_command(command, "--help")
    assert done.returncode == 0
    assert len(done.stdout) > 200
    assert max(map(len, done.stdout.splitlines())) <= 80


@pytest.mark.parametrize("flavour", ["function", "ode"])
def test_a_new_study_runs_as_it_is(tmp_path, flavour):
    folder = tmp_path / "fresh"
    assert nipc_command("new", str(folder), "--flavour", flavour).returncode == 0
    study = str(folder / "study.toml")
    assert nipc_command("check", study).returncode == 0
    planned = json.loads(nipc_command("plan", study, "--json").stdout)
    assert planned["total_runs"] == planned["design_runs"] + planned["check_runs"]
    done = nipc_command("run", study, "--json", "--jobs", "2")
    assert done.returncode == 0, done.stderr
    summary = json.loads(done.stdout)
    assert summary["propagator_runs"] == planned["total_runs"]
    assert (folder / "study.work" / "page.html").stat().st_size > 50_000
    # a bounded oscillator that starts at 0.1 and is pushed little stays within 0.15
    assert summary["quantities"]["x"]["survival_probability"] > 0.99
    status = json.loads(nipc_command("status", study, "--json").stdout)
    assert status["done"] == planned["total_runs"]
    shown = nipc_command("run", study, "--no-page")
    assert max(map(len, shown.stdout.splitlines()[:-3])) <= 80


def test_new_does_not_overwrite(tmp_path):
    (tmp_path / "mine.txt").write_text("keep")
    done = nipc_command("new", str(tmp_path))
    assert done.returncode == 2
    assert "not empty" in done.stderr
    assert not (tmp_path / "study.toml").exists()


def test_wrong_commands_and_files(tmp_path):
    assert nipc_command("nonsense").returncode == 2
    done = nipc_command("run", str(tmp_path / "none.toml"))
    assert done.returncode == 2
    assert "cannot read the study" in done.stderr
    assert "Traceback" not in done.stderr
