"""A change of the design as data: how two are joined, and how one is carried out.

All recipes are carried out in one order: how columns are made, which of them are kept, whether
rows are weighted, and last the penalty's rule and the loss. Two recipes can be joined unless they
set the same thing.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

import numpy as np

from scantling.core.record import FloatArray
from scantling.core.streams import stream
from scantling.design.expand import Columns, expand, normal_scores
from scantling.design.spec import Design
from scantling.design.table import Table
from scantling.diagnostics.battery import Diagnosis
from scantling.diagnostics.residuals import Residuals
from scantling.diagnostics.structure import principal_components
from scantling.errors import InputError
from scantling.law.families import ErrorLaw
from scantling.planning.breakthrough import BreakThrough
from scantling.planning.case import Case, draw_laws

FIELDS = ("transform", "powers", "products", "factors", "rule", "loss")
"""What a recipe sets by a value of its own."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Recipe:
    """A change of the design; what is None, empty or False stays as it is."""

    names: tuple[str, ...]
    """The change in words; of two that are joined, both."""
    prices: tuple[str, ...]
    """What each costs, in words."""
    transform: str | None = None
    """normal-scores | clip, of the raw columns."""
    powers: int | None = None
    """Highest power of the raw columns."""
    products: bool | None = None
    """False: no products of raw columns."""
    factors: int | None = None
    """So many factors take the raw columns' place."""
    dropped: tuple[int, ...] = ()
    """Columns of the present design that are left out, worst first."""
    weighted: bool = False
    """Whether rows are divided by the fitted volatility."""
    filtered: bool = False
    """Whether rows give way to what the errors' autoregression leaves of them."""
    rule: str | None = None
    """Loadings of the penalty."""
    loss: str | None = None
    """Loss of the regression."""

    @property
    def name(self) -> str:
        """The change in words."""
        return " and ".join(self.names)

    @property
    def price(self) -> str:
        """What it costs, in words."""
        return "; ".join(self.prices)

    @property
    def sets(self) -> frozenset[str]:
        """What it sets: two recipes that set the same thing cannot be joined.

        Other columns leave no column of the present design to be dropped by name; factors are
        neither transformed nor raised to powers nor multiplied.
        """
        out = {name for name in FIELDS if getattr(self, name) is not None}
        out |= {"rows"} if self.weighted or self.filtered else set()
        out |= {"columns kept"} if self.dropped else set()
        if self.transform is not None or self.factors is not None:
            out |= {"columns kept"}
        if self.factors is not None:
            out |= {"transform", "powers", "products"}
        return frozenset(out)

    @property
    def remakes(self) -> bool:
        """Whether columns are made afresh from the table."""
        made = (self.transform, self.powers, self.products, self.factors)
        return any(value is not None for value in made)

    @property
    def errors(self) -> tuple[bool, bool, bool]:
        """Recipes that agree in it are simulated on the same errors."""
        return self.weighted, self.filtered, bool(self.dropped)


def joined(one: Recipe, two: Recipe) -> Recipe | None:
    """Both changes at once; None if they set the same thing."""
    if one.sets & two.sets:
        return None
    own = {
        name: getattr(one, name) if getattr(one, name) is not None else getattr(two, name)
        for name in FIELDS
    }
    return Recipe(
        names=one.names + two.names,
        prices=one.prices + two.prices,
        dropped=one.dropped or two.dropped,
        weighted=one.weighted or two.weighted,
        filtered=one.filtered or two.filtered,
        **own,
    )


@dataclass(frozen=True, slots=True, kw_only=True)
class Origin:
    """The design as it stands: what recipes are applied to."""

    design: Design
    """As asked for."""
    table: Table
    """Its rows and raw columns."""
    residuals: Residuals
    """Of the pilot."""
    diagnosis: Diagnosis
    """What the data say."""
    case: Case
    """As the simulations see it."""
    noise: BreakThrough
    """Its own noise limit."""


