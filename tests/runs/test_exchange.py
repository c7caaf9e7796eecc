"""Runs done on a machine that nipc cannot reach."""

import csv
import shutil
import tomllib

import numpy as np
import pytest
from runs_samples import Sample, expected_states, sample_batch

from nipc.errors import InputError
from nipc.runs.engine import Engine
from nipc.runs.exchange import Names, export_runs, import_runs
from nipc.runs.ledger import Ledger

NAMES = Names(("x", "y"), ("mode",))
FINE = np.linspace(0.0, 1.0, 2001)


def elsewhere(home):
    """What somebody's script does there: reads card and forcing, integrates x' = xi by hand."""
    card = tomllib.loads((home / "card.toml").read_text())
    with (home / "forcing.csv").open() as file:
        rows = list(csv.reader(file))
    assert rows[0] == ["t", "push"]
    t, xi = np.array(rows[1:], float).T
    path = np.concatenate([[0.0], np.cumsum(np.diff(t) * 0.5 * (xi[1:] + xi[:-1]))])
    lines = ["t x y"]
    for time in card["times"]:
        x = card["start"]["x"] + np.interp(time, t, path)
        lines.append(f"{time:.12f} {x:.12E} {card['start']['y']:.12E}".replace("E", "D"))
    (home / "result.csv").write_text("\n".join(lines) + "\n")


@pytest.fixture
def exported(tmp_path):
    batch = sample_batch(7)
    folder = tmp_path / "out"
    with Ledger.open(tmp_path / "work") as ledger:
        with Engine(Sample(), ledger, backend="inline") as engine:
            engine.run(batch.take(slice(0, 2)), "arc 1")
        assert export_runs(ledger, batch, "sample", folder, NAMES, FINE) == 5
    return batch, folder, tmp_path / "work"


def test_missing_runs_go_out_and_come_back(exported):
    batch, folder, work = exported
    assert sorted(p.name for p in folder.iterdir()) == [
        *(f"run-00000{k}" for k in range(1, 6)), "runs.csv", "times.csv",
    ]  # fmt: skip
    for home in sorted(folder.glob("run-*"))[:3]:
        elsewhere(home)
    with Ledger.open(work) as ledger:
        found = import_runs(ledger, batch, "sample", folder)
        assert (found.accepted, found.absent, found.refused) == (3, 2, ())
        again = import_runs(ledger, batch, "sample", folder)
        assert (again.accepted, again.known) == (0, 3)
        # trapezoidal rule on 2,000 steps: h^2 / 12 |xi''| is below 1e-5 for three Legendre terms
        with Engine(Sample(), ledger, backend="inline") as engine:
            outcomes = engine.run(batch, "arc 1")
    assert outcomes.reused.tolist() == [True] * 5 + [False] * 2
    np.testing.assert_allclose(outcomes.states, expected_states(batch), atol=1e-5)


def test_the_table_holds_the_exact_numbers(exported):
    batch, folder, _ = exported
    with (folder / "runs.csv").open() as file:
        rows = list(csv.reader(file))
    assert rows[0] == ["run", "key", "x", "y", "push[1]", "push[2]", "push[3]", "mode"]
    wanted = np.c_[batch.states, batch.forcing.coefficients, batch.parameters][2:]
    assert np.array_equal(np.array([row[2:] for row in rows[1:]], float), wanted)


def spoil(home, old, new, name="result.csv"):
    text = (home / name).read_text()
    assert old in text
    (home / name).write_text(text.replace(old, new, 1))


@pytest.mark.parametrize(
    ("damage", "why"),
    [
        (lambda home: spoil(home, "1.000000000000 ", "1.100000000000 "), "other times"),
        (lambda home: spoil(home, "\n0.2", "\n# 0.2"), "has 5 lines of 3 numbers; right is 6"),
        (lambda home: spoil(home, "0.400000000000 ", "0.400000000000 nan "), "line 4: 4 numbers"),
        (lambda home: spoil(home, "D", "Q"), "not a line of numbers"),
        (lambda home: spoil(home, 'x" = ', 'x" = 1', "card.toml"), "not those that its key"),
        (lambda home: spoil(home, 'key = "', 'key = "0', "card.toml"), "card.toml cannot be read"),
        (lambda home: spoil(home, "[start]", "start]", "card.toml"), "card.toml cannot be read"),
        (lambda home: (home / "result.csv").write_text(""), "holds no numbers"),
        (lambda home: (home / "result.csv").write_bytes(b"\xff\xfe\x00"), "cannot be read"),
        (
            lambda home: shutil.copy(home.parent / "run-000002" / "result.csv", home),
            "starts elsewhere",
        ),
    ],
)
def test_what_does_not_fit_is_refused(damage, why, exported):
    batch, folder, work = exported
    for home in folder.glob("run-*"):
        elsewhere(home)
    damage(folder / "run-000001")
    with Ledger.open(work) as ledger:
        found = import_runs(ledger, batch, "sample", folder)
        assert found.accepted == 4
        ((name, said),) = found.refused
        assert name == "run-000001"
        assert why in said
        assert ledger.count() == 6


def test_values_that_are_not_finite_are_refused(exported):
    batch, folder, work = exported
    home = folder / "run-000003"
    elsewhere(home)
    lines = (home / "result.csv").read_text().splitlines()
    lines[-1] = "1.0 nan 0.0"
    (home / "result.csv").write_text("\n".join(lines))
    with Ledger.open(work) as ledger:
        assert "not finite" in import_runs(ledger, batch, "sample", folder).refused[0][1]


def test_a_physical_ending_comes_back(exported):
    batch, folder, work = exported
    home = folder / "run-000001"
    elsewhere(home)
    lines = (home / "result.csv").read_text().splitlines()
    (home / "result.csv").write_text("\n".join([*lines[:4], "# ended 0.5"]))  # times 0, 0.2, 0.4
    with Ledger.open(work) as ledger:
        assert import_runs(ledger, batch, "sample", folder).accepted == 1
        with Engine(Sample(), ledger, backend="inline") as engine:
            outcomes = engine.collect(batch)
    assert outcomes.ended[2] == 0.5
    assert np.isfinite(outcomes.states[2, :3]).all()
    assert np.isnan(outcomes.states[2, 3:]).all()
    (home / "result.csv").write_text("\n".join([*lines[:4], "# ended soon"]))
    with Ledger.open(work) as ledger:
        assert "gives no time" in str(import_runs(ledger, batch, "sample", folder))


def test_results_for_other_code_are_refused(exported):
    batch, folder, work = exported
    elsewhere(folder / "run-000001")
    with Ledger.open(work) as ledger:
        found = import_runs(ledger, batch, "new code", folder)
    assert found.accepted == 0
    assert "have changed since the export" in str(found)


def test_an_export_never_mixes_with_what_is_there(exported):
    batch, folder, work = exported
    with Ledger.open(work) as ledger, pytest.raises(InputError, match="is not empty"):
        export_runs(ledger, batch, "sample", folder, NAMES)


def test_nothing_to_import(exported):
    batch, folder, work = exported
    with Ledger.open(work) as ledger, pytest.raises(InputError, match="is not a folder"):
        import_runs(ledger, batch, "sample", folder / "nowhere")
