"""Which families move when a level does: the prior of the search, and what the data make of it.

Families of one kind (one statistic of one parameter, over all characteristics) mostly move
together: a track that coats thicker does so on every layer. So a kind moves with probability rho,
about one and a half kinds an effect, means twice as often as other statistics; and when it moves
each of its families does with probability q (the only one surely):

    log score = sum over kinds log(1 - rho + rho prod over families (1 - q + q BF_f)).

The score keeps the expectation at most 1 of its exponential when nothing happened.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from spc.stats.attribution_evidence import Evidence, FloatArray, IntArray, statistic_class

_KINDS = 1.5
_TOGETHER = 0.6


@dataclass(frozen=True)
class Inclusion:
    """The prior for some groups (levels) of (level, family) entries, in order.

    Entry arrays (P,): `family_in` log q, `family_out` log(1 - q) (-inf for q = 1), `kind` position
    of its kind. Kind arrays (K,): `kind_start` first entry, `kind_in` log rho, `kind_out`
    log(1 - rho). `group_start` (L,) first kind of each group.
    """

    family_in: FloatArray
    family_out: FloatArray
    kind: IntArray
    kind_start: IntArray
    kind_in: FloatArray
    kind_out: FloatArray
    group_start: IntArray

    @classmethod
    def of(cls, evidence: Evidence, family: IntArray, start: IntArray) -> Inclusion:
        """Return the prior of entries with these families (P,), groups from `start` (L,) on; the
        families of a group are in order."""
        kinds = evidence.family_kind()[family]
        kind, kind_start, group_start = _kinds(kinds, start)
        size = np.diff(np.append(kind_start, len(family)))
        q = np.where(size > 1, _TOGETHER, 1.0)[kind]
        names = evidence.family_statistic()
        weight = np.array([1.0 if statistic_class(n) == "mean" else 0.5 for n in names])
        weight = weight[family[kind_start]]
        total = np.add.reduceat(weight, group_start)
        number = np.diff(np.append(group_start, len(kind_start)))
        rho = np.minimum(0.5, _KINDS * weight / np.repeat(total, number))
        return cls(
            _log(q), _log(1.0 - q), kind, kind_start, _log(rho), _log(1.0 - rho), group_start
        )

    def entries(self, chosen: IntArray, start: IntArray) -> Inclusion:
        """Return the same prior for groups of some entries only: `chosen` (E,) are positions of
        entries, in order within each of the groups that begin at `start`."""
        kind, kind_start, group_start = _kinds(self.kind[chosen], start)
        owner = self.kind[chosen[kind_start]] if len(kind_start) else self.kind[:0]
        return Inclusion(
            self.family_in[chosen], self.family_out[chosen], kind, kind_start,
            self.kind_in[owner], self.kind_out[owner], group_start,
        )  # fmt: skip

    def score(self, log_bayes: FloatArray) -> FloatArray:
        """Return the log score of each group from the log Bayes factors (P, ...), (L, ...)."""
        shape = (-1,) + (1,) * (log_bayes.ndim - 1)
        kinds = self._of_kinds(log_bayes, shape)
        mixed = np.logaddexp(self.kind_out.reshape(shape), self.kind_in.reshape(shape) + kinds)
        out: FloatArray = np.add.reduceat(mixed, self.group_start, axis=0)
        return out

    def probability(self, log_bayes: FloatArray) -> FloatArray:
        """Return the posterior probability that each entry's family moved, (P,)."""
        kinds = self._of_kinds(log_bayes, (-1,))
        of_kind = _logistic(self.kind_in - self.kind_out + kinds)
        with np.errstate(invalid="ignore"):
            of_family = _logistic(self.family_in - self.family_out + log_bayes)
        return of_kind[self.kind] * of_family

    def _of_kinds(self, log_bayes: FloatArray, shape: tuple[int, ...]) -> FloatArray:
        alone = np.logaddexp(
            self.family_out.reshape(shape), self.family_in.reshape(shape) + log_bayes
        )
        out: FloatArray = np.add.reduceat(alone, self.kind_start, axis=0)
        return out


def _kinds(kinds: IntArray, start: IntArray) -> tuple[IntArray, IntArray, IntArray]:
    """Return the running number of the kind of each entry, the first entry of each, and the first
    kind of each group."""
    if not len(kinds):
        empty = np.zeros(0, dtype=np.int64)
        return empty, empty, empty
    fresh = np.r_[True, kinds[1:] != kinds[:-1]]
    fresh[start] = True
    kind = np.cumsum(fresh) - 1
    return kind, np.flatnonzero(fresh), kind[start]


def _log(values: FloatArray) -> FloatArray:
    with np.errstate(divide="ignore"):
        out: FloatArray = np.log(values)
    return out


def _logistic(odds: FloatArray) -> FloatArray:
    out: FloatArray = 1.0 / (1.0 + np.exp(-np.clip(odds, -50.0, 50.0)))
    return out
