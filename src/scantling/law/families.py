"""The error law: a family of innovations, and the volatility path they ride on."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, field, replace

import numpy as np

from scantling.core.record import FloatArray, read_only
from scantling.diagnostics.autoregression import Autoregression
from scantling.diagnostics.volatility import Volatility
from scantling.law.catalogue import FAMILIES
from scantling.law.innovation import Innovation, ShapeSpread, Size
from scantling.law.normal import Normal
from scantling.law.splice import Splice
from scantling.law.student import Student

__all__ = ["FAMILIES", "ErrorLaw", "Fit", "ShapeSpread", "normal_law", "student_law"]

BURN_IN = 500


@dataclass(frozen=True, slots=True, kw_only=True)
class Candidate:
    """A family that was tried, judged on values it was not fitted to."""

    family: str
    """Its name."""
    score: float
    """Log-likelihood out of sample, summed over the values; larger is better."""
    tail_score: float
    """The same of the largest tenth in size, the rest counting as one event."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Fit:
    """How well the law fits, and what else was tried."""

    distance: float | None
    """Anderson-Darling distance of the innovations from the law; None if stated, not fitted."""
    p_value: float | None
    """Of the distance, by parametric bootstrap with refitting; None where it does not apply."""
    candidates: tuple[Candidate, ...] = ()
    """Families tried, best out of sample first."""
    runner_up: str = ""
    """The family next in line; empty where no other was tried."""
    margin: float | None = None
    """Score of the law less that of the runner-up, in units of log-likelihood; None: unknown."""
    margin_error: float | None = None
    """Standard error of the margin."""
    note: str = ""
    """How the family came to be chosen, where it is not plainly the best."""


@dataclass(frozen=True, slots=True, kw_only=True)
class ErrorLaw:
    """Law of the errors: e_t = sigma_t z_t, or e_t = z_t where volatility is constant.

    Innovations z are independent, with mean zero where the mean exists. Where the level
    persists, that is the law of the shocks of an autoregression.
    """

    innovation: Innovation
    """Law of z."""
    volatility: Volatility | None = field(default=None, repr=False)
    """Fitted or stated volatility; None: constant. The path of a stated one is a single value,
    its mean level."""
    autoregression: Autoregression | None = field(default=None, repr=False)
    """How the level persists from row to row; None: it does not."""
    fit: Fit = Fit(distance=None, p_value=None)
    """How well it fits; empty for a stated law."""
    spread: ShapeSpread | None = field(default=None, repr=False)
    """What the sample leaves open, from which `parameter_draws` draws; None: stated exactly."""

    @property
    def family(self) -> str:
        """One of `FAMILIES`."""
        return self.innovation.name

    @property
    def scale(self) -> float:
        """Scale of the innovations by their family's own definition; 1 of a spliced law."""
        return self.innovation.parameters.get("scale", 1.0)

    @property
    def df(self) -> float:
        """Degrees of freedom of a Student t, skewed or not; inf otherwise."""
        return self.innovation.parameters.get("df", math.inf)

    @property
    def splice(self) -> Splice | None:
        """Body and tails of a spliced law."""
        return getattr(self.innovation, "splice", None)

    @property
    def parameters(self) -> dict[str, float]:
        """Parameters by name, volatility's included."""
        out = self.innovation.parameters
        path = self.volatility
        if path is not None:
            out = out | {"omega": path.omega, "alpha": path.alpha, "beta": path.beta}
            if path.leverage:
                out["leverage"] = path.leverage
        if self.autoregression is not None:
            for lag, value in enumerate(self.autoregression.coefficients, start=1):
                out[f"lag{lag}"] = float(value)
        return out

    @property
    def innovation_variance(self) -> float:
        """Variance of z; inf where it does not exist."""
        return self.innovation.variance

    @property
    def ordered(self) -> bool:
        """Whether errors depend on those of rows before, by volatility or by level."""
        return self.volatility is not None or self.autoregression is not None

    @property
    def sd(self) -> float:
        """Standard deviation of the errors, over the fitted path if there is one."""
        level = 1.0 if self.autoregression is None else self.autoregression.gain
        if self.volatility is not None:
            level *= float((self.volatility.path**2).mean())
        return math.sqrt(self.innovation_variance * level)

    @property
    def tail_index(self) -> float:
        """Tail index of the errors, the volatility's share included.

        Under volatility the root of the Kesten equation for the law's own innovations; of a
        spliced law that for the sample's, never above the innovations' own.
        """
        if self.volatility is None:
            return self.innovation.tail_index
        return self.innovation.recurrence_index(self.volatility)

    def innovations(self, size: Size, rng: np.random.Generator) -> FloatArray:
        """Independent draws of z."""
        return self.innovation.draw(size, rng)

    def draw(self, size: Size, rng: np.random.Generator) -> FloatArray:
        """Draw errors from the full law; along the first axis they follow one another in time.

        Under volatility the recursion starts at its mean level, 500 rows before the first.
        """
        shape = (size,) if isinstance(size, int) else size
        if self.volatility is None and self.autoregression is None:
            return self.innovations(shape, rng)
        drawn = draw_together((self,), (math.prod(shape[1:]),), shape[0], rng)
        return drawn.reshape(shape)

    def draw_given_path(self, rows: int, replicates: int, rng: np.random.Generator) -> FloatArray:
        """Errors at the present rows: the fitted path is kept, the innovations are fresh.

        Returns an array of shape (rows, replicates), not centred. Where volatility is stated
        there is no path to keep, and each replicate has its own.
        """
        path = self.volatility
        if path is not None and path.path.size == 1:
            return self.draw((rows, replicates), rng)
        shocks = self.innovations((rows, replicates), rng)
        if path is not None:
            shocks *= path.path[:, None]
        return self.persisting(shocks, rng)

    def persisting(self, shocks: FloatArray, rng: np.random.Generator) -> FloatArray:
        """Errors of the shocks (rows, R): themselves, or the autoregression they drive."""
        if self.autoregression is None or not shocks.size:
            return shocks
        return self.autoregression.errors(shocks, rng)

    def relative_variance(self, rows: int) -> FloatArray:
        """sigma_t^2 over its mean, shape (rows,); ones where no path is known."""
        if self.volatility is None or self.volatility.path.size == 1:
            return np.ones(rows)
        square = self.volatility.path**2
        return np.asarray(square / square.mean())

    def normal_innovations(self) -> ErrorLaw:
        """The same volatility path and autoregression under normal innovations of equal variance.

        Of variance 1, to which fitted innovations are scaled, where the law's is infinite.
        """
        variance = self.innovation_variance
        sd = math.sqrt(variance) if math.isfinite(variance) else 1.0
        return replace(
            normal_law(sd), volatility=self.volatility, autoregression=self.autoregression
        )

    def without_volatility(self) -> ErrorLaw:
        """The law left after each row is divided by its volatility over the mean level."""
        if self.volatility is None:
            return self
        return replace(self, volatility=None).scaled(float((self.volatility.path**2).mean()) ** 0.5)

    def without_autoregression(self) -> ErrorLaw:
        """The law of the shocks."""
        return replace(self, autoregression=None)

    def scaled(self, factor: float) -> ErrorLaw:
        """The law of `factor` times the innovations."""
        spread = None if self.spread is None else self.spread.scaled(factor)
        return replace(self, innovation=self.innovation.scaled(factor), spread=spread)

    def parameter_draws(self, count: int, rng: np.random.Generator) -> tuple[ErrorLaw, ...]:
        """Draw laws the sample cannot tell from this one.

        The shape is drawn from its weights given the sample, the scale about its most likely
        value there, volatility path and autoregression from those the sample leaves open. A law
        stated exactly is returned `count` times.
        """
        if self.spread is None:
            return (self,) * count
        spread = self.spread
        picks = rng.choice(len(spread.laws), size=count, p=spread.weights)
        shifts = np.exp(spread.log_scale_error * rng.standard_normal(count))
        path = self.volatility
        paths = np.empty((0, 0)) if path is None else path.path_draws
        moves = rng.integers(max(1, len(paths)), size=count)
        laws: list[ErrorLaw] = []
        for pick, shift, move in zip(picks, shifts, moves, strict=True):
            moved = spread.laws[pick].moved(float(shift))
            if path is not None and len(paths):
                path = replace(path, path=read_only(paths[move]))
            levels = self.autoregression
            if levels is not None:
                levels = levels.moved(len(laws))
            laws.append(replace(self, innovation=moved, volatility=path, autoregression=levels))
        return tuple(laws)


