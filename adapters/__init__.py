"""Adapters: what makes an existing program or function a propagator."""

from __future__ import annotations

from importlib.metadata import entry_points

from nipc.adapters.base import Adapter, AdapterSettings
from nipc.adapters.reference import load_function
from nipc.errors import InputError

GROUP = "nipc.adapters"


def load_adapter(name: str) -> type[Adapter]:
    """The adapter of this name among the installed ones; InputError lists those there are."""
    found = {entry.name: entry for entry in entry_points(group=GROUP)}
    if name not in found:
        raise InputError(f"there is no adapter {name!r}; installed: {', '.join(sorted(found))}")
    adapter = found[name].load()
    if not (isinstance(adapter, type) and issubclass(adapter, Adapter)):
        raise InputError(f"adapter {name!r} is not made from nipc.adapters.Adapter")
    return adapter


__all__ = ["Adapter", "AdapterSettings", "load_adapter", "load_function"]
