"""Times lasso_path_batch against scikit-learn's paths, side by side, and the products' share.

The problem is that of lasso_speed.py: R responses on the same columns. Each has its
own grid of penalties, equally spaced in logs from max |x_j'y|/n to a stated share of it;
the plug-in penalty is at about 0.8 of the top. scikit-learn has one shared Gram matrix and
X'Y: enet_path with warm starts, and lars_path_gram down to the last penalty, whose
exact path holds all points of the grid (interpolating it is not timed). The same
duality gap is asked of both coordinate descent and ours (half our tol in its units).
Rounds alternate, one BLAS thread, processor time.

The share of matrix products at one penalty is the time of the products alone, made again on
arrays of the same shapes (X'Y, X' times the columns ever used, and one check of all columns),
over the time of solve_batch.

    python tests/benchmarks/lasso_path_speed.py --out reports/benchmarks/lasso_path_speed.md
"""

from __future__ import annotations

import argparse
import platform
import time
from collections.abc import Callable
from pathlib import Path

import numpy as np
import scipy
import sklearn
from lasso_speed import gap, problem
from sklearn.linear_model import enet_path, lars_path_gram
from threadpoolctl import threadpool_limits

from scantling.core.record import FloatArray
from scantling.simulation.lasso import solve_batch
from scantling.simulation.path import lasso_path_batch


def by_path(X: FloatArray, Y: FloatArray, grid: FloatArray, tol: float) -> FloatArray:
    """scikit-learn's coordinate descent along each grid."""
    columns, gram = np.asfortranarray(X), X.T @ X
    scores = np.ascontiguousarray((X.T @ Y).T)
    out = np.empty((Y.shape[1], X.shape[1], len(grid)))
    for r, y in enumerate(np.ascontiguousarray(Y.T)):
        _, out[r], _ = enet_path(
            columns, y, l1_ratio=1.0, alphas=grid[:, r], precompute=gram, Xy=scores[r],
            copy_X=False, check_input=False, tol=tol / 2, max_iter=100_000,
        )  # fmt: skip
    return out.transpose(2, 1, 0)


def by_lars(X: FloatArray, Y: FloatArray, grid: FloatArray, tol: float) -> FloatArray:
    """scikit-learn's LARS down to the last penalty; returns the last point."""
    gram, scores = X.T @ X, X.T @ Y
    out = np.empty((1, X.shape[1], Y.shape[1]))
    for r in range(Y.shape[1]):
        _, _, path = lars_path_gram(
            scores[:, r].copy(), gram, n_samples=len(X), alpha_min=grid[-1, r], method="lasso",
            copy_X=True, copy_Gram=True, return_path=True,
        )  # fmt: skip
        out[0, :, r] = path[:, -1]
    return out


def ours(X: FloatArray, Y: FloatArray, grid: FloatArray, tol: float) -> FloatArray:
    """The batched path."""
    return lasso_path_batch(X, Y, grid, tol=tol)


SOLVERS: dict[str, Callable[..., FloatArray]] = {
    "lasso_path_batch": ours,
    "enet_path": by_path,
    "LARS": by_lars,
}


