"""Decide which candidates are true corners, and place them.

At each candidate a wedge is compared with the same wedge rounded by a fillet; a score made of the turn, the gain of the
wedge over the fillet, the quality of the fit and the bend of its sides decides. Close pairs and blunt tips are told
apart by a chain of two corners. The weights of the score come from a logistic regression on traced outlines with known
corners; they are empirical.
"""

import numpy as np

from geometry.arrays import BoolArray, FloatArray, IntArray
from geometry.corners.candidates import gaps_ahead
from geometry.corners.outline import EvenOutline
from geometry.corners.wedge import (
    Chain,
    Samples,
    Wedge,
    fillet_radius,
    fit_chain,
    fit_wedge,
    meeting_point,
    moved_out,
    residual_sum,
    start_line,
)

__all__ = ["Search"]

# lengths in the outline's scale, angles in degrees
_WINDOW, _WINDOW_LEAST, _NEIGHBOUR_CLEAR = 9.0, 1.25, 0.5
_ROUND_RADIUS, _ROUND_TURN = 6.0, 65.0
_PAIR_GAP, _PAIR_RADII = 7.0, (0.0, 3.0, 6.0, 9.0, 13.0)
_SPLIT_START, _SPLIT_RADII = 2.0, (0.0, 2.0, 3.0, 4.5, 6.0, 9.0)
_TIP_TURN = 150.0
_PLACE_WINDOWS, _PLACE_RIDGE = (12.0, 17.0), 400.0


