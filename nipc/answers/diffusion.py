"""Is the spreading of a slow quantity bounded, diffusive or chaotic?

The ensemble's variance over time is held against the laws of `laws`. Its values at different times
come from the same members and are strongly correlated: their covariance is taken from the variances
of many batches of members, and every law is fitted with it by generalised least squares in ln V.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy import stats
from scipy.linalg import solve_triangular
from scipy.optimize import least_squares

from nipc.answers.intervals import LEVEL
from nipc.answers.laws import LAWS, Law
from nipc.arrays import FloatArray

BINS = np.array([0.01, 0.02, 0.04, 0.08, 0.125, 0.25, 0.375, 0.5, 0.625, 0.75, 0.875, 1.0])
"""Edges, in shares of the horizon, of the stretches over which a variance is averaged."""

CLEAR = 6.0
"""Difference of information criteria that counts as strong evidence (Kass & Raftery 1995)."""

VERDICTS = (
    "bounded", "sub-diffusive", "diffusive", "super-diffusive", "exponential", "no spread",
    "cannot tell",
)  # fmt: skip


@dataclass(frozen=True)
class Estimate:
    """A number with its interval."""

    value: float
    low: float
    high: float


UNKNOWN = Estimate(np.nan, np.nan, np.nan)


@dataclass(frozen=True)
class LawFit:
    """One law at its best: criterion (lower is better), rms misfit of ln V, parameters."""

    law: Law
    criterion: float
    misfit: float
    theta: FloatArray
    errors: FloatArray

    def estimate(self, name: str, factor: float) -> Estimate:
        """A parameter with its interval; `factor` is Student's."""
        place = self.law.parameters.index(name)
        value, half = float(self.theta[place]), factor * float(self.errors[place])
        return Estimate(value, value - half, value + half)


@dataclass(frozen=True)
class SpreadingLaw:
    """The verdict with what it rests on.

    Var = offset + 2 coefficient t^exponent, unit^2 per time^exponent. Where the verdict is
    diffusive, offset and coefficient are those of the straight line, unit^2 per time. `rate` is
    lambda of exp(2 lambda t), `plateau` the variance at which the spread stays.
    """

    verdict: str
    reason: str
    coefficient: Estimate = UNKNOWN
    offset: Estimate = UNKNOWN
    exponent: Estimate = UNKNOWN
    rate: Estimate = UNKNOWN
    plateau: Estimate = UNKNOWN
    fits: tuple[LawFit, ...] = ()
    span: tuple[float, float] = (np.nan, np.nan)


def spreading_law(
    batch_variance: FloatArray,
    times: FloatArray,
    origin: float | None = None,
    tolerance: float = 0.01,
    level: float = LEVEL,
) -> SpreadingLaw:
    """The law of one quantity's variance, from batches of members (B, T) at times (T,).

    `origin` is when the spreading began, by default the first time; `tolerance` is the relative
    error of a variance beyond that of sampling (fit, check, and how exactly a law is meant).
    """
    origin = float(times[0]) if origin is None else origin
    span = (float(times[0]), float(times[-1]))
    kept = np.isfinite(batch_variance).all(axis=0) & (times >= origin)
    times, batch_variance = times[kept], batch_variance[:, kept]
    if not np.any(batch_variance > 0.0):
        return SpreadingLaw("no spread", "the variance is zero at all times", span=span)
    x = (times - origin) / (times[-1] - origin)
    bins = _bins(x, batch_variance.mean(axis=0))
    count, batches = bins.shape[0], batch_variance.shape[0]
    if count < 6 or batches < count + 4:
        reason = (
            f"{count} stretches of time and {batches} batches of members are too few;"
            f" at least 6 and {count + 4} are needed"
        )
        return SpreadingLaw("cannot tell", reason, span=span)
    curves = batch_variance @ bins.T
    mean = curves.mean(axis=0)
    end = float(mean[-1])
    covariance = np.cov(curves / mean, rowvar=False) / batches
    # the inverse of an estimated covariance is too large: Hartlap, Simon & Schneider 2007
    covariance *= (batches - 1.0) / (batches - count - 2.0)
    factor = np.linalg.cholesky(covariance + tolerance**2 * np.eye(count))
    log = np.log(mean / end)
    raw = [_fit(law, x, bins, log, factor) for law in LAWS]
    # misfit beyond the errors: all are taken to be as much larger (Birge 1932)
    freedom = [max(count - fit.theta.size, 1) for fit, _ in raw]
    scale = max(1.0, min(chi / f for (_, chi), f in zip(raw, freedom, strict=True)))
    fits = tuple(
        LawFit(
            fit.law,
            chi / scale + fit.theta.size * np.log(count),
            fit.misfit,
            fit.theta,
            fit.errors * np.sqrt(scale),
        )
        for fit, chi in raw
    )
    return _judge(fits, count, end, float(times[-1]) - origin, span, level)


def _bins(x: FloatArray, variance: FloatArray) -> FloatArray:
    """Weights (K, T) averaging over each stretch of BINS, and the start where it has a spread."""
    rows = [np.flatnonzero(x == 0.0)] if variance[0] > 0.0 and x[0] == 0.0 else []
    place = np.where(x > 0.0, np.searchsorted(BINS, x * (1.0 - 1e-12)), -1)
    rows += [np.flatnonzero((place == k) & (variance > 0.0)) for k in range(BINS.size)]
    rows = [row for row in rows if row.size]
    weights = np.zeros((len(rows), x.size))
    for k, row in enumerate(rows):
        weights[k, row] = 1.0 / row.size
    return weights


