"""Past runs as a study's runs."""

import math

import numpy as np
import pytest

from nipc.errors import InputError
from nipc.problem.noise import NoiseModel
from nipc.runs.archive import ArchivePropagator, Columns, ingest, judge, read_archive
from nipc.runs.engine import Engine
from nipc.runs.ledger import Ledger
from nipc.runs.propagator import Batch

COLUMNS = Columns("case", "t", ("x0", "drag"), ("x", "v"))


def table(path, n=8, edit=lambda lines: lines):
    """x = x0 exp(-drag t), v = x', in no particular order of lines."""
    rng = np.random.default_rng(8)
    lines = []
    for case in range(n):
        x0, drag = float(rng.normal(10.0, 1.0)), float(rng.uniform(0.1, 0.2))
        for t in (0.0, 0.5, 1.0):
            x = x0 * math.exp(-drag * t)
            lines.append(f"{case};{x0!r};{drag!r};{t};{x!r};{-drag * x!r}")
    rng.shuffle(lines)
    lines = edit(lines)
    path.write_text("\n".join(["case;x0;drag;t;x;v", *lines]) + "\n")
    return path


def batch_of(archive):
    model = NoiseModel((), (), 0.0, 1.0)
    n = len(archive.inputs)
    starts = np.c_[archive.inputs[:, 0], -archive.inputs[:, 1] * archive.inputs[:, 0]]
    return Batch(starts, archive.times, model.realise(np.zeros((n, 0))), archive.inputs[:, 1:])


def test_an_archive_answers_for_the_propagator(tmp_path):
    archive = read_archive(table(tmp_path / "past.csv"), COLUMNS)
    assert archive.states.shape == (8, 3, 2)
    exact = archive.inputs[:, :1] * np.exp(-archive.inputs[:, 1:] * archive.times)
    np.testing.assert_allclose(archive.states[:, :, 0], exact, rtol=1e-15)
    batch = batch_of(archive)
    with Ledger.open(tmp_path / "work") as ledger:
        assert ingest(ledger, archive, batch) == 8
        assert ingest(ledger, archive, batch) == 0
        with Engine(ArchivePropagator(archive), ledger, backend="inline") as engine:
            outcomes = engine.run(batch, "archive")
            assert outcomes.reused.all()
            assert outcomes.states.tobytes() == archive.states.tobytes()
            other = Batch(batch.states + 1.0, batch.times, batch.forcing, batch.parameters)
            assert "holds no such run" in str(engine.run(other, "more").reasons[0])


@pytest.mark.parametrize(
    ("edit", "why"),
    [
        (lambda lines: lines[1:], "between 2 and 3 times"),
        (lambda lines: [line.replace(";0.5;", ";0.6;", 1) for line in lines[:9]] + lines[9:],
         "the same times"),
        (lambda lines: [lines[0].replace(";", ";9", 1), *lines[1:]], "inputs change within a run"),
        (lambda lines: [lines[0][: lines[0].rindex(";")] + ";nan", *lines[1:]], "not finite"),
        (lambda lines: [*lines, "1;2"], "line 26: 2 numbers"),
        (lambda lines: [*lines, "the end"], "is not a line of numbers"),
        (lambda lines: [], "no numbers"),
    ],
)  # fmt: skip
def test_a_table_that_cannot_be_used_is_refused(edit, why, tmp_path):
    with pytest.raises(InputError, match=why):
        read_archive(table(tmp_path / "past.csv", edit=edit), COLUMNS)


def test_columns_that_are_not_there_are_said(tmp_path):
    with pytest.raises(InputError, match="no column 'lift'; there are case, x0, drag"):
        read_archive(table(tmp_path / "past.csv"), Columns("case", "t", ("x0", "lift"), ("x",)))


def test_what_a_design_allows():
    """Total degree p in k varied inputs has (k + p)! / k! p! terms; 1.4 runs are asked for each."""
    rng = np.random.default_rng(9)
    samples = rng.normal(size=(4000, 5))
    germ = rng.normal(size=(90, 5))
    germ[:, 1] = 0.9 * germ[:, 0] + 0.1 * germ[:, 1]
    germ[:, 2] = 0.0
    germ[:, 3] *= 0.2
    germ[:, 4] += 2.0
    found = judge(germ, ("a", "b", "c", "d", "e"), samples)
    # 4 varied inputs: 15 terms (21 runs) at degree 2, 35 (49) at 3, 70 (98 > 90) at 4
    assert found.degree == 3
    assert found.fixed == ("c",)
    assert [(one, other) for one, other, _ in found.tied] == [("a", "b")]
    assert found.narrow == ("d",)
    assert found.beyond == ("e",)
    said = " ".join(found.sentences())
    assert "up to total degree 3" in said
    assert "says nothing about c" in said
    assert 0.0 < found.reach < 0.5


def test_an_archive_that_is_too_small():
    germ = np.eye(3, 5)
    found = judge(germ, tuple("abcde"), np.random.default_rng(1).normal(size=(100, 5)))
    assert found.degree == 0
    assert "too few" in found.sentences()[0]
