"""Times lasso_batch against scikit-learn's lasso solvers, side by side.

For every size: R responses on the same columns at one plug-in penalty,
alpha_r = 1.1 * Phi^-1(1 - 0.05/(2p)) * rms(e_r) / sqrt(n). Columns are standard
normal, standardised to mean 0 and mean square 1; ten of them are relevant, with
coefficients of 0.15 standard deviations of y and random signs; errors are iid.

scikit-learn is given every advantage its public functions have: one shared
Gram matrix, made once for all responses, and the same duality gap. Its tol is
relative to ||y||^2 for an objective of ||y - Xb||^2/2, ours to ||y||^2/(2n) for
||y - Xb||^2/(2n): the same gap is half our tol. Three ways are timed:
Lasso(precompute=Gram).fit, the leaner enet_path on Gram and X'y, and
lars_path_gram, which is exact. Every contestant includes its own products, the
rounds alternate, one BLAS thread.

    python tests/benchmarks/lasso_speed.py --out reports/benchmarks/lasso_speed.md
"""

from __future__ import annotations

import argparse
import platform
import time
from collections.abc import Callable, Sequence
from pathlib import Path

import numpy as np
import scipy
import sklearn
from scipy.special import ndtri
from sklearn.linear_model import Lasso, enet_path, lars_path_gram
from threadpoolctl import threadpool_limits

from scantling.core.record import FloatArray
from scantling.simulation.lasso import lasso_batch

Solver = Callable[[FloatArray, FloatArray, FloatArray, float], FloatArray]


