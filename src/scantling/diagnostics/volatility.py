"""GARCH(1,1) on the residuals, and the tail index its recurrence implies."""

from __future__ import annotations

import math
import warnings
from collections.abc import Callable
from dataclasses import dataclass
from typing import Any, Literal

import numpy as np

from scantling.core.checks import between, finite_vector
from scantling.core.record import FloatArray, read_only
from scantling.core.streams import stream
from scantling.errors import InputError

FEWEST = 100
"""Values below which no GARCH is fitted (common practice, no source)."""

NO_CLUSTERING = 1e-4
"""Fitted alpha at or below this is the boundary 0 to the optimiser's precision."""

PATH_FLOOR = 0.05
"""The path is kept at or above this share of its median, so that rows can be
divided by it (common practice, no source)."""

LARGEST_INDEX = 1000.0
"""An index above this is returned as infinity."""

STEP = 0.01
"""Step of the trapezoid rule in ln z; the integrands are analytic, so that its
error falls like exp(-constant / STEP) and is below rounding here."""

PATH_DRAWS = 50
"""Paths drawn, one for each drawn law behind a band."""

Innovation = Literal["normal", "student-t"]
LogMoment = Callable[[float], float]


@dataclass(frozen=True, slots=True, kw_only=True)
class Volatility:
    """A fitted GARCH(1,1): sigma_t^2 = omega + alpha e_(t-1)^2 + beta sigma_(t-1)^2."""

    omega: float
    """Constant of the variance recurrence, in squared units of the series."""
    alpha: float
    """Weight of the last squared error, above 0."""
    beta: float
    """Weight of the last variance, 0 to 1."""
    innovation: Innovation
    """Law of the innovations in the likelihood."""
    nu: float | None
    """Degrees of freedom of Student innovations; None for normal ones."""
    persistence: float
    """alpha + beta, at most 1."""
    tail_index: float
    """Index of the errors by the recurrence with the empirical standardised
    innovations; infinite where none reaches 1000."""
    path: FloatArray
    """Fitted sigma_t, shape (n,), read-only, in units of the series, at least
    5 % of its median."""
    path_draws: FloatArray
    """Paths under parameters drawn given the sample, shape (50, n), same units and floor."""
    log_likelihood: float
    """Maximised log-likelihood of the series in its own units."""


def fit_garch(
    u: Any,
    *,
    innovation: Innovation = "student-t",
    mean: Literal["zero", "constant"] = "zero",
    seed: int = 0,
) -> Volatility | str:
    """Fit a GARCH(1,1) by maximum likelihood, or say why there is none.

    The series is centred at its mean and scaled to unit sd before arch fits
    it; results are in the series' own units. Deterministic.

    Parameters
    ----------
    u : array-like, shape (n,)
        Residuals in time order.
    innovation : 'student-t' or 'normal'
        Law of the innovations.
    mean : 'zero' or 'constant'
        'constant' estimates the mean with the rest, as for raw returns.
    seed : int
        Of the drawn paths.

    Returns
    -------
    Volatility or str
        The fit; or one line of reason: too few values, no convergence, or no
        clustering (alpha at 0).

    Raises
    ------
    InputError
        If u is not finite or constant, or an option is unknown.

    Source: Bollerslev (1986), Journal of Econometrics 31, 307-327.
    """
    series = finite_vector(u, "u")
    laws = {"student-t": "t", "normal": "normal"}
    if innovation not in laws:
        raise InputError(f"innovation: 'student-t' or 'normal' is needed; found {innovation!r}")
    if mean not in ("zero", "constant"):
        raise InputError(f"mean: 'zero' or 'constant' is needed; found {mean!r}")
    top = float(np.abs(series).max())
    if not top or np.ptp(series / top) <= 1e-12:
        raise InputError("u: values that vary are needed; all are equal")
    if series.size < FEWEST:
        return f"{series.size} values: a GARCH fit needs {FEWEST}"
    centred = series / top - np.mean(series / top)
    spread = float(centred.std())
    fitted = _maximise(centred / spread, laws[innovation], mean, seed)
    if isinstance(fitted, str):
        return fitted
    parameters = fitted.parameters
    alpha, beta = parameters["alpha[1]"], parameters["beta[1]"]
    if alpha <= NO_CLUSTERING:
        return "no clustering fitted: alpha is 0"
    floor = PATH_FLOOR * np.median(fitted.path)
    path = np.maximum(fitted.path, floor)
    scale = spread * top
    return Volatility(
        omega=parameters["omega"] * scale**2,
        alpha=alpha,
        beta=beta,
        innovation=innovation,
        nu=parameters.get("nu"),
        persistence=alpha + beta,
        tail_index=kesten_index(alpha, beta, moment_of=fitted.residuals / path),
        path=read_only(path * scale),
        path_draws=read_only(np.maximum(fitted.path_draws, floor) * scale),
        log_likelihood=fitted.log_likelihood - series.size * math.log(scale),
    )