def _fit(
    law: Law, x: FloatArray, bins: FloatArray, log: FloatArray, factor: FloatArray
) -> tuple[LawFit, float]:
    """The law's best parameters and its chi square."""

    def misfit(theta: FloatArray) -> FloatArray:
        return np.asarray(np.log(np.maximum(bins @ law(x, theta), 1e-300)) - log)

    def whitened(theta: FloatArray) -> FloatArray:
        return np.asarray(solve_triangular(factor, misfit(theta), lower=True))

    tries = [
        least_squares(whitened, start, bounds=(law.low, law.high), x_scale="jac", max_nfev=200)
        for start in law.starts
    ]
    best = min(tries, key=lambda t: t.cost)
    # errors by the singular values of the Jacobian; a direction that is not seen has no bound
    _, s, vt = np.linalg.svd(np.asarray(best.jac), full_matrices=False)
    with np.errstate(divide="ignore", invalid="ignore"):
        inverse = np.where(s > 1e-12 * s.max(initial=0.0), 1.0 / s, np.inf)
        errors = np.sqrt(np.sum(np.where(vt == 0.0, 0.0, vt * inverse[:, None]) ** 2, axis=0))
    rms = float(np.sqrt(np.mean(misfit(best.x) ** 2)))
    return LawFit(law, np.nan, rms, best.x, errors), float(2.0 * best.cost)


def _judge(
    fits: tuple[LawFit, ...],
    count: int,
    end: float,
    horizon: float,
    span: tuple[float, float],
    level: float,
) -> SpreadingLaw:
    ranked = sorted(fits, key=lambda fit: fit.criterion)
    best = ranked[0]
    rival = next(fit for fit in ranked if fit.law.kind != best.law.kind)
    named = {fit.law.name: fit for fit in fits}
    student = stats.t.ppf(0.5 + 0.5 * level, max(count - 3, 1))

    # where an offset cannot be excluded, the exponent has to allow for one
    offset, plain = named["power from an offset"], named["power"]
    power = offset if offset.criterion < plain.criterion + CLEAR else plain
    exponent = power.estimate("alpha", student)
    line = min(named["linear"], named["linear from an offset"], key=lambda fit: fit.criterion)
    diffusion = _scaled(line.estimate("log_growth", student), 0.5 * end / horizon)
    start = _offset(line, student, end), _offset(power, student, end)
    general = _scaled(power.estimate("log_growth", student), 0.5 * end / horizon**exponent.value)

    def found(verdict: str, reason: str, **numbers: Estimate) -> SpreadingLaw:
        return SpreadingLaw(verdict, reason, fits=tuple(ranked), span=span, **numbers)

    if best.misfit > 0.15:
        return found(
            "cannot tell",
            f"no law follows the variance: the best, {best.law.name}, misses it by"
            f" {100 * best.misfit:.0f} % rms",
        )
    lead = rival.criterion - best.criterion
    constant = named["constant"]
    if lead < CLEAR and constant.misfit < 0.05 and constant.criterion < best.criterion + CLEAR:
        return found(
            "bounded",
            f"the variance is constant within {100 * constant.misfit:.1f} % rms over this horizon",
            plateau=_scaled(constant.estimate("log_plateau", student), end),
        )
    if lead < CLEAR:
        return found(
            "cannot tell",
            f"over this horizon the laws {best.law.name!r} and {rival.law.name!r} describe the"
            f" variance about equally well (criteria apart by {lead:.1f}, below {CLEAR:g})",
            exponent=exponent,
            coefficient=general,
            offset=start[1],
        )
    evidence = (
        f"{best.law.name} fits with {100 * best.misfit:.1f} % rms in variance; the next of another"
        f" kind, {rival.law.name}, is worse by {lead:.0f} in the information criterion"
    )
    if best.law.kind == "bounded":
        plateau = _scaled(best.estimate("log_plateau", student), end)
        return found("bounded", evidence, plateau=plateau)
    if best.law.kind == "exponential":
        growth = best.estimate("growth", student)
        rate = Estimate(*(0.5 * g / horizon for g in (growth.value, growth.low, growth.high)))
        return found("exponential", evidence, rate=rate)
    verdict = _word(exponent)
    if verdict == "cannot tell":
        evidence = (
            f"the exponent {exponent.value:.2f} is known only to between {exponent.low:.2f} and"
            f" {exponent.high:.2f}"
        )
    straight = verdict == "diffusive"
    return found(
        verdict,
        evidence,
        exponent=exponent,
        coefficient=diffusion if straight else general,
        offset=start[0] if straight else start[1],
    )


def _word(exponent: Estimate) -> str:
    """The name of Var ~ t^alpha: within a tenth of 1, or not to be told from it, is diffusive."""
    if exponent.low >= 0.9 and exponent.high <= 1.1:
        return "diffusive"
    if exponent.high < 1.0:
        return "sub-diffusive"
    if exponent.low > 1.0:
        return "super-diffusive"
    return "diffusive" if exponent.high - exponent.low <= 0.4 else "cannot tell"


def _offset(fit: LawFit, student: float, end: float) -> Estimate:
    """A of a law in units of the variance; zero where the law has none."""
    if "offset" not in fit.law.parameters:
        return Estimate(0.0, 0.0, 0.0)
    found = fit.estimate("offset", student)
    return Estimate(end * found.value, max(end * found.low, 0.0), end * found.high)


def _scaled(log: Estimate, by: float) -> Estimate:
    """by * exp(log)."""
    with np.errstate(over="ignore"):
        return Estimate(*(float(by * np.exp(v)) for v in (log.value, log.low, log.high)))
