"""`scantling stress`: selection alone, of a design, on paper and from a saved report."""

from __future__ import annotations

import json
import re
from pathlib import Path

import pytest

from scantling.cli.main import run
from scantling.cli.stress import STATUS

STATED = """\
title = "on paper"
[stated]
rows = {rows}
columns = 60
error = "{law}"
column = "normal"
[target]
relevant = 4
smallest_effect = {effect}
[simulation]
replicates = 60
seed = 2
"""


def document(capsys, *arguments):
    """Status and JSON of one run."""
    status = run(["stress", *map(str, arguments), "--json"])
    seen = capsys.readouterr()
    assert seen.err == ""
    return status, json.loads(seen.out)


@pytest.fixture
def stated(tmp_path):
    def write(name="paper.toml", *, rows=200, law="student-t:df=4", effect=0.4):
        path = tmp_path / name
        path.write_text(STATED.format(rows=rows, law=law, effect=effect))
        return path

    return write


@pytest.fixture(scope="module")
def of_design(harbour, tmp_path_factory):
    """Status and document of the design, with its two files."""
    out = tmp_path_factory.mktemp("stress")
    status = run(["stress", str(harbour), "--compare", "bic", "--out", str(out)])
    return status, out, json.loads((out / "harbour-stress.json").read_text())


def test_a_design_is_refitted_on_its_own_columns(of_design):
    status, out, found = of_design
    assert found["schema"] == "scantling-stress/1"
    assert STATUS[found["verdict"]["answer"]] == status
    runs = found["stress"]
    assert {run_["mode"] for run_ in runs} == {"conditional"}
    assert [(run_["law"], run_["rule"]) for run_ in runs][:4] == [
        ("fitted", "plug-in"), ("fitted", "bic"), ("twin", "plug-in"), ("twin", "bic"),
    ]  # fmt: skip
    for run_ in runs:
        assert (run_["rows"], run_["replicates"], run_["replicates_asked"]) == (304, 60, 60)
        assert run_["columns"] == found["design"]["columns"]
        for name in ("stability", "power", "false_share", "sign_errors", "size", "prediction_loss"):
            assert run_[name]["low"] <= run_[name]["value"] <= run_[name]["high"]
        assert run_["exact_low"] <= run_["exact"] <= run_["exact_high"]
        assert 0 <= run_["inclusion"]["low"] <= run_["inclusion"]["high"] <= 1
    plug_in, bic = runs[:2]
    assert bic["size"]["value"] > plug_in["size"]["value"]
    text = (out / "harbour-stress.txt").read_text()
    assert text.startswith("scantling stress: Harbour dues, heavy tails\nVerdict     ")
    assert max(map(len, text.splitlines())) <= 80
    assert re.search(r"^ +Criterion +asked +plug-in +bic$", text, re.MULTILINE)
    assert "Under the fitted law, on the same draws:" in text
    assert text.rstrip().endswith("scantling stress harbour.toml --compare bic")


def test_a_rule_is_not_compared_with_itself(stated, harbour, capsys):
    for source, flags, rule in (
        (stated(), [], "plug-in"), (stated(), ["--rule", "bic"], "bic"), (harbour, [], "plug-in"),
    ):  # fmt: skip
        assert run(["stress", str(source), *flags, "--compare", rule]) == 2
        seen = capsys.readouterr()
        assert seen.out == ""
        assert seen.err == (
            f"scantling: compare: '{rule}': the rule that is judged is this one already; another"
            " one is needed\n"
        )


def test_the_second_rule_is_judged_on_the_first_screen(of_design, stated, capsys):
    _, out, found = of_design
    compared = found["compared"]
    assert compared["rule"] == "bic"
    bic, target = found["stress"][1], found["design"]["target"]
    missed = bic["power"]["high"] < target["power"]
    assert (compared["criteria"]["power"] == "missed") == missed
    assert set(compared["criteria"].values()) <= {"met", "undecided", "missed"}
    text = (out / "harbour-stress.txt").read_text()
    screen = " ".join(" ".join(text.splitlines()[:12]).split())
    assert f"Compared bic: {compared['answer']}." in screen
    assert compared["reasons"][0] in screen
    alone = document(capsys, stated())[1]
    assert (alone["compared"], alone["compared_note"]) == (None, "one rule only")


