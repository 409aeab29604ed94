"""Greedy forward choice with joint refits: from one explanation to all of them.

The best explanation is accepted while chance would not score as high, explained away, and the next
is looked for in what is left. A new effect must rest on something new (options.since); once it is
found, all that is known counts for its level, onset and form. After each acceptance all effects are
refitted in turn on what the others leave (backfitting), so an early, greedy choice can still change
its onset, its form and its level; effects that one cause explains at least as well as all of them
are made one.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace

import numpy as np

from spc.stats.attribution_calibration import Calibration, calibrate
from spc.stats.attribution_candidates import Candidate, Column, conjunction_within
from spc.stats.attribution_effects import Effect
from spc.stats.attribution_evidence import FloatArray, statistic_class
from spc.stats.attribution_state import Found, State, common_part

_HOPELESS = -5.0
_BORNE_OUT = 3.0
_PASSES = 2
_MERGE_SLACK = 1.0
_BETTER = 0.5
_CLEARLY_BETTER = 3.0


class Search:
    """One search over a prepared bay: holds the effects found so far."""

    def __init__(self, state: State) -> None:
        self.state = state
        self.found: list[Found] = []
        self._calibration: Calibration | None = None

    @property
    def calibration(self) -> Calibration:
        """The null of this design, drawn when first asked for."""
        if self._calibration is None:
            s = self.state
            plans = s.plans or s.all_plans
            self._calibration = calibrate(
                s.evidence, s.noise, s.columns, s.offsets, plans, s.options
            )
        return self._calibration

    def left(self, without: Sequence[Found] = ()) -> FloatArray:
        """Return the residuals after all effects found, except those in `without`."""
        out = self.state.residual.copy()
        for found in self.found:
            if all(found is not other for other in without):
                out[found.fit.cells] -= found.fit.explained
        return out

    def seed(self, previous: Sequence[Effect]) -> None:
        """Take up effects of an earlier look that the data still bear out."""
        for i, effect in enumerate(previous):
            candidate = self._locate(effect.level.factors, effect.level.names)
            if candidate is None:
                continue
            found = self._at(candidate, self.left(), previous=i)
            if found is not None and found.profile.gain > _BORNE_OUT:
                self.found.append(found)
        self.refit()

    def run(self) -> list[Found]:
        """Find effects until chance could do as well; returns them, strongest first."""
        alpha = self.state.options.alpha
        spent = np.zeros(len(self.state.residual), dtype=bool)
        for _ in range(self.state.options.max_effects):
            left = np.where(spent, 0.0, self.left())
            best = self.state.best(left, fresh=True)
            if best is None:
                break
            strength = self.state.strength(best.candidate, left, fresh=True)
            if strength < _HOPELESS or self.calibration.p_value(strength) > alpha:
                break
            before = list(self.found)
            if not any(_twins(best, f) for f in before):
                self.found.append(replace(best, strength=strength))
                self.refit()
            if len(self.found) == len(before) or not all(self._sane(f) for f in self.found):
                # What the effects at hand cannot take up there is no effect of its own.
                self.found = before
                spent[best.fit.cells] = True
        self.settle()
        return sorted(self.found, key=lambda f: -f.profile.gain)

    def refit(self, passes: int = 1) -> None:
        """Refit all effects in turn, level kept, onset, form and sizes free."""
        for _ in range(passes if len(self.found) > 1 else 0):
            for i, found in enumerate(self.found):
                again = self._at(found.candidate, self.left([found]), found.previous)
                if again is not None:
                    self.found[i] = again

    def _sane(self, found: Found) -> bool:
        """Whether an effect is no larger than what was seen: refits of effects that share their
        cells must not run away from each other."""
        seen = np.abs(self.state.residual[found.fit.cells]).max()
        return bool(np.abs(found.fit.amplitude[found.fit.main()]) <= 2.0 * seen)

    def settle(self) -> None:
        """Let each effect change its level, make one of what one cause explains, drop the rest."""
        for i in range(len(self.found)):
            if self._matters(self.found[i]):
                self._relevel(i)
        self.refit(_PASSES)
        self._merge()
        self._absorb()
        for i, found in enumerate(self.found):
            left = self.left([found])
            strength = self.state.strength(found.candidate, left, fresh=False)
            self.found[i] = replace(found, strength=strength)
        self.found = [f for f in self.found if not f.fresh or self._counts(f)]

    def _counts(self, found: Found) -> bool:
        """Whether a new effect is beyond chance and large enough to matter."""
        p_value = self.calibration.p_value(found.strength)
        return self._matters(found) and p_value <= self.state.options.alpha

    def _matters(self, found: Found) -> bool:
        """Whether an effect is large enough in some family, in sigmas of a plotted point."""
        options, fit = self.state.options, found.fit
        sigmas = np.abs(fit.amplitude) / self.state.noise.sigma[fit.families]
        likely = fit.probability > 0.5
        likely[fit.main()] = True
        return bool(sigmas[likely].max() >= options.min_sigmas)

    def _at(
        self, candidate: Candidate, residual: FloatArray, previous: int | None = None
    ) -> Found | None:
        y = self.state.whitened(residual)
        profile = self.state.look(candidate, y, fresh=False)
        if profile is None or not np.isfinite(profile.score):
            return None
        fit = self.state.fit(candidate, profile.shape, residual, y)
        return Found(candidate, profile, fit, previous=previous) if fit is not None else None

    def _relevel(self, i: int) -> None:
        found = self.found[i]
        best = self.state.best(self.left([found]), False, self._mask([found]))
        if best is None or best.candidate.key == found.candidate.key:
            return
        # A cause once named is only given up for one that is clearly better.
        needed = _BETTER if found.fresh else _CLEARLY_BETTER
        if best.score > found.score + needed and common_part(best, found) > 0.3:
            self.found[i] = replace(best, previous=found.previous)

    def _mask(self, effects: Sequence[Found]) -> np.ndarray:
        mask = np.zeros(len(self.state.residual), dtype=bool)
        for found in effects:
            mask[found.fit.cells] = True
        return mask

    def _merge(self) -> None:
        """Replace effects of overlapping onsets by one that explains them at least as well."""
        for found in list(self.found):
            if all(found is not f for f in self.found):
                continue
            group = [f for f in self.found if _onsets_meet(f, found) and self._matters(f)]
            if len(group) < 2:
                continue
            best = self.state.best(self.left(group), False, self._mask(group))
            if best is None or best.score < sum(self._in_turn(group)) - _MERGE_SLACK:
                continue
            if any(common_part(f, best) == 0.0 for f in group):
                continue
            earlier = [f.previous for f in group if f.previous is not None]
            keep = [f for f in self.found if all(f is not g for g in group)]
            self.found = [*keep, replace(best, previous=min(earlier, default=None))]
            self.refit()

    def _in_turn(self, group: Sequence[Found]) -> list[float]:
        """Scores of effects taken one after the other, the strongest first, each on what those
        before it leave. They add up to what the group explains (chain rule), which scores that
        take all the others for granted do not: where lots share their noise, each of several
        streams that moved together stands out only once the others are explained away."""
        residual, rest, scores = self.left(group), list(group), []
        while rest:
            looks = [self._at(f.candidate, residual) for f in rest]
            score = [-np.inf if look is None else look.score for look in looks]
            best = int(np.argmax(score))
            scores.append(score[best])
            look = looks[best]
            if look is not None:
                residual[look.fit.cells] -= look.fit.explained
            del rest[best]
        return scores

    def _absorb(self) -> None:
        """Count consequences into their cause: a statistic over wafers of mixed context (the
        cause's level is unknown there) that moves on the same lots from the same time on."""
        order = sorted(self.found, key=lambda f: -f.profile.gain)
        kept: list[Found] = []
        for found in order:
            host = next((k for k in kept if self._is_consequence(found, k)), None)
            if host is None:
                kept.append(found)
                continue
            i = next(j for j, k in enumerate(kept) if k is host)
            kept[i] = replace(host, absorbed=(*host.absorbed, found.candidate))
        self.found = kept

    def _is_consequence(self, found: Found, cause: Found) -> bool:
        evidence = self.state.evidence
        families = found.fit.families[found.fit.probability > 0.5]
        names = evidence.family_statistic()
        if any(statistic_class(names[f]) == "mean" for f in families.tolist()):
            return False
        cells = found.fit.cells[np.isin(evidence.cell_family[found.fit.cells], families)]
        if not len(cells) or np.mean(cause.candidate.column.codes[cells] < 0) < 0.7:
            return False
        lots = np.unique(evidence.lot[cells])
        shared = np.isin(lots, evidence.lot[cause.fit.cells]).mean()
        return bool(shared >= 0.6 and _onsets_meet(found, cause))

    def _locate(self, factors: tuple[str, ...], names: tuple[str, ...]) -> Candidate | None:
        """Find a level by name among the columns, or build the conjunction it names."""
        for column in self.state.columns:
            if column.factors == factors and names in column.names:
                return self.state.candidate(column, column.names.index(names))
        if len(factors) != 2:
            return None
        parent = self._column((factors[0],))
        other = self._column((factors[1],))
        if parent is None or other is None:
            return None
        if names[:1] not in parent.names or names[1:] not in other.names:
            return None
        level = parent.names.index(names[:1])
        column = conjunction_within(self.state.evidence, parent, level, other)
        base = self.state.candidate(parent, level)
        prior = base.log_prior - float(np.log(10.0 * len(other.names)))
        return Candidate(column, column.names.index(names), prior, base.unknown, -np.inf)

    def _column(self, factors: tuple[str, ...]) -> Column | None:
        return next((c for c in self.state.columns if c.factors == factors), None)


def _twins(new: Found, old: Found) -> bool:
    """Whether two effects are the same level at the same time."""
    return new.candidate.key == old.candidate.key and common_part(new, old) > 0.5


def _onsets_meet(a: Found, b: Found) -> bool:
    """Whether the confidence sets of the two onsets, a day's grace apart, meet."""
    grace = 43200.0
    return (
        a.profile.onset[1] - grace <= b.profile.onset[2] + grace
        and b.profile.onset[1] - grace <= a.profile.onset[2] + grace
    )
