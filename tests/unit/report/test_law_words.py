"""The law in sentences: the runner-up, how sure, volatility."""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from scantling.law.catalogue import FAMILIES
from scantling.law.families import Fit, student_law
from scantling.law.fit import fit_law
from scantling.law.notation import parse_law
from scantling.report.law_words import NAMES, law_sentences

FIT = Fit(distance=0.41, p_value=0.62, runner_up="skewed-t", margin=9.0, margin_error=3.0)


def test_every_family_has_a_name() -> None:
    assert tuple(sorted(NAMES)) == tuple(sorted(FAMILIES))


def test_how_sure_is_said() -> None:
    law = replace(student_law(4, scale=0.5), fit=FIT)
    said = law_sentences(law)
    assert said[0] == "The law is Student t with scale 0.5, df 4; tail index 4.0."
    assert said[1].startswith("It beats the next, skewed Student t, clearly: by 9.0 units")
    assert said[2].endswith("p = 0.620 by parametric bootstrap: the law is not rejected.")
    close = law_sentences(replace(law, fit=replace(FIT, margin=1.0)))[1]
    assert close.startswith("The sample hardly tells it from the next, skewed Student t")
    behind = law_sentences(replace(law, fit=replace(FIT, margin=-1.5)))[1]
    assert "does better by 1.5 units" in behind
    assert behind.endswith("too little to give up Student t.")


def test_a_stated_law_claims_no_fit() -> None:
    said = law_sentences(parse_law("normal:alpha=0.1,beta=0.8,leverage=0.05"))
    assert said == [
        "The law is normal with scale 1; every moment exists.",
        "It is of the innovations, on a stated GJR(1,1) volatility path: alpha 0.100, beta"
        " 0.800, leverage 0.050.",
    ]


def test_a_splice_names_what_was_rejected() -> None:
    found = fit_law(np.random.default_rng(3).exponential(size=600))
    said = " ".join(law_sentences(found))
    assert "is rejected (p = 0.005), so tails are spliced" in said
    assert "Next is" not in said
