"""Which source decides who leaves: total Sobol indices of the survival indicator."""

from __future__ import annotations

from collections.abc import Iterable

import numpy as np

from nipc.answers.boxes import survived
from nipc.answers.drivers import PickFreezeAccumulator
from nipc.answers.ensemble import boxes_of
from nipc.answers.table import ResultTable
from nipc.arrays import FloatArray
from nipc.problem.study import Study

EXIT_MEMBERS = 20_000

Seen = FloatArray | tuple[FloatArray, FloatArray | None]
"""Quantities (n, T, Q) of members, and when each ended physically (n,), NaN where it did not."""


class ExitDrivers:
    """Pick and freeze on "stayed in the box at all output times", for each boxed quantity."""

    def __init__(self, study: Study, groups: list[str]) -> None:
        self.boxes, _ = boxes_of(study)
        self.times = study.clock.times
        self._shares = PickFreezeAccumulator(groups)

    def update(self, a: Seen, b: Seen, mixed: Iterable[Seen]) -> None:
        """Members of two independent blocks and of the mixed ones, in group order."""

        def indicators(seen: Seen) -> FloatArray:
            values, ended = seen if isinstance(seen, tuple) else (seen, None)
            held = [survived(values, self.times, box, ended) for box in self.boxes]
            return np.stack(held, axis=1)[:, None, :]

        self._shares.update(indicators(a), indicators(b), (indicators(one) for one in mixed))

    def add_to(self, table: ResultTable) -> None:
        """exit_driver_total (source, quantity) and its interval; NaN where nobody or all leave."""
        result = self._shares.result()
        count = len(table.study.quantity)
        columns = [box.columns[0] for box in self.boxes]
        for suffix, values in (
            ("", result.total),
            ("_low", np.clip(result.total_interval.low, 0.0, 1.0)),
            ("_high", np.clip(result.total_interval.high, 0.0, 1.0)),
        ):
            full = np.full((values.shape[0], count), np.nan)
            full[:, columns] = values[:, 0]
            table.add(
                f"exit_driver_total{suffix}",
                ("source", "quantity"),
                full,
                "1",
                "total share of who leaves the box",
            )
