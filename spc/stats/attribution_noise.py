"""The noise of the bay: what residuals do when nothing happened.

Residual of a cell = shared lot part + own lot part of the stream + wafer and site part. The shared
lot part is common to every stream that saw the lot (cups of one track), the own lot part to the
cells of one plotted point. Two nested rank-one updates (Sherman-Morrison) whiten both. The lag-1
autocorrelation of a series inflates the variance of a window's mean by the exact AR(1) factor

    1 + 2 sum_{k<m} (1 - k/m) phi^k  =  (1+phi)/(1-phi) - 2 phi (1 - phi^m) / (m (1-phi)^2)

(variance of a mean of a stationary AR(1) series: Box, Jenkins, Reinsel & Ljung, Time Series
Analysis, section 2.1.5; checked against simulation in the tests). Everything the caller estimated
from a few dozen baseline points (variance, autocorrelation) is shrunk towards its family.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from spc.stats.attribution_evidence import FloatArray, IntArray, sums

_LONG_RUN = 16


@dataclass(frozen=True)
class Noise:
    """Variance structure of the cells, ready to whiten any residual (see `whiten`).

    Cell arrays (n,): `weight` 1/own variance, `point` and `group` dense codes (a group is one lot
    in one family), `own`, `lot_own`, `lot_shared` variances, `cap` largest residual that the scan
    believes, in unit. Point arrays: `point_factor`. Group arrays: `group_factor`. Family arrays:
    `sigma` (typical sigma of a plotted point, unit), `kappa` (part of the lot variance that is
    shared by the streams of a lot), `correlation` (F, F) of lots between families.
    Series arrays: `phi`, `center` (variance of the baseline centre), `series_q` and
    `series_points` (precision and points of the monitored cells); `shared_series` and `shared_q`
    list the series of each group and their precision in it, from `shared_start`. `by_point`
    and `by_group` sort the cells; `many` are the cells of points with several cells, each with
    its `many_row` (point) and `many_place` in it.
    """

    weight: FloatArray
    point: IntArray
    group: IntArray
    own: FloatArray
    lot_own: FloatArray
    lot_shared: FloatArray
    cap: FloatArray
    point_factor: FloatArray
    group_factor: FloatArray
    q: FloatArray
    sigma: FloatArray
    kappa: FloatArray
    correlation: FloatArray
    phi: FloatArray
    center: FloatArray
    series_q: FloatArray
    series_points: FloatArray
    shared_start: IntArray
    shared_series: IntArray
    shared_q: FloatArray
    by_point: IntArray
    by_group: IntArray
    many: IntArray
    many_row: IntArray
    many_place: IntArray

    def whiten(self, residual: FloatArray) -> FloatArray:
        """Return the inverse covariance times the residual, shape (n,), 1/unit.

        The score of any cell pattern x is then the plain sum x'y.
        """
        by_point = sums(self.point, self.weight * residual, len(self.point_factor))
        out = self.weight * (residual - (self.point_factor * by_point)[self.point])
        by_group = sums(self.group, self.q * residual, len(self.group_factor))
        return out - self.q * (self.group_factor * by_group)[self.group]

    def information(self, codes: IntArray) -> tuple[FloatArray, FloatArray]:
        """Return what each cell adds to the information of its own level, 1/unit^2, and to points.

        `codes` (n,) level codes, -1 for cells left out (they get 0). The sum over the cells of a
        level is x'V^-1 x for its pattern x; a point whose cells lie in several levels loses what
        its lot part costs. The second array (n,) sums to the plotted points that a level touches.
        """
        cells = np.flatnonzero(codes >= 0)
        wx, count = _sums_of_equals(self.by_point, self.point, codes, self.weight)
        qx, _ = _sums_of_equals(self.by_group, self.group, codes, self.q)
        info, share = np.zeros(len(codes)), np.zeros(len(codes))
        point, group = self.point[cells], self.group[cells]
        info[cells] = self.weight[cells] * (1.0 - self.point_factor[point] * wx[cells])
        info[cells] -= self.q[cells] * self.group_factor[group] * qx[cells]
        share[cells] = 1.0 / count[cells]
        return info, share

    def center_information(
        self, cells: IntArray, pair: IntArray, owner: IntArray, member: IntArray
    ) -> FloatArray:
        """Return what each of some cells tells of the centre of its pair's series, 1/unit^2.

        `pair` (k,) pair of each cell; `owner`, `member` list the series of each pair, sorted. The
        sum over a window is x'V^-1 1, the ones standing on all cells of the pair's series: series
        of the pair that share the lot make it tell less.
        """
        m = len(self.phi)
        first = self.shared_start[self.group[cells]]
        count = self.shared_start[self.group[cells] + 1] - first
        row = np.repeat(np.arange(len(cells)), count)
        entry = np.arange(len(row)) - np.repeat(np.cumsum(count) - count, count) + first[row]
        wanted = pair[row] * m + self.shared_series[entry]
        known = owner * m + member
        at = np.minimum(np.searchsorted(known, wanted), len(known) - 1)
        together = sums(row, self.shared_q[entry] * (known[at] == wanted), len(cells))
        return self.q[cells] * (1.0 - self.group_factor[self.group[cells]] * together)

    def clip(self, residual: FloatArray) -> FloatArray:
        """Return the residual with wild values brought in, (n,).

        A cell is first held within its family's cap of its own sigma around the median of its
        point (one bad wafer), then within the cap of its whole sigma around 0.
        """
        many = self.many
        if not len(many):
            return np.clip(residual, -self.cap, self.cap)
        out = residual.copy()
        value = residual[many]
        table = np.full((int(self.many_row[-1]) + 1, int(self.many_place.max()) + 1), np.inf)
        table[self.many_row, self.many_place] = value
        table.sort(axis=1)
        size = np.bincount(self.many_row)
        rows = np.arange(len(size))
        middle = 0.5 * (table[rows, (size - 1) // 2] + table[rows, size // 2])
        around = middle[self.many_row]
        room = self.cap[many] * np.sqrt(self.own[many] / (self.own[many] + self.lot[many]))
        out[many] = np.clip(value, around - room, around + room)
        return np.clip(out, -self.cap, self.cap)

    def part(self, cells: IntArray) -> Noise:
        """Return the noise of some cells only (sorted indices). They have to hold every cell of
        the groups that they touch; the series tables stay those of the whole."""
        _, point = np.unique(self.point[cells], return_inverse=True)
        _, group = np.unique(self.group[cells], return_inverse=True)
        first_point = np.zeros(int(point.max(initial=-1)) + 1, dtype=np.int64)
        first_point[point] = self.point[cells]
        first_group = np.zeros(int(group.max(initial=-1)) + 1, dtype=np.int64)
        first_group[group] = self.group[cells]
        names = ("weight", "own", "lot_own", "lot_shared", "cap", "q")
        return replace(
            self,
            **{name: getattr(self, name)[cells] for name in names},
            **noise_layout(point.astype(np.int64), group.astype(np.int64)),
            point_factor=self.point_factor[first_point],
            group_factor=self.group_factor[first_group],
        )

    @property
    def lot(self) -> FloatArray:
        """Whole lot variance of each cell, shape (n,)."""
        return self.lot_own + self.lot_shared


def ar1_inflation(m: FloatArray, phi: FloatArray) -> FloatArray:
    """Return the factor by which lag-1 autocorrelation widens the variance of a mean of m points.

    `m` points (values under 1 count as 1) and `phi` broadcast together. Source: module docstring.
    """
    if not np.any(phi):
        return np.ones(np.broadcast_shapes(np.shape(m), np.shape(phi)))
    m = np.maximum(m, 1.0)
    one = 1.0 - phi
    return (1.0 + phi) / one - 2.0 * phi * (1.0 - phi**m) / (m * one**2)


def noise_layout(point: IntArray, group: IntArray) -> dict[str, Any]:
    """Return the codes of points and groups with the orders and places that go with them."""
    by_point = np.argsort(point, kind="stable")
    size = np.bincount(point)
    many = by_point[size[point[by_point]] > 1]
    fresh = np.r_[True, point[many][1:] != point[many][:-1]] if len(many) else np.zeros(0, bool)
    row = np.cumsum(fresh) - 1
    place = np.arange(len(many)) - np.flatnonzero(fresh)[row] if len(many) else row
    return {
        "point": point,
        "group": group,
        "by_point": by_point,
        "by_group": np.argsort(group, kind="stable"),
        "many": many,
        "many_row": row,
        "many_place": place,
    }


def _sums_of_equals(
    order: IntArray, owner: IntArray, codes: IntArray, weight: FloatArray
) -> tuple[FloatArray, FloatArray]:
    """Return for each cell the summed weight, and the number, of the cells that have its owner
    (point or group) and its code; 0 where the code is negative. `order` sorts by owner."""
    cells = order[codes[order] >= 0]
    own, code, w = owner[cells], codes[cells], weight[cells]
    total, count = np.zeros(len(codes)), np.zeros(len(codes))
    run = int(np.bincount(own).max(initial=0))
    if run > _LONG_RUN:
        _, pair = np.unique(own * (int(code.max()) + 1) + code, return_inverse=True)
        total[cells], count[cells] = sums(pair, w)[pair], np.bincount(pair)[pair]
        return total, count
    t, c = w.copy(), np.ones(len(w))
    for d in range(1, run):
        same = (own[d:] == own[:-d]) & (code[d:] == code[:-d])
        t[d:] += np.where(same, w[:-d], 0.0)
        t[:-d] += np.where(same, w[d:], 0.0)
        c[d:] += same
        c[:-d] += same
    total[cells], count[cells] = t, c
    return total, count
