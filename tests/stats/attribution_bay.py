"""An invented bay for the tests of the attribution engine: residuals with known truth.

Three tracks of four cups, three exposure tools, two gauges a parameter; lots split over cups,
sampled for metrology, measured late; lot parts shared over cups and autocorrelated; usual offsets
of cups and gauges; uncertain centres, variances and autocorrelations; wild sites. Numbers are in
sigmas of the part that varies from lot to lot; nothing here comes from a real bay.
"""

from __future__ import annotations

from dataclasses import dataclass, field, replace

import numpy as np

from spc.stats.attribution import Evidence

HOUR = 3600.0
DAY = 24.0 * HOUR
FACTORS = (
    "tool", "module", "gauge", "resist_batch", "reticle", "product", "coat.tool", "coat.module",
)  # fmt: skip
SCORES = {"within-wafer", "wafer-to-wafer", "map-distance"}
FILM = ("mean", "within-wafer", "tilt-x", "tilt-y", "bowl", "map-distance")
WIDTH = ("mean", "within-wafer", "wafer-to-wafer", "tilt-x", "tilt-y", "bowl", "map-distance")
TERMS = (
    "translation-x", "translation-y", "scale-x", "scale-y", "rotation-x", "field-rotation-x",
    "residual",
)  # fmt: skip
CHARACTERISTICS = (FILM, WIDTH, TERMS)


@dataclass(frozen=True)
class Fault:
    """A fault: where (`factor` -> level name), what (`moves`: (characteristic, statistic) ->
    size), since when (day), until when, and `ramp` in days to reach the size (0: a step)."""

    where: dict[str, str]
    moves: dict[tuple[int, str], float]
    start: float
    end: float = np.inf
    ramp: float = 0.0
    form: str = "shift"
    lots: int = 0

    @property
    def measured(self) -> bool:
        return "gauge" in self.where


@dataclass(frozen=True)
class Bay:
    """Size and habits of the bay."""

    days: float = 24.0
    lots_a_day: float = 24.0
    baseline_days: float = 9.0
    tracks: int = 3
    cups: int = 4
    scanners: int = 3
    phi: float = 0.2
    shared: float = 0.6
    flyers: float = 0.003
    sampled: tuple[float, float, float] = (0.6, 0.7, 0.6)
    batch_days: float = 2.5
    offsets: float = 0.4
    batch_sigma: float = 0.1
    variance_df: float = 60.0
    faults: tuple[Fault, ...] = field(default=())

    def simulate(self, seed: int) -> Evidence:
        """Return the evidence of the whole time; cut it with `now`."""
        return _Maker(self, np.random.default_rng(seed)).evidence()

    def with_faults(self, *faults: Fault) -> Bay:
        return replace(self, faults=faults)


