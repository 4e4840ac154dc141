"""Several responses of one design: the table that comes first, and what their files are called."""

from __future__ import annotations

import textwrap
import unicodedata
from collections.abc import Sequence

from scantling.core.listing import listed
from scantling.errors import InputError
from scantling.planning.budget import BORDERLINE, OVER, WITHIN, Allowed
from scantling.planning.verdict import NONE
from scantling.report.record import Report
from scantling.report.text import NARROWEST, render
from scantling.report.wording import count, labelled, probability, shortened, table

ANSWERS = (WITHIN, BORDERLINE, OVER, NONE)
"""From the mildest to the most severe."""
LONGEST = 120
"""Bytes of a response's name that a file name holds; file systems take 255 in all."""
SHORTEST = 7
"""Width of a name where the other columns of the table leave least."""
HEAD = ("Response", "Verdict", "Asked", "Allowed (band)", "Binds", "Risk")


def most_severe(reports: Sequence[Report]) -> str:
    """The answer that stands for all: the most severe of them."""
    return max((report.verdict.answer for report in reports), key=ANSWERS.index)


def file_stems(stem: str, responses: Sequence[str]) -> tuple[str, ...]:
    """Return `<design stem>-<response>` for each response, safe as the name of a file.

    Letters and digits of any script, '.', '_' and '-' are kept, runs of anything else become
    one '_', and names are cut at 120 bytes. A single response is written under the stem alone.

    Raises
    ------
    InputError
        If two names come out the same, upper and lower case not told apart.
    """
    if len(responses) == 1:
        return (stem,)
    taken: dict[str, str] = {}
    stems = []
    for name in responses:
        safe = _safe(name)
        first = taken.setdefault(safe.casefold(), name)
        if first != name:
            raise InputError(
                f"[data] response: {first!r} and {name!r} would both be written as"
                f" {stem}-{safe}.json; rename one in the table"
            )
        stems.append(f"{stem}-{safe}")
    return tuple(stems)


def _safe(name: str) -> str:
    text = unicodedata.normalize("NFC", name)
    kept = "".join(c if c.isalnum() or c in "._-" else " " for c in text)
    return "_".join(kept.split()).encode()[:LONGEST].decode(errors="ignore") or "_"


def render_summary(reports: Sequence[Report], stems: Sequence[str], width: int = 80) -> str:
    """Return the table of all responses as plain text, one line each.

    Parameters
    ----------
    reports : sequence of Report
        Of the responses of one design, in its order.
    stems : sequence of str
        What their files are called, without ending.
    width : int
        Columns of the page, at least 80.
    """
    width = max(width, NARROWEST)
    first = reports[0].design
    title = first.title.removesuffix(f": {first.data.response}")
    ending = f" ({len(reports)} responses)"
    lines = ["scantling: " + shortened(title, width - len("scantling: ") - len(ending)) + ending]
    lines += labelled("Verdict", _verdict(reports), width)
    lines += ["", *_table(reports, width), ""]
    notes = "Band: 90 %. Risk: break-through at the columns asked for."
    if any("+" in _allowed(report) for report in reports):
        notes += " +: at least so many, all that were examined."
    lines += textwrap.wrap(notes, width)
    lines += _files(stems, width)
    return "\n".join(line.rstrip() for line in lines) + "\n"


def render_all(reports: Sequence[Report], stems: Sequence[str], width: int = 80) -> str:
    """Return the table, and after it each report behind a line that names its response."""
    width = max(width, NARROWEST)
    parts = [render_summary(reports, stems, width)]
    for place, report in enumerate(reports, start=1):
        parts.append("\n" + separator(place, len(reports), report.design.data.response, width))
        parts.append(render(report, width))
    return "".join(parts)


def separator(place: int, of: int, response: str, width: int = 80) -> str:
    """The line before one of several reports, and the empty line after it."""
    start = f"===== {place} of {of}: "
    return f"{start}{shortened(response, width - len(start) - 6)} ".ljust(width, "=") + "\n\n"


def json_list(documents: Sequence[str]) -> str:
    """Several JSON documents as one JSON list, each as it is in its own file."""
    return "[\n" + ",\n".join(document.rstrip("\n") for document in documents) + "\n]\n"


def _verdict(reports: Sequence[Report]) -> str:
    answers = [report.verdict.answer for report in reports]
    if len(set(answers)) == 1:
        return f"{answers[0].upper()}, all of them"
    counted = [f"{answers.count(a)} {a}" for a in reversed(ANSWERS) if a in answers]
    return f"{most_severe(reports).upper()}, the most severe: {listed(counted)}"


def _table(reports: Sequence[Report], width: int) -> list[str]:
    cells = [
        (
            report.verdict.answer.upper(),
            count(report.budget.asked),
            _allowed(report),
            report.budget.binding or "-",
            probability(report.budget.risk_at_design.value).replace("under ", "<"),
        )
        for report in reports
    ]
    taken = sum(2 + max(map(len, column)) for column in zip(HEAD[1:], *cells, strict=True))
    room = max(SHORTEST, width - taken)
    names = [HEAD[0], *(report.design.data.response for report in reports)]
    every = zip(names, [HEAD[1:], *cells], strict=True)
    rows = [(shortened(name, room), *row) for name, row in every]
    return table(rows, indent="")


def _allowed(report: Report) -> str:
    """Columns allowed with their band, short: '23 (9 to 61)', '90 (from 40)', '300+'."""
    allowed, asked = report.budget.allowed, report.budget.asked
    if report.verdict.answer == NONE:
        return "none"
    if allowed.columns is None:
        return "unknown"
    point = f"{allowed.columns:,}" + "+" * (allowed.note == "at least")
    ends = _ends(allowed, asked)
    return point if ends in ("", point) else f"{point} ({ends})"


def _ends(allowed: Allowed, asked: int) -> str:
    if allowed.low is None:
        return ""
    if allowed.high is not None:
        return f"{allowed.low:,} to {allowed.high:,}"
    return f"{asked:,}+" if allowed.low >= asked else f"from {allowed.low:,}"


def _files(stems: Sequence[str], width: int) -> list[str]:
    """Where each report is; long names are cut in the table, and whole here."""
    text = "In full (.txt and .json): " + ", ".join(stems)
    return textwrap.wrap(text, width, break_on_hyphens=False, subsequent_indent="  ")
