"""The command line as a newcomer meets it."""

from __future__ import annotations

import json
import shlex
import subprocess
import sys

import pytest

import nipc

COMMANDS = ["check", "plan", "probe", "run", "report", "status", "new"]


def widest(text: str, *paths: object) -> int:
    """The longest line; a path is as long as its user made it, and is not counted."""
    lines = text.splitlines()
    return max(len(line) for line in lines if not any(str(path) in line for path in paths))


@pytest.mark.parametrize("name", COMMANDS)
def test_every_command_has_help_within_eighty_columns(command, name):
    done = command(name, "--help")
    assert done.code == 0
    assert name in done.out
    assert widest(done.out) <= 80


def test_help_lists_the_commands_and_where_to_begin(command):
    done = command("--help")
    assert done.code == 0
    assert all(name in done.out for name in COMMANDS)
    assert "nipc new FOLDER" in done.out
    assert widest(done.out) <= 80


def test_help_and_import_load_nothing_heavy():
    """What makes them quick, without a clock: numpy alone takes longer than all else together."""
    code = (
        "import sys; sys.argv = ['nipc', '--help']\n"
        "import nipc, nipc.cli\n"
        "try:\n    nipc.cli.main()\nexcept SystemExit:\n    pass\n"
        "heavy = {'numpy', 'scipy', 'pydantic', 'xarray', 'matplotlib', 'chaospy', 'sklearn'}\n"
        "print(sorted(heavy & set(sys.modules)), file=sys.stderr)\n"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, timeout=60)
    assert done.stderr.strip() == "[]"
    assert "check" in done.stdout


def test_the_module_is_the_command():
    done = subprocess.run(
        [sys.executable, "-m", "nipc", "--version"], capture_output=True, text=True, timeout=60
    )
    assert (done.returncode, done.stdout) == (0, f"nipc {nipc.__version__}\n")


@pytest.mark.parametrize("flavour", ["function", "ode", "executable"])
def test_a_new_study_runs_as_it_is(command, tmp_path, flavour):
    folder = tmp_path / "fresh"
    assert command("new", folder, "--flavour", flavour).code == 0
    study = folder / "study.toml"
    checked = command("check", study)
    assert checked.code == 0
    assert f"adapter {flavour}" in checked.out
    assert "x = 0.1 ± 0.01 m\n" in checked.out.replace(" " * 2, "").replace(" \n", "\n")
    planned = json.loads(command("plan", study, "--json").out)
    assert planned["total_runs"] == planned["design_runs"] + planned["check_runs"]
    done = command("run", study, "--json", "--jobs", "2", "--no-page")
    assert done.code == 0, done.err
    assert done.err == ""
    summary = json.loads(done.out)
    assert summary["propagator_runs"] == planned["total_runs"]
    assert not (folder / "study.work" / "page.html").exists()
    # the start and the stiffness alone give a standard deviation of x of about 0.01 |cos t| at
    # t = 6, a kick response of 0.005 sqrt(t/2 - sin(2 t)/4) that of the force
    expected = ((0.01 * 0.9602) ** 2 + 0.005**2 * (3.0 - 0.25 * -0.5366)) ** 0.5
    assert summary["quantities"]["x"]["std"] == pytest.approx(expected, rel=0.05)
    assert json.loads(command("status", study, "--json").out)["done"] == planned["total_runs"]


def test_what_a_run_shows(command, tmp_path):
    command("new", tmp_path / "a", "--flavour", "ode")
    study = tmp_path / "a" / "study.toml"
    text = study.read_text().replace("end = 6.0", "end = 1.0").replace("std = 0.01", "std = 0.02")
    study.write_text(text)
    done = command("run", study)
    assert done.code == 0, done.err
    work = tmp_path / "a" / "study.work"
    assert widest(done.out, tmp_path) <= 80
    for file in ("page.html", "results.nc", "summary.json"):
        assert str(work / file) in done.out
        assert (work / file).stat().st_size > 1000
    # x at t = 1 is 0.1 cos 1 +- 0.02 cos 1 from the start and 0.005 sqrt(1/2 - sin(2)/4) from
    # the force: 0.054 +- 0.011
    line = next(row for row in done.out.splitlines() if row.startswith(" x "))
    assert line.split()[1:5] == ["0.054", "±", "0.011", "m"]
    assert line.split()[-2:] == ["1", "s"]
    assert "design: " in done.err
    quiet = command("run", study, "--quiet")
    assert (quiet.code, quiet.out, quiet.err) == (0, "", "")
    (work / "page.html").unlink()
    assert command("report", study, "--figures").code == 0
    assert (work / "page.html").stat().st_size > 50_000
    kinds = {path.suffix for path in (work / "figures").rglob("*.*")}
    assert {".png", ".svg", ".pdf"} <= kinds
    shown = command("status", study).out
    assert "nobody at work" in shown
    assert widest(shown) <= 80