class _Maker:
    def __init__(self, bay: Bay, rng: np.random.Generator) -> None:
        self.bay, self.rng = bay, rng
        n = int(bay.days * bay.lots_a_day)
        self.n = n
        self.coat = np.sort(rng.uniform(0.0, bay.days * DAY, n))
        self.track = rng.integers(0, bay.tracks, n)
        self.scanner = rng.integers(0, bay.scanners, n)
        self.product = rng.integers(0, 3, n)
        self.reticle = self.product * 2 + rng.integers(0, 2, n)
        self.batch = (self.coat / (bay.batch_days * DAY)).astype(int)
        self.expose = self.coat + rng.uniform(1.0, 4.0, n) * HOUR
        first = rng.integers(0, bay.cups, n)
        self.cup = (first[:, None] + np.arange(3)[None, :]) % bay.cups
        self.rows: list[dict[str, np.ndarray]] = []

    def evidence(self) -> Evidence:
        parts = [self._film(), self._width(), self._overlay()]
        data = {k: np.concatenate([p[k] for p in parts]) for k in parts[0]}
        keys = np.stack([data["characteristic"], data["statistic"], data["stream"]])
        unique, series = np.unique(keys, axis=1, return_inverse=True)
        series = series.ravel()
        names = [CHARACTERISTICS[c][s] for c, s in unique[:2].T.tolist()]
        family = unique[0] * 10 + unique[1]
        _, family = np.unique(family, return_inverse=True)
        point_key = series * self.n + data["lot"]
        _, point = np.unique(point_key, return_inverse=True)
        value = self._noise(data, family[series]) + self._faults(data)
        return self._finish(data, series, point, family, unique[0], tuple(names), value)

    def _cells(
        self, characteristic: int, lots: np.ndarray, columns: dict[str, np.ndarray],
        stream: np.ndarray, statistics: tuple[str, ...],
    ) -> dict[str, np.ndarray]:  # fmt: skip
        m = len(lots)
        k = len(statistics)
        out = {name: np.tile(values, k) for name, values in columns.items()}
        out["lot"] = np.tile(lots, k)
        out["stream"] = np.tile(stream, k)
        out["characteristic"] = np.full(m * k, characteristic)
        order = [CHARACTERISTICS[characteristic].index(s) for s in statistics]
        out["statistic"] = np.repeat(np.array(order), m)
        return out

    def _context(
        self, lots: np.ndarray, cup: np.ndarray, own: str, gauge: np.ndarray
    ) -> dict[str, np.ndarray]:
        track = self.track[lots]
        film = own == "film"
        return {
            "tool": track if film else FIRST_SCANNER + self.scanner[lots],
            "module": cup if film else np.full(len(lots), -1),
            "gauge": gauge,
            "resist_batch": self.batch[lots],
            "reticle": np.full(len(lots), -1) if film else self.reticle[lots],
            "product": self.product[lots],
            "coat.tool": track,
            "coat.module": cup,
            "t_process": self.coat[lots] if film else self.expose[lots],
            "t_coat": self.coat[lots],
        }

    def _measure(self, parameter: int) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
        lots = np.flatnonzero(self.rng.random(self.n) < self.bay.sampled[parameter])
        base = self.coat if parameter == 0 else self.expose
        delay = self.rng.uniform(0.5, 6.0, len(lots)) * HOUR
        late = self.rng.random(len(lots)) < 0.03
        delay += late * self.rng.uniform(10.0, 40.0, len(lots)) * HOUR
        gauge = parameter * 2 + self.rng.integers(0, 2, len(lots))
        return lots, base[lots] + delay, gauge

    def _film(self) -> dict[str, np.ndarray]:
        lots, t, gauge = self._measure(0)
        lot3, t3, g3 = np.repeat(lots, 3), np.repeat(t, 3), np.repeat(gauge, 3)
        cup = self.cup[lots].ravel()
        columns = self._context(lot3, cup, "film", g3) | {"t_measure": t3}
        stream = self.track[lot3] * 10 + cup
        return self._cells(0, lot3, columns, stream, FILM)

    def _width(self) -> dict[str, np.ndarray]:
        lots, t, gauge = self._measure(1)
        lot3, t3, g3 = np.repeat(lots, 3), np.repeat(t, 3), np.repeat(gauge, 3)
        columns = self._context(lot3, self.cup[lots].ravel(), "width", g3) | {"t_measure": t3}
        whole = tuple(s for s in WIDTH if s != "wafer-to-wafer")
        a = self._cells(1, lot3, columns, self.scanner[lot3], whole)
        none = np.full(len(lots), -1)
        columns = self._context(lots, none, "width", gauge) | {"t_measure": t}
        b = self._cells(1, lots, columns, self.scanner[lots], ("wafer-to-wafer",))
        return {k: np.concatenate([a[k], b[k]]) for k in a}

    def _overlay(self) -> dict[str, np.ndarray]:
        lots, t, gauge = self._measure(2)
        none = np.full(len(lots), -1)
        columns = self._context(lots, none, "overlay", gauge) | {"t_measure": t}
        return self._cells(2, lots, columns, self.scanner[lots], TERMS)

    def _noise(self, data: dict[str, np.ndarray], family: np.ndarray) -> np.ndarray:
        """Lot part (autocorrelated per tool, shared over cups), own part, offsets, wild sites."""
        rng, bay = self.rng, self.bay
        n_families = int(family.max()) + 1
        score = self.is_score(data)
        tool = np.where(data["characteristic"] == 0, data["coat.tool"], data["tool"])
        lots = self._ar(tool, data["lot"], family, n_families)
        own_lot = self._point_noise(data, family)
        lot = np.sqrt(bay.shared) * lots + np.sqrt(1.0 - bay.shared) * own_lot
        out = np.where(score, 0.0, lot)
        own = np.where(score, 1.0, np.sqrt(0.6))
        out += own * rng.standard_normal(len(out))
        for name, size in (
            ("coat.module", bay.offsets), ("gauge", 0.5 * bay.offsets),
            ("resist_batch", bay.batch_sigma),
        ):  # fmt: skip
            table = size * rng.standard_normal((4 * FIRST_SCANNER, n_families))
            key = data[name] + (4 * data["coat.tool"] if name == "coat.module" else 0)
            out += np.where((data[name] >= 0) & ~score, table[key, family], 0.0)
        soft = data["statistic"] > 0
        wild = soft & (rng.random(len(out)) < bay.flyers) & (data["characteristic"] < 2)
        out += wild * rng.uniform(3.0, 8.0, len(out))
        return out

    def _ar(
        self, tool: np.ndarray, lot: np.ndarray, family: np.ndarray, n_families: int
    ) -> np.ndarray:
        from scipy.signal import lfilter

        phi = self.bay.phi
        out = np.empty(len(tool))
        for t in np.unique(tool).tolist():
            mine = tool == t
            lots = np.unique(lot[mine])
            e = self.rng.standard_normal((len(lots), n_families))
            z = lfilter([np.sqrt(1.0 - phi**2)], [1.0, -phi], e, axis=0)
            out[mine] = z[np.searchsorted(lots, lot[mine]), family[mine]]
        return out

    def _point_noise(self, data: dict[str, np.ndarray], family: np.ndarray) -> np.ndarray:
        key = (family * 10_000 + data["stream"]) * self.n + data["lot"]
        _, inverse = np.unique(key, return_inverse=True)
        return self.rng.standard_normal(int(inverse.max()) + 1)[inverse]

    @staticmethod
    def is_score(data: dict[str, np.ndarray]) -> np.ndarray:
        names = np.array([list(c) + [""] * (8 - len(c)) for c in CHARACTERISTICS])
        name = names[data["characteristic"], data["statistic"]]
        return np.isin(name, list(SCORES)) | (name == "residual")

    def _faults(self, data: dict[str, np.ndarray]) -> np.ndarray:
        out = np.zeros(len(data["lot"]))
        for fault in self.bay.faults:
            on = self.mask(data, fault)
            time = data["t_measure"] if fault.measured else self._acting(data, fault)
            grow = np.ones(len(out))
            if fault.ramp > 0:
                grow = (time - fault.start * DAY) / (fault.ramp * DAY)
            for (characteristic, statistic), size in fault.moves.items():
                code = CHARACTERISTICS[characteristic].index(statistic)
                hit = on & (data["characteristic"] == characteristic)
                hit &= data["statistic"] == code
                # Sizes are in sigmas of a plotted point.
                unit = 1.0 if statistic in SCORES or statistic == "residual" else SIGMA
                out += np.where(hit, grow * size * unit, 0.0)
        return out

    @staticmethod
    def _acting(data: dict[str, np.ndarray], fault: Fault) -> np.ndarray:
        coat = any(name.startswith("coat.") or name == "resist_batch" for name in fault.where)
        return data["t_coat"] if coat else data["t_process"]

    def mask(self, data: dict[str, np.ndarray], fault: Fault) -> np.ndarray:
        time = data["t_measure"] if fault.measured else self._acting(data, fault)
        on = (time >= fault.start * DAY) & (time < fault.end * DAY)
        for name, level in fault.where.items():
            on &= data[name] == LEVEL_NAMES[name].index(level)
        if fault.lots:
            lots = np.unique(data["lot"][on & (data["characteristic"] == 0)])
            on &= np.isin(data["lot"], lots[: fault.lots])
        return on

    def _finish(
        self, data: dict[str, np.ndarray], series: np.ndarray, point: np.ndarray,
        family: np.ndarray, characteristic: np.ndarray, names: tuple[str, ...], value: np.ndarray,
    ) -> Evidence:  # fmt: skip
        rng, bay = self.rng, self.bay
        monitoring = data["t_process"] >= bay.baseline_days * DAY
        m = len(family)
        score = np.array([s in SCORES or s == "residual" for s in names])
        base = ~monitoring
        count = np.maximum(np.bincount(series[base], minlength=m), 1)
        center = np.bincount(series[base], value[base], m) / count
        points = np.maximum(
            np.array([len(np.unique(point[base & (series == s)])) for s in range(m)]), 1
        )
        claimed = rng.chisquare(bay.variance_df, m) / bay.variance_df
        lot = np.where(score, 0.0, 1.0) * claimed
        own = np.where(score, 1.0, 0.6) * claimed
        phi = _lag_one(series, point, data["t_process"], value - center[series], base, m)
        levels = np.stack([data[name] for name in FACTORS], axis=1).astype(np.int64)
        times = np.full(levels.shape, np.nan)
        for name in ("coat.tool", "coat.module", "resist_batch"):
            times[:, FACTORS.index(name)] = data["t_coat"]
        return Evidence(
            series=series.astype(np.int64), point=point.astype(np.int64), lot=data["lot"],
            t_process=data["t_process"], t_measure=data["t_measure"],
            residual=value - np.where(score, 0.0, center)[series],
            var_own=own[series], var_lot=lot[series], monitoring=monitoring, levels=levels,
            factors=FACTORS, level_names=tuple(LEVEL_NAMES[f] for f in FACTORS),
            family=family.astype(np.int64), characteristic=characteristic.astype(np.int64),
            statistic=names, phi=phi,
            var_center=np.where(score, 0.02, (lot + own) / points * (1 + bay.phi) / (1 - bay.phi)),
            t_level=times,
        )  # fmt: skip


