"""GARCH(1,1), with or without leverage, on the residuals; arch does the fitting."""

from __future__ import annotations

import math
import warnings
from dataclasses import dataclass, replace
from typing import Any, Literal

import numpy as np

from scantling.core.checks import finite_vector
from scantling.core.record import FloatArray, read_only
from scantling.core.streams import stream
from scantling.diagnostics.kesten import kesten_index
from scantling.errors import InputError

FEWEST = 100
"""Values below which no GARCH is fitted (common practice, no source)."""

NO_CLUSTERING = 1e-4
"""Fitted alpha at or below this is the boundary 0 to the optimiser's precision."""

PATH_FLOOR = 0.05
"""The path is kept at or above this share of its median, so that rows can be
divided by it (common practice, no source)."""

PATH_DRAWS = 50
"""Paths drawn, one for each drawn law behind a band."""

Innovation = Literal["normal", "student-t"]
LAWS: dict[Innovation, str] = {"student-t": "t", "normal": "normal"}
"""Innovations of the likelihood, by arch's names."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Volatility:
    """GARCH(1,1): sigma_t^2 = omega + alpha e_(t-1)^2 + beta sigma_(t-1)^2, or GJR(1,1).

    Under GJR a negative error weighs alpha + leverage.
    """

    omega: float
    """Constant of the variance recurrence, in squared units of the series."""
    alpha: float
    """Weight of the last squared error, at least 0."""
    beta: float
    """Weight of the last variance, 0 to 1."""
    innovation: Innovation
    """Law of the innovations in the likelihood."""
    nu: float | None
    """Degrees of freedom of Student innovations; None for normal ones."""
    persistence: float
    """alpha + beta + leverage/2, at most 1."""
    tail_index: float
    """Index of the errors by the recurrence with the empirical standardised
    innovations; infinite where none reaches 1000."""
    path: FloatArray
    """Fitted sigma_t, shape (n,), read-only, in units of the series, at least
    5 % of its median."""
    path_draws: FloatArray
    """Paths under parameters drawn given the sample, shape (50, n), same units and floor."""
    log_likelihood: float | None
    """Maximised log-likelihood of the series in its own units; None: stated, not fitted."""
    leverage: float = 0.0
    """Extra weight of the last squared error where it was negative; 0: GARCH."""
    candidates: tuple[tuple[str, float], ...] = ()
    """Volatilities tried, as 'gjr, student-t', with their Bayes criterion, best first."""

    @property
    def kind(self) -> str:
        """'garch', or 'gjr' where there is leverage."""
        return "gjr" if self.leverage else "garch"


def fit_garch(
    u: Any,
    *,
    innovation: Innovation = "student-t",
    leverage: bool = False,
    mean: Literal["zero", "constant"] = "zero",
    seed: int = 0,
) -> Volatility | str:
    """Fit a GARCH(1,1) or GJR(1,1) by maximum likelihood, or say why there is none.

    The series is centred at its mean and scaled to unit sd before arch fits
    it; results are in the series' own units. Deterministic.

    Parameters
    ----------
    u : array-like, shape (n,)
        Residuals in time order.
    innovation : 'student-t' or 'normal'
        Law of the innovations.
    leverage : bool
        Whether negative errors may weigh more, or less.
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

    Sources: Bollerslev (1986), Journal of Econometrics 31, 307-327; Glosten et
    al. (1993), Journal of Finance 48, 1779-1801.
    """
    if innovation not in LAWS:
        raise InputError(f"innovation: 'student-t' or 'normal' is needed; found {innovation!r}")
    if mean not in ("zero", "constant"):
        raise InputError(f"mean: 'zero' or 'constant' is needed; found {mean!r}")
    series, scale = _standardised(u)
    if series.size < FEWEST:
        return f"{series.size} values: a GARCH fit needs {FEWEST}"
    fitted = _maximise(series, innovation, leverage, mean)
    return fitted if isinstance(fitted, str) else _record(fitted, scale, seed)


def choose_volatility(u: Any, *, seed: int = 0) -> Volatility | str:
    """GARCH(1,1) or GJR(1,1), with normal or Student innovations: the best by Bayes criterion.

    Returns
    -------
    Volatility or str
        As `fit_garch`; the reason is that of GARCH with Student innovations.

    Raises
    ------
    InputError
        If u is not finite or constant.

    Source: Schwarz (1978), Annals of Statistics 6, 461-464, for the criterion.
    """
    series, scale = _standardised(u)
    if series.size < FEWEST:
        return f"{series.size} values: a GARCH fit needs {FEWEST}"
    tried: list[tuple[str, float, _Maximised]] = []
    reason = ""
    for innovation in LAWS:
        for leverage in (False, True):
            fitted = _maximise(series, innovation, leverage, "zero")
            if isinstance(fitted, str):
                reason = reason or fitted
                continue
            loss = 2 * series.size * math.log(scale) - 2 * fitted.log_likelihood
            criterion = loss + len(fitted.parameters) * math.log(series.size)
            kind = "gjr" if leverage else "garch"
            tried.append((f"{kind}, {innovation}", criterion, fitted))
    if not tried:
        return reason
    tried.sort(key=lambda each: each[1])
    best = _record(tried[0][2], scale, seed)
    return replace(best, candidates=tuple((name, criterion) for name, criterion, _ in tried))


def _standardised(u: Any) -> tuple[FloatArray, float]:
    """The series centred and of sd 1, and its sd."""
    series = finite_vector(u, "u")
    top = float(np.abs(series).max())
    if not top or np.ptp(series / top) <= 1e-12:
        raise InputError("u: values that vary are needed; all are equal")
    centred = series / top - np.mean(series / top)
    spread = float(centred.std())
    return centred / spread, spread * top


def _record(fitted: _Maximised, scale: float, seed: int) -> Volatility:
    """The fit in the units of the series, with drawn paths."""
    parameters = fitted.parameters
    alpha, beta = parameters["alpha[1]"], parameters["beta[1]"]
    leverage = max(parameters.get("gamma[1]", 0.0), -alpha)  # the optimiser may overstep a hair
    floor = PATH_FLOOR * np.median(fitted.path)
    path = np.maximum(fitted.path, floor)
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")  # a covariance or path that is none is seen there
        draws = np.maximum(_path_draws(fitted, seed), floor)
    return Volatility(
        omega=parameters["omega"] * scale**2,
        alpha=alpha,
        beta=beta,
        leverage=leverage,
        innovation=fitted.innovation,
        nu=parameters.get("nu"),
        persistence=alpha + beta + leverage / 2,
        tail_index=kesten_index(alpha, beta, gamma=leverage, moment_of=fitted.residuals / path),
        path=read_only(path * scale),
        path_draws=read_only(draws * scale),
        log_likelihood=fitted.log_likelihood - fitted.path.size * math.log(scale),
    )


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
    innovation: Innovation
    """Law of the innovations."""
    model: Any
    """arch's model, for paths under other parameters."""
    result: Any
    """arch's result, for the covariance of the parameters."""


