"""One level looked at closely: every onset, every end, every form.

The same score as the coarse scan, at the resolution of single events (distinct times) of the
level, with the end of the fault free. The form is chosen by its marginal likelihood (sum over
onsets and ends under their priors; BIC is the large-sample form of it). The confidence set of the
onset holds the likeliest events whose posterior, all forms together and under a flat prior of the
onset, reaches the level.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from spc.stats.attribution_candidates import Candidate
from spc.stats.attribution_evidence import (
    DAY,
    AttributionOptions,
    BoolArray,
    Evidence,
    FloatArray,
    IntArray,
    sums,
)
from spc.stats.attribution_inclusion import Inclusion
from spc.stats.attribution_noise import Noise
from spc.stats.attribution_search import series_scores
from spc.stats.attribution_windows import (
    BORN,
    Cross,
    Normal,
    OffsetModel,
    new_cells,
    offset_model,
)

_MAX_BINS = 64
_NEAR = 12


@dataclass(frozen=True)
class Shape:
    """A form in time: `kind` step, ramp or lot; window [start, end) in seconds of the column's
    time (end inf: not ended); `lot` of a single-lot spike, else -1."""

    kind: str
    start: float
    end: float = np.inf
    lot: int = -1


@dataclass(frozen=True)
class Profile:
    """Result of the close look. `score` log marginal likelihood with priors (compare levels by
    it), `gain` log Bayes factor of the best window alone, `shape` the best window, `forms` log
    marginal likelihood of each form, `onset` (estimate, earliest, latest) in seconds: earliest is
    the last event before the set, since the fault began after it."""

    score: float
    gain: float
    shape: Shape
    forms: dict[str, float]
    onset: tuple[float, float, float]


def profile_level(
    evidence: Evidence,
    noise: Noise,
    candidate: Candidate,
    y: FloatArray,
    options: AttributionOptions,
) -> Profile | None:
    """Look closely at one level; `y` (n,) whitened residuals.

    Only windows with a cell measured after `options.since` are looked at. Returns None when the
    level has no monitored cell, or none that is new.
    """
    column, level = candidate.column, candidate.level
    cells = np.flatnonzero(evidence.monitoring & column.cells(level))
    if not len(cells) or not new_cells(evidence, options)[cells].any():
        return None
    info, share = noise.information(np.where(column.cells(level), 0, -1))
    look = _Look.of(evidence, noise, candidate, cells, y, (info[cells], share[cells]), options)
    bins = _coarse(len(look.events))
    found = look.forms(bins)
    if len(bins) < len(look.events):
        best = _best_window(found)
        found = look.forms(_focus(len(look.events), bins, best))
    return look.result(found, candidate.log_prior)


@dataclass(frozen=True)
class _Forms:
    """Log posterior weights on the bins: step and ramp (k, k) over (start, end) bins, lots; the
    same without priors (`raw_`); `onset` (k,) over starts under a flat prior, all forms."""

    bins: IntArray
    step: FloatArray
    ramp: FloatArray
    lot: FloatArray
    raw_step: FloatArray
    raw_ramp: FloatArray
    raw_lot: FloatArray
    onset: FloatArray


@dataclass(frozen=True)
class _Look:
    events: FloatArray
    event: IntArray
    family: IntArray
    y: FloatArray
    info: FloatArray
    share: FloatArray
    whole: FloatArray
    time: FloatArray
    model: OffsetModel
    series_score: FloatArray
    prior: Inclusion
    tau2: FloatArray
    lot: IntArray
    new: BoolArray
    born: bool
    options: AttributionOptions
    origin: float

    @classmethod
    def of(
        cls, evidence: Evidence, noise: Noise, candidate: Candidate, cells: IntArray,
        y: FloatArray, weights: tuple[FloatArray, FloatArray], options: AttributionOptions,
    ) -> _Look:  # fmt: skip
        column, unknown, (info, share) = candidate.column, candidate.unknown, weights
        families, family = np.unique(evidence.cell_family[cells], return_inverse=True)
        seconds = column.time[cells]
        events, event = np.unique(seconds, return_inverse=True)
        model = offset_model(evidence, noise, cells, family, info, share, unknown[families])
        level = column.codes[cells[0]]
        return cls(
            events=events, event=event, family=family, y=y[cells], info=info, share=share,
            whole=model.tells,
            time=(seconds - events[-1]) / DAY, model=model,
            series_score=series_scores(evidence, y),
            prior=Inclusion.of(evidence, families, np.array([0])),
            tau2=(options.prior_sigmas * noise.sigma[families]) ** 2,
            lot=evidence.lot[cells], new=new_cells(evidence, options)[cells], options=options,
            origin=float(events[-1]),
            born=not bool(np.any(column.cells(int(level)) & ~evidence.monitoring)),
        )  # fmt: skip

    def forms(self, bins: IntArray) -> _Forms:
        """Score all windows whose ends are on `bins` (indices of events that begin a bin)."""
        k, n_families = len(bins), len(self.tau2)
        at = np.searchsorted(bins, self.event, side="right") - 1
        key = self.family * k + at

        def table(weight: FloatArray) -> FloatArray:
            out = np.zeros((n_families, k + 1))
            by_bin = sums(key, weight, n_families * k).reshape(n_families, k)
            out[:, :k] = by_bin[:, ::-1].cumsum(1)[:, ::-1]
            return out

        s0, s1 = table(self.y), table(self.y * self.time)
        i0, i1, i2 = (table(self.info * self.time**p) for p in range(3))
        e0, e1 = (table(self.whole * self.time**p) for p in range(2))
        points = table(self.share)
        start = (self.events[bins] - self.origin) / DAY
        ends = np.append(start[1:], 1.0 / 24.0)
        total = self.model.total(s0[:, 0], self.series_score)

        # Only windows that hold something new: (start bin, end bin) pairs, flat.
        fresh = sums(at, self.new, k)[::-1].cumsum()[::-1]
        a, b = np.nonzero(fresh[:, None] - np.append(fresh, 0.0)[None, 1:] > 0)

        def window(c: FloatArray) -> FloatArray:
            out: FloatArray = c[:, a] - c[:, b + 1]
            return out

        t0 = start[a]
        w_i0, w_i1, w_e0 = window(i0), window(i1), window(e0)
        w_points = np.maximum(window(points), 0.0)
        w_s0 = window(s0)
        reach = np.maximum(ends[b] - t0, 1.0 / 24.0)
        step = self.model.terms(
            Cross(np.maximum(w_i0, 0.0), w_i0, w_e0, w_points), self.tau2[:, None]
        ).log_bayes(w_s0, total)  # fmt: skip
        info = np.maximum(window(i2) - 2.0 * t0 * w_i1 + t0**2 * w_i0, 0.0)
        ramp = self.model.terms(
            Cross(info, w_i1 - t0 * w_i0, window(e1) - t0 * w_e0, w_points),
            self.tau2[:, None] / reach**2,
        ).log_bayes(window(s1) - t0 * w_s0, total)  # fmt: skip
        raw_step, raw_ramp = np.full((k, k), -np.inf), np.full((k, k), -np.inf)
        raw_step[a, b] = self._over_families(step)
        raw_ramp[a, b] = self._over_families(ramp)
        raw_lot, prior_lot = self._lots(total)
        log = {name: np.log(value) for name, value in self.options.shape_prior.items()}
        open_step, open_ramp, closed = self._priors(k)
        step_prior = closed + log["window"]
        flat_step, flat_ramp = step_prior.copy(), step_prior - np.log(2.0)
        ramp_prior = flat_ramp.copy()
        step_prior[:, -1] = open_step + log["step"]
        ramp_prior[:, -1] = open_ramp + log["ramp"]
        flat_step[:, -1], flat_ramp[:, -1] = log["step"] - np.log(k), log["ramp"] - np.log(k)
        return _Forms(
            bins, raw_step + step_prior, raw_ramp + ramp_prior, raw_lot + prior_lot + log["lot"],
            raw_step, raw_ramp, raw_lot,
            np.logaddexp.reduce(np.logaddexp(raw_step + flat_step, raw_ramp + flat_ramp), axis=1),
        )  # fmt: skip

    def _over_families(self, b: FloatArray) -> FloatArray:
        return self.prior.score(b)[0]

    def _lots(self, total: Normal) -> tuple[FloatArray, FloatArray]:
        lots, entry = np.unique(self.lot, return_inverse=True)
        n_families = len(self.tau2)
        key = self.family * len(lots) + entry

        def table(weight: FloatArray) -> FloatArray:
            return sums(key, weight, n_families * len(lots)).reshape(n_families, -1)

        info = table(self.info)
        cross = Cross(info, info, table(self.whole), table(self.share))
        terms = self.model.terms(cross, 4.0 * self.tau2[:, None])
        fresh = sums(entry, self.new) > 0
        prior = np.where(fresh, -np.log(max(int(fresh.sum()), 1)), -np.inf)
        return self._over_families(terms.log_bayes(table(self.y), total)), prior

    def _priors(self, k: int) -> tuple[FloatArray, FloatArray, FloatArray]:
        """Log priors of open steps, open ramps (k,) and closed windows (k, k)."""
        weight = 1.0 / (np.arange(k, 0, -1) + 0.5)
        weight /= weight.sum()
        step = weight.copy()
        if self.born:
            step *= 1.0 - BORN
            step[0] += BORN
        length = np.arange(k)[None, :] - np.arange(k)[:, None] + 1.0
        inside = (length >= 1.0) & (np.arange(k)[None, :] < k - 1)
        closed = np.where(inside, 1.0 / np.maximum(length, 1.0), 0.0)
        closed /= np.maximum(closed.sum(), 1e-300)
        with np.errstate(divide="ignore"):
            return np.log(step), np.log(weight), np.log(closed)

    def result(self, found: _Forms, log_prior: float) -> Profile:
        """Choose the form and its window, and bound the onset."""
        lots = np.unique(self.lot)
        forms = {
            "step": _log_sum(found.step[:, -1]),
            "window": _log_sum(found.step[:, :-1]),
            "ramp": _log_sum(found.ramp[:, -1]),
            "ramp-window": _log_sum(found.ramp[:, :-1]),
            "lot": _log_sum(found.lot),
        }
        score = _log_sum(np.array(list(forms.values()))) + log_prior
        form = max(forms, key=lambda name: forms[name])
        bins = np.append(self.events[found.bins], np.inf)
        if form == "lot":
            i = int(found.lot.argmax())
            times = self.events[self.event[self.lot == lots[i]]]
            start, stop = float(times.min()), float(np.nextafter(times.max(), np.inf))
            before = self.events[self.events < start]
            earliest = float(before[-1]) if len(before) else start
            shape = Shape("lot", start, stop, int(lots[i]))
            return Profile(score, float(found.raw_lot[i]), shape, forms, (start, earliest, start))
        kind = "ramp" if form.startswith("ramp") else "step"
        table = (found.ramp if kind == "ramp" else found.step).copy()
        raw = found.raw_ramp if kind == "ramp" else found.raw_step
        if form.endswith("window"):
            table[:, -1] = -np.inf
        else:
            table[:, :-1] = -np.inf
        onset = self._onset(found.onset, bins)
        a, b = np.unravel_index(int(table.argmax()), table.shape)
        shape = Shape(kind, float(bins[a]), float(bins[b + 1]))
        return Profile(score, float(raw[a, b]), shape, forms, (float(bins[a]), *onset))

    def _onset(self, weight: FloatArray, bins: FloatArray) -> tuple[float, float]:
        """Return earliest and latest of the confidence set of the onset. What looks like a step
        may be a drift that began earlier: the set counts all forms by their weight."""
        p = np.exp(weight - weight.max())
        p /= p.sum()
        order = np.argsort(-p)
        need = int(np.searchsorted(np.cumsum(p[order]), self.options.confidence)) + 1
        chosen = order[:need]
        first, last = int(chosen.min()), int(chosen.max())
        return float(bins[max(first - 1, 0)]), float(bins[last])


def _log_sum(values: FloatArray) -> float:
    values = values[np.isfinite(values)]
    return float(np.logaddexp.reduce(values)) if values.size else -np.inf


def _coarse(n_events: int) -> IntArray:
    """Return the events that begin a bin: all if few, else the latest half fine, others shared."""
    if n_events <= _MAX_BINS:
        return np.arange(n_events)
    half = _MAX_BINS // 2
    early = np.linspace(0, n_events - half, half, endpoint=False).astype(np.int64)
    return np.unique(np.r_[early, np.arange(n_events - half, n_events)])


def _best_window(found: _Forms) -> tuple[int, int]:
    table = found.step if found.step.max() >= found.ramp.max() else found.ramp
    a, b = np.unravel_index(int(table.argmax()), table.shape)
    return int(a), int(b)


def _focus(n_events: int, bins: IntArray, best: tuple[int, int]) -> IntArray:
    """Return bins that are single events near the best start and end, and coarse elsewhere."""
    edges = np.append(bins, n_events)
    a, b = best
    out = [np.linspace(0, n_events, _MAX_BINS // 4, endpoint=False).astype(np.int64)]
    for i in (a, min(b + 1, len(bins) - 1)):
        low, high = edges[max(i - 1, 0)], edges[min(i + 1, len(bins))]
        if high - low > 2 * _NEAR:
            out.append(np.linspace(low, high, 2 * _NEAR, endpoint=False).astype(np.int64))
        else:
            out.append(np.arange(low, high))
    return np.unique(np.clip(np.concatenate(out), 0, n_events - 1))
