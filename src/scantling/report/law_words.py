"""The error law in sentences: which it is, what came next, how sure that is."""

from __future__ import annotations

import math

from scantling.law.families import ErrorLaw, Fit
from scantling.report.wording import index, p_value

NAMES = {
    "normal": "normal", "laplace": "Laplace", "ged": "generalised error",
    "student-t": "Student t", "skewed-t": "skewed Student t", "stable": "stable",
    "spliced": "spliced (the sample's own body, Pareto tails)",
}  # fmt: skip
SURE = 1.645
"""Standard errors from which on the law is called clearly better than the next."""
CLEAR = 2.0
"""Units of log-likelihood a clear lead has besides: nested laws differ little and steadily."""
REJECTED = 0.05


def law_sentences(law: ErrorLaw) -> list[str]:
    """What the section on the law says, a sentence or two a paragraph."""
    named = ", ".join(f"{name} {value:.4g}" for name, value in law.innovation.parameters.items())
    own = law.innovation.tail_index
    tail = "every moment exists" if not math.isfinite(own) else f"tail index {index(own)}"
    said = [f"The law is {NAMES[law.family]} with {named}; {tail}."]
    path = law.volatility
    if path is not None:
        recurrence = f"alpha {path.alpha:.3f}, beta {path.beta:.3f}"
        if path.leverage:
            recurrence += f", leverage {path.leverage:.3f}"
        said.append(
            "It is of the innovations, on"
            f" {'the fitted' if path.path.size > 1 else 'a stated'}"
            f" {path.kind.upper()}(1,1) volatility path: {recurrence}."
        )
    if law.autoregression is not None:
        lags = ", ".join(f"{value:.3f}" for value in law.autoregression.coefficients)
        said.append(
            "It is of the shocks: the errors are an autoregression of them, with coefficients"
            f" {lags}, and vary {law.autoregression.gain:.2f} times as much."
        )
    if law.fit.note:
        said.append(f"{law.fit.note[0].upper()}{law.fit.note[1:]}.")
    said += [*_next_in_line(law.family, law.fit), *_goodness(law.fit)]
    return said


def _next_in_line(family: str, fit: Fit) -> list[str]:
    """The runner-up, and whether the sample tells it apart."""
    if not fit.runner_up or fit.margin is None or fit.margin_error is None:
        return []
    other, size = NAMES[fit.runner_up], abs(fit.margin)
    measured = f"{size:.1f} units of log-likelihood out of sample (standard error"
    measured += f" {fit.margin_error:.1f})"
    if fit.margin < 0:
        return [
            f"Next is {other}, which does better by {measured}, too little to give up"
            f" {NAMES[family]}."
        ]
    if size > max(CLEAR, SURE * fit.margin_error):
        return [f"It beats the next, {other}, clearly: by {measured}."]
    return [f"The sample hardly tells it from the next, {other}: it leads by {measured}."]


def _goodness(fit: Fit) -> list[str]:
    """The test of fit."""
    if fit.p_value is None:
        return []
    verdict = "rejected" if fit.p_value <= REJECTED else "not rejected"
    return [
        f"Anderson-Darling distance {fit.distance:.2f}, {p_value(fit.p_value)} by parametric"
        f" bootstrap: the law is {verdict}."
    ]
