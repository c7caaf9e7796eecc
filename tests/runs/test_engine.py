"""Same numbers whatever the workers and the interruptions; no run done twice."""

import re

import numpy as np
import pytest
from runs_samples import (
    ENDS,
    EXITS,
    GOOD,
    LEAVES,
    MEMORY,
    NAN,
    RAISES,
    REFUSES,
    SEGFAULTS,
    SHAPE,
    Sample,
    expected_states,
    sample_batch,
)

from nipc.errors import LedgerError, RunsError
from nipc.runs import writer
from nipc.runs.engine import BLOCK, Engine, block_size
from nipc.runs.keys import block_digest, run_keys
from nipc.runs.ledger import Ledger
from nipc.runs.policy import FailurePolicy
from nipc.runs.record import Status


def run(folder, propagator, batch, **settings):
    with Ledger.open(folder) as ledger, Engine(propagator, ledger, **settings) as engine:
        return engine.run(batch, "arc 1")


def calls(log):
    """How many runs were asked of the propagator."""
    if not log.exists():
        return 0
    return sum(int(line.split()[1]) for line in log.read_text().splitlines())


def test_the_states_are_those_that_the_propagator_answers(tmp_path):
    batch = sample_batch(20)
    outcomes = run(tmp_path, Sample(), batch, n_jobs=2)
    np.testing.assert_allclose(outcomes.states, expected_states(batch), rtol=0, atol=1e-12)
    assert outcomes.ok.all()
    assert not outcomes.reused.any()
    assert str(outcomes.failures) == "none of 20 runs failed"


@pytest.mark.parametrize("vectorised", [False, True])
def test_numbers_do_not_depend_on_the_workers(vectorised, tmp_path):
    batch = sample_batch(2 * BLOCK + 5)
    propagator = Sample(vectorised=vectorised, mixing=True)
    settings = [
        {"n_jobs": 1}, {"n_jobs": 2}, {"n_jobs": 3}, {"backend": "inline"}
    ]  # fmt: skip
    found = {
        run(tmp_path / str(k), propagator, batch, **chosen).states.tobytes()
        for k, chosen in enumerate(settings)
    }
    assert len(found) == 1


def test_what_is_kept_is_not_run_again(tmp_path):
    log = tmp_path / "log"
    batch = sample_batch(30)
    first = run(tmp_path, Sample(log=log), batch.take(slice(0, 20)), n_jobs=2)
    second = run(tmp_path, Sample(log=log), batch, n_jobs=2)
    assert calls(log) == 30
    assert second.reused.tolist() == [True] * 20 + [False] * 10
    assert second.states[:20].tobytes() == first.states.tobytes()


def test_equal_runs_of_a_batch_are_run_once(tmp_path):
    log = tmp_path / "log"
    batch = sample_batch(4).take(np.array([0, 1, 0, 2, 1, 3]))
    outcomes = run(tmp_path, Sample(log=log), batch, backend="inline")
    assert calls(log) == 4
    assert outcomes.ok.all()
    assert outcomes.states[0].tobytes() == outcomes.states[2].tobytes()


def test_runs_of_other_code_are_not_used_and_that_is_said(tmp_path):
    batch = sample_batch(5)
    run(tmp_path, Sample(name="old"), batch, backend="inline")
    with (
        Ledger.open(tmp_path) as ledger,
        Engine(Sample(name="new"), ledger, backend="inline") as engine,
    ):
        assert engine.notes == [
            "5 kept runs are of a propagator with other code or settings, and are not used"
        ]
        assert not engine.run(batch, "arc 1").reused.any()


def test_a_propagator_that_changes_under_way_is_noticed(tmp_path):
    propagator = Sample(name="old")
    with Ledger.open(tmp_path) as ledger, Engine(propagator, ledger, backend="inline") as engine:
        engine.run(sample_batch(2), "arc 1")
        propagator.name = "new"
        with pytest.raises(RunsError, match="changed while the study was running"):
            engine.run(sample_batch(3), "arc 2")


