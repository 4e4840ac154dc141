"""What the README and the contributor's guide show is what the repository holds."""

from __future__ import annotations

import json
import re
from pathlib import Path

import pytest

ROOT = Path(__file__).parents[2]
README = (ROOT / "README.md").read_text(encoding="utf-8")


def blocks(language: str) -> list[str]:
    return re.findall(rf"^```{language}\n(.*?)^```$", README, flags=re.DOTALL | re.MULTILINE)


def test_the_first_two_commands_set_up_and_run():
    main, tests = blocks("sh")[:2]
    for command in (main, tests):
        assert command.startswith("python3 -m venv .venv\n")
        assert ".venv/bin/pip install" in command
    assert ".venv/bin/scantling vet examples/strait_narrow.toml" in main
    assert ".venv/bin/pytest" in tests


def test_the_first_screen_shown_is_the_example_reports():
    shown = blocks("text")[0]
    report = (ROOT / "reports/examples/strait_wide.txt").read_text(encoding="utf-8")
    head, _, rest = report.partition("\n\n")
    assert shown == head + "\n"
    # Reasons follow only where the first screen does not give them all.
    assert rest.startswith(("Reasons\n", "Design as read\n"))


@pytest.mark.parametrize(("name", "answer"), [("wide", "over budget"), ("narrow", "within budget")])
def test_the_example_reports_are_kept_and_valid(name, answer, valid_document):
    text = (ROOT / f"reports/examples/strait_{name}.json").read_text(encoding="utf-8")
    document = json.loads(text)
    valid_document(text)
    assert document["verdict"]["answer"] == answer
    assert document["receipt"]["command"] == f"scantling vet strait_{name}.toml"


def test_the_design_shown_is_read(tmp_path):
    from scantling import read_design

    path = tmp_path / "shown.toml"
    path.write_text(blocks("toml")[0], encoding="utf-8")
    design = read_design(path)
    assert design.data.response == "spread_change"
    assert design.expand.powers == 2


def test_the_example_table_is_its_scripts(tmp_path):
    import runpy

    made = runpy.run_path(str(ROOT / "examples/make_strait.py"))["make_table"]()
    kept = (ROOT / "examples/strait.csv").read_text(encoding="utf-8")
    assert made.to_csv(index=False, float_format="%.4f", lineterminator="\n") == kept


def test_the_guide_names_files_that_exist():
    guide = (ROOT / "DEVELOPERS.md").read_text(encoding="utf-8")
    assert "examples/rebuild_reports.py" in guide
    for path in re.findall(r"`((?:law|planning|simulation|report|design)/\w+\.py)`", guide):
        assert (ROOT / "src/scantling" / path).is_file(), path