def draw_together(
    laws: Sequence[ErrorLaw], counts: Sequence[int], rows: int, rng: np.random.Generator
) -> FloatArray:
    """Draws of several laws side by side, shape (rows, sum of counts), as by `ErrorLaw.draw`.

    All recursions run at once: a step in time costs about the same for one draw and for many.
    """
    drawn = [law for law, count in zip(laws, counts, strict=True) if count]
    sizes = [count for count in counts if count]
    moving = any(law.volatility is not None for law in drawn)
    z = np.concatenate(
        [law.innovations((rows + BURN_IN * moving, count), rng)
         for law, count in zip(drawn, sizes, strict=True)], axis=1
    )  # fmt: skip
    if not moving:
        return _persisting(drawn, sizes, z, rng)
    level, omega, alpha, beta, leverage = np.repeat(
        [_recurrence(law.volatility) for law in drawn], sizes, axis=0
    ).T
    variance, tilted = level, bool(leverage.any())
    for row in z:
        row *= np.sqrt(variance)
        weight = alpha + leverage * (row < 0) if tilted else alpha
        variance = omega + weight * row**2 + beta * variance
    return _persisting(drawn, sizes, z[BURN_IN:], rng)


def _persisting(
    laws: Sequence[ErrorLaw], counts: Sequence[int], shocks: FloatArray, rng: np.random.Generator
) -> FloatArray:
    """Errors of the shocks of several laws side by side."""
    if all(law.autoregression is None for law in laws):
        return shocks
    parts = np.split(shocks, np.cumsum(counts)[:-1], axis=1)
    return np.concatenate(
        [law.persisting(part, rng) for law, part in zip(laws, parts, strict=True)], axis=1
    )


def _recurrence(path: Volatility | None) -> tuple[float, ...]:
    """Mean level, constant, and the weights of square, variance and negative square."""
    if path is None:
        return 1.0, 1.0, 0.0, 0.0, 0.0
    return float((path.path**2).mean()), path.omega, path.alpha, path.beta, path.leverage


def normal_law(sd: float) -> ErrorLaw:
    """Independent normal errors."""
    return ErrorLaw(innovation=Normal(scale=sd))


def student_law(df: float, *, sd: float | None = None, scale: float = 1.0) -> ErrorLaw:
    """Independent Student t errors of the given scale, or, if df > 2, of the given sd."""
    if sd is not None:
        scale = sd * math.sqrt((df - 2) / df)
    return ErrorLaw(innovation=Student(scale=scale, df=df))
