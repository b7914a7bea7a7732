"""How a quantity has been moving: straight, broken or stepped, each as likely as the history makes it.

Three kinds of course compete: a straight line over the whole window; a level that turns into a
line at some session; a level that jumps to another at some session. Each is fitted by least squares for every session at
which it may begin, and weighted by its marginal likelihood under flat priors of level, change and log scatter. So what
hangs on the course, when it began and where it leads, is averaged over all that the history leaves open instead of resting
on one best fit: for a jump no date is foretold, and for a slow drift the date allows for its uncertain beginning.

Autocorrelation of the residuals lowers the number of sessions that count. Single sessions far from their neighbours are
left out.
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from qa.geometry import Floats
from qa.judge.student import normal_scores
from qa.judge.trend import correlation_left, inflation

__all__ = ["BROKEN", "STEP", "STRAIGHT", "Course", "fit_course", "spikes"]

STRAIGHT, BROKEN, STEP = 0, 1, 2
_AFTER_BREAK = 6
_AFTER_STEP = 2
_BEFORE_STEP = 3
_SPIKE = 5.0


@dataclass(frozen=True, eq=False)
class Course:
    """All courses that were weighed, k of them.

    Attributes
    ----------
    kind : (k,) int
        `STRAIGHT`, `BROKEN` or `STEP`.
    begins : (k,) float
        Day on which the change begins; for a step the first session after it.
    weight : (k,) float
        Probability of each; they sum to 1.
    level, change : (k,) float
        Mean before it begins, and change from there to the last session.
    scatter : float
        Standard deviation of sessions about the likeliest course.
    correlation : float
        Autocorrelation allowed for.
    """

    kind: NDArray[np.int64]
    begins: Floats
    weight: Floats
    level: Floats
    change: Floats
    scatter: float
    correlation: float
    _last: float
    _freedom: float
    _variance: Floats
    _sums: Floats
    _count: int

    def probability(self, kind: int) -> float:
        """Give the probability of a kind of course."""
        return float(self.weight[self.kind == kind].sum())

    def beyond(self, limit: float, *, rising: bool, days: Floats) -> Floats:
        """Give the probability that the mean lies beyond a limit on (m,) days, from the last session on."""
        from scipy.special import ndtr

        span = np.where(self.kind == STEP, 1.0, self._last - self.begins)[:, np.newaxis]
        h = np.where(self.kind[:, np.newaxis] == STEP, 1.0, (days - self.begins[:, np.newaxis]) / span)
        mean = self.level[:, np.newaxis] + self.change[:, np.newaxis] * h
        one, square = self._sums[:, :, np.newaxis]
        n = self._count
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
        Take the straight line for as likely beforehand as all broken lines together, and all steps: right where the
        question is where it leads. Otherwise it is one of the broken lines, and broken lines and steps are equally likely:
        right where a change is known and the question is when it began.

    Returns
    -------
    Course
        See there.

    Notes
    -----
    Marginal likelihood of a linear model with flat priors: |X'X|^-1/2 SSE^-(n - 2)/2. The change is measured at the last
    session for every course, so that the flat prior means the same for all of them.
    """
    keep = ~spikes(values)
    t, x = days[keep], values[keep]
    n, last = x.size, float(t[-1])
    breaks, steps = t[: max(n - _AFTER_BREAK, 1)], t[_BEFORE_STEP : n - _AFTER_STEP]
    kind = np.repeat([BROKEN, STEP], [breaks.size, steps.size])
    if straight:
        kind[0] = STRAIGHT
    begins = np.concatenate((breaks, steps))
    since = t - begins[:, np.newaxis]
    h = np.where(
        kind[:, np.newaxis] == STEP,
        since >= 0,
        np.maximum(since, 0.0) / np.where(last > begins, last - begins, 1.0)[:, np.newaxis],
    )
    one, square = h.sum(axis=1), (h * h).sum(axis=1)
    determinant = n * square - one * one
    centre = float(x.mean())
    y = x - centre
    change = n * (h @ y) / determinant
    level = -change * one / n
    residuals = y - level[:, np.newaxis] - change[:, np.newaxis] * h
    # A history without any scatter would weigh its best fit infinitely: keep what a double can tell apart.
    squares = np.maximum((residuals**2).sum(axis=1), 1e-20 * max(float(y @ y), 1e-300))
    best = int(np.argmin(squares))
    correlation = correlation_left(residuals[best])
    factor = inflation(correlation)
    freedom = max(n / factor - 3, 3.0)
    logarithm = -(freedom + 1) / 2 * np.log(squares) - 0.5 * np.log(determinant)
    logarithm -= np.log(np.bincount(kind)[kind])
    weight = np.exp(logarithm - logarithm.max())
    variance = squares / (n - 3) * factor
    return Course(
        kind,
        begins,
        weight / weight.sum(),
        level + centre,
        change,
        float(np.sqrt(squares[best] / (n - 3))),
        correlation,
        last,
        freedom,
        variance,
        np.stack((one, square)),
        n,
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
