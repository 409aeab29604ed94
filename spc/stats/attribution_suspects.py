"""From a found effect to a report: form, aliases, suspects, what was ruled out, experiments."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from spc.stats.attribution_calibration import Calibration
from spc.stats.attribution_candidates import WHOLE, Candidate, Column
from spc.stats.attribution_effects import Level, RuledOut, Separation, Suspect
from spc.stats.attribution_evidence import DAY, Evidence, FloatArray, statistic_class
from spc.stats.attribution_fit import Fit, pattern_of
from spc.stats.attribution_profile import Profile, Shape
from spc.stats.attribution_state import ALIAS, Found, State, jaccard, split_alike

_SUSPECTS = 6
_TOLERANCE = 1.5
_HALF = 0.5
_SHORT = 0.5 * DAY
_ALIKE = 0.6


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
    """One lot, or an ended fault of half a day or of one point a series."""
    if shape.lot >= 0:
        return True
    if not np.isfinite(shape.end):
        return False
    return shape.end - shape.start <= _SHORT or float(np.median(fit.series_points)) <= 1.0


def level_of(candidate: Candidate) -> Level:
    """Return a candidate's level by name."""
    return Level(*candidate.key)


@dataclass(frozen=True)
class _Rival:
    """Another level: its close look, and its sizes over the found effect's own window."""

    candidate: Candidate
    profile: Profile
    fit: Fit | None


def suspects_of(
    state: State, found: Found, residual: FloatArray, calibration: Calibration
) -> tuple[tuple[Suspect, ...], tuple[RuledOut, ...], tuple[Separation, ...]]:
    """Return the ranked suspects of an effect, what was ruled out, and separating experiments.

    `residual` (n,) is what the other effects leave. The first suspect is the effect's own level
    with its aliases.
    """
    rivals = _rivals(state, found, residual)
    aliases = _exact_aliases(state, found)
    near = [
        level_of(r.candidate)
        for r in rivals
        if r.candidate.column.factors != (WHOLE,)
        and r.profile.gain > found.profile.gain - _TOLERANCE
        and _common(state, found, r.candidate, r.profile) > _ALIKE
    ]
    aliases += [level for level in near if level not in aliases]
    own = level_of(found.candidate)
    effect, se = _size(found, found.fit)
    p = calibration.p_value(found.strength, found.score)
    suspects = [Suspect(own, effect, se, p, found.score, tuple(aliases))]
    others = [r for r in rivals if level_of(r.candidate) not in aliases]
    for rival in others[:_SUSPECTS]:
        effect, se = _size(found, rival.fit)
        p = calibration.p_value(rival.candidate.score)
        suspects.append(Suspect(level_of(rival.candidate), effect, se, p, rival.profile.score))
    ruled = [_ruled_out(state, found, rival) for rival in others]
    experiments = [e for alias in aliases for e in _separations(state, found, own, alias)]
    experiments.sort(key=lambda e: -e.seen)
    return tuple(suspects), tuple(ruled), tuple(experiments)


def _rivals(state: State, found: Found, residual: FloatArray) -> list[_Rival]:
    """Return the best other levels that share cells with an effect, best first."""
    touching = np.zeros(len(residual), dtype=bool)
    touching[found.fit.cells] = True
    y = state.whitened(residual)
    out: list[_Rival] = []
    for candidate in state.candidates(residual, False, touching)[: _SUSPECTS + 2]:
        if candidate.key == found.candidate.key:
            continue
        profile = state.look(candidate, y, False)
        if profile is not None:
            fit = state.fit(candidate, found.profile.shape, residual, y)
            out.append(_Rival(candidate, profile, fit))
    return sorted(out, key=lambda rival: -rival.profile.score)


def _size(found: Found, fit: Fit | None) -> tuple[float, float]:
    """Amplitude and standard error in the found effect's leading family; (0, inf) if none."""
    family = found.fit.families[found.fit.main()]
    if fit is None or family not in fit.families:
        return 0.0, float("inf")
    i = int(np.searchsorted(fit.families, family))
    return float(fit.amplitude[i]), float(fit.se[i])


def _exact_aliases(state: State, found: Found) -> list[Level]:
    """Levels of other columns that hold the same cells over the effect's window."""
    evidence, fit, shape = state.evidence, found.fit, found.profile.shape
    moved = fit.telling()
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
    """Share of common cells of an effect and a rival in its own window, in the leading family."""
    evidence, fit = state.evidence, found.fit
    relevant = evidence.cell_family == fit.families[fit.main()]
    on = pattern_of(candidate.column, candidate.level, profile.shape, evidence) != 0.0
    mine = fit.cells[relevant[fit.cells]]
    return jaccard(mine, np.flatnonzero(on & relevant))


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


def _ruled_out(state: State, found: Found, rival: _Rival) -> RuledOut:
    """Say why a rival is not the cause."""
    candidate, profile, fit = rival.candidate, rival.profile, rival.fit
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
    columns split all cells of the leading family alike)."""
    one, two = _column(state, own.factors), _column(state, alias.factors)
    if one is not None and two is not None:
        use = state.evidence.cell_family == found.fit.families[found.fit.main()]
        if split_alike(one.codes[use], two.codes[use]):
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


def _column(state: State, factors: tuple[str, ...]) -> Column | None:
    return next((c for c in state.columns if c.factors == factors), None)


def _lots_by_level(column: Column, lots: np.ndarray, use: np.ndarray) -> np.ndarray:
    pairs = np.unique(column.codes[use] * (int(lots.max(initial=0)) + 1) + lots[use])
    return np.bincount(pairs // (int(lots.max(initial=0)) + 1), minlength=len(column.names))
