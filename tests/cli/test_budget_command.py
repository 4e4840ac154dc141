"""`scantling budget`: from flags, a stated design and a saved report; statuses, files, refusals."""

from __future__ import annotations

import json
import math
import re
import shlex
from functools import partial
from pathlib import Path
from typing import Any

import click
import pytest

from scantling.cli.commands import commands
from scantling.cli.main import run
from scantling.cli.options import LOSS_WORDS, RULE_WORDS
from scantling.planned import DEFAULTS
from scantling.planning import stated
from scantling.planning.generative import Tables
from scantling.planning.rows import Effort, rows_plan
from scantling.simulation.loss_scores import LOSSES
from scantling.simulation.rules import RULES

QUICK = ["--rows", "40", "--columns", "12", "--law", "normal", "--relevant", "2",
         "--replicates", "50"]  # fmt: skip
STATED = """\
title = "Quay wall"
[stated]
rows = 80
columns = 14
error = {family = "student-t", df = 4}
column = "normal"
correlation = 0.2
[target]
relevant = 2
smallest_effect = 0.6
[simulation]
replicates = 50
seed = 4
"""
MAY_BE_NULL = ("high", "binding", "rows", "columns", "low", "noise", "signal", "stability",
               "allowed_columns", "penalty_ratio", "equivalent_rows", "rows_needed",
               "rows_needed_low", "rows_needed_high",
               "detectable_effect", "detectable_effect_worst_tenth", "tail_index")  # fmt: skip


@pytest.fixture(autouse=True)
def brief(monkeypatch: pytest.MonkeyPatch, request: pytest.FixtureRequest) -> None:
    """Rows needed are searched with little effort, but where the whole run is looked at."""
    if request.node.name == "test_from_flags_alone":
        return
    effort = Effort(
        tables=Tables(100_000, 1, 4), largest=100_000, times=8, refits=10, refit_tables=1
    )
    monkeypatch.setattr(stated, "rows_plan", partial(rows_plan, effort=effort))


def done(capsys: Any, *arguments: str | Path) -> tuple[int, str, str]:
    status = run(["budget", *map(str, arguments)])
    printed, message = capsys.readouterr()
    return status, printed, message


def document(capsys: Any, *arguments: str | Path) -> dict[str, Any]:
    """The JSON printed, whatever the verdict; numbers only, nulls explained."""
    status, printed, message = done(capsys, *arguments, "--json")
    assert message == ""
    tree: dict[str, Any] = json.loads(printed, parse_constant=lambda word: pytest.fail(word))
    verdicts = {"within budget": 0, "borderline": 3, "over budget": 4, "no budget": 5}
    assert status == verdicts[tree["verdict"]["answer"]]
    explained(tree, "$")
    return tree


def explained(value: Any, where: str) -> None:
    """A null stands only where one may, beside its reason."""
    if isinstance(value, dict):
        for key, inner in value.items():
            if inner is None:
                assert key.removesuffix("_by") in MAY_BE_NULL, where + key
                assert value[f"{key}_note"], f"{where}.{key}"
            explained(inner, f"{where}.{key}")
    elif isinstance(value, list):
        for inner in value:
            explained(inner, where)
    elif isinstance(value, float):
        assert math.isfinite(value)


def test_from_flags_alone(capsys: Any) -> None:
    tree = document(capsys, *QUICK, "--effect", "0.7", "--seed", "5")
    assert tree["schema"] == "scantling-budget/1"
    assert tree["title"] == "a design on paper"
    design = tree["design"]
    assert (design["rows"], design["columns"], design["replicates"]) == (40, 12, 50)
    assert design["target"] == {
        "relevant": 2, "smallest_effect": 0.7, "risk": 0.05, "power": 0.8, "stability": 0.75,
        "false_share": 0.2,
    }  # fmt: skip
    assert tree["law"]["family"] == "normal"
    budget = tree["budget"]
    for name in ("noise", "signal", "stability", "geometry", "assured"):
        assert budget[name]["mode"] == "generative"
    known = [budget[name]["columns"] for name in ("noise", "signal", "stability")]
    assert budget["allowed"]["columns"] == min(known)
    # Normal errors: P(|N| > L(1)) = .031 for one column, less at twelve.
    assert budget["curve"][0]["risk"] == pytest.approx(0.031, abs=0.012)
    assert budget["curve"][-1]["p"] == 12
    assert [entry["rows"] for entry in budget["by_rows"]] == [30, 40, 80, 160]
    assert set(budget["rows_needed_by"]) == {"noise", "signal", "stability"}
    assert {entry["relevant"] for entry in budget["effects"]} == {1, 2, 4}
    assert {run["law"] for run in tree["stress"]} == {"fitted", "twin"}
    assert tree["receipt"]["seed"] == 5


