"""From a found effect to a report: form, aliases, suspects, what was ruled out, experiments."""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from spc.stats.attribution_calibration import Calibration
from spc.stats.attribution_candidates import WHOLE, Column
from spc.stats.attribution_effects import Level, RuledOut, Separation, Suspect
from spc.stats.attribution_evidence import Evidence, FloatArray, statistic_class
from spc.stats.attribution_fit import Fit, fit_effect, pattern_of
from spc.stats.attribution_profile import Profile, Shape
from spc.stats.attribution_state import ALIAS, Candidate, Found, State, jaccard

_SUSPECTS = 6
_TOLERANCE = 1.5
_HALF = 0.5


def form_of(evidence: Evidence, found: Found) -> str:
    """Name the form of an effect: shift, drift, spike, spread or map.

    A mean (or overlay term) that clearly moved names it; else tilt and bowl, else whichever of
    within-wafer and map-distance tells more.
    """
    fit, shape = found.fit, found.profile.shape
    names = [evidence.family_statistic()[f] for f in fit.families.tolist()]
    moved = fit.probability > _HALF
    moved[fit.main()] = True
    gain = np.where(moved, fit.gain, 0.0)
    classes = np.array([statistic_class(n) for n in names])
    top = gain.max()
    if gain[classes == "mean"].max(initial=0.0) >= 0.15 * top:
        if shape.kind == "ramp":
            return "drift"
        return "spike" if _is_short(shape, fit) else "shift"
    signed = np.array([n in {"tilt-x", "tilt-y", "bowl"} for n in names])
    if gain[signed].max(initial=0.0) >= 0.25 * top:
        return "map"
    spread = gain[classes == "spread"].max(initial=0.0)
    return "spread" if spread >= 0.6 * gain[classes == "map"].max(initial=0.0) else "map"


def _is_short(shape: Shape, fit: Fit) -> bool:
    if shape.lot >= 0:
        return True
    return bool(np.isfinite(shape.end)) and float(np.median(fit.series_points)) <= 1.0


def level_of(candidate: Candidate) -> Level:
    """Return a candidate's level by name."""
    return Level(*candidate.key)


def suspects_of(
    state: State, found: Found, residual: FloatArray, calibration: Calibration
) -> tuple[tuple[Suspect, ...], tuple[RuledOut, ...], tuple[Separation, ...]]:
    """Return the ranked suspects of an effect, what was ruled out, and separating experiments.

    `residual` (n,) is what the other effects leave. The first suspect is the effect's own level
    with its aliases.
    """
    touching = np.zeros(len(residual), dtype=bool)
    touching[found.fit.cells] = True
    y = state.whitened(residual)
    rivals: list[tuple[Candidate, Profile]] = []
    for candidate in state.candidates(residual, False, touching)[: _SUSPECTS + 3]:
        if candidate.key == found.candidate.key:
            continue
        profile = state.look(candidate, y, False)
        if profile is not None:
            rivals.append((candidate, profile))
    rivals.sort(key=lambda pair: -pair[1].score)
    aliases = _exact_aliases(state, found)
    near = [
        level_of(c)
        for c, p in rivals
        if p.gain > found.profile.gain - _TOLERANCE and _common(state, found, c, p) > 0.6
    ]
    aliases += [level for level in near if level not in aliases]
    own = level_of(found.candidate)
    suspects = [
        _suspect(state, found, found.candidate, found.score, residual, calibration, aliases)
    ]
    suspects[0] = replace(suspects[0], p_adjusted=calibration.p_value(found.strength))
    for candidate, profile in rivals:
        if level_of(candidate) in aliases or len(suspects) > _SUSPECTS:
            continue
        suspects.append(_suspect(state, found, candidate, profile.score, residual, calibration, []))
    ruled = [
        _ruled_out(state, found, candidate, profile, residual)
        for candidate, profile in rivals
        if level_of(candidate) not in aliases
    ]
    experiments = [e for alias in aliases for e in _separations(state, found, own, alias)]
    experiments.sort(key=lambda e: -e.seen)
    return tuple(suspects), tuple(ruled), tuple(experiments)


def _exact_aliases(state: State, found: Found) -> list[Level]:
    """Levels of other columns that hold the same cells over the effect's window."""
    evidence, fit, shape = state.evidence, found.fit, found.profile.shape
    moved = fit.families[(fit.probability > _HALF) | (np.arange(len(fit.gain)) == fit.main())]
    mine = fit.cells[np.isin(evidence.cell_family[fit.cells], moved)]
    affected = evidence.monitoring & np.isin(evidence.cell_family, moved)
    out: list[Level] = []
    for column in state.columns:
        if column is found.candidate.column or column.factors == (WHOLE,):
            continue
        codes = column.codes[mine]
        known = codes[codes >= 0]
        if not len(known):
            continue
        level = int(np.bincount(known).argmax())
        # The window runs on the effect's own time: a batch is coated before its lot is exposed.
        same_time = replace(column, time=found.candidate.column.time)
        theirs = affected & (pattern_of(same_time, level, shape, evidence) != 0.0)
        if jaccard(mine, np.flatnonzero(theirs)) >= ALIAS:
            out.append(Level(column.factors, column.names[level]))
    return out


def _common(state: State, found: Found, candidate: Candidate, profile: Profile) -> float:
    """Share of common cells of the moved families of an effect and a rival in its own window."""
    evidence, fit = state.evidence, found.fit
    moved = fit.families[(fit.probability > _HALF) | (np.arange(len(fit.gain)) == fit.main())]
    relevant = np.isin(evidence.cell_family, moved)
    on = pattern_of(candidate.column, candidate.level, profile.shape, evidence) != 0.0
    mine = fit.cells[relevant[fit.cells]]
    return jaccard(mine, np.flatnonzero(on & relevant))


