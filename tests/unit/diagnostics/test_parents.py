"""Which columns powers and products are made of."""

from __future__ import annotations

from types import SimpleNamespace
from typing import Any

import numpy as np

from scantling.diagnostics.parents import column_parents


def columns(*rows: tuple[str, int, int, bool, int]) -> Any:
    names, base, power, product, lag = zip(*rows, strict=True)
    return SimpleNamespace(
        names=names, base=np.array(base), power=np.array(power), is_product=np.array(product),
        lag=np.array(lag),
    )  # fmt: skip


def test_powers_products_and_lags_find_their_raw_columns() -> None:
    made = columns(
        ("a", 0, 1, False, 0),
        ("a.lag1", 0, 1, False, 1),
        ("a^2.lag1", 0, 2, False, 1),
        ("a^3", 0, 3, False, 0),
        ("b*c", 1, 1, False, 0),  # a raw column of that name
        ("d", 2, 1, False, 0),
        ("a*b*c", 0, 2, True, 0),
        ("b*c*d", 1, 2, True, 0),
        ("y.lag1", -1, 1, False, 1),
    )
    assert column_parents(made) == (
        (0,), (1,), (1, 1), (0, 0, 0), (4,), (5,), (0, 4), (4, 5), (8,),
    )  # fmt: skip


def test_without_its_raw_columns_a_power_stands_for_itself() -> None:
    made = columns(
        ("a.lag2", 0, 1, False, 2),
        ("a^2.lag1", 0, 2, False, 1),
        ("a*b.lag2", 0, 2, True, 2),
        ("z^2", 5, 2, False, 0),
    )
    assert column_parents(made) == ((0,), (1,), (2,), (3,))