class Search:
    """Candidates of one outline with their fits; lengths in the outline's scale, frames moved to each candidate."""

    def __init__(
        self, outline: EvenOutline, fair: FloatArray, scale: float, tolerance: float, median_edge: float
    ) -> None:
        self.outline, self.scale, self.tolerance = outline, scale, tolerance / scale
        self.origin = outline.points.mean(axis=0)
        self.samples = (outline.points - self.origin) / scale
        self.fair = (fair - self.origin) / scale
        self.step = outline.step / scale
        self.count = len(self.samples)
        self.half_length = 0.5 * outline.length / scale
        self.noise = self._noise(median_edge / scale)

    def _noise(self, median_edge: float) -> float:
        """Return the variance of the samples' normal offset, in scale squared."""
        stiff, slope = self.outline.smoothed(3.0 * self.scale, 1)
        gap = (self.outline.points - stiff) / self.scale
        speed = np.maximum(np.hypot(slope[:, 0], slope[:, 1]), 1e-9)
        normal = (slope[:, 0] * gap[:, 1] - slope[:, 1] * gap[:, 0]) / speed
        spread = float(np.median(np.abs(normal))) / 0.6745
        return max(spread**2, (0.22 * self.tolerance) ** 2) * max(1.0, 0.7 * median_edge)

    # ---- windows -----------------------------------------------------------------------

    def _reach(self, window: float) -> tuple[FloatArray, FloatArray]:
        """Return how far every candidate's window reaches back and ahead, up to the neighbours."""
        ahead = gaps_ahead(self.index, self.count, self.outline.closed) * self.step
        behind = np.roll(ahead, 1)
        if self.index.size == 1 and self.outline.closed:
            ahead = behind = np.full(1, np.inf)
        most = min(window, self.half_length)
        most = max(most, _WINDOW_LEAST)
        back, reach = (np.clip(gap - _NEIGHBOUR_CLEAR, _WINDOW_LEAST, most) for gap in (behind, ahead))
        return back, reach

    def _gather(
        self, centre: FloatArray | IntArray, back: FloatArray, ahead: FloatArray
    ) -> tuple[Samples, FloatArray, FloatArray]:
        """Return samples about given sample positions, their offsets (n, m) and the frames' origins (n, 2)."""
        at = np.rint(centre).astype(np.intp)
        widest = int(np.ceil(max(back.max(), ahead.max()) / self.step))
        index = at[:, None] + np.arange(-widest, widest + 1)
        inside = np.ones(index.shape, dtype=bool)
        if self.outline.closed:
            index = np.mod(index, self.count)
        else:
            inside = (index >= 0) & (index < self.count)
            index = np.clip(index, 0, self.count - 1)
        offset = np.broadcast_to(np.arange(-widest, widest + 1) * self.step, index.shape)
        inside &= (offset >= -back[:, None]) & (offset <= ahead[:, None])
        frame = self.samples[np.mod(at, self.count)]
        return Samples(self.samples[index] - frame[:, None], np.where(inside, self.step, 0.0)), offset, frame

    def _fair_at(self, position: FloatArray | IntArray) -> FloatArray:
        at = np.rint(position).astype(np.intp)
        return self.fair[np.mod(at, self.count) if self.outline.closed else np.clip(at, 0, self.count - 1)]

    # ---- wedge against fillet ----------------------------------------------------------

    def start(self, index: IntArray) -> None:
        """Take the candidates, none fitted yet."""
        n = len(index)
        self.index = index
        self.wedge = Wedge(*(np.zeros((n, 2)) if k == 0 else np.zeros(n) for k in range(5)))
        self.reach = np.full((n, 2), np.nan)
        self.score, self.quality = np.full(n, np.nan), np.full(n, np.nan)
        self.tips = np.full((n, 2), np.nan)
        self.paired = np.zeros(n, dtype=bool)

    def _keep(self, kept: BoolArray) -> None:
        self.index, self.wedge, self.reach = self.index[kept], self.wedge.only(kept), self.reach[kept]
        self.score, self.quality = self.score[kept], self.quality[kept]
        self.tips, self.paired = self.tips[kept], self.paired[kept]

    def _fit_changed(self) -> None:
        """Fit wedge and fillet again where the window has changed."""
        if not self.index.size:
            return
        reach = np.stack(self._reach(_WINDOW), axis=1)
        changed = np.flatnonzero(np.any(reach != self.reach, axis=1))
        if not changed.size:
            return
        self.reach = reach
        back, ahead = reach[changed].T
        samples, offset, frame = self._gather(self.index[changed], back, ahead)
        wedge = self._first_wedge(samples, offset, offset, self._fair_at(self.index[changed]) - frame)
        wedge = fit_wedge(samples, wedge, 4)
        sharp = residual_sum(samples, wedge)
        turn = np.degrees(np.abs(wedge.turn))
        gain = np.zeros(len(changed))
        weak = np.flatnonzero(turn < _ROUND_TURN)
        if weak.size:
            few, some = wedge.only(weak), samples.only(weak)
            radius = fillet_radius(few, np.full(weak.size, _ROUND_RADIUS), np.minimum(back, ahead)[weak])
            rounded = fit_wedge(some, few, 4, radius=radius, halve=False)
            gain[weak] = (residual_sum(some, rounded, radius) - sharp[weak]) / self.noise
        quality = sharp / (self.noise * (back + ahead))
        self.score[changed] = (
            -0.13
            + 0.252 * (turn - 40.0)
            + 0.80 * np.arcsinh(gain)
            - 0.22 * np.log(quality + 0.05)
            - 49.6 * np.abs(wedge.k1 + wedge.k2)
        )
        self.quality[changed] = quality
        for name in ("a1", "k1", "a2", "k2"):
            getattr(self.wedge, name)[changed] = getattr(wedge, name)
        self.wedge.tip[changed] = wedge.tip + frame
        self.tips[changed] = wedge.tip + frame

    @staticmethod
    def _first_wedge(samples: Samples, before: FloatArray, after: FloatArray, otherwise: FloatArray) -> Wedge:
        """Return straight wedges through total-least-squares lines on either side."""
        left, right = start_line(samples, before, -4.0, -0.8), start_line(samples, after, 0.8, 4.0)
        tip = meeting_point(left, right, otherwise)
        off = tip - otherwise
        far = np.hypot(off[:, 0], off[:, 1])
        tip = np.where(far[:, None] > 2.5, otherwise + off / np.maximum(far, 1e-9)[:, None], tip)
        zero = np.zeros(len(tip))
        return Wedge(tip, left[1].copy(), zero, right[1].copy(), zero.copy())

    def remove_weak(self) -> None:
        """Drop candidates of negative score, of close ones the weakest first, until none falls."""
        for _ in range(10):
            self._fit_changed()
            bad = self.score < 0.0
            if not bad.any():
                return
            ahead = gaps_ahead(self.index, self.count, self.outline.closed) * self.step < 12.0
            lowest = bad.copy()
            if self.index.size > 1:
                after, before = np.roll(self.score, -1), np.roll(self.score, 1)
                lowest &= ~(ahead & (after < self.score)) & ~(np.roll(ahead, 1) & (before < self.score))
            self._keep(~lowest)

    # ---- pairs and splits --------------------------------------------------------------

    def test_pairs(self) -> None:
        """Keep two corners near each other only where a chain explains them better than one, sharp or round."""
        self._fit_changed()
        gaps = gaps_ahead(self.index, self.count, self.outline.closed) * self.step
        first = np.flatnonzero(gaps < _PAIR_GAP) if self.index.size > 1 else np.zeros(0, dtype=np.intp)
        if not first.size:
            return
        second = (first + 1) % self.index.size
        half = 0.5 * gaps[first]
        middle = self.index[first] + half / self.step
        samples, offset, frame = self._gather(middle, half + self.reach[first, 0], half + self.reach[second, 1])
        chain = Chain(
            self.wedge.tip[first] - frame,
            self.wedge.tip[second] - frame,
            self.wedge.a1[first],
            self.wedge.k1[first],
            self.wedge.a2[second],
            self.wedge.k2[second],
        )
        chain = fit_chain(samples, chain, 5)
        apart = half[:, None]
        start = self._first_wedge(samples, offset + apart, offset - apart, self._fair_at(middle) - frame)
        side = np.minimum(self.reach[first, 0], self.reach[second, 1]) + half
        rounds = self._rounded(samples, start, _PAIR_RADII, side)
        gain = (rounds.min(axis=0) - residual_sum(samples, chain)) / self.noise
        t1, t2 = (np.degrees(turn) for turn in chain.turns)
        both = np.minimum(np.abs(t1), np.abs(t2))
        strong = (self.score[first] > 1.5) & (self.score[second] > 1.5)
        keep = (gain > 12.0) & (chain.gap > 2.5) & ((both > 60.0) | ((both > 38.0) & ((t1 * t2 < 0.0) | strong)))
        dropped = np.zeros(self.index.size, dtype=bool)
        turn = np.abs(self.wedge.turn)
        for k in np.argsort(half):
            i, j = int(first[k]), int(second[k])
            if dropped[i] or dropped[j]:
                continue
            if keep[k]:
                self.tips[i], self.tips[j] = chain.p1[k] + frame[k], chain.p2[k] + frame[k]
                self.paired[i] = self.paired[j] = True
            else:
                dropped[i if turn[i] < turn[j] else j] = True
        self._keep(~dropped)

    @staticmethod
    def _rounded(samples: Samples, start: Wedge, radii: tuple[float, ...], side: FloatArray) -> FloatArray:
        """Return the residual sums of wedges with fillets of several radii, the first of them 0; shape (radii, n)."""
        sharp = fit_wedge(samples, start, 6)
        n, more = len(side), len(radii) - 1
        wanted = np.repeat(np.array(radii[1:]), n)
        index = np.tile(np.arange(n), more)
        many = samples.only(index)
        radius = fillet_radius(sharp.only(index), wanted, side[index])
        rounded = fit_wedge(many, moved_out(sharp.only(index), radius), 6, radius=radius, halve=False)
        sums = residual_sum(many, rounded, radius).reshape(more, n)
        return np.vstack([residual_sum(samples, sharp)[None], sums])

    def test_splits(self) -> None:
        """Split what is really two corners close together; drop what is a round end."""
        self._fit_changed()
        if not self.index.size:
            return
        turn = np.degrees(np.abs(self.wedge.turn))
        ahead = gaps_ahead(self.index, self.count, self.outline.closed) * self.step
        alone = np.minimum(ahead, np.roll(ahead, 1)) > 4.0 if self.index.size > 1 else np.ones(1, dtype=bool)
        chosen = np.flatnonzero(~self.paired & alone & ((turn > 115.0) | ((turn > 60.0) & (self.quality > 1.1))))
        if not chosen.size:
            return
        ahead_room, behind_room = ahead[chosen], np.roll(ahead, 1)[chosen]
        if self.index.size == 1 and self.outline.closed:
            ahead_room = behind_room = np.full(1, np.inf)
        most = min(_WINDOW + _SPLIT_START, self.half_length)
        back = np.clip(behind_room - _NEIGHBOUR_CLEAR, _WINDOW_LEAST, most)
        reach = np.clip(ahead_room - _NEIGHBOUR_CLEAR, _WINDOW_LEAST, most)
        samples, _, frame = self._gather(self.index[chosen], back, reach)
        back_off = round(_SPLIT_START / self.step)
        wedge = self.wedge.only(chosen)
        wedge = Wedge(wedge.tip - frame, wedge.a1, wedge.k1, wedge.a2, wedge.k2)
        chain = Chain(
            self._fair_at(self.index[chosen] - back_off) - frame,
            self._fair_at(self.index[chosen] + back_off) - frame,
            wedge.a1,
            wedge.k1,
            wedge.a2,
            wedge.k2,
        )
        chain = fit_chain(samples, chain, 5)
        rounds = self._rounded(samples, wedge, _SPLIT_RADII, np.minimum(back, reach))
        gain = (rounds.min(axis=0) - residual_sum(samples, chain)) / self.noise
        least = np.degrees(np.minimum(*(np.abs(turn) for turn in chain.turns)))
        split = (gain > 8.0) & (least > 40.0) & (chain.gap > 3.0) & (chain.gap < 9.0)
        big = np.array(_SPLIT_RADII) >= 3.0
        poor = (self.quality[chosen] > 3.0) & (turn[chosen] < _TIP_TURN)
        is_round = (rounds[0] - rounds[big].min(axis=0) > 4.0 * self.noise) | poor
        kept = np.ones(self.index.size, dtype=bool)
        kept[chosen[split | is_round]] = False
        points = [(chain.p1 + frame)[split], (chain.p2 + frame)[split]]
        at = np.concatenate([self._nearest(self.index[chosen][split], p) for p in points])
        a1, middle, a2 = chain.a1[split], chain.middle[split], chain.a2[split]
        zero = np.zeros(len(a1))
        added = (
            Wedge(points[0], a1, chain.k1[split], middle, zero),
            Wedge(points[1], middle, zero, a2, chain.k2[split]),
        )
        self._keep(kept)
        self._insert(at, np.concatenate(points), added)

    def _insert(self, at: IntArray, tips: FloatArray, added: tuple[Wedge, Wedge]) -> None:
        """Add the corners of splits; they keep their places."""
        n = len(at)
        if not n:
            return
        order = np.argsort(np.concatenate([self.index, at]), kind="stable")

        def merged(old: FloatArray, new: FloatArray) -> FloatArray:
            return np.concatenate([old, new])[order]

        first, second = added
        self.index = np.concatenate([self.index, at])[order]
        self.wedge = Wedge(
            merged(self.wedge.tip, tips),
            *(
                merged(getattr(self.wedge, name), np.concatenate([getattr(first, name), getattr(second, name)]))
                for name in ("a1", "k1", "a2", "k2")
            ),
        )
        self.reach = merged(self.reach, np.full((n, 2), np.nan))
        self.score, self.quality = merged(self.score, np.zeros(n)), merged(self.quality, np.zeros(n))
        self.tips = merged(self.tips, tips)
        self.paired = np.concatenate([self.paired, np.ones(n, dtype=bool)])[order]

    # ---- places ------------------------------------------------------------------------

    def place(self) -> None:
        """Refine the places of single corners on longer windows while the fit stays good."""
        single = np.flatnonzero(~self.paired)
        if not single.size:
            return
        wedge = self.wedge.only(single)
        reference, going = self.quality[single], np.ones(single.size, dtype=bool)
        for window in _PLACE_WINDOWS:
            reach = np.stack(self._reach(window), axis=1)[single]
            samples, _, frame = self._gather(self.index[single], *reach.T)
            local = Wedge(wedge.tip - frame, wedge.a1, wedge.k1, wedge.a2, wedge.k2)
            better = fit_wedge(samples, local, 2, ridge=_PLACE_RIDGE, halve=False)
            quality = residual_sum(samples, better) / (self.noise * reach.sum(axis=1))
            moved = np.hypot(*(better.tip + frame - self.wedge.tip[single]).T)
            going &= (quality <= 1.2 * reference + 0.1) & (moved < 1.5)
            values = ((better.tip + frame), better.a1, better.k1, better.a2, better.k2)
            old = (wedge.tip, wedge.a1, wedge.k1, wedge.a2, wedge.k2)
            wedge = Wedge(
                *(np.where(going[:, None] if v.ndim == 2 else going, v, o) for v, o in zip(values, old, strict=True))
            )
        self.tips[single] = wedge.tip
        for name in ("a1", "a2"):
            getattr(self.wedge, name)[single] = getattr(wedge, name)

    def _nearest(self, index: IntArray, points: FloatArray) -> IntArray:
        """Return the sample nearest to each point within 8 scales of an index."""
        widest = min(int(8.0 / self.step), self.count // 2)
        near = index[:, None] + np.arange(-widest, widest + 1)
        near = np.mod(near, self.count) if self.outline.closed else np.clip(near, 0, self.count - 1)
        gap = self.samples[near] - points[:, None]
        best = np.argmin(gap[..., 0] ** 2 + gap[..., 1] ** 2, axis=1)
        return near[np.arange(len(index)), best]

    def result(self) -> tuple[FloatArray, FloatArray, FloatArray]:
        """Return own arc length, place and turn of the corners, in drawing units and radians.

        Places are clamped to 0.95 of the tolerance from the polyline's samples.
        """
        nearest = self._nearest(self.index, self.tips)
        gap = self.tips - self.samples[nearest]
        far = np.hypot(gap[:, 0], gap[:, 1])
        most = 0.95 * self.tolerance
        tips = self.samples[nearest] + gap * np.minimum(1.0, most / np.maximum(far, 1e-12))[:, None]
        along = self.outline.own[nearest]
        order = np.argsort(along, kind="stable")
        return along[order], (tips * self.scale + self.origin)[order], self.wedge.turn[order]
