"""How a law is written on one line: `normal`, `skewed-t:df=4,skew=-0.3`, with volatility or not."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import replace
from typing import Any

import numpy as np

from scantling.core.checks import between
from scantling.core.record import read_only
from scantling.diagnostics.volatility import Volatility
from scantling.errors import InputError
from scantling.law.catalogue import CATALOGUE, STATED
from scantling.law.families import ErrorLaw
from scantling.law.innovation import Innovation, Parameter

RECURRENCE = (
    Parameter(key="alpha", low=-1e-12, high=1.0, example=0.08),
    Parameter(key="beta", low=-1e-12, high=1.0, example=0.9, default=0.0),
    Parameter(key="leverage", low=-1e-12, high=2.0, example=0.05, default=0.0),
)
"""Volatility: GARCH(1,1), with leverage GJR(1,1)."""


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
        leverage may be added, which make volatility follow GARCH(1,1) or GJR(1,1).
    name : str
        The argument's name, for messages.

    Raises
    ------
    InputError
        If the family or a parameter is unknown, missing or out of range, or the volatility has
        no mean level.
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
        raise InputError(f"{name}: one of {', '.join(WRITTEN.values())} is needed; found {text!r}")
    return stated_law(family.strip(), parameters, name)


def stated_law(family: str, parameters: Mapping[str, Any], name: str = "law") -> ErrorLaw:
    """A law by the name of its family and its parameters, as `parse_law` reads them.

    Raises
    ------
    InputError
        As `parse_law`.
    """
    if family not in STATED:
        raise InputError(f"{name}: one of {', '.join(STATED)} is needed; found {family!r}")
    known = CATALOGUE[family].stated_by or ()
    keys = [parameter.key for parameter in (*known, *RECURRENCE)]
    for key in parameters:
        if key not in keys:
            raise InputError(
                f"{name}: {family} has no parameter {key!r}; accepted: {', '.join(keys)}"
            )
    innovation = CATALOGUE[family].stated(
        **{p.key: _value(p, parameters, family, name) for p in known}
    )
    given = [p.key for p in RECURRENCE if p.key in parameters]
    if not given:
        return ErrorLaw(innovation=innovation)
    return ErrorLaw(
        innovation=innovation, volatility=_volatility(innovation, parameters, family, name)
    )


def _value(parameter: Parameter, given: Mapping[str, Any], family: str, name: str) -> float:
    """One parameter, or its default."""
    key = parameter.key
    if key in given:
        return between(given[key], f"{name}: {key}", parameter.low, parameter.high)
    if parameter.default is None:
        shown = WRITTEN.get(family, family)
        if parameter in RECURRENCE:
            shown += ("," if ":" in shown else ":") + "alpha=0.08,beta=0.9"
        raise InputError(f"{name}: {family} needs {key}, as in {shown}")
    return parameter.default


def _volatility(
    innovation: Innovation, given: Mapping[str, Any], family: str, name: str
) -> Volatility:
    """A stated recurrence of mean level 1; its path is that level alone."""
    if not math.isfinite(innovation.variance):
        raise InputError(
            f"{name}: volatility needs innovations with a variance; {family} has none here"
        )
    alpha, beta, leverage = (max(_value(p, given, family, name), 0.0) for p in RECURRENCE)
    persistence = alpha + beta + leverage * innovation.negative_share
    if persistence >= 1:
        raise InputError(
            f"{name}: alpha + beta + leverage/2 below 1 is needed; found {persistence:g}"
        )
    path = Volatility(
        omega=1 - persistence,
        alpha=alpha,
        beta=beta,
        leverage=leverage,
        innovation="normal" if family == "normal" else "student-t",
        nu=innovation.parameters.get("df"),
        persistence=persistence,
        tail_index=innovation.tail_index,
        path=read_only(np.ones(1)),
        path_draws=read_only(np.ones((1, 1))),
        log_likelihood=None,
    )
    return replace(path, tail_index=innovation.recurrence_index(path))
