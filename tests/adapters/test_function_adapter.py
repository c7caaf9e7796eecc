"""Python functions as propagators: one run, batches, endings, and each way of being wrong."""

import re
import sys
from textwrap import dedent

import numpy as np
import pytest
from adapters_samples import build, context, one_by_one, oscillator, oscillator_batch

from nipc.adapters import load_adapter
from nipc.errors import InputError, PropagatorError
from nipc.runs.unit import Unit, call

SINGLE = """
    from scipy.integrate import solve_ivp
    def propagate(x0, times, forcing, parameters):
        def rates(t, x):
            return [x[1], -parameters[0] * x[0] + forcing(t)[0]]
        return solve_ivp(rates, (times[0], times[-1]), x0, "DOP853", times, rtol=1e-11,
                         atol=1e-13).y.T
"""
BATCH = """
    import numpy as np
    def propagate(x0, times, forcing, parameters):
        assert forcing(times[0]).shape == (len(x0), 1)
        return np.repeat(x0[:, None], len(times), axis=1) + parameters[:, None]
"""


def write(folder, text, name="motion.py"):
    (folder / name).write_text(dedent(text))


def test_one_run_at_a_time(tmp_path):
    write(tmp_path, SINGLE)
    batch = oscillator_batch()
    propagator = build("function", tmp_path, function="motion:propagate")
    states, ended = one_by_one(propagator, batch)
    np.testing.assert_allclose(states, oscillator(batch), atol=1e-9)
    assert np.isnan(ended).all()
    assert not propagator.vectorised


def test_a_batch_at_once(tmp_path):
    write(tmp_path, BATCH)
    batch = oscillator_batch()
    propagator = build("function", tmp_path, function="motion:propagate", batch=True)
    found = propagator.propagate(batch)
    expected = np.repeat(batch.states[:, None], 7, axis=1) + batch.parameters[:, None]
    assert found.states.tolist() == expected.tolist()
    assert propagator.vectorised


@pytest.mark.parametrize(
    "ending",
    [
        "raise nipc.Ended(2.3, np.outer(times[times <= 2.3], [1, 2]))",
        "return np.outer(times[times <= 2.3], [1, 2]), 2.3",
        "return np.outer(times, [1, 2]), 2.3",
    ],
)
def test_a_motion_that_ends_keeps_what_was_before(ending, tmp_path):
    write(tmp_path, f"""
        import nipc
        import numpy as np
        def propagate(x0, times, forcing, parameters):
            {ending}
    """)  # fmt: skip
    batch = oscillator_batch(1)  # times 1, 1.5, 2, 2.5, ...
    propagator = build("function", tmp_path, function="motion:propagate")
    answer = call(propagator, batch, Unit(np.array([0])), None)
    assert answer.problems == (None,)
    assert answer.ended.tolist() == [2.3]
    assert answer.states[0, :3].tolist() == [[1, 2], [1.5, 3], [2, 4]]
    assert np.isnan(answer.states[0, 3:]).all()


def test_endings_of_a_batch(tmp_path):
    write(tmp_path, """
        import numpy as np
        def propagate(x0, times, forcing, parameters):
            return np.ones((len(x0), len(times), 2)), np.array([np.nan, 2.0])
    """)  # fmt: skip
    propagator = build("function", tmp_path, function="motion:propagate", batch=True)
    answer = call(propagator, oscillator_batch(2), Unit(np.arange(2)), None)
    assert np.isfinite(answer.states[0]).all()
    assert np.isfinite(answer.states[1]).all(axis=1).tolist() == [True] * 3 + [False] * 4


