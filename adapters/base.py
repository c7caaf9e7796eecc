"""What an adapter is: settings that can be checked without running anything, and a propagator."""

from __future__ import annotations

from abc import ABC, abstractmethod
from typing import Any, ClassVar

from pydantic import BaseModel, ConfigDict

from nipc.runs.propagator import AdapterContext, Propagator


class AdapterSettings(BaseModel):
    """The keys of a study's [propagator] table that belong to the adapter."""

    model_config = ConfigDict(extra="forbid", frozen=True)


class Adapter(ABC):
    """A way of wrapping propagators.

    A new one is a file beside this, entered in pyproject.toml under the entry-point group
    `nipc.adapters`; other packages may enter theirs in the same group.
    """

    name: ClassVar[str]
    Settings: ClassVar[type[AdapterSettings]]

    @classmethod
    @abstractmethod
    def check(cls, settings: Any, context: AdapterContext) -> None:
        """Raise InputError when the settings cannot work; must not run the user's code."""

    @classmethod
    @abstractmethod
    def build(cls, settings: Any, context: AdapterContext) -> Propagator:
        """The propagator; raise InputError when the user's code cannot be loaded."""
