"""View models of the investigation, the review and the index of the invented bay."""

from __future__ import annotations

from datetime import timedelta

from reports.model import Forecast, Level, LevelEffect, Magnitude, Suspect
from reports.model_pages import (
    BehindPoint,
    ExperimentArm,
    HandAction,
    InvestigationPage,
    PastCause,
    RuledOut,
    SeparatingExperiment,
    TrimAdvice,
)
from tests.reports.samples import (
    EDITION,
    ONSET,
    PLAN,
    at,
    excursion,
    overlay_vectors,
    risk_lots,
    series,
    wafer_map,
)


def investigation(names: tuple[str, ...] = (), n_streams: int = 9) -> InvestigationPage:
    """One shift of a cup in full: three streams moved, the others did not."""
    found = excursion(
        suspects=(
            Suspect("tool+module", "TRK2+CUP1", -5.9, 0.00004, (Level("resist_batch", "R-7741"),)),
            Suspect("gauge", names[0] if names else "FTM1", -2.1, 0.21),
        ),
        lots_at_risk=risk_lots(40, names),
        forecast=Forecast("lower", at(-4.2), at(-2.0), at(-9.0), 1.42, 0.71),
    )
    charts = [series(lots=names)]
    for i in range(n_streams):
        moved = i < 2
        charts.append(
            series(
                20 + i,
                form="shift" if moved else "none",
                statistic="mean" if i % 2 else "within-wafer",
                center=1200.0 if i % 2 else 2.4,
                sigma=1.3 if i % 2 else 0.35,
                size=-4.0 if i % 2 else 1.6,
                context={"tool": f"TRK{1 + i % 3}", "module": f"CUP{1 + i // 3}"},
                affected=moved,
                spec=24.0 if i % 2 else None,
            )
        )
    effects = (
        *(LevelEffect(
            "module", f"CUP{i}", -5.9 if i == 1 else 0.3 * i - 0.8,
            -7.1 if i == 1 else 0.3 * i - 1.9, -4.7 if i == 1 else 0.3 * i + 0.3,
            "nm", 10 + i, "suspect" if i == 1 else "quiet",
        )
        for i in range(1, 6)),
        LevelEffect("resist_batch", "R-7741", -5.5, -7.0, -4.1, "nm", 11, "aliased"),
    )  # fmt: skip
    ruled = (
        RuledOut("resist_batch", "R-7739", "did-not-move", 0.2, -0.9, 1.3, "nm", 18),
        RuledOut("gauge", "FTM2", "explained", -1.9, -3.0, -0.8, "nm", 9, Level("module", "CUP1")),
        RuledOut("recipe", names[2] if len(names) > 2 else "CT-M1-1200", "too-few-lots", n_lots=2),
    )
    arms = (
        ExperimentArm("L04301", 3, {"module": "CUP1", "resist_batch": "R-7750"},
                      Level("tool+module", "TRK2+CUP1")),
        ExperimentArm("L04301", 3, {"module": "CUP2", "resist_batch": "R-7741"},
                      Level("resist_batch", "R-7741")),
    )  # fmt: skip
    between = (Level("tool+module", "TRK2+CUP1"), Level("resist_batch", "R-7741"))
    behind = tuple(
        BehindPoint(
            ONSET + timedelta(hours=4 * i), ONSET + timedelta(hours=4 * i + 2),
            names[i % len(names)] if names else f"L{4256 + i // 3:05d}", f"{1 + 11 * (i % 3):02d}",
            {"tool": "TRK2", "module": "CUP1"}, 1194.1 + 0.3 * (i % 5), "nm", 13, "FTM1",
            "drops/thk_20261104.csv", 2 + 13 * i, 14 + 13 * i, superseded=i == 4,
        )
        for i in range(18)
    )  # fmt: skip
    actions = (
        HandAction(at(0.4), "m.night", "comment", "Cup 1 down for the shift.\nLots go to cup 2."),
        HandAction(at(0.3), names[0] if names else "m.night", "contain", "Lots on hold."),
    )
    past = (PastCause(12, at(120), "nozzle drip after change", "p.day", "shift", 0.82, "12.html"),)
    return InvestigationPage(
        edition=EDITION, excursion=found, charts=tuple(charts), n_quiet_not_shown=190,
        wafer_map=wafer_map(), overlay=overlay_vectors(), effects=effects, ruled_out=ruled,
        experiment=SeparatingExperiment(between, arms, 0.93), behind=behind, actions=actions,
        past_causes=past, action_plan=PLAN, owners=("thickness-owner@example.com",),
        trim=TrimAdvice("Spin speed", "rpm", 2000.0, 1980.3, 1972.1, 1988.6, 1200.0, 4800.0),
        cd_change=Magnitude(-1.9, -3.1, -0.7, "nm"),
    )  # fmt: skip
