"""How a law is written on one line: `normal`, `student-t:df=3`."""

from __future__ import annotations

from scantling.core.checks import between
from scantling.errors import InputError
from scantling.law.families import ErrorLaw, normal_law, student_law

WRITTEN = {
    "normal": "normal",
    "student-t": "student-t:df=5 (df above 0)",
}
"""Families that can be stated, and an example of each."""
MOST_DF = 1e6


def parse_law(text: str, name: str = "law") -> ErrorLaw:
    """Read a stated law; its variance is 1 where it exists, else its scale.

    Parameters
    ----------
    text : str
        `family` or `family:key=value`.
    name : str
        The argument's name, for messages.

    Raises
    ------
    InputError
        If the family or a parameter is unknown, missing or out of range.
    """
    family, _, rest = text.partition(":")
    parameters: dict[str, str] = {}
    for part in filter(None, rest.split(",")):
        key, equals, value = part.partition("=")
        if not equals:
            raise InputError(f"{name}: key=value is needed after the family; found {part!r}")
        if key.strip() in parameters:
            raise InputError(f"{name}: {key.strip()} is given twice; found {text!r}")
        parameters[key.strip()] = value
    known = {"normal": set(), "student-t": {"df"}}
    if family not in known:
        raise InputError(f"{name}: one of {', '.join(WRITTEN.values())} is needed; found {text!r}")
    unknown = set(parameters) - known[family]
    if unknown:
        raise InputError(f"{name}: {family} has no parameter {sorted(unknown)[0]!r}")
    if family == "normal":
        return normal_law(1.0)
    if "df" not in parameters:
        raise InputError(f"{name}: student-t needs df, as in student-t:df=5")
    df = between(parameters["df"], f"{name}: df", 0, MOST_DF)
    return student_law(df, sd=1.0) if df > 2 else student_law(df)
