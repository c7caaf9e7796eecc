"""Uncertain parameters of the propagator and their laws."""

from __future__ import annotations

from typing import Annotated, Any, Literal

from pydantic import BaseModel, ConfigDict, Field, model_validator

Name = Annotated[str, Field(pattern=r"^[A-Za-z_][A-Za-z0-9_]*$", max_length=60)]
Positive = Annotated[float, Field(gt=0, allow_inf_nan=False)]
Finite = Annotated[float, Field(allow_inf_nan=False)]


class _Law(BaseModel):
    model_config = ConfigDict(extra="forbid", frozen=True, strict=True)

    name: Name
    unit: str = ""

    def distribution(self) -> Any:
        """The law as a chaospy distribution, None for a fixed value."""
        return None


class Fixed(_Law):
    """A known value, handed to the propagator and not expanded."""

    law: Literal["fixed"]
    value: Finite


class Normal(_Law):
    """Normal with the given mean and standard deviation."""

    law: Literal["normal"] = "normal"
    mean: Finite
    std: Positive

    def distribution(self) -> Any:
        import chaospy

        return chaospy.Normal(self.mean, self.std)


class _Between(_Law):
    """Bounded by lower < upper."""

    lower: Finite
    upper: Finite

    @model_validator(mode="after")
    def _ordered(self) -> _Between:
        if self.lower >= self.upper:
            raise ValueError(f"lower = {self.lower:g} must lie below upper = {self.upper:g}")
        return self


class TruncatedNormal(_Between):
    """Normal with the given mean and standard deviation, cut to [lower, upper]."""

    law: Literal["truncated-normal"]
    mean: Finite
    std: Positive

    def distribution(self) -> Any:
        import chaospy

        return chaospy.TruncNormal(self.lower, self.upper, self.mean, self.std)


class LogNormal(_Law):
    """log(value / median) is normal with standard deviation `log_std`."""

    law: Literal["lognormal"]
    median: Positive
    log_std: Annotated[float, Field(gt=0, le=2.0)]

    def distribution(self) -> Any:
        import chaospy
        import numpy as np

        return chaospy.LogNormal(float(np.log(self.median)), self.log_std)


class Uniform(_Between):
    """Uniform on [lower, upper]."""

    law: Literal["uniform"]

    def distribution(self) -> Any:
        import chaospy

        return chaospy.Uniform(self.lower, self.upper)


class Triangular(_Between):
    """Triangular on [lower, upper] with its peak at `mode`."""

    law: Literal["triangular"]
    mode: Finite

    @model_validator(mode="after")
    def _mode_inside(self) -> Triangular:
        if not self.lower <= self.mode <= self.upper:
            raise ValueError(f"mode = {self.mode:g} must lie between lower and upper")
        return self

    def distribution(self) -> Any:
        import chaospy

        return chaospy.Triangle(self.lower, self.mode, self.upper)


class Beta(_Between):
    """Beta with shape parameters a and b, stretched to [lower, upper]."""

    law: Literal["beta"]
    a: Positive
    b: Positive

    def distribution(self) -> Any:
        import chaospy

        return chaospy.Beta(self.a, self.b, self.lower, self.upper)


Parameter = Annotated[
    Fixed | Normal | TruncatedNormal | LogNormal | Uniform | Triangular | Beta,
    Field(discriminator="law"),
]
