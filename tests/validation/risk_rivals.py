"""Maximum likelihood with the true family on the true errors: the rival that knows the family.

Written apart from the tool's own fits. The centre is known, 0, as it is to nobody in practice.
"""

from __future__ import annotations

import math
import warnings
from collections.abc import Callable
from functools import cache

import numpy as np
from scipy.optimize import minimize, minimize_scalar
from scipy.special import gammaln

from scantling.core.record import FloatArray

Draw = Callable[[np.random.Generator, int], FloatArray]
"""(generator, count) -> errors, shape (n, count)."""
LEAST_INVERSE, MOST_INVERSE = 1 / 500, 0.95
"""Range of 1/df."""
STABLE_EXPONENTS = np.arange(1.10, 2.0001, 0.02)


def maximum_likelihood(family: str, errors: FloatArray) -> tuple[Draw, float]:
    """Draws from the fitted law, and its shape (0 where there is none).

    Parameters
    ----------
    family : {'normal', 'Laplace', 't', 'skewed t', 'GED', 'GARCH normal', 'GARCH t', 'stable'}
    errors : array, shape (n,)
        In time order; GARCH draws keep the fitted volatility path. Scores are compared with
        loadings of the same draw, so scales do not matter and are left at 1.
    """
    return FITS[family](errors)


def _normal(e: FloatArray) -> tuple[Draw, float]:
    return lambda rng, count: rng.standard_normal((e.size, count)), 0.0


def _laplace(e: FloatArray) -> tuple[Draw, float]:
    return lambda rng, count: rng.laplace(size=(e.size, count)), 0.0


def log_student(z: FloatArray, df: float) -> FloatArray:
    """Log-density of Student t."""
    constant = gammaln((df + 1) / 2) - gammaln(df / 2) - 0.5 * math.log(math.pi * df)
    return np.asarray(constant - (df + 1) / 2 * np.log1p(z**2 / df))


def _search(negative: Callable[[FloatArray], float], starts: list[list[float]]) -> FloatArray:
    """Best of the local searches from each start."""
    found = [
        minimize(negative, start, method="Nelder-Mead", options={"xatol": 1e-4, "fatol": 1e-6})
        for start in starts
    ]
    return np.asarray(min(found, key=lambda result: result.fun).x)


def _inverse(value: float) -> float:
    return min(max(abs(float(value)), LEAST_INVERSE), MOST_INVERSE)


def _student(e: FloatArray) -> tuple[Draw, float]:
    spread = float(np.median(np.abs(e)))

    def negative(x: FloatArray) -> float:
        return float(-log_student(e / (spread * math.exp(x[1])), 1 / _inverse(x[0])).sum()
                     + e.size * x[1])  # fmt: skip

    inverse = _inverse(_search(negative, [[0.3, 0.3], [0.1, 0.3]])[0])
    return lambda rng, count: rng.standard_t(1 / inverse, (e.size, count)), inverse


def mean_size(df: float) -> float:
    """E|t| for Student t, df above 1."""
    return math.sqrt(df / math.pi) * math.exp(math.lgamma((df - 1) / 2) - math.lgamma(df / 2))


def log_skewed_student(z: FloatArray, df: float, skew: float) -> FloatArray:
    """Two-piece Student t of Fernandez et al. (1998), JASA 93, shifted to mean 0."""
    moved = z + mean_size(df) * (skew - 1 / skew)
    unit = np.where(moved > 0, moved / skew, moved * skew)
    return np.asarray(math.log(2 / (skew + 1 / skew)) + log_student(unit, df))


def _skewed(e: FloatArray) -> tuple[Draw, float]:
    spread = float(np.median(np.abs(e)))

    def negative(x: FloatArray) -> float:
        z = e / (spread * math.exp(x[1]))
        skew = math.exp(min(max(x[2], -1.5), 1.5))
        return float(-log_skewed_student(z, 1 / _inverse(x[0]), skew).sum() + e.size * x[1])

    best = _search(negative, [[0.25, 0.0, s] for s in (-0.3, 0.3)])
    inverse, skew = _inverse(best[0]), math.exp(min(max(best[2], -1.5), 1.5))

    def draw(rng: np.random.Generator, count: int) -> FloatArray:
        size = np.abs(rng.standard_t(1 / inverse, (e.size, count)))
        right = rng.random((e.size, count)) < skew**2 / (1 + skew**2)
        shift = mean_size(1 / inverse) * (skew - 1 / skew)
        return np.where(right, skew * size, -size / skew) - shift

    return draw, inverse


