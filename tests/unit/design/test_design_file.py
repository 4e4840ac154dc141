"""A design file: defaults, every refusal's wording, and no input that escapes as another error."""

from __future__ import annotations

import hashlib
from pathlib import Path

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from scantling.design.keys import LANGUAGE
from scantling.design.message import nearest
from scantling.design.parse import read_design, read_designs
from scantling.errors import InputError, NotAvailableError

MINIMAL = '[data]\nfile = "panel.csv"\nresponse = "y"\n'
FULL = """\
title = "Spread changes"
[data]
file = "data/panel.csv"
time = "day"
response = "y"
columns = ["x*", "z"]
missing = "drop-rows"
[expand]
transform = "clip"
powers = 2
products = true
lags = 5
contemporaneous = true
own_lags = 3
[purpose]
kind = "regression"
[target]
relevant = 4
smallest_effect = 1
risk = 0.1
power = 0.9
stability = 1.0
false_share = 0
[penalty]
rule = "self-normalised"
loss = "squared"
adaptive = false
[simulation]
replicates = 50
seed = 9223372036854775807
"""


def write(folder: Path, text: str | bytes, name: str = "d.toml") -> Path:
    path = folder / name
    path.write_bytes(text if isinstance(text, bytes) else text.encode())
    return path


def refusal(path: Path) -> str:
    with pytest.raises(InputError) as caught:
        read_design(path)
    message = str(caught.value)
    assert message.isprintable(), message
    return message


def test_defaults_are_those_of_the_records(tmp_path: Path) -> None:
    design = read_design(write(tmp_path, MINIMAL, "budget.v2.toml"))
    assert design.title == "budget.v2"
    assert design.data.file == tmp_path / "panel.csv"
    assert (design.data.time, design.data.columns, design.data.missing) == (None, ("*",), "refuse")
    assert (design.expand.transform, design.expand.powers, design.expand.products) == (
        "none",
        1,
        False,
    )
    assert (design.expand.lags, design.expand.contemporaneous, design.expand.own_lags) == (
        0,
        False,
        0,
    )
    assert design.kind == "regression"
    assert (design.target.relevant, design.target.smallest_effect) == (10, 0.15)
    assert (design.target.risk, design.target.power) == (0.05, 0.80)
    assert (design.target.stability, design.target.false_share) == (0.75, 0.20)
    assert (design.penalty.rule, design.penalty.loss, design.penalty.adaptive) == (
        "plug-in",
        "squared",
        False,
    )
    assert (design.simulation.replicates, design.simulation.seed) == (400, 1)
    assert design.sha256 == hashlib.sha256(MINIMAL.encode()).hexdigest()


def test_every_key_reaches_its_field(tmp_path: Path) -> None:
    design = read_design(str(write(tmp_path, FULL)))
    assert design.title == "Spread changes"
    assert design.data.file == tmp_path / "data" / "panel.csv"
    assert (design.data.time, design.data.response) == ("day", "y")
    assert (design.data.columns, design.data.missing) == (("x*", "z"), "drop-rows")
    expand = design.expand
    assert (expand.transform, expand.powers, expand.products) == ("clip", 2, True)
    assert (expand.lags, expand.contemporaneous, expand.own_lags) == (5, True, 3)
    target = design.target
    assert (target.relevant, target.smallest_effect, target.risk) == (4, 1.0, 0.1)
    assert type(target.smallest_effect) is float and type(target.false_share) is float
    assert (target.power, target.stability, target.false_share) == (0.9, 1.0, 0.0)
    assert design.penalty.rule == "self-normalised"
    assert (design.simulation.replicates, design.simulation.seed) == (50, 2**63 - 1)


SEVERAL = '[data]\nfile = "panel.csv"\ntime = "day"\nresponse = ["y", "z", "w"]\n'


def test_several_responses_are_one_design_each(tmp_path: Path) -> None:
    path = write(tmp_path, 'title = "Spreads"\n' + SEVERAL + 'columns = ["z", "x*"]\n')
    designs = read_designs(path)
    assert [design.data.response for design in designs] == ["y", "z", "w"]
    assert [design.data.other_responses for design in designs] == [
        ("z", "w"),
        ("y", "w"),
        ("y", "z"),
    ]
    assert [design.title for design in designs] == ["Spreads: y", "Spreads: z", "Spreads: w"]
    # Nothing else differs.
    assert len({(d.path, d.sha256, d.expand, d.target, d.data.columns) for d in designs}) == 1
    assert read_design(path, response="z") == designs[1]
    single = write(tmp_path, MINIMAL)
    assert read_designs(single) == (read_design(single),) == (read_design(single, response="y"),)


