"""View models of the investigation, the review and the index of the invented bay."""

from __future__ import annotations

from datetime import timedelta

import numpy as np

from reports.model import Forecast, Level, LevelEffect, Magnitude, Suspect
from reports.model_pages import (
    BehindPoint,
    Bin,
    CapabilityRow,
    CurvePoint,
    ExperimentArm,
    HandAction,
    IndexEntry,
    IndexPage,
    InvestigationPage,
    MonthExcursion,
    MonthIndex,
    PastCause,
    ReviewChange,
    ReviewDecision,
    ReviewPage,
    RuledOut,
    SeparatingExperiment,
    ToolGap,
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


def capability_row(
    name: str, context: dict[str, str], seed: int, center: float = 1200.0, sd: float = 4.2
) -> CapabilityRow:
    """A row of the review; the last month is the one reviewed."""
    rng = np.random.default_rng(seed)
    spec = 24.0 if center > 1000 else 8.0
    pp = spec / (3 * sd)
    ppk = pp - abs(float(rng.normal(0, 0.05)))
    edges = np.linspace(center - 1.1 * spec, center + 1.1 * spec, 27)
    width = float(edges[1] - edges[0])
    middles = (edges[:-1] + edges[1:]) / 2
    density = np.exp(-0.5 * ((middles - center) / sd) ** 2) / (sd * np.sqrt(2 * np.pi))
    n = 4212
    histogram = tuple(
        Bin(float(a), float(a) + width, int(rng.poisson(n * width * d)))
        for a, d in zip(edges[:-1], density, strict=True)
    )
    fine = np.linspace(edges[0], edges[-1], 121)
    curve = tuple(
        CurvePoint(
            float(x),
            float(n * width * np.exp(-0.5 * ((x - center) / sd) ** 2) / (sd * np.sqrt(2 * np.pi))),
        )
        for x in fine
    )
    history = tuple(
        MonthIndex(
            f"{2025 + (m + 10) // 12}-{(m + 10) % 12 + 1:02d}", ppk + 0.2, ppk, ppk + 0.4,
            ppk + 0.08 * float(np.sin(m)), ppk - 0.2, ppk + 0.2, m != 4, 100 + m,
        )
        for m in range(12)
    )  # fmt: skip
    return CapabilityRow(
        name, context, "2026-10", "nm", 108, 324, n, center + 0.4, sd, 0.8 * sd,
        {"lot": 0.4 * sd**2, "wafer": 0.1 * sd**2, "site": 0.5 * sd**2},
        pp * 1.25, ppk * 1.25, pp, ppk, ppk * 0.98,
        {k: (v - 0.15, v + 0.15) for k, v in
         (("cp", pp * 1.25), ("cpk", ppk * 1.25), ("pp", pp), ("ppk", ppk), ("cpm", ppk * 0.98))},
        0.93, 0.0, "normal", seed % 3 != 0, (41,) if seed % 3 == 0 else (), center,
        center - spec, center + spec, 0.06, histogram, curve, history,
    )  # fmt: skip


def review(names: tuple[str, ...] = ()) -> ReviewPage:
    """October of the invented bay: two characteristics and their streams."""
    first = names[0] if names else "M1 resist thickness"
    tools = names[1:4] if names else ("TRK1", "TRK2", "TRK3")
    rows = [capability_row(first, {}, 2)]
    rows += [capability_row(first, {"tool": t}, 3 + i) for i, t in enumerate(tools)]
    rows += [capability_row("M1 CD", {}, 6, 400.0, 2.4)]
    rows += [capability_row("M1 CD", {"tool": t}, 7 + i, 400.0, 2.3) for i, t in enumerate(tools)]
    return ReviewPage(
        edition=EDITION, month="2026-10", rows=tuple(rows),
        gaps=(ToolGap(first, tools[0], 1.98, tools[1], 1.61, 0.37, 0.12, 0.62),),
        changes=(ReviewChange("M1 CD", {}, "ppk", 1.41, 1.11),),
        decisions=(
            ReviewDecision("below-goal", "M1 CD", {}, 1.11, 0.96, 1.26, 1.33,
                           "Centre the dose or widen the spec."),
            ReviewDecision("unstable", first, {"tool": tools[1]}, detail="See excursion 41."),
            ReviewDecision("gauge", "M1 CD", {}, 0.31),
        ),
        excursions=(MonthExcursion(excursion(), names[4] if names else "nozzle drip",
                                   "excursions/41.html"),
                    MonthExcursion(excursion(42, pattern="spread"))),
        goal=1.33, xlsx_href="2026-10.xlsx",
    )  # fmt: skip


def index(names: tuple[str, ...] = ()) -> IndexPage:
    """A reports folder with some nights, excursions and a review."""
    headline = names[0] if names else "TRK2 CUP1 M1 resist thickness −5.9 nm since Tue 22:40"
    nights = tuple(
        IndexEntry("night", f"nights/2026-11-{6 - i:02d}.html", at(i), headline, i % 3, i % 2)
        for i in range(5)
    )
    found = (
        IndexEntry("excursion", "excursions/41.html", at(0), headline, 1, 0, "open", 41),
        IndexEntry("excursion", "excursions/37.html", at(4), "TRK1 M1 CD", 0, 1, "contained", 37),
        IndexEntry("excursion", "excursions/12.html", at(120), "TRK1 M1 CD", 1, 0, "closed", 12),
    )
    month = IndexEntry("review", "reviews/2026-10.html", at(3), "3 decisions", month="2026-10")
    return IndexPage(EDITION, (*nights, *found, month))
