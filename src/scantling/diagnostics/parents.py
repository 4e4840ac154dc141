"""Which columns of a design each of its powers and products is made of."""

from __future__ import annotations

from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from scantling.design.expand import Columns


def column_parents(columns: Columns) -> tuple[tuple[int, ...], ...]:
    """For each column, the raw columns of the same lag whose product it is, by position.

    (j,) for a raw column, (j, j) for its square, (j, k) for a product. A power or product whose
    raw columns are not all in the design, as where they were left out, counts as a raw one.

    Parameters
    ----------
    columns : Columns
        As expanded.
    """
    lags = [int(lag) for lag in columns.lag]
    plain = [
        name.removesuffix(f".lag{lag}") if lag else name
        for name, lag in zip(columns.names, lags, strict=True)
    ]
    raw = (columns.power == 1) & (columns.base >= 0)
    place = {(plain[j], lags[j]): j for j in range(len(plain)) if raw[j]}
    base_name = {int(columns.base[j]): plain[j] for j in range(len(plain)) if raw[j]}
    out: list[tuple[int, ...]] = []
    for j, name in enumerate(plain):
        first = base_name.get(int(columns.base[j]))
        one = None if first is None else place.get((first, lags[j]))
        found: tuple[int | None, ...] = (j,)
        if columns.is_product[j]:
            found = (one, place.get((name.removeprefix(f"{first}*"), lags[j])))
        elif columns.power[j] > 1:
            found = (one,) * int(columns.power[j])
        known = tuple(k for k in found if k is not None)
        out.append(known if len(known) == len(found) else (j,))
    return tuple(out)