@pytest.mark.parametrize(
    ("flags", "status", "answer"),
    [
        (["--rows", "400", "--columns", "8", "--law", "normal", "--relevant", "1", "--effect",
          "0.6"], 0, "WITHIN BUDGET"),
        (["--rows", "40", "--columns", "30", "--law", "normal", "--relevant", "2", "--effect",
          "0.1"], 4, "OVER BUDGET"),
        (["--rows", "40", "--columns", "8", "--law", "student-t:df=1.5", "--relevant", "1"], 5,
         "NO BUDGET"),
    ],
)  # fmt: skip
def test_the_status_is_the_verdict(capsys: Any, flags: list[str], status: int, answer: str) -> None:
    found, printed, message = done(capsys, *flags, "--replicates", "50")
    assert found == status
    assert answer in printed
    assert message == ""
    assert printed.startswith("scantling: a design on paper\n")
    assert max(map(len, printed.splitlines())) <= 80


def test_borderline_where_the_band_holds_the_columns_asked_for(capsys: Any) -> None:
    """t(3), 50 rows: the risk passes 0.05 at about fifty columns."""
    flags = ["--rows", "50", "--columns", "52", "--law", "student-t:df=3", "--relevant", "1",
             "--effect", "0.9", "--replicates", "50", "--seed", "1"]  # fmt: skip
    tree = document(capsys, *flags)
    assert tree["verdict"]["answer"] == "borderline"
    noise = tree["budget"]["noise"]
    assert noise["low"] < 52
    assert noise["high"] is None or noise["high"] >= 52


def test_from_a_stated_design_and_flags_over_it(tmp_path: Path, capsys: Any) -> None:
    path = tmp_path / "quay.toml"
    path.write_text(STATED)
    tree = document(capsys, path)
    assert tree["title"] == "Quay wall"
    assert tree["law"] == {
        "family": "student-t",
        "parameters": {"scale": pytest.approx(math.sqrt(0.5)), "df": 4.0},
        "tail_index": 4.0,
    }
    assert tree["design"]["column_law"]["family"] == "normal"
    assert tree["design"]["correlation"] == 0.2
    assert (
        "errors student-t:df=4; 14 columns each normal, correlation 0.2"
        in (tree["design"]["facts"][0])
    )
    # Light columns, 4 moments of the errors: exp(80^(1/2)).
    assert tree["budget"]["ceiling"]["columns"] == int(math.exp(math.sqrt(80)))
    assert list(tree["receipt"]["inputs"]) == ["quay.toml"]
    assert tree["receipt"]["command"] == "scantling budget quay.toml"
    more = document(capsys, path, "--columns", "9", "--law", "laplace", "--seed", "8")
    assert (more["design"]["columns"], more["law"]["family"]) == (9, "laplace")
    assert (more["design"]["rows"], more["receipt"]["seed"]) == (80, 8)
    assert more["design"]["target"]["smallest_effect"] == 0.6


def stripped(tree: dict[str, Any]) -> dict[str, Any]:
    """Without what says when and how it was run."""
    return {key: value for key, value in tree.items() if key != "receipt"}


@pytest.mark.parametrize("from_file", [False, True])
def test_the_receipts_command_repeats_the_run(
    tmp_path: Path, capsys: Any, monkeypatch: pytest.MonkeyPatch, from_file: bool
) -> None:
    monkeypatch.chdir(tmp_path)
    (tmp_path / "quay wall.toml").write_text(STATED)
    source = ["quay wall.toml"] if from_file else [*QUICK, "--column-law", "student-t:df=3"]
    one = document(
        capsys, *source, "--effect", "0.4", "--false-share", "0.3", "--power", "0.7",
        "--stability", "0.6", "--risk", "0.1", "--correlation", "0.1", "--loss", "huber",
    )  # fmt: skip
    words = shlex.split(one["receipt"]["command"])
    assert words[:2] == ["scantling", "budget"]
    two = document(capsys, *words[2:])
    assert stripped(two) == stripped(one)
    assert two["receipt"]["command"] == one["receipt"]["command"]
    assert "--effect 0.4" in one["receipt"]["command"]