def test_a_design_on_paper_has_a_stated_law(stated, capsys):
    assert run(["stress", str(stated(law="student-t:df=5,alpha=0.1,beta=0.6"))]) in (0, 3, 4)
    text = capsys.readouterr().out
    assert "fitted law" not in text
    assert "fitted path" not in text
    assert "stated law" in text
    assert "on a stated GARCH(1,1) volatility path" in text


def test_a_volatility_path_is_named_where_there_is_one(of_design):
    _, _, found = of_design
    has_path = found["law"]["volatility"] is not None
    assert ("volatility path" in found["design"]["facts"][0]) == has_path
    assert "the design's own columns" in found["design"]["facts"][0]


@pytest.mark.parametrize("name", ["strait_wide", "strait_narrow"])
def test_the_example_reports_are_taken_up(name, capsys):
    path = Path(__file__).parents[2] / "reports" / "examples" / f"{name}.json"
    flags = ("--rows", 90, "--columns", 12, "--pace", "quick")
    status, found = document(capsys, path, *flags)
    assert status in (0, 3, 4)
    saved = json.loads(path.read_text())["law"]["parameters"]
    for key in ("alpha", "beta", "leverage"):
        assert found["law"]["parameters"].get(key, 0) == pytest.approx(saved.get(key, 0), abs=1e-6)


def test_an_impossible_target_is_refused_on_paper(stated, capsys):
    assert run(["stress", str(stated(effect=0.5))]) == 2
    assert capsys.readouterr().err == (
        "scantling: paper.toml: [target] relevant 4 x smallest_effect 0.5: they would explain"
        " 100 % of the response's variance; under 100 % is needed\n"
    )


def test_other_rows_are_drawn_from_fitted_laws_and_the_pilot_can_be_the_support(harbour, capsys):
    _, found = document(
        capsys, harbour, "--rows", 600, "--columns", 20, "--support", "pilot", "--replicates", 50
    )
    fitted = found["stress"][0]
    assert (fitted["mode"], fitted["rows"], fitted["columns"]) == ("generative", 600, 20)
    assert fitted["support"] == "pilot"
    names = [each["column"] for each in fitted["inclusion"]["by_column"]]
    # What drives the response in the made-up table.
    assert {"berth_1", "berth_2"} <= set(names)


@pytest.mark.parametrize(
    ("rows", "effect", "law", "answer", "status"),
    [
        (300, 0.45, "normal", "met", 0), (60, 0.05, "normal", "missed", 4),
        (200, 0.4, "student-t:df=1.8", "no variance", 5),
    ],
)  # fmt: skip
def test_status_is_the_verdict(stated, capsys, rows, effect, law, answer, status):
    found_status, found = document(capsys, stated(rows=rows, effect=effect, law=law))
    assert (found["verdict"]["answer"], found_status) == (answer, status)
    assert (found["stress"] == []) == (answer == "no variance")


def test_undecided_where_an_interval_holds_the_bar(stated, capsys):
    path = stated(rows=200, effect=0.3)
    power = document(capsys, path)[1]["stress"][0]["power"]
    assert power["low"] < power["value"] < power["high"] < 1
    bars = f"stability = 0.01\nfalse_share = 0.9\npower = {power['value']}\n[simulation]"
    path.write_text(path.read_text().replace("[simulation]", bars))
    status, found = document(capsys, path)
    assert status == 3
    assert found["verdict"]["criteria"]["power"] == "undecided"
    assert "more replicates would tell" in found["verdict"]["reasons"][0]