@pytest.mark.parametrize(
    ("text", "response", "message"),
    [
        (SEVERAL, None, "[data] response lists 3, 'y', 'z', 'w'; one of them has to be picked"),
        (SEVERAL, "x", "'x' is no response of this design; there are 'y', 'z', 'w'"),
        (MINIMAL, "yy", "'yy' is no response of this design; there is only 'y'; nearest: 'y'"),
        (SEVERAL.replace('"w"', '"y"'), "y", "a list of names that differ is needed"),
        (SEVERAL.replace('"w"', "3"), "y", "a list of names that differ is needed"),
        (SEVERAL.replace('"w"', '"day"'), "y", "[data] time = 'day': also a response; two"),
        (SEVERAL + 'columns = ["day"]\n', "y", "[data] columns names 'day', the time"),
    ],
)
def test_refused_lists_of_responses(
    tmp_path: Path, text: str, response: str | None, message: str
) -> None:
    with pytest.raises(InputError) as caught:
        read_design(write(tmp_path, text), response=response)
    assert message in str(caught.value)


def test_absolute_path_byte_order_mark_and_list_of_one_response(tmp_path: Path) -> None:
    text = '\ufeff[data]\nfile = "/data/p.csv"\nresponse = ["y"]\n'
    design = read_design(write(tmp_path, text))
    assert design.data.file == Path("/data/p.csv")
    assert design.data.response == "y"


@pytest.mark.parametrize(
    ("extra", "fragments"),
    [
        (
            "[target]\nrelevent = 5",
            ["[target] relevent = 5: unknown key", "known: relevant, ", "nearest: 'relevant'"],
        ),
        ("lags = 5", ["[data] lags = 5: unknown key", "lags belongs in [expand]"]),
        ("[exand]\nlags = 1", ["[exand]: unknown table", "nearest: 'expand'"]),
        (
            "[purpose]\nkind = 'regresion'",
            [
                "[purpose] kind = 'regresion': not accepted; regression, the only one in this"
                " version, is needed; nearest: 'regression'"
            ],
        ),
        (
            "[penalty]\nrule = 'plugin'",
            ["[penalty] rule = 'plugin'", "one of plug-in, ", "nearest: 'plug-in'"],
        ),
        ("missing = 'drop'", ["[data] missing = 'drop'", "one of refuse, drop-rows"]),
        ("missing = ['refuse']", ["[data] missing = ['refuse']", "one of refuse, drop-rows"]),
        ("time = 3", ["[data] time = 3", "text on one line"]),
        ("time = ' '", ["[data] time = ' '", "text on one line, not empty"]),
        ('time = "a\\nb"', ["[data] time = 'a\\nb'", "text on one line, not empty"]),
        ("columns = 'x'", ["[data] columns = 'x'", "a list of column names or glob patterns"]),
        ("columns = ['x', 2]", ["[data] columns = ['x', 2]", "a list of column names"]),
        ("columns = ['x', 'x']", ["[data] columns = ['x', 'x']", "none of them twice"]),
        ("columns = ['y']", ["[data] columns names 'y', the response", "own_lags"]),
        ("time = 'd'\ncolumns = ['d']", ["[data] columns names 'd', the time"]),
        ("time = 'y'", ["[data] time = 'y': also the response"]),
        ("[expand]\ntransform = 'ranks'", ["[expand] transform = 'ranks'", "normal-scores, clip"]),
        ("[expand]\nproducts = 1", ["[expand] products = 1", "true or false is needed"]),
        ("[target]\nrelevant = 2.5", ["[target] relevant = 2.5", "a whole number of at least 1"]),
        ("[target]\nrelevant = true", ["[target] relevant = true", "a whole number of at least 1"]),
        ("[target]\nrisk = '0.1'", ["[target] risk = '0.1'", "a number above 0 and below 0.5"]),
        ("[target]\nrisk = true", ["[target] risk = true", "a number above 0 and below 0.5"]),
        ("[target]\npower = nan", ["[target] power = nan", "a number above 0 and below 1"]),
        ("[target]\nrisk = 2020-01-01", ["[target] risk = 2020-01-01", "a number"]),
        ("[target]\nrisk = {a = 1}", ["[target] risk = a table", "a number"]),
    ],
)
def test_refused_keys_and_values(tmp_path: Path, extra: str, fragments: list[str]) -> None:
    text = MINIMAL.replace('"y"\n', f'"y"\n{extra}\n')
    message = refusal(write(tmp_path, text))
    assert message.startswith("d.toml: ")
    for fragment in fragments:
        assert fragment in message


