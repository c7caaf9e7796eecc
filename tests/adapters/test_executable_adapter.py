"""A Fortran program as a propagator, in each form of its files, against the exact motion."""

import os
import stat
import time

import numpy as np
import pytest
from adapters_samples import build, context, one_by_one, oscillator, oscillator_batch

from nipc.adapters import load_adapter
from nipc.errors import InputError, PropagatorError
from nipc.problem.noise import Forcing
from nipc.runs.propagator import Batch
from nipc.runs.unit import Unit, call

NAMELIST = """&run n_times = $n_times, n_forcing = $n_forcing, n_runs = $n_runs, style = '{}' /
$times
"""
CARD = "$x$v$k\n"
FORMATS = {"x": "%24.16e", "v": "%24.16e", "k": "%12.9f"}
ACCURACY = 1e-6  # Runge-Kutta of order four: T h^4 / 120 times a fifth derivative of about 3
PLAIN = {"file": "track.out", "columns": (3, 4), "time_column": 2, "time_tolerance": 1e-6}


def settings(program, style="table", output=None, **more):
    card = {"file": "cards.txt", "text": CARD, "repeat": more.get("batch", False)}
    return {
        "command": (str(program),),
        "inputs": ({"file": "run.nml", "text": NAMELIST.format(style)}, card),
        "forcing": {"file": "forcing.dat", "step": 0.025},
        "output": PLAIN if output is None else output,
        "formats": FORMATS,
        **more,
    }


@pytest.fixture
def program(compiled):
    return compiled("oscillator.f90")


def batch_of(n, **more):
    """Stiffness is given with nine decimals only: take values that have no more."""
    batch = oscillator_batch(n, **more)
    return Batch(batch.states, batch.times, batch.forcing, np.round(batch.parameters, 9))


FORMS = {
    "table": ("table", PLAIN, ACCURACY),
    "exponents with D": ("table", PLAIN | {"comment": "*"}, ACCURACY),
    "commas": ("comma", PLAIN, ACCURACY),
    "touching columns": ("touch", PLAIN | {"widths": (2, 9, 10, 10)}, ACCURACY),
    "rows that match": ("table", PLAIN | {"rows": "matching"}, ACCURACY),
    "two tables": (
        "table",
        (
            PLAIN | {"columns": (4,), "components": ("v",)},
            {"file": "track.out", "columns": (3,), "components": ("x",)},
        ),
        ACCURACY,
    ),
    "pattern": (
        "final",
        {"file": "track.out", "pattern": r"X =\s*(\S+)\s+V =\s*(\S+)", "rows": "final"},
        ACCURACY,
    ),
}


@pytest.mark.parametrize("form", FORMS)
def test_each_form_of_output(form, program, tmp_path):
    style, output, accuracy = FORMS[form]
    batch = batch_of(3)
    propagator = build("executable", tmp_path, **settings(program, style, output))
    states, ended = one_by_one(propagator, batch)
    np.testing.assert_allclose(states, oscillator(batch), atol=accuracy)
    assert np.isnan(ended).all()
    assert list((tmp_path / "runs").iterdir()) == []


def test_fortran_exponents_in_the_input(program, tmp_path):
    batch = batch_of(2)
    more = {"fortran_exponent": True, "formats": FORMATS | {"k": "%12.6e"}}
    found = [
        one_by_one(build("executable", tmp_path, **(settings(program) | m)), batch)[0]
        for m in ({}, more)
    ]
    np.testing.assert_allclose(found[0], found[1], atol=1e-5)


@pytest.mark.parametrize("numbered", [False, True])
def test_one_start_of_the_program_makes_many_runs(numbered, program, tmp_path):
    batch = batch_of(7)
    output = PLAIN | ({"run_column": 1} if numbered else {})
    propagator = build("executable", tmp_path, **settings(program, output=output, batch=True))
    assert propagator.vectorised
    np.testing.assert_allclose(propagator.propagate(batch).states, oscillator(batch), atol=ACCURACY)


