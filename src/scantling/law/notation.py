"""How a law is written on one line: `normal`, `skewed-t:df=4,skew=-0.3`.

Volatility and persistence from row to row are added by further keys.
"""

from __future__ import annotations

import difflib
import math
from collections.abc import Mapping
from contextlib import suppress
from dataclasses import replace
from typing import Any, Literal

import numpy as np

from scantling.core.checks import between
from scantling.core.record import read_only
from scantling.diagnostics.autoregression import FURTHEST, MOST_LAGS, Autoregression
from scantling.diagnostics.volatility import Volatility
from scantling.errors import InputError
from scantling.law.catalogue import CATALOGUE, STATED
from scantling.law.families import ErrorLaw
from scantling.law.innovation import Innovation, Parameter

RECURRENCE = (
    Parameter(key="alpha", low=0.0, high=1.0, example=0.08),
    Parameter(key="beta", low=0.0, high=1.0, example=0.9, default=0.0),
    Parameter(key="leverage", low=-1.0, high=2.0, example=0.05, default=0.0),
)
"""Volatility: GARCH(1,1), with leverage GJR(1,1); here the lower ends are accepted."""
LAGS = tuple(
    Parameter(key=f"lag{lag}", low=-1000.0, high=1000.0, example=0.2, default=0.0)
    for lag in range(1, MOST_LAGS + 1)
)
"""Coefficients of an autoregression; its stationarity is what bounds them."""
PRINTED = 1e-9
"""Numbers of a report are rounded: so far below its end a weight still counts as at it."""
ALIASES = {"t": "student-t", "gauss": "normal", "gaussian": "normal", "skew-t": "skewed-t"}
"""Other names that families go by, for the hint alone."""


def written(family: str) -> str:
    """An example of the family as it is written; it must be one that can be stated."""
    parameters = CATALOGUE[family].stated_by or ()
    shown = ",".join(f"{p.key}={p.example:g}" for p in parameters)
    return f"{family}:{shown}" if shown else family


WRITTEN = {name: written(name) for name in STATED}
"""Families that can be stated, and an example of each."""


def parse_law(text: str, name: str = "law") -> ErrorLaw:
    """Read a stated law; its variance is 1 where it exists, else its scale.

    Parameters
    ----------
    text : str
        `family` or `family:key=value,key=value`; to the family's own keys alpha, beta and
        leverage may be added, which make volatility follow GARCH(1,1) or GJR(1,1), and lag1 to
        lag10, which make the errors an autoregression of what the rest describes.
    name : str
        The argument's name, for messages.

    Raises
    ------
    InputError
        If the family or a parameter is unknown, missing or out of range, the volatility has
        no mean level, or the autoregression is not stationary.
    """
    family, _, rest = text.partition(":")
    parameters: dict[str, str] = {}
    for part in filter(None, rest.split(",")):
        key, equals, value = part.partition("=")
        if not equals:
            raise InputError(f"{name}: key=value is needed after the family; found {part!r}")
        if key.strip() in parameters:
            raise InputError(f"{name}: {key.strip()} is given twice; found {text!r}")
        parameters[key.strip()] = value
    if family.strip() not in STATED:
        raise InputError(
            f"{name}: one of {', '.join(WRITTEN.values())} is needed; found"
            f" {text!r}{_meant(family)}"
        )
    return stated_law(family.strip(), parameters, name)


def _meant(family: str) -> str:
    """The known family most like a name that is none, as a question."""
    like = family.strip().lower()
    near = difflib.get_close_matches(like[:100], STATED, n=1)
    found = ALIASES.get(like, near[0] if near else "")
    return f"; did you mean {found}?" if found else ""


