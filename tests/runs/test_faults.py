"""Real signals to real processes."""

import os
import random
import re
import signal
import subprocess
import sys
import threading
import time
from pathlib import Path

import numpy as np
import pytest
from runs_samples import CALLS, DEAF, RAISES, SLEEPS, Sample, alive, eventually, sample_batch

from nipc.runs.descendants import descendants
from nipc.runs.engine import Engine
from nipc.runs.ledger import Ledger
from nipc.runs.policy import FailurePolicy
from nipc.runs.record import Status

SCRIPT = Path(__file__).with_name("runs_process.py")


def start(folder, n, *options):
    return subprocess.Popen(
        [sys.executable, str(SCRIPT), str(folder), str(n), *map(str, options)],
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
        start_new_session=True,
    )


def finish(folder, n, *options):
    """Run to the end; the last line, which is a digest of all numbers."""
    process = start(folder, n, *options)
    out, err = process.communicate(timeout=120)
    assert process.returncode == 0, err
    return out.splitlines()[-1]


def kept(text):
    """How many runs were last reported as finished."""
    numbers = re.findall(r"^kept (\d+)$", text, re.MULTILINE)
    return int(numbers[-1]) if numbers else 0


def workers(text):
    return {int(pid) for line in re.findall(r"^workers (.*)$", text, re.MULTILINE)
            for pid in line.split()}  # fmt: skip


def kill_at_random_moments(folder, count, seed, *options):
    """Kill -9 until so many kills fell into the middle of the batch; each time nothing that was
    reported may be lost, and no worker may stay behind. The digest of the numbers at the end.
    """
    rng = random.Random(seed)
    middle = 0
    for _ in range(10 * count):
        process = start(folder, N, *options)
        if rng.random() < 0.8:
            process.stdout.readline()  # the batch has begun
        # before the first run, at a commit, within a run, after the last
        time.sleep(rng.uniform(0.0, 1.5))
        process.kill()
        text = process.communicate()[0]
        assert process.returncode in (-signal.SIGKILL, 0)
        assert eventually(lambda text=text: not any(map(alive, workers(text))))
        with Ledger.open(folder) as ledger:
            assert not ledger.notes or "empty file" in ledger.notes[0]
            done = ledger.count(Status.DONE)
        assert done >= kept(text)
        middle += 0 < done < N
        if middle == count:
            return finish(folder, N, *options)
        if done == N:  # nothing is left to be killed: begin anew
            for file in folder.glob("ledger.*"):
                file.unlink()
    raise AssertionError(f"only {middle} of the kills fell into the middle of the batch")


N = 200
KINDS = pytest.mark.parametrize(
    "options",
    [("--pause", 0.01), ("--pause", 0.4, "--vectorised")],  # a second on two workers
    ids=["single", "blocks"],
)


@KINDS
def test_kill_of_the_main_process_loses_nothing(options, tmp_path):
    undisturbed = finish(tmp_path / "undisturbed", N, *options)
    assert kill_at_random_moments(tmp_path / "killed", 5, 7, *options) == undisturbed


@pytest.mark.slow
@KINDS
def test_kill_of_the_main_process_at_50_moments(options, tmp_path):
    undisturbed = finish(tmp_path / "undisturbed", N, *options)
    assert kill_at_random_moments(tmp_path / "killed", 50, 11, *options) == undisturbed


def test_kills_of_workers_cost_no_run(tmp_path):
    """A worker that is shot takes its run down once; tried again alone, it succeeds."""
    batch = sample_batch(120)
    with (
        Ledger.open(tmp_path) as ledger,
        Engine(Sample(pause=0.02), ledger, n_jobs=2) as engine,
    ):
        shot = []

        def shoot():
            for _ in range(4):
                time.sleep(0.5)
                processes = [w.process for w in list(engine._crew._workers) if w.ready]
                if processes:
                    processes[0].send_signal(signal.SIGKILL)
                    shot.append(processes[0].pid)

        gun = threading.Thread(target=shoot)
        gun.start()
        outcomes = engine.run(batch, "arc 1")
        gun.join()
    assert len(set(shot)) >= 2
    assert outcomes.ok.all()


def test_forty_percent_of_runs_failing_at_random(tmp_path):
    rng = np.random.default_rng(4)
    bad = np.flatnonzero(rng.random(200) < 0.4)
    batch = sample_batch(200, kinds={int(row): RAISES for row in bad})
    with Ledger.open(tmp_path) as ledger, Engine(Sample(), ledger, n_jobs=2) as engine:
        outcomes = engine.run(batch, "arc 1")
    assert np.array_equal(np.flatnonzero(~outcomes.ok), bad)
    assert outcomes.failures.failed == bad.size
    (group,) = outcomes.failures.groups
    assert (group.kind, group.count) == ("exception", bad.size)


