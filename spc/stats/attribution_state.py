"""The bay made ready for the search: noise, columns, usual offsets and scan plans together."""

from __future__ import annotations

from dataclasses import dataclass, field, replace
from functools import cached_property
from hashlib import blake2b
from typing import Any

import numpy as np
from numpy.typing import NDArray

from spc.stats.attribution_candidates import (
    WHOLE,
    Candidate,
    Column,
    Offsets,
    build_columns,
    conjunction_within,
    is_machine,
    usual_offsets,
)
from spc.stats.attribution_estimates import estimate_noise
from spc.stats.attribution_evidence import (
    AttributionOptions,
    BoolArray,
    Evidence,
    FloatArray,
    IntArray,
    sums,
)
from spc.stats.attribution_fit import Fit, Residuals, fit_effect, pattern_of
from spc.stats.attribution_noise import Noise
from spc.stats.attribution_profile import Profile, Shape, profile_level
from spc.stats.attribution_search import Plan, make_plan, scan, series_scores

ALIAS = 0.97
_KEEP = 8
_FEW = 3
_CLOSE = 5.0
_TIE = 2.0
_REFINE = 2
_REFINED_BINS = 32
_UNEVEN = 6.0
_CONJUNCTION_PRIOR = 0.1


@dataclass(frozen=True)
class Found:
    """A candidate with its close look, its fitted sizes and its coarse score (`strength`)."""

    candidate: Candidate
    profile: Profile
    fit: Fit
    strength: float = -np.inf
    previous: int | None = None
    absorbed: tuple[Candidate, ...] = ()

    @property
    def score(self) -> float:
        """Log score of the close look, priors included."""
        return self.profile.score

    @property
    def fresh(self) -> bool:
        """Whether the effect is new in this look."""
        return self.previous is None


