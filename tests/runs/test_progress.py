"""What the user is told while runs go on."""

import io
import re
import sys
import types

import pytest
from rich.console import Console
from runs_samples import RAISES, Sample, sample_batch

from nipc.runs.engine import Engine
from nipc.runs.journey import ArcTold, Journey, Rate, duration
from nipc.runs.ledger import Ledger
from nipc.runs.notebook import Notebook
from nipc.runs.progress import Bar, Lines, Silent, suited, usual


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


def arcs(count, note=""):
    """Arcs of half a day over 28 days."""
    return [
        ArcTold(k, 0.5 * k, 0.0, 28.0, "day", 2, 24, 1.234e-3, note) for k in range(1, count + 1)
    ]


def test_time_left_follows_the_pace_of_the_last_arcs():
    """Ten arcs at a second each, then ten at three: 36 arcs of three seconds are left."""
    now = iter([*range(1, 11), *range(13, 41, 3)])
    journey = Journey(clock=lambda: next(now))
    assert journey.seconds_left is None
    for arc in arcs(20):
        journey.hear(arc)
    assert journey.seconds_left == pytest.approx(36 * 3.0)


def test_a_chain_that_is_done_again_begins_its_pace_anew():
    now = iter(range(100))
    journey = Journey(clock=lambda: next(now))
    for arc in [*arcs(56), *arcs(1)]:
        journey.hear(arc)
    assert journey.seconds_left is None
    journey.hear(arcs(2)[1])
    assert journey.seconds_left == pytest.approx(54.0)


def test_lines_tell_of_an_arc_and_its_note():
    out = io.StringIO()
    Lines(out).arc(arcs(12, "halved")[-1])
    assert out.getvalue() == ("t = 6 of 28 day: arc 12: degree 2, 24 runs, error 0.12 %, halved\n")


def test_the_bar_shows_the_horizon_above_the_batch():
    out = io.StringIO()
    bar = Bar(Console(file=out, force_terminal=True, width=100))
    for arc in arcs(12, "easy [b]"):
        bar.arc(arc)
    bar.start("t = 6 to 6.5 of 28, design", 24, 0)
    bar.advance(24, 0)
    bar.finish()
    text = re.sub(r"\x1b\[[0-9;?]*[a-zA-Z]", "", out.getvalue())
    assert "t = 0.5 of 28 day: arc 1: degree 2, 24 runs, error 0.12 %, easy [b]" in text
    assert "arc 12: degree 2, 24 runs, error 0.12 %," in text
    assert "24/24" in text
    assert "design" in text


def test_a_notebook_rewrites_one_line(monkeypatch):
    shown = []

    class Handle:
        def update(self, line):
            shown.append(line)

    def display(line, display_id):
        shown.append(line)
        return Handle()

    module = types.ModuleType("IPython")
    module.display = types.SimpleNamespace(HTML=str, display=display)
    module.get_ipython = lambda: types.SimpleNamespace(kernel=object())
    monkeypatch.setitem(sys.modules, "IPython", module)
    monkeypatch.setitem(sys.modules, "IPython.display", module.display)
    progress = usual()
    assert isinstance(progress, Notebook)
    progress.start("<b>design</b>", 8, 2)
    progress.advance(6, 1)
    progress.finish()
    progress.arc(arcs(14, "<i>")[-1])
    assert "&lt;b&gt;design&lt;/b&gt;: 2 of 8 runs" in shown[0]
    assert 'value="1.0000"' in shown[-2]
    assert "1 failed" in shown[-2]
    assert 'value="0.2500"' in shown[-1]
    assert "t = 7 of 28 day; arc 14: degree 2, 24 runs, error 0.12 %, &lt;i&gt;" in shown[-1]
    assert not any("<i>" in line or "<b>" in line for line in shown)


def test_arcs_whose_runs_are_all_kept_are_told_without_a_batch():
    told = Notebook()
    told._handle = types.SimpleNamespace(update=lambda line: None)
    told._journey.hear(arcs(28)[-1])
    assert "t = 14 of 28 day; arc 28: degree 2, 24 runs, error 0.12 %</small>" in told.markup()
    out = io.StringIO()
    Bar(Console(file=out, width=100)).arc(arcs(1)[0])
    Bar(Console(file=out, width=100)).arc(arcs(1, "halved")[0])
    assert out.getvalue().strip() == (
        "t = 0.5 of 28 day: arc 1: degree 2, 24 runs, error 0.12 %, halved"
    )


def test_python_is_silent_outside_a_notebook():
    assert isinstance(usual(), Silent)


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

        def arc(self, told):
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