@pytest.mark.parametrize("kind", [SLEEPS, DEAF], ids=["sleeps", "ignores signals"])
@pytest.mark.parametrize("vectorised", [False, True])
def test_a_run_that_hangs_is_ended(kind, vectorised, tmp_path):
    batch = sample_batch(4, kinds={1: kind})
    began = time.monotonic()
    with (
        Ledger.open(tmp_path) as ledger,
        Engine(
            Sample(vectorised=vectorised), ledger, n_jobs=2, time_limit=0.3,
            policy=FailurePolicy(retries=0),
        ) as engine,
    ):  # fmt: skip
        outcomes = engine.run(batch, "arc 1")
    assert np.flatnonzero(~outcomes.ok).tolist() == [1]
    assert outcomes.kinds[1] == "time limit"
    assert outcomes.reasons[1] == "longer than the time limit of 0.3 s"
    assert time.monotonic() - began < 60.0  # and not the 600 s that the run would sleep


def test_a_time_limit_holds_in_this_process_too(tmp_path):
    batch = sample_batch(3, kinds={1: SLEEPS})
    with (
        Ledger.open(tmp_path) as ledger,
        Engine(Sample(), ledger, backend="inline", time_limit=0.2) as engine,
    ):
        assert engine.run(batch, "arc 1").kinds == (None, "time limit", None)


def test_ctrl_c_keeps_what_is_finished_and_the_next_start_goes_on(tmp_path):
    process = start(tmp_path, 200, "--pause", 0.02)
    lines = []
    while not lines or kept(lines[-1]) == 0:
        lines.append(process.stdout.readline())
    process.send_signal(signal.SIGINT)
    out, err = process.communicate(timeout=30)
    text = "".join(lines) + out
    assert process.returncode == 130, err
    assert re.search(r"^error stopped at arc 1; (\d+) runs finished", text, re.MULTILINE)
    assert "Traceback" not in err
    assert not any(map(alive, workers(text)))
    with Ledger.open(tmp_path) as ledger:
        assert ledger.count(Status.DONE) == kept(text) > 0
    undisturbed = finish(tmp_path / "undisturbed", 200)
    assert finish(tmp_path, 200) == undisturbed


def test_a_limit_on_file_size_stops_the_study_in_words(tmp_path):
    """As a full disk or a quota does: the operating system refuses to let the file grow."""
    options = ("--times", 2000, "--pause", 0.01)
    process = start(tmp_path, 200, *options, "--file-limit", 2_000_000)
    out, err = process.communicate(timeout=60)
    assert process.returncode == 1, err
    assert re.search("^error .*(disk is full|could not be written)", out, re.MULTILINE)
    with Ledger.open(tmp_path) as ledger:
        assert ledger.notes == []
        assert ledger.count(Status.DONE) >= kept(out) > 0
    undisturbed = finish(tmp_path / "undisturbed", 200, *options)
    assert finish(tmp_path, 200, *options) == undisturbed


def test_two_processes_at_once(tmp_path):
    first = start(tmp_path, 100, "--pause", 0.05)
    try:
        assert first.stdout.readline().startswith("start")
        second = start(tmp_path, 100)
        out, err = second.communicate(timeout=60)
        assert second.returncode == 1, err
        assert f"in use by process {first.pid} on " in out
    finally:
        first.kill()
        first.communicate()


def test_a_folder_made_read_only_under_way_loses_nothing(tmp_path):
    """Open files stay writable on POSIX; as root this is not even noticed."""
    process = start(tmp_path, 60, "--pause", 0.02)
    assert process.stdout.readline().startswith("start")
    tmp_path.chmod(0o555)
    try:
        out, err = process.communicate(timeout=60)
    finally:
        tmp_path.chmod(0o755)
    assert process.returncode in (0, 1), err
    assert "Traceback" not in err
    with Ledger.open(tmp_path) as ledger:
        assert ledger.count(Status.DONE) >= kept(out)


def test_workers_leave_with_a_master_that_is_killed(tmp_path):
    process = start(tmp_path, 100, "--pause", 0.3)
    text = ""
    while not workers(text):
        text += process.stdout.readline()
    os.kill(process.pid, signal.SIGKILL)
    process.communicate()
    assert eventually(lambda: not any(map(alive, workers(text))), 5.0)


@pytest.mark.parametrize("signal_number", [signal.SIGKILL, signal.SIGINT])
def test_programs_that_workers_started_leave_with_them(signal_number, tmp_path):
    """Also those in sessions of their own, which no signal to a group of processes reaches."""
    process = start(tmp_path, 4, "--jobs", 1, "--kind", 3, CALLS)
    text = ""
    while kept(text) < 3:
        text += process.stdout.readline()
    (worker,) = workers(text)
    assert eventually(lambda: descendants(worker))
    programs = descendants(worker)
    process.send_signal(signal_number)
    process.communicate()
    assert eventually(lambda: not any(map(alive, [worker, *programs])), 5.0)


def test_a_program_that_hangs_is_ended_and_its_worker_stays(tmp_path):
    """Here the worker's own alarm ends it, and the worker stays."""
    with (
        Ledger.open(tmp_path) as ledger,
        Engine(
            Sample(), ledger, time_limit=0.3, policy=FailurePolicy(retries=0)
        ) as engine,
    ):  # fmt: skip
        outcomes = engine.run(sample_batch(2, kinds={1: CALLS}), "arc 1")
        assert outcomes.kinds[1] == "time limit"
        (worker,) = engine._crew._workers
        assert descendants(worker.process.pid) == []
