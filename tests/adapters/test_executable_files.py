"""Files of a program in every arrangement: numbered, linked, around cards, filled by jinja."""

import numpy as np
import pytest
from adapters_samples import build, context, oscillator_batch

from nipc.adapters import load_adapter
from nipc.errors import InputError, PropagatorError
from nipc.runs.propagator import Batch

TABLE = {"file": "table", "columns": (1, 2)}
FORCING = {"file": "forcing", "step": 1.0}


def script(folder, text):
    program = folder / "program"
    program.write_text("#!/bin/sh\n" + text)
    program.chmod(0o755)


def made(folder, **more):
    return build("executable", folder, command=("program",), **{"forcing": FORCING} | more)


def rows_of(states):
    """What "cat" of rows printed with %.3f brings."""
    return np.round(states, 3).tolist()


def test_outputs_of_several_files_meet_in_one_state(tmp_path):
    script(tmp_path, "cat a a a > x.out; cat b b b b >> v.out\n")
    propagator = made(
        tmp_path, format="%.3f",
        inputs=({"file": "a", "text": "$x\n"}, {"file": "b", "text": "$v\n"},
                {"file": "v.out", "text": "velocity in m/s\n\n"}),
        output=({"file": "x.out", "columns": (1,), "components": ("x",), "first_row": False},
                {"file": "v.out", "columns": (1,), "components": ("v",), "skip": 1}),
    )  # fmt: skip
    batch = oscillator_batch(1, times=4)
    found = propagator.propagate(batch).states[0]
    with pytest.raises(PropagatorError, match=r"x\.out has 3 rows; 6 are expected"):
        propagator.propagate(oscillator_batch(1, times=7))
    (expected,) = rows_of(batch.states)
    assert found[1:].tolist() == [expected] * 3
    # x keeps the start that was given, v has a row for it
    assert found[0].tolist() == [batch.states[0, 0], expected[1]]


def test_numbered_files_of_a_batch(tmp_path):
    script(tmp_path, "for i in 1 2 3; do head -n 1 force.$i > t.$i; cat card.$i >> t.$i; done\n")
    propagator = made(
        tmp_path, batch=True, format="%.3f",
        inputs=({"file": "card.$run", "text": "$x $run\n$x $v\n$start $end\n"},),
        forcing={"file": "force.$run", "step": 1.0},
        output={"file": "t.$run", "columns": (1, 2)},
    )  # fmt: skip
    batch = oscillator_batch(3, times=4)
    found = propagator.propagate(batch).states
    xi = np.round(batch.forcing.table(batch.times[:1])[:, 0, 0], 3)
    for i in range(3):
        x, v = np.round(batch.states[i], 3)
        assert found[i].tolist() == [[1.0, xi[i]], [x, i + 1], [x, v], [1.0, 4.0]]


def test_cards_between_a_head_and_a_tail(tmp_path):
    """The deck itself is the table: two lines of head, a comment at its tail."""
    script(tmp_path, "cp deck table\n")
    card = {
        "file": "deck", "text": "$x $v\n" * 2, "repeat": True,
        "head": "$n_runs cards from $start\nto $end\n", "tail": "# end of $n_runs cards\n",
    }  # fmt: skip
    propagator = made(
        tmp_path, batch=True, format="%.3f", inputs=(card,), output=TABLE | {"skip": 2}
    )
    batch = oscillator_batch(3, times=2)
    found = propagator.propagate(batch).states
    assert found.tolist() == [[row, row] for row in rows_of(batch.states)]


def test_jinja_for_one_run_with_its_forcing(tmp_path):
    script(tmp_path, "cp deck table\n")
    deck = {
        "file": "deck", "language": "jinja",
        "text": "{% for t in times %}{{ number(t) }} "
        "{{ '%8.3f' | format(forcing[loop.index0][1]) }}\n{% endfor %}",
    }  # fmt: skip
    propagator = made(tmp_path, format="%.3f", inputs=(deck,), output=TABLE)
    batch = oscillator_batch(1, times=4)
    found = propagator.propagate(batch).states[0]
    xi = np.round(batch.forcing.table(batch.times)[0, :, 0], 3)
    np.testing.assert_array_equal(found, np.stack([batch.times, xi], axis=1))