def test_jinja_writes_a_whole_batch(program, tmp_path):
    batch = batch_of(3)
    deck = {
        "file": "cards.txt", "language": "jinja",
        "text": '{% for r in runs %}{{ "%24.16e%24.16e%12.9f" | format(r.x, r.v, r.k) }}\n'
        "{% endfor %}",
    }  # fmt: skip
    chosen = settings(program, batch=True)
    chosen["inputs"] = (chosen["inputs"][0], deck)
    found = build("executable", tmp_path, **chosen).propagate(batch)
    np.testing.assert_allclose(found.states, oscillator(batch), atol=ACCURACY)


def rising(n=2):
    """The first run passes x = 1 between t = 2 and 2.5; the others stay near rest."""
    batch = batch_of(n)
    states = np.full((n, 2), 1e-3)
    states[0] = [0.0, 1.0 / np.sin(1.2)]
    quiet = Forcing(batch.forcing.model, 0.0 * batch.forcing.coefficients)
    return Batch(states, batch.times, quiet, np.ones((n, 1)))


def test_a_lost_particle_is_no_failure(program, tmp_path):
    batch = rising()
    propagator = build("executable", tmp_path, **settings(program, "lost", lost_exit_code=7))
    answer = call(propagator, batch.take(slice(0, 1)), Unit(np.array([0])), None)
    assert answer.problems == (None,)
    assert answer.ended.tolist() == [2.25]  # midway between two output times
    assert np.isfinite(answer.states[0]).all(axis=1).tolist() == [True] * 3 + [False] * 4


def test_a_particle_lost_in_a_batch(program, tmp_path):
    output = PLAIN | {"run_column": 1, "short_is_lost": True}
    chosen = settings(program, "lost", output, batch=True)
    answer = call(build("executable", tmp_path, **chosen), rising(3), Unit(np.arange(3)), None)
    assert answer.problems == (None,) * 3
    assert answer.ended[0] == 2.25
    assert np.isnan(answer.ended[1:]).all()


def failing(program, tmp_path, style="table", output=None, batch=None, **more):
    propagator = build("executable", tmp_path, **settings(program, style, output, **more))
    with pytest.raises(PropagatorError) as caught:
        propagator.propagate(batch_of(1) if batch is None else batch)
    return str(caught.value)


def test_what_a_program_does_wrong_is_told(program, tmp_path):
    def said(*given, **more):
        return failing(program, tmp_path, *given, **more)

    assert said("crash") == (
        "the program ended with exit code 3: STOP 3\nthe magnet is not powered"
    )
    assert said("half") == "track.out has 3 rows; 7 are expected, one an output time and the start"
    assert said(output=PLAIN | {"file": "other.out"}) == "the program wrote no file other.out"
    assert said(output=PLAIN | {"columns": (3, 9)}) == (
        "track.out, line 1, field 9: the line has only 4 fields"
    )
    assert said("touch").startswith("track.out, line ")
    assert said(output=PLAIN | {"time_column": 1}).startswith(
        "track.out, row 2: its time is 1; 1.5 is expected"
    )
    wide = batch_of(1)
    wide = Batch(wide.states, wide.times, wide.forcing, np.full((1, 1), 1234.5))
    assert said(batch=wide) == (
        "k = 1234.5 does not fit into its field: %12.9f prints '1234.500000000', 14 characters"
    )
    assert list((tmp_path / "runs").iterdir()) == []


def test_the_folder_of_a_failed_run_can_be_kept(program, tmp_path):
    said = failing(program, tmp_path, "crash", keep_failed=True)
    (kept,) = (tmp_path / "runs").iterdir()
    assert said.endswith(f"(kept in {kept.resolve()})")
    assert {"run.nml", "cards.txt", "forcing.dat"} <= {f.name for f in kept.iterdir()}


def test_a_program_that_never_ends_is_stopped(program, tmp_path):
    began = time.monotonic()
    assert failing(program, tmp_path, "hang", time_limit=0.3) == (
        "the program did not end within 0.3 s and was stopped"
    )
    assert time.monotonic() - began < 10