def measure(n: int, p: int, ratio: float, args: argparse.Namespace) -> list[str]:
    """Return the table row of one grid."""
    replicates = args.replicates if ratio >= 0.2 else max(args.replicates // 2, 1)
    X, Y, _ = problem(n, p, replicates, "normal", args.seed)
    steps = np.arange(args.points)[:, None] / (args.points - 1)
    grid = np.abs(X.T @ Y).max(axis=0) / n * ratio**steps
    seconds: dict[str, list[float]] = {name: [] for name in SOLVERS}
    for solver in SOLVERS.values():  # What is done once in a process is not timed.
        solver(X, Y[:, :2], grid[:, :2], args.tol)
    gaps, size = {}, 0.0
    for _ in range(args.rounds):
        for name, solver in SOLVERS.items():
            begin = time.process_time()
            B = solver(X, Y, grid, args.tol)
            seconds[name].append(time.process_time() - begin)
            gaps[name] = max(gap(X, Y, q, b) for q, b in zip(grid[-len(B) :], B, strict=True))
            if name == "lasso_path_batch":
                size = float((B[-1] != 0).sum(axis=0).mean())
    own = np.array(seconds["lasso_path_batch"])
    faster = np.minimum(seconds["enet_path"], seconds["LARS"]) / own
    row = [f"{n} x {p}", f"{ratio:g}", f"{replicates}", f"{size:.0f}"]
    row += [f"{1000 * np.median(times) / replicates:.2f}" for times in seconds.values()]
    row += [f"{faster.min():.1f} / {np.median(faster):.1f} / {faster.max():.1f}"]
    return row + [f"{gaps[name]:.1e}" for name in SOLVERS]


def product_share(n: int, p: int, args: argparse.Namespace) -> str:
    """Return the sentence on the share of the products at one penalty."""
    X, Y, penalty = problem(n, p, 500, "normal", args.seed)
    whole, alone, used = [], [], 0
    for _ in range(args.rounds):
        begin = time.process_time()
        B, _ = solve_batch(X, Y, penalty, tol=args.tol)
        whole.append(time.process_time() - begin)
        on = np.flatnonzero(B.any(axis=1))
        used = len(on)
        begin = time.process_time()
        X.T @ (Y / n)
        kept = X.T @ (X[:, on] / n)
        kept @ B[on]
        alone.append(time.process_time() - begin)
    share = np.median(np.array(alone) / np.array(whole))
    return (
        f"One plug-in penalty at {n} x {p}, 500 responses, {used} columns ever selected:"
        f" {1000 * np.median(whole):.0f} ms, of which matrix products"
        f" {1000 * np.median(alone):.0f} ms, {100 * share:.0f} %."
    )


def main() -> None:
    """Measure, print and, if asked, write the page."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0] if __doc__ else "")
    parser.add_argument("--size", default="500x1000")
    parser.add_argument("--ratios", nargs="+", type=float, default=[0.5, 0.3, 0.1])
    parser.add_argument("--points", type=int, default=50)
    parser.add_argument("--replicates", type=int, default=200)
    parser.add_argument("--rounds", type=int, default=3)
    parser.add_argument("--tol", type=float, default=1e-6)
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--out", type=Path, help="file to write the page to")
    args = parser.parse_args()
    n, p = (int(part) for part in args.size.split("x"))
    heads = ["rows x columns", "last over first penalty", "responses", "columns at the last"]
    heads += [f"{name}, ms each" for name in SOLVERS]
    heads += ["faster of the two over lasso_path_batch", *[f"gap, {name}" for name in SOLVERS]]
    with threadpool_limits(limits=1):
        rows = [measure(n, p, ratio, args) for ratio in args.ratios]
        share = product_share(1000, 2000, args)
    ratios = " ".join(f"{ratio:g}" for ratio in args.ratios)
    page = "\n".join(
        [
            "# Speed of lasso_path_batch",
            "",
            f"{args.points} penalties, gap asked for {args.tol:g} of"
            f" ||y||^2/(2n), {args.rounds} rounds, one BLAS thread, processor time, median for"
            " each response; ratios within rounds, min / median / max. LARS's gap is that of its"
            " last point.",
            "",
            "| " + " | ".join(heads) + " |",
            "|" + "---|" * len(heads),
            *["| " + " | ".join(row) + " |" for row in rows],
            "",
            share,
            "",
            f"Python {platform.python_version()}, numpy {np.__version__}, scipy"
            f" {scipy.__version__}, scikit-learn {sklearn.__version__}, {platform.system()}"
            f" {platform.machine()}.",
            "",
            f"    python tests/benchmarks/lasso_path_speed.py --size {args.size} --ratios {ratios}"
            f" --points {args.points} --replicates {args.replicates} --rounds {args.rounds}"
            f" --tol {args.tol:g} --seed {args.seed}",
            "",
        ]
    )
    print(page)
    if args.out is not None:
        args.out.write_text(page, encoding="utf-8")


if __name__ == "__main__":
    main()