@pytest.mark.parametrize(
    ("body", "said"),
    [
        ("return np.zeros((3, 2))", r"returned shape \(3, 2\); it must be \(7, 2\)"),
        ("return 'far'", "did not return numbers"),
        ("return None", r"returned shape \(\); it must be \(7, 2\)"),
        ("raise nipc.Ended(9.0)", "ended at t = 9, which is outside the run, from 1 to 4"),
        ("raise nipc.Ended(2.3)", "3 output times lie before it, but 1 states were given"),
        ("return np.zeros((9, 2)), 2.0", r"shape \(9, 2\) for a motion that ended"),
    ],
)
def test_a_wrong_answer_is_told(body, said, tmp_path):
    write(tmp_path, f"""
        import nipc
        import numpy as np
        def propagate(x0, times, forcing, parameters):
            {body}
    """)  # fmt: skip
    propagator = build("function", tmp_path, function="motion:propagate")
    with pytest.raises(PropagatorError, match=said):
        propagator.propagate(oscillator_batch(1))


def test_checking_does_not_run_the_module(tmp_path):
    write(tmp_path, "raise SystemExit('was run')")
    adapter = load_adapter("function")
    adapter.check(adapter.Settings(function="motion:propagate"), context(tmp_path))
    with pytest.raises(InputError, match=r"there is no module 'gone': neither gone\.py in"):
        adapter.check(adapter.Settings(function="gone:propagate"), context(tmp_path))
    settings = adapter.Settings(function="motion:propagate", depends=("data.txt",))
    with pytest.raises(InputError, match=r"depends: there is no file 'data\.txt'"):
        adapter.check(settings, context(tmp_path))


@pytest.mark.parametrize(
    ("text", "said"),
    [
        ("import nothing_of_this_name", "does not import: ModuleNotFoundError"),
        ("def other(): pass", "has no function 'propagate'; it has: other"),
        ("def propagate(:", "does not import: SyntaxError"),
    ],
)
def test_a_module_that_cannot_be_used_is_told_when_it_is_built(text, said, tmp_path):
    write(tmp_path, text)
    with pytest.raises(InputError, match=said):
        build("function", tmp_path, function="motion:propagate")


def test_modules_of_one_name_in_two_folders_stay_apart(tmp_path):
    answers = []
    before = list(sys.path)
    for value in (1.0, 2.0):
        folder = tmp_path / str(value)
        folder.mkdir()
        write(folder, f"VALUE = {value}", "beside.py")
        write(folder, """
            import numpy as np
            from beside import VALUE
            def propagate(x0, times, forcing, parameters):
                return np.full((len(times), 2), VALUE)
        """)  # fmt: skip
        propagator = build("function", folder, function="motion:propagate")
        answers.append(propagator.propagate(oscillator_batch(1)).states[0, 0, 0])
    assert answers == [1.0, 2.0]
    assert sys.path == before


def test_fingerprint_follows_code_and_listed_files(tmp_path):
    write(tmp_path, BATCH)
    (tmp_path / "data.txt").write_text("1")
    propagator = build("function", tmp_path, function="motion:propagate", depends=("data.txt",))
    prints = [propagator.fingerprint()]
    assert propagator.fingerprint() == prints[0]
    (tmp_path / "data.txt").write_text("2")
    prints.append(propagator.fingerprint())
    write(tmp_path, BATCH + "\n# changed")
    prints.append(propagator.fingerprint())
    assert len(set(prints)) == 3


def test_a_changed_file_is_read_again(tmp_path):
    write(tmp_path, BATCH)
    propagator = build("function", tmp_path, function="motion:propagate", batch=True)
    batch = oscillator_batch(1)
    first = propagator.propagate(batch).states
    write(tmp_path, BATCH.replace("+ parameters[:, None]", "+ 5 * parameters[:, None]"))
    assert not np.allclose(propagator.propagate(batch).states, first)


@pytest.mark.parametrize(
    "reference", ["motion", "motion:", ":f", "../motion:f", "a b:f", "motion:f()"]
)
def test_a_reference_that_is_none(reference):
    with pytest.raises(ValueError, match=re.escape("function")):
        load_adapter("function").Settings(function=reference)


def test_an_adapter_that_is_not_there():
    with pytest.raises(InputError, match=r"no adapter 'rocket'; installed: .*function.*ode"):
        load_adapter("rocket")