def test_blocks_depend_on_the_batch_alone(tmp_path):
    batch = sample_batch(BLOCK + 6)
    keys = run_keys(batch, "sample")
    run(tmp_path, Sample(vectorised=True), batch, n_jobs=2)
    with Ledger.open(tmp_path) as ledger:
        blocks = {record.key: record.block for record in ledger.read(keys)}
    assert {blocks[key] for key in keys[:BLOCK]} == {block_digest(keys[:BLOCK])}
    assert {blocks[key] for key in keys[BLOCK:]} == {block_digest(keys[BLOCK:])}


def test_blocks_of_long_runs_are_small():
    assert block_size(sample_batch(2, times=11)) == BLOCK
    assert block_size(sample_batch(2, times=1 << 18)) == 4


@pytest.mark.parametrize(
    ("kind", "word", "reason"),
    [
        (RAISES, "exception", r"ValueError: the orbit is hyperbolic \(runs_samples.py, line \d+\)"),
        (REFUSES, "propagator", r"step size below the smallest at t = 0.25"),
        (EXITS, "crash", r"its process left with exit code 3"),
        (SEGFAULTS, "crash", r"its process was killed by SIGSEGV: .*ctypes"),
        (NAN, "not finite", r"the state is not finite at t = 1"),
        (SHAPE, "shape", r"shape \(1, 5, 2\); right is \(1, 6, 2\)"),
        (MEMORY, "memory", r"not enough memory"),
        (LEAVES, "exception", r"SystemExit: bye"),
    ],
)
def test_a_bad_run_costs_itself_only(kind, word, reason, tmp_path):
    batch = sample_batch(12, kinds={5: kind})
    outcomes = run(tmp_path, Sample(), batch, n_jobs=2)
    assert np.flatnonzero(~outcomes.ok).tolist() == [5]
    assert outcomes.kinds[5] == word
    assert re.search(reason, outcomes.reasons[5])
    good = np.arange(12) != 5
    np.testing.assert_allclose(outcomes.states[good], expected_states(batch)[good], atol=1e-12)
    with Ledger.open(tmp_path) as ledger:
        (record,) = ledger.read([run_keys(batch, "sample")[5]])
    assert (record.status, record.attempt) == (Status.FAILED, 2)  # tried again once, alone


@pytest.mark.parametrize("kind", [RAISES, EXITS, NAN])
def test_a_bad_run_in_a_block_costs_itself_only(kind, tmp_path):
    batch = sample_batch(BLOCK + 10, kinds={7: kind})
    outcomes = run(tmp_path, Sample(vectorised=True), batch, n_jobs=2)
    assert np.flatnonzero(~outcomes.ok).tolist() == [7]


def test_a_physical_ending_is_no_failure(tmp_path):
    batch = sample_batch(3, kinds={1: ENDS})
    outcomes = run(tmp_path, Sample(), batch, backend="inline")
    assert outcomes.ok.all()
    assert np.isnan(outcomes.ended[[0, 2]]).all()
    assert outcomes.ended[1] == batch.times[1]
    assert np.isfinite(outcomes.states[1, :2]).all()
    assert np.isnan(outcomes.states[1, 2:]).all()


def test_failures_are_kept_and_tried_again_on_demand(tmp_path):
    log = tmp_path / "log"
    batch = sample_batch(6, kinds={2: RAISES})
    run(tmp_path, Sample(log=log), batch, backend="inline")
    assert calls(log) == 7
    again = run(tmp_path, Sample(log=log), batch, backend="inline")
    assert calls(log) == 7
    assert again.kinds[2] == "exception"
    run(tmp_path, Sample(log=log), batch, backend="inline", policy=FailurePolicy(again=True))
    assert calls(log) == 9


@pytest.mark.parametrize("retries", [0, 1, 3])
def test_the_number_of_retries_is_the_policy_s(retries, tmp_path):
    log = tmp_path / "log"
    batch = sample_batch(1, kinds={0: RAISES})
    run(tmp_path, Sample(log=log), batch, backend="inline", policy=FailurePolicy(retries=retries))
    assert calls(log) == 1 + retries


def test_too_many_failures_end_the_batch_and_keep_the_rest(tmp_path):
    batch = sample_batch(20, kinds=dict.fromkeys(range(10, 20), RAISES))
    with pytest.raises(RunsError, match=r"more than the 30% that is tolerated.*hyperbolic"):
        run(tmp_path, Sample(), batch, n_jobs=2, policy=FailurePolicy(tolerated=0.3))
    with Ledger.open(tmp_path) as ledger:
        assert ledger.count(Status.DONE) == 10