@pytest.mark.parametrize(
    ("table", "key", "inside", "outside", "accepted"),
    [
        ("expand", "powers", [1, 6], [0, 7], "from 1 to 6"),
        ("expand", "lags", [0, 60], [-1, 61], "from 0 to 60"),
        ("expand", "own_lags", [0, 60], [-1, 61], "from 0 to 60"),
        ("target", "relevant", [1, 10**6], [0, -3], "of at least 1"),
        ("target", "smallest_effect", [5, 1e-9], [0, 5.01, "inf"], "above 0 and at most 5"),
        ("target", "risk", [0.499, 1e-9], [0, 0.5, -0.1], "above 0 and below 0.5"),
        ("target", "power", [0.001, 0.999], [0, 1], "above 0 and below 1"),
        ("target", "stability", [0.001, 1], [0, 1.001], "above 0 and at most 1"),
        ("target", "false_share", [0, 0.999], [-0.001, 1], "of at least 0 and below 1"),
        ("simulation", "replicates", [50, 100_000], [49, 100_001], "from 50 to 100000"),
        (
            "simulation",
            "seed",
            [0, 2**63 - 1],
            [-1, "0x" + "f" * 60],
            "from 0 to 9223372036854775807",
        ),
    ],
)
def test_ranges_hold_at_both_ends(
    tmp_path: Path,
    table: str,
    key: str,
    inside: list[float],
    outside: list[object],
    accepted: str,
) -> None:
    for value in inside:
        design = read_design(write(tmp_path, f"{MINIMAL}[{table}]\n{key} = {value}\n"))
        assert getattr(getattr(design, table), key) == value
    for bad in outside:
        message = refusal(write(tmp_path, f"{MINIMAL}[{table}]\n{key} = {bad}\n"))
        assert f"[{table}] {key} = " in message and accepted in message


@pytest.mark.parametrize(
    ("text", "fragment", "available"),
    [
        *[
            (f'{MINIMAL}[purpose]\nkind = "{kind}"', f"[purpose] kind = '{kind}'", "regression")
            for kind in ("treatment", "instruments", "binary", "system", "chain")
        ],
    ],
)
def test_parts_of_the_language_not_available(
    tmp_path: Path, text: str, fragment: str, available: str
) -> None:
    path = write(tmp_path, text)
    with pytest.raises(NotAvailableError) as caught:
        read_design(path)
    message = str(caught.value)
    assert message.startswith(f"d.toml: {fragment} ")
    assert message.endswith(
        f"is part of the design language but not available in this version; available: {available}"
    )


def test_no_word_is_asked_for_that_would_be_refused_next(tmp_path: Path) -> None:
    """Neither as accepted nor as the nearest."""
    for table, keys in LANGUAGE.items():
        for name, key in keys.items():
            if not key.choices:
                continue
            unheard = f"{key.choices[-1]}x"
            message = refusal(
                write(
                    tmp_path,
                    f'{MINIMAL}[{table}]\n{name} = "{unheard}"\n'
                    if table != "data"
                    else f'{MINIMAL}{name} = "{unheard}"\n',
                )
            )
            asked = message.partition("not accepted")[2]
            for word in set(key.choices) - set(key.available or key.choices):
                assert word not in asked, message
            assert all(word in asked for word in key.available or key.choices)
    for name, key in LANGUAGE["penalty"].items():
        if key.available == (False,):
            message = refusal(write(tmp_path, f"{MINIMAL}[penalty]\n{name} = 1\n"))
            assert "false, the only one in this version, is needed" in message


@pytest.mark.parametrize(
    ("asked", "known", "found"),
    [
        ("relevent", ["relevant", "risk", "power"], "; nearest: 'relevant'"),
        ("x9", ["x1", "y"], "; nearest: 'x1'"),
        ("day", ["date", "rate_usd"], "; nearest: 'date'"),
        ("Spread", ["spread", "d"], "; nearest: 'spread'"),
        ("inflation", ["spread_change", "bunker_cost", "day"], ""),
        ("huber", ["squared"], ""),
        ("kind", ["powers", "rule"], ""),
        ("y", ["spread_change", "day"], ""),
        ("y", [], ""),
    ],
)
def test_only_a_name_like_it_is_called_nearest(asked: str, known: list[str], found: str) -> None:
    assert nearest(asked, known) == found