def test_a_link_a_copy_and_a_headed_table_of_noise(tmp_path):
    (tmp_path / "fields").mkdir()
    (tmp_path / "fields" / "map.dat").write_text("7\n")
    (tmp_path / "gains.dat").write_text("5\n")
    lines = (
        "test -L map.dat || exit 3", "test -L gains.dat && exit 4",
        'read mark t name < forcing; test "$mark $t $name" = "# t push1" || exit 5',
        'echo "$(cat map.dat) $(cat gains.dat)" > table',
    )  # fmt: skip
    script(tmp_path, "\n".join(lines) + "\n")
    propagator = made(
        tmp_path, links=("fields/map.dat",), files=("gains.dat",),
        forcing=FORCING | {"header": True}, output=TABLE | {"first_row": False},
    )  # fmt: skip
    found = propagator.propagate(oscillator_batch(1, times=2)).states[0]
    assert found[1].tolist() == [7.0, 5.0]
    assert (tmp_path / "fields" / "map.dat").read_text() == "7\n"


def test_a_restart_goes_on_where_the_run_was(compiled, tmp_path):
    """From any state and time: a run of the Fortran program in two parts is the run in one."""
    deck = (
        "&run n_times = $n_times, n_forcing = $n_forcing, n_runs = 1, style = 'table' /\n$times\n"
    )
    propagator = build(
        "executable", tmp_path, command=(str(compiled("oscillator.f90")),),
        inputs=({"file": "run.nml", "text": deck + "$times\n"},
                {"file": "cards.txt", "text": "$x$v$k\n"}),
        forcing={"file": "forcing.dat", "step": 0.025},
        output={"file": "track.out", "columns": (3, 4), "time_column": 2, "time_tolerance": 1e-6},
        formats={"x": "%24.16e", "v": "%24.16e", "k": "%12.9f"},
    )  # fmt: skip
    batch = oscillator_batch(1)
    whole = propagator.propagate(batch).states
    rest = Batch(whole[:, 3], batch.times[3:], batch.forcing, batch.parameters)
    np.testing.assert_allclose(propagator.propagate(rest).states, whole[:, 3:], atol=1e-9)


HOSTILE = {
    "a file through jinja": ("jinja", "{% include '/etc/passwd' %}", "no loader"),
    "a module through jinja": ("jinja", "{% import 'os' as os %}{{ os }}", "no loader"),
    "a class through jinja": ("jinja", "{{ ''.__class__.__mro__ }}", "unsafe"),
    "a loop without end": ("jinja", "{% for i in range(10 ** 9) %}x{% endfor %}", "[Rr]ange"),
    "an attribute": ("plain", "${x.__class__}", "a lone \\$"),
    "a command": ("plain", "$(rm -r ..)", "a lone \\$"),
}


@pytest.mark.parametrize("what", HOSTILE)
def test_a_hostile_template_does_nothing(what, tmp_path):
    language, text, said = HOSTILE[what]
    script(tmp_path, "cp deck table\n")
    deck = {"file": "deck", "text": text, "language": language}
    with pytest.raises((InputError, PropagatorError), match=said):
        made(tmp_path, inputs=(deck,), output=TABLE).propagate(oscillator_batch(1))
    assert sorted(p.name for p in tmp_path.rglob("*")) in (
        ["program"], ["program", "runs"],
    )  # fmt: skip


def test_shell_words_of_a_study_stay_words(tmp_path):
    """No shell reads the command, its arguments or the environment."""
    script(tmp_path, 'printf "%s\\n" "$1" "$WORD" > words; echo 1 2 > table; cp words "$OUT"\n')
    hostile = "$(touch made); `touch made` > made"
    adapter = load_adapter("executable")
    settings = adapter.Settings.model_validate({
        "command": ("program", hostile), "forcing": FORCING,
        "environment": {"WORD": hostile, "OUT": str(tmp_path / "seen")},
        "output": TABLE | {"first_row": False},
    })  # fmt: skip
    adapter.build(settings, context(tmp_path)).propagate(oscillator_batch(1, times=2))
    assert (tmp_path / "seen").read_text() == f"{hostile}\n{hostile}\n"
    assert not list(tmp_path.rglob("made"))


def test_a_folder_that_a_program_replaces_by_a_link_is_not_followed(tmp_path):
    outside = tmp_path / "outside"
    outside.mkdir()
    (outside / "table").write_text("1 2\n")
    script(tmp_path, f"rm -r deep; ln -s {outside} deep\n")
    propagator = made(
        tmp_path, inputs=({"file": "deep/deck", "text": "$x"},),
        output={"file": "deep/table", "columns": (1, 2), "first_row": False},
    )  # fmt: skip
    with pytest.raises(PropagatorError, match="leads out of the run's scratch folder"):
        propagator.propagate(oscillator_batch(1, times=2))
    assert (outside / "table").read_text() == "1 2\n"
