"""Success curves of the lasso on standard normal designs against the published threshold.

    python tests/validation/support_recovery.py --out reports/validation/support_recovery.md

y = X b + e, X standard normal, s = round(sqrt(p)) coefficients of size 0.5 with random signs,
e normal of sd 0.5; objective ||y - X b||^2 / (2n) + lambda |b|_1 with
lambda = sqrt(2 sd^2 ln(s) ln(p - s) / n). A success is the right sign of every coefficient. With
theta = n / (2 s ln(p - s)) success goes from 0 to 1 around theta = 1, the faster the larger p:
Wainwright (2009), Sharp thresholds for high-dimensional and noisy sparsity recovery using
l1-constrained quadratic programming, IEEE Transactions on Information Theory 55, 2183-2202.
"""

from __future__ import annotations

import argparse
import math
import time
from pathlib import Path

import numpy as np
from threadpoolctl import threadpool_limits

from scantling.core.streams import stream
from scantling.simulation.lasso import lasso_batch

THETAS = (0.25, 0.5, 0.75, 1.0, 1.25, 1.5, 1.75, 2.0, 2.5, 3.0)
REFERENCE: dict[int, tuple[float, ...]] = {
    128: (0.00, 0.00, 0.05, 0.26, 0.48, 0.65, 0.80, 0.84, 0.91, 0.96),
    256: (0.00, 0.00, 0.04, 0.28, 0.57, 0.73, 0.86, 0.92, 0.97, 0.98),
    512: (0.00, 0.00, 0.02, 0.28, 0.63, 0.78, 0.88, 0.93, 0.97, 0.99),
}
"""Shares of success by a program of its own, 500 replicates, its solver checked against
scikit-learn's."""
WITHIN = 0.08
SIZE, SD = 0.5, 0.5
REPLICATES = 500


def sparsity(p: int) -> int:
    """s."""
    return round(math.sqrt(p))


def threshold(p: int) -> float:
    """Rows at theta = 1."""
    s = sparsity(p)
    return 2 * s * math.log(p - s)


def success_share(p: int, theta: float, replicates: int, seed: int) -> float:
    """Share of replicates, each with a design of its own, in which every sign is right."""
    s, n = sparsity(p), max(2, round(theta * threshold(p)))
    penalty = math.sqrt(2 * SD**2 * math.log(s) * math.log(p - s) / n)
    right = 0
    for number in range(replicates):
        rng = stream(seed, "support recovery", p, n, number)
        truth = np.zeros(p)
        truth[:s] = SIZE * rng.choice([-1.0, 1.0], size=s)
        X = rng.standard_normal((n, p))
        y = X @ truth + SD * rng.standard_normal(n)
        found = lasso_batch(X, y, penalty, tol=1e-7)[:, 0]
        right += bool((np.sign(found) == np.sign(truth)).all())
    return right / replicates


def report(replicates: int, seed: int) -> list[str]:
    """The written result."""
    from write_up import preamble, share_error, table

    started = time.monotonic()
    found = {p: [success_share(p, theta, replicates, seed) for theta in THETAS] for p in REFERENCE}
    lines = preamble("Success curves on standard normal designs", time.monotonic() - started)
    lines += [
        f"Share of {replicates} replicates in which the lasso gives every sign right, and in"
        " brackets its Monte Carlo standard error; below it the reference (500 replicates of"
        " another program). theta = n / (2 s ln(p - s)), Wainwright (2009).",
        "",
    ]
    rows, worst, far = [], (0.0, ""), []
    for p, shares in found.items():
        cells = [f"{v:.3f} ({share_error(v, replicates):.3f})" for v in shares]
        rows.append([f"p = {p}, s = {sparsity(p)}", *cells])
        rows.append(["reference", *(f"{v:.2f}" for v in REFERENCE[p])])
        for theta, one, other in zip(THETAS, shares, REFERENCE[p], strict=True):
            where = f"p = {p}, theta = {theta:g}"
            worst = max(worst, (abs(one - other), where))
            if abs(one - other) > WITHIN:
                far.append(f"{where}: {one:.3f} against {other:.2f}")
    lines += table(["", *(f"{theta:g}" for theta in THETAS)], rows)
    middle = THETAS.index(1.0)
    at_one = [shares[middle] for shares in found.values()]
    rises = [shares[middle + 3] - shares[middle - 1] for shares in found.values()]
    return [
        *lines,
        f"Largest difference from the reference: {worst[0]:.3f} ({worst[1]}); {WITHIN} is allowed"
        + (f"; beyond it: {'; '.join(far)}." if far else "."),
        f"At theta = 1 the curves meet: {', '.join(f'{v:.3f}' for v in at_one)}. From theta = 0.75"
        f" to 1.75 they rise by {', '.join(f'{v:.3f}' for v in rises)}: steeper as p grows.",
    ]


def main() -> None:
    """Run and write."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--out", type=Path, required=True)
    parser.add_argument("--replicates", type=int, default=REPLICATES)
    parser.add_argument("--seed", type=int, default=1)
    asked = parser.parse_args()
    with threadpool_limits(limits=1):
        lines = report(asked.replicates, asked.seed)
    asked.out.write_text("\n".join(lines) + "\n", encoding="utf-8")


if __name__ == "__main__":
    main()
