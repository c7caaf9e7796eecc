"""A work folder as seen from another terminal."""

import os
import sqlite3
import time

import pytest
from runs_samples import RAISES, Sample, sample_batch
from test_faults import kept, start

from nipc.errors import InputError
from nipc.runs.engine import Engine
from nipc.runs.ledger import Ledger
from nipc.runs.status import status


def test_counts_of_a_finished_batch(tmp_path):
    batch = sample_batch(20, kinds={3: RAISES, 4: RAISES})
    with Ledger.open(tmp_path) as ledger, Engine(Sample(), ledger, backend="inline") as engine:
        ledger.expect(100)
        engine.run(batch.take(slice(0, 8)), "arc 1, design")
        engine.run(batch, "arc 1, check")
    found = status(tmp_path)
    assert (found.done, found.failed, found.expected) == (18, 2, 100)
    assert found.reasons == (("exception", 2),)
    assert found.batch is not None
    assert (found.batch.label, found.batch.total, found.batch.missing) == ("arc 1, check", 20, 0)
    assert found.holder is None
    assert found.size >= (tmp_path / "ledger.sqlite").stat().st_size
    text = str(found)
    assert "18 done, 2 failed, 80 missing of 100" in text
    assert "2 x exception" in text
    assert "nobody at work" in text


def test_while_a_run_goes_on_in_another_process(tmp_path):
    process = start(tmp_path, 400, "--pause", 0.02)
    try:
        line = ""
        while kept(line) < 20:
            line = process.stdout.readline()
        found = status(tmp_path)
        assert found.done >= kept(line)
        assert found.batch is not None
        assert found.batch.missing == 400 - found.done
        # two workers at 20 ms a run do at most 100 runs a second
        assert 0.0 < found.batch.rate <= 100.0
        assert found.batch.time_left == pytest.approx(found.batch.missing / found.batch.rate)
        assert found.holder is not None
        assert f"process {process.pid} on " in found.holder
        assert " left" in str(found)
    finally:
        process.kill()
        process.communicate()
    assert status(tmp_path).holder is None  # also when its process was killed


def test_looking_on_changes_nothing(tmp_path):
    with Ledger.open(tmp_path) as ledger, Engine(Sample(), ledger, backend="inline") as engine:
        engine.run(sample_batch(5), "arc 1")
    before = (tmp_path / "ledger.sqlite").read_bytes()
    status(tmp_path)
    assert (tmp_path / "ledger.sqlite").read_bytes() == before


def test_an_empty_folder_is_said(tmp_path):
    with pytest.raises(InputError, match="nothing has been run here yet"):
        status(tmp_path)


def test_a_clock_that_is_set_back_does_not_spoil_the_rate(tmp_path, monkeypatch):
    moments = iter([1e9, 5e8, 1e3])
    monkeypatch.setattr(time, "time", lambda: next(moments, 1.0))
    batch = sample_batch(6)
    with (
        Ledger.open(tmp_path) as ledger,
        Engine(Sample(pause=0.01), ledger, backend="inline") as engine,
    ):
        engine.run(batch, "arc 1")
    found = status(tmp_path).batch
    assert found is not None
    assert 0.0 < found.rate <= 100.0


def test_a_ledger_that_is_none_is_said_in_words(tmp_path):
    (tmp_path / "ledger.sqlite").write_bytes(os.urandom(5000))
    with pytest.raises(Exception, match="cannot be used") as caught:
        status(tmp_path)
    assert not isinstance(caught.value, sqlite3.Error)
