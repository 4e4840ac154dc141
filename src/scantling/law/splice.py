"""Empirical body with generalised-Pareto tails: samples of it carry the reported tail index."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.optimize import minimize_scalar

from scantling.core.record import FloatArray, read_only

TAIL_SHARE = 0.10
"""Share of the values replaced by a fitted tail, on each side."""
MINIMUM_EXCESSES = 25
"""Fewest values beyond a threshold on each side."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Splice:
    """Quantile function: linear between order statistics inside, Pareto-tailed outside."""

    body: FloatArray
    """Increasing quantiles at equally spaced probabilities from 0.1 to 0.9."""
    gamma: float
    """Shape of both tails, 1/tail index."""
    left_scale: float
    """Scale of the excesses below body[0]."""
    right_scale: float
    """Scale of the excesses above body[-1]."""

    def quantile(self, probability: FloatArray) -> FloatArray:
        """Quantiles at `probability`, any shape, strictly inside (0, 1)."""
        inside = np.clip((probability - TAIL_SHARE) / (1 - 2 * TAIL_SHARE), 0, 1)
        place = inside * (self.body.size - 1)
        lower = np.minimum(place.astype(np.intp), self.body.size - 2)
        out = self.body[lower] + (place - lower) * (self.body[lower + 1] - self.body[lower])
        low = probability < TAIL_SHARE
        high = probability > 1 - TAIL_SHARE
        out[low] -= self.left_scale * self._unit_excess(probability[low] / TAIL_SHARE)
        out[high] += self.right_scale * self._unit_excess((1 - probability[high]) / TAIL_SHARE)
        return np.asarray(out)

    def cdf(self, values: FloatArray) -> FloatArray:
        """Distribution function at `values`, any shape."""
        probabilities = np.linspace(TAIL_SHARE, 1 - TAIL_SHARE, self.body.size)
        out = np.interp(values, self.body, probabilities)
        low, high = values < self.body[0], values > self.body[-1]
        out[low] = TAIL_SHARE * self._unit_survival((self.body[0] - values[low]) / self.left_scale)
        out[high] = 1 - TAIL_SHARE * self._unit_survival(
            (values[high] - self.body[-1]) / self.right_scale
        )
        return np.asarray(out)

    def log_density(self, values: FloatArray) -> FloatArray:
        """Log density at `values`, any shape; flat between the order statistics of the body."""
        gaps = np.maximum(np.diff(self.body), 1e-12 * max(np.ptp(self.body), 1e-300))
        share = (1 - 2 * TAIL_SHARE) / gaps.size
        place = np.clip(np.searchsorted(self.body, values, side="right") - 1, 0, gaps.size - 1)
        out = np.log(share / gaps)[place]
        for beyond, scale in (
            (self.body[0] - values, self.left_scale),
            (values - self.body[-1], self.right_scale),
        ):
            tail = beyond > 0
            unit = beyond[tail] / scale
            power = (
                unit if self.gamma < 1e-6 else (1 / self.gamma + 1) * np.log1p(self.gamma * unit)
            )
            out[tail] = np.log(TAIL_SHARE / scale) - power
        return np.asarray(out)

    def _unit_excess(self, survival: FloatArray) -> FloatArray:
        if self.gamma < 1e-6:
            return np.asarray(-np.log(survival))
        return np.asarray((survival**-self.gamma - 1) / self.gamma)

    def _unit_survival(self, excess: FloatArray) -> FloatArray:
        if self.gamma < 1e-6:
            return np.asarray(np.exp(-excess))
        return np.asarray((1 + self.gamma * excess) ** (-1 / self.gamma))

    def mean_and_variance(self) -> tuple[float, float]:
        """Exact mean and variance; variance inf if gamma >= 1/2, mean nan if gamma >= 1."""
        if self.gamma >= 1:
            return float("nan"), float("inf")
        left, right = self.body[:-1], self.body[1:]
        share = (1 - 2 * TAIL_SHARE) / left.size
        first = share * float(((left + right) / 2).sum())
        second = share * float(((left**2 + left * right + right**2) / 3).sum())
        tails = ((-1, -self.body[0], self.left_scale), (1, self.body[-1], self.right_scale))
        for sign, edge, scale in tails:
            excess = scale / (1 - self.gamma)
            first += sign * TAIL_SHARE * (edge + excess)
            if self.gamma < 0.5:
                square = 2 * scale**2 / ((1 - self.gamma) * (1 - 2 * self.gamma))
                second += TAIL_SHARE * (edge**2 + 2 * edge * excess + square)
        if self.gamma >= 0.5:
            return first, float("inf")
        return first, second - first**2


def excess_scale(excess: FloatArray, gamma: float) -> float:
    """Maximum-likelihood scale of generalised-Pareto excesses given their shape gamma >= 0."""
    mean = float(excess.mean())
    if gamma < 1e-6:
        return mean

    def negative(log_scale: float) -> float:
        unit = excess / np.exp(log_scale)
        return float(log_scale + (1 / gamma + 1) * np.log1p(gamma * unit).mean())

    found = minimize_scalar(
        negative, bounds=(np.log(mean) - 4, np.log(mean) + 2), method="bounded",
        options={"xatol": 1e-6},
    )  # fmt: skip
    return float(np.exp(found.x))


def enough_for_splice(n: int) -> bool:
    """Whether each tail would hold at least 25 excesses."""
    return int(TAIL_SHARE * n) >= MINIMUM_EXCESSES


def fit_splice(values: FloatArray, gamma: float) -> Splice:
    """Splice the sample's body with tails of the given shape, negative shapes taken as 0.

    The scales are by maximum likelihood given the shape, which is forced to the reported tail
    index so that simulated samples carry it; Smith (1987), Annals of Statistics 15.
    """
    shape = max(float(gamma), 0.0)
    points = max(3, int((1 - 2 * TAIL_SHARE) * values.size))
    body = np.quantile(values, np.linspace(TAIL_SHARE, 1 - TAIL_SHARE, points))
    body = np.maximum.accumulate(body)
    left = body[0] - values[values < body[0]]
    right = values[values > body[-1]] - body[-1]
    return Splice(
        body=read_only(body),
        gamma=shape,
        left_scale=excess_scale(left, shape),
        right_scale=excess_scale(right, shape),
    )