def _suspect(
    state: State, found: Found, candidate: Candidate, score: float, residual: FloatArray,
    calibration: Calibration, aliases: list[Level],
) -> Suspect:  # fmt: skip
    fit = _fit_in_window(state, found, candidate, residual)
    effect, se = 0.0, float("inf")
    family = found.fit.families[found.fit.main()]
    if fit is not None and family in fit.families:
        i = int(np.searchsorted(fit.families, family))
        effect, se = float(fit.amplitude[i]), float(fit.se[i])
    return Suspect(
        level_of(candidate), effect, se, calibration.p_value(score), score, tuple(aliases)
    )


def _fit_in_window(
    state: State, found: Found, candidate: Candidate, residual: FloatArray
) -> Fit | None:
    """Fit a rival level over the effect's own window, so that sizes compare."""
    if candidate is found.candidate:
        return found.fit
    return fit_effect(
        state.evidence, state.noise, candidate.column, candidate.level, found.profile.shape,
        residual, candidate.unknown, state.options,
    )  # fmt: skip


def moved_series(state: State, found: Found, fit: Fit) -> np.ndarray:
    """Return which series of a fit moved by themselves, with the sign of the found effect."""
    sign = dict(
        zip(found.fit.families.tolist(), np.sign(found.fit.amplitude).tolist(), strict=True)
    )
    likely = set(found.fit.families[found.fit.probability > _HALF].tolist())
    likely.add(int(found.fit.families[found.fit.main()]))
    family = state.evidence.family[fit.series].tolist()
    direction = np.array([sign.get(f, 0.0) if f in likely else 0.0 for f in family])
    return direction * fit.series_value > 2.0 * fit.series_se


def _ruled_out(
    state: State, found: Found, candidate: Candidate, profile: Profile, residual: FloatArray
) -> RuledOut:
    """Say why a rival is not the cause."""
    fit = _fit_in_window(state, found, candidate, residual)
    odds = found.score - profile.score
    level = level_of(candidate)
    if fit is None:
        return RuledOut(level, "onset-differs", 0, 0, odds)
    family = state.evidence.family[fit.series]
    likely = found.fit.families[found.fit.probability > _HALF]
    relevant = np.isin(family, np.append(likely, found.fit.families[found.fit.main()]))
    moved = int((moved_series(state, found, fit) & relevant).sum())
    members = int(relevant.sum())
    extra = np.setdiff1d(fit.cells, found.fit.cells).size / max(len(fit.cells), 1)
    missing = np.setdiff1d(found.fit.cells, fit.cells).size / max(len(found.fit.cells), 1)
    if moved < members and extra > 0.1:
        return RuledOut(level, "members-quiet", moved, members, odds)
    if missing > 0.1:
        own = moved_series(state, found, found.fit)
        outside = int((own & ~np.isin(found.fit.series, fit.series)).sum())
        return RuledOut(level, "others-moved", outside, members, odds)
    _, earliest, latest = found.profile.onset
    if not earliest <= profile.onset[0] <= latest:
        return RuledOut(level, "onset-differs", moved, members, odds)
    return RuledOut(level, "less-likely", moved, members, odds)


def _separations(state: State, found: Found, own: Level, alias: Level) -> list[Separation]:
    """Both ways to tell two levels apart; none if they are one thing under two names (their
    columns split all cells of the moved families alike)."""
    one, two = _column(state, own.factors), _column(state, alias.factors)
    if one is not None and two is not None:
        moved = np.append(found.fit.families[found.fit.probability > _HALF], _leading(found))
        use = np.isin(state.evidence.cell_family, moved)
        pairs = np.unique(np.stack([one.codes[use], two.codes[use]]), axis=1)
        if all(len(np.unique(row)) == pairs.shape[1] for row in pairs):
            return []
    both = (_separation(state, own, alias), _separation(state, alias, own))
    return [experiment for experiment in both if experiment is not None]


def _separation(state: State, keep: Level, other: Level) -> Separation | None:
    """Keep one level and replace the other: the replacement most often seen with it, else the one
    most often seen at all. None where the one cannot be without the other (a cup and its tool)."""
    if set(other.factors) <= set(keep.factors):
        return None
    kept, varied = _column(state, keep.factors), _column(state, other.factors)
    if kept is None or varied is None or other.names not in varied.names:
        return None
    code = varied.names.index(other.names)
    lots = state.evidence.lot
    within = np.ones(len(lots), dtype=bool)
    if keep.names in kept.names:
        within = kept.cells(kept.names.index(keep.names))
    usable = (varied.codes >= 0) & (varied.codes != code)
    together = _lots_by_level(varied, lots, usable & within)
    anyhow = _lots_by_level(varied, lots, usable)
    if not anyhow.any():
        return None
    best = int(together.argmax()) if together.any() else int(anyhow.argmax())
    return Separation(keep, other, Level(varied.factors, varied.names[best]), int(together[best]))


def _leading(found: Found) -> int:
    return int(found.fit.families[found.fit.main()])


def _column(state: State, factors: tuple[str, ...]) -> Column | None:
    return next((c for c in state.columns if c.factors == factors), None)


def _lots_by_level(column: Column, lots: np.ndarray, use: np.ndarray) -> np.ndarray:
    pairs = np.unique(column.codes[use] * (int(lots.max(initial=0)) + 1) + lots[use])
    return np.bincount(pairs // (int(lots.max(initial=0)) + 1), minlength=len(column.names))