def test_a_propagator_that_never_works_is_found_early(tmp_path):
    log = tmp_path / "log"
    batch = sample_batch(500, kinds=dict.fromkeys(range(500), RAISES))
    with pytest.raises(RunsError, match=r"the first 16 runs have all failed.*hyperbolic"):
        run(tmp_path, Sample(log=log), batch, backend="inline", policy=FailurePolicy(tolerated=0.9))
    assert calls(log) == 32


def test_a_batch_need_not_fit_into_memory(tmp_path):
    batch = sample_batch(50)
    with Ledger.open(tmp_path) as ledger, Engine(Sample(), ledger, backend="inline") as engine:
        engine.ensure(batch, "arc 1")
        parts = [outcomes.states for _, outcomes in engine.pieces(batch, 16)]
    assert [len(part) for part in parts] == [16, 16, 16, 2]
    np.testing.assert_allclose(np.concatenate(parts), expected_states(batch), atol=1e-12)


def test_runs_that_were_not_done_are_said_to_be_missing(tmp_path):
    batch = sample_batch(3)
    with Ledger.open(tmp_path) as ledger, Engine(Sample(), ledger, backend="inline") as engine:
        engine.ensure(batch.take(slice(0, 2)), "arc 1")
        assert engine.collect(batch).kinds == (None, None, "missing")


def test_a_propagator_that_cannot_be_set_up_in_a_worker_is_said(tmp_path):
    class Local(Sample):
        def __reduce__(self):
            return (int, ("not a number",))

    with pytest.raises(RunsError, match=r"cannot be set up in a worker process: ValueError"):
        run(tmp_path, Local(), sample_batch(2), n_jobs=1)


def test_workers_use_one_thread_each(tmp_path):
    class Threads(Sample):
        def propagate(self, batch):
            import os

            import threadpoolctl

            pools = [pool["num_threads"] for pool in threadpoolctl.threadpool_info()]
            assert pools, "numpy brings at least one pool of threads"
            if max(pools) > 1 or os.environ["OMP_NUM_THREADS"] != "1":
                raise ValueError(str(pools))
            return super().propagate(batch)

    assert run(tmp_path, Threads(), sample_batch(2), n_jobs=1).ok.all()


def test_workers_stay_from_batch_to_batch(tmp_path):
    log = tmp_path / "log"
    with (
        Ledger.open(tmp_path / "work") as ledger,
        Engine(Sample(log=log), ledger, n_jobs=1) as engine,
    ):
        for seed in range(3):
            engine.run(sample_batch(40, seed=seed), f"arc {seed}")
    assert len({line.split()[0] for line in log.read_text().splitlines()}) == 1


@pytest.mark.parametrize("vectorised", [False, True])
def test_a_full_disk_is_said_and_what_still_fits_is_kept(vectorised, tmp_path, monkeypatch):
    """SQLite itself limits the file: the same error code as of a full disk."""
    monkeypatch.setattr(writer, "COMMIT_SECONDS", 1e9)  # all runs would be kept at once
    batch = sample_batch(200, times=500)
    propagator = Sample(vectorised=vectorised)
    with Ledger.open(tmp_path) as ledger, Engine(propagator, ledger, backend="inline") as engine:
        # 8,000 bytes a run on pages of 8,192: at least 64, and not 200, have room on 150 pages
        ledger._connection.execute("PRAGMA max_page_count = 150")
        with pytest.raises(LedgerError, match="the disk is full"):
            engine.ensure(batch, "arc 1")
        kept = ledger.count(Status.DONE)
        assert 64 <= kept < 150
        assert not vectorised or kept % BLOCK == 0
    outcomes = run(tmp_path, propagator, batch, backend="inline")
    assert outcomes.ok.all()
    assert outcomes.reused.sum() == kept


def test_wrong_settings():
    with pytest.raises(ValueError, match="cannot be 0"):
        Engine(Sample(), None, n_jobs=0)  # type: ignore[arg-type]


def test_kinds_of_samples_are_distinct():
    assert GOOD == 0
    assert len({RAISES, EXITS, SEGFAULTS, NAN, SHAPE, MEMORY, LEAVES, REFUSES, ENDS}) == 9