def kesten_index(
    alpha: float,
    beta: float,
    *,
    gamma: float = 0.0,
    moment_of: Literal["normal"] | float | FloatArray = "normal",
) -> float:
    """Return the tail index kappa of e_t = sigma_t z_t under GARCH(1,1) or GJR.

    The positive root of E[(alpha z^2 + gamma z^2 1(z < 0) + beta)^(kappa/2)] = 1
    with E z^2 = 1. It exists if E ln(.) < 0 and the moments reach 1.

    Parameters
    ----------
    alpha, beta : float
        Weights of the last squared error and of the last variance, at least 0.
    gamma : float
        Extra weight of a negative error; alpha + gamma at least 0.
    moment_of : 'normal', a number above 2, or an array
        Law of z: standard normal; Student t with that many degrees of freedom
        at unit variance (the index then stays below it); or the empirical law
        of an array, which is rescaled to mean square 1.

    Returns
    -------
    float
        The index; infinity above 1000 or where it does not exist because the
        recurrence never expands; 0 where no stationary solution exists.

    Raises
    ------
    InputError
        If a weight is negative or not finite, or moment_of is none of these.

    Sources: Kesten (1973), Acta Mathematica 131, 207-248; Goldie (1991),
    Annals of Applied Probability 1, 126-166; Mikosch et al. (2000), Annals of
    Statistics 28, 1427-1451.
    """
    alpha = between(alpha, "alpha", 0.0, 1e6, closed=True)
    beta = between(beta, "beta", 0.0, 1e6, closed=True)
    gamma = between(gamma, "gamma", -alpha, 1e6, closed=True)
    ceiling = LARGEST_INDEX
    if isinstance(moment_of, str):
        if moment_of != "normal":
            raise InputError(
                "moment_of: 'normal', degrees of freedom above 2 or an array is needed;"
                f" found {moment_of!r}"
            )
        log_moment = _log_moment_of_law(alpha, gamma, beta, None)
    elif np.ndim(moment_of) == 0:
        nu = between(moment_of, "moment_of", 2.0, math.inf)
        if max(alpha, alpha + gamma) <= 0:
            return nu if beta < 1 else 0.0
        log_moment = _log_moment_of_law(alpha, gamma, beta, nu)
        ceiling = min(ceiling, nu * (1 - 1e-12))
    else:
        log_moment = _log_moment_of_sample(alpha, gamma, beta, moment_of)
    root = _positive_root(log_moment, ceiling)
    return root if root < LARGEST_INDEX else math.inf


def _positive_root(log_moment: LogMoment, ceiling: float) -> float:
    """Return the positive root of a convex function that is 0 at 0; ceiling if beyond it.

    It is 0 if the function is not negative to the right of 0.
    """
    from scipy.optimize import brentq

    high = min(2.0, ceiling)
    while log_moment(high) <= 0:
        if high >= ceiling:
            return ceiling
        high = min(2 * high, ceiling)
    low = high / 2
    while log_moment(low) >= 0:
        low /= 2
        if low < 1e-7:
            return 0.0
    return float(brentq(log_moment, low, high, xtol=1e-12, rtol=1e-14))


def _log_moment_of_law(alpha: float, gamma: float, beta: float, nu: float | None) -> LogMoment:
    """Return kappa -> ln E A^(kappa/2) for normal z (nu None) or unit-variance t_nu.

    Trapezoid rule in s = ln|z| for each sign of z. Past the last node of a
    Student law the integrand is exp((kappa - nu) s) times a constant, so its
    nodes to infinity add up to a geometric series.
    """
    from scipy.special import logsumexp

    s = np.arange(-45.0, 5.0 if nu is None else 45.0, STEP)
    square = np.exp(2 * s)
    if nu is None:
        log_density = -square / 2 - math.log(2 * math.pi) / 2
    else:
        log_density = (
            math.lgamma((nu + 1) / 2)
            - math.lgamma(nu / 2)
            - math.log(math.pi * (nu - 2)) / 2
            - (nu + 1) / 2 * np.log1p(square / (nu - 2))
        )
    log_weight = log_density + s + math.log(STEP)
    with np.errstate(divide="ignore"):
        logs = [np.log(weight * square + beta) for weight in (alpha, alpha + gamma)]

    def log_moment(kappa: float) -> float:
        terms = []
        for log_factor in logs:
            exponent = log_weight + kappa / 2 * log_factor
            if nu is not None:
                # The rate at the last node is kappa - nu where A grows, -nu where it does not.
                rate = exponent[-1] - exponent[-2]
                exponent[-1] -= math.log(-math.expm1(min(rate, -1e-15)))
            terms.append(exponent)
        return float(logsumexp(np.concatenate(terms)))

    return log_moment


