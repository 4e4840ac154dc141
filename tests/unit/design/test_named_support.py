"""[target] support: random, the pilot's, or columns by name."""

from __future__ import annotations

import pytest

from scantling.design.parse import read_design
from scantling.design.stated import read_statement
from scantling.design.support import named_places
from scantling.errors import InputError

DATA = '[data]\nfile = "t.csv"\nresponse = "y"\n'


def design(tmp_path, target):
    path = tmp_path / "d.toml"
    path.write_text(f"{DATA}[target]\n{target}\n")
    return read_design(path)


@pytest.mark.parametrize(
    ("target", "support", "relevant"),
    [
        ("", "random", 10),
        ('support = "pilot"', "pilot", 10),
        ('support = ["a", "b.lag1"]', ("a", "b.lag1"), 2),
        ('support = ["a", "b"]\nrelevant = 5', ("a", "b"), 5),
        ('support = ["a", "b"]\nrelevant = 2', ("a", "b"), 2),
    ],
)
def test_what_is_read(tmp_path, target, support, relevant):
    found = design(tmp_path, target).target
    assert (found.support, found.relevant) == (support, relevant)


@pytest.mark.parametrize(
    ("target", "words"),
    [
        ('support = "pilots"', '"random", "pilot" or a list of candidate columns that differ'),
        ('support = "pilots"', "nearest: 'pilot'"),
        ("support = []", "is needed"),
        ('support = ["a", "a"]', "columns that differ is needed"),
        ("support = 3", "a list of candidate columns"),
        ('support = ["a", "b"]\nrelevant = 1', "names 2 columns; relevant = 1 has to be at least"),
    ],
)
def test_refusals(tmp_path, target, words):
    with pytest.raises(InputError) as caught:
        design(tmp_path, target)
    assert words in str(caught.value)
    assert "\n" not in str(caught.value)


def test_names_are_found_among_the_candidates(tmp_path):
    found = design(tmp_path, 'support = ["c", "a.lag1"]')
    assert named_places(found, ("a", "a.lag1", "c")) == (2, 1)
    assert named_places(design(tmp_path, 'support = "pilot"'), ("a",)) == ()
    with pytest.raises(InputError) as caught:
        named_places(found, ("a", "a.lag2", "c"))
    assert str(caught.value) == (
        "d.toml: [target] support names 'a.lag1', which is none of the 3 candidate columns;"
        " nearest: 'a.lag2'"
    )


def test_a_stated_design_has_no_columns_to_name(tmp_path):
    path = tmp_path / "s.toml"
    path.write_text(
        '[stated]\nrows = 100\ncolumns = 20\nerror = "normal"\n[target]\nsupport = "pilot"\n'
    )
    with pytest.raises(InputError, match=r"\[target\] support = 'pilot': unknown key"):
        read_statement(path)
