"""Figures and the page of a result; loaded when first asked for: matplotlib is slow to load."""

from __future__ import annotations

from importlib import import_module
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from nipc.report import figures
    from nipc.report.page import write_page
    from nipc.report.saving import save_figures

__all__ = ["figures", "save_figures", "write_page"]

_HOMES = {"save_figures": "nipc.report.saving", "write_page": "nipc.report.page"}


def __getattr__(name: str) -> Any:
    if name == "figures":
        return import_module("nipc.report.figures")
    if name in _HOMES:
        return getattr(import_module(_HOMES[name]), name)
    raise AttributeError(f"module {__name__!r} has no attribute {name!r}")
