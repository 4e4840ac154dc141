"""The design file as records: what is to be vetted, and nothing computed yet."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path


@dataclass(frozen=True, slots=True, kw_only=True)
class DataSpec:
    """[data]: where the rows come from."""

    file: Path
    """The table, resolved against the design file's folder."""
    time: str | None = None
    """Column that orders the rows, unique and increasing; None: rows have no order."""
    response: str
    """Column to be explained."""
    other_responses: tuple[str, ...] = ()
    """Responses of the same design file, each vetted apart; no pattern matches them."""
    columns: tuple[str, ...] = ("*",)
    """Names or glob patterns of the raw columns."""
    missing: str = "refuse"
    """refuse | drop-rows."""


@dataclass(frozen=True, slots=True, kw_only=True)
class ExpandSpec:
    """[expand]: how raw columns multiply into candidates, in the order of the fields."""

    transform: str = "none"
    """none | normal-scores | clip, of the raw columns."""
    powers: int = 1
    """Highest power of each raw column."""
    products: bool = False
    """Whether products of pairs of raw columns are added."""
    lags: int = 0
    """Lags 1..lags of all of these; 0: as they stand."""
    contemporaneous: bool = False
    """Also lag 0 when lags > 0."""
    own_lags: int = 0
    """Lags 1..own_lags of the raw response."""


@dataclass(frozen=True, slots=True, kw_only=True)
class TargetSpec:
    """[target]: what the regression has to achieve."""

    relevant: int = 10
    """Columns expected to matter."""
    smallest_effect: float = 0.15
    """Smallest effect to be found, in sd of the response per sd of a column."""
    risk: float = 0.05
    """Accepted probability that a noise column passes the penalty."""
    power: float = 0.80
    """Share of relevant columns that has to be selected."""
    stability: float = 0.75
    """Stability index that selection has to reach under fresh errors."""
    false_share: float = 0.20
    """Largest accepted share of false columns among the selected."""
    support: str | tuple[str, ...] = "random"
    """Which columns the refits take as relevant: random | pilot | names of candidates."""


@dataclass(frozen=True, slots=True, kw_only=True)
class PenaltySpec:
    """[penalty]: the regression that is about to be fitted."""

    rule: str = "plug-in"
    """plug-in (equal loadings) | self-normalised | cross-validated | bic."""
    loss: str = "squared"
    """squared | huber | absolute | square-root."""
    adaptive: bool = False
    """Whether a second, reweighted lasso follows."""


@dataclass(frozen=True, slots=True, kw_only=True)
class SimulationSpec:
    """[simulation]: Monte Carlo settings, stored with the result."""

    replicates: int = 400
    """Draws of errors and refits in each simulation."""
    seed: int = 1
    """Of every random stream."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Design:
    """One design file, checked."""

    title: str
    """Shown first in the report; the file's stem if none is given."""
    path: Path
    """The design file."""
    sha256: str
    """Of the design file's bytes."""
    data: DataSpec
    """Where the rows come from."""
    expand: ExpandSpec
    """How columns multiply."""
    kind: str
    """regression | treatment | instruments | binary | system | chain."""
    target: TargetSpec
    """What has to be achieved."""
    penalty: PenaltySpec
    """What is about to be fitted."""
    simulation: SimulationSpec
    """Monte Carlo settings."""