@dataclass(frozen=True)
class State:
    """Everything that does not change during a search. `residual` (n,) has the usual offsets of
    levels taken out; `plans` cover what is new (options.since); `memory` keeps what was looked at
    before, by the content of the residuals."""

    evidence: Evidence
    options: AttributionOptions
    noise: Noise
    columns: tuple[Column, ...]
    offsets: Offsets
    residual: FloatArray
    plans: tuple[Plan, ...]
    memory: dict[Any, Any] = field(default_factory=dict, compare=False)

    @classmethod
    def of(cls, evidence: Evidence, options: AttributionOptions) -> State:
        """Prepare the search; the noise is estimated twice, before and after the offsets."""
        columns = build_columns(evidence, options)
        rough = estimate_noise(evidence, evidence.residual)
        offsets = usual_offsets(evidence, rough, columns)
        residual = evidence.residual - offsets.total
        noise = estimate_noise(evidence, residual)
        plans = _plans(evidence, noise, columns, offsets, options)
        return cls(evidence, options, noise, columns, offsets, residual, plans)

    @cached_property
    def all_plans(self) -> tuple[Plan, ...]:
        """Plans over everything, new or not: made when something was found."""
        if self.options.since is None:
            return self.plans
        options = replace(self.options, since=None)
        return _plans(self.evidence, self.noise, self.columns, self.offsets, options)

    @cached_property
    def _active(self) -> list[int]:
        """How many levels of each column are in use, at least 1."""
        on = self.evidence.monitoring
        return [max(int((np.bincount(c.codes[on] + 1)[1:] > 0).sum()), 1) for c in self.columns]

    def whitened(self, residual: FloatArray) -> FloatArray:
        """Return whitened residuals, wild values brought in."""
        return self.noise.whiten(self.noise.clip(residual))

    def candidates(
        self, residual: FloatArray, fresh: bool, touching: BoolArray | None = None
    ) -> list[Candidate]:
        """Scan all columns and return the best levels, best first.

        `fresh`: only windows that hold something new (options.since). `touching` (n,) keeps only
        levels that share monitored cells with the mask.
        """
        key = ("scan", digest(residual), fresh, None if touching is None else digest(touching))
        if key in self.memory:
            return list(self.memory[key])
        y = self.whitened(residual)
        whole = series_scores(self.evidence, y)
        out: list[Candidate] = []
        for plan in self.plans if fresh else self.all_plans:
            best = scan(plan, y, whole)
            allowed = np.isfinite(best.score)
            if touching is not None:
                near = np.zeros(len(plan.column.names), dtype=bool)
                codes = plan.column.codes[touching]
                near[codes[codes >= 0]] = True
                allowed &= near[plan.active]
            for i in np.flatnonzero(allowed)[np.argsort(-best.score[allowed])][:_KEEP].tolist():
                out.append(self.candidate(plan.column, int(plan.active[i]), float(best.score[i])))
        out.sort(key=lambda c: -c.score)
        self.memory[key] = list(out)
        return out

    def strength(self, candidate: Candidate, residual: FloatArray, fresh: bool) -> float:
        """Return the coarse score of one level, the statistic that the null calibrates."""
        y = self.whitened(residual)
        whole = series_scores(self.evidence, y)
        plans = self.plans if fresh else self.all_plans
        plan = next((p for p in plans if p.column is candidate.column), None)
        if plan is None:
            prior = candidate.log_prior
            unknown = np.tile(candidate.unknown, (len(candidate.column.names), 1))
            options = self.options if fresh else replace(self.options, since=None)
            codes = np.where(candidate.column.cells(candidate.level), candidate.level, -1)
            column = replace(candidate.column, codes=codes)
            plan = make_plan(self.evidence, self.noise, column, unknown, options, prior)
            if plan is None:
                return -np.inf
        at = np.flatnonzero(plan.active == candidate.level)
        return float(scan(plan, y, whole).score[at[0]]) if len(at) else -np.inf

    def candidate(self, column: Column, level: int, score: float = -np.inf) -> Candidate:
        """Return a level of one of the bay's columns as a candidate."""
        index = next(i for i, c in enumerate(self.columns) if c is column)
        prior = column_prior(self.columns, column) - float(np.log(self._active[index]))
        return Candidate(column, level, prior, self.offsets.variance[index][level], score)

    def look(self, candidate: Candidate, y: FloatArray, fresh: bool) -> Profile | None:
        """Look closely at a candidate."""
        key = ("look", candidate.key, digest(y), fresh)
        if key not in self.memory:
            options = self.options if fresh else replace(self.options, since=None)
            self.memory[key] = profile_level(self.evidence, self.noise, candidate, y, options)
        found: Profile | None = self.memory[key]
        return found

    def fit(
        self, candidate: Candidate, shape: Shape, residual: FloatArray, y: FloatArray
    ) -> Fit | None:
        """Estimate the sizes of a candidate in a window; `y` are the whitened residuals."""
        data = Residuals(residual, y)
        return fit_effect(self.evidence, self.noise, candidate, shape, data, self.options)

    def best(
        self, residual: FloatArray, fresh: bool, touching: BoolArray | None = None
    ) -> Found | None:
        """Return the best explanation of the residuals, conjunctions below the best levels
        included; see `candidates`. None if there is nothing to look at."""
        rough = self.candidates(residual, fresh, touching)
        if not rough:
            return None
        # The coarse score may be off by a good part where its windows fit badly.
        near = max(_CLOSE, 0.5 * rough[0].score)
        rough = [c for c in rough if c.score > rough[0].score - near][:_KEEP]
        y = self.whitened(residual)
        rough += self._conjunctions(rough[:_REFINE], y, fresh)
        looked = [(c, p) for c in rough if (p := self.look(c, y, fresh)) is not None]
        found = [
            Found(c, p, fit)
            for c, p in looked
            if p.score >= max(q.score for _, q in looked) - _TIE
            and (fit := self.fit(c, p.shape, residual, y)) is not None
        ]
        if not found:
            return None
        best = self._preferred(found)
        if best.candidate.column.factors == (WHOLE,):
            return self._instead(best, self.columns, y, residual)
        if best.profile.shape.lot >= 0 or self._few(best):
            # A lot or two have one level of everything, and what spans many lots was good on the
            # others: the machine comes first, then the caller's order.
            ranked = sorted(self.columns, key=lambda c: not is_machine(c.factors))
            at = next((i for i, c in enumerate(ranked) if c is best.candidate.column), len(ranked))
            return self._instead(best, tuple(ranked[:at]), y, residual)
        return best

    def _few(self, found: Found) -> bool:
        """Whether an effect that is over was seen on no more than a few lots."""
        over = np.isfinite(found.profile.shape.end)
        return bool(over and np.unique(self.evidence.lot[found.fit.cells]).size <= _FEW)

    def _instead(
        self, found: Found, columns: tuple[Column, ...], y: FloatArray, residual: FloatArray
    ) -> Found:
        """Return the first of some columns whose level holds the same cells as the effect found,
        if there is one: a batch that is everywhere is to blame before everything is."""
        families = found.fit.telling()
        mine = found.fit.cells[np.isin(self.evidence.cell_family[found.fit.cells], families)]
        near = np.isin(self.evidence.cell_family, families)
        for column in columns:
            codes = column.codes[mine]
            known = codes[codes >= 0]
            if column.factors == (WHOLE,) or column.twin_of >= 0 or not len(known):
                continue
            candidate = self.candidate(column, int(np.bincount(known).argmax()))
            same_time = replace(column, time=found.candidate.column.time)
            pattern = pattern_of(same_time, candidate.level, found.profile.shape, self.evidence)
            if jaccard(mine, np.flatnonzero(near & (pattern != 0.0))) < ALIAS:
                continue
            if found.profile.shape.lot >= 0:
                fit = self.fit(candidate, found.profile.shape, residual, y)
                if fit is not None:
                    return Found(candidate, found.profile, fit)
                continue
            profile = self.look(candidate, y, False)
            fit = None if profile is None else self.fit(candidate, profile.shape, residual, y)
            if profile is not None and fit is not None:
                other = Found(candidate, profile, fit)
                if self.same_cells(found, other):
                    return other
        return found

    def _preferred(self, found: list[Found]) -> Found:
        """The best score wins; of levels that are one thing under two names the earlier column.

        What is still on is preferred to what would have to have ended by itself meanwhile.
        """
        best = max(found, key=lambda f: f.score)
        if np.isfinite(best.profile.shape.end):
            lasting = [f for f in found if not np.isfinite(f.profile.shape.end)]
            lasting = [f for f in lasting if common_part(best, f) > 0.5]
            best = max(lasting, key=lambda f: f.score, default=best)
        twins = [
            f
            for f in found
            if f is best or (self.same_cells(best, f) and self._same_thing(best, f))
        ]
        return min(twins, key=lambda f: (self._rank(f.candidate.column), -f.score))

    def _same_thing(self, a: Found, b: Found) -> bool:
        """Whether two levels hold the same cells of the moved families all through, before the
        effect too: nothing can tell the only reticle of a product from its recipe."""
        moved = a.fit.telling()
        use = np.isin(self.evidence.cell_family, moved)
        one, two = a.candidate, b.candidate
        if split_alike(one.column.codes[use], two.column.codes[use]):
            return True
        cells = [np.flatnonzero(use & c.column.cells(c.level)) for c in (one, two)]
        return jaccard(*cells) >= ALIAS

    def _rank(self, column: Column) -> int:
        return next((i for i, c in enumerate(self.columns) if c is column), len(self.columns))

    def same_cells(self, a: Found, b: Found) -> bool:
        """Whether two effects lie on the same cells of the families that `a` moved."""
        moved = a.fit.telling()
        mine, theirs = (
            f.fit.cells[np.isin(self.evidence.cell_family[f.fit.cells], moved)] for f in (a, b)
        )
        return jaccard(mine, theirs) >= ALIAS

    def _conjunctions(
        self, parents: list[Candidate], y: FloatArray, fresh: bool
    ) -> list[Candidate]:
        """Return conjunctions that score better than their single parent level. Only factors
        that split the parent's effect unevenly are tried."""
        out: list[Candidate] = []
        whole = series_scores(self.evidence, y)
        since = self.options.since if fresh else None
        options = replace(self.options, since=since, bins=min(self.options.bins, _REFINED_BINS))
        singles = [c for c in self.columns if len(c.factors) == 1 and c.twin_of < 0]
        for parent in parents:
            if len(parent.column.factors) != 1 or parent.column.factors == (WHOLE,):
                continue
            for other in self._uneven(parent, singles, y, fresh):
                column = conjunction_within(self.evidence, parent.column, parent.level, other)
                prior = parent.log_prior + np.log(_CONJUNCTION_PRIOR / max(len(singles) - 1, 1))
                unknown = np.tile(parent.unknown, (len(column.names), 1))
                plan = make_plan(self.evidence, self.noise, column, unknown, options, float(prior))
                if plan is None or len(plan.active) < 2:
                    continue
                scores = scan(plan, y, whole).score
                i = int(scores.argmax())
                if scores[i] > parent.score:
                    inner = float(prior - np.log(len(plan.active)))
                    level = int(plan.active[i])
                    out.append(Candidate(column, level, inner, parent.unknown, float(scores[i])))
        out.sort(key=lambda c: -c.score)
        return out[:_REFINE]

    def _uneven(
        self, parent: Candidate, singles: list[Column], y: FloatArray, fresh: bool
    ) -> list[Column]:
        """Return the factors whose levels share the parent's effect unevenly: the chi-square
        between their own estimates, in the family that tells most, is beyond its degrees of
        freedom by `_UNEVEN`."""
        profile = self.look(parent, y, fresh)
        if profile is None:
            return []
        x = pattern_of(parent.column, parent.level, profile.shape, self.evidence)
        cells = np.flatnonzero(x)
        if not len(cells):  # a ramp that begins with the last cell
            return []
        info, _ = self.noise.information(np.where(parent.column.cells(parent.level), 0, -1))
        s, i = y[cells] * x[cells], np.maximum(info[cells] * x[cells] ** 2, 1e-300)
        family = self.evidence.cell_family[cells]
        best = int((sums(family, s) ** 2 / np.maximum(sums(family, i), 1e-300)).argmax())
        mine = family == best
        out = []
        for other in singles:
            codes = other.codes[cells[mine]]
            known = codes >= 0
            if other.factors in (parent.column.factors, (WHOLE,)) or not known.any():
                continue
            own = sums(codes[known], s[mine][known]), sums(codes[known], i[mine][known])
            there = own[1] > 0
            q = float((own[0][there] ** 2 / own[1][there]).sum() - own[0].sum() ** 2 / own[1].sum())
            if q > 2.0 * (there.sum() - 1) + _UNEVEN:
                out.append(other)
        return out