def test_from_a_saved_report_and_from_a_saved_budget(
    tmp_path: Path, small: Path, capsys: Any
) -> None:
    assert run(["vet", str(small), "--out", str(tmp_path)]) in (0, 3, 4, 5)
    capsys.readouterr()
    saved = json.loads((tmp_path / "small.json").read_text())
    tree = document(capsys, tmp_path / "small.json", "--out", tmp_path / "paper")
    assert tree["title"].endswith(", on paper")
    assert (tree["design"]["rows"], tree["design"]["columns"]) == (60, 3)
    assert tree["law"]["family"] in (saved["law"]["family"], "student-t", "normal")
    assert tree["design"]["target"]["smallest_effect"] == 0.5
    assert tree["receipt"]["seed"] == saved["receipt"]["seed"]
    assert any("taken as independent" in fact for fact in tree["design"]["facts"])
    # A budget's own document can be taken up again, and says the same.
    made = sorted(path.name for path in (tmp_path / "paper").iterdir())
    assert made == ["small-budget.json", "small-budget.txt"]
    again = document(capsys, tmp_path / "paper" / "small-budget.json")
    assert again["budget"] == tree["budget"]
    assert again["design"]["column_law"] == tree["design"]["column_law"]
    other = document(capsys, tmp_path / "paper" / "small-budget.json", "--rows", "90")
    assert other["design"]["rows"] == 90


def test_a_saved_budget_with_volatility_and_other_columns_says_the_same(
    tmp_path: Path, capsys: Any
) -> None:
    flags = [*QUICK, "--law", "normal:alpha=0.2,beta=0.6", "--column-law", "laplace",
             "--correlation", "0.3", "--out", str(tmp_path)]  # fmt: skip
    tree = document(capsys, *flags)
    again = document(capsys, tmp_path / "budget.json")
    assert again["law"] == tree["law"]
    assert again["budget"] == tree["budget"]


def test_files_are_the_text_and_its_twin(tmp_path: Path, capsys: Any) -> None:
    status, printed, _ = done(capsys, *QUICK, "--out", tmp_path / "a" / "b")
    assert status in (0, 3, 4)
    folder = tmp_path / "a" / "b"
    assert sorted(path.name for path in folder.iterdir()) == ["budget.json", "budget.txt"]
    text = (folder / "budget.txt").read_text()
    assert text.splitlines()[:8] == printed.splitlines()[:8]
    tree = json.loads((folder / "budget.json").read_text())
    assert tree["schema"] == "scantling-budget/1"
    for words in ("The design as stated", "Other rows and targets", "Cautions", "Receipt"):
        assert words in text


def test_pace_sets_the_replicates_and_replicates_win(capsys: Any) -> None:
    base = ["--rows", "40", "--columns", "6", "--law", "normal", "--relevant", "1"]
    assert document(capsys, *base, "--pace", "quick")["design"]["replicates"] == 100
    both = document(capsys, *base, "--pace", "quick", "--replicates", "60")
    assert both["design"]["replicates"] == 60