def stated_law(family: str, parameters: Mapping[str, Any], name: str = "law") -> ErrorLaw:
    """A law by the name of its family and its parameters, as `parse_law` reads them.

    Raises
    ------
    InputError
        As `parse_law`.
    """
    if family not in STATED:
        raise InputError(
            f"{name}: one of {', '.join(STATED)} is needed; found {family!r}{_meant(family)}"
        )
    known = CATALOGUE[family].stated_by or ()
    keys = [parameter.key for parameter in (*known, *RECURRENCE)]
    lags = [parameter.key for parameter in LAGS]
    for key in parameters:
        if key not in keys + lags:
            raise InputError(
                f"{name}: {family} has no parameter {key!r}; accepted: {', '.join(keys)}, {lags[0]}"
                f" to {lags[-1]}"
            )
    innovation = CATALOGUE[family].stated(
        **{p.key: _value(p, parameters, family, name) for p in known}
    )
    levels = _autoregression(parameters, family, name)
    share = 1.0 if levels is None else 1 / levels.gain  # of the errors' variance, the shocks'
    if any(p.key in parameters for p in RECURRENCE):
        path = _volatility(innovation, parameters, share, family, name)
        return ErrorLaw(innovation=innovation, volatility=path, autoregression=levels)
    if math.isfinite(innovation.variance) and levels is not None:
        innovation = innovation.scaled(math.sqrt(share))
    return ErrorLaw(innovation=innovation, autoregression=levels)


def _value(parameter: Parameter, given: Mapping[str, Any], family: str, name: str) -> float:
    """One parameter, or its default."""
    key = parameter.key
    if key in given:
        low, recurrence = parameter.low, parameter in RECURRENCE
        with suppress(TypeError, ValueError):
            if recurrence and low - PRINTED <= float(given[key]) < low:
                return low
        closed: Literal["low"] | bool = "low" if recurrence else False
        return between(given[key], f"{name}: {key}", low, parameter.high, closed=closed)
    if parameter.default is None:
        shown = WRITTEN.get(family, family)
        if parameter in RECURRENCE:
            shown += ("," if ":" in shown else ":") + "alpha=0.08,beta=0.9"
        raise InputError(f"{name}: {family} needs {key}, as in {shown}")
    return parameter.default


def _autoregression(given: Mapping[str, Any], family: str, name: str) -> Autoregression | None:
    """The stated coefficients, stationary; None where there are none but 0."""
    found = np.array([_value(parameter, given, family, name) for parameter in LAGS])
    found = np.trim_zeros(found, "b")
    if not found.size:
        return None
    levels = Autoregression(coefficients=read_only(found), draws=read_only(found[None].copy()))
    if levels.root > FURTHEST + PRINTED:
        keys = "lag1" if found.size == 1 else f"lag1 to lag{found.size}"
        raise InputError(
            f"{name}: {keys}: a stationary autoregression is needed, of largest root at most"
            f" {FURTHEST:g}; found {levels.root:.6g}"
        )
    return levels


def _volatility(
    innovation: Innovation, given: Mapping[str, Any], level: float, family: str, name: str
) -> Volatility:
    """A stated recurrence of this mean level of the variance; its path is that level alone."""
    if not math.isfinite(innovation.variance):
        raise InputError(
            f"{name}: volatility needs innovations with a variance; {family} has none here"
        )
    alpha, beta, leverage = (_value(p, given, family, name) for p in RECURRENCE)
    if alpha + leverage < -PRINTED:
        raise InputError(
            f"{name}: alpha + leverage of at least 0 is needed; found {alpha + leverage:g}"
        )
    leverage = max(leverage, -alpha)
    share = innovation.negative_share
    persistence = alpha + beta + leverage * share
    if persistence >= 1:
        raise InputError(
            f"{name}: alpha + beta + {share:.3g} leverage below 1 is needed; found {persistence:g}"
        )
    path = Volatility(
        omega=level * (1 - persistence),
        alpha=alpha,
        beta=beta,
        leverage=leverage,
        innovation="normal" if family == "normal" else "student-t",
        nu=innovation.parameters.get("df"),
        persistence=persistence,
        tail_index=innovation.tail_index,
        path=read_only(np.full(1, math.sqrt(level))),
        path_draws=read_only(np.full((1, 1), math.sqrt(level))),
        log_likelihood=None,
    )
    return replace(path, tail_index=innovation.recurrence_index(path))
