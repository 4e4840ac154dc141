"""Simulate the null law of the Greenwood statistic and write the table the package ships.

    python tests/validation/greenwood_table.py --draws 1000000 \
        --out src/scantling/diagnostics/greenwood_table.py

Under exponential excesses G = k sum Y^2 / (sum Y)^2 is free of parameters. For each k the
upper points of (G - mean) / sd are simulated, mean and sd being the exact ones (uniform
spacings, Greenwood (1946), Journal of the Royal Statistical Society 109).
"""

from __future__ import annotations

import argparse
from pathlib import Path

import numpy as np

COUNTS = (3, 4, 5, 6, 8, 10, 15, 25, 38, 50, 75, 100, 150, 300, 750, 1500)
PROBABILITIES = (
    0.999, 0.99, 0.95, 0.9, 0.75, 0.5, 0.25, 0.1, 0.05, 0.025, 0.01,
    5e-3, 2.5e-3, 1e-3, 5e-4, 2.5e-4, 1e-4, 5e-5, 2e-5,
)  # fmt: skip


def standardised_points(count: int, draws: int, seed: int) -> list[float]:
    """Upper points of the standardised statistic for `count` excesses."""
    rng = np.random.default_rng([seed, count])
    chunk = max(1, 4_000_000 // count)
    values = []
    for start in range(0, draws, chunk):
        excess = rng.standard_exponential((min(chunk, draws - start), count))
        values.append(count * (excess**2).sum(axis=1) / excess.sum(axis=1) ** 2)
    mean = 2 * count / (count + 1)
    variance = 4 * count**2 * (count - 1) / ((count + 1) ** 2 * (count + 2) * (count + 3))
    standard = (np.concatenate(values) - mean) / np.sqrt(variance)
    return [round(float(v), 4) for v in np.quantile(standard, [1 - p for p in PROBABILITIES])]


def main() -> None:
    """Write the table as a Python module of constants."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--draws", type=int, default=1_000_000)
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--out", type=Path, required=True)
    options = parser.parse_args()
    lines = [
        '"""Upper points of the standardised Greenwood statistic under exponential excesses.',
        "",
        f"Simulated with {options.draws} draws a count, seed {options.seed}, by",
        "tests/validation/greenwood_table.py; do not edit by hand.",
        '"""',
        "",
        f"UPPER_PROBABILITIES = {PROBABILITIES!r}",
        "",
        "UPPER_POINTS: dict[int, tuple[float, ...]] = {",
    ]
    for count in COUNTS:
        points = ", ".join(str(v) for v in standardised_points(count, options.draws, options.seed))
        lines.append(f"    {count}: ({points}),")
        print(lines[-1], flush=True)
    options.out.write_text("\n".join([*lines, "}", ""]), encoding="utf-8")


if __name__ == "__main__":
    main()
