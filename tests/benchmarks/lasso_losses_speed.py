"""Times the robust, square-root and logistic lassos, beside scikit-learn where it has one.

R responses on the same standard normal columns, eight of them relevant (coefficient 0.4),
t(2.5) errors; binary responses from the same index. Penalties are a stated share of
the smallest that selects nothing. QuantileRegressor (a linear programme by HiGHS)
and LogisticRegression (saga, intercept not penalised, tol 1e-6) fit a few of the
responses; there is no Huber or square-root lasso in scikit-learn.

    python tests/benchmarks/lasso_losses_speed.py --out reports/benchmarks/lasso_losses_speed.md
"""

from __future__ import annotations

import argparse
import platform
import time
import warnings
from collections.abc import Callable
from pathlib import Path

import numpy as np
import scipy
import sklearn
from sklearn.exceptions import ConvergenceWarning
from sklearn.linear_model import LogisticRegression, QuantileRegressor
from threadpoolctl import threadpool_limits

from scantling.core.record import FloatArray
from scantling.simulation.absolute import solve_absolute
from scantling.simulation.huber import solve_huber
from scantling.simulation.logistic import solve_logistic
from scantling.simulation.losses import null_scores
from scantling.simulation.square_root import solve_square_root

FEW = 2
"""Responses scikit-learn fits."""


def problem(n: int, p: int, replicates: int, seed: int) -> tuple[FloatArray, FloatArray]:
    """Return columns and responses."""
    rng = np.random.default_rng(seed)
    X = rng.standard_normal((n, p))
    X -= X.mean(axis=0)
    Y = 0.4 * X[:, :8].sum(axis=1, keepdims=True) + rng.standard_t(2.5, (n, replicates))
    return X, Y - Y.mean(axis=0)


def theirs(X: FloatArray, Y: FloatArray, w: FloatArray, loss: str) -> float:
    """Return scikit-learn's seconds for each response, nan where it has no such fit."""
    if loss not in ("absolute", "logistic"):
        return float("nan")
    begin = time.process_time()
    for r in range(FEW):
        if loss == "absolute":
            QuantileRegressor(alpha=w[r] / 2).fit(X, Y[:, r])
        else:
            LogisticRegression(
                l1_ratio=1.0, C=1 / (len(X) * w[r]), solver="saga", tol=1e-6, max_iter=10_000
            ).fit(X, Y[:, r])
    return (time.process_time() - begin) / FEW


def measure(loss: str, share: float, args: argparse.Namespace) -> list[str]:
    """Return the table row of one loss and penalty."""
    X, Y = problem(args.rows, args.columns, args.replicates, args.seed)
    tau = 1.345 / 0.6745 * np.median(np.abs(Y), axis=0)
    if loss == "logistic":
        Y = (Y > 0).astype(float)
    w = share * np.abs(null_scores(X, Y, loss, tau)).max(axis=0)
    fits: dict[str, Callable[[], tuple[FloatArray, ...]]] = {
        "huber": lambda: solve_huber(X, Y, w[None], tau, tol=args.tol, intercept=True),
        "absolute": lambda: solve_absolute(X, Y, w[None], tol=args.tol, intercept=True),
        "square-root": lambda: solve_square_root(X, Y, w[None], tol=args.tol),
        "logistic": lambda: solve_logistic(X, Y, w[None], tol=args.tol),
    }
    seconds = []
    for _ in range(args.rounds):
        begin = time.process_time()
        found = fits[loss]()
        seconds.append(time.process_time() - begin)
    other = theirs(X, Y, w, loss)
    own = np.array(seconds)
    size = (found[0] != 0).sum(axis=0).mean()
    cells = [loss, f"{share:g}", f"{size:.1f}"]
    cells += [f"{own.min():.2f} / {np.median(own):.2f} / {own.max():.2f}", f"{found[-1].max():.1e}"]
    if np.isnan(other):
        return [*cells, "", ""]
    each = np.median(own) / args.replicates
    return [*cells, f"{other * args.replicates:.1f}", f"{other / each:.0f}"]


def main() -> None:
    """Measure, print and, if asked, write the page."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0] if __doc__ else "")
    parser.add_argument("--rows", type=int, default=300)
    parser.add_argument("--columns", type=int, default=400)
    parser.add_argument("--replicates", type=int, default=80)
    parser.add_argument("--shares", nargs="+", type=float, default=[0.7, 0.4])
    parser.add_argument("--rounds", type=int, default=3)
    parser.add_argument("--tol", type=float, default=1e-6)
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--out", type=Path, help="file to write the page to")
    args = parser.parse_args()
    heads = ["loss", "share of the top penalty", "mean selected", "all responses, s"]
    heads += ["largest gap", "scikit-learn for as many, s", "ratio"]
    warnings.simplefilter("ignore", ConvergenceWarning)
    with threadpool_limits(limits=1):
        rows = [
            measure(loss, share, args)
            for loss in ("huber", "absolute", "square-root", "logistic")
            for share in args.shares
        ]
    page = "\n".join(
        [
            "# Speed of the other losses",
            "",
            f"{args.replicates} responses at {args.rows} x {args.columns}, relative gap asked for"
            f" {args.tol:g}, {args.rounds} rounds (min / median / max), one BLAS thread, processor"
            f" time. scikit-learn's time is that of {FEW} responses, multiplied up.",
            "",
            "| " + " | ".join(heads) + " |",
            "|" + "---|" * len(heads),
            *["| " + " | ".join(row) + " |" for row in rows],
            "",
            f"Python {platform.python_version()}, numpy {np.__version__}, scipy"
            f" {scipy.__version__}, scikit-learn {sklearn.__version__}, {platform.system()}"
            f" {platform.machine()}.",
            "",
            f"    python tests/benchmarks/lasso_losses_speed.py --rows {args.rows}"
            f" --columns {args.columns} --replicates {args.replicates}"
            f" --shares {' '.join(f'{share:g}' for share in args.shares)} --rounds {args.rounds}"
            f" --tol {args.tol:g} --seed {args.seed}",
            "",
        ]
    )
    print(page)
    if args.out is not None:
        args.out.write_text(page, encoding="utf-8")


if __name__ == "__main__":
    main()
