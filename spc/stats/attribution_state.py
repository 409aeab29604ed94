"""The bay made ready for the search: noise, columns, usual offsets and scan plans together."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from spc.stats.attribution_candidates import (
    WHOLE,
    Column,
    Offsets,
    build_columns,
    conjunction_within,
    usual_offsets,
)
from spc.stats.attribution_evidence import AttributionOptions, BoolArray, Evidence, FloatArray
from spc.stats.attribution_fit import Fit, fit_effect
from spc.stats.attribution_noise import Noise, estimate_noise
from spc.stats.attribution_profile import Profile, profile_level
from spc.stats.attribution_search import Plan, make_plan, scan

_KEEP = 8
_CLOSE = 7.0
_REFINE = 3
_CONJUNCTION_PRIOR = 0.1


@dataclass(frozen=True)
class Candidate:
    """A level to look at: its column, level code, log prior of the level, `unknown` (F,) offset
    variance and the score of the coarse scan."""

    column: Column
    level: int
    log_prior: float
    unknown: FloatArray
    score: float

    @property
    def key(self) -> tuple[tuple[str, ...], tuple[str, ...]]:
        """Factor names and level names."""
        return self.column.factors, self.column.names[self.level]


@dataclass(frozen=True)
class Found:
    """A candidate with its close look and its fitted sizes."""

    candidate: Candidate
    profile: Profile
    fit: Fit
    previous: int | None = None
    absorbed: tuple[Candidate, ...] = ()

    @property
    def score(self) -> float:
        """Log score of the close look, priors included."""
        return self.profile.score


@dataclass(frozen=True)
class State:
    """Everything that does not change during a search. `residual` (n,) has the usual offsets of
    levels taken out; `plans` cover what is new (options.since), `all_plans` everything."""

    evidence: Evidence
    options: AttributionOptions
    noise: Noise
    columns: tuple[Column, ...]
    offsets: Offsets
    residual: FloatArray
    plans: tuple[Plan, ...]
    all_plans: tuple[Plan, ...]

    @classmethod
    def of(cls, evidence: Evidence, options: AttributionOptions) -> State:
        """Prepare the search; the noise is estimated twice, before and after the offsets."""
        columns = build_columns(evidence, options)
        rough = estimate_noise(evidence, evidence.residual)
        offsets = usual_offsets(evidence, rough, columns)
        residual = evidence.residual - offsets.total
        noise = estimate_noise(evidence, residual)
        parts = (evidence, noise, columns, offsets)
        plans = _plans(*parts, options)
        everything = plans
        if options.since is not None:
            everything = _plans(*parts, replace(options, since=None))
        return cls(evidence, options, noise, columns, offsets, residual, plans, everything)

    def whitened(self, residual: FloatArray) -> FloatArray:
        """Return whitened residuals, wild values brought in."""
        return self.noise.whiten(self.noise.clip(residual))

    def candidates(
        self, residual: FloatArray, plans: tuple[Plan, ...], touching: BoolArray | None = None
    ) -> list[Candidate]:
        """Scan the plans and return the best levels, best first.

        `touching` (n,) keeps only levels that share monitored cells with the mask.
        """
        y = self.whitened(residual)
        out: list[Candidate] = []
        for plan in plans:
            best = scan(plan, y)
            allowed = np.isfinite(best.score)
            if touching is not None:
                near = np.zeros(len(plan.column.names), dtype=bool)
                codes = plan.column.codes[touching]
                near[codes[codes >= 0]] = True
                allowed &= near[plan.active]
            for i in np.flatnonzero(allowed)[np.argsort(-best.score[allowed])][:_KEEP].tolist():
                out.append(self.candidate(plan.column, int(plan.active[i]), float(best.score[i])))
        out.sort(key=lambda c: -c.score)
        return out

    def candidate(self, column: Column, level: int, score: float = -np.inf) -> Candidate:
        """Return a level of one of the bay's columns as a candidate."""
        plan = next((p for p in self.all_plans if p.column is column), None)
        active = len(plan.active) if plan is not None else len(column.names)
        index = next(i for i, c in enumerate(self.columns) if c is column)
        prior = column_prior(self.columns) - float(np.log(max(active, 1)))
        return Candidate(column, level, prior, self.offsets.variance[index][level], score)

    def look(self, candidate: Candidate, y: FloatArray) -> Profile | None:
        """Look closely at a candidate."""
        return profile_level(
            self.evidence, self.noise, candidate.column, candidate.level, y, candidate.unknown,
            self.options, candidate.log_prior,
        )  # fmt: skip

    def fit(self, candidate: Candidate, profile: Profile, residual: FloatArray) -> Fit | None:
        """Estimate the sizes of a candidate in its best window."""
        return fit_effect(
            self.evidence, self.noise, candidate.column, candidate.level, profile.shape, residual,
            candidate.unknown, self.options,
        )  # fmt: skip

    def best(
        self, residual: FloatArray, plans: tuple[Plan, ...], touching: BoolArray | None = None
    ) -> Found | None:
        """Return the best explanation of the residuals, conjunctions below the best levels
        included; the earlier column wins a tie. None if there is nothing to look at."""
        rough = self.candidates(residual, plans, touching)
        if not rough:
            return None
        rough = [c for c in rough if c.score > rough[0].score - _CLOSE][:_KEEP]
        y = self.whitened(residual)
        rough += self._conjunctions(rough[:_REFINE], y)
        best: tuple[Candidate, Profile] | None = None
        for candidate in rough:
            profile = self.look(candidate, y)
            if profile is None:
                continue
            if best is None or profile.score > best[1].score + 1e-9:
                best = candidate, profile
        if best is None:
            return None
        fit = self.fit(*best, residual)
        return Found(*best, fit) if fit is not None else None

    def _conjunctions(self, parents: list[Candidate], y: FloatArray) -> list[Candidate]:
        """Return conjunctions that score at least as well as their single parent level."""
        out: list[Candidate] = []
        singles = [c for c in self.columns if len(c.factors) == 1 and c.twin_of < 0]
        for parent in parents:
            if len(parent.column.factors) != 1 or parent.column.factors == (WHOLE,):
                continue
            for other in singles:
                if other.factors in (parent.column.factors, (WHOLE,)):
                    continue
                column = conjunction_within(self.evidence, parent.column, parent.level, other)
                prior = parent.log_prior + np.log(_CONJUNCTION_PRIOR / max(len(singles) - 1, 1))
                unknown = np.tile(parent.unknown, (len(column.names), 1))
                plan = make_plan(
                    self.evidence, self.noise, column, unknown, self.options, float(prior)
                )
                if plan is None or len(plan.active) < 2:
                    continue
                scores = scan(plan, y).score
                i = int(scores.argmax())
                if scores[i] > parent.score:
                    inner = float(prior - np.log(len(plan.active)))
                    out.append(
                        Candidate(
                            column, int(plan.active[i]), inner, parent.unknown, float(scores[i])
                        )
                    )
        out.sort(key=lambda c: -c.score)
        return out[:_REFINE]


def column_prior(columns: tuple[Column, ...]) -> float:
    """Return the log prior of one searched column (twins are not searched)."""
    return -float(np.log(max(sum(c.twin_of < 0 for c in columns), 1)))


def _plans(
    evidence: Evidence, noise: Noise, columns: tuple[Column, ...], offsets: Offsets,
    options: AttributionOptions,
) -> tuple[Plan, ...]:  # fmt: skip
    prior = column_prior(columns)
    plans = [
        make_plan(evidence, noise, column, variance, options, prior)
        for column, variance in zip(columns, offsets.variance, strict=True)
        if column.twin_of < 0
    ]
    return tuple(p for p in plans if p is not None)
