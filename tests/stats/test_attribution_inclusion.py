"""The prior of which families move, against the sum over every subset written out."""

from __future__ import annotations

from dataclasses import replace
from itertools import product

import numpy as np
import pytest

from spc.stats.attribution_inclusion import Inclusion
from tests.stats.test_attribution import small_evidence

# Families 0 and 1 are of one kind, 2 of its own, 3 to 5 of one kind.
KINDS = np.array([0, 0, 1, 2, 2, 2])


def evidence():  # type: ignore[no-untyped-def]
    m = len(KINDS)
    return replace(
        small_evidence(),
        family=np.arange(m),
        kind=KINDS,
        characteristic=np.arange(m),
        statistic=("mean", "mean", "within-wafer", "mean", "mean", "mean"),
        var_center=np.ones(m),
        phi=np.zeros(m),
    )


def by_hand(prior: Inclusion, log_bayes: np.ndarray) -> tuple[float, np.ndarray]:
    """Log of the sum over all subsets of families, and how often each is in."""
    rho, q = np.exp(prior.kind_in), np.exp(prior.family_in)
    total, inside = 0.0, np.zeros(len(log_bayes))
    for kinds in product((0, 1), repeat=len(rho)):
        for families in product((0, 1), repeat=len(q)):
            chosen = np.array(families)
            on = np.array(kinds)[prior.kind]
            if np.any(chosen > on):
                continue
            p = np.prod(np.where(kinds, rho, 1.0 - rho))
            p *= np.prod(np.where(on == 1, np.where(chosen, q, 1.0 - q), 1.0))
            p *= np.exp(np.sum(log_bayes * chosen))
            total += p
            inside += p * chosen
    return float(np.log(total)), inside / total


def test_the_score_and_the_probabilities_are_sums_over_subsets() -> None:
    log_bayes = np.array([1.5, 3.0, -0.7, 0.2, 4.0, -1.0])
    prior = Inclusion.of(evidence(), np.arange(6), np.array([0]))
    score, inside = by_hand(prior, log_bayes)
    assert prior.score(log_bayes) == pytest.approx([score], abs=1e-12)
    assert prior.probability(log_bayes) == pytest.approx(inside, abs=1e-12)


def test_groups_and_parts_of_them_are_scored_by_themselves() -> None:
    """Two levels: one with all families, one with the first, third and fifth."""
    of = evidence()
    family = np.array([0, 1, 2, 3, 4, 5, 0, 2, 4])
    log_bayes = np.array([1.5, 3.0, -0.7, 0.2, 4.0, -1.0, 2.0, 1.0, 0.5])
    both = Inclusion.of(of, family, np.array([0, 6]))
    parts = [Inclusion.of(of, family[a], np.array([0])) for a in (slice(0, 6), slice(6, 9))]
    alone = [parts[0].score(log_bayes[:6])[0], parts[1].score(log_bayes[6:])[0]]
    assert both.score(log_bayes) == pytest.approx(alone, abs=1e-12)
    table = np.stack([log_bayes, 2.0 * log_bayes], axis=1)
    assert both.score(table)[:, 0] == pytest.approx(alone, abs=1e-12)
    lots = both.entries(np.array([0, 1, 4, 7]), np.array([0, 3]))
    assert len(lots.score(log_bayes[[0, 1, 4, 7]])) == 2


def test_what_says_nothing_leaves_the_score_at_nothing() -> None:
    prior = Inclusion.of(evidence(), np.arange(6), np.array([0]))
    assert prior.score(np.zeros(6)) == pytest.approx([0.0], abs=1e-12)


def test_families_that_move_together_are_cheaper_than_two_of_different_kinds() -> None:
    prior = Inclusion.of(evidence(), np.arange(6), np.array([0]))
    together = prior.score(np.array([6.0, 6.0, 0, 0, 0, 0]))[0]
    apart = prior.score(np.array([6.0, 0, 0, 6.0, 0, 0]))[0]
    assert together > apart + 0.5
