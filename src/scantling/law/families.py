"""The error law: a family of innovations, and the volatility path they ride on."""

from __future__ import annotations

import math
from dataclasses import dataclass, field, replace

import numpy as np

from scantling.core.record import FloatArray, read_only
from scantling.diagnostics.volatility import Volatility, kesten_index
from scantling.law.splice import Splice

FAMILIES = ("normal", "student-t", "spliced")
BURN_IN = 500


@dataclass(frozen=True, slots=True, kw_only=True)
class Fit:
    """How well the law fits, and what else was tried."""

    distance: float | None
    """Anderson-Darling distance of the innovations from the law; None if stated, not fitted."""
    p_value: float | None
    """Of the distance, by parametric bootstrap with refitting; None where it does not apply."""
    candidates: tuple[tuple[str, float], ...] = ()
    """Families tried with their Bayes information criterion, best first."""
    note: str = ""
    """How the family came to be chosen, where it is not plainly the best."""


@dataclass(frozen=True, slots=True, kw_only=True)
class ShapeSpread:
    """What the sample leaves open about the shape of the tails."""

    gammas: FloatArray
    """Values of 1/(tail index of the innovations), increasing."""
    weights: FloatArray
    """Their probabilities given the sample, summing to 1."""
    scales: FloatArray
    """Most likely scale at each of them."""
    log_scale_error: float
    """Standard error of the log scale at given shape."""