@pytest.mark.parametrize(
    ("arguments", "words"),
    [
        ([], "rows: not stated; --rows"),
        (["--rows", "40"], "columns: not stated; --columns"),
        (["--rows", "40", "--columns", "9"], "law: not stated; --law"),
        (["--rows", "29", "--columns", "9", "--law", "normal"], "rows: a whole number of at least"),
        (["--rows", "forty"], "--rows"),
        ([*QUICK, "--columns", "0"], "columns"),
        ([*QUICK, "--law", "cauchy"], "law"),
        ([*QUICK, "--law", "student-t"], "--law: student-t needs df, as in student-t:df=5"),
        ([*QUICK, "--column-law", "t:df=3"], "--column-law: one of normal, laplace,"),
        ([*QUICK, "--correlation", "1"], "correlation"),
        ([*QUICK, "--rule", "lasso"], "rule"),
        ([*QUICK, "--loss", "cubic"], "loss"),
        ([*QUICK, "--risk", "0.5"], "risk"),
        ([*QUICK, "--risk", "nan"], "risk"),
        ([*QUICK, "--effect", "0"], "--effect: a number above 0 and at most 5 is needed; found"),
        ([*QUICK, "--effect", "0.8"], "--relevant 2 x --effect 0.8: they would explain 128 % of"),
        ([*QUICK, "--relevant", "150"], "--relevant: 150: there are 12 columns; a number below"),
        ([*QUICK, "--seed", "-1"], "--seed': a whole number from 0 to 9223372036854775807 is"),
        ([*QUICK, "--law", "normal:lag1=1"], "--law: lag1: a stationary autoregression"),
        ([*QUICK, "--power", "1"], "power"),
        ([*QUICK, "--relevant", "0"], "relevant"),
        ([*QUICK, "--replicates", "49"], "--replicates"),
        ([*QUICK, "--pace", "slow"], "--pace"),
        ([*QUICK, "--workers", "0"], "--workers"),
        ([*QUICK, "--columns", "9000000", "--replicates", "400"], "GiB"),
        (["none.toml"], "none.toml"),
        (["none.json"], "none.json"),
        ([*QUICK, "--rowz", "3"], "--rowz"),
    ],
)
def test_refusals_are_one_line_with_status_2(
    tmp_path: Path, capsys: Any, monkeypatch: pytest.MonkeyPatch, arguments: list[str], words: str
) -> None:
    monkeypatch.chdir(tmp_path)
    status, printed, message = done(capsys, *arguments, "--out", "out")
    assert status == 2
    assert printed == ""
    assert words in message
    assert message.startswith("scantling: ")
    assert message.count("\n") == 1
    assert list(tmp_path.iterdir()) == []


@pytest.mark.parametrize(
    ("old", "new", "words"),
    [
        ('error = {family = "student-t", df = 4}', 'error = "student-t"',
         "[stated] error: student-t needs df, as in student-t:df=5"),
        ('column = "normal"', 'column = "norml"', "[stated] column: one of normal, laplace,"),
        ('column = "normal"', 'column = "norml"', "did you mean normal?"),
        ("relevant = 2", "relevant = 10", "[target] relevant 10 x smallest_effect 0.6: they would"
         " explain 360 % of the response's variance; under 100 % is needed"),
        ("columns = 14", "columns = 2", "[target] relevant: 2: there are 2 columns"),
    ],
)  # fmt: skip
def test_a_stated_file_is_named_with_its_key(
    tmp_path: Path, capsys: Any, old: str, new: str, words: str
) -> None:
    path = tmp_path / "quay.toml"
    assert old in STATED
    path.write_text(STATED.replace(old, new))
    status, printed, message = done(capsys, path)
    assert (status, printed) == (2, "")
    assert message.startswith("scantling: quay.toml: [")
    assert words in message
    assert message.count("\n") == 1


def test_a_flag_over_a_file_is_named_as_a_flag(tmp_path: Path, capsys: Any) -> None:
    path = tmp_path / "quay.toml"
    path.write_text(STATED)
    message = done(capsys, path, "--relevant", "5")[2]
    assert message.startswith(
        "scantling: --relevant 5 x quay.toml: [target] smallest_effect 0.6: they would explain 180"
    )
    assert "scantling: --law: one of" in done(capsys, path, "--law", "gauss")[2]


EXAMPLES = Path(__file__).parents[2] / "reports" / "examples"


@pytest.mark.parametrize("name", ["strait_wide", "strait_narrow"])
def test_the_example_reports_are_taken_up_again(name: str, capsys: Any) -> None:
    """A fitted leverage may be as far below 0 as alpha is above it."""
    saved = json.loads((EXAMPLES / f"{name}.json").read_text())
    tree = document(
        capsys, EXAMPLES / f"{name}.json", "--rows", "60", "--columns", "9", "--replicates", "50"
    )
    assert tree["verdict"]["answer"] in ("within budget", "borderline", "over budget")
    for key in ("alpha", "beta", "leverage"):
        assert tree["law"]["parameters"].get(key, 0) == pytest.approx(
            saved["law"]["parameters"].get(key, 0), abs=1e-6
        )


