"""The problem as its user describes it."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated, Any, Literal

import numpy as np
from pydantic import BaseModel, ConfigDict, Field, PrivateAttr, model_validator

from nipc import markup
from nipc.arrays import FloatArray
from nipc.problem.charts import ChartSettings
from nipc.problem.noise import BASES, NoiseBasis, Source
from nipc.problem.parameters import Finite, Fixed, Name, Parameter, Positive
from nipc.problem.start import Start, read_matrix
from nipc.problem.units import SECONDS, TimeUnit

Reference = Annotated[str, Field(pattern=r"^[A-Za-z_][\w./-]*:[A-Za-z_]\w*$")]
Count = Annotated[int, Field(ge=1)]
Share = Annotated[float, Field(gt=0, lt=1)]


class _Section(BaseModel):
    # strict: 0.1 in quotes or `true` where a number belongs is a mistake, not a number
    model_config = ConfigDict(extra="forbid", frozen=True, strict=True)


class PropagatorSettings(BaseModel):
    """Which adapter wraps the propagator; all other keys are the adapter's own."""

    model_config = ConfigDict(extra="allow", frozen=True)
    adapter: str

    @property
    def settings(self) -> dict[str, Any]:
        return dict(self.model_extra or {})


class Clock(_Section):
    """The horizon, its unit and the output times.

    `outputs` is a number of evenly spaced times, ends included, or the times themselves. `period`
    is a characteristic period of the motion, a hint for arcs, noise terms and slow averages.
    """

    start: Finite = 0.0
    end: Finite
    unit: str = "s"
    outputs: (
        Annotated[int, Field(ge=2, le=1_000_000)] | Annotated[list[Finite], Field(min_length=1)]
    ) = 101
    period: Positive | None = None

    @model_validator(mode="after")
    def _ordered(self) -> Clock:
        if self.end <= self.start:
            raise ValueError(f"end = {self.end:g} must come after start = {self.start:g}")
        if isinstance(self.outputs, list):
            times = np.array(self.outputs)
            if np.any(np.diff(times) <= 0):
                raise ValueError("outputs must increase from each time to the next")
            if times[0] < self.start or times[-1] > self.end:
                raise ValueError("outputs must lie between start and end")
        return self

    @property
    def length(self) -> float:
        return self.end - self.start

    @property
    def times(self) -> FloatArray:
        """(T,) output times."""
        if isinstance(self.outputs, int):
            return np.linspace(self.start, self.end, self.outputs)
        return np.array(self.outputs)


class Component(_Section):
    """One state component; `std` is the standard deviation of its start."""

    name: Name
    unit: str = ""
    mean: Finite = 0.0
    std: Annotated[float, Field(ge=0, allow_inf_nan=False)] | None = None


class StartSettings(_Section):
    """A full covariance of the start, inline or from a table in a file."""

    covariance: list[list[float]] | None = None
    covariance_file: str | None = None


class NoiseSettings(_Section):
    """One noise source and the basis it is expanded on.

    White: intensity is per square root of time, so that a velocity it drives has variance
    intensity^2 t. The time is the clock's unit, or the one that `per` names: 2e-8 km/s^1.5 beside a
    clock in days is intensity = 2e-8, per = "s", and the propagator still gets km/s^2.
    Gauss-Markov: intensity is the stationary standard deviation.
    """

    name: Name
    unit: str = ""
    intensity: Positive
    per: TimeUnit | None = None
    kind: Literal["white", "gauss-markov"] = "white"
    time_constant: Positive | None = None
    basis: Literal["legendre", "karhunen-loeve", "completed"] = "legendre"
    terms: Annotated[int, Field(ge=1, le=200)] | Literal["auto"] = "auto"
    enters: Literal["additive", "multiplicative"] = "additive"
    calculus: Literal["stratonovich", "ito"] = "stratonovich"

    @model_validator(mode="after")
    def _time_constant(self) -> NoiseSettings:
        if self.kind == "gauss-markov" and self.time_constant is None:
            raise ValueError("a gauss-markov source needs its time_constant")
        if self.kind == "white" and self.time_constant is not None:
            raise ValueError(
                'a white source has no time_constant; leave it out, or say kind = "gauss-markov"'
            )
        return self

    def source(self, clock_unit: str) -> Source:
        """The source, its intensity per square root of the clock's unit."""
        factor = 1.0
        if self.per is not None and self.kind == "white":
            factor = (SECONDS[self.per] / SECONDS[clock_unit]) ** 0.5
        return Source(self.name, self.unit, self.intensity * factor, self.kind, self.time_constant)

    def expanded_on(self, terms: int) -> NoiseBasis:
        return BASES[self.basis](terms)

    def __str__(self) -> str:
        memory = "" if self.time_constant is None else f", time constant {self.time_constant:g}"
        strength = f"{self.intensity:g} {self.unit}".strip()
        return f"{self.name}: {self.kind}{memory}, {strength}, {self.basis} basis"


