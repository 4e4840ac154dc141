"""The families, in the order they are listed. A new one is added here."""

from __future__ import annotations

from scantling.law.generalised_error import GeneralisedError
from scantling.law.innovation import Innovation
from scantling.law.laplace import Laplace
from scantling.law.normal import Normal
from scantling.law.skewed_student import SkewedStudent
from scantling.law.spliced import Spliced
from scantling.law.stable import Stable
from scantling.law.student import Student

CATALOGUE: dict[str, type[Innovation]] = {
    family.name: family
    for family in (Normal, Laplace, GeneralisedError, Student, SkewedStudent, Stable, Spliced)
}
FAMILIES = tuple(CATALOGUE)
STATED = tuple(name for name, family in CATALOGUE.items() if family.stated_by is not None)
"""Families that can be written on one line."""
