"""The control state: a quantity against the scanner's own history.

How it works
------------
A *segment* is a stretch of history made under the same conditions. Its first `LEARNING` sessions are the first reference;
from then on each session is held against mean and standard deviation of the reference, which goes on growing for
`REFERENCE` sessions and then stays. A session joins the reference `QUARANTINE` sessions after it came, and only if no alarm
was on meanwhile and the smoothed course is calm, within two of its standard deviations: so a fault is not learnt as normal
before it is found. What was said of a session never changes when later ones come.

Because the reference is short, deviations follow Student's distribution and share the error of the mean; both are allowed
for, as in self-starting charts (Hawkins 1987, Quesenberry 1991 (m)), so that the false-alarm rate hardly depends on the
reference's length.

Autocorrelation is estimated from the reference at the usual spacing of sessions (lag one, bias taken out). One standard
error is added, because too small a value costs false alarms, and the sum is kept between 0 and 0.4: more than that is not
explained away but shows as an alarm. It widens the limits of the smoothed chart and enters the error of mean and standard
deviation; the widened-limits way is kept rather than a residual chart, because it finds a lasting shift sooner.

Uneven spacing: after a gap of k usual intervals the smoothed chart forgets k times and the correlation counts to the k-th
power. A session within half an interval of its due day is on time.

False-alarm rate
----------------
The default rules are Nelson's test 1 and the exponentially weighted moving average. On a stable scanner they start an alarm
in the share of sessions that `FALSE_ALARM_RATE` gives: one in 180 for independent sessions, one in 135 at an
autocorrelation of 0.3, so that in a year of weeks a quantity starts one or more false alarms with a chance of 22 and 24 %.
The figures are from 20,000 simulated normal series of 156 sessions each. That is why an alarm alone does not call a
scanner drifting: `qa.judge.quantity` says what does. Nelson's other tests and the cumulative sum, which can be switched on,
assume independent sessions.

(m): from memory of the source.
"""

import math
from collections.abc import Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass
from itertools import pairwise
from types import MappingProxyType
from typing import NamedTuple

import numpy as np
from numpy.typing import ArrayLike, NDArray

from qa.geometry import Floats
from qa.judge.charts import nelson, tabular_cusum
from qa.judge.student import normal_score, normal_scores, student_bound

__all__ = [
    "CALM",
    "CORRELATION_AT_MOST",
    "FALSE_ALARM_RATE",
    "LEARNING",
    "OUTLIER",
    "QUARANTINE",
    "REFERENCE",
    "RULES",
    "ControlChart",
    "ControlRules",
    "Walked",
    "assemble",
    "control_chart",
    "first_outliers",
    "judged_segments",
    "walk",
]

LEARNING = 10
"""Sessions of a segment before the first is judged."""
QUARANTINE = 8
"""Sessions after which one joins the reference, if no alarm came."""
REFERENCE = 104
"""Sessions of a segment that may join the reference: two years of weeks, so that a season is not taken for a change."""
CORRELATION_AT_MOST = 0.4
"""Autocorrelation that is allowed for at most."""
OUTLIER = 8.0
"""Scaled median absolute deviations beyond which a first session is far from the rest."""
CALM = 2.0
"""Standard deviations within which the smoothed course is calm."""

FALSE_ALARM_RATE: Mapping[float, float] = MappingProxyType({0.0: 0.0056, 0.3: 0.0074})
"""Share of sessions in which the default rules start a false alarm, by lag-one autocorrelation of the stable series."""

RULES: Mapping[str, str] = MappingProxyType(
    {
        "nelson-1": "a session beyond the control limits",
        "nelson-2": "nine sessions in a row on one side of the centre",
        "nelson-3": "six sessions in a row steadily rising or falling",
        "nelson-4": "fourteen sessions in a row alternating up and down",
        "nelson-5": "two of three sessions in a row beyond two standard deviations on one side",
        "nelson-6": "four of five sessions in a row beyond one standard deviation on one side",
        "nelson-7": "fifteen sessions in a row within one standard deviation",
        "nelson-8": "eight sessions in a row beyond one standard deviation on either side",
        "ewma": "the smoothed course beyond its limits",
        "cusum": "the cumulative sum beyond its decision interval",
        "moving-range": "a jump between two sessions beyond what their scatter allows",
        "outlier": "far from the other first sessions",
    }
)
"""What each rule says when it trips."""


