"""A handful of runs that find the usual mistakes before a night of them.

Five printed digits, a state that is not restored, a noise that is not heard, a unit that is wrong:
each would go into the expansions without a word. What is asked: is it deterministic, does a
scaled noise change the motion in proportion, does a restart from the middle reproduce an
uninterrupted run, does the output carry digits enough.
"""

from __future__ import annotations

import tempfile
from dataclasses import dataclass
from pathlib import Path
from typing import Protocol, runtime_checkable

import numpy as np

from nipc.arrays import FloatArray
from nipc.problem.noise import Forcing, NoiseModel
from nipc.runs.engine import Engine
from nipc.runs.ledger import Ledger
from nipc.runs.outcomes import Outcomes
from nipc.runs.policy import FailurePolicy
from nipc.runs.propagator import Batch, Propagator

EXACT = 1e-15  # relative differences below this are rounding


@dataclass(frozen=True)
class ProbeFinding:
    """What was found on one topic, whether it is good, and what to do about it."""

    topic: str
    good: bool
    found: str
    advice: str = ""

    def __str__(self) -> str:
        mark = "good" if self.good else "LOOK"
        return f"{mark}  {self.topic}: {self.found}" + (f" {self.advice}" if self.advice else "")


@dataclass(frozen=True)
class ProbeReport:
    """All findings; `seconds` is the time of one run."""

    findings: tuple[ProbeFinding, ...]
    seconds: float

    @property
    def good(self) -> bool:
        return all(f.good for f in self.findings)

    def __str__(self) -> str:
        return "\n".join(map(str, self.findings))


@runtime_checkable
class CountsLegs(Protocol):
    """A propagator that divides its arcs and can tell how finely it should."""

    @property
    def legs(self) -> int | None: ...

    def legs_needed(self, batch: Batch) -> int: ...


@runtime_checkable
class ReadsTable(Protocol):
    """A propagator whose noise comes as a table, read by straight lines with an error."""

    def table_error(self, model: NoiseModel) -> float: ...


def probe(
    propagator: Propagator,
    batch: Batch,
    state_names: tuple[str, ...],
    *,
    tolerance: float = 0.01,
    time_limit: float | None = None,
    arc_noise: NoiseModel | None = None,
) -> ProbeReport:
    """Findings on a propagator from a few runs of one arc.

    `batch` holds some four runs, of different starts and paths, over three times at the least.
    `tolerance` is what the study asks for, as a share of the spread. `arc_noise` is the noise of an
    arc with the most terms that it may get, where that is not the batch's.
    """
    noise = arc_noise or batch.forcing.model
    return _Probe(propagator, batch, state_names, tolerance, time_limit, noise).report()


