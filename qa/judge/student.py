"""Student's distribution turned into the normal one and back, fast enough to be asked for every session.

D. B. Peizer and J. W. Pratt, JASA 63 (1968) 1416 (m): within 0.7 % of the exact value for 6 degrees of freedom or more, up
to eight standard errors.

(m): from memory of the source; checked against scipy.
"""

import math

import numpy as np

from qa.geometry import Floats

__all__ = ["normal_score", "normal_scores", "student_bound"]


def normal_score(t: float, freedom: float) -> float:
    """Turn a value of Student's distribution into the standard normal value of the same probability."""
    scale = (freedom - 2 / 3 + 0.1 / freedom) / math.sqrt(freedom - 5 / 6)
    return math.copysign(scale * math.sqrt(math.log1p(t * t / freedom)), t)


def normal_scores(t: Floats, freedom: Floats | float) -> Floats:
    """Do as `normal_score` for many at once; one at a time plain Python is faster."""
    scale = (freedom - 2 / 3 + 0.1 / freedom) / np.sqrt(freedom - 5 / 6)
    return np.copysign(scale * np.sqrt(np.log1p(t * t / freedom)), t)


def student_bound(z: float, freedom: Floats) -> Floats:
    """Turn a standard normal value into the value of Student's distribution: the inverse of `normal_score`."""
    scale = (freedom - 2 / 3 + 0.1 / freedom) / np.sqrt(freedom - 5 / 6)
    return np.asarray(math.copysign(1.0, z) * np.sqrt(freedom * np.expm1((z / scale) ** 2)))