@dataclass(frozen=True)
class ControlRules:
    """Which rules are on, and their settings.

    Attributes
    ----------
    nelson : tuple of int
        Nelson's tests, 1 to 8.
    ewma, cusum, moving_range : bool
        The smoothed chart, the cumulative sum, the chart of jumps.
    weight, width : float
        Of the smoothed chart: weight of the newest session, and limits in its standard deviations.
    reference, decision : float
        Of the cumulative sum: slack and decision interval, in standard deviations of a session.
    jump : float
        Of the chart of jumps: limit in standard deviations of a jump (3.29: one in a thousand).
    """

    nelson: tuple[int, ...] = (1,)
    ewma: bool = True
    cusum: bool = False
    moving_range: bool = False
    weight: float = 0.3
    width: float = 2.8
    reference: float = 0.5
    decision: float = 5.0
    jump: float = 3.29


@dataclass(frozen=True, eq=False)
class ControlChart:
    """Charts of one history of n sessions, all (n,); NaN where a segment is still learning.

    Attributes
    ----------
    segment : int
        Number of the segment, from 0.
    centre, sigma : float
        Mean and standard deviation of the reference at that time.
    lower, upper : float
        Limits of single sessions (test 1).
    standardised : float
        Deviation as a standard normal value.
    smoothed, smoothed_lower, smoothed_upper : float
        The smoothed course and its limits, in the unit of the values.
    correlation : float
        Autocorrelation allowed for.
    reference : int
        Sessions in the reference at that time.
    tripped : mapping of str to (n,) bool
        For each rule that is on, where it trips; the keys are those of `RULES`.
    out : (n,) bool
        Where any does.
    """

    segment: NDArray[np.int64]
    centre: Floats
    sigma: Floats
    lower: Floats
    upper: Floats
    standardised: Floats
    smoothed: Floats
    smoothed_lower: Floats
    smoothed_upper: Floats
    correlation: Floats
    reference: NDArray[np.int64]
    tripped: Mapping[str, NDArray[np.bool_]]
    out: NDArray[np.bool_]


def first_outliers(values: Floats) -> NDArray[np.bool_]:
    """Find values far from the rest of a short series: more than 8 scaled median absolute deviations from its median."""
    distance = np.abs(values - np.median(values))
    scatter = 1.4826 * float(np.median(distance))
    return np.asarray(distance > OUTLIER * scatter) if scatter > 0 else np.zeros(values.size, dtype=bool)


def control_chart(
    days: ArrayLike, values: ArrayLike, starts: Sequence[int] = (0,), rules: ControlRules | None = None
) -> ControlChart:
    """Chart one history.

    Parameters
    ----------
    days : (n,) array_like
        Day of each session, counted in days from any origin, in order.
    values : (n,) array_like
        Values, finite.
    starts : sequence of int
        Index of the first session of each segment, in order; the first is 0.
    rules : ControlRules, optional
        Which rules are on; the default set otherwise.

    Returns
    -------
    ControlChart
        See there.
    """
    rules = rules or ControlRules()
    day, x = np.asarray(days, dtype=float), np.asarray(values, dtype=float)
    return assemble(x, starts, (walk(day[s], x[s], rules) for s in judged_segments(starts, x.size)), rules)


def judged_segments(starts: Sequence[int], n: int) -> Iterator[slice]:
    """Give the segments that are long enough to be judged."""
    return (slice(first, end) for first, end in pairwise([*starts, n]) if end - first > LEARNING)


