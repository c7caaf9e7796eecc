"""One HTML file that holds a whole result: no network, no scripts needed, made to be reviewed."""

from __future__ import annotations

from dataclasses import asdict, dataclass, field
from importlib.resources import files
from pathlib import Path
from typing import Any

import numpy as np
import xarray as xr

from nipc.report import headline, hover, panel, provenance, reading, tables
from nipc.report.numbers import amount, number
from nipc.report.style import DARK, LIGHT, STROKES

POINTS = 600
"""Times kept in the page; figures a few inches wide show no more."""

PAIRED = ("driver_shares", "driver_ranking")
"""Figures of a quantity that stand side by side, before others of their section."""

SCRIPTS = ("clock.js", "chart.js", "panel.js")

SECTIONS = (
    ("spread", "Where it goes", ("bands", "density", "chart_density")),
    ("stays", "Stays or leaves", ("confinement", "joint_confinement")),
    ("drivers", "What drives it", ("driver_shares", "driver_ranking", "driver_bands")),
    (
        "kind",
        "Kind of spreading",
        ("diffusion", "spread_rate", "lyapunov_exponents", "nonlinear_share"),
    ),
    (
        "trust",
        "How far to trust it",
        ("check_error", "coefficient_decay", "direct_against_expansion", "noise_kept"),
    ),
    ("cost", "What it cost", ("chain", "failures", "failure_places")),
)


@dataclass(frozen=True)
class Plate:
    """A numbered figure of the page."""

    key: str
    number: int
    kind: str
    quantity: str | None
    caption: str
    markup: Any
    frame: dict[str, Any] | None
    lines: list[dict[str, Any]]


@dataclass
class Section:
    """A section: its figures and tables."""

    key: str
    title: str
    plates: list[Plate] = field(default_factory=list)
    tables: list[tables.Table] = field(default_factory=list)


def write_page(dataset: xr.Dataset, path: Path) -> Path:
    """Write the page of a result to `path`; whatever the result lacks is left out.

    The file is whole by itself and below 5 MB. Returns the path.
    """
    path = Path(path)
    text = render(dataset)
    part = path.with_name(path.name + ".part")
    part.write_text(text, encoding="utf-8")
    part.replace(path)
    return path


def render(dataset: xr.Dataset) -> str:
    """The page as text."""
    from jinja2 import Environment, PackageLoader, StrictUndefined
    from markupsafe import Markup

    environment = Environment(
        loader=PackageLoader("nipc.report", "templates"),
        autoescape=True,
        undefined=StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
    )
    small = thinned(dataset)
    sections = _sections(small)
    keys = [section.key for section in sections]
    templates = files("nipc.report") / "templates"
    return environment.get_template("page.html.j2").render(
        title=str(dataset.attrs.get("title") or "A study"),
        findings=headline.findings(dataset),
        columns=headline.columns(dataset),
        rows=headline.rows(dataset),
        cost=headline.cost(dataset),
        horizon=_horizon(dataset),
        sections=sections,
        values=[tables.moments(dataset, q) for q in reading.quantities(dataset)],
        whatif_after="drivers" if "drivers" in keys else "".join(keys[:1]),
        study=str(dataset.attrs.get("study", "")),
        provenance=provenance.origin(dataset),
        cautions=provenance.cautions(dataset),
        notes=[str(note) for note in reading.listed(dataset, "notes") or []],
        clock={
            "times": hover.compact(reading.times(small), "digits:9"),
            "unit": reading.time_unit(small),
        },
        css=Markup((templates / "page.css").read_text("utf-8")),
        script=Markup("\n".join((templates / name).read_text("utf-8") for name in SCRIPTS)),
        whatif=panel.stored(small),
        remarks=panel.remarks(small),
        warning=panel.warning(small),
        whatif_first=panel.first(small),
        light=LIGHT,
        dark=DARK,
        inks=[stroke.ink for stroke in STROKES],
    )


def thinned(dataset: xr.Dataset) -> xr.Dataset:
    """At most so many times that the page stays small however many quantities there are."""
    count = dataset.sizes["time"]
    limit = int(np.clip(4 * POINTS / max(dataset.sizes["quantity"], 1), 100, POINTS))
    if count <= limit:
        return dataset
    return dataset.isel(time=np.unique(np.linspace(0, count - 1, limit).round().astype(int)))


def _sections(dataset: xr.Dataset) -> list[Section]:
    from markupsafe import Markup

    from nipc.report.figures import catalogue
    from nipc.report.svg import inline

    built = {key: Section(key, title) for key, title, _ in SECTIONS}
    entries, names = list(catalogue(dataset)), reading.quantities(dataset)
    counter = 0
    for key, _, kinds in SECTIONS:
        chosen = [entry for entry in entries if entry.name in kinds]
        if key == "drivers":  # a quantity's two figures side by side
            chosen.sort(key=lambda e: (e.name not in PAIRED, names.index(e.quantity or "")))
        elif key == "trust":  # all quantities first, then each
            chosen.sort(key=lambda e: kinds.index(e.name))
        for entry in chosen:
            try:
                axes = entry.draw()
            except KeyError:
                # there, but empty: a chain that stopped at once has a check of the start only
                continue
            counter += 1
            first = axes[0] if isinstance(axes, tuple) else axes
            drawing = inline(first.figure, f"f{counter}")
            lines = hover.lines(dataset, entry.name, entry.quantity) if drawing.frame else []
            built[key].plates.append(
                Plate(
                    f"f{counter}",
                    counter,
                    entry.name,
                    entry.quantity,
                    entry.caption,
                    Markup(drawing.markup),
                    asdict(drawing.frame) if drawing.frame else None,
                    hover.block(lines),
                )
            )
    for key, maker in (
        ("stays", tables.joint_boxes),
        ("stays", tables.exits),
        ("drivers", tables.allowances),
        ("kind", tables.laws),
        ("cost", tables.arcs),
    ):
        table = maker(dataset)
        if table is not None:
            built[key].tables.append(table)
    return [section for section in built.values() if section.plates or section.tables]


def _horizon(dataset: xr.Dataset) -> str:
    times, unit = reading.times(dataset), reading.time_unit(dataset)
    return f"from {number(times[0], 5)} to {amount(times[-1], unit, 5)}"
