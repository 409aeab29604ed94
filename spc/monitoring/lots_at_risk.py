"""Which lots a fault may have touched, measured or not, and how likely each is out of spec.

The lots come from the process log: every lot processed in the suspect context from the earliest
onset to the end of the fault or the clock, and measured lots that the log lacks. For a fault of a
gauge they are the lots measured on it; for silence, the lots that went unmeasured.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from functools import partial

import numpy as np
import pandas as pd
from numpy.typing import NDArray
from sqlalchemy import Connection

from spc.monitoring.streams import step_name
from spc.records import lots as lot_records

FloatArray = NDArray[np.float64]
# Factors that act when the wafer is measured.
MEASURED_FACTORS = frozenset({"gauge"})


@dataclass(frozen=True)
class Suspicion:
    """A context and a span of time: `factors` and `levels` as in the contract, split at `+`.

    `steps` are those whose log rows a bare column speaks of, so that the tool of a coat is not
    taken for a tool of the same name that developed; empty where they are not known: any step.
    """

    factors: tuple[str, ...]
    levels: tuple[str, ...]
    first_us: int
    last_us: int
    steps: frozenset[str] = frozenset()

    def wanted(self) -> dict[str, str]:
        """{factor: level}."""
        return dict(zip(self.factors, self.levels, strict=True))

    @property
    def of_gauge(self) -> bool:
        """Whether it acts at the measurement."""
        return any(factor in MEASURED_FACTORS for factor in self.factors)


@dataclass(frozen=True)
class Outlook:
    """How a characteristic behaves while the fault lasts, to predict what was not measured.

    `moved(us)` gives the predicted mean at process stamps (array in, array out); `sd` the standard
    deviation of a lot mean about it, the uncertainty of the fault's size included; `layer` limits
    it to lots of one layer (None: any).
    """

    moved: Callable[[FloatArray], FloatArray]
    sd: float
    lower: float | None
    upper: float | None
    unit: str
    layer: str | None = None
    # measured value of a lot mean by (lot, layer), and the sd of the truth about it
    measured: Mapping[tuple[str, str], float] | None = None
    measured_sd: float = 0.0


def lots_at_risk(
    connection: Connection, suspicion: Suspicion, parameters: tuple[str, ...], as_of_us: int
) -> pd.DataFrame:
    """Lots in the suspect context.

    Returns one row a lot and layer: lot, layer, wafers (sorted tuple), processed_us (first in the
    span; the measurement for a gauge), measured (whether a reading of the parameters exists).
    """
    if suspicion.of_gauge:
        rows = _measured(connection, suspicion)
    else:
        rows = pd.concat([_processed(connection, suspicion), _unlogged(connection, suspicion)])
    if rows.empty:
        return pd.DataFrame(columns=["lot", "layer", "wafers", "processed_us", "measured"])
    grouped = (
        rows.groupby(["lot", "layer"], sort=False)
        .agg(
            wafers=("wafer", lambda w: tuple(sorted(set(w), key=_natural))),
            processed_us=("at_us", "min"),
        )
        .reset_index()
    )
    measured = lot_records.measured_lots(
        connection, grouped["lot"].unique().tolist(), parameters, as_of_us
    )
    pairs = zip(grouped["lot"], grouped["layer"], strict=True)
    grouped["measured"] = [pair in measured for pair in pairs]
    return grouped.sort_values(["processed_us", "lot", "layer"], ignore_index=True)


def _natural(wafer: str) -> tuple[int, str]:
    return (int(wafer) if wafer.isdecimal() else 1 << 30, wafer)


def _processed(connection: Connection, suspicion: Suspicion) -> pd.DataFrame:
    """Wafers whose log rows match every part: bare columns all in one row, a `step.column` each
    in a row of that step."""
    parts: list[dict[str, str]] = []
    bare = {f: v for f, v in suspicion.wanted().items() if "." not in f}
    if bare:
        parts.append(bare)
    parts += [{f: v} for f, v in suspicion.wanted().items() if "." in f]
    result: pd.DataFrame | None = None
    for part in parts:
        matches = partial(_row_matches, part, suspicion.steps)
        ids = lot_records.matching_contexts(connection, matches)
        rows = lot_records.processed_between(
            connection, list(ids), suspicion.first_us, suspicion.last_us
        )
        rows = rows.groupby(["lot", "wafer", "layer"]).agg({"processed_us": "min"}).reset_index()
        if result is None:
            result = rows
        else:
            result = result.merge(rows[["lot", "wafer", "layer"]], on=["lot", "wafer", "layer"])
    if result is None:
        return pd.DataFrame(columns=["lot", "wafer", "layer", "at_us"])
    return result.rename(columns={"processed_us": "at_us"})


def _row_matches(
    part: Mapping[str, str], steps: frozenset[str], columns: Mapping[str, str]
) -> bool:
    for factor, level in part.items():
        step, dot, column = factor.rpartition(".")
        if step_name(columns) not in ({step} if dot else steps or {step_name(columns)}):
            return False
        if columns.get(column if dot else factor, "") != level:
            return False
    return True


def _measured(connection: Connection, suspicion: Suspicion) -> pd.DataFrame:
    wanted = suspicion.wanted()
    ids = lot_records.matching_contexts(
        connection, lambda c: all(c.get(f, "") == v for f, v in wanted.items())
    )
    rows = lot_records.measured_between(
        connection, list(ids), suspicion.first_us, suspicion.last_us
    )
    return rows.rename(columns={"measured_us": "at_us"})[["lot", "wafer", "layer", "at_us"]]


def _unlogged(connection: Connection, suspicion: Suspicion) -> pd.DataFrame:
    """Measured wafers in the context that the log does not have at all."""
    if any("." in factor for factor in suspicion.factors):
        return pd.DataFrame(columns=["lot", "wafer", "layer", "at_us"])
    # What was processed in the span is measured in it or later, until the clock.
    rows = _measured(
        connection,
        Suspicion(suspicion.factors, suspicion.levels, suspicion.first_us, 2**62),
    )
    if rows.empty:
        return rows
    logged = lot_records.logged_lots(connection, rows["lot"].unique().tolist())
    rows = rows[~rows["lot"].isin(logged)]
    return rows[rows["at_us"] <= suspicion.last_us]


def p_out_of_spec(lots: pd.DataFrame, outlook: Outlook) -> tuple[FloatArray, FloatArray]:
    """Predicted mean and probability that the mean of a wafer lies out of spec, per lot.

    A measured lot is judged by its own mean, another one by the fault's course. NaN where the
    characteristic does not apply to the lot's layer or has no specification.
    """
    from scipy.special import ndtr

    n = len(lots)
    predicted, sd = np.full(n, np.nan), np.full(n, outlook.sd)
    if n == 0:
        return predicted, predicted
    applies = np.ones(n, bool)
    if outlook.layer is not None:
        applies = lots["layer"].to_numpy(object) == outlook.layer
    stamps = lots["processed_us"].to_numpy(np.float64)
    predicted[applies] = outlook.moved(stamps[applies])
    for i, pair in enumerate(zip(lots["lot"], lots["layer"], strict=True)):
        value = (outlook.measured or {}).get(pair)
        if applies[i] and value is not None:
            predicted[i], sd[i] = value, outlook.measured_sd
    chance = np.zeros(n)
    if outlook.lower is not None:
        chance += ndtr((outlook.lower - predicted) / sd)
    if outlook.upper is not None:
        chance += ndtr((predicted - outlook.upper) / sd)
    if outlook.lower is None and outlook.upper is None:
        chance[:] = np.nan
    return predicted, chance