def carry_out(recipe: Recipe, origin: Origin) -> Case | None:
    """The changed case; None if the change leaves no usable design, or the design as it is."""
    case = origin.case
    columns = None
    if recipe.remakes:
        try:
            columns = _made_columns(recipe, origin)
        except InputError:
            return None  # nothing is left that could be computed
        if _same(columns.values, case.X):
            return None  # as with powers of dummies
        case = replace(case, X=columns.values, relevant_columns=_found_again(case, columns, origin))
    if recipe.dropped:
        kept = _kept(recipe.dropped, columns, origin)
        if kept.size in (0, case.columns):
            return None
        # With fresh draws: the old ones picked the columns.
        seed = int(stream(case.seed, "fresh draws").integers(2**62))
        case = replace(
            case, X=np.ascontiguousarray(case.X[:, kept]), seed=seed,
            relevant_columns=tuple(
                int(j) for j in np.flatnonzero(np.isin(kept, case.relevant_columns))
            ),
        )  # fmt: skip
    if case.target.relevant >= max(2, case.columns):
        return None  # no columns are left to tell the relevant ones from
    if recipe.weighted:
        case = weighted(case, origin.residuals)
    if recipe.filtered:
        case = filtered(case, origin.residuals)
    return replace(case, rule=recipe.rule or case.rule, loss=recipe.loss or case.loss)


def _made_columns(recipe: Recipe, origin: Origin) -> Columns:
    spec, table = origin.design.expand, origin.table
    if recipe.factors is not None:
        parts = principal_components(normal_scores(table.values), recipe.factors)
        names = tuple(f"factor {number + 1}" for number in range(parts.shape[1]))
        table = replace(table, names=names, values=parts)
        spec = replace(spec, transform="none", powers=1, products=False)
    else:
        spec = replace(
            spec,
            transform=recipe.transform or spec.transform,
            powers=recipe.powers or spec.powers,
            products=spec.products if recipe.products is None else recipe.products,
        )
    return expand(replace(origin.design, expand=spec), table)


def _found_again(case: Case, made: Columns, origin: Origin) -> tuple[int, ...]:
    """Relevant columns among those made afresh, by their names; what is gone is left out."""
    if not case.relevant_columns:
        return ()
    present = expand(origin.design, origin.table).names
    wanted = {present[j] for j in case.relevant_columns}
    return tuple(j for j, name in enumerate(made.names) if name in wanted)


def _same(one: FloatArray, two: FloatArray) -> bool:
    """Whether two tables are the same; most differ in their first row."""
    return one.shape == two.shape and np.allclose(one[:1], two[:1]) and np.allclose(one, two)


def _kept(dropped: tuple[int, ...], made: Columns | None, origin: Origin) -> np.ndarray:
    """Columns that stay; those made afresh are known by their names."""
    if made is None:
        return np.setdiff1d(np.arange(origin.case.columns), dropped)
    present = expand(origin.design, origin.table).names
    gone = {present[j] for j in dropped}
    return np.array([j for j, name in enumerate(made.names) if name not in gone], dtype=int)


def weighted(case: Case, residuals: Residuals) -> Case:
    """The case with every row divided by its fitted volatility over the mean level.

    Its law has a volatility path on the case's rows, and no autoregression.
    """
    volatility = case.law.volatility
    assert volatility is not None
    relative = np.asarray(volatility.path) / math.sqrt(float((volatility.path**2).mean()))
    # About its mean: a constant over sigma_t is not variation to be explained.
    response = (residuals.fitted - residuals.fitted.mean() + residuals.values) / relative
    law = case.law.without_volatility()
    return _on_other_rows(
        case, case.X / relative[:, None], response, residuals.values / relative, law
    )


def filtered(case: Case, residuals: Residuals) -> Case:
    """The case with rows x_t - sum_k a_k x_(t-k), a the errors' autoregression, which it has.

    Its errors are the shocks; coefficients are those of the rows as they were. Cochrane et al.
    (1949), J. American Statistical Association 44, 32-61 (from memory).
    """
    path = case.law.autoregression
    assert path is not None
    response = path.shocks(residuals.fitted - residuals.fitted.mean() + residuals.values)
    return _on_other_rows(
        case, path.shocks(case.X), response, path.shocks(residuals.values),
        case.law.without_autoregression(),
    )  # fmt: skip


def _on_other_rows(
    case: Case, X: FloatArray, response: FloatArray, errors: FloatArray, law: ErrorLaw
) -> Case:
    X = standardise(X)
    return replace(
        case,
        X=X,
        # A column that became constant is gone, and the places of the others with it.
        relevant_columns=case.relevant_columns if X.shape == case.X.shape else (),
        law=law,
        law_draws=draw_laws(law, case.seed),
        response_sd=float(response.std()),
        residual_sd=float(errors.std()),
    )


def standardise(X: FloatArray) -> FloatArray:
    """Columns with mean 0 and mean square 1; those that became constant are left out."""
    centred = X - X.mean(axis=0)
    scale = np.sqrt((centred**2).mean(axis=0))
    kept = scale > 1e-10
    return np.asarray(centred[:, kept] / scale[kept])
