"""Read a folder: each file's bytes once, its header once, its pixels once; what is not taken in is refused with the reason."""

import hashlib
from collections import defaultdict
from collections.abc import Callable, Iterable, Mapping, Sequence
from dataclasses import dataclass, replace
from functools import partial
from pathlib import Path
from typing import TypeVar

import numpy as np

from qa.dicom.elements import File, parse, quietly
from qa.dicom.files import Found, find, read_bytes
from qa.dicom.frames import Frame
from qa.dicom.group import group
from qa.dicom.header import header_of
from qa.dicom.identity import Header, refuse_people, unmeasurable
from qa.dicom.images import Decode, frames_of
from qa.dicom.isolated import IsolatedDecoder
from qa.dicom.pixels import decode
from qa.dicom.refusal import RefusalError
from qa.dicom.stack import Stacked, stack
from qa.errors import EvenfieldError
from qa.records import Reading, Refused, SourceFile

__all__ = ["UNFORESEEN", "Admit", "read_files"]

UNFORESEEN = "it could not be read for a reason this program does not know"
"""How the reason begins where reading a file failed in a way that was not thought of."""

Admit = Callable[[Header], str | None]
T = TypeVar("T")


@dataclass(frozen=True, eq=False)
class _Taken:
    source: SourceFile
    series_uid: str
    frames: tuple[Frame, ...]


def read_files(
    paths: Path | str | Iterable[Path | str],
    admit: Admit | None = None,
    progress: Callable[[int, int], None] | None = None,
    decode_pixels: Decode | None = None,
) -> Reading:
    """Do what `qa.dicom.read` promises; `decode_pixels` turns a parsed file into stored values."""
    files = find(paths)
    taken: list[_Taken] = []
    refused: list[Refused] = []
    lost: dict[str, list[Refused]] = defaultdict(list)
    with quietly(), IsolatedDecoder() as isolated:
        decode_one = decode_pixels or partial(decode, isolated=isolated)
        for count, file in enumerate(files, start=1):
            outcome, series_uid = _read_one(file, admit or refuse_people, decode_one)
            if isinstance(outcome, _Taken):
                taken.append(outcome)
            elif outcome is not None:
                refused.append(outcome)
                if series_uid:
                    lost[series_uid].append(outcome)
            if progress is not None:
                progress(count, len(files))
    singles, doubles = _each_once(taken)
    for series_uid, double in doubles:
        refused.append(double)
        lost[series_uid].append(double)
    stacks, left_out = _stacked(singles, lost)
    return Reading(group(stacks), tuple(sorted([*refused, *left_out], key=lambda each: str(each.path))))


def _read_one(file: Found, admit: Admit, decode_pixels: Decode) -> tuple[_Taken | Refused | None, str]:
    """Read one file; the Series Instance UID goes with it where the file is of an admitted series."""
    headed = _guarded(lambda: _head(file))
    if headed is None:
        return None, ""
    if isinstance(headed, str):
        return Refused(file.path, headed), ""
    parsed, header = headed
    reason = unmeasurable(header) or _without_identifiers(header) or admit(header)
    if reason is not None:
        return Refused(file.path, reason), ""
    source = SourceFile(file.path, header.sop_instance_uid, header.sha256)
    frames = _guarded(lambda: tuple(frames_of(parsed, header, source, decode_pixels)))
    if isinstance(frames, str):
        return Refused(file.path, frames), header.series_instance_uid
    return _Taken(source, header.series_instance_uid, frames), header.series_instance_uid


def _head(file: Found) -> tuple[File, Header] | None:
    """Read a file's bytes and header; None where it is to be passed over in silence."""
    content = read_bytes(file)
    if content is None:
        return None
    parsed = parse(content)
    if parsed.is_directory and not file.asked_for:
        return None
    return parsed, header_of(parsed, file.path, hashlib.sha256(content).hexdigest())


def _guarded(task: Callable[[], T]) -> T | str:
    """Do what a file's content could make fail; give its result, or the reason to refuse the file."""
    try:
        return task()
    except RefusalError as refusal:
        return str(refusal)
    except (MemoryError, RecursionError):
        return "it asks for more memory than a phantom image needs"
    except EvenfieldError:
        raise
    except Exception as error:  # noqa: BLE001 (the last net: one file, whatever it holds, must not end the run)
        return f"{UNFORESEEN} ({type(error).__name__})"


def _stacked(taken: Sequence[_Taken], lost: Mapping[str, Sequence[Refused]]) -> tuple[list[Stacked], list[Refused]]:
    """Stack each DICOM series by itself."""
    by_series: dict[tuple[str, str], list[_Taken]] = defaultdict(list)
    for each in taken:
        by_series[each.frames[0].origin.study_instance_uid, each.series_uid].append(each)
    stacks: list[Stacked] = []
    refused: list[Refused] = []
    for (_, uid), members in by_series.items():
        frames = [frame for each in members for frame in each.frames]
        outcome = _guarded(partial(stack, frames, lost.get(uid, ())))
        if isinstance(outcome, str):
            refused += [Refused(each.source.path, outcome) for each in members]
        else:
            stacks += outcome[0]
            refused += outcome[1]
    return stacks, refused


def _without_identifiers(header: Header) -> str | None:
    if not header.sop_instance_uid:
        return "SOP Instance UID is missing: the image cannot be told from others"
    if not header.series_instance_uid or not header.study_instance_uid:
        return "Series or Study Instance UID is missing: what the image belongs to is not known"
    return None


def _each_once(taken: Sequence[_Taken]) -> tuple[list[_Taken], list[tuple[str, Refused]]]:
    """Take each SOP instance once: copies of one image are named, and images that differ under one identifier all refused."""
    by_uid: dict[str, list[_Taken]] = defaultdict(list)
    for each in taken:
        by_uid[each.source.sop_instance_uid].append(each)
    singles: list[_Taken] = []
    refused: list[tuple[str, Refused]] = []
    for same in by_uid.values():
        first, *others = same
        if all(_is_copy(first, each) for each in others):
            name = first.source.path.name
            singles.append(
                _with_remarks(first, [f"{each.source.path.name} is a copy of {name} and was read once" for each in others])
            )
        else:
            names = " and ".join(each.source.path.name for each in same[:3])
            reason = f"different images share one SOP Instance UID ({names}): keep the right one"
            refused += [(each.series_uid, Refused(each.source.path, reason)) for each in same]
    return singles, refused


def _is_copy(first: _Taken, second: _Taken) -> bool:
    """Tell whether two files hold the same image, be it in another transfer syntax or with another patient's name."""
    if first.source.sha256 == second.source.sha256:
        return True
    return len(first.frames) == len(second.frames) and all(
        a.plane == b.plane
        and a.settings == b.settings
        and a.scaling == b.scaling
        and a.kind == b.kind
        and a.origin.series_instance_uid == b.origin.series_instance_uid
        and np.array_equal(a.stored, b.stored)
        for a, b in zip(first.frames, second.frames, strict=True)
    )


def _with_remarks(taken: _Taken, remarks: Sequence[str]) -> _Taken:
    if not remarks:
        return taken
    origin = replace(taken.frames[0].origin, remarks=(*taken.frames[0].origin.remarks, *remarks))
    return replace(taken, frames=tuple(replace(frame, origin=origin) for frame in taken.frames))
