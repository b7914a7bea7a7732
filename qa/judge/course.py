"""How a quantity has been moving: straight, broken, stepped or both, each as likely as the history makes it.

Four kinds of course compete: a straight line over the whole window; a level that turns into a line at some session; a level
that jumps to another at some session; a level that jumps and goes on as a line. Each is fitted by least squares for every
session at which it may begin, and weighted by its marginal likelihood under flat priors of level, change and log scatter.
So what hangs on the course, when it began and where it leads, is averaged over all that the history leaves open instead
of resting on one best fit: for a jump no date is foretold, and for a slow drift the date allows for its uncertain beginning.

Autocorrelation of the residuals lowers the number of sessions that count. Single sessions far from their neighbours are
left out.
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from qa.geometry import Floats
from qa.judge.student import normal_scores
from qa.judge.trend import correlation_left, inflation

__all__ = ["BROKEN", "JUMP", "STEP", "STRAIGHT", "Course", "fit_course", "spikes"]

STRAIGHT, BROKEN, STEP, JUMP = 0, 1, 2, 3
_BEFORE = 3
_AFTER_BREAK, _AFTER_STEP, _AFTER_JUMP = (6, 3), 2, (5, 4)
"""Sessions after the beginning that a course needs: more where it is to be followed ahead than where it is only dated."""
_SPIKE = 5.0
_RARE = 0.1
"""How likely a jump that goes on as a line is beforehand, against a step or a broken line: it takes two things at once."""


@dataclass(frozen=True, eq=False)
class Course:
    """All courses that were weighed, k of them.

    Attributes
    ----------
    kind : (k,) int
        `STRAIGHT`, `BROKEN`, `STEP` or `JUMP` (and go on as a line).
    begins : (k,) float
        Day on which the change begins; for a step or jump the first session after it.
    weight : (k,) float
        Probability of each; they sum to 1.
    before, level, change : (k,) float
        Mean before it begins and right after, and change from there to the last session.
    scatter : float
        Standard deviation of sessions about the likeliest course.
    correlation : float
        Autocorrelation allowed for.
    """

    kind: NDArray[np.int64]
    begins: Floats
    weight: Floats
    before: Floats
    level: Floats
    change: Floats
    scatter: float
    correlation: float
    _last: float
    _freedom: float
    _variance: Floats
    _sums: Floats

    def probability(self, kind: int) -> float:
        """Give the probability of a kind of course."""
        return float(self.weight[self.kind == kind].sum())

    def beyond(self, limit: float, *, rising: bool, days: Floats) -> Floats:
        """Give the probability that the mean lies beyond a limit on (m,) days, from the last session on."""
        from scipy.special import ndtr

        flat = (self.kind == STEP)[:, np.newaxis]
        span = np.where(flat[:, 0], 1.0, self._last - self.begins)[:, np.newaxis]
        h = np.where(flat, 1.0, (days - self.begins[:, np.newaxis]) / span)
        mean = self.level[:, np.newaxis] + self.change[:, np.newaxis] * h
        n, one, square = self._sums[:, :, np.newaxis]
        # Of a step only the sessions after it tell where it has led to: the formula for a line gives that, too, at h = 1.
        error = np.sqrt(self._variance[:, np.newaxis] * (square - 2 * h * one + n * h * h) / (n * square - one * one))
        ahead = (mean - limit) / error if rising else (limit - mean) / error
        return np.asarray(self.weight @ ndtr(normal_scores(ahead, self._freedom)))


def fit_course(days: Floats, values: Floats, *, straight: bool) -> Course:
    """Weigh all courses of one history.

    Parameters
    ----------
    days : (n,) float
        In order; at least ten sessions, not all on one day.
    values : (n,) float
        Values.
    straight : bool
        Take the straight line for as likely beforehand as all broken lines together: right where the question is where it
        leads. Otherwise it is one of the broken lines: right where a change is known and the question is when it began.

    Returns
    -------
    Course
        See there.

    Notes
    -----
    Marginal likelihood of a linear model of p parameters with flat priors: |X'X|^-1/2 SSE^-(n - p)/2. Changes are measured
    at the last session for every course, so that the flat prior means the same for all; the height of a jump that goes on
    as a line, its further parameter, is held to lie anywhere within the range of the values, up or down.
    """
    keep = ~spikes(values)
    t, centre = days[keep], float(values[keep].mean())
    y = values[keep] - centre
    n, last = t.size, float(t[-1])
    ahead = 0 if straight else 1
    starts = {
        BROKEN: t[: n - _AFTER_BREAK[ahead]],
        STEP: t[_BEFORE : n - _AFTER_STEP + 1],
        JUMP: t[_BEFORE : n - _AFTER_JUMP[ahead] + 1],
    }
    kind = np.repeat(list(starts), [s.size for s in starts.values()])
    begins = np.concatenate(list(starts.values()))
    since = t - begins[:, np.newaxis]
    after = since >= 0
    span = np.where(last > begins, last - begins, 1.0)[:, np.newaxis]
    h = np.where(kind[:, np.newaxis] == STEP, after, np.maximum(since, 0.0) / span)
    # A jump's line is fitted to the sessions after it, and its level before to those before: two fits that share nothing.
    used = np.where(kind[:, np.newaxis] == JUMP, after, 1.0)
    apart = kind == JUMP
    count, one, square, total = used.sum(axis=1), h.sum(axis=1), (h * h).sum(axis=1), used @ y
    determinant = count * square - one * one
    change = (count * (h @ y) - one * total) / determinant
    level = (total - change * one) / count
    before = np.where(apart, (y.sum() - total) / np.maximum(n - count, 1), level)
    fitted = np.where(used > 0, level[:, np.newaxis] + change[:, np.newaxis] * h, before[:, np.newaxis])
    residuals = y - fitted
    # A history without any scatter would weigh its best fit infinitely: keep what a double can tell apart.
    squares = np.maximum((residuals**2).sum(axis=1), 1e-20 * max(float(y @ y), 1e-300))
    best = int(np.argmin(squares))
    correlation = correlation_left(residuals[best])
    factor = inflation(correlation)
    freedom = max(n / factor - 3, 3.0)
    logarithm = -(freedom + 1 - apart) / 2 * np.log(squares) - 0.5 * np.log(determinant)
    reach = 2 * max(float(np.ptp(y)), 1e-150) * np.sqrt(np.maximum(n - count, 1) * n / (2 * np.pi)) / _RARE
    logarithm -= np.where(apart, np.log(reach), 0.0)
    if straight:
        kind[0] = STRAIGHT
    logarithm -= np.log(np.bincount(kind)[kind])
    weight = np.exp(logarithm - logarithm.max())
    return Course(
        kind,
        begins,
        weight / weight.sum(),
        before + centre,
        level + centre,
        change,
        float(np.sqrt(squares[best] / (n - 3))),
        correlation,
        last,
        freedom,
        squares / (n - 3) * factor,
        np.stack((count, one, square)),
    )


def spikes(values: Floats) -> NDArray[np.bool_]:
    """Find single values far from their neighbours: more than 5 scaled median absolute deviations from a median of seven.

    Parameters
    ----------
    values : (n,) float
        In order of time.

    Returns
    -------
    (n,) bool
        True where a value is to be left out of a fit; the last two never are, because they may be a beginning.
    """
    padded = np.concatenate((values[3:0:-1], values, values[-2:-5:-1]))
    middle = np.median(np.lib.stride_tricks.sliding_window_view(padded, 7), axis=1)
    distance = np.abs(values - middle)
    scatter = 1.4826 * float(np.median(distance))
    found = distance > _SPIKE * scatter if scatter > 0 else np.zeros(values.size, dtype=bool)
    found[-2:] = False
    return np.asarray(found)
