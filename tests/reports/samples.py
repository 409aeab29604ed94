"""View models of an invented bay: numbers of the usual size in lithography, nothing measured.

Common practice, no source: resist about 1200 nm with a lot sd of 2 nm, a line width of 400 nm,
overlay of some nm. All random numbers come from named seeds.
"""

from __future__ import annotations

from datetime import UTC, datetime, timedelta
from zoneinfo import ZoneInfo

import numpy as np

from reports.model import (
    BayEvent,
    ChartPoint,
    ChartSeries,
    Edition,
    Excursion,
    ExcursionCard,
    ExcursionStream,
    FeedNotice,
    Forecast,
    IngestAccount,
    Level,
    LimitSet,
    LotAtRisk,
    Magnitude,
    MapSite,
    NightPage,
    Onset,
    OverlayPanel,
    OverlayVector,
    OverlayVectors,
    QuietStreams,
    SignalAccount,
    Suspect,
    WaferMapPicture,
)

ZONE = ZoneInfo("Europe/Dublin")
AS_OF = datetime(2026, 11, 6, 5, 30, tzinfo=UTC)  # a Friday
EDITION = Edition("North bay", ZONE, AS_OF)
ONSET = datetime(2026, 11, 3, 22, 40, tzinfo=UTC)  # Tue 22:40
HOSTILE = (
    "<script>alert(1)</script>",
    '=HYPERLINK("http://x.example","y")',
    '"><img src=x onerror=alert(2)>',
    "lot\u202e\u2066gnp.exe",
    "+1+cmd|' /C calc'!A0",
    "-2+3",
    "@SUM(A1)",
    "\t=1+1",
    "{{ 7*7 }} {lot} %s",
    "000123",
    "12E5",
    "NA",
)
PLAN = (
    "1. Hold the lots listed below.\n"
    "2. Measure resist thickness on a bare monitor wafer of the cup (49 sites).\n"
    "3. Compare the pump shot size and the spin speed with the recipe.\n"
    "4. If both are right, change the resist bottle and repeat step 2."
)


def at(days: float) -> datetime:
    """So many days before the page's clock."""
    return AS_OF - timedelta(days=days)


def series(
    seed: int = 1,
    *,
    form: str = "shift",
    size: float = -5.9,
    center: float = 1200.0,
    sigma: float = 1.3,
    unit: str = "nm",
    characteristic: str = "M1 resist thickness",
    statistic: str = "mean",
    context: dict[str, str] | None = None,
    n: int = 72,
    days: float = 24.0,
    lots: tuple[str, ...] = (),
    spec: float | None = 24.0,
    events: bool = True,
    affected: bool = True,
) -> ChartSeries:
    """A stream with a gap of three days, uneven samples, a fault at ONSET and a new limit set."""
    rng = np.random.default_rng(seed)
    when = np.sort(rng.uniform(0.05, days, n))[::-1]
    when = when[(when < 10.2) | (when > 13.4)]
    points = []
    run = 0
    for i, back in enumerate(when):
        stamp = at(float(back))
        after = stamp >= ONSET
        since = (stamp - ONSET) / timedelta(days=1)
        moved = 0.0
        if after and form == "shift":
            moved = size
        elif after and form == "drift":
            moved = size * since / 2.3
        elif form == "spike" and 0 <= since < 0.35:
            moved = size
        wafers = int(rng.choice([1, 3, 3, 3]))
        sd = sigma * (1.0 if wafers == 3 else 1.35)
        value = center + moved + float(rng.normal(0, sd * 0.9))
        base = i < 30
        z = (value - center) / sd
        run = run + 1 if after and abs(z) > 0.3 and form != "spike" else 0
        rules: tuple[str, ...] = ()
        if not base and abs(z) > 3:
            rules += ("beyond-3s",)
        if not base and run >= 8:
            rules += ("8-one-side",)
        points.append(
            ChartPoint(
                at=stamp,
                lot=lots[i % len(lots)] if lots else f"L{4200 + i:05d}",
                value=value,
                n_wafers=wafers,
                n_sites=wafers * 13,
                center=center,
                lower_limit=center - 3 * sd,
                upper_limit=center + 3 * sd,
                sigma=sd,
                phase="baseline" if base else "monitoring",
                rules=rules,
                file=f"drops/thk_{stamp:%Y%m%d}.csv",
                first_line=2 + 39 * i,
                last_line=1 + 39 * (i + 1),
            )
        )
    found = (
        BayEvent(ONSET - timedelta(hours=3.2), "maintenance", "TRK2", "CUP1", "nozzle changed"),
        BayEvent(at(12.0), "power", None, None, "bay stopped for the yearly power test"),
    )
    return ChartSeries(
        characteristic=characteristic,
        statistic=statistic,
        context=context or {"tool": "TRK2", "module": "CUP1"},
        unit=unit,
        points=tuple(points),
        target=center if statistic == "mean" else None,
        lower_spec=center - spec if spec else None,
        upper_spec=center + spec if spec else None,
        onset=onset() if affected else None,
        events=found if events else (),
        limit_sets=(
            LimitSet(
                points[min(30, len(points) - 1)].at, "automatic", "yellowbay", "first 30 points"
            ),
        ),
        affected=affected,
    )


