"""One image of a file as a plain frozen record: past it, no room knows pydicom."""

from dataclasses import dataclass
from datetime import datetime

from qa.dicom.pixels import Scaling, Stored
from qa.geometry import Plane
from qa.records import ImageKind, Scanner, Settings, SourceFile

__all__ = ["Frame", "Origin"]


@dataclass(frozen=True)
class Origin:
    """What all frames of a file share."""

    source: SourceFile
    study_instance_uid: str
    series_instance_uid: str
    description: str
    series_number: int
    scanner: Scanner
    remarks: tuple[str, ...] = ()


@dataclass(frozen=True, eq=False)
class Frame:
    """One image with all that tells it from the others of its series.

    Attributes
    ----------
    contrast : tuple
        Values in which images of one stack agree besides the settings: echo number, inversion time, diffusion weighting,
        sense of phase encoding, processing steps named in Image Type.
    stack_id : str
        Which stack of its series the image belongs to, where the file says.
    temporal : int or None
        Temporal position as the file numbers it.
    acquisition, instance, number : int
        Acquisition Number, Instance Number, and the frame's place in its file; 0 where absent.
    stored : (R, C) numbers
        Values as the file holds them, which `scaling` makes output values of.
    """

    origin: Origin
    plane: Plane
    kind: ImageKind
    settings: Settings
    contrast: tuple[object, ...]
    stack_id: str
    temporal: int | None
    acquisition: int
    instance: int
    number: int
    acquired_at: datetime | None
    stored: Stored
    scaling: Scaling

    @property
    def order(self) -> tuple[object, ...]:
        """What frames are put in order of time by, and by what the file says of it where times are the same."""
        return (
            self.acquired_at.isoformat(timespec="microseconds") if self.acquired_at else "unknown",
            self.origin.series_number,
            self.temporal or 0,
            self.acquisition,
            self.instance,
            self.number,
            self.origin.source.sop_instance_uid,
        )
