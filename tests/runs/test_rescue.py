"""Damaged ledgers: said, set aside, and every whole run taken over."""

from types import SimpleNamespace

import numpy as np
import pytest
from runs_samples import Sample, sample_batch

from nipc.runs import ledger as ledger_module
from nipc.runs import rescue
from nipc.runs.engine import Engine
from nipc.runs.ledger import Ledger
from nipc.runs.record import Status

N, TIMES = 120, 100
PAGE = 8192
ROOTS = 12  # pages of other tables and of indexes, before or between those of the runs
RUNS_ROOT = 5  # the page that leads to all others of the runs
PER_PAGE = 4  # runs of 1,600 bytes of states and some 250 of inputs and the rest


def kept_run(folder, propagator, batch):
    with Ledger.open(folder) as ledger, Engine(propagator, ledger, backend="inline") as engine:
        outcomes = engine.run(batch, "arc 1")
        return outcomes, list(ledger.notes)


@pytest.fixture(scope="module", params=[False, True], ids=["single", "blocks"])
def whole(request, tmp_path_factory):
    """An undamaged ledger's bytes, its propagator and its numbers."""
    folder = tmp_path_factory.mktemp("whole")
    propagator = Sample(vectorised=request.param, mixing=request.param)
    batch = sample_batch(N, times=TIMES)
    outcomes, _ = kept_run(folder, propagator, batch)
    return (folder / "ledger.sqlite").read_bytes(), propagator, batch, outcomes.states


def damaged(folder, data, whole):
    """Open a damaged file, run what is missing; the share that was rescued, and what was said."""
    _, propagator, batch, states = whole
    folder.mkdir(exist_ok=True)
    (folder / "ledger.sqlite").write_bytes(data)
    with Ledger.open(folder) as ledger:
        rescued = ledger.count(Status.DONE)
        notes = list(ledger.notes)
    outcomes, later = kept_run(folder, propagator, batch)
    assert outcomes.states.tobytes() == states.tobytes()
    return rescued / N, notes + later


@pytest.mark.parametrize("share", [0.0, 0.01, 0.3, 0.5, 0.8, 0.99])
def test_a_truncated_ledger(share, whole, tmp_path):
    data = whole[0]
    rescued, notes = damaged(tmp_path, data[: int(len(data) * share)], whole)
    assert notes
    if not whole[1].vectorised:
        pages = int(len(data) * share / PAGE) - ROOTS
        assert rescued >= PER_PAGE * (pages - 1) / N
    elif share > 0.8:
        assert rescued == 64 / N  # the block of 64 is whole, that of 56 is not
    assert rescued < 1.0


@pytest.mark.parametrize("count", [1, 8, 50])
@pytest.mark.parametrize("seed", range(6))
def test_flipped_bits(seed, count, whole, tmp_path):
    """Nothing false is ever read, and what is lost is run again, bit for bit."""
    data = bytearray(whole[0])
    bits = np.random.default_rng(seed).integers(0, 8 * len(data), count)
    for bit in bits:
        data[bit // 8] ^= 1 << bit % 8
    rescued, notes = damaged(tmp_path, bytes(data), whole)
    assert notes or rescued == 1.0
    if not whole[1].vectorised and RUNS_ROOT not in {bit // (8 * PAGE) + 1 for bit in bits}:
        # a bit costs the run it is in, or at most the page
        assert rescued >= 1.0 - count * (PER_PAGE + 1) / N


@pytest.mark.parametrize("size", [100, 8192])
def test_a_destroyed_beginning(size, whole, tmp_path):
    """The header and the list of tables: every run is on other pages."""
    rescued, notes = damaged(tmp_path, bytes(size) + whole[0][size:], whole)
    assert rescued == 1.0
    assert "rescued" in notes[0]


def test_random_bytes_are_no_ledger(whole, tmp_path):
    noise = np.random.default_rng(5).integers(0, 256, 50_000).astype(np.uint8).tobytes()
    rescued, notes = damaged(tmp_path, noise, whole)
    assert rescued == 0.0
    assert notes


def test_the_damaged_file_is_kept(whole, tmp_path):
    cut = whole[0][:50_000]
    damaged(tmp_path, cut, whole)
    assert (tmp_path / "ledger.damaged-1.sqlite").stat().st_size == len(cut)


@pytest.mark.parametrize("moment", ["_copy", "finish"])
def test_a_rescue_that_is_interrupted_is_begun_again_or_ended(moment, whole, tmp_path, monkeypatch):
    def stop(*arguments):
        raise KeyboardInterrupt

    cut = whole[0][: int(0.9 * len(whole[0]))]
    rescued, _ = damaged(tmp_path / "undisturbed", cut, whole)
    (tmp_path / "work").mkdir()
    (tmp_path / "work" / "ledger.sqlite").write_bytes(cut)
    with monkeypatch.context() as patch:
        # `finish` is also called before there is anything to finish
        patch.setattr(rescue, moment, stop)
        if moment == "finish":
            patch.setattr(ledger_module, "rescue", SimpleNamespace(
                finish=lambda path: None, replace=rescue.replace
            ))  # fmt: skip
        with pytest.raises(KeyboardInterrupt):
            Ledger.open(tmp_path / "work")
    with Ledger.open(tmp_path / "work") as ledger:
        assert ledger.count(Status.DONE) == round(rescued * N)
    outcomes, _ = kept_run(tmp_path / "work", whole[1], whole[2])
    assert outcomes.states.tobytes() == whole[3].tobytes()


@pytest.mark.parametrize("seed", range(5))
@pytest.mark.parametrize("vectorised", [False, True])
def test_a_log_damaged_after_a_kill(vectorised, seed, tmp_path):
    """SQLite's log, before its content has gone to the main file: cut short, and bits flipped."""
    propagator = Sample(vectorised=vectorised, mixing=vectorised)
    batch = sample_batch(N, times=TIMES)
    (tmp_path / "killed").mkdir()
    with Ledger.open(tmp_path / "work") as ledger:
        with Engine(propagator, ledger, backend="inline") as engine:
            for count in [N] if vectorised else [40, 80, N]:
                states = engine.run(batch.take(slice(0, count)), "arc 1").states
        for name in ("ledger.sqlite", "ledger.sqlite-wal"):
            data = bytearray((tmp_path / "work" / name).read_bytes())
            if name.endswith("-wal"):
                rng = np.random.default_rng(seed)
                data = data[: int(len(data) * rng.uniform(0.5, 1.0))]
                for bit in rng.integers(0, 8 * len(data), seed):
                    data[bit // 8] ^= 1 << bit % 8
            (tmp_path / "killed" / name).write_bytes(data)
    outcomes, _ = kept_run(tmp_path / "killed", propagator, batch)
    assert outcomes.states.tobytes() == states.tobytes()