@dataclass(frozen=True, slots=True, kw_only=True)
class ErrorLaw:
    """Law of the errors: e_t = sigma_t z_t, or e_t = z_t where volatility is constant.

    Innovations z are independent, with mean zero where the mean exists.
    """

    family: str
    """normal | student-t | spliced."""
    scale: float
    """normal: sd of z; student-t: scale; spliced: 1."""
    df: float = math.inf
    """Degrees of freedom of a student-t; inf otherwise."""
    splice: Splice | None = field(default=None, repr=False)
    """Body and tails of a spliced law."""
    volatility: Volatility | None = field(default=None, repr=False)
    """Fitted volatility; None: constant."""
    fit: Fit = Fit(distance=None, p_value=None)
    """How well it fits; empty for a stated law."""
    spread: ShapeSpread | None = field(default=None, repr=False)
    """Uncertainty of the shape, from which `parameter_draws` draws; None: stated exactly."""

    @property
    def parameters(self) -> dict[str, float]:
        """Parameters by name, volatility's included; inf only where the family has none."""
        out: dict[str, float] = {}
        if self.family == "spliced" and self.splice is not None:
            out |= {
                "gamma": self.splice.gamma,
                "left_scale": self.splice.left_scale,
                "right_scale": self.splice.right_scale,
            }
        else:
            out["scale"] = self.scale
            if self.family == "student-t":
                out["df"] = self.df
        if self.volatility is not None:
            path = self.volatility
            out |= {"omega": path.omega, "alpha": path.alpha, "beta": path.beta}
        return out

    @property
    def innovation_variance(self) -> float:
        """Variance of z; inf where it does not exist."""
        if self.family == "spliced" and self.splice is not None:
            return self.splice.mean_and_variance()[1]
        if self.family == "student-t":
            return self.scale**2 * self.df / (self.df - 2) if self.df > 2 else math.inf
        return self.scale**2

    @property
    def sd(self) -> float:
        """Standard deviation of the errors, over the fitted path if there is one."""
        level = 1.0
        if self.volatility is not None:
            level = float((self.volatility.path**2).mean())
        return math.sqrt(self.innovation_variance * level)

    @property
    def tail_index(self) -> float:
        """Tail index of the errors, the volatility's share included.

        Under volatility the root of the Kesten equation for the law's own innovations; of a
        spliced law, whose tails have no closed moments, that for the sample's, never above the
        innovations' own.
        """
        if self.family == "spliced" and self.splice is not None:
            own = 1 / self.splice.gamma if self.splice.gamma > 0 else math.inf
            return own if self.volatility is None else min(own, self.volatility.tail_index)
        path = self.volatility
        if path is None:
            return self.df
        if self.family == "normal":
            return kesten_index(path.alpha, path.beta)
        return self.df if self.df <= 2 else kesten_index(path.alpha, path.beta, moment_of=self.df)

    def innovations(self, size: int | tuple[int, ...], rng: np.random.Generator) -> FloatArray:
        """Independent draws of z."""
        if self.family == "student-t":
            return np.asarray(self.scale * rng.standard_t(self.df, size))
        if self.family == "spliced" and self.splice is not None:
            mean, _ = self.splice.mean_and_variance()
            drawn = self.splice.quantile(rng.random(size))
            return np.asarray(drawn - (0.0 if math.isnan(mean) else mean))
        return np.asarray(self.scale * rng.standard_normal(size))

    def draw(self, size: int | tuple[int, ...], rng: np.random.Generator) -> FloatArray:
        """Draw errors from the full law; along the first axis they follow one another in time.

        Under volatility the recursion starts at its mean level, 500 rows before the first.
        """
        if self.volatility is None:
            return self.innovations(size, rng)
        path = self.volatility
        shape = (size,) if isinstance(size, int) else size
        z = self.innovations((shape[0] + BURN_IN, *shape[1:]), rng)
        variance = np.full(shape[1:], float((path.path**2).mean()))
        out = np.empty_like(z)
        for t in range(z.shape[0]):
            out[t] = np.sqrt(variance) * z[t]
            variance = path.omega + path.alpha * out[t] ** 2 + path.beta * variance
        return out[BURN_IN:]

    def draw_given_path(self, rows: int, replicates: int, rng: np.random.Generator) -> FloatArray:
        """Errors at the present rows: the fitted path is kept, the innovations are fresh.

        Returns an array of shape (rows, replicates), not centred.
        """
        z = self.innovations((rows, replicates), rng)
        return z if self.volatility is None else z * self.volatility.path[:, None]

    def relative_variance(self, rows: int) -> FloatArray:
        """sigma_t^2 over its mean, shape (rows,); ones where volatility is constant."""
        if self.volatility is None:
            return np.ones(rows)
        square = self.volatility.path**2
        return np.asarray(square / square.mean())

    def normal_innovations(self) -> ErrorLaw:
        """The same volatility path under normal innovations of the same variance.

        Of variance 1, to which fitted innovations are scaled, where the law's is infinite.
        """
        variance = self.innovation_variance
        sd = math.sqrt(variance) if math.isfinite(variance) else 1.0
        return replace(normal_law(sd), volatility=self.volatility)

    def without_volatility(self) -> ErrorLaw:
        """The law left after each row is divided by its volatility over the mean level."""
        if self.volatility is None:
            return self
        return replace(self, volatility=None).scaled(float((self.volatility.path**2).mean()) ** 0.5)

    def scaled(self, factor: float) -> ErrorLaw:
        """The law of `factor` times the innovations."""
        splice, spread = self.splice, self.spread
        if splice is not None:
            splice = replace(
                splice,
                body=read_only(splice.body * factor),
                left_scale=splice.left_scale * factor,
                right_scale=splice.right_scale * factor,
            )
        elif spread is not None:
            spread = replace(spread, scales=read_only(spread.scales * factor))
        return replace(self, scale=self.scale * factor, splice=splice, spread=spread)

    def parameter_draws(self, count: int, rng: np.random.Generator) -> tuple[ErrorLaw, ...]:
        """Draw laws the sample cannot tell from this one.

        The shape is drawn from its weights given the sample, the scale about its most likely
        value there, the volatility path from those its parameters leave open. A law
        stated exactly is returned `count` times.
        """
        if self.spread is None:
            return (self,) * count
        spread = self.spread
        picks = rng.choice(spread.gammas.size, size=count, p=spread.weights)
        shifts = np.exp(spread.log_scale_error * rng.standard_normal(count))
        paths = np.empty((0, 0)) if self.volatility is None else self.volatility.path_draws
        moves = rng.integers(max(1, len(paths)), size=count)
        laws = []
        for pick, shift, move in zip(picks, shifts, moves, strict=True):
            gamma, scale = float(spread.gammas[pick]), float(spread.scales[pick]) * float(shift)
            path = self.volatility
            if path is not None:
                path = replace(path, path=read_only(paths[move]))
            if self.splice is not None:
                tails = replace(
                    self.splice,
                    gamma=gamma,
                    left_scale=self.splice.left_scale * scale,
                    right_scale=self.splice.right_scale * scale,
                )
                laws.append(replace(self, splice=tails, volatility=path))
            else:
                student = replace(self, family="student-t", df=1 / gamma, scale=scale)
                laws.append(replace(student, volatility=path))
        return tuple(laws)


def normal_law(sd: float) -> ErrorLaw:
    """Independent normal errors."""
    return ErrorLaw(family="normal", scale=sd)


def student_law(df: float, *, sd: float | None = None, scale: float = 1.0) -> ErrorLaw:
    """Independent Student t errors of the given scale, or, if df > 2, of the given sd."""
    if sd is not None:
        scale = sd * math.sqrt((df - 2) / df)
    return ErrorLaw(family="student-t", scale=scale, df=df)
