"""Relevant columns that a design names, found among its candidates."""

from __future__ import annotations

from collections.abc import Sequence

from scantling.design.message import file_label, nearest, shown
from scantling.design.spec import Design
from scantling.errors import InputError


def named_places(design: Design, names: Sequence[str]) -> tuple[int, ...]:
    """Return the places of the columns that [target] support names; empty if it names none.

    Parameters
    ----------
    design : Design
    names : sequence of str
        The candidates, after expansion.

    Raises
    ------
    InputError
        If a name is not among them.
    """
    wanted = design.target.support
    if isinstance(wanted, str):
        return ()
    places = {name: place for place, name in enumerate(names)}
    for name in wanted:
        if name not in places:
            raise InputError(
                f"{file_label(design.path)}: [target] support names {shown(name)}, which is none"
                f" of the {len(names):,} candidate columns{nearest(name, list(names))}"
            )
    return tuple(places[name] for name in wanted)
