"""Make the example table again and vet both example designs into reports/examples.

python examples/rebuild_reports.py
"""

from __future__ import annotations

import runpy
import sys
from pathlib import Path

from scantling.cli.main import run

HERE = Path(__file__).parent
DESIGNS = ("strait_wide", "strait_narrow")
EXPECTED = {"strait_wide": 4, "strait_narrow": 0}
"""Exit statuses: over budget, within budget."""


def main() -> None:
    """Rebuild, and stop if a verdict is not the expected one."""
    runpy.run_path(str(HERE / "make_strait.py"), run_name="__main__")
    for name in DESIGNS:
        status = run(
            ["vet", str(HERE / f"{name}.toml"), "--quiet",
             "--out", str(HERE.parent / "reports" / "examples")]
        )  # fmt: skip
        print(f"{name}: exit status {status}")
        if status != EXPECTED[name]:
            sys.exit(f"{name}: {EXPECTED[name]} was expected")


if __name__ == "__main__":
    main()
