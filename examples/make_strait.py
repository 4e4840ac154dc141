"""Make the example table: an invented freight market on the Marrow Strait.

    python examples/make_strait.py

writes examples/strait.csv, the same bytes each time. 750 business days, 40 columns: rates,
waiting times, idle fleet and port calls at six ports, eight market prices, five weather
readings, three calendar marks. Nothing in it is real.

What is built in, so that a report can be judged against it: one volatility that all markets
share and that clusters (GARCH(1,1), Student t innovations with 5 degrees of freedom), heavy
tails in prices and rates, light tails in weather, sparse calendar marks, and a response that
depends on the previous day's value of six columns and on nothing else.
"""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd

ROWS, BURN_IN, SEED = 750, 250, 20260301
PORTS = ("marrow", "tollen", "quayle", "ostrand", "hessick", "drumlay")
MARKETS = (
    "bunker_cost", "grain_price", "ore_price", "coal_price",
    "steel_price", "timber_price", "crown_rate", "florin_rate",
)  # fmt: skip
WEATHER = ("wind_north", "wind_south", "swell", "fog_hours", "tide_range")
EFFECTS = {
    "marrow_rate": 0.30,
    "tollen_wait": -0.26,
    "bunker_cost": 0.28,
    "grain_price": -0.24,
    "swell": 0.26,
    "hessick_idle": 0.24,
}
"""Effect of the previous day's value, per standard deviation, in sd of the error."""


def unit_t(rng: np.random.Generator, df: float, size: int | tuple[int, ...]) -> np.ndarray:
    """Student t draws of unit variance."""
    return rng.standard_t(df, size) * np.sqrt((df - 2) / df)


def shared_volatility(rng: np.random.Generator, rows: int) -> np.ndarray:
    """One market-wide GARCH(1,1) volatility, mean square about 1."""
    variance, out = 1.0, np.empty(rows)
    shocks = unit_t(rng, 5, rows)
    for t in range(rows):
        out[t] = np.sqrt(variance)
        variance = 0.05 + 0.12 * (out[t] * shocks[t]) ** 2 + 0.83 * variance
    return out


def make_table() -> pd.DataFrame:
    """The table: day, spread_change, and the 40 columns."""
    rng = np.random.default_rng(SEED)
    rows = ROWS + BURN_IN
    volatility = shared_volatility(rng, rows)
    market = unit_t(rng, 5, rows)
    columns: dict[str, np.ndarray] = {}
    for port in PORTS:
        own = unit_t(rng, 5, (4, rows))
        columns[f"{port}_rate"] = volatility * (0.5 * market + 0.85 * own[0])
        columns[f"{port}_wait"] = np.exp(0.5 * own[1] / np.sqrt(5 / 3)) - 1
        columns[f"{port}_idle"] = volatility * own[2]
        columns[f"{port}_calls"] = rng.poisson(14, rows) + np.round(2 * own[3])
    for name in MARKETS:
        columns[name] = volatility * (0.4 * market + 0.9 * unit_t(rng, 4, rows))
    for name in WEATHER:
        columns[name] = rng.normal(size=rows)
    columns["fog_hours"] = np.clip(np.round(2 + 2 * columns["fog_hours"], 1), 0, 10)
    days = pd.bdate_range("2022-01-03", periods=ROWS)
    columns["strike_day"] = (rng.random(rows) < 0.02).astype(float)
    columns["holiday_eve"] = (rng.random(rows) < 0.04).astype(float)
    columns["month_end"] = np.concatenate(
        [np.zeros(BURN_IN), np.append(days.month[1:] != days.month[:-1], True)]
    )
    table = pd.DataFrame(columns).iloc[BURN_IN:].reset_index(drop=True)
    standard = (table - table.mean()) / table.std()
    error = (volatility * unit_t(rng, 5, rows))[BURN_IN:]
    response = error + sum(
        effect * standard[name].shift(1).fillna(0.0) for name, effect in EFFECTS.items()
    )
    table.insert(0, "spread_change", 12 * response)
    table.insert(0, "day", days.strftime("%Y-%m-%d"))
    return table


def main() -> None:
    """Write the table beside this script."""
    target = Path(__file__).with_name("strait.csv")
    make_table().to_csv(target, index=False, float_format="%.4f", lineterminator="\n")
    print(f"wrote {target.name}: {ROWS} rows")


if __name__ == "__main__":
    main()