def onset(hours: float = 1.0) -> Onset:
    """The onset of the samples with its confidence set."""
    return Onset(
        ONSET, ONSET - timedelta(hours=hours * 5.5), ONSET + timedelta(hours=hours), "L04256"
    )


def risk_lots(n: int = 14, names: tuple[str, ...] = ()) -> tuple[LotAtRisk, ...]:
    """Lots at risk, a few of them measured."""
    rng = np.random.default_rng(n)
    return tuple(
        LotAtRisk(
            lot=names[i] if i < len(names) else f"L{4256 + i:05d}",
            wafers=tuple(f"{w:02d}" for w in range(1, 26 if i % 3 else 13)),
            measured=i % 4 == 0,
            processed_at=ONSET + timedelta(hours=3.7 * i),
            p_out_of_spec=float(rng.beta(0.6, 6)),
            predicted=1200 - 5.9 + float(rng.normal(0, 0.6)),
            unit="nm",
        )
        for i in range(n)
    )


def excursion(number: int = 41, **changes: object) -> Excursion:
    """A shift of one cup, as the issue's subject line has it."""
    values: dict[str, object] = {
        "id": number,
        "status": "open",
        "tier": "act",
        "opened_at": at(0),
        "updated_at": at(0),
        "pattern": "shift",
        "streams": (
            ExcursionStream(
                "M1 resist thickness",
                "mean",
                {"tool": "TRK2", "module": "CUP1"},
                ONSET + timedelta(hours=5),
                ("beyond-3s", "8-one-side"),
            ),
        ),
        "onset": onset(),
        "magnitude": Magnitude(-5.93, -7.08, -4.71, "nm", -4.5),
        "suspects": (
            Suspect("tool+module", "TRK2+CUP1", -5.9, 0.00004),
            Suspect("resist_batch", "R-7741", -2.1, 0.21),
        ),
        "lots_at_risk": risk_lots(),
        "events": (
            BayEvent(ONSET - timedelta(hours=3.2), "maintenance", "TRK2", "CUP1", "nozzle changed"),
        ),
        "p_chance": 0.00002,
    }
    values.update(changes)
    return Excursion(**values)  # type: ignore[arg-type]


def sites(n_rings: int = 3, radius: float = 135.0) -> list[tuple[str, float, float]]:
    """Sites on rings: 1, 4, 8, … of them."""
    found = [("1", 0.0, 0.0)]
    for ring in range(1, n_rings):
        for k in range(4 * ring):
            angle = 2 * np.pi * k / (4 * ring) + 0.4 * ring
            r = radius * ring / (n_rings - 1)
            found.append((str(len(found) + 1), r * np.cos(angle), r * np.sin(angle)))
    return found


def wafer_map(n_rings: int = 3, unit: str = "nm", center: float = 1200.0) -> WaferMapPicture:
    """A bowl that appears after the onset."""
    rng = np.random.default_rng(n_rings)
    found = []
    for name, x, y in sites(n_rings):
        before = center + 1.5 * (x / 150) + float(rng.normal(0, 0.3))
        difference = 4.0 * ((x * x + y * y) / 150**2) - 2.2 + float(rng.normal(0, 0.4))
        found.append(MapSite(name, x, y, before, before + difference, difference))
    return WaferMapPicture("M1 resist thickness", unit, 150.0, tuple(found), 87, 12)


def overlay_vectors() -> OverlayVectors:
    """A scale of 0.05 ppm and a rotation on a grid of fields."""
    rng = np.random.default_rng(5)

    def panel(name: str, scale: float, rotation: float) -> OverlayPanel:
        vectors = []
        for x in np.arange(-130, 131, 26.0):
            for y in np.arange(-132, 133, 33.0):
                if np.hypot(x, y) < 140:
                    dx = scale * x - rotation * y + rng.normal(0, 0.5)
                    dy = scale * y + rotation * x + rng.normal(0, 0.5)
                    vectors.append(OverlayVector(float(x), float(y), float(dx), float(dy)))
        return OverlayPanel(name, tuple(vectors))  # type: ignore[arg-type]

    panels = (panel("before", 0.002, 0.0), panel("after", 0.045, 0.012))
    return OverlayVectors("V1 overlay", "nm", 150.0, panels)


