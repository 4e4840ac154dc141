"""Tail index of one series: estimate, interval, thin-tail test, and what was done to ties.

Default estimator, threshold and interval as measured in reports/validation: weighted Hill
regression on half of the absolute median-centred values; standard error of the circular
moving-block bootstrap, in closed form; interval from the range of biases over the laws of
interest.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any

import numpy as np

from scantling.core.checks import between, finite_vector
from scantling.core.record import FloatArray
from scantling.core.streams import stream
from scantling.diagnostics.tail_interval import asymmetry_bias
from scantling.diagnostics.tail_kernel import tail_estimates
from scantling.errors import InputError

THIN_LEVEL = 0.05
MINIMUM = 30
"""Fewest values an index is estimated from."""
ZERO_SHARE = 0.02
SPIKE_TIMES = 3
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
    """Standard error of gamma, the block bootstrap's in closed form."""
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


def index_from_gamma(gamma: float) -> float:
    """1/gamma, or inf where gamma <= 0.02."""
    return 1 / gamma if gamma > GAMMA_FLOOR else math.inf


def index_ends(gamma_low: float, gamma_high: float) -> tuple[float, float]:
    """Ends of the index's interval from those of gamma; inf where gamma's is not positive."""
    low = 1 / gamma_high if gamma_high > 0 else math.inf
    return low, (1 / gamma_low if gamma_low > 0 else math.inf)


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


def spike(values: FloatArray) -> float | None:
    """The value to set aside before a tail is estimated; None if there is none.

    Exact zeros above 2 % (a day without a trade), or, as centring may have moved them, a value
    as frequent and three times as frequent as the next: rounding alone makes neighbours alike.
    """
    least = repeat_share(values.size)
    if (values == 0).mean() > least:
        return 0.0
    distinct, counts = np.unique(values, return_counts=True)
    first = int(counts.argmax())
    top = int(counts[first])
    counts[first] = 0
    alone = top > least * values.size and top >= SPIKE_TIMES * int(counts.max())
    return float(distinct[first]) if alone else None


def prepare(values: FloatArray, *, name: str = "values", seed: int = 0) -> Magnitudes:
    """Drop repeated values and break ties, by the rules below, saying so.

    A `spike`, as zeros are, is dropped. More than half of the largest tenth tied: the values
    are rounded; uniform noise of the rounding step is added. A step above half a standard
    deviation, or fewer than 30 values left, is refused.

    Raises
    ------
    InputError
        If the series is constant, discrete, or too short for an index.
    """
    notes = []
    noise = stream(seed, "ties")  # made whether used or not, so that a bad seed is refused
    values = moderate(values)
    if np.ptp(values) == 0:
        raise InputError(f"{name}: constant, so it has no tail")
    aside = spike(values)
    if aside is not None:
        kept = values != aside
        notes.append(f"{1 - kept.mean():.0%} equal values dropped")
        values = values[kept]
    if values.size < MINIMUM:
        raise InputError(
            f"{name}: {values.size} values besides the commonest; an index needs {MINIMUM}"
        )
    spread = float(values.std())
    if np.ptp(values) == 0 or spread == 0:
        raise InputError(f"{name}: {'two-valued' if notes else 'constant'}, so it has no tail")
    tied, near = tied_share(values)
    if tied > TIE_SHARE:
        gaps = np.diff(np.sort(values))
        gaps = gaps[gaps > near]
        step = float(gaps.min(initial=np.inf))
        if step > spread / 2 or gaps.size < 9:
            few = "two-valued" if gaps.size == 1 else f"discrete ({gaps.size + 1} distinct values)"
            raise InputError(f"{name}: {few}, so it has no tail index")
        values = values + noise.uniform(-step / 2, step / 2, values.size)
        notes.append(f"rounded in steps of {step:.3g}; uniform noise of one step added")
    return Magnitudes(values=values, note="; ".join(notes))


def magnitudes(values: FloatArray, side: str) -> FloatArray:
    """Distances from the median along the first axis; one side keeps its own sign."""
    centred = values - np.median(values, axis=0)
    if side == "both":
        return np.asarray(np.abs(centred))
    return np.asarray(centred if side == "right" else -centred)


def one_side(values: FloatArray, side: str) -> FloatArray:
    """The magnitudes of a series in decreasing order."""
    return np.asarray(np.sort(magnitudes(values, side))[::-1])


def tail_counts(n: int, side: str = "both") -> tuple[int, int, int]:
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
        Of the tie-breaking noise.

    Raises
    ------
    InputError
        If `values` are not finite numbers, too few, constant or discrete.

    Notes
    -----
    Point: Huisman et al. (2001), Journal of Business & Economic Statistics 19, with
    kappa = n/2. Interval: the circular block bootstrap's error in closed form, block
    ceil(n^0.6), then a bias-aware length after Armstrong et al. (2018), Econometrica 86, with
    the range of biases of `tail_interval`.
    """
    if side not in SIDES:
        raise InputError(f"side: one of both, left, right is needed; found {side!r}")
    between(level, "level", 0, 1)
    series = prepare(finite_vector(values, "values", minimum=MINIMUM), seed=seed)
    size = magnitudes(series.values, side)
    n = size.size
    counts = tail_counts(n, side)
    kappa, k_hill, _ = counts
    if np.partition(size, n - 1 - kappa)[n - 1 - kappa] <= 0:
        raise InputError("values: more than half of them are equal, so there is no tail index")
    skew = asymmetry_bias(series.values[:, None]) if side == "both" else 0.0
    found = tail_estimates(
        size[:, None], counts, block=block_length(n), level=level, skew_bias=skew
    )
    gamma = float(found.gamma[0])
    low, high = index_ends(float(found.gamma_low[0]), float(found.gamma_high[0]))
    p_value = float(found.p_value[0])
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
        gamma_error=float(found.error[0]),
        hill_gamma=float(found.hill_gamma[0]),
        hill_error=float(found.hill_error[0]),
        hill_count=k_hill,
        rows=n,
        note=series.note,
    )
