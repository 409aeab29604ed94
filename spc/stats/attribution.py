"""From residuals to causes: which level of which factor moved, since when, how, and by how much.

`attribute` groups the evidence of all series (streams x statistics) over a bay by what explains it.

Model. Residual of a cell = sum of effects + correlated noise (`attribution_noise`). An effect is a
level of a factor, or of a conjunction of two (`attribution_candidates`), a form in time (step,
ramp, single lot; each may end), an onset, and one amplitude per family (characteristic x
statistic); a family need not move at all.

Search. All levels x onsets x forms are scored at once by a marginal likelihood
(`attribution_search`), the best few looked at event by event (`attribution_profile`), the best one
taken if chance would not do as well (`attribution_calibration`), explained away
(`attribution_fit`), and so on; then everything is refitted together (`attribution_greedy`).
`attribution_suspects` reports.

Hand-over for the caller
- One evidence entry per cell; statistics of spread and map distances as normal scores of variance 1
  (`var_own` 1, `var_lot` 0); overlay terms in their unit.
- Enter the tool of a reading's own step under the name of its step too, where the step is a factor
  (`coat.tool` also for resist thickness), so that one cause has one level over all characteristics.
- A statistic over wafers of mixed context has -1 on the factors they differ in; if it moves with
  the cause found elsewhere on the same lots it is counted into that effect (`Effect.absorbed`).
- Order the factors by preference among levels the data cannot tell apart.
- `p_adjusted` is the expected number of false effects as strong in one look at the whole bay.
- Effects of the last look go back in as `previous_effects`: they are taken up first, estimated
  anew, and carry their index in `Effect.previous`, also if their level or form has changed.
- The factor `characteristic` (level: the code as text) stands for every stream of a characteristic.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import fields, replace

import numpy as np
from scipy.stats import norm

from spc.stats.attribution_calibration import Calibration
from spc.stats.attribution_effects import (
    Drift,
    Effect,
    FamilySize,
    Level,
    Onset,
    RuledOut,
    Separation,
    SeriesSize,
    Suspect,
)
from spc.stats.attribution_evidence import AttributionOptions, Evidence, FloatArray
from spc.stats.attribution_fit import drift_line
from spc.stats.attribution_greedy import Search
from spc.stats.attribution_state import Found, State
from spc.stats.attribution_suspects import form_of, level_of, moved_series, suspects_of

__all__ = [
    "AttributionOptions",
    "Calibration",
    "Drift",
    "Effect",
    "Evidence",
    "FamilySize",
    "Level",
    "Onset",
    "RuledOut",
    "Separation",
    "SeriesSize",
    "Suspect",
    "attribute",
]

# A family counts as moved from these odds on (four to one).
_MOVED = 0.8
_CELL_FIELDS = (
    "series", "point", "lot", "t_process", "t_measure", "residual", "var_own", "var_lot",
    "monitoring", "levels", "t_level",
)  # fmt: skip


def attribute(
    evidence: Evidence,
    options: AttributionOptions,
    now: float,
    previous_effects: Sequence[Effect] = (),
) -> tuple[Effect, ...]:
    """Return the effects that the evidence up to `now` bears out, strongest first.

    `evidence`: cells of baseline and monitored points (see `Evidence`); `now` in seconds: cells
    measured later are left out; `previous_effects`: those of the last look (see module docstring).
    Returns an empty tuple without monitored cells. Deterministic for equal arguments.
    """
    evidence = _until(evidence, now)
    if not evidence.monitoring.any():
        return ()
    state = State.of(evidence, options)
    search = Search(state)
    search.seed(previous_effects)
    found = search.run()
    return tuple(_report(state, f, search.left([f]), search.calibration, evidence) for f in found)


def _until(evidence: Evidence, now: float) -> Evidence:
    keep = evidence.t_measure <= now
    if keep.all():
        return evidence
    names = {f.name for f in fields(Evidence)}
    cut = {
        name: getattr(evidence, name)[keep]
        for name in _CELL_FIELDS
        if name in names and getattr(evidence, name) is not None
    }
    return replace(evidence, **cut)


def _report(
    state: State, found: Found, residual: FloatArray, calibration: Calibration, evidence: Evidence
) -> Effect:
    """Put one found effect into words of data."""
    suspects, ruled_out, separations = suspects_of(state, found, residual, calibration)
    shape, fit = found.profile.shape, found.fit
    form = form_of(evidence, found)
    drift = None
    if shape.kind == "ramp":
        family = int(fit.families[fit.main()])
        line = drift_line(
            state.evidence, state.noise, fit, found.candidate.column, residual, family
        )
        drift = Drift(family, *line)
    last = float(found.candidate.column.last[fit.cells].max())
    return Effect(
        form=form,
        shape=shape,
        level=level_of(found.candidate),
        aliased_with=suspects[0].aliases,
        suspects=suspects,
        onset=_onset(state, found),
        end=last if np.isfinite(shape.end) else None,
        p_adjusted=calibration.p_value(found.strength, found.score),
        evidence=found.score,
        gain=found.profile.gain,
        sizes=_sizes(state, found),
        leading=fit.main(),
        series=tuple(
            SeriesSize(int(s), round(float(n)), float(v), float(e), bool(m))
            for s, n, v, e, m in zip(
                fit.series,
                fit.series_points,
                fit.series_value,
                fit.series_se,
                moved_series(state, found, fit),
                strict=True,
            )
        ),
        drift=drift,
        lots=np.unique(evidence.lot[fit.cells]),
        ruled_out=ruled_out,
        separations=separations,
        previous=found.previous,
        absorbed=tuple(level_of(c) for c in found.absorbed),
    )


def _onset(state: State, found: Found) -> Onset:
    """Onset in time and lots. Before the first lot of a level, the last lot of the same families
    is the last known good."""
    evidence, column = state.evidence, found.candidate.column
    estimate, earliest, latest = found.profile.onset
    fit = found.fit
    mine = column.cells(found.candidate.level)
    members = evidence.monitoring & mine
    time = column.time
    if earliest >= time[members].min() and not np.any(mine & (time < earliest)):
        same = np.isin(evidence.cell_family, fit.families[fit.probability > 0.5])
        before = time[same & (time < earliest)]
        if estimate <= earliest and len(before):
            earliest = float(before.max())
    # It may have begun in the middle of a lot.
    latest = float(column.last[members & (time <= latest)].max(initial=latest))
    first = fit.cells[np.argmin(time[fit.cells])]
    between = np.unique(evidence.lot[members & (time > earliest) & (time <= latest)])
    return Onset(
        estimate, earliest, latest, int(evidence.lot[first]), len(between),
        "t_measure" if column.measured else "t_process",
    )  # fmt: skip


def _sizes(state: State, found: Found) -> tuple[FamilySize, ...]:
    fit, evidence = found.fit, state.evidence
    width = float(norm.ppf(0.5 + state.options.confidence / 2.0))
    statistics, characteristics = evidence.family_statistic(), evidence.family_characteristic()
    out = []
    for i, family in enumerate(fit.families.tolist()):
        value, se = float(fit.amplitude[i]), float(fit.se[i])
        out.append(
            FamilySize(
                family=family,
                characteristic=int(characteristics[family]),
                statistic=statistics[family],
                value=value,
                low=value - width * se,
                high=value + width * se,
                se=se,
                sigmas=value / float(state.noise.sigma[family]),
                gain=float(fit.gain[i]),
                moved=bool(fit.probability[i] > _MOVED),
            )
        )
    return tuple(out)
