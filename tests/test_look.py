"""The example in cells runs as it stands, on fewer days, and its figure is there."""

from __future__ import annotations

import re
import runpy
import shutil
from pathlib import Path

EXAMPLE = Path(__file__).parents[1] / "examples" / "slot_watch"


def test_the_cells_of_the_slot_watch_run_one_after_the_other(tmp_path, capsys):
    for name in ("dynamics.py", "slot.py", "look.py"):
        shutil.copy(EXAMPLE / name, tmp_path)
    text = (EXAMPLE / "study.toml").read_text()
    shorter = {"end = 28.0": "end = 2.0", "outputs = 113": "outputs = 9", "arcs = 56": "arcs = 4",
               "members = 20000": "members = 2000"}  # fmt: skip
    for old, new in shorter.items():
        assert text.count(old) == 1
        text = text.replace(old, new)
    (tmp_path / "study.toml").write_text(text)
    runpy.run_path(str(tmp_path / "look.py"))
    picture = (tmp_path / "study.work" / "look.png").read_bytes()
    assert picture.startswith(b"\x89PNG")
    assert len(picture) > 50_000
    told = capsys.readouterr().out
    # within two days it cannot leave a slot of 0.12 degrees
    assert re.search(r"least likely inside on day [\d.]+: 1.000 \(0.99\d to 1.000\)", told)
    assert "trusted to day 2 of 2" in told
    # half as strong a noise beside the start, which keeps its part
    before, after = map(float, re.search(r"end: ([\d.]+) deg, then ([\d.]+)", told).groups())
    assert 0.5 * before <= after <= before


def test_cells_are_marked_as_editors_know_them():
    lines = (EXAMPLE / "look.py").read_text().splitlines()
    marks = [line for line in lines if line.startswith("# %%")]
    assert lines[0] == "# %% [markdown]"
    assert set(marks) == {"# %%", "# %% [markdown]"}
    assert len(marks) >= 10
