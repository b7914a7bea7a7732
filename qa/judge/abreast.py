"""Many control charts at once: the walk of `qa.judge.control`, along all segments of a fleet abreast.

Walking along one history is a Python loop over its sessions; here each step is taken in all segments together. Every operation
is that of `qa.judge.control.walk`, in the same order, so what comes of it is the same to the last bit.
"""

import math
from collections.abc import Iterator, Sequence

import numpy as np
from numpy.typing import NDArray

from qa.geometry import Floats
from qa.judge.control import (
    CALM,
    CORRELATION_AT_MOST,
    LEARNING,
    OUTLIER,
    QUARANTINE,
    REFERENCE,
    ControlChart,
    ControlRules,
    Walked,
    assemble,
    control_chart,
    judged_segments,
)
from qa.judge.streams import Stream
from qa.judge.student import normal_scores

__all__ = ["control_charts"]

_WORTHWHILE = 16
"""Segments from which on walking abreast is faster than along one after the other."""
_SETTLED = REFERENCE + QUARANTINE
"""Sessions after which a reference grows no more."""
_MEAN, _SPREAD, _FREEDOM, _CORRELATION, _SHARED = 0, 2, 3, 4, 5


def control_charts(histories: Sequence[Stream], rules: ControlRules | None = None) -> list[ControlChart]:
    """Chart many histories, each as `control_chart` does.

    Parameters
    ----------
    histories : sequence of Stream
        Of one or many scanners.
    rules : ControlRules, optional
        Which rules are on; the default set otherwise.

    Returns
    -------
    list of ControlChart
        In the same order.
    """
    rules = rules or ControlRules()
    starts = [[start.index for start in one.starts] for one in histories]
    places = [list(judged_segments(first, one.values.size)) for one, first in zip(histories, starts, strict=True)]
    if sum(map(len, places)) < _WORTHWHILE:
        return [control_chart(one.days, one.values, first, rules) for one, first in zip(histories, starts, strict=True)]
    segments = [(one.days[p].astype(float), one.values[p]) for one, some in zip(histories, places, strict=True) for p in some]
    walked = _walk(segments, rules)
    return [
        assemble(one.values, first, [next(walked) for _ in some], rules)
        for one, first, some in zip(histories, starts, places, strict=True)
    ]


def _walk(segments: Sequence[tuple[Floats, Floats]], rules: ControlRules) -> Iterator[Walked]:
    """Go along segments, given as days and values; yields what came of each, in their order."""
    order = sorted(range(len(segments)), key=lambda i: -segments[i][0].size)
    lanes = _Lanes([segments[i] for i in order], rules)
    lanes.learn()
    lanes.go_on()
    found = lanes.walked()
    return (found[place] for place in np.argsort(order).tolist())


class _Lanes:
    """Segments side by side, the longest first: arrays are (sessions, lanes), so that those still going are the first few."""

    def __init__(self, segments: Sequence[tuple[Floats, Floats]], rules: ControlRules) -> None:
        self.rules = rules
        self.sizes = [values.size for _, values in segments]
        shape = (self.sizes[0], len(segments))
        day, x = np.zeros(shape[::-1]), np.zeros(shape[::-1])
        for lane, (days, values) in enumerate(segments):
            day[lane, : days.size], x[lane, : values.size] = days, values
        self.x, self.steps = (x - x[:, :1]).T.copy(), _steps(day.T)
        self.outliers = _outliers(self.x[:LEARNING])
        self.bad = np.zeros(shape, dtype=bool)
        self.bad[:LEARNING] = self.outliers
        self.going = np.searchsorted(-np.array(self.sizes), -np.arange(1, shape[0] + 1), side="right").tolist()
        self.models = np.zeros((7, *shape))
        self.scores = np.zeros(shape)
        self.course = np.zeros((2, *shape))
        self.smoother = np.zeros((4, shape[1]))

    def learn(self) -> None:
        """Go along the sessions that may still change the reference."""
        sums = _Sums(self.x, self.steps, self.bad)
        for i in range(LEARNING):
            sums.add(i, ~self.bad[i])
        model = sums.model(len(self.sizes))
        calm = np.ones(len(self.sizes), dtype=bool)
        for i in range(LEARNING, min(self.sizes[0], _SETTLED)):
            going, joins = self.going[i], i - QUARANTINE
            model = model[:, :going]
            if joins >= LEARNING:
                sums.add(joins, calm[:going] & ~self.bad[joins, :going])
                model = sums.model(going)
            score = _scores((self.x[i, :going] - model[_MEAN]) / model[_SPREAD], model[_FREEDOM])
            smoothed, deviation = self._smooth(i, score, model)
            calm = np.abs(smoothed) < CALM * deviation
            self.bad[i, :going] |= np.abs(score) > 3
            if self.rules.ewma:
                self.bad[i - QUARANTINE + 1 : i + 1, :going] |= np.abs(smoothed) > self.rules.width * deviation
            self.scores[i, :going], self.models[:, i, :going] = score, model

    def go_on(self) -> None:
        """Go along the sessions after that, whose reference stays."""
        if self.sizes[0] <= _SETTLED:
            return
        going = self.going[_SETTLED]
        model = self.models[:, _SETTLED - 1, :going]
        self.models[:, _SETTLED:, :going] = model[:, np.newaxis]
        deviations = (self.x[_SETTLED:, :going] - model[_MEAN]) / model[_SPREAD]
        self.scores[_SETTLED:, :going] = normal_scores(deviations, model[_FREEDOM])
        for i in range(_SETTLED, self.sizes[0]):
            going = self.going[i]
            self._smooth(i, self.scores[i, :going], model[:, :going])

    def _smooth(self, i: int, score: Floats, model: Floats) -> tuple[Floats, Floats]:
        """Take one step of the smoothed course."""
        going = score.size
        value, variance, covariance, weights = self.smoother[:, :going]
        correlation, shared, usual, steps = model[_CORRELATION], model[_SHARED], 1 - self.rules.weight, self.steps[i, :going]
        keep, fades = np.full(going, usual), correlation
        uneven = np.flatnonzero(steps != 1.0)
        if uneven.size:
            fades = fades.copy()
            # Powers and logarithms are Python's, because numpy's may differ in the last bit.
            keep[uneven] = [usual**step for step in steps[uneven].tolist()]
            pairs = zip(correlation[uneven].tolist(), steps[uneven].tolist(), strict=True)
            fades[uneven] = [base**step for base, step in pairs]
        new = 1 - keep
        carried = keep * fades * covariance
        value = keep * value + new * score
        variance = keep * keep * variance + new * (new + 2 * carried)
        covariance = carried + new
        weights = keep * weights + new
        self.smoother[:, :going] = value, variance, covariance, weights
        deviation = np.sqrt((1 - shared) * variance + shared * weights * weights)
        self.course[:, i, :going] = value, deviation
        return value, deviation

    def walked(self) -> list[Walked]:
        """Give what came of each lane."""
        outliers, scores = self.outliers.T.copy(), self.scores.T.copy()
        models, course = (np.ascontiguousarray(one.transpose(2, 0, 1)) for one in (self.models, self.course))
        judged = [slice(LEARNING, size) for size in self.sizes]
        return [Walked(outliers[i], models[i, :, j], scores[i, j], course[i, :, j]) for i, j in enumerate(judged)]


