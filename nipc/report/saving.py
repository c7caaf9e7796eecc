"""Every figure of a result as files, for a paper or slides."""

from __future__ import annotations

from pathlib import Path

import xarray as xr


def save_figures(
    dataset: xr.Dataset, folder: Path, formats: tuple[str, ...] = ("png", "svg", "pdf")
) -> list[Path]:
    """Save every figure that the result can fill into `folder`; the files written."""
    from nipc.report.figures import catalogue
    from nipc.report.style import styled

    folder = Path(folder)
    folder.mkdir(parents=True, exist_ok=True)
    written: list[Path] = []
    stems: set[str] = set()
    for entry in catalogue(dataset):
        try:
            axes = entry.draw()
        except KeyError:  # the variable is there, but empty
            continue
        first = axes[0] if isinstance(axes, tuple) else axes
        stem = _file_name(entry.name, entry.of)
        while stem in stems:  # names that differ only in what a file name cannot hold
            stem += "_"
        stems.add(stem)
        for form in formats:
            target = folder / f"{stem}.{form}"
            with styled():
                first.figure.savefig(target, dpi=200)
            written.append(target)
    return written


def _file_name(name: str, subjects: tuple[str, ...]) -> str:
    """A figure and what it is of as a file name: ASCII letters and digits only."""
    plain = ("".join(c if c.isascii() and c.isalnum() else "_" for c in s)[:40] for s in subjects)
    return "-".join([name, *plain])