def _log_moment_of_sample(alpha: float, gamma: float, beta: float, sample: Any) -> LogMoment:
    """Return kappa -> ln mean A^(kappa/2) over a sample, rescaled to mean square 1."""
    from scipy.special import logsumexp

    z = finite_vector(sample, "moment_of", minimum=2)
    top = float(np.abs(z).max())
    if not top:
        raise InputError("moment_of: values that vary are needed; all are 0")
    z = z / top
    z = z / math.sqrt(float(np.mean(z**2)))
    with np.errstate(divide="ignore"):
        log_factor = np.log((alpha + gamma * (z < 0)) * z**2 + beta)

    def log_moment(kappa: float) -> float:
        return float(logsumexp(kappa / 2 * log_factor)) - math.log(z.size)

    return log_moment


@dataclass(frozen=True, slots=True, kw_only=True)
class _Maximised:
    """What arch's fit gives."""

    parameters: dict[str, float]
    """By arch's names."""
    path: FloatArray
    """sigma_t, shape (n,)."""
    log_likelihood: float
    """Maximised."""
    residuals: FloatArray
    """Series less its mean, shape (n,)."""
    path_draws: FloatArray
    """Paths under drawn parameters, shape (PATH_DRAWS, n)."""


def _maximise(series: FloatArray, law: str, mean: str, seed: int) -> _Maximised | str:
    """Return arch's fit, or why there is none."""
    from arch import arch_model

    model = arch_model(
        series, mean=mean.capitalize(), vol="GARCH", p=1, q=1, dist=law, rescale=False
    )
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")  # what they say is read from the flag and the numbers
        try:
            result = model.fit(disp="off", show_warning=False)
            if result.convergence_flag != 0:
                result = model.fit(
                    disp="off", show_warning=False, starting_values=result.params.to_numpy()
                )
        except (ValueError, FloatingPointError, np.linalg.LinAlgError) as fault:
            return f"the GARCH likelihood could not be maximised: {fault}".splitlines()[0]
        if result.convergence_flag != 0:
            return "the GARCH likelihood did not converge"
        parameters = {name: float(value) for name, value in result.params.items()}
        path: FloatArray = np.asarray(result.conditional_volatility, dtype=np.float64)
        log_likelihood = float(result.loglikelihood)
        numbers = [*parameters.values(), log_likelihood, float(path.sum())]
        if not np.isfinite(numbers).all() or path.min() <= 0:
            return "the GARCH fit has values that are not finite"
        return _Maximised(
            parameters=parameters,
            path=path,
            log_likelihood=log_likelihood,
            residuals=np.asarray(result.resid, dtype=np.float64),
            path_draws=_path_draws(model, result, path, seed),
        )


def _path_draws(model: Any, result: Any, path: FloatArray, seed: int) -> FloatArray:
    """Volatility paths under parameters the sample cannot tell from the fitted ones.

    Parameters are drawn from the normal law about the estimate with arch's robust covariance,
    those outside the admissible region being drawn again; each path is arch's own recursion. A
    covariance that is not one leaves the fitted path in every draw.
    """
    names = list(result.params.index)
    spots = [names.index(name) for name in ("omega", "alpha[1]", "beta[1]")]
    centre = result.params.to_numpy(dtype=np.float64)
    try:
        covariance = np.asarray(result.param_cov, dtype=np.float64)[np.ix_(spots, spots)]
        root = np.linalg.cholesky(covariance)
    except (ValueError, np.linalg.LinAlgError):
        return np.tile(path, (PATH_DRAWS, 1))
    rng = stream(seed, "volatility draws")
    out: list[FloatArray] = []
    for _ in range(20 * PATH_DRAWS):
        omega, alpha, beta = centre[spots] + root @ rng.standard_normal(3)
        if omega <= 0 or alpha < 0 or beta < 0 or alpha + beta > 1:
            continue
        drawn = centre.copy()
        drawn[spots] = omega, alpha, beta
        moved = np.asarray(model.fix(drawn).conditional_volatility, dtype=np.float64)
        if np.isfinite(moved).all() and moved.min() > 0:
            out.append(moved)
        if len(out) == PATH_DRAWS:
            break
    return np.array(out + [path] * (PATH_DRAWS - len(out)))
