"""Which family: likelihood on values left out, and the tails of it."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from scantling.core.record import FloatArray
from scantling.core.streams import stream
from scantling.law.catalogue import CATALOGUE
from scantling.law.families import Candidate
from scantling.law.innovation import Innovation

FOLDS = 5
TAIL_SHARE = 0.10
"""Share of the values, by size, that are the tails in the tail score."""
TIE_UNITS = 2.0
"""Bayes criteria of normal and Student t this close are a tie, and the t is taken."""
ERRORS_TO_BEAT = 1.645
"""Standard errors by which another family has to beat the reference: a one-sided 5 % test."""
STABLE_BELOW = 4.0
"""Degrees of freedom of the skewed t under which a stable law is tried: stable 1.7 gives about
3.3. The symmetric t takes skew for heavy tails."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Choice:
    """The family chosen and what it was chosen from."""

    family: str
    """Its name."""
    laws: dict[str, Innovation]
    """Every family tried, fitted to the whole sample."""
    candidates: tuple[Candidate, ...]
    """Scores, best first."""
    scores: dict[str, FloatArray]
    """Log-likelihood of each value out of sample, (n,), by family."""

    def margin(self, family: str) -> tuple[str, float, float]:
        """The best other family, the score of `family` less its, and the standard error."""
        other = next(c.family for c in self.candidates if c.family != family)
        gap = self.scores[family] - self.scores[other]
        return other, float(gap.sum()), _error(gap)


def choose(values: FloatArray, *, time_ordered: bool, seed: int) -> Choice:
    """Choose among the parametric families.

    The reference is the better of normal and Student t by the Bayes criterion, a tie going to
    the t, which has the heavier tail. Another family replaces it only if its likelihood on
    values left out is better by 1.645 standard errors of the difference, and its tails there are
    not worse by one; of several, the best, or a heavier one within one standard error of it. A
    fit at the edge of its family's range does not count, and a law without variance must also
    beat every law that has one by one standard error. So a flexible family does not win on
    noise, and a lighter tail has to be shown, as has a missing variance.

    Parameters
    ----------
    values : array, shape (n,)
        Centred innovations.
    time_ordered : bool
        Whether folds are blocks of neighbours; else they are drawn.
    seed : int

    Sources: Hall (1987), Annals of Statistics 15, 1491-1519, for the likelihood; Diks et al.
    (2011), Journal of Econometrics 163, 215-230, for the tails.
    """
    names = ["normal", "student-t", "laplace", "ged", "skewed-t"]
    laws = {name: CATALOGUE[name].fit(values) for name in names}
    if laws["skewed-t"].tail_index < STABLE_BELOW:
        names.append("stable")
        laws["stable"] = CATALOGUE["stable"].fit(values)
    edge = float(np.quantile(np.abs(values), 1 - TAIL_SHARE))
    left_out = _folds(values.size, time_ordered=time_ordered, seed=seed)
    scores = {name: np.empty(values.size) for name in names}
    tails = {name: np.empty(values.size) for name in names}
    for rows in left_out:
        train, test = np.delete(values, rows), values[rows]
        for name in names:
            law = laws[name].refits(train[None])[0]
            scores[name][rows] = law.log_density(test)
            tails[name][rows] = _tail_score(law, test, scores[name][rows], edge)
    candidates = [
        Candidate(family=name, score=float(scores[name].sum()), tail_score=float(tails[name].sum()))
        for name in names
    ]
    candidates.sort(key=lambda each: -each.score)
    reference = _reference(values, laws)
    return Choice(
        family=_challenged(reference, laws, scores, tails),
        laws=laws, candidates=tuple(candidates), scores=scores,
    )  # fmt: skip


def _reference(values: FloatArray, laws: dict[str, Innovation]) -> str:
    """Normal or Student t."""
    gain = 2 * float((laws["student-t"].log_density(values)).sum())
    gain -= 2 * float((laws["normal"].log_density(values)).sum())
    return "normal" if gain < math.log(values.size) - TIE_UNITS else "student-t"


def _challenged(
    reference: str, laws: dict[str, Innovation], scores: dict[str, FloatArray],
    tails: dict[str, FloatArray],
) -> str:  # fmt: skip
    """The reference, or the family that beats it."""

    def behind(name: str, first: str, errors: float) -> bool:
        gap = scores[first] - scores[name]
        return float(gap.sum()) > errors * _error(gap)

    winners = []
    for name in scores:
        tail_gain = tails[name] - tails[reference]
        shown = behind(reference, name, ERRORS_TO_BEAT) and tail_gain.sum() > -_error(tail_gain)
        shown = shown and not laws[name].at_edge
        lacks = not math.isfinite(laws[name].variance)
        milder = [n for n in scores if lacks and math.isfinite(laws[n].variance)]
        if shown and all(behind(n, name, 1.0) for n in milder):
            winners.append(name)
    if not winners:
        return reference
    best = max(winners, key=lambda name: float(scores[name].sum()))
    near = [name for name in winners if name == best or not behind(name, best, 1.0)]
    return max(near, key=lambda name: laws[name].heaviness)


def _error(gap: FloatArray) -> float:
    """Standard error of a sum."""
    return float(gap.std() * math.sqrt(gap.size))


def _folds(n: int, *, time_ordered: bool, seed: int) -> list[np.ndarray]:
    order = np.arange(n) if time_ordered else stream(seed, "folds of the law").permutation(n)
    return [np.sort(part) for part in np.array_split(order, FOLDS)]


def _tail_score(law: Innovation, test: FloatArray, logs: FloatArray, edge: float) -> FloatArray:
    """Censored likelihood: the density beyond +-edge, the probability of the middle inside."""
    middle = law.cdf(np.array([edge])) - law.cdf(np.array([-edge]))
    return np.where(np.abs(test) > edge, logs, np.log(np.clip(middle, 1e-300, 1.0)))
