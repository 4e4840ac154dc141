"""The journal: every kind of result comes back bit for bit; torn and damaged entries do not."""

from __future__ import annotations

import math
import os
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from scantling.core.encoding import Damaged, NotEncodable, decode, encode
from scantling.core.journal import BATCH, Journal
from scantling.core.streams import Work, worker_pool
from scantling.errors import ResourceError
from scantling.simulation.scores import Passers
from scantling.simulation.selection import summarise_selection

plain = st.none() | st.booleans() | st.integers() | st.floats() | st.text()
nested = st.recursive(
    plain,
    lambda inner: st.lists(inner) | st.tuples(inner, inner) | st.dictionaries(st.text(), inner),
    max_leaves=12,
)


def alike(one: Any, other: Any) -> bool:
    """Same types and values, NaN like NaN and 0.0 unlike -0.0."""
    if type(one) is not type(other):
        return False
    if isinstance(one, float):
        return np.float64(one).tobytes() == np.float64(other).tobytes() or (
            math.isnan(one) and math.isnan(other)
        )
    if isinstance(one, list | tuple):
        return len(one) == len(other) and all(map(alike, one, other))
    if isinstance(one, dict):
        return list(one) == list(other) and all(alike(one[k], other[k]) for k in one)
    return bool(one == other)


@given(nested)
def test_plain_values_come_back_as_they_were(value: Any) -> None:
    assert alike(decode(*encode(value)), value)


@pytest.mark.parametrize("kind", ["f8", "f4", "i8", "i4", "u1", "?"])
@pytest.mark.parametrize("shape", [(), (0,), (5,), (3, 4), (2, 0, 3)])
def test_arrays_keep_type_shape_memory_order_and_bits(kind: str, shape: tuple[int, ...]) -> None:
    array = np.asarray(np.random.default_rng(1).standard_normal(shape) * 9).astype(kind)
    for original in (array, np.asfortranarray(array)):
        back = decode(*encode((original, 1)))[0]
        assert back.dtype == original.dtype and back.shape == original.shape
        assert back.tobytes() == original.tobytes()
        assert back.flags.c_contiguous == original.flags.c_contiguous
        assert back.flags.f_contiguous == original.flags.f_contiguous
        assert back.flags.writeable
    scalar = np.float64(0.1)
    assert type(decode(*encode(scalar))) is np.float64 and decode(*encode(scalar)) == scalar


def test_records_of_the_package_come_back_as_records() -> None:
    rng = np.random.default_rng(2)
    found = Passers(
        columns=7, draws=3, draw=np.array([0, 2], np.int32), column=np.array([6, 1], np.int32),
        ratio=rng.standard_normal(2),
    )  # fmt: skip
    summary = summarise_selection(rng.random((20, 5)) > 0.5, np.arange(5) < 2)
    back, again = decode(*encode((found, summary)))
    assert again == summary and type(back) is Passers
    assert back.draw.dtype == np.int32 and np.array_equal(back.ratio, found.ratio)


class Foreign:
    """Of no kind that is kept."""


@pytest.mark.parametrize(
    "value",
    [Foreign(), {1: 2}, {3}, b"bytes", np.array(["text"]), np.array([None]), np.ones((4, 4))[:, 1]],
)
def test_what_cannot_come_back_the_same_is_not_kept(value: Any, tmp_path: Path) -> None:
    with pytest.raises(NotEncodable):
        encode(("fine", value))
    with Journal(tmp_path / "units") as journal:
        journal.keep(0, "f", 1, 0, value, now=0.0)
    assert (tmp_path / "units").stat().st_size == 0


@pytest.mark.parametrize(
    "head",
    [
        b"", b"{", b"[]", b"[1]", b'[{"array":0},[]]', b'[{"odd":0},[]]',
        b'[{"array":0},[["O",[1],"C"]]]',
        b'[{"record":["os","stat_result",{}]},[]]', b'[{"record":["scantling.nowhere","X",{}]},[]]',
        b'[{"record":["scantling.core.journal","Journal",{"path":"x"}]},[]]',
        b'[{"record":["scantling.simulation.scores","Passers",{"columns":1}]},[]]',
        b'[{"array":0},[["<f8",[2],"C"]]]', b'[{"array":0},[["<f8",[0],"C"]]]',
    ],
)  # fmt: skip
def test_bytes_that_are_no_result_are_refused(head: bytes) -> None:
    with pytest.raises(Damaged):
        decode(head, b"12345678")