def test_flags_win_over_the_source_and_workers_change_nothing(stated, capsys):
    path = stated()
    flags = ["--rows", 150, "--columns", 30, "--rule", "self-normalised", "--seed", 9,
             "--pace", "quick"]  # fmt: skip
    found = document(capsys, path, *flags)[1]
    design = found["design"]
    assert (design["rows"], design["columns"], design["rule"]) == (150, 30, "self-normalised")
    assert (found["receipt"]["seed"], design["replicates"]) == (9, 100)
    assert found["receipt"]["command"] == (
        "scantling stress paper.toml --rows 150 --columns 30 --rule self-normalised --seed 9"
        " --replicates 100"
    )
    again = document(capsys, path, *flags, "--workers", 2)[1]
    for each in (found, again):
        del each["receipt"]["wall_clock"]
    assert again == found


def test_a_saved_report_is_a_source(stated, tmp_path, capsys):
    out = tmp_path / "out"
    assert run(["budget", str(stated(rows=100)), "--out", str(out)]) in (0, 3, 4)
    capsys.readouterr()
    saved = next(out.glob("*.json"))
    status, found = document(capsys, saved, "--rows", 300)
    assert status in (0, 3, 4)
    assert (found["design"]["rows"], found["design"]["columns"]) == (300, 60)
    assert found["law"]["parameters"]["df"] == 4


@pytest.mark.parametrize(
    ("flags", "words"),
    [
        (["--rule", "lucky"], "rule: one of plug-in, self-normalised, bic"),
        (["--compare", "lucky"], "compare: one of plug-in"),
        (["--loss", "logistic"], "loss: one of squared, square-root, huber, absolute is needed"),
        (["--columns", "4"], "[target] relevant: 4: there are 4 columns; a number below 4"),
        (["--columns", "9000000"], "GiB; the bound is 2 GiB"),
        (["--support", "pilot"], "columns on paper have no pilot"),
        (["--response", "y"], "--response goes with a design that has data"),
        (["--rows", "5"], "--rows"),
    ],
)
def test_refusals_are_one_line_and_status_2(stated, capsys, flags, words):
    assert run(["stress", str(stated()), *flags]) == 2
    seen = capsys.readouterr()
    assert seen.out == ""
    assert seen.err.count("\n") == 1
    assert words in seen.err


def test_a_name_that_is_no_column_is_refused_with_the_nearest(harbour, tmp_path, capsys):
    text = harbour.read_text().replace("relevant = 3", 'support = ["berth_1", "berth_99"]')
    text = text.replace('"harbour.csv"', f'"{harbour.parent / "harbour.csv"}"')
    path = tmp_path / "named.toml"
    path.write_text(text)
    assert run(["stress", str(path)]) == 2
    assert "[target] support names 'berth_99', which is none of the" in capsys.readouterr().err
    path.write_text(text.replace("berth_99", "berth_2.lag1"))
    _, found = document(capsys, path, "--replicates", "50")
    fitted = found["stress"][0]
    assert found["design"]["support"] == ["berth_1", "berth_2.lag1"]
    assert fitted["support"] == "named"
    assert [e["column"] for e in fitted["inclusion"]["by_column"]] == ["berth_1", "berth_2.lag1"]


def test_an_impossible_target_of_a_design_is_said(small, tmp_path, valid_document, capsys):
    """exact: one column of effect 1.1 explains 121 % of the variance."""
    text = small.read_text().replace("smallest_effect = 0.5", "smallest_effect = 1.1")
    path = tmp_path / "small.toml"
    path.write_text(text.replace('"small.csv"', f'"{small.parent / "small.csv"}"'))
    words = "1 relevant column of effect 1.1 would explain 121 % of the response's variance"
    assert run(["vet", str(path), "--out", str(tmp_path / "out")]) == 3
    found = valid_document((tmp_path / "out" / "small.json").read_text())
    assert found["verdict"]["reasons"][0].startswith(words)
    none = [e for e in found["budget"]["effects"] if e["allowed_columns"] is None]
    # 1 and 2 columns of effects .7333, 1.1 and 1.65: only the first of them is possible.
    assert len(none) == len(found["budget"]["effects"]) - 1
    printed = capsys.readouterr().out
    assert "\nVerdict     BORDERLINE" in printed
    assert "A dash: so many columns of such an effect" in printed
    _, stressed = document(capsys, path)
    assert any(fact.startswith(words) for fact in stressed["design"]["facts"])
