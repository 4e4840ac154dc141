"""The whole job beside a script written by hand with general-purpose libraries.

The script does about a tenth of the work: it builds the same columns, fits a cross-validated
lasso, a Student t to its residuals, 200 draws of the largest score, and 60 refits under the fitted
law at the plug-in penalty. Both run as programs of their own, imports included.

    python tests/benchmarks/whole_job.py --rounds 3 --out reports/benchmarks/whole_job.md
"""

from __future__ import annotations

import argparse
import subprocess
import sys
import tempfile
import time
from datetime import UTC, datetime
from importlib.metadata import version
from pathlib import Path

ROOT = Path(__file__).resolve().parents[2]
BY_HAND = """
import numpy as np, pandas as pd
from scipy import stats
from sklearn.linear_model import Lasso, LassoCV
table = pd.read_csv("strait.csv")
y = table["spread_change"].to_numpy()
raw = table.drop(columns=["day", "spread_change"]).select_dtypes("number")
wide = pd.concat([raw, (raw - raw.mean()) ** 2], axis=1)
wide.insert(0, "own", y)
lagged = np.hstack([wide.shift(k).to_numpy()[5:] for k in range(1, 6)])
y = y[5:]
lagged = lagged[:, lagged.std(axis=0) > 0]
X = (lagged - lagged.mean(axis=0)) / lagged.std(axis=0)
n, p = X.shape
fit = LassoCV(cv=5, random_state=0, max_iter=5000).fit(X, y)
e = y - fit.predict(X)
df, _, scale = stats.t.fit(e, floc=0)
level = 1.1 * stats.norm.isf(0.05 / (2 * p))
rng = np.random.default_rng(1)
E = scale * rng.standard_t(df, (n, 200))
E -= E.mean(axis=0)
risk = ((np.abs(X.T @ E) / np.sqrt(n)).max(axis=0) > level * E.std(axis=0)).mean()
picks = []
beta = np.zeros(p)
beta[:6] = 0.2 * y.std()
for r in range(60):
    error = E[:, r]
    fitted = Lasso(alpha=level * error.std() / np.sqrt(n)).fit(X, X @ beta + error)
    picks.append(fitted.coef_ != 0)
print(n, p, df, risk, np.mean(picks, axis=0)[:6])
"""


def seconds(command: list[str], folder: Path) -> float:
    """Wall-clock time of a program; it may end with any verdict."""
    started = time.perf_counter()
    done = subprocess.run(command, cwd=folder, capture_output=True, text=True, check=False)
    if done.returncode not in (0, 3, 4, 5):
        raise SystemExit(done.stderr)
    return time.perf_counter() - started


def main() -> None:
    """Time both in turn and write the pair."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--rounds", type=int, default=3)
    parser.add_argument("--out", type=Path)
    given = parser.parse_args()
    examples = ROOT / "examples"
    found: dict[str, list[float]] = {"hand": [], "one": [], "two": []}
    with tempfile.TemporaryDirectory() as folder:
        script = Path(folder) / "by_hand.py"
        script.write_text(BY_HAND)
        vet = [sys.executable, "-m", "scantling", "vet", "strait_wide.toml", "--quiet", "--out"]
        for _ in range(given.rounds):
            found["hand"].append(seconds([sys.executable, str(script)], examples))
            found["one"].append(seconds([*vet, folder], examples))
            found["two"].append(seconds([*vet, folder, "--workers", "2"], examples))
    names = {
        "hand": "script by hand, a tenth of the work",
        "one": "scantling vet, one worker",
        "two": "scantling vet, two workers",
    }
    lines = [
        "# The whole job beside a script by hand",
        "",
        f"{datetime.now(UTC).date()}; python {sys.version.split()[0]}, numpy {version('numpy')},"
        f" scikit-learn {version('scikit-learn')}; seconds, {given.rounds} rounds in turn.",
        "",
        "    " + " ".join(["python", "tests/benchmarks/whole_job.py", *sys.argv[1:]]),
        "",
        "examples/strait_wide.toml: 745 rows, 390 columns, normal pace.",
        "",
        "| program | fastest | median | slowest |",
        "|---|---|---|---|",
    ]
    for key, values in found.items():
        ordered = sorted(values)
        middle = ordered[len(ordered) // 2]
        lines.append(f"| {names[key]} | {ordered[0]:.1f} | {middle:.1f} | {ordered[-1]:.1f} |")
    text = "\n".join(lines) + "\n"
    print(text)
    if given.out:
        given.out.write_text(text)


if __name__ == "__main__":
    main()