class QuantitySettings(_Section):
    """A scalar function of time, state and parameters, and the box it should stay in."""

    name: Annotated[str, Field(min_length=1, max_length=60)]
    unit: str = ""
    component: str | None = None
    expression: str | None = None
    function: Reference | None = None
    box: Annotated[list[float], Field(min_length=2, max_length=2)] | None = None
    slow: bool = True

    @model_validator(mode="after")
    def _one_definition(self) -> QuantitySettings:
        given = [k for k in ("component", "expression", "function") if getattr(self, k) is not None]
        if len(given) > 1:
            raise ValueError(
                "give only one of component, expression, function; found " + " and ".join(given)
            )
        if self.box is not None and not self.box[0] < self.box[1]:
            raise ValueError(
                f"box = [{self.box[0]:g}, {self.box[1]:g}]: its low end must lie "
                "below its high end (inf and -inf are allowed)"
            )
        return self

    def __str__(self) -> str:
        if self.box is None:
            return self.name + (f" ({self.unit})" if self.unit else "")
        return f"{self.name}, box {self.box[0]:g} to {self.box[1]:g} {self.unit}".rstrip()


class JointBox(_Section):
    """The event that several quantities are inside their boxes at once."""

    name: Name
    quantities: Annotated[list[str], Field(min_length=2)]


class DesignSettings(_Section):
    """Germ nodes at which the propagator is run on a single arc.

    `sparse-grid` takes a level; the others a number of runs, by default `oversampling` runs a term.
    """

    kind: Literal["near-optimal", "sparse-grid", "sobol", "latin-hypercube"] = "near-optimal"
    level: Annotated[int, Field(ge=1, le=6)] = 2
    runs: Count | None = None
    oversampling: Annotated[float, Field(ge=1.05, le=20)] = 1.5


class ExpansionSettings(_Section):
    """How a single arc is expanded and fitted.

    A term is kept when (sum_i degree_i^norm)^(1/norm) <= degree, and at most `interactions` of
    its variables differ from degree zero. Degree "auto" starts with few runs and adds runs and
    degrees until the error estimate keeps the study's tolerance or the budget is spent.
    """

    degree: Annotated[int, Field(ge=0, le=12)] | Literal["auto"] = 2
    norm: Annotated[float, Field(gt=0, le=1)] = 1.0
    interactions: Count | None = None
    fit: Literal["least-squares", "least-angle"] = "least-squares"


class ChainSettings(_Section):
    """How the horizon is cut into arcs, and how far an arc's polynomial may go.

    `arcs` is a number of equal arcs, or "auto": half a period each at first, then halved where a
    higher degree does not bring the held-out runs within the tolerance, and longer where that is
    easy. Where the held-out paths over the whole horizon are off by more than the tolerance, the
    coarser arcs are done again, at most `rounds` times. Members far outside an arc's design are run
    directly, at most as many as `direct_share` of the arcs' own runs.
    """

    arcs: Count | Literal["auto"] = 1
    state_degree: Annotated[int, Field(ge=1, le=9)] | Literal["auto"] = "auto"
    noise_degree: Annotated[int, Field(ge=1, le=4)] = 2
    largest_degree: Annotated[int, Field(ge=1, le=9)] = 5
    oversampling: Annotated[float, Field(ge=1.05, le=20)] = 1.4
    arc_tolerance: Share | None = None
    rounds: Annotated[int, Field(ge=0, le=5)] = 2
    direct_share: Annotated[float, Field(ge=0, le=10, allow_inf_nan=False)] = 0.5


class EnsembleSettings(_Section):
    """Germ samples pushed through the expansions."""

    members: Annotated[int, Field(ge=200, le=10_000_000)] = 20_000


class CheckSettings(_Section):
    """Held-out direct runs of the whole horizon.

    With `richness` 2 or more their noise has so many times the terms that the expansions see, and
    the path error also holds what the noise bases lose inside an arc. The distribution counts as
    right while mean and standard deviation are shown to be off by no more than `distribution` of
    the spread.
    """

    runs: Annotated[int, Field(ge=2)] = 8
    richness: Annotated[int, Field(ge=1, le=4)] = 1
    distribution: Share = 0.05


