"""Numbers in words: how counts, indices, probabilities and limits are written."""

from __future__ import annotations

import math
import re
import textwrap
from collections.abc import Sequence

from scantling.planning.budget import Allowed
from scantling.planning.ceiling import Ceiling
from scantling.planning.limit import Limit

ALWAYS = (
    "A diagnostic of a statistical design: no investment advice, and no substitute for the"
    " model-risk procedures, rules and licensed judgement that apply where it is used.",
    "Limits hold for the fitted error law, these columns and the effects assumed in [target].",
)
PLAN_CAUTIONS = (
    ALWAYS[0],
    "Limits hold for the stated laws of errors and columns; nothing was checked against data.",
)
BELOW = "more below"
"""Ends what the first screen shows in part."""
LABEL = 12
"""Width of the labels on the first screen."""


def count(value: int | None) -> str:
    """A whole number with separators; 'unknown' for None."""
    return "unknown" if value is None else f"{value:,}"


def many(value: int, noun: str) -> str:
    """A count with its noun: '1 column', '390 columns'."""
    return f"{value:,} {noun}{'' if value == 1 else 's'}"


def large(value: int) -> str:
    """A whole number, in powers of ten from a million on."""
    if value < 1_000_000:
        return f"{value:,}"
    mantissa, exponent = f"{value:.1e}".split("e")
    return f"{mantissa}e{int(exponent)}"


def index(value: float) -> str:
    """A tail index to one decimal; above 50 it says nothing finer."""
    return "above 50" if not math.isfinite(value) or value > 50 else f"{value:.1f}"


def index_interval(low: float, high: float) -> str:
    """Ends of an index's interval."""
    if not math.isfinite(low) or low > 50:
        return "above 50"
    end = f"to {high:.1f}" if math.isfinite(high) and high <= 50 else "upwards"
    return f"{low:.1f} {end}"


def probability(value: float) -> str:
    """A probability to two digits that matter."""
    if value < 0.001:
        return "under 0.001"
    return f"{value:.3f}" if value < 0.1 else f"{value:.2f}"


def p_value(value: float) -> str:
    """A p-value, bounded away from zero."""
    return "p < 0.001" if value < 0.001 else f"p = {value:.3f}"


def two(value: float) -> str:
    """A number to two decimals, never minus zero."""
    return f"{round(value, 2) + 0.0:.2f}"


def share(value: float) -> str:
    """A share in per cent."""
    return f"{100 * value:.0f} %"


def columns(limit: Limit | Allowed) -> str:
    """A limit as read: 'at least 629', '23', 'unknown'."""
    if limit.columns is None:
        return "unknown"
    return f"at least {limit.columns:,}" if limit.note == "at least" else f"{limit.columns:,}"


def band(limit: Limit | Allowed, examined: int) -> str:
    """A limit's band: '9 to 61', '300 to at least 629'."""
    if limit.low is None:
        return "no band"
    if limit.high is None:
        if limit.low >= examined:
            return f"at least {examined:,}"
        return f"{limit.low:,} to at least {examined:,}"
    return f"{limit.low:,} to {limit.high:,}"


def rate(ceiling: Ceiling) -> str:
    """The ceiling's point value."""
    if ceiling.columns is None:
        return "unknown"
    return ("at least " if ceiling.capped else "") + large(ceiling.columns)


def about(value: int, span: tuple[int, int | None] | None) -> str:
    """A number found by simulation, with the range that simulation error leaves: 'about 900
    (700 to 1,400)'."""
    if span is None:
        return f"about {count(value)}"
    low, high = span
    if low == value == high:
        return f"about {count(value)}"
    end = "upwards" if high is None else f"to {count(high)}"
    return f"about {count(value)} ({count(low)} {end})"


def labelled(label: str, text: str, width: int) -> list[str]:
    """A label, and its text wrapped beside it."""
    body = textwrap.wrap(text, width - LABEL, break_on_hyphens=False) or [""]
    first = f"{label:<{LABEL}}{body[0]}".rstrip()
    return [first, *(" " * LABEL + line for line in body[1:])]


def paragraph(text: str, width: int, indent: str = "  ") -> list[str]:
    """A sentence wrapped under a heading, continuation lines indented further."""
    return textwrap.wrap(
        text, width, initial_indent=indent, subsequent_indent=indent + "  ",
        break_on_hyphens=False,
    )  # fmt: skip


def table(rows: Sequence[Sequence[str]], indent: str = "  ") -> list[str]:
    """Rows of cells in columns; the first left-aligned, the others right-aligned."""
    widths = [max(len(row[c]) for row in rows) for c in range(len(rows[0]))]
    lines = []
    for row in rows:
        cells = [row[0].ljust(widths[0])]
        cells += [cell.rjust(width) for cell, width in zip(row[1:], widths[1:], strict=True)]
        lines.append((indent + "  ".join(cells)).rstrip())
    return lines


def in_lines(label: str, text: str, width: int, most: int) -> list[str]:
    """A label and its text on at most so many lines, never ending in mid-sentence.

    What does not fit loses its remarks in brackets, then whole clauses from the end; only a
    clause too long by itself is cut, between words. What was left out is said to be below.
    """
    bare = re.sub(r" \([^()]*\)", "", text)
    clauses = bare.split("; ")
    shorter = ["; ".join(clauses[:count]) for count in range(len(clauses) - 1, 0, -1)]
    words = clauses[0].split()
    cut = [" ".join(words[:count]) + " ..." for count in range(len(words) - 1, 0, -1)]
    for tried in (text, bare, *(f"{each.rstrip('.')} ({BELOW})" for each in (*shorter, *cut))):
        lines = labelled(label, tried, width)
        if len(lines) <= most:
            return lines
    return labelled(label, f"({BELOW})", width)


def between_words(name: str, width: int) -> str:
    """A phrase cut to a width between two words, or within the first if that alone is longer."""
    if len(name) <= width:
        return name
    whole = name[: width - 3].rpartition(" ")[0]
    return f"{whole} ..." if whole else shortened(name, width)


def shortened(name: str, width: int) -> str:
    """A name cut to a width, the cut shown."""
    return name if len(name) <= width else name[: width - 3] + "..."