def filled(path: Path, units: int = 5) -> list[np.ndarray]:
    """A journal of one call."""
    arrays = [np.random.default_rng(k).standard_normal(50 + k) for k in range(units)]
    with Journal(path) as journal:
        call = journal.begin()
        for k, array in enumerate(arrays):
            journal.keep(call, "unit", units, k, (k, array), now=float(k))
    return arrays


def recalled(path: Path, name: str = "unit", units: int = 5, call: int = 0) -> dict[int, Any]:
    """What a journal has of a call."""
    with Journal(path) as journal:
        return journal.find(call, name, units)


def test_results_are_found_by_call_function_and_unit(tmp_path: Path) -> None:
    arrays = filled(tmp_path / "units")
    found = recalled(tmp_path / "units")
    assert sorted(found) == [0, 1, 2, 3, 4]
    assert all(found[k][0] == k and np.array_equal(found[k][1], arrays[k]) for k in found)
    assert recalled(tmp_path / "units", name="other") == {}
    assert recalled(tmp_path / "units", units=6) == {}
    assert recalled(tmp_path / "units", call=1) == {}


def test_a_file_cut_anywhere_gives_the_entries_before_the_cut(tmp_path: Path) -> None:
    filled(tmp_path / "whole")
    content = (tmp_path / "whole").read_bytes()
    counts = []
    for cut in range(0, len(content) + 1, 97):
        path = tmp_path / "cut"
        path.write_bytes(content[:cut])
        counts.append(len(recalled(path)))
        # What is added after a torn end is found again.
        with Journal(path) as journal:
            journal.keep(9, "later", 1, 0, "text", now=0.0)
        assert recalled(path, name="later", units=1, call=9) == {0: "text"}
        path.unlink()
    assert counts == sorted(counts) and counts[0] == 0 and counts[-1] == 4


def test_one_flipped_byte_loses_that_entry_or_those_after_it_and_gives_no_wrong_value(
    tmp_path: Path,
) -> None:
    arrays = filled(tmp_path / "units")
    content = (tmp_path / "units").read_bytes()
    for place in range(0, len(content), 53):
        path = tmp_path / "flipped"
        path.write_bytes(content[:place] + bytes([content[place] ^ 0x10]) + content[place + 1 :])
        found = recalled(path)
        assert len(found) < 5
        assert all(np.array_equal(found[k][1], arrays[k]) for k in found)


def test_a_foreign_file_is_no_journal(tmp_path: Path) -> None:
    (tmp_path / "units").write_bytes(os.urandom(3000))
    assert recalled(tmp_path / "units") == {}
    with pytest.raises(ResourceError, match="cannot be used"):
        Journal(tmp_path)  # a directory
    with pytest.raises(ResourceError, match="cannot be used"):
        Journal(tmp_path / "no" / "units")


def test_results_are_held_back_for_a_moment_at_most(tmp_path: Path) -> None:
    path = tmp_path / "units"
    with Journal(path) as journal:
        journal.keep(0, "f", 9, 0, 1.0, now=0.0)
        assert path.stat().st_size == 0 and not journal.kept
        journal.keep(0, "f", 9, 1, 1.0, now=0.3)
        small = path.stat().st_size
        assert small > 0 and journal.kept
        journal.keep(0, "f", 9, 2, np.zeros(BATCH), now=0.3)
        assert path.stat().st_size > small + BATCH
        journal.keep(0, "f", 9, 3, 1.0, now=0.3)
    assert len(recalled(path, "f", 9)) == 4


@pytest.mark.parametrize("workers", [1, 2])
def test_a_mapper_computes_only_what_is_not_there(tmp_path: Path, workers: int) -> None:
    def run(stop: int, computed: list[int]) -> list[Any]:
        def unit(number: int) -> tuple[int, float]:
            if number == stop:
                raise KeyboardInterrupt
            computed.append(number)
            return number, math.sqrt(number)

        with (
            Journal(tmp_path / "units") as journal,
            worker_pool(Work(workers=workers, journal=journal)) as mapper,
        ):
            return [mapper(unit, range(8)), mapper(unit, range(12))]

    first: list[int] = []
    with pytest.raises(KeyboardInterrupt):
        run(9, first)
    assert first == [*range(8), *range(9)]
    second: list[int] = []
    found = run(-1, second)
    assert second == [9, 10, 11]
    assert found == [[(k, math.sqrt(k)) for k in range(n)] for n in (8, 12)]