class RunSettings(_Section):
    """How runs are made and how many of them may fail."""

    time_limit: Positive | None = None
    retries: Annotated[int, Field(ge=0, le=10)] = 1
    tolerated_failures: Annotated[float, Field(ge=0, lt=1)] = 0.1


class Study(_Section):
    """One problem: propagator, clock, state, noise, quantities, and how to answer.

    The same tables as in a study file. `folder` is where relative paths start; `load_study` sets
    it to the file's folder.
    """

    title: Annotated[str, Field(min_length=1, max_length=200)]
    seed: Annotated[int, Field(ge=0, lt=2**63)] = 1
    tolerance: Share = 0.01
    propagator: PropagatorSettings
    clock: Clock
    state: Annotated[list[Component], Field(min_length=1)]
    start: StartSettings = StartSettings()
    parameter: list[Parameter] = []
    noise: list[NoiseSettings] = []
    quantity: Annotated[list[QuantitySettings], Field(min_length=1)]
    joint_box: list[JointBox] = []
    chart: ChartSettings | None = None
    design: DesignSettings = DesignSettings()
    expansion: ExpansionSettings = ExpansionSettings()
    chain: ChainSettings = ChainSettings()
    ensemble: EnsembleSettings = EnsembleSettings()
    check: CheckSettings = CheckSettings()
    runs: RunSettings = RunSettings()
    budget: Positive | None = None

    _folder: Path = PrivateAttr(default_factory=Path.cwd)
    _text: str = PrivateAttr(default="")
    _name: str = PrivateAttr(default="study")

    @model_validator(mode="after")
    def _consistent(self, info: Any) -> Study:
        from nipc.errors import StudyError
        from nipc.problem.consistency import findings

        context = info.context or {}
        if "folder" in context:
            object.__setattr__(self, "_folder", Path(context["folder"]))
        # a file's loader looks for inconsistencies itself, to report them with all else
        if not context.get("checked"):
            found = findings(self.model_dump(), self._folder)
            if found:
                raise StudyError(found)
        return self

    def _repr_html_(self) -> str:
        rows = [(head, "\n".join(lines)) for head, lines in self.summary()]
        return markup.headed(self.title, markup.table(rows))

    def summary(self) -> list[tuple[str, list[str]]]:
        """What the study is made of: heads and their lines, in the order of a study file."""
        clock, law = self.clock, self.start_law()
        spread = np.linalg.norm(law.factor, axis=1)
        start = [
            f"{c.name} = {c.mean:g}" + (f" ± {s:g}" if s else "") + f" {c.unit}".rstrip()
            for c, s in zip(self.state, spread, strict=True)
        ]
        span = f"{clock.start:g} to {clock.end:g} {clock.unit}, {clock.times.size} outputs"
        return [
            ("propagator", [f"adapter {self.propagator.adapter}"]),
            ("clock", [span]),
            ("state", start),
            ("parameters", list(self.parameter_names) or ["none"]),
            ("noise", [str(noise) for noise in self.noise] or ["none"]),
            ("quantities", [str(quantity) for quantity in self.quantity]),
            ("arcs", [str(self.chain.arcs)]),
            ("chart", ["none" if self.chart is None else self.chart.name]),
        ]

    @property
    def folder(self) -> Path:
        return self._folder

    @property
    def name(self) -> str:
        return self._name

    @property
    def text(self) -> str:
        """The study file as it was read, empty for a study made in Python."""
        return self._text

    @property
    def state_names(self) -> tuple[str, ...]:
        return tuple(c.name for c in self.state)

    @property
    def parameter_names(self) -> tuple[str, ...]:
        return tuple(p.name for p in self.parameter)

    @property
    def source_names(self) -> tuple[str, ...]:
        return tuple(n.name for n in self.noise)

    @property
    def uncertain_parameters(self) -> tuple[int, ...]:
        """Positions of the parameters that have a law."""
        return tuple(i for i, p in enumerate(self.parameter) if not isinstance(p, Fixed))

    def start_law(self) -> Start:
        """The start's mean and covariance factor."""
        mean = np.array([c.mean for c in self.state])
        if self.start.covariance is not None:
            covariance = np.array(self.start.covariance, dtype=float)
        elif self.start.covariance_file is not None:
            covariance = read_matrix(self.folder / self.start.covariance_file)
        else:
            covariance = np.diag([(c.std or 0.0) ** 2 for c in self.state])
        return Start.from_covariance(mean, covariance)