def _maximise(
    series: FloatArray, innovation: Innovation, leverage: bool, mean: str
) -> _Maximised | str:
    """Return arch's fit, or why there is none."""
    from arch import arch_model

    model = arch_model(
        series, mean=mean.capitalize(), vol="GARCH", p=1, o=int(leverage), q=1,
        dist=LAWS[innovation], rescale=False,
    )  # fmt: skip
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
    if parameters["alpha[1]"] + max(parameters.get("gamma[1]", 0.0), 0.0) <= NO_CLUSTERING:
        return "no clustering fitted: alpha is 0"
    return _Maximised(
        parameters=parameters,
        path=path,
        log_likelihood=log_likelihood,
        residuals=np.asarray(result.resid, dtype=np.float64),
        innovation=innovation,
        model=model,
        result=result,
    )


def _path_draws(fitted: _Maximised, seed: int) -> FloatArray:
    """Volatility paths under parameters the sample cannot tell from the fitted ones.

    Parameters are drawn from the normal law about the estimate with arch's robust covariance,
    those outside the admissible region being drawn again; each path is arch's own recursion. A
    covariance that is not one leaves the fitted path in every draw.
    """
    model, result, path = fitted.model, fitted.result, fitted.path
    names = list(result.params.index)
    wanted = [name for name in ("omega", "alpha[1]", "gamma[1]", "beta[1]") if name in names]
    spots = [names.index(name) for name in wanted]
    centre = result.params.to_numpy(dtype=np.float64)
    # What each adds to the persistence; a negative error weighs alpha + gamma.
    shares = np.array([{"omega": 0.0, "gamma[1]": 0.5}.get(name, 1.0) for name in wanted])
    try:
        covariance = np.asarray(result.param_cov, dtype=np.float64)[np.ix_(spots, spots)]
        root = np.linalg.cholesky(covariance)
    except (ValueError, np.linalg.LinAlgError):
        return np.tile(path, (PATH_DRAWS, 1))
    rng = stream(seed, "volatility draws")
    out: list[FloatArray] = []
    for _ in range(20 * PATH_DRAWS):
        tried = centre[spots] + root @ rng.standard_normal(len(spots))
        least = np.delete(tried, 2) if len(spots) == 4 else tried
        if tried[0] <= 0 or least.min() < 0 or tried[1:3].sum() < 0 or tried @ shares > 1:
            continue
        drawn = centre.copy()
        drawn[spots] = tried
        moved = np.asarray(model.fix(drawn).conditional_volatility, dtype=np.float64)
        if np.isfinite(moved).all() and moved.min() > 0:
            out.append(moved)
        if len(out) == PATH_DRAWS:
            break
    return np.array(out + [path] * (PATH_DRAWS - len(out)))