def test_nothing_but_a_path_of_the_user_is_wider_than_eighty_columns(
    command, tmp_path, monkeypatch
):
    """With a short relative path only the three places of the results may be long."""
    monkeypatch.chdir(tmp_path)
    file = "my study/study.toml"
    shown = command("new", "my study", "--flavour", "executable").out
    text = (tmp_path / file).read_text()
    (tmp_path / file).write_text(text.replace("end = 6.0", "end = 1.0"))
    for words in (("check",), ("plan",), ("run", "--jobs", "2"), ("status",)):
        done = command(words[0], file, *words[1:])
        assert done.code == 0, done.err
        shown += done.out + done.err
    places = [
        line for line in shown.splitlines() if line.startswith(("page ", "data ", "summary "))
    ]
    assert len(places) == 3
    assert max(len(line) for line in shown.splitlines() if line not in places) <= 80
    # each next step is a line that a shell takes as it stands, the blank in the path included
    steps = [line[5:] for line in shown.splitlines() if "nipc " in line]
    assert len(steps) == 6
    assert all(shlex.split(step)[2] == file for step in steps), steps


def test_a_probe_finds_noise_that_is_not_heard(command, tmp_path):
    command("new", tmp_path / "a", "--flavour", "ode")
    study, motion = tmp_path / "a" / "study.toml", tmp_path / "a" / "motion.py"
    done = command("probe", study)
    assert done.code == 0, done.out
    assert "good noise force: " in done.out
    assert "LOOK" not in done.out
    assert widest(done.out, tmp_path) <= 80
    text = motion.read_text()
    assert "+ xi[0]" in text
    motion.write_text(text.replace("+ xi[0]", ""))
    done = command("probe", study, "--json")
    assert done.code == 1
    found = json.loads(done.out)
    assert not found["good"]
    assert [f["topic"] for f in found["findings"] if not f["good"]] == ["noise force"]


def test_quiet_commands_say_nothing_and_scripts_get_json(command, tmp_path):
    study = tmp_path / "a" / "study.toml"
    shown = command("new", tmp_path / "a", "--flavour", "ode", "--quiet")
    assert (shown.code, shown.out, shown.err) == (0, "", "")
    shown = command("check", study, "--quiet")
    assert (shown.code, shown.out, shown.err) == (0, "", "")
    study.write_text(study.read_text().replace("end = 6.0", "end = 1.0"))
    assert command("run", study, "--quiet", "--no-page").code == 0
    shown = command("report", study, "--quiet")
    assert (shown.code, shown.out, shown.err) == (0, "", "")
    page = json.loads(command("report", study, "--json").out)
    assert page == {"page": str(tmp_path / "a" / "study.work" / "page.html")}


def test_new_does_not_overwrite(command, tmp_path):
    (tmp_path / "mine.txt").write_text("keep")
    done = command("new", tmp_path)
    assert done.code == 2
    assert "not empty" in done.err
    assert [p.name for p in tmp_path.iterdir()] == ["mine.txt"]


def test_new_where_nothing_can_be_made(command, tmp_path):
    (tmp_path / "file").write_text("")
    done = command("new", tmp_path / "file" / "study")
    assert done.code == 2
    assert "cannot write to" in done.err


@pytest.mark.parametrize(
    ("words", "told"),
    [
        (["nonsense"], "No such command 'nonsense'"),
        (["run"], "Missing argument 'STUDY'"),
        (["run", "STUDY", "--jobs", "many"], "valid int"),
        (["run", "STUDY", "--jobs", "0"], "give 1 or more, or -1"),
        (["new", "FOLDER", "--flavour", "magic"], "'executable'"),
        (["run", "none.toml"], "none.toml: cannot read the study"),
        (["check", "."], "cannot read the study: Is a directory"),
        (["status", "STUDY"], "nothing of this study has been run. Next: nipc run"),
        (["report", "STUDY"], "`nipc run` makes it"),
    ],
)
def test_wrong_commands_and_files(command, tmp_path, monkeypatch, words, told):
    command("new", tmp_path / "here")
    monkeypatch.chdir(tmp_path)
    done = command(*(word.replace("STUDY", "here/study.toml") for word in words))
    assert done.code == 2
    assert told in " ".join(done.err.split())
    assert done.out == ""


def test_a_terminal_without_the_letters_still_shows_the_rest(tmp_path):
    code = "from nipc.cli import main; import sys; sys.argv = ['nipc', *sys.argv[1:]]; main()"

    def call(*words: object) -> subprocess.CompletedProcess[str]:
        return subprocess.run(
            [sys.executable, "-X", "utf8=0", "-c", code, *map(str, words)],
            capture_output=True, text=True, timeout=60, env={"PYTHONIOENCODING": "ascii"},
        )  # fmt: skip

    assert call("new", tmp_path / "a").returncode == 0
    shown = call("check", tmp_path / "a" / "study.toml")
    assert shown.returncode == 0, shown.stderr
    assert "x = 0.1 ? 0.01 m" in shown.stdout
