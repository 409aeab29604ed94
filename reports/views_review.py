"""What the page of a monthly review needs to know, from the review itself."""

from __future__ import annotations

import math
from typing import Any

import numpy as np

from reports import model_pages
from reports.numbers import index
from reports.sentences import cause as cause_words
from reports.sentences import context_words
from reports.texts import shown, text
from reports.views import Reader, excursion_of, investigation_href
from spc.monitoring import review_findings
from spc.monitoring.review import MonthReview, ReviewUnit
from spc.monitoring.review_findings import GOAL, Decision
from spc.monitoring.review_rows import INDICES

_MOST_BINS = 48
_FEWEST_BINS = 8
_CURVE_POINTS = 121
_MOST_NAMED = 4


def review_href(month: str) -> str:
    """Where the page of a month stands below the reports folder."""
    return f"reviews/review-{month}.html"


def workbook_href(month: str) -> str:
    """Where the spreadsheet of a month stands below the reports folder."""
    return f"reviews/review-{month}.xlsx"


def review_view(reader: Reader, review: MonthReview) -> model_pages.ReviewPage:
    """The monthly review as its page and its spreadsheet show it."""
    found = review_findings.gaps(review)
    return model_pages.ReviewPage(
        edition=reader.edition,
        month=review.month,
        rows=tuple(_row(unit, review) for unit in review.units),
        gaps=tuple(model_pages.ToolGap(**gap.__dict__) for gap in found),
        changes=tuple(
            model_pages.ReviewChange(**change.__dict__)
            for change in review_findings.changes(review)
        ),
        decisions=tuple(_decision(one) for one in review_findings.decisions(review, found)),
        excursions=_excursions(reader, review),
        goal=GOAL,
        xlsx_href=workbook_href(review.month).rpartition("/")[2],
        notes=review.notes,
    )


# ---- rows --------------------------------------------------------------------------------------


def _row(unit: ReviewUnit, review: MonthReview) -> model_pages.CapabilityRow:
    row = unit.rows[review.month]
    histogram, curve = ((), ()) if unit.context else _picture(unit)
    same = (
        "month", "unit", "n_lots", "n_wafers", "n_readings", "mean", "sd_overall", "sd_within",
        "components", "cp", "cpk", "pp", "ppk", "cpm", "ppm_expected", "ppm_observed",
        "distribution", "stable", "target", "lower_spec", "upper_spec", "gauge_share",
    )  # fmt: skip
    return model_pages.CapabilityRow(
        characteristic=unit.characteristic.name,
        context=unit.context,
        intervals=_intervals(row),
        excursions=tuple(row["excursions"]),
        histogram=histogram,
        curve=curve,
        history=tuple(_month(unit.rows[month], month) for month in review.months),
        **{name: row[name] for name in same},
    )


def _intervals(row: dict[str, Any]) -> dict[str, tuple[float, float]]:
    out = {}
    for name in INDICES:
        low, high = row[f"{name}_low"], row[f"{name}_high"]
        if low is not None and high is not None:
            out[name] = (low, high)
    return out


def _month(row: dict[str, Any], month: str) -> model_pages.MonthIndex:
    keys = ("cpk", "cpk_low", "cpk_high", "ppk", "ppk_low", "ppk_high", "stable", "n_lots")
    return model_pages.MonthIndex(month, **{key: row[key] for key in keys})


def _picture(
    unit: ReviewUnit,
) -> tuple[tuple[model_pages.Bin, ...], tuple[model_pages.CurvePoint, ...]]:
    """Histogram of the readings, and the law they are described by in readings a bar."""
    if unit.study is None or unit.study.values.size == 0:
        return (), ()
    values = unit.study.values
    edges = _edges(values)
    counts, _ = np.histogram(values, edges)
    bins = tuple(
        model_pages.Bin(float(a), float(b), int(n))
        for a, b, n in zip(edges[:-1], edges[1:], counts, strict=True)
    )
    if unit.rows and unit.study.row["distribution"] is None:
        return bins, ()
    width = float(edges[1] - edges[0])
    x = np.linspace(edges[0], edges[-1], _CURVE_POINTS)
    density = _density(unit, x)
    curve = tuple(
        model_pages.CurvePoint(float(a), float(b))
        for a, b in zip(x, values.size * width * density, strict=True)
    )
    return bins, curve


def _edges(values: np.ndarray) -> np.ndarray:
    """Edges of equal bars (Freedman & Diaconis 1981), within a number that can be drawn."""
    low, high = float(values.min()), float(values.max())
    if low == high:
        half = max(abs(low) * 1e-6, 1e-9)
        return np.array([low - half, low + half])
    quarter, three = np.quantile(values, [0.25, 0.75])
    width = 2.0 * float(three - quarter) / values.size ** (1 / 3)
    wanted = math.ceil((high - low) / width) if width > 0 else _MOST_BINS
    return np.linspace(low, high, min(max(wanted, _FEWEST_BINS), _MOST_BINS) + 1)


def _density(unit: ReviewUnit, x: np.ndarray) -> np.ndarray:
    assert unit.study is not None  # the caller has looked
    if unit.study.law is not None:
        return np.asarray(unit.study.law.law.pdf(x))
    mean, sd = float(unit.study.values.mean()), float(unit.study.values.std(ddof=1))
    return np.asarray(np.exp(-0.5 * ((x - mean) / sd) ** 2) / (sd * math.sqrt(2 * math.pi)))


# ---- words -------------------------------------------------------------------------------------


def _decision(one: Decision) -> model_pages.ReviewDecision:
    return model_pages.ReviewDecision(
        kind=one.kind,
        characteristic=one.characteristic,
        context=one.context,
        value=one.value,
        low=one.low,
        high=one.high,
        goal=one.goal,
        detail=_detail(one),
    )


def _detail(one: Decision) -> str:
    """Which streams, excursions and tools a decision is about."""
    comma = text("join.comma")
    if one.kind == "tool-gap":
        named = [f"{shown(name)} {index(ppk)}" for name, ppk in one.levels]
        return f"{text('index.ppk')}: {comma.join(named)}."
    parts = []
    if one.streams:
        named = [context_words(context) for context in one.streams[:_MOST_NAMED]]
        more = len(one.streams) - len(named)
        parts.append(comma.join(named) + (f" (+{more})." if more else "."))
    if one.excursions:
        numbers = comma.join(str(number) for number in one.excursions)
        parts.append(text("review.part_excursions", numbers=numbers))
    return " ".join(parts)


def _excursions(reader: Reader, review: MonthReview) -> tuple[model_pages.MonthExcursion, ...]:
    """Excursions of the month: those to act on first, each group by onset.

    Those to watch that fell quiet without a cause are left to the rows of their streams.
    """
    folder = reader.bay.path(reader.bay.settings.nightly.reports)
    out = []
    for one in sorted(
        review.excursions, key=lambda t: (t.excursion.tier != "act", t.first_us, t.excursion.id)
    ):
        act, open_ = one.excursion.tier == "act", one.excursion.status != "closed"
        if not (act or open_ or one.cause):
            continue
        view = excursion_of(reader.document(one.excursion))
        href = investigation_href(one.excursion.id)
        there = (folder / href).is_file()
        cause = one.cause or (cause_words(view) if view.suspects else None)
        out.append(model_pages.MonthExcursion(view, cause, href if there else None))
    return tuple(out)