def _ged(e: FloatArray) -> tuple[Draw, float]:
    unit = np.abs(e) / np.abs(e).mean()

    def negative(b: float) -> float:
        # At the most likely scale, (b mean |x|^b)^(1/b), the exponent's sum is n/b.
        log_scale = math.log(b * float((unit**b).mean())) / b
        return log_scale - math.log(b / 2) + math.lgamma(1 / b) + 1 / b

    exponent = float(minimize_scalar(negative, bounds=(0.4, 8.0), method="bounded").x)

    def draw(rng: np.random.Generator, count: int) -> FloatArray:
        size = rng.gamma(1 / exponent, size=(e.size, count)) ** (1 / exponent)
        return rng.choice([-1.0, 1.0], (e.size, count)) * size

    return draw, exponent


@cache
def stable_table(exponent: float) -> tuple[FloatArray, FloatArray]:
    """Log-density of the symmetric stable law of scale 1: ln(1 + x) and values there.

    To x = 12 by the inversion integral, beyond it by the tail series of Bergstrom (1952),
    Arkiv foer Matematik 2, five terms (at exponent 2 the normal law of variance 2).
    """
    near = np.linspace(0, 12, 241)
    if exponent > 2 - 1e-9:
        x = np.concatenate([near, np.geomspace(12.5, 1e4, 60)])
        return np.log1p(x), -(x**2) / 4 - math.log(2 * math.sqrt(math.pi))
    t = np.linspace(0, 45 ** (1 / exponent), 6001)
    weight = np.exp(-(t**exponent))
    weight[0] /= 2
    inner = np.cos(near[:, None] * t) @ weight * (t[1] / math.pi)
    far = np.geomspace(12.5, 1e6, 200)
    outer = np.zeros(far.size)
    for k in range(1, 6):
        factor = math.gamma(exponent * k + 1) / math.factorial(k)
        factor *= math.sin(k * math.pi * exponent / 2) * (-1) ** (k + 1) / math.pi
        outer += factor * far ** (-exponent * k - 1)
    return np.log1p(np.concatenate([near, far])), np.log(np.concatenate([inner, outer]))


def _stable(e: FloatArray) -> tuple[Draw, float]:
    from known_laws import stable

    size = np.abs(e) / np.median(np.abs(e))

    def profile(exponent: float) -> float:
        place, values = stable_table(exponent)
        return float(minimize_scalar(
            lambda s: s * e.size - np.interp(np.log1p(size / math.exp(s)), place, values).sum(),
            bounds=(-1.5, 1.5), method="bounded", options={"xatol": 1e-4},
        ).fun)  # fmt: skip

    exponents = [round(float(a), 2) for a in STABLE_EXPONENTS]
    best = min(exponents, key=profile)
    return lambda rng, count: stable(best).draw(rng, e.size, count), best


def _garch(law: str) -> Callable[[FloatArray], tuple[Draw, float]]:
    def fit(e: FloatArray) -> tuple[Draw, float]:
        from arch import arch_model

        model = arch_model(e / e.std(), mean="Zero", vol="GARCH", p=1, q=1, dist=law, rescale=False)
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")  # the last point reached is taken as it is
            result = model.fit(disp="off", show_warning=False)
        path = np.asarray(result.conditional_volatility)[:, None]
        if law == "normal":
            return lambda rng, count: path * rng.standard_normal((e.size, count)), 0.0
        df = float(result.params["nu"])
        return lambda rng, count: path * rng.standard_t(df, (e.size, count)), 1 / df

    return fit


FITS: dict[str, Callable[[FloatArray], tuple[Draw, float]]] = {
    "normal": _normal,
    "Laplace": _laplace,
    "t": _student,
    "skewed t": _skewed,
    "GED": _ged,
    "stable": _stable,
    "GARCH normal": _garch("normal"),
    "GARCH t": _garch("t"),
}
