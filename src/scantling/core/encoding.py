"""Results of units of work as bytes and back: plain values, arrays and this package's records.

Not pickle: what is read back can only be None, numbers, text, tuples, lists, dictionaries with
text keys, arrays of numbers, and records this package defines. A block is a JSON head (the
structure, with arrays by place, type, shape and memory order) and the arrays' own bytes.
"""

from __future__ import annotations

import json
import sys
from dataclasses import fields, is_dataclass
from typing import Any

import numpy as np

KINDS = "biuf"
"""Kinds of array kept: truth values, whole and real numbers."""
PACKAGE = __name__.partition(".")[0]


class NotEncodable(TypeError):
    """A value of a kind that is not kept."""


class Damaged(ValueError):
    """Bytes that are no encoded value."""


def encode(value: Any) -> tuple[bytes, bytes]:
    """Return head and body of a value; floats come back bit for bit, arrays in their order.

    Raises
    ------
    NotEncodable
        If the value, or part of it, is none of the kinds that are kept.
    """
    arrays: list[np.ndarray] = []
    tree = _tree(value, arrays)
    described = [[a.dtype.str, list(a.shape), "C" if a.flags.c_contiguous else "F"] for a in arrays]
    head = json.dumps([tree, described], separators=(",", ":")).encode()
    return head, b"".join(a.tobytes(order="A") for a in arrays)


def decode(head: bytes, body: bytes) -> Any:
    """The value that was encoded; its arrays are its own and writable.

    Raises
    ------
    Damaged
        If the bytes do not hold one.
    """
    try:
        tree, described = json.loads(head)
        arrays, start = [], 0
        for kind, shape, order in described:
            dtype = np.dtype(kind)
            if dtype.kind not in KINDS:
                raise Damaged(f"an array of {kind}")
            count = int(np.prod(shape, dtype=np.int64))
            flat = np.frombuffer(body, dtype=dtype, count=count, offset=start).copy()
            arrays.append(flat.reshape(shape, order=order))
            start += flat.nbytes
        if start != len(body):
            raise Damaged("bytes are left over")
        return _value(tree, arrays)
    except Damaged:
        raise
    except (ValueError, TypeError, KeyError, IndexError, AttributeError) as fault:
        raise Damaged(str(fault)) from fault


def _tree(value: Any, arrays: list[np.ndarray]) -> Any:
    """The value as JSON: plain values as they are, everything else as {kind: content}."""
    if value is None or type(value) in (bool, int, float, str):
        return value
    if isinstance(value, np.generic | np.ndarray):
        array = np.asarray(value)
        if array.dtype.kind not in KINDS or not (
            array.flags.c_contiguous or array.flags.f_contiguous
        ):
            raise NotEncodable(f"an array of {array.dtype}, shape {array.shape}")
        arrays.append(array)
        return {"scalar" if isinstance(value, np.generic) else "array": len(arrays) - 1}
    if type(value) in (tuple, list):
        return {type(value).__name__: [_tree(item, arrays) for item in value]}
    if type(value) is dict and all(type(key) is str for key in value):
        return {"dict": {key: _tree(item, arrays) for key, item in value.items()}}
    kind = type(value)
    if is_dataclass(kind) and kind.__module__.partition(".")[0] == PACKAGE:
        content = {f.name: _tree(getattr(value, f.name), arrays) for f in fields(kind)}
        return {"record": [kind.__module__, kind.__qualname__, content]}
    raise NotEncodable(f"{kind.__module__}.{kind.__qualname__}")


def _value(tree: Any, arrays: list[np.ndarray]) -> Any:
    if not isinstance(tree, dict):
        return tree
    ((kind, content),) = tree.items()
    if kind == "array":
        return arrays[content]
    if kind == "scalar":
        return arrays[content][()]
    if kind in ("tuple", "list"):
        items = [_value(item, arrays) for item in content]
        return tuple(items) if kind == "tuple" else items
    if kind == "dict":
        return {key: _value(item, arrays) for key, item in content.items()}
    if kind == "record":
        module, name, values = content
        return _record(module, name)(**{k: _value(v, arrays) for k, v in values.items()})
    raise Damaged(f"a value of kind {kind!r}")


def _record(module: str, name: str) -> type:
    """The record class; only of modules of this package that are loaded already."""
    found = None
    if module.partition(".")[0] == PACKAGE and module in sys.modules:
        found = getattr(sys.modules[module], name, None)
    if not (isinstance(found, type) and is_dataclass(found)):
        raise Damaged(f"no record {module}.{name}")
    return found
