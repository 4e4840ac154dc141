"""The error laws and what a stated one implies, as text and as JSON; nothing is computed here."""

from __future__ import annotations

import json
import math
from typing import Any

from scantling.core.listing import listed
from scantling.law.facts import ORDERS, TAILS, FamilyFacts, LawFacts
from scantling.law.families import ErrorLaw
from scantling.report.values import noted, number
from scantling.report.wording import labelled, paragraph

SCHEMA = "scantling-laws/1"
ALL_EXIST = "every moment exists"
RECURRENCE = (
    "To a law with a variance, volatility is added as alpha, beta and leverage:"
    " sigma_t^2 = omega + (alpha + leverage 1(e < 0)) e^2 + beta sigma^2, both of the row"
    " before, omega such that the mean level is 1. alpha + leverage must not be negative, and"
    " alpha + beta + leverage times the share of E e^2 below 0 must stay below 1. lag1 to lag10"
    " make the errors an autoregression of what the rest describes. Stated laws have variance 1"
    " where it exists, else scale 1, and mean 0."
)


def render_families(found: tuple[FamilyFacts, ...]) -> str:
    """The list of families as text of at most 80 columns."""
    lines = ["Error laws, each as it is written on a command line or in a design", ""]
    for each in found:
        lines += [each.written or f"{each.family} (fitted only)"]
        lines += paragraph(each.meaning, 80, "    ")
    lines += ["", *paragraph(RECURRENCE, 80, "")]
    lines += ["", "For example: student-t:df=5,alpha=0.08,beta=0.85,leverage=0.05,lag1=0.2"]
    lines += ["`scantling laws LAW` says what a stated law implies."]
    return "\n".join(lines) + "\n"


def families_json(found: tuple[FamilyFacts, ...]) -> str:
    """The list of families as JSON."""
    return _text(
        {
            "schema": SCHEMA,
            "families": [
                {
                    "family": each.family,
                    **(
                        {"written": each.written}
                        if each.written
                        else {"written": None, "written_note": "it can only be fitted"}
                    ),
                    "meaning": each.meaning,
                }
                for each in found
            ],
        }
    )


def render_facts(facts: LawFacts) -> str:
    """What a stated law implies, as text of at most 80 columns."""
    law = facts.law
    named = ", ".join(f"{key} {value:.4g}" for key, value in law.parameters.items())
    lines = labelled("Law", f"{law.family}: {named}", 80)
    spread = f"{facts.sd:.4g}" if math.isfinite(facts.sd) else "none: the variance is missing"
    lines += labelled("Sd", spread, 80)
    lines += labelled("Tail index", _index(facts), 80)
    levels = law.autoregression
    if levels is not None:
        lines += labelled(
            "Levels",
            f"{'persist' if levels.long_run >= 1 else 'alternate'}: largest root"
            f" {levels.root:.3g} in size, variance {levels.gain:.4g} times that of"
            " the innovations",
            80,
        )
    there = [str(order) for order, exists in zip(ORDERS, facts.exists, strict=True) if exists]
    lack = [str(order) for order, exists in zip(ORDERS, facts.exists, strict=True) if not exists]
    words = f"{listed(there)} exist" if there else "none of 1 to 4 exists"
    if lack and there:
        words = f"{listed(there)} exist{'s' if len(there) == 1 else ''}; {listed(lack)} missing"
    lines += labelled("Moments", words, 80)
    kurtosis = facts.excess_kurtosis
    shown = f"{kurtosis:.4g}" if math.isfinite(kurtosis) else "missing"
    alone = law.volatility is None and levels is None
    of = "" if alone else " (of the innovations)"
    lines += labelled("Kurtosis", f"excess {shown}{of}", 80)
    unit = "times the scale" if facts.in_scale else "sd"
    ends = ", ".join(
        f"{100 * p:g} % at {value:.2f}" for p, value in zip(TAILS, facts.quantiles, strict=True)
    )
    lines += labelled("Quantiles", f"{ends} {unit}{of}", 80)
    return "\n".join(lines) + "\n"


def _index(facts: LawFacts) -> str:
    """The tail index in words, and where it comes from under volatility."""
    finite = math.isfinite(facts.tail_index)
    words = f"{facts.tail_index:.3f}" if finite else f"none: {ALL_EXIST}"
    if facts.law.volatility is None:
        return words
    own = (
        f"{facts.innovation_index:.3g}"
        if math.isfinite(facts.innovation_index)
        else "without a finite index"
    )
    return (
        f"{words}, by the Kesten equation for volatility of persistence"
        f" {facts.law.volatility.persistence:.3g} and innovations"
        f" {'of index ' if math.isfinite(facts.innovation_index) else ''}{own}"
    )


def facts_json(facts: LawFacts) -> str:
    """What a stated law implies, as JSON."""
    law, path = facts.law, facts.law.volatility
    missing = "the fourth moment is missing"
    volatility: dict[str, Any] = {"volatility": None, "volatility_note": "constant"}
    if path is not None:
        volatility = {
            "volatility": {
                "kind": path.kind,
                "persistence": number(path.persistence),
                **noted("tail_index", facts.tail_index, "no finite index implied"),
            }
        }
    return _text(
        {
            "schema": SCHEMA,
            "law": facts.written,
            "family": law.family,
            "parameters": {key: number(value) for key, value in law.parameters.items()},
            **volatility,
            **_levels(law),
            **noted("sd", facts.sd, "the variance is missing"),
            **noted("tail_index", facts.tail_index, ALL_EXIST),
            **noted("innovation_tail_index", facts.innovation_index, ALL_EXIST),
            "moments": {
                str(order): "exists" if exists else "missing"
                for order, exists in zip(ORDERS, facts.exists, strict=True)
            },
            **noted("excess_kurtosis", facts.excess_kurtosis, missing),
            "quantiles": [
                {"probability": p, "value": number(value)}
                for p, value in zip(TAILS, facts.quantiles, strict=True)
            ],
            "quantile_unit": "scale" if facts.in_scale else "sd",
        }
    )


def _levels(law: ErrorLaw) -> dict[str, Any]:
    """The autoregression that was stated, if one was."""
    if law.autoregression is None:
        return {"autoregression": None, "autoregression_note": "levels do not persist"}
    from scantling.report.document import autoregression_part

    return autoregression_part(law)


def _text(document: dict[str, Any]) -> str:
    return json.dumps(document, indent=2, ensure_ascii=False, allow_nan=False) + "\n"
