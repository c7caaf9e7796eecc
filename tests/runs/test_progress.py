"""What the user is told while runs go on."""

import io
import re

import pytest
from rich.console import Console
from runs_samples import RAISES, Sample, sample_batch

from nipc.runs.engine import Engine
from nipc.runs.ledger import Ledger
from nipc.runs.progress import Bar, Lines, Rate, duration, suited


def run_with(progress, folder, n=6, **settings):
    batch = sample_batch(6, kinds={2: RAISES}).take(slice(0, n))
    with (
        Ledger.open(folder) as ledger,
        Engine(Sample(), ledger, backend="inline", progress=progress, **settings) as engine,
    ):
        engine.run(batch, "arc 1")


def test_lines_say_what_happened(tmp_path):
    out = io.StringIO()
    run_with(Lines(out), tmp_path)
    assert re.fullmatch(
        r"arc 1: 6 runs\narc 1: 6 of 6 finished, [\d.e+]+ runs/s, 1 failed\n", out.getvalue()
    )


def test_a_chain_of_short_batches_does_not_flood_a_log():
    out = io.StringIO()
    lines = Lines(out, every=600.0)
    for arc in range(50):
        lines.start(f"arc {arc}", 8, 0)
        lines.advance(8, 1 if arc == 30 else 0)
        lines.finish()
    told = out.getvalue().splitlines()
    # the first start and its end, and the end of the batch in which a run failed
    assert [line.split(":")[0] for line in told] == ["arc 0", "arc 0", "arc 30"]


def test_a_second_start_says_what_is_kept(tmp_path):
    run_with(Lines(io.StringIO()), tmp_path, 4)
    out = io.StringIO()
    run_with(Lines(out), tmp_path, 6)
    assert "arc 1: 6 runs, 4 kept from before\n" in out.getvalue()


def test_nothing_is_said_of_a_batch_that_is_all_kept(tmp_path):
    run_with(Lines(io.StringIO()), tmp_path)
    out = io.StringIO()
    run_with(Lines(out), tmp_path)
    assert out.getvalue() == ""


def test_the_bar_shows_count_rate_and_failures(tmp_path):
    out = io.StringIO()
    run_with(Bar(Console(file=out, force_terminal=True, width=100)), tmp_path)
    text = re.sub(r"\x1b\[[0-9;?]*[a-zA-Z]", "", out.getvalue())
    assert "6/6" in text
    assert "/s, 1 failed" in text


def test_lines_where_there_is_no_terminal():
    assert isinstance(suited(io.StringIO()), Lines)


def test_every_run_is_counted_once_and_only_when_kept(tmp_path):
    class Count:
        done = failed = 0

        def start(self, label, total, reused):
            self.total = total - reused

        def advance(self, done, failed):
            self.done += done
            self.failed += failed
            assert ledger.count() >= self.done

        def finish(self):
            pass

    progress = Count()
    batch = sample_batch(40, kinds={7: RAISES, 9: RAISES})
    with (
        Ledger.open(tmp_path) as ledger,
        Engine(Sample(vectorised=True), ledger, n_jobs=2, progress=progress) as engine,
    ):
        engine.run(batch, "arc 1")
    assert (progress.done, progress.failed, progress.total) == (40, 2, 40)


@pytest.mark.parametrize(
    ("seconds", "words"), [(59.6, "60 s"), (600, "10 min"), (9000, "2.5 h"), (3e5, "3.5 d")]
)
def test_durations(seconds, words):
    assert duration(seconds) == words


def test_a_rate_needs_no_time_to_have_passed():
    assert str(Rate(5)).endswith("runs/s")