def cards(names: tuple[str, ...] = ()) -> tuple[ExcursionCard, ...]:
    """Four things that happened, of different kinds."""
    drift = excursion(
        42,
        pattern="drift",
        streams=(
            ExcursionStream("M1 CD", "mean", {"tool": "SCN1"}, at(0.8), ("2of3-beyond-2s",)),
            ExcursionStream("V1 CD", "mean", {"tool": "SCN1"}, at(0.5), ("beyond-3s",)),
        ),
        magnitude=Magnitude(3.84, 2.6, 5.1, "nm", 3.1),
        suspects=(Suspect("reticle", "RT-118", 3.8, 0.003, (Level("recipe", "EXP-M1-07"),)),),
        lots_at_risk=risk_lots(31, names),
        forecast=Forecast("upper", at(-5.5), at(-3.0), at(-9.5), 1.31, 0.84),
        p_chance=0.0012,
    )
    bowl = excursion(
        43,
        tier="watch",
        pattern="map",
        streams=(
            ExcursionStream(
                "M1 resist thickness", "map-distance", {"tool": "TRK3", "module": "CUP2"}, at(0.4)
            ),
        ),
        magnitude=Magnitude(2.2, 1.1, 3.3, "nm", 3.4),
        suspects=(),
        lots_at_risk=risk_lots(4),
        events=(),
        p_chance=0.03,
    )
    silent = excursion(
        44,
        tier="watch",
        pattern="silence",
        streams=tuple(
            ExcursionStream("M1 CD", "mean", {"tool": "SCN2", "module": m}, at(0.3))
            for m in ("ST1", "ST2")
        ),
        magnitude=None,
        suspects=(Suspect("gauge", "CDS2", None, None),),
        lots_at_risk=tuple(LotAtRisk(x.lot, x.wafers, False, x.processed_at) for x in risk_lots(6)),
        p_chance=None,
    )
    cd = series(
        4, form="drift", size=4.0, center=400.0, sigma=1.1, characteristic="M1 CD",
        context={"tool": "SCN1"}, spec=8.0, lots=names,
    )  # fmt: skip
    shape = series(
        7, form="shift", size=2.2, center=1.6, sigma=0.5, statistic="map-distance", unit="1",
        context={"tool": "TRK3", "module": "CUP2"}, spec=None, events=False,
    )  # fmt: skip
    own = ("thickness-owner@example.com",)
    return (
        ExcursionCard(
            excursion(), series(lots=names), None, None, PLAN, own, "excursions/41.html", "opened"
        ),
        ExcursionCard(
            drift, cd, None, None, "Check dose and focus of the last monitor.",
            ("cd-owner@example.com",), "excursions/42.html", "updated",
        ),
        ExcursionCard(bowl, shape, wafer_map(), None, None, own, "excursions/43.html", "opened"),
        ExcursionCard(
            silent, None, None, None, None, ("cd-owner@example.com",), "excursions/44.html",
        ),
    )  # fmt: skip


def night(names: tuple[str, ...] = (), **changes: object) -> NightPage:
    """A busy night."""
    values: dict[str, object] = {
        "edition": EDITION,
        "cards": cards(names),
        "signals": SignalAccount(212, 341, 19, 4.7, 0.5, 0.38),
        "ingest": IngestAccount(46, 1, 1, 1, 61204, 156, 39, 12),
        "quiet": QuietStreams(206, 322, 4, 11),
        "feeds": (
            FeedNotice("CDS2", "late", last_seen=at(1.9), expected_every="12 h"),
            FeedNotice(
                "gauge3/thk_20261105_b.csv", "rejected", "not a number", rows=12, line=118,
                column="value", value="12O1.4",
            ),
            FeedNotice("misc/readme.csv", "quarantined", "no house or feed header in line 1"),
        ),
        "standing": (
            ExcursionCard(
                excursion(37, status="contained", opened_at=at(4), pattern="spread"),
                href="excursions/37.html", change="unchanged",
            ),
        ),
        "href": "nights/2026-11-06.html",
        "page_url": None,
    }  # fmt: skip
    values.update(changes)
    return NightPage(**values)  # type: ignore[arg-type]


def quiet_night() -> NightPage:
    """Nothing moved."""
    return night(cards=(), standing=(), feeds=(), signals=SignalAccount(212, 341, 4, 4.7, 0.5, 0.4))


def crowded_night(n: int = 20) -> NightPage:
    """Many excursions on 200 streams."""
    many = []
    for i in range(n):
        context = {"tool": f"TRK{1 + i % 3}", "module": f"CUP{1 + i // 3}"}
        size = (-1) ** i * (3.0 + 0.3 * i)
        moved = excursion(
            100 + i,
            tier="act" if i < 12 else "watch",
            streams=(ExcursionStream("M1 resist thickness", "mean", context, at(0.5)),),
            magnitude=Magnitude(size, size - 1.1, size + 1.2, "nm", size / 1.3),
        )
        chart = series(100 + i, size=size, context=context)
        many.append(
            ExcursionCard(moved, chart, None, None, PLAN, (f"o{i}@example.com",), f"x/{i}.html")
        )
    return night(cards=tuple(many))