def assemble(x: Floats, starts: Sequence[int], walked: Iterable["Walked"], rules: ControlRules) -> ControlChart:
    """Make the charts of one history of what came of each of its `judged_segments`."""
    n = x.size
    columns = np.full((8, n), np.nan)
    correlations = np.full(n, np.nan)
    count = np.zeros(n, dtype=np.int64)
    segment = np.zeros(n, dtype=np.int64)
    tripped = {f"nelson-{t}": np.zeros(n, dtype=bool) for t in rules.nelson}
    tripped |= {
        name: np.zeros(n, dtype=bool)
        for name, on in (("ewma", rules.ewma), ("cusum", rules.cusum), ("moving-range", rules.moving_range))
        if on
    }
    tripped["outlier"] = np.zeros(n, dtype=bool)
    for number, (first, end) in enumerate(pairwise([*starts, n])):
        segment[first:end] = number
    for place, (outlier, models, z, (smooth, deviation)) in zip(judged_segments(starts, n), walked, strict=True):
        first, judged = place.start, slice(place.start + LEARNING, place.stop)
        tripped["outlier"][first : first + LEARNING] = outlier
        mean, sigma, spread, freedom, correlation, _, sessions = models
        centre, reach, half = x[first] + mean, student_bound(3.0, freedom) * spread, rules.width * deviation * sigma
        count[judged], correlations[judged] = sessions, correlation
        columns[:, judged] = (
            centre, sigma, centre - reach, centre + reach, z,
            centre + sigma * smooth, centre - half, centre + half,
        )  # fmt: skip
        for name, where in _trips(z, smooth, deviation, correlation, rules):
            tripped[name][judged] = where
    out = np.zeros(n, dtype=bool)
    for where in tripped.values():
        out |= where
    centre, sigma, lower, upper, z, smooth, low, high = columns
    return ControlChart(
        segment, centre, sigma, lower, upper, z, smooth, low, high, correlations, count, MappingProxyType(tripped), out
    )


def _trips(
    z: Floats, smooth: Floats, deviation: Floats, correlation: Floats, rules: ControlRules
) -> Iterator[tuple[str, NDArray[np.bool_]]]:
    for test, where in nelson(z, rules.nelson).items():
        yield f"nelson-{test}", where
    if rules.ewma:
        yield "ewma", np.abs(smooth) > rules.width * deviation
    if rules.cusum:
        sums = tabular_cusum(z, 0.0, rules.reference)
        yield "cusum", (sums.upper > rules.decision) | (sums.lower > rules.decision)
    if rules.moving_range:
        jumps = np.abs(np.diff(z, prepend=z[0])) / np.sqrt(2 * (1 - correlation))
        yield "moving-range", jumps > rules.jump


class Walked(NamedTuple):
    """What came of one segment of n sessions.

    Attributes
    ----------
    outlier : (LEARNING,) bool
        First sessions far from the rest.
    models : (7, n - LEARNING) float
        What the reference said of each further session: the fields of `_Model`.
    scores : (n - LEARNING,) float
        Deviations as standard normal values.
    course : (2, n - LEARNING) float
        The smoothed course and its standard deviation.
    """

    outlier: NDArray[np.bool_]
    models: Floats
    scores: Floats
    course: Floats


class _Model(NamedTuple):
    """What a reference says of the next session; `spread` is the standard error of prediction, `shared` the mean's part."""

    mean: float
    sigma: float
    spread: float
    freedom: float
    correlation: float
    shared: float
    sessions: int


class _Reference:
    """Running sums over the sessions that have joined."""

    def __init__(self) -> None:
        self.count = self.pairs = 0
        self.sum = self.squares = self.before = self.after = self.products = 0.0

    def add(self, x: Sequence[float], i: int, bad: Sequence[bool], steps: Sequence[float]) -> None:
        if bad[i]:
            return
        value = x[i]
        self.count += 1
        self.sum += value
        self.squares += value * value
        if i and not bad[i - 1] and steps[i] == 1.0:
            self.pairs += 1
            self.before += x[i - 1]
            self.after += value
            self.products += x[i - 1] * value

    def model(self) -> _Model:
        n, mean = self.count, self.sum / self.count
        variance = (self.squares - n * mean * mean) / (n - 1)
        if variance <= 1e-24 * self.squares or variance <= 0:
            # A history that never moved, a frequency in whole hertz say: the least that a double can tell apart.
            variance = max(1e-24 * self.squares, 1e-300)
        correlation = 0.0
        if self.pairs > 2:
            covariance = self.products - mean * (self.before + self.after) + self.pairs * mean * mean
            raw = covariance / self.pairs / (variance * (n - 1) / n)
            correlation = min(max(raw + (1 + 4 * raw) / n + 1 / math.sqrt(n), 0.0), CORRELATION_AT_MOST)
        # Correlated sessions tell less of their mean (variance up by f) and seem to scatter less than they do.
        f = (1 + correlation) / (1 - correlation)
        sigma = math.sqrt(variance * (n - 1) / max(n - f, 1.0))
        square = correlation * correlation
        freedom = (n - 1) * (1 - square) / (1 + square)
        return _Model(mean, sigma, sigma * math.sqrt(1 + f / n), freedom, correlation, f / (n + f), n)