@pytest.mark.parametrize(
    ("text", "fragments"),
    [
        ("", ["[data] file is missing", "text on one line"]),
        ('[data]\nresponse = "y"\n', ["[data] file is missing"]),
        (
            '[data]\nfile = "a.csv"\nrespons = "y"\n',
            ["[data] response is missing", "nearest found: 'respons'"],
        ),
        ('[data]\nfile = "a.csv"\nresponse = []\n', ["[data] response = []", "a list of names"]),
        ('[data]\nfile = ""\nresponse = "y"\n', ["[data] file = ''", "not empty"]),
        ("data = 5\n", ["data = 5: a table [data] is needed"]),
        ('[[data]]\nfile = "a"\n', ["data = [a table]: a table [data] is needed"]),
        (
            f"titel = 'x'\n{MINIMAL}",
            ["titel = 'x': unknown key outside the tables", "nearest: 'title'"],
        ),
        (f"own_lags = 3\n{MINIMAL}", ["own_lags = 3: unknown key", "belongs in [expand]"]),
        (f"title = 4\n{MINIMAL}", ["title = 4: not accepted", "text on one line"]),
        ("a = 1\nb = = 2\n", ["not valid TOML", "line 2"]),
        (f"{MINIMAL}[data]\n", ["not valid TOML", "line 4"]),
        ("a = " + "1" * 5000, ["not valid TOML", "a number too long"]),
        ("a = " + "[" * 50_000, ["not valid TOML", "nested too deeply"]),
        (b'[data]\nfile = "caf\xe9.csv"\n', ["line 2: not UTF-8 text (byte 0xe9)"]),
        (f'{MINIMAL}"a\\nb" = 3\n', ["unknown key"]),
        (f"{MINIMAL}{'k' * 5000} = 3\n", ["unknown key"]),
    ],
)
def test_refused_files(tmp_path: Path, text: str | bytes, fragments: list[str]) -> None:
    message = refusal(write(tmp_path, text))
    assert message.startswith("d.toml: ") and len(message) < 1000
    for fragment in fragments:
        assert fragment in message


def test_files_that_cannot_be_opened(tmp_path: Path) -> None:
    assert "no such file" in refusal(tmp_path / "none.toml")
    assert "this is a folder" in refusal(tmp_path)
    assert "no such file" in refusal(Path("a\0b.toml"))
    assert "cannot be read (File name too long)" in refusal(Path("x" * 5000))
    assert "at most 8 MiB" in refusal(write(tmp_path, b"#" * (8 * 1024 * 1024 + 1)))


@settings(
    max_examples=150, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture]
)
@given(content=st.binary(max_size=200))
def test_random_bytes_are_refused(tmp_path: Path, content: bytes) -> None:
    assert refusal(write(tmp_path, content))


@settings(
    max_examples=300, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture]
)
@given(
    place=st.integers(0, len(FULL)),
    removed=st.integers(0, 12),
    put=st.text(max_size=6) | st.sampled_from(["\n", "[", "]", "=", "true", "nan", "1e999", "0x"]),
)
def test_mutations_are_read_or_refused(tmp_path: Path, place: int, removed: int, put: str) -> None:
    text = FULL[:place] + put + FULL[place + removed :]
    path = write(tmp_path, text.encode("utf-8", "surrogatepass"))
    try:
        design = read_design(path)
    except InputError as refused:
        assert str(refused).startswith("d.toml: ") and str(refused).isprintable()
    else:
        assert 1 <= design.expand.powers <= 6 and 0 < design.target.risk < 0.5


@pytest.mark.parametrize("loss", ["squared", "huber", "absolute", "square-root"])
@pytest.mark.parametrize(
    "rule",
    ["plug-in", "self-normalised", "bic", "extended-bic", "cross-validated",
     "cross-validated-sparse"],
)  # fmt: skip
def test_every_rule_and_loss_is_read(tmp_path: Path, rule: str, loss: str) -> None:
    text = f'{MINIMAL}[penalty]\nrule = "{rule}"\nloss = "{loss}"\nadaptive = true'
    penalty = read_design(write(tmp_path, text)).penalty
    assert (penalty.rule, penalty.loss, penalty.adaptive) == (rule, loss, True)


def test_a_stated_design_is_sent_to_the_command_that_takes_it(tmp_path: Path) -> None:
    message = refusal(write(tmp_path, "[stated]\nrows = 500\n"))
    assert "[stated]" in message and "scantling budget" in message
