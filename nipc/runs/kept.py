"""An engine that answers from the ledger alone, until new runs are allowed."""

from __future__ import annotations

from collections.abc import Iterator
from contextlib import contextmanager
from typing import Any

from nipc.errors import NipcError
from nipc.runs.engine import Engine
from nipc.runs.keys import run_keys
from nipc.runs.outcomes import Outcomes
from nipc.runs.propagator import Batch


class MissingRuns(NipcError):  # noqa: N818 - nothing is wrong
    """The ledger lacks runs of a batch: at least so many."""

    def __init__(self, count: int, label: str, batch: Batch) -> None:
        self.count, self.label, self.batch = count, label, batch
        runs = "1 more run" if count == 1 else f"{count} more runs"
        super().__init__(f"at least {runs} would have to be made ({label})")


class KeptRuns(Engine):
    """An engine whose runs were all made before: MissingRuns where one was not.

    Nothing is written to the ledger. Inside `allowing`, missing runs are made as usual.
    """

    def __init__(self, *arguments: Any, **options: Any) -> None:
        super().__init__(*arguments, **options)
        self._allowed = False

    def run(self, batch: Batch, label: str) -> Outcomes:
        """Outcomes of runs that were made before."""
        if self._allowed:
            return super().run(batch, label)
        keys = dict.fromkeys(run_keys(batch, self._fingerprint))
        known = self.ledger.find(list(keys))
        missing = sum(not self._settled(known.get(key)) for key in keys)
        if missing:
            raise MissingRuns(missing, label, batch)
        return self.collect(batch)

    @contextmanager
    def allowing(self) -> Iterator[None]:
        """For the time of the block, runs may be made."""
        self._allowed = True
        try:
            yield
        finally:
            self._allowed = False
