"""A real Dask scheduler and two workers on loopback."""

import json
import signal
import subprocess
import sys
import threading
import time
from pathlib import Path

import numpy as np
import pytest
from runs_samples import EXITS, NAN, RAISES, SLEEPS, Sample, eventually, sample_batch

from nipc.errors import InputError
from nipc.runs.engine import Engine
from nipc.runs.ledger import Ledger
from nipc.runs.policy import FailurePolicy

HERE = Path(__file__).parent


def dask(*arguments, **settings):
    return subprocess.Popen(
        [sys.executable, "-m", "distributed.cli." + arguments[0], *map(str, arguments[1:])],
        stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL, cwd=HERE, **settings,
    )  # fmt: skip


@pytest.fixture
def cluster(tmp_path):
    """Address of a scheduler, and the processes of its two workers."""
    file = tmp_path / "scheduler.json"
    shared = ("--scheduler-file", file)
    processes = [
        dask("dask_scheduler", *shared, "--host", "127.0.0.1", "--port", 0, "--no-dashboard")
    ]
    assert eventually(file.exists, 60.0)
    processes += [
        dask("dask_worker", *shared, "--nthreads", 1, "--no-nanny", "--no-dashboard",
             "--local-directory", tmp_path / f"worker-{k}", "--preload", HERE / "conftest.py")
        for k in range(2)
    ]  # fmt: skip
    yield json.loads(file.read_text())["address"], processes[1:]
    for process in processes:
        process.kill()
        process.wait()


def run(folder, propagator, batch, **settings):
    with Ledger.open(folder) as ledger, Engine(propagator, ledger, **settings) as engine:
        return engine.run(batch, "arc 1")


@pytest.mark.slow
@pytest.mark.parametrize("vectorised", [False, True])
def test_a_cluster_that_loses_a_worker_gives_the_same_numbers(vectorised, cluster, tmp_path):
    address, workers = cluster
    # a row that is not finite leaves its block whole; one that raises sends all 64 out alone
    kinds = {3: NAN, 11: NAN} if vectorised else {3: RAISES, 11: EXITS}
    batch = sample_batch(200, kinds=kinds)
    propagator = Sample(vectorised=vectorised, mixing=True, pause=1.0 if vectorised else 0.05)
    here = run(tmp_path / "here", propagator, batch, n_jobs=2)

    def shoot():
        time.sleep(1.5)
        workers[0].send_signal(signal.SIGKILL)

    gun = threading.Thread(target=shoot)
    gun.start()
    there = run(tmp_path / "there", propagator, batch, backend="dask", scheduler=address)
    gun.join()
    assert np.flatnonzero(~there.ok).tolist() == [3, 11]
    assert there.kinds == here.kinds
    assert there.states.tobytes() == here.states.tobytes()


@pytest.mark.slow
def test_a_hanging_run_is_ended_on_the_cluster(cluster, tmp_path):
    batch = sample_batch(6, kinds={2: SLEEPS})
    outcomes = run(
        tmp_path / "work", Sample(), batch, backend="dask", scheduler=cluster[0], time_limit=0.5,
        policy=FailurePolicy(retries=0),
    )  # fmt: skip
    assert np.flatnonzero(~outcomes.ok).tolist() == [2]
    assert outcomes.kinds[2] == "time limit"


def test_a_scheduler_that_does_not_answer_is_said(tmp_path, monkeypatch):
    from nipc.runs import remote

    monkeypatch.setattr(remote, "CONNECT_SECONDS", 1.0)
    with Ledger.open(tmp_path) as ledger, pytest.raises(InputError, match="no Dask scheduler"):
        Engine(Sample(), ledger, backend="dask", scheduler="tcp://127.0.0.1:9")


def test_a_scheduler_must_be_named(tmp_path):
    with Ledger.open(tmp_path) as ledger, pytest.raises(InputError, match="needs the address"):
        Engine(Sample(), ledger, backend="dask")