def script(folder, text):
    file = folder / "program"
    file.write_text("#!/bin/sh\n" + text)
    file.chmod(file.stat().st_mode | stat.S_IXUSR)
    return file


def test_what_a_stopped_program_has_started_is_stopped_too(tmp_path):
    script(tmp_path, f"sleep 60 & echo $! > {tmp_path}/child; wait\n")
    propagator = build(
        "executable", tmp_path, command=("program",), time_limit=0.5, output=PLAIN,
        forcing={"file": "f", "step": 1.0},
    )  # fmt: skip
    with pytest.raises(PropagatorError, match="did not end"):
        propagator.propagate(batch_of(1))
    child = int((tmp_path / "child").read_text())
    for _ in range(100):
        if not os.path.exists(f"/proc/{child}") or "Z" in _state(child):
            break
        time.sleep(0.02)
    else:
        os.kill(child, 9)
        raise AssertionError("the child is left")


def _state(pid):
    try:
        with open(f"/proc/{pid}/stat") as file:
            return file.read().rsplit(")", 1)[1].split()[0]
    except OSError:
        return "Z"


def test_standard_input_and_output_environment_and_working_files(tmp_path):
    """A filter: the deck on standard input, the table on standard output, a file beside it."""
    (tmp_path / "data").mkdir()
    (tmp_path / "data" / "offset.txt").write_text("10\n")
    script(tmp_path, 'read x v; o=$(cat offset.txt); echo "$x $SCALE"; echo "$v $o"\n')
    propagator = build(
        "executable", tmp_path, command=("program",), format="%.3f", stdin="deck", stdout="table",
        inputs=({"file": "deck", "text": "$x $v\n"},), environment={"SCALE": "5"},
        files=("data/offset.txt",), forcing={"file": "f", "step": 1.0},
        output={"file": "table", "columns": (1, 2), "first_row": False},
    )  # fmt: skip
    batch = batch_of(1, times=3)
    found = propagator.propagate(batch).states[0]
    x, v = np.round(batch.states[0], 3)
    assert found[1:].tolist() == [[x, 5], [v, 10]]
    assert found[0].tolist() == batch.states[0].tolist()


def test_the_clock_of_the_program(tmp_path):
    script(tmp_path, "cp times table\n")
    propagator = build(
        "executable", tmp_path, command=("program",), time_offset=100.0, time_scale=60.0,
        inputs=({"file": "times", "text": "$times\n"},), forcing={"file": "f", "step": 1.0},
        format="%.6f", output={"file": "table", "columns": (1, 1), "time_column": 1},
    )  # fmt: skip
    found = propagator.propagate(batch_of(1)).states[0, :, 0]
    assert found.tolist() == (100 + 60 * np.linspace(1, 4, 7)).tolist()


@pytest.mark.parametrize("name", ["../out", "/tmp/out", "a/../../out", "..", "", "C:x", "a\nb"])
@pytest.mark.parametrize("place", ["input", "output", "forcing", "stdout"])
def test_no_file_name_leaves_the_scratch_folder(name, place):
    chosen = {"command": ("p",), "output": PLAIN}
    chosen |= {
        "input": {"inputs": ({"file": name, "text": ""},)},
        "output": {"output": PLAIN | {"file": name}},
        "forcing": {"forcing": {"file": name, "step": 1.0}},
        "stdout": {"stdout": name},
    }[place]
    with pytest.raises(ValueError, match="scratch folder"):
        load_adapter("executable").Settings.model_validate(chosen)


def test_nothing_is_written_through_a_link(tmp_path):
    """A program that lays a link where its output is read cannot lead the reader outside."""
    (tmp_path / "secret").write_text("1 2\n")
    script(tmp_path, f"ln -s {tmp_path}/secret table\n")
    propagator = build(
        "executable", tmp_path, command=("program",), forcing={"file": "f", "step": 1.0},
        output={"file": "table", "columns": (1, 2)},
    )  # fmt: skip
    with pytest.raises(PropagatorError, match="leads out of the run's scratch folder"):
        propagator.propagate(batch_of(1))


