"""What a budget is computed for: columns, error law and target, ready for simulation."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from scantling.core.record import FloatArray
from scantling.core.streams import stream
from scantling.design.spec import TargetSpec
from scantling.law.families import ErrorLaw, draw_together, normal_law

LAW_DRAWS = 50
"""Draws of the law's parameters behind every band."""


def loadings_of(rule: str) -> str:
    """plug-in (equal) | self-normalised: a rule that looks for its penalty has no level of its own,
    so noise is measured against the plug-in one."""
    return "self-normalised" if rule == "self-normalised" else "plug-in"


@dataclass(frozen=True, slots=True, kw_only=True)
class Case:
    """One design as the simulations see it; a remedy is another case."""

    X: FloatArray
    """Columns, mean 0 and mean square 1, shape (n, P)."""
    law: ErrorLaw
    """Fitted error law."""
    law_draws: tuple[ErrorLaw, ...]
    """Laws the sample cannot tell from it; the bands come from them."""
    response_sd: float
    """sd of the response."""
    residual_sd: float
    """sd of the residuals; simulated errors are scaled to it."""
    target: TargetSpec
    """What has to be achieved."""
    rule: str
    """Penalty rule of the refits, one of `simulation.rules.RULES`."""
    loss: str = "squared"
    """squared | huber | absolute | square-root; its score takes the errors' place."""
    replicates: int
    """Draws of errors in each simulation."""
    seed: int
    """Of every random stream."""

    mode: str = "conditional"
    """conditional: the present columns and volatility path; generative: both drawn."""

    adaptive: bool = False
    """Whether a second, reweighted lasso follows in the refits."""
    time_ordered: bool = False
    """Whether rows follow one another in time: folds of cross-validation are then blocks."""
    support: str = "random"
    """Which columns the refits take as relevant: random | pilot | named."""
    relevant_columns: tuple[int, ...] = ()
    """The pilot's or the named ones; empty under random supports."""

    @property
    def loadings(self) -> str:
        """Loadings of the penalty level that noise is measured against."""
        return loadings_of(self.rule)

    def draw_errors(self, law: ErrorLaw, size: int, rng: np.random.Generator) -> FloatArray:
        """Draws of errors for these columns, shape (n, size), not centred."""
        if self.mode == "conditional":
            return law.draw_given_path(self.rows, size, rng)
        return law.draw((self.rows, size), rng)

    def open_errors(self, size: int, rng: np.random.Generator) -> FloatArray:
        """Draws of errors shared evenly among the laws the sample leaves open, shape (n, size).

        A risk averaged over them is nearer the truth than that of the fitted law alone; a law
        stated exactly leaves nothing open.
        """
        if self.law.spread is None or not self.law_draws:
            return self.draw_errors(self.law, size, rng)
        count = len(self.law_draws)
        # Whichever the size, laws are taken evenly from all of them.
        shares = np.bincount(np.arange(size) * count // size, minlength=count)
        if self.mode == "generative":
            return draw_together(self.law_draws, shares.tolist(), self.rows, rng)
        return np.concatenate(
            [self.draw_errors(law, int(m), rng)
             for law, m in zip(self.law_draws, shares, strict=True) if m], axis=1
        )  # fmt: skip

    @property
    def rows(self) -> int:
        """n."""
        return int(self.X.shape[0])

    @property
    def columns(self) -> int:
        """P, the columns at hand and asked for."""
        return int(self.X.shape[1])

    @property
    def twin(self) -> ErrorLaw:
        """Independent normal errors of the same variance."""
        return normal_law(self.law.sd if math.isfinite(self.law.sd) else self.residual_sd)


def draw_laws(law: ErrorLaw, seed: int) -> tuple[ErrorLaw, ...]:
    """The law draws behind the bands, from their own stream."""
    return law.parameter_draws(LAW_DRAWS, stream(seed, "law draws"))


def column_grid(most: int, *, fewest: int = 1, points: int = 32) -> np.ndarray:
    """Increasing whole numbers from `fewest` to `most`, evenly spaced in logs."""
    raw = np.geomspace(fewest, most, points) if most > fewest else np.array([most])
    return np.unique(np.round(raw).astype(int))
