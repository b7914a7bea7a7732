"""The records that travel from room to room: frozen, complete, and free of behaviour.

What arrives becomes a `Series`; repeats of one series become an `Acquisition`; where the phantom lies is a `Pose`; what is
found is a `Measurement` or a `NotMeasured` with its reason; all of one acquisition is an `Outcome`; held against a limit it
is a `Verdict`. Conventions for axes and units are those of `qa.geometry`.
"""

from qa.records.figures import (
    CrossSection,
    Measurement,
    NotLocated,
    NotMeasured,
    Outcome,
    Picture,
    Pose,
    Region,
)
from qa.records.judged import (
    CONFORMITIES,
    OUT_OF_LIMITS,
    Baseline,
    Conformity,
    DecisionRule,
    Event,
    EventKind,
    Judged,
    Limit,
    Verdict,
)
from qa.records.kept import (
    History,
    RecordedAcquisition,
    Session,
)
from qa.records.scans import (
    Acquisition,
    ImageKind,
    Reading,
    Refused,
    Scanner,
    Series,
    Settings,
    SourceFile,
)

__all__ = [
    "CONFORMITIES",
    "OUT_OF_LIMITS",
    "Acquisition",
    "Baseline",
    "Conformity",
    "CrossSection",
    "DecisionRule",
    "Event",
    "EventKind",
    "History",
    "ImageKind",
    "Judged",
    "Limit",
    "Measurement",
    "NotLocated",
    "NotMeasured",
    "Outcome",
    "Picture",
    "Pose",
    "Reading",
    "RecordedAcquisition",
    "Refused",
    "Region",
    "Scanner",
    "Series",
    "Session",
    "Settings",
    "SourceFile",
    "Verdict",
]