def problem(
    n: int, p: int, replicates: int, law: str, seed: int
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Return columns, responses and plug-in penalties."""
    rng = np.random.default_rng([seed, n, p])
    X = rng.standard_normal((n, p))
    X -= X.mean(axis=0)
    X /= np.sqrt((X**2).mean(axis=0))
    if law == "normal":
        errors = rng.standard_normal((n, replicates))
    else:
        errors = rng.standard_t(4, (n, replicates)) / np.sqrt(2.0)
    errors -= errors.mean(axis=0)
    relevant = rng.choice(p, 10, replace=False)
    size = 0.15 / np.sqrt(1 - 10 * 0.15**2)
    signal = X[:, relevant] @ (size * rng.choice([-1.0, 1.0], 10))
    level = 1.1 * ndtri(1 - 0.05 / (2 * p))
    penalty = level * np.sqrt((errors**2).mean(axis=0)) / np.sqrt(n)
    return X, signal[:, None] + errors, penalty


def by_lasso(X: FloatArray, Y: FloatArray, penalty: FloatArray, tol: float) -> FloatArray:
    """scikit-learn's Lasso, one response after another, with a shared Gram matrix."""
    columns, gram = np.asfortranarray(X), X.T @ X
    out = np.empty((X.shape[1], Y.shape[1]))
    for r, y in enumerate(np.ascontiguousarray(Y.T)):
        model = Lasso(
            alpha=penalty[r],
            fit_intercept=False,
            precompute=gram,
            copy_X=False,
            tol=tol / 2,
            max_iter=100_000,
        )
        out[:, r] = model.fit(columns, y).coef_
    return out


def by_path(X: FloatArray, Y: FloatArray, penalty: FloatArray, tol: float) -> FloatArray:
    """scikit-learn's coordinate descent without the estimator's checks around it."""
    columns, gram = np.asfortranarray(X), X.T @ X
    scores = np.ascontiguousarray((X.T @ Y).T)
    out = np.empty((X.shape[1], Y.shape[1]))
    for r, y in enumerate(np.ascontiguousarray(Y.T)):
        _, coefficients, _ = enet_path(
            columns,
            y,
            l1_ratio=1.0,
            alphas=[penalty[r]],
            precompute=gram,
            Xy=scores[r],
            copy_X=False,
            check_input=False,
            tol=tol / 2,
            max_iter=100_000,
        )
        out[:, r] = coefficients[:, 0]
    return out


def by_lars(X: FloatArray, Y: FloatArray, penalty: FloatArray, tol: float) -> FloatArray:
    """scikit-learn's LARS down to the penalty, with a shared Gram matrix."""
    gram, scores = X.T @ X, X.T @ Y
    out = np.empty((X.shape[1], Y.shape[1]))
    for r in range(Y.shape[1]):
        _, _, out[:, r] = lars_path_gram(
            scores[:, r].copy(),
            gram,
            n_samples=len(X),
            alpha_min=penalty[r],
            method="lasso",
            copy_X=True,
            copy_Gram=True,
            return_path=False,
        )
    return out


def ours(X: FloatArray, Y: FloatArray, penalty: FloatArray, tol: float) -> FloatArray:
    """The batched solver."""
    return lasso_batch(X, Y, penalty, tol=tol)


SOLVERS: dict[str, Solver] = {
    "lasso_batch": ours,
    "Lasso": by_lasso,
    "enet_path": by_path,
    "LARS": by_lars,
}


def gap(X: FloatArray, Y: FloatArray, penalty: FloatArray, B: FloatArray) -> float:
    """Return the largest duality gap over ||y||^2/(2n), from the residuals."""
    n = len(Y)
    residual = Y - X @ B
    slope = X.T @ residual / n
    shrink = np.minimum(1.0, penalty / np.abs(slope).max(axis=0))
    rest = (residual**2).sum(axis=0) / (2 * n)
    linear = (penalty * np.abs(B) - shrink * B * slope).sum(axis=0)
    value = (1 - shrink) ** 2 * rest + linear
    return float((value / ((Y**2).sum(axis=0) / (2 * n))).max())


def measure(size: tuple[int, int], law: str, args: argparse.Namespace) -> list[str]:
    """Return the table row of one size and error law."""
    n, p = size
    X, Y, penalty = problem(n, p, args.replicates, law, args.seed)
    seconds: dict[str, list[float]] = {name: [] for name in SOLVERS}
    gaps = {}
    selected = 0.0
    for solver in SOLVERS.values():
        solver(X, Y[:, :5].copy(), penalty[:5], args.tol)
    for _ in range(args.rounds):
        for name, solver in SOLVERS.items():
            begin = time.perf_counter()
            B = solver(X, Y, penalty, args.tol)
            seconds[name].append(time.perf_counter() - begin)
            gaps[name] = gap(X, Y, penalty, B)
            if name == "lasso_batch":
                selected = float((B != 0).sum(axis=0).mean())
    own = np.array(seconds["lasso_batch"])
    named = np.minimum(seconds["Lasso"], seconds["LARS"]) / own
    lean = np.array(seconds["enet_path"]) / own
    row = [f"{n} x {p}", law, f"{selected:.1f}"]
    row += [f"{1000 * np.median(times):.1f}" for times in seconds.values()]
    row += [
        f"{ratios.min():.1f} / {np.median(ratios):.1f} / {ratios.max():.1f}"
        for ratios in (named, lean)
    ]
    row += [f"{gaps[name]:.1e}" for name in SOLVERS]
    return row


def report(rows: Sequence[Sequence[str]], args: argparse.Namespace) -> str:
    """Return the page, in markdown."""
    heads = ["rows x columns", "errors", "mean selected"]
    heads += [f"{name}, ms" for name in SOLVERS]
    heads += ["faster of Lasso and LARS over lasso_batch", "enet_path over lasso_batch"]
    heads += [f"gap, {name}" for name in SOLVERS]
    lines = [
        "# Speed of lasso_batch",
        "",
        f"{args.replicates} responses, plug-in penalty, gap asked for {args.tol:g} of"
        f" ||y||^2/(2n), {args.rounds} rounds, one BLAS thread. Times are medians for all"
        " responses; ratios are taken within each round and given as min / median / max."
        " enet_path is the same coordinate descent as Lasso without the estimator's own"
        " checks, given X'Y as well. Gaps are the largest over responses, computed from residuals.",
        "",
        "| " + " | ".join(heads) + " |",
        "|" + "---|" * len(heads),
        *["| " + " | ".join(row) + " |" for row in rows],
        "",
        f"Python {platform.python_version()}, numpy {np.__version__}, scipy {scipy.__version__},"
        f" scikit-learn {sklearn.__version__}, {platform.system()} {platform.machine()}.",
        "",
        f"    python tests/benchmarks/lasso_speed.py --sizes {' '.join(args.sizes)}"
        f" --laws {' '.join(args.laws)} --replicates {args.replicates} --rounds {args.rounds}"
        f" --tol {args.tol:g} --seed {args.seed}",
        "",
    ]
    return "\n".join(lines)


def main() -> None:
    """Measure, print and, if asked, write the table."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0] if __doc__ else "")
    parser.add_argument("--sizes", nargs="+", default=["200x200", "500x1000", "1000x2000"])
    parser.add_argument("--laws", nargs="+", default=["normal", "t4"], choices=["normal", "t4"])
    parser.add_argument("--replicates", type=int, default=500)
    parser.add_argument("--rounds", type=int, default=5)
    parser.add_argument("--tol", type=float, default=1e-6)
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--out", type=Path, help="file to write the table to")
    args = parser.parse_args()
    rows = []
    with threadpool_limits(limits=1):
        for text in args.sizes:
            n, p = (int(part) for part in text.split("x"))
            rows += [measure((n, p), law, args) for law in args.laws]
    page = report(rows, args)
    print(page)
    if args.out is not None:
        args.out.write_text(page, encoding="utf-8")


if __name__ == "__main__":
    main()