def _lag_one(
    series: np.ndarray, point: np.ndarray, time: np.ndarray, residual: np.ndarray,
    base: np.ndarray, m: int,
) -> np.ndarray:  # fmt: skip
    """Lag-1 autocorrelation of the baseline points of each series, as a caller would find it."""
    _, first, code = np.unique(point[base], return_index=True, return_inverse=True)
    mean = np.bincount(code, residual[base]) / np.bincount(code)
    owner = series[base][first]
    order = np.lexsort((time[base][first], owner))
    mean, owner = mean[order], owner[order]
    same = owner[1:] == owner[:-1]
    top = np.bincount(owner[1:][same], (mean[1:] * mean[:-1])[same], m)
    return np.clip(top / np.maximum(np.bincount(owner, mean**2, m), 1e-9), -0.9, 0.9)


SIGMA = float(np.sqrt(1.6))
FIRST_SCANNER = 200
_TOOLS = tuple(f"T{i + 1}" for i in range(FIRST_SCANNER)) + tuple(f"S{i + 1}" for i in range(99))
_CUPS = tuple(f"C{i + 1}" for i in range(10))
LEVEL_NAMES: dict[str, tuple[str, ...]] = {
    "tool": _TOOLS,
    "module": _CUPS,
    "gauge": ("FA", "FB", "WA", "WB", "OA", "OB"),
    "resist_batch": tuple(f"B{i}" for i in range(100)),
    "reticle": tuple(f"R{i}" for i in range(6)),
    "product": ("P1", "P2", "P3"),
    "coat.tool": _TOOLS[:FIRST_SCANNER],
    "coat.module": _CUPS,
}