class _Sums:
    """Running sums over the sessions that have joined the reference of each lane."""

    def __init__(self, x: Floats, steps: Floats, bad: NDArray[np.bool_]) -> None:
        self.x, self.bad, self.even = x, bad, steps == 1.0
        self.count, self.pairs, self.sum, self.squares, self.before, self.after, self.products = np.zeros((7, x.shape[1]))

    def add(self, i: int, joins: NDArray[np.bool_]) -> None:
        """Let a session join where it does."""
        lanes = np.flatnonzero(joins)
        value = self.x[i, lanes]
        self.count[lanes] += 1
        self.sum[lanes] += value
        self.squares[lanes] += value * value
        if i:
            lanes = lanes[~self.bad[i - 1, lanes] & self.even[i, lanes]]
            value, before = self.x[i, lanes], self.x[i - 1, lanes]
            self.pairs[lanes] += 1
            self.before[lanes] += before
            self.after[lanes] += value
            self.products[lanes] += before * value

    def model(self, going: int) -> Floats:
        """Say what the reference says of the next session, as `qa.judge.control.walk` does; (7, going)."""
        n, pairs, squares = self.count[:going], self.pairs[:going], self.squares[:going]
        mean = self.sum[:going] / n
        variance = (squares - n * mean * mean) / (n - 1)
        least = 1e-24 * squares
        variance = np.where((variance <= least) | (variance <= 0), np.maximum(least, 1e-300), variance)
        covariance = self.products[:going] - mean * (self.before[:going] + self.after[:going]) + pairs * mean * mean
        with np.errstate(over="ignore"):
            raw = covariance / np.maximum(pairs, 1) / (variance * (n - 1) / n)
            correlation = np.minimum(np.maximum(raw + (1 + 4 * raw) / n + 1 / np.sqrt(n), 0.0), CORRELATION_AT_MOST)
        correlation = np.where(pairs > 2, correlation, 0.0)
        f = (1 + correlation) / (1 - correlation)
        sigma = np.sqrt(variance * (n - 1) / np.maximum(n - f, 1.0))
        square = correlation * correlation
        freedom = (n - 1) * (1 - square) / (1 + square)
        return np.stack((mean, sigma, sigma * np.sqrt(1 + f / n), freedom, correlation, f / (n + f), n))


def _steps(day: Floats) -> Floats:
    """Do as `qa.judge.control` for (sessions, lanes) days."""
    gaps = np.diff(day, axis=0)
    ratio = gaps / np.maximum(np.median(gaps[: LEARNING - 1], axis=0), 1 / 24)
    steps = np.ones(day.shape)
    steps[1:] = np.where((ratio >= 0.5) & (ratio < 1.5), 1.0, np.maximum(ratio, 1 / 7))
    return steps


def _outliers(first: Floats) -> NDArray[np.bool_]:
    """Do as `qa.judge.control.first_outliers` for (sessions, lanes) values."""
    distance = np.abs(first - np.median(first, axis=0))
    scatter = 1.4826 * np.median(distance, axis=0)
    return np.asarray((distance > OUTLIER * scatter) & (scatter > 0))


def _scores(t: Floats, freedom: Floats) -> Floats:
    """Do as `qa.judge.student.normal_score` for each."""
    scale = (freedom - 2 / 3 + 0.1 / freedom) / np.sqrt(freedom - 5 / 6)
    logarithm = np.array([math.log1p(v) for v in (t * t / freedom).tolist()])
    return np.asarray(np.copysign(scale * np.sqrt(logarithm), t))
