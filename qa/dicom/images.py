"""From a parsed file to its frames: a classic image is one, a mosaic one a tile, an enhanced object one a functional group."""

from collections.abc import Callable

from qa.dicom.elements import Elements, File
from qa.dicom.frames import Frame, Origin
from qa.dicom.header import acquired_at, image_type, kind_of, plane_of, scanner_of, settings_of
from qa.dicom.identity import Header
from qa.dicom.pixels import Layout, Stored, layout_of, rescale_of, rescaled
from qa.dicom.refusal import RefusalError
from qa.records import SourceFile

__all__ = ["Decode", "frames_of"]

Decode = Callable[[File, Layout], Stored]

# What Image Type says of a file's packing, not of its pixels.
_PACKING = frozenset({"MOSAIC", "MFSPLIT", "NONE", "OTHER", "FMRI", "VOLUME"})


def frames_of(file: File, header: Header, source: SourceFile, decode: Decode) -> list[Frame]:
    """Read all images of one file.

    Raises
    ------
    RefusalError
        Something in the file cannot be; nothing of it is used then.
    """
    get = file.elements
    origin = Origin(
        source=source,
        study_instance_uid=header.study_instance_uid,
        series_instance_uid=header.series_instance_uid,
        description=header.series_description,
        series_number=get.whole(0x00200011) or 0,
        scanner=scanner_of(header),
    )
    layout = layout_of(get)
    shape = (layout.rows, layout.columns)
    if layout.frames > 1:
        raise RefusalError("it holds several frames but does not say where each lies")
    plane, rescale = plane_of(get, shape), rescale_of(get)
    kinds = image_type(get)
    pixels = rescaled(decode(file, layout), layout, rescale)
    return [
        Frame(
            origin=origin,
            plane=plane,
            kind=kind_of(get, kinds),
            settings=settings_of(get, plane, kinds),
            contrast=contrast_of(get, kinds),
            temporal=get.whole(0x00200100),
            acquisition=get.whole(0x00200012) or 0,
            instance=get.whole(0x00200013) or 0,
            number=0,
            acquired_at=acquired_at(get),
            slope=rescale.slope,
            pixels=pixels[0],
        )
    ]


def contrast_of(get: Elements, kinds: tuple[str, ...]) -> tuple[object, ...]:
    """Return what tells images of one stack from others beyond the settings."""
    return (
        get.whole(0x00180086),  # Echo Numbers
        get.number(0x00180082),  # Inversion Time
        get.number(0x00189087),  # Diffusion b-value
        get.numbers(0x00189089),  # Diffusion Gradient Orientation
        tuple(sorted(set(kinds[:1] + kinds[2:]) - _PACKING)),
    )
