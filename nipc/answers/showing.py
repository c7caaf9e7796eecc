"""How a result shows itself in a notebook."""

from __future__ import annotations

import numpy as np
import xarray as xr

from nipc import markup
from nipc.answers.reading import View
from nipc.answers.wording import number

MARKS = {
    "†": "† past the trust horizon of single paths; the distribution still agrees",
    "‡": "‡ past every trust horizon, or not checked: do not rely on it",
}


def shown(dataset: xr.Dataset, findings: tuple[str, ...]) -> str:
    """The findings, a row a quantity at the end of the horizon, and the arcs."""
    views = [View(dataset, str(name)) for name in dataset["quantity"].values]
    rows, marks = [], set()
    for view in views:
        mark = _mark(view)
        marks.add(mark)
        cells = [f"{number(_end(view, 'mean'))} ± {number(_end(view, 'std'), 2)} {view.unit}"]
        for name in ("inside_probability", "survival_probability"):
            value = _end(view, name)
            cells.append("" if np.isnan(value) else f"{value:.4g}")
        trust = view.value("trust_horizon")
        until = "not checked" if np.isnan(trust) else f"{number(trust)} {view.clock}"
        rows.append((view.name, *(c.rstrip() + mark if c else "–" for c in cells), until))
    end = f"{number(float(views[0].times[-1]))} {views[0].clock}".strip()
    heads = (f"at {end}", "mean ± std", "in its box", "stayed in it", "trusted to")
    parts = [
        markup.table(rows, heads),
        *(markup.paragraph(words) for mark, words in MARKS.items() if mark in marks),
        markup.listed(findings),
    ]
    if "arc_start" in dataset and dataset.sizes["arc"] > 1:
        parts.append(markup.folded(f"{dataset.sizes['arc']} arcs", _arcs(dataset)))
    return markup.headed(str(dataset.attrs.get("title", "A result")), *parts)


def shown_arcs(dataset: xr.Dataset) -> str:
    """The arcs, a row each."""
    count = dataset.sizes.get("arc", 0)
    return markup.headed(f"{count} arc" + "s" * (count != 1), _arcs(dataset))


def _end(view: View, name: str) -> float:
    """A variable's value at the end of the horizon, NaN where there is none."""
    if name not in view.data:
        return float("nan")
    return float(view.data[name].isel(time=-1).item())


def _mark(view: View) -> str:
    """As on the page: nothing while single paths are trusted to the end."""
    end = view.times[-1] * (1.0 - 1e-12)
    if view.value("trust_horizon") >= end:
        return ""
    return "†" if view.value("trust_horizon_distribution") >= end else "‡"


def _arcs(dataset: xr.Dataset) -> str:
    names = [n for n in ("end", "degree", "terms", "runs", "failed", "error", "note")
             if f"arc_{n}" in dataset]  # fmt: skip
    columns = [dataset[f"arc_{name}"].values for name in ("start", *names)]
    rows = [
        [str(k + 1), *(str(v) if isinstance(v, str) else number(float(v), 4) for v in row)]
        for k, row in enumerate(zip(*columns, strict=True))
    ]
    return markup.table(rows, ("arc", "from", *("to" if n == "end" else n for n in names)))
