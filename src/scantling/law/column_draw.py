"""Drawing what the columns of one table share, errors that belong to it, and normal scores."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from scantling.core.record import FloatArray
from scantling.diagnostics.volatility import Volatility
from scantling.law.column_copula import Copula
from scantling.law.families import ErrorLaw
from scantling.law.shared_scale import log_mix, squeeze, squeezed

BURN_IN = 500


@dataclass(frozen=True, slots=True, kw_only=True)
class Setting:
    """What all columns of one table have in common, over T = lags + rows."""

    rows: int
    """Rows of the table."""
    lags: int
    """Rows before the first."""
    factors: FloatArray
    """Shape (K, T)."""
    log_scale: FloatArray
    """Shared log scale at unit variance, shape (T,)."""
    log_path: FloatArray
    """Log volatility of the errors over its typical level, shape (T,); zeros where constant."""
    path: FloatArray
    """Volatility, shape (T,); ones where constant."""
    error_scores: FloatArray
    """Normal scores of the errors' innovations, shape (T,)."""
    errors: FloatArray
    """The errors with these innovations, run through the law's autoregression, shape (T,)."""


def draw_setting(
    copula: Copula, law: ErrorLaw, rows: int, lags: int, rng: np.random.Generator
) -> Setting:
    """Draw what the columns of one table have in common, with errors by the law given.

    The volatility recursion runs on independent innovations, from its mean level 500 rows
    before the first; where sizes are linked to the columns' common scale, that comes on top.
    """
    total = rows + lags
    factors = rng.standard_normal((len(copula.loadings), total))
    log_scale = _persistent(rng, (1, total), copula.scale.persistence)[0]
    normals = rng.standard_normal(total + BURN_IN)
    fresh = _by_rank(law.innovations((normals.size, 1), rng), normals[:, None])[:, 0]
    path, relative = np.ones(total), np.zeros(total)
    if law.volatility is not None:
        path = recursion(law.volatility, fresh**2, fresh, unit=True)[BURN_IN:]
        relative = np.log(path) - np.log(law.volatility.path).mean()
    normals, fresh = normals[BURN_IN:], fresh[BURN_IN:]
    if copula.scale.errors:
        normals = _linked(copula, log_scale, normals)
        fresh = law.innovation.at_scores(normals)
    return Setting(
        rows=rows,
        lags=lags,
        factors=factors,
        log_scale=log_scale,
        log_path=relative,
        path=path,
        error_scores=normals,
        errors=law.persisting((path * fresh)[:, None], rng)[:, 0],
    )


def draw_errors(
    copula: Copula, law: ErrorLaw, setting: Setting, draws: int, rng: np.random.Generator,
    *, share_path: bool,
) -> FloatArray:  # fmt: skip
    """Draw errors (rows, draws) that belong to the setting, not centred."""
    link, shape = copula.scale.errors, (setting.rows, draws)
    if not draws:
        return np.empty(shape)
    if not share_path and not link:  # every draw has a path of its own
        return np.asarray(law.draw(shape, rng))
    if link:
        log_scale = setting.log_scale[setting.lags :, None]
        out = law.innovation.at_scores(_linked(copula, log_scale, rng.standard_normal(shape)))
    else:
        out = law.innovations(shape, rng)
    out *= setting.path[setting.lags :, None]
    out = law.persisting(out, rng)
    if copula.error_share.any():
        out[:, 0] = setting.errors[setting.lags :]
    return out


def draw_scores(
    copula: Copula, setting: Setting, series: NDArray[np.int64], copies: NDArray[np.int64],
    rng: np.random.Generator,
) -> FloatArray:  # fmt: skip
    """Normal scores of the drawn series, shape (I, T)."""
    total = setting.log_scale.size
    out = rng.standard_normal((series.size, total))
    label = copula.cluster_of[series]
    members = np.flatnonzero(label >= 0)
    groups: dict[tuple[int, int], list[int]] = {}
    for place in members:
        groups.setdefault((int(copies[place]), int(label[place])), []).append(int(place))
    for (_, number), places in groups.items():
        if len(places) > 1:
            cluster = copula.clusters[number]
            root = cluster.root[:, np.searchsorted(cluster.members, series[places])]
            out[places] *= cluster.noise
            out[places] += root.T @ rng.standard_normal((len(root), total))
    if len(copula.loadings):
        loadings = copula.loadings[:, series]
        out *= np.sqrt(1 - (loadings**2).sum(axis=0))[:, None]
        out += loadings.T @ setting.factors
    scale = copula.scale
    if scale.total:
        out *= np.exp(log_mix(setting.log_scale, scale.shared, scale.heavy))
        if scale.own:
            own = _persistent(rng, (series.size, total), scale.persistence)
            out *= np.exp(log_mix(own, scale.own, scale.heavy))
        out = squeezed(out, squeeze(scale))
    share = copula.error_share[series]
    tied = np.flatnonzero(share)
    if tied.size:
        out[tied] *= np.sqrt(1 - share[tied] ** 2)[:, None]
        out[tied] += share[tied, None] * setting.error_scores
    return _persistent(rng, (series.size, total), copula.autocorrelation[series], out)


def _linked(copula: Copula, log_scale: FloatArray, normals: FloatArray) -> FloatArray:
    """Normal scores of errors that are large where the shared log scale is."""
    mix = replace(copula.scale, shared=copula.scale.errors, own=0.0)
    sizes = np.exp(log_mix(log_scale, mix.shared, mix.heavy))
    return squeezed(sizes * normals, squeeze(mix))


def _by_rank(values: FloatArray, scores: FloatArray) -> FloatArray:
    """Each column's values in the order of its scores: their law is kept to the last value."""
    out = np.empty_like(values)
    np.put_along_axis(out, np.argsort(scores, axis=0), np.sort(values, axis=0), axis=0)
    return out


def recursion(
    fitted: Volatility, squares: FloatArray, signs: FloatArray, *, unit: bool = False
) -> FloatArray:
    """Volatility path (T,) from its mean level, driven by squared errors, or innovations if `unit`.

    `signs` are negative where leverage weighs.
    """
    variance = float((fitted.path**2).mean())
    weights = fitted.alpha + fitted.leverage * (signs < 0)
    out = np.empty(squares.size)
    for t, shock in enumerate(weights * squares):
        out[t] = variance
        variance = fitted.omega + shock * (variance if unit else 1.0) + fitted.beta * variance
    return np.sqrt(out)


def _persistent(
    rng: np.random.Generator, shape: tuple[int, int], phi: FloatArray | float,
    fresh: FloatArray | None = None,
) -> FloatArray:  # fmt: skip
    """First-order autoregressions of unit variance along the rows of (I, T)."""
    from scipy.signal import lfilter

    out = rng.standard_normal(shape) if fresh is None else fresh
    every = np.broadcast_to(phi, shape[:1])
    moving = np.flatnonzero(every)
    start = rng.standard_normal(moving.size)
    for place, before in zip(moving, start, strict=True):
        a = float(every[place])
        step = np.sqrt(1 - a * a)
        out[place] = lfilter([step], [1.0, -a], out[place], zi=[a * before])[0]
    return out