def test_a_template_cannot_reach_into_python(program, tmp_path):
    deck = {
        "file": "cards.txt", "language": "jinja",
        "text": "{{ number.__class__.__init__.__globals__ }}",
    }  # fmt: skip
    chosen = settings(program)
    chosen["inputs"] = (chosen["inputs"][0], deck)
    with pytest.raises(PropagatorError, match="unsafe"):
        build("executable", tmp_path, **chosen).propagate(batch_of(1))


REFUSED = {
    "a name": ({"inputs": ({"file": "a", "text": "$y"},)}, r"unknown \$y; known: \$end, \$k"),
    "a dollar": ({"inputs": ({"file": "a", "text": "5 $ a"},)}, "a lone \\$"),
    "jinja": (
        {"inputs": ({"file": "a", "text": "\n{% for %}", "language": "jinja"},)},
        "template a, line 2",
    ),
    "jinja's name": (
        {"inputs": ({"file": "a", "text": "{{ y }}", "language": "jinja"},)}, "unknown \\$y",
    ),
    "a template": (
        {"inputs": ({"file": "a", "template": "gone.txt"},)}, "cannot read the template 'gone.txt'",
    ),
    "once in a batch": (
        {"batch": True, "inputs": ({"file": "a", "text": "$x"},)}, "only a card",
    ),
    "columns": ({"output": PLAIN | {"columns": (3,)}}, "reads 1 numbers, and there are 2 state"),
    "no noise": ({"forcing": None}, "the program is not given them"),
    "twice": ({"output": (PLAIN, PLAIN)}, "'x' is read twice"),
    "nowhere": ({"output": PLAIN | {"columns": (3,), "components": ("x",)}}, "v is read nowhere"),
    "unknown": ({"output": PLAIN | {"components": ("x", "y")}}, "'y' is no state component"),
    "files": ({"files": ("gone.dat",)}, r"files: there is no file 'gone\.dat'"),
    "formats": ({"formats": {"y": "%f"}}, "formats: there is no 'y' to print"),
    "program": ({"command": ("no-such-program",)}, "there is no program 'no-such-program'"),
}  # fmt: skip


@pytest.mark.parametrize("what", REFUSED)
def test_what_cannot_work_is_refused_before_anything_runs(what, program, tmp_path):
    adapter = load_adapter("executable")
    change, said = REFUSED[what]
    chosen = adapter.Settings.model_validate(settings(program) | change)
    with pytest.raises(InputError, match=said):
        adapter.check(chosen, context(tmp_path))


MALFORMED = {
    "format": ({"format": "%s"}, "does not print one number"),
    "two formats": ({"format": "%e %e"}, "does not print one number"),
    "both": ({"inputs": ({"file": "a", "text": "", "template": "b"},)}, "one of template and text"),
    "same name": ({"stdin": "gone"}, "stdin = 'gone' is none of the input files"),
    "twice": ({"files": ("a/run.nml",)}, "two things would be written to 'run.nml'"),
    "pattern": ({"output": {"file": "o", "pattern": "("}}, "not a regular expression"),
    "no group": ({"output": {"file": "o", "pattern": "x"}}, "no group"),
    "run": ({"output": PLAIN | {"file": "o$run"}}, "needs batch = true"),
    "other dollar": ({"output": PLAIN | {"file": "o$x"}}, "the only \\$"),
    "head": ({"inputs": ({"file": "a", "text": "", "head": "h"},)}, "need repeat = true"),
    "matching": ({"output": {"file": "o", "columns": (1, 2), "rows": "matching"}}, "time_column"),
    "lost": ({"batch": True, "lost_exit_code": 7}, "short_is_lost"),
    "column": ({"output": PLAIN | {"columns": (0, 1)}}, "greater than or equal to 1"),
}


@pytest.mark.parametrize("what", MALFORMED)
def test_settings_that_cannot_be(what, program):
    change, said = MALFORMED[what]
    with pytest.raises(ValueError, match=said):
        load_adapter("executable").Settings.model_validate(settings(program) | change)
