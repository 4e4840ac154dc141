"""Tail index of one series: estimate, interval, thin-tail test, and what was done to ties.

Default estimator, threshold and interval as measured in reports/validation: weighted Hill
regression on half of the absolute median-centred values; standard error by a circular
moving-block bootstrap; interval widened for the largest bias seen over the laws of interest.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any

import numpy as np
from scipy.stats import norm

from scantling.core.checks import between, finite_vector
from scantling.core.record import FloatArray
from scantling.core.streams import stream
from scantling.diagnostics.greenwood import greenwood_p_value, greenwood_statistic
from scantling.diagnostics.tail_estimators import hill, weighted_hill
from scantling.errors import InputError

BIAS_BOUND = 0.06
"""Bound on the bias of gamma: the largest seen in simulation over Student t, Pareto and GARCH."""
THIN_LEVEL = 0.05
BOOTSTRAP_DRAWS = 199
MINIMUM = 30
"""Fewest values an index is estimated from."""
ZERO_SHARE = 0.02
TIE_SHARE = 0.5
GAMMA_FLOOR = 0.02
"""Below it 1/gamma says nothing: the index is given as infinite, read 'above 50'."""
NEAR = 1e-8
"""Values closer than this share of the median magnitude are ties: differences of rounded values
differ in their last bits."""
LARGEST, SMALLEST = 1e100, 1e-100
"""Beyond these a series is rescaled, so that squares neither overflow nor vanish."""
SIDES = ("both", "left", "right")


@dataclass(frozen=True, slots=True, kw_only=True)
class TailIndex:
    """Tail index alpha of one series: P(|X| > x) falls like x^-alpha."""

    index: float
    """Point estimate; inf where gamma <= 0.02, read 'above 50'."""
    low: float
    """Lower end of the interval."""
    high: float
    """Upper end; may be inf."""
    finite: bool
    """Whether the thin-tail test finds a finite index (one-sided 5 %)."""
    threshold_count: int
    """Upper order statistics the estimate uses."""
    side: str
    """both | left | right."""
    level: float
    """Nominal coverage of the interval."""
    p_value: float
    """Of the thin-tail test; small speaks for power tails."""
    gamma: float
    """1/index before any rounding to inf."""
    gamma_error: float
    """Standard error of gamma, block bootstrap."""
    hill_gamma: float
    """Second opinion: Hill on the largest 5 %."""
    hill_error: float
    """Its standard error: the larger of gamma/sqrt(k) and the block bootstrap's."""
    hill_count: int
    """Upper order statistics the second opinion uses."""
    rows: int
    """Values used, zeros dropped."""
    note: str = ""
    """What was done to zeros and ties, if anything."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Magnitudes:
    """A series made ready for tail estimation."""

    values: FloatArray
    """Signed, zeros dropped, ties broken; in the order of the series."""
    note: str
    """What was done to zeros and ties; empty if nothing."""


def block_length(n: int) -> int:
    """Block length used everywhere for n dependent rows: ceil(n^0.6)."""
    return math.ceil(n**0.6)


def thin_count(n: int) -> int:
    """Largest values the thin-tail test looks at: 15 % of n."""
    return max(3, int(0.15 * n))


def hill_count(n: int) -> int:
    """Largest values the second opinion uses: 5 % of n."""
    return max(2, int(0.05 * n))


def repeat_share(n: int) -> float:
    """Share above which a repeated value is set aside: 2 %, and more than one row."""
    return max(ZERO_SHARE, 1 / n)


def bias_aware_factor(ratio: float, level: float) -> float:
    """The `level` quantile of |N(ratio, 1)|: critical value when bias/s.e. is at most `ratio`.

    Armstrong et al. (2018), Econometrica 86. ratio 0 and level 0.90 give 1.645.
    """
    low, high = 0.0, ratio + 6.0
    for _ in range(60):
        middle = (low + high) / 2
        if norm.cdf(middle - ratio) - norm.cdf(-middle - ratio) < level:
            low = middle
        else:
            high = middle
    return high


def index_from_gamma(gamma: float) -> float:
    """1/gamma, or inf where gamma <= 0.02."""
    return 1 / gamma if gamma > GAMMA_FLOOR else math.inf


def interval_from_gamma(gamma: float, error: float, level: float) -> tuple[float, float]:
    """Ends of the interval for the index: the bias-aware interval of gamma, inverted."""
    half = error * bias_aware_factor(BIAS_BOUND / max(error, 1e-12), level) if error else BIAS_BOUND
    top, bottom = gamma + half, gamma - half
    return (1 / top if top > 0 else math.inf), (1 / bottom if bottom > 0 else math.inf)


def moderate(values: FloatArray) -> FloatArray:
    """Series along the first axis, each of extreme size scaled by a power of two.

    An index has no unit; series of ordinary size are returned as they are.
    """
    top = np.abs(values).max(axis=0)
    extreme = (top > LARGEST) | ((top < SMALLEST) & (top > 0))
    if not extreme.any():
        return values
    return np.asarray(np.ldexp(values, np.where(extreme, -np.frexp(top)[1], 0)))


def tied_share(values: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Share of ties among the tenth farthest from the median, and the distance that is a tie.

    `values` is (n,) or (n, columns); both results are scalars or (columns,). Values of opposite
    sign do not tie, so that a symmetric sample is not taken for a rounded one.
    """
    n = values.shape[0]
    ordered = np.sort(values, axis=0)
    magnitude = np.abs(ordered - np.median(values, axis=0))
    ranked = np.sort(magnitude, axis=0)
    near = NEAR * ranked[(n - 1) // 2]
    far = magnitude >= ranked[n - max(10, n // 10)] - near
    same = (np.diff(ordered, axis=0) <= near) & far[1:] & far[:-1]
    tied = np.zeros(far.shape, dtype=bool)
    tied[:-1] |= same
    tied[1:] |= same
    return np.asarray(tied.sum(axis=0) / far.sum(axis=0)), np.asarray(near)


def prepare(values: FloatArray, *, name: str = "values", seed: int = 0) -> Magnitudes:
    """Drop exact zeros and break ties, by the rules below, saying so.

    More than 2 % exact zeros: they are dropped. More than half of the largest tenth tied:
    the values are rounded; uniform noise of the rounding step is added. A step above half a
    standard deviation, or fewer than 30 values left, is refused.

    Raises
    ------
    InputError
        If the series is constant, discrete, or too short for an index.
    """
    notes = []
    values = moderate(values)
    zeros = values == 0
    if zeros.mean() > repeat_share(values.size):
        values = values[~zeros]
        notes.append(f"{zeros.mean():.0%} exact zeros dropped")
    if values.size < MINIMUM:
        raise InputError(f"{name}: {values.size} values other than 0; an index needs {MINIMUM}")
    spread = float(values.std())
    if np.ptp(values) == 0 or spread == 0:
        raise InputError(f"{name}: constant, so it has no tail")
    tied, near = tied_share(values)
    if tied > TIE_SHARE:
        gaps = np.diff(np.sort(values))
        gaps = gaps[gaps > near]
        step = float(gaps.min(initial=np.inf))
        if step > spread / 2 or gaps.size < 9:
            raise InputError(
                f"{name}: discrete ({gaps.size + 1} distinct values), so it has no tail index"
            )
        noise = stream(seed, "ties").uniform(-step / 2, step / 2, values.size)
        values = values + noise
        notes.append(f"rounded in steps of {step:.3g}; uniform noise of one step added")
    return Magnitudes(values=values, note="; ".join(notes))


def one_side(values: FloatArray, side: str) -> FloatArray:
    """Decreasing magnitudes about the median along the last axis; one side keeps its own sign."""
    centred = values - np.median(values, axis=-1, keepdims=True)
    if side == "both":
        chosen = np.abs(centred)
    else:
        chosen = centred if side == "right" else -centred
    return np.asarray(np.sort(chosen, axis=-1)[..., ::-1])


def _counts(n: int, side: str) -> tuple[int, int, int]:
    """Order statistics for the weighted Hill, Hill and the thin-tail test."""
    tail_rows = n if side == "both" else n // 2
    return tail_rows // 2, hill_count(tail_rows), thin_count(tail_rows)


def tail_index(values: Any, *, side: str = "both", level: float = 0.90, seed: int = 0) -> TailIndex:
    """Estimate the tail index of a series, which may be serially dependent.

    Parameters
    ----------
    values : array-like, shape (n,), n >= 30
        In time order where there is one.
    side : {'both', 'left', 'right'}
        Which tail; 'both' pools magnitudes about the median.
    level : float
        Nominal coverage of the interval.
    seed : int
        Of the bootstrap and the tie-breaking noise.

    Raises
    ------
    InputError
        If `values` are not finite numbers, too few, constant or discrete.

    Notes
    -----
    Point: Huisman et al. (2001), Journal of Business & Economic Statistics 19, with
    kappa = n/2. Interval: circular block bootstrap, block ceil(n^0.6), then the bias-aware
    length of Armstrong et al. (2018), Econometrica 86, with bound 0.06 on gamma.
    """
    if side not in SIDES:
        raise InputError(f"side: one of both, left, right is needed; found {side!r}")
    between(level, "level", 0, 1)
    series = prepare(finite_vector(values, "values", minimum=MINIMUM), seed=seed)
    sample = series.values
    n = sample.size
    kappa, k_hill, k_thin = _counts(n, side)
    ordered = one_side(sample, side)
    if ordered[kappa] <= 0:
        raise InputError("values: more than half of them are equal, so there is no tail index")
    gamma = float(weighted_hill(ordered, kappa))
    second = float(hill(ordered, k_hill))
    weighted_error, block_hill_error = _bootstrap_errors(sample, side, kappa, k_hill, seed)
    low, high = interval_from_gamma(gamma, weighted_error, level)
    p_value = float(greenwood_p_value(greenwood_statistic(ordered, k_thin), k_thin))
    return TailIndex(
        index=index_from_gamma(gamma),
        low=low,
        high=high,
        finite=p_value <= THIN_LEVEL,
        threshold_count=kappa,
        side=side,
        level=level,
        p_value=p_value,
        gamma=gamma,
        gamma_error=weighted_error,
        hill_gamma=second,
        hill_error=max(block_hill_error, second / math.sqrt(k_hill)),
        hill_count=k_hill,
        rows=n,
        note=series.note,
    )


def _bootstrap_errors(
    sample: FloatArray, side: str, kappa: int, k_hill: int, seed: int
) -> tuple[float, float]:
    """Standard errors of the weighted Hill and of Hill by the circular block bootstrap."""
    n = sample.size
    block = block_length(n)
    rng = stream(seed, "tail bootstrap")
    starts = rng.integers(0, n, (BOOTSTRAP_DRAWS, math.ceil(n / block)))
    weighted, plain = [], []
    per_pass = max(1, 4_000_000 // n)
    for first in range(0, BOOTSTRAP_DRAWS, per_pass):
        rows = starts[first : first + per_pass, :, None] + np.arange(block)
        drawn = sample[rows.reshape(rows.shape[0], -1)[:, :n] % n]
        ordered = np.maximum(one_side(drawn, side).T[: kappa + 1], np.finfo(float).tiny)
        weighted.append(weighted_hill(ordered, kappa))
        plain.append(hill(ordered, k_hill))
    return (
        float(np.concatenate(weighted).std(ddof=1)),
        float(np.concatenate(plain).std(ddof=1)),
    )