def test_a_law_that_cannot_be_read_names_its_report(tmp_path: Path, capsys: Any) -> None:
    saved = json.loads((EXAMPLES / "strait_wide.json").read_text())
    saved["law"]["volatility"] = {"alpha": 0.1, "beta": 0.8, "leverage": -0.5}
    (tmp_path / "bad.json").write_text(json.dumps(saved))
    status, _, message = done(capsys, tmp_path / "bad.json")
    assert status == 2
    assert message.startswith("scantling: bad.json: law: alpha + leverage of at least 0 is needed")


def test_persistent_errors_of_a_report_are_kept(tmp_path: Path, capsys: Any) -> None:
    """exact: an AR(2) of .5, .2 varies .8/(1.2 (.64 - .25)) = 1.7094 times as much."""
    flags = [*QUICK, "--law", "student-t:df=5,lag1=0.5,lag2=0.2", "--column-law", "normal:lag1=0.9"]
    tree = document(capsys, *flags, "--out", tmp_path)
    parameters = tree["law"]["parameters"]
    assert (parameters["lag1"], parameters["lag2"]) == (0.5, 0.2)
    assert parameters["scale"] == pytest.approx(math.sqrt(0.6 / 1.709402), rel=1e-5)
    again = document(capsys, tmp_path / "budget.json")
    assert again["law"] == tree["law"]
    assert again["design"]["column_law"] == tree["design"]["column_law"]
    assert again["budget"] == tree["budget"]
    # Persistent columns and errors together: noise passes far more often than by independent rows.
    calm = document(capsys, *QUICK, "--law", "student-t:df=5", "--column-law", "normal")
    risks = [found["budget"]["risk_at_design"]["value"] for found in (tree, calm)]
    assert risks[0] > 4 * risks[1]


def test_a_report_on_paper_says_stated_and_what_its_bands_hold(capsys: Any) -> None:
    printed = done(capsys, *QUICK, "--law", "normal:alpha=0.2,beta=0.5", "--effect", "0.6")[1]
    assert "fitted" not in printed
    assert "12 stated law" in printed
    assert "12 normal, stated path" in printed
    assert "At 12 columns, stated law:" in printed
    assert printed.count("Bands hold simulation error only, as the laws are stated.") == 1
    # 4 columns of effect .6 and .9, and 2 of .9, would explain all or more.
    assert re.search(r"^  2 +\S+ +\S+ +-$", printed, re.MULTILINE)
    assert re.search(r"^  4 +\S+ +- +-$", printed, re.MULTILINE)
    assert "A dash: so many columns of such an effect would explain all of the" in printed


def test_cells_that_no_response_allows_are_null_with_a_note(capsys: Any) -> None:
    effects = document(capsys, *QUICK, "--effect", "0.6")["budget"]["effects"]
    none = [each for each in effects if each["allowed_columns"] is None]
    assert [(each["relevant"], each["smallest_effect"]) for each in none] == [
        (2, 0.9), (4, 0.6), (4, 0.9),
    ]  # fmt: skip
    for each in none:
        assert each["binding"] is None
        assert each["allowed_columns_note"].startswith("no response allows it")


@pytest.mark.parametrize("command", ["budget", "stress"])
def test_every_flag_is_described_with_rules_defaults_and_ranges(command: str, capsys: Any) -> None:
    assert run([command, "--help"]) == 0
    text = " ".join(capsys.readouterr().out.split())
    assert "RANGE" not in text
    assert "FLOAT" not in text
    assert "9223372036854775807" not in text
    for words in (RULE_WORDS, LOSS_WORDS):
        assert words in text.replace("cross- validated", "cross-validated")
    assert set(RULE_WORDS.replace(" or ", ", ").split(", ")) == set(RULES)
    assert set(LOSS_WORDS.replace(" or ", ", ").split(", ")) == set(LOSSES)
    for option in commands.commands[command].params:
        if isinstance(option, click.Option):
            assert option.help, option.name
            default = DEFAULTS.get(str(option.name))
            if default is not None and command == "budget":
                shown = default if isinstance(default, str) else f"{default:g}"
                assert f"default {shown}" in option.help, option.name


def test_no_commands_summary_is_cut_off(capsys: Any) -> None:
    assert run(["--help"]) == 0
    assert "..." not in capsys.readouterr().out.partition("\n")[2]


def test_a_design_with_data_is_sent_to_vet(small: Path, capsys: Any) -> None:
    status, printed, message = done(capsys, small)
    assert (status, printed) == (2, "")
    assert "scantling vet" in message
    assert message.count("\n") == 1