def column_prior(columns: tuple[Column, ...], column: Column) -> float:
    """Return the log prior of a searched column (twins are not searched).

    A whole characteristic is the last resort: a tenth of a factor's weight.
    """
    searched = sum(c.twin_of < 0 for c in columns)
    weight = 0.1 if column.factors == (WHOLE,) else 1.0
    return float(np.log(weight / max(searched, 1)))


def split_alike(a: IntArray, b: IntArray) -> bool:
    """Return whether two codings split the same cells in the same way (names apart)."""
    width = int(b.max(initial=-1)) + 2
    pairs = np.unique((a + 1) * width + b + 1)
    return len(np.unique(pairs // width)) == len(pairs) == len(np.unique(pairs % width))


def digest(values: NDArray[Any]) -> bytes:
    """Return a short fingerprint of an array's content."""
    return blake2b(values.tobytes(), digest_size=16).digest()


def jaccard(a: IntArray, b: IntArray) -> float:
    """Return the share of the cells of either set that is in both."""
    common = np.intersect1d(a, b, assume_unique=True).size
    return float(common / max(len(a) + len(b) - common, 1))


def common_part(a: Found, b: Found) -> float:
    """Share of the smaller effect's cells that the two have in common."""
    common = np.intersect1d(a.fit.cells, b.fit.cells, assume_unique=True).size
    return float(common / max(min(len(a.fit.cells), len(b.fit.cells)), 1))


def _plans(
    evidence: Evidence, noise: Noise, columns: tuple[Column, ...], offsets: Offsets,
    options: AttributionOptions,
) -> tuple[Plan, ...]:  # fmt: skip
    plans = [
        make_plan(evidence, noise, column, variance, options, column_prior(columns, column))
        for column, variance in zip(columns, offsets.variance, strict=True)
        if column.twin_of < 0
    ]
    return tuple(p for p in plans if p is not None)