class _Probe:
    def __init__(
        self,
        propagator: Propagator,
        batch: Batch,
        names: tuple[str, ...],
        tolerance: float,
        limit: float | None,
        arc_noise: NoiseModel,
    ) -> None:
        self.propagator, self.batch, self.names = propagator, batch, names
        self.tolerance, self.limit, self.arc_noise = tolerance, limit, arc_noise
        self.n = len(batch)

    def report(self) -> ProbeReport:
        asked = self._with_scaled_noise()
        first = self._ask(asked)
        base = first.states[: self.n]
        seconds = float(np.mean(first.seconds[: self.n]))
        findings = [self._time(first, seconds)]
        if not first.ok[: self.n].all():
            reasons = [r for r in first.reasons[: self.n] if r is not None]
            count = int((~first.ok[: self.n]).sum())
            findings.append(
                ProbeFinding(
                    "runs", False, f"{count} of {self.n} runs failed: {reasons[0]}.",
                    "Nothing else can be told until they succeed.",
                )
            )  # fmt: skip
            return ProbeReport(tuple(findings), seconds)
        self.spread = _spread(base)
        findings += [self._start(base), self._repeat(asked, first)]
        if self.propagator.vectorised:
            findings.append(self._alone(base))
        findings += self._noise(first)
        if isinstance(self.propagator, ReadsTable) and self.batch.forcing.n_sources:
            findings.append(self._table(self.propagator.table_error(self.arc_noise)))
        findings += [self._restart(base, first), self._digits(base)]
        if isinstance(self.propagator, CountsLegs):
            findings.append(self._legs(self.propagator))
        return ProbeReport(tuple(findings), seconds)

    def _ask(self, batch: Batch) -> Outcomes:
        """Fresh runs in a process of their own, so that a crash is a finding too."""
        policy = FailurePolicy(retries=0, tolerated=1.0)
        with (
            tempfile.TemporaryDirectory(prefix="nipc-probe-") as folder,
            Ledger.open(Path(folder)) as ledger,
            Engine(
                self.propagator, ledger, time_limit=self.limit, policy=policy
            ) as engine,
        ):  # fmt: skip
            return engine.run(batch, "probe")

    def _with_scaled_noise(self) -> Batch:
        """The batch, then its first run without noise and with 1, 1/2 and -1 of each source."""
        batch, model = self.batch, self.batch.forcing.model
        rows = [np.zeros(model.size)]
        for j in range(len(model.sources)):
            for scale in (1.0, 0.5, -1.0):
                row = np.zeros(model.size)
                row[model.columns(j)] = scale * batch.forcing.coefficients[0, model.columns(j)]
                rows.append(row)
        chosen = np.concatenate([np.arange(self.n), np.zeros(len(rows), dtype=np.int64)])
        coefficients = np.vstack([batch.forcing.coefficients, rows])
        return Batch(
            batch.states[chosen], batch.times, Forcing(model, coefficients),
            batch.parameters[chosen],
        )  # fmt: skip

    # -- findings --------------------------------------------------------------------------------

    def _time(self, first: Outcomes, seconds: float) -> ProbeFinding:
        return ProbeFinding("time", True, f"a run of the arc takes {_duration(seconds)}.")

    def _start(self, base: FloatArray) -> ProbeFinding:
        gap = np.abs(base[:, 0] - self.batch.states).max(axis=0)
        c, ratio = self._worst(gap)
        if ratio <= 1e-3 * self.tolerance:
            return ProbeFinding("start", True, "the first state is the start that was given.")
        return ProbeFinding(
            "start", False,
            f"the first state is not the start that was given: {self.names[c]} differs by "
            f"{gap[c]:.3g}.",
            "Check the units and the order of the state in the input and the output, and whether "
            "the first row that is read is that of the start.",
        )  # fmt: skip

    def _repeat(self, asked: Batch, first: Outcomes) -> ProbeFinding:
        again = self._ask(asked)
        if np.array_equal(again.states, first.states, equal_nan=True):
            return ProbeFinding(
                "deterministic", True, "the same runs gave the same numbers, bit for bit."
            )
        gap = np.nan_to_num(np.abs(again.states - first.states)).max(axis=(0, 1))
        c, ratio = self._worst(gap)
        return ProbeFinding(
            "deterministic", ratio <= 1e-3 * self.tolerance,
            f"the same runs gave {self.names[c]} different by {gap[c]:.3g}, {ratio:.1g} of the "
            "spread.",
            "Fix its seed, its threads, and variables that are used before they are set; kept runs "
            "cannot be reproduced otherwise.",
        )  # fmt: skip

    def _alone(self, base: FloatArray) -> ProbeFinding:
        alone = self._ask(self.batch.take(slice(0, 1))).states
        gap = np.nan_to_num(np.abs(alone - base[:1])).max(axis=(0, 1))
        c, ratio = self._worst(gap)
        return ProbeFinding(
            "batch", ratio <= 0.1 * self.tolerance,
            "a run by itself gives what it gives in a batch"
            + (", bit for bit." if not gap.any() else f", to {ratio:.1g} of the spread."),
            "" if ratio <= 0.1 * self.tolerance else
            f"{self.names[c]} differs by {gap[c]:.3g}: runs of a batch disturb each other.",
        )  # fmt: skip

    def _noise(self, first: Outcomes) -> list[ProbeFinding]:
        """For each source: is it heard, in proportion, with its sign, and how strongly."""
        findings = []
        still = first.states[self.n]
        times = self.batch.times
        for j, name in enumerate(self.batch.forcing.names):
            full, half, opposite = (
                first.states[self.n + 1 + 3 * j + k] - still for k in range(3)
            )  # fmt: skip
            size = np.nan_to_num(np.abs(full)).max(axis=0)
            scale = np.maximum(np.nan_to_num(np.abs(still)).max(axis=0), 1e-300)
            c = int(np.argmax(size / np.maximum(self.spread, 1e-300)))
            if not size.any() or size[c] <= EXACT * scale[c]:
                findings.append(
                    ProbeFinding(
                        f"noise {name}", False, "the motion does not change with it.",
                        "Is the forcing read at all, from the right column?",
                    )
                )  # fmt: skip
                continue
            last = int(np.flatnonzero(np.isfinite(full[:, c]))[-1])
            growth = _ratio(full[last, c], half[last, c])
            mirror = _ratio(opposite[last, c], full[last, c])
            gain = self._gain(j, full)
            good = abs(growth - 2.0) < 0.2 and abs(mirror + 1.0) < 0.2
            advice = "" if good else (
                "A noise twice as large should do about twice as much, one of the other sign the "
                "opposite: is it squared, clipped, or made positive? If the motion is strongly "
                "nonlinear this is as it should be, and shorter arcs help."
            )  # fmt: skip
            findings.append(
                ProbeFinding(
                    f"noise {name}", good,
                    f"twice the noise moves {self.names[c]} {growth:.3g} times as far, the "
                    f"opposite noise {mirror:.3g} times; by t = {times[1]:g} {gain}.", advice,
                )
            )  # fmt: skip
        return findings

    def _gain(self, source: int, full: FloatArray) -> str:
        """How strongly the noise's integral over the first interval moves each component."""
        row = np.zeros_like(self.batch.forcing.coefficients[:1])
        columns = self.batch.forcing.model.columns(source)
        row[0, columns] = self.batch.forcing.coefficients[0, columns]
        forcing = Forcing(self.batch.forcing.model, row)
        impulse = float(forcing.increments(self.batch.times[:2])[0, 0, source])
        c = int(np.argmax(np.abs(full[1]) / np.maximum(self.spread, 1e-300)))
        if impulse == 0 or not np.isfinite(full[1, c]):
            return "nothing can be told of its strength"
        return (
            f"its integral has moved {self.names[c]} by {full[1, c] / impulse:.3g} times itself "
            "(1000, 86400 and the like are a wrong unit, a factor below zero may be a wrong sign)"
        )

    def _restart(self, base: FloatArray, first: Outcomes) -> ProbeFinding:
        batch, middle = self.batch, self.batch.times.size // 2
        known = np.flatnonzero(np.isfinite(base[:, -1]).all(axis=1))
        if not known.size:
            return ProbeFinding("restart", True, "every run ended early, so it was not tried.")
        half = batch.take(known)
        half = Batch(base[known, middle], batch.times[middle:], half.forcing, half.parameters)
        found = self._ask(half)
        if not found.ok.all():
            reason = next(r for r in found.reasons if r is not None)
            return ProbeFinding(
                "restart", False, f"a start at t = {batch.times[middle]:g} failed: {reason}.",
                "Arcs start at other times than the clock's: the program must take them.",
            )  # fmt: skip
        gap = np.abs(found.states[:, -1] - base[known, -1]).max(axis=0)
        c, ratio = self._worst(gap)
        size = max(float(np.abs(base[known, -1, c]).max()), 1e-300)
        digits = "all" if gap[c] == 0 else f"{max(0.0, -np.log10(gap[c] / size)):.0f}"
        good = ratio <= 0.1 * self.tolerance
        return ProbeFinding(
            "restart", good,
            f"a restart from the middle reproduces the uninterrupted run to {digits} digits, "
            f"{ratio:.1g} of the spread.",
            "" if good else "Print and read the state with 16 digits; restore all of the state, "
            "its time and its unit; let nothing depend on the time since the program's start.",
        )  # fmt: skip

    def _digits(self, base: FloatArray) -> ProbeFinding:
        """The least digits with which every printed number can be written."""
        values = base[:, 1:].reshape(-1, base.shape[2])
        digits = [max((_digits_of(v) for v in column), default=17) for column in values.T]
        size = np.nan_to_num(np.abs(values)).max(axis=0)
        step = np.where(np.array(digits) >= 15, 0.0, size * 10.0 ** (1.0 - np.array(digits)))
        c, ratio = self._worst(step)
        if ratio <= 0.01 * self.tolerance:
            return ProbeFinding("digits", True, "the output carries digits enough.")
        return ProbeFinding(
            "digits", False,
            f"{self.names[c]} comes with {digits[c]} digits: its last one is {ratio:.1g} of the "
            "spread.",
            "Print more digits; an expansion fits the rounding otherwise.",
        )  # fmt: skip

    def _table(self, error: float) -> ProbeFinding:
        """An error of a variance, which may add up twice: a quarter of the tolerance is allowed."""
        told = (
            "straight lines between the rows of the table of noise have an error of "
            f"{error:.1g} of its variance."
        )  # fmt: skip
        if error <= 0.25 * self.tolerance:
            return ProbeFinding("table", True, told)
        return ProbeFinding(
            "table", False, told,
            "Every run would share that error, and no check sees it: make the step of the forcing "
            "smaller, or give the source fewer terms.",
        )  # fmt: skip

    def _legs(self, propagator: CountsLegs) -> ProbeFinding:
        needed = propagator.legs_needed(self.batch.take(slice(0, min(2, self.n))))
        if propagator.legs is None:
            return ProbeFinding(
                "legs", True, f"with legs = {needed} the kicks have converged.",
                f'Say legs = {needed} in place of "auto": that spares most of the runs.',
            )  # fmt: skip
        good = propagator.legs >= needed
        return ProbeFinding(
            "legs", good,
            f"with legs = {needed} the kicks have converged; the study says {propagator.legs}.",
            "" if good else f"Say legs = {needed}, or allow a larger tolerance of the kicks.",
        )  # fmt: skip

    def _worst(self, gap: FloatArray) -> tuple[int, float]:
        """The component whose gap is largest beside its spread, and how large."""
        ratio = np.where(gap > 0, gap / np.maximum(self.spread, 1e-300), 0.0)
        c = int(np.argmax(ratio))
        return c, float(ratio[c])


def _spread(base: FloatArray) -> FloatArray:
    """(d,) largest standard deviation over the runs at any time; where none, of the path."""
    spread = np.nan_to_num(np.nanstd(base, axis=0)).max(axis=0)
    path = np.nan_to_num(np.nanstd(base, axis=(0, 1)))
    return np.where(spread > 0, spread, np.where(path > 0, path, 1.0))


def _ratio(value: float, to: float) -> float:
    return float(value / to) if to else float("inf")


def _digits_of(value: float) -> int:
    if not np.isfinite(value) or value == 0:
        return 0
    for digits in range(1, 17):
        if float(f"{value:.{digits - 1}e}") == value:
            return digits
    return 17


def _duration(seconds: float) -> str:
    if seconds < 1e-3:
        return f"{seconds * 1e6:.0f} microseconds"
    return f"{seconds * 1e3:.3g} ms" if seconds < 1 else f"{seconds:.3g} s"