class _Smoother:
    """The state of an exponentially weighted moving average of standard normal values."""

    def __init__(self, weight: float) -> None:
        self.keep = 1 - weight
        self.value = self.variance = self.covariance = self.weights = 0.0

    def course(self, scores: Iterable[float], steps: Iterable[float], model: _Model) -> Iterator[tuple[float, float]]:
        """Take in values, each after so many usual intervals; give the smoothed value and its standard deviation."""
        usual, correlation, shared = self.keep, model.correlation, model.shared
        value, variance, covariance, weights = self.value, self.variance, self.covariance, self.weights
        for z, step in zip(scores, steps, strict=True):
            keep, fades = (usual, correlation) if step == 1.0 else (usual**step, correlation**step)
            new = 1 - keep
            carried = keep * fades * covariance
            value = keep * value + new * z
            variance = keep * keep * variance + new * (new + 2 * carried)
            covariance = carried + new
            weights = keep * weights + new
            # All values share the error of the reference's mean.
            yield value, math.sqrt((1 - shared) * variance + shared * weights * weights)
        self.value, self.variance, self.covariance, self.weights = value, variance, covariance, weights


def walk(day: Floats, x: Floats, rules: ControlRules) -> Walked:
    """Go along one segment; a loop, because what joins the reference hangs on what was said before."""
    # Sums of squares are taken about the first value, or they would lose all digits of a centre frequency.
    x, steps, outlier = x - x[0], _steps(day), first_outliers(x[:LEARNING])
    values, bad = x.tolist(), outlier.tolist() + [False] * (x.size - LEARNING)
    reference, smooth = _Reference(), _Smoother(rules.weight)
    for i in range(LEARNING):
        reference.add(values, i, bad, steps)
    model = reference.model()
    scores: list[float] = []
    course: list[tuple[float, float]] = []
    models: list[_Model] = []
    calm = True
    settled = min(x.size, REFERENCE + QUARANTINE)
    for i in range(LEARNING, settled):
        joins = i - QUARANTINE
        if joins >= LEARNING and calm and not bad[joins]:
            reference.add(values, joins, bad, steps)
            model = reference.model()
        z = normal_score((values[i] - model.mean) / model.spread, model.freedom)
        ((smoothed, deviation),) = smooth.course((z,), (steps[i],), model)
        calm = abs(smoothed) < CALM * deviation
        if abs(z) > 3:
            bad[i] = True
        if rules.ewma and abs(smoothed) > rules.width * deviation:
            bad[i - QUARANTINE + 1 : i + 1] = [True] * QUARANTINE
        scores.append(z)
        course.append((smoothed, deviation))
        models.append(model)
    rest = normal_scores((x[settled:] - model.mean) / model.spread, model.freedom)
    course += smooth.course(rest.tolist(), steps[settled:], model)
    by_session = np.empty((len(_Model._fields), x.size - LEARNING))
    by_session[:, : len(models)] = np.array(models).T
    by_session[:, len(models) :] = np.array(model)[:, np.newaxis]
    return Walked(outlier, by_session, np.concatenate((scores, rest)), np.array(course).T)


def _steps(day: Floats) -> list[float]:
    """Gap before each session in usual intervals; whole where a session came on time."""
    gaps = np.diff(day)
    ratio = gaps / max(float(np.median(gaps[: LEARNING - 1])), 1 / 24)
    return [1.0, *np.where((ratio >= 0.5) & (ratio < 1.5), 1.0, np.maximum(ratio, 1 / 7)).tolist()]
