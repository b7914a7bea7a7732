"""From a parsed file to its frames: a classic image is one, a mosaic one a tile, an enhanced object one a functional group."""

from collections.abc import Callable, Sequence
from dataclasses import replace

from qa.dicom.elements import Elements, File
from qa.dicom.enhanced import is_enhanced, of_each_frame
from qa.dicom.frames import Frame, Origin
from qa.dicom.header import acquired_at, image_type, kind_of, plane_of, scanner_of, settings_of
from qa.dicom.identity import Header
from qa.dicom.mosaic import cut, text_fields, tiles_of
from qa.dicom.pixels import Layout, Scaling, Stored, layout_of, scaling_of
from qa.dicom.refusal import RefusalError
from qa.geometry import Plane
from qa.records import SourceFile

__all__ = ["Decode", "frames_of"]

Decode = Callable[[File, Layout], Stored]

# What Image Type says of a file's packing and purpose, not of how its pixels were made.
_PACKING = frozenset({"MOSAIC", "MFSPLIT", "NONE", "OTHER", "FMRI", "VOLUME", ""})
_LOSSY = frozenset(
    {
        "1.2.840.10008.1.2.4.50",  # JPEG baseline
        "1.2.840.10008.1.2.4.51",  # JPEG extended
        "1.2.840.10008.1.2.4.81",  # JPEG-LS near-lossless
    }
)


def frames_of(file: File, header: Header, source: SourceFile, decode: Decode) -> list[Frame]:
    """Read all images of one file; what can be checked is checked before pixels are decoded.

    Raises
    ------
    RefusalError
        Something in the file cannot be; nothing of it is used then.
    """
    get = file.elements
    layout = layout_of(get)
    remarks = _remarks(file, layout)
    if is_enhanced(get):
        heads = of_each_frame(get, layout.frames)
    elif layout.frames > 1:
        raise RefusalError("it holds several frames but does not say where each lies")
    else:
        heads = [get]
    planes = [_plane_of(head, layout, number, len(heads)) for number, head in enumerate(heads, start=1)]
    scalings = [scaling_of(head, layout) for head in heads]
    mosaic = tiles_of(get, planes[0]) if len(heads) == 1 else None
    if mosaic is not None:
        count = len(mosaic.planes)
        planes, heads, scalings = list(mosaic.planes), heads * count, scalings * count
        remarks += mosaic.remarks
    origin = Origin(
        source=source,
        study_instance_uid=header.study_instance_uid,
        series_instance_uid=header.series_instance_uid,
        description=header.series_description,
        series_number=get.whole(0x00200011) or 0,
        scanner=scanner_of(header),
        remarks=remarks,
    )
    stored = decode(file, layout)
    if mosaic is not None:
        stored = cut(stored[0], mosaic)
    return _frames(origin, stored, heads, planes, scalings)


def _plane_of(head: Elements, layout: Layout, number: int, count: int) -> Plane:
    try:
        return plane_of(head, (layout.rows, layout.columns))
    except RefusalError as refusal:
        raise RefusalError(f"frame {number}: {refusal}" if count > 1 else str(refusal)) from None


def _frames(
    origin: Origin,
    stored: Stored,
    heads: Sequence[Elements],
    planes: Sequence[Plane],
    scalings: Sequence[Scaling],
) -> list[Frame]:
    frames: list[Frame] = []
    for number, (get, plane, scaling) in enumerate(zip(heads, planes, scalings, strict=True)):
        if number and get is heads[number - 1]:  # the tiles of a mosaic share their header
            frames.append(replace(frames[-1], plane=plane, number=number, stored=stored[number]))
            continue
        kinds = image_type(get)
        temporal = get.whole(0x00209128)  # Temporal Position Index; the classic element is the Identifier
        acquisition = get.whole(0x00209156)  # Frame Acquisition Number; the classic element is Acquisition Number
        frames.append(
            Frame(
                origin=origin,
                plane=plane,
                kind=kind_of(get, kinds),
                settings=settings_of(get, plane, kinds),
                contrast=_contrast(get, kinds),
                stack_id=get.text(0x00209056),
                temporal=get.whole(0x00200100) if temporal is None else temporal,
                acquisition=(get.whole(0x00200012) if acquisition is None else acquisition) or 0,
                instance=get.whole(0x00200013) or 0,
                number=number,
                acquired_at=acquired_at(get),
                stored=stored[number],
                scaling=scaling,
            )
        )
    return frames


def _contrast(get: Elements, kinds: tuple[str, ...]) -> tuple[object, ...]:
    """Return what tells images of one stack from others beyond the settings."""
    return (
        get.whole(0x00180086),  # Echo Numbers
        get.number(0x00180082),  # Inversion Time
        get.number(0x00189087),  # Diffusion b-value
        get.numbers(0x00189089),  # Diffusion Gradient Orientation
        _polarity(get),
        tuple(sorted(set(kinds[:1] + kinds[2:]) - _PACKING)),
    )


def _polarity(get: Elements) -> str:
    """Tell in which sense phase is encoded, where it matters (echo-planar) and the file says: distortion reverses with it.

    The standard has Rectilinear Phase Encode Reordering (REVERSE_LINEAR); Siemens has elements of its own.
    """
    if "EP" not in get.strings(0x00180020) and get.code(0x00189018) != "YES":  # Scanning Sequence, Echo Planar Pulse Sequence
        return ""
    if (tag := get.private(0x0021, "SIEMENS MR SDI 02", 0x1C)) and (sense := get.text(tag)):
        return sense
    fields = text_fields(get.bytes_of(get.private(0x0029, "SIEMENS CSA HEADER", 0x10)))
    return " ".join(fields.get("PhaseEncodingDirectionPositive", ())) or get.code(0x00189034)


def _remarks(file: File, layout: Layout) -> tuple[str, ...]:
    remarks = []
    if layout.is_inverted:
        remarks.append("the image is stored with its lowest value brightest (MONOCHROME1); its values were turned over")
    if file.transfer_syntax in _LOSSY or file.elements.code(0x00282110) == "01":  # Lossy Image Compression
        remarks.append("the image was compressed with loss: noise and edges are not as scanned")
    return tuple(remarks)
