"""Decode JPEG, JPEG-LS and JPEG 2000 in a process of its own.

Their decoders are written in C and C++. A damaged stream can make one crash, wait for ever or write to the terminal; in a
process of its own that costs one file its place, not the run.
"""

import json
import os
import struct
import subprocess
import sys
import threading
from types import TracebackType
from typing import IO, Any, Self

import numpy as np
from numpy.typing import NDArray

from qa.dicom.refusal import RefusalError
from qa.errors import FaultError

__all__ = ["IsolatedDecoder", "serve"]

_LENGTH = struct.Struct("<I")
_START_SECONDS = 120.0
_SECONDS = 20.0
_SECONDS_A_MEGAPIXEL = 5.0


class IsolatedDecoder:
    """A decoding process, started when first asked and ended on leaving the context.

    Parameters
    ----------
    seconds : float
        How long a file may take, besides its allowance for size, before the process is taken to hang.
    command : tuple of str
        What to start; the default serves `serve`.
    """

    def __init__(self, seconds: float = _SECONDS, command: tuple[str, ...] = ()) -> None:
        self._seconds = seconds
        self._command = command or (sys.executable, "-c", "from qa.dicom.isolated import serve; serve()")
        self._process: subprocess.Popen[bytes] | None = None

    def __enter__(self) -> Self:
        return self

    def __exit__(self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None) -> None:
        self._stop()

    def decode(self, content: bytes, options: dict[str, int | str]) -> NDArray[Any]:
        """Decode encapsulated pixel data.

        Parameters
        ----------
        content : bytes
            The value of Pixel Data.
        options : dict
            Transfer syntax, plug-in and the values of the image pixel module, as pydicom's decoders name them.

        Returns
        -------
        (N,) integers

        Raises
        ------
        RefusalError
            The decoder failed, crashed, or took too long.
        """
        process = self._process or self._start()
        pixels = int(options["rows"]) * int(options["columns"]) * int(options["number_of_frames"])
        answer = self._ask(process, content, options, self._seconds + _SECONDS_A_MEGAPIXEL * pixels / 1e6)
        if answer is None:
            self._stop()
            raise RefusalError("its pixel data made the decoder crash or hang: damaged")
        if not answer:
            raise RefusalError("its pixel data cannot be decoded: damaged or cut short")
        kind, values = answer[:3].decode("ascii"), answer[3:]
        return np.frombuffer(values, dtype=kind)

    def _start(self) -> subprocess.Popen[bytes]:
        # One thread in the mathematics libraries: the process only unpacks, and threads cost start-up and memory.
        environment = {**os.environ, "PYTHONPATH": os.pathsep.join(filter(None, sys.path)), "OPENBLAS_NUM_THREADS": "1"}
        try:
            self._process = subprocess.Popen(  # noqa: S603 (our own interpreter, no input of the user's)
                self._command,
                stdin=subprocess.PIPE,
                stdout=subprocess.PIPE,
                stderr=subprocess.DEVNULL,
                env=environment,
            )
        except OSError:
            raise FaultError("the decoding process cannot be started: see that this Python may start processes") from None
        if self._ask(self._process, b"", {}, _START_SECONDS) is None:
            self._stop()
            raise FaultError("the decoding process does not answer: see that pydicom and its decoders are installed")
        return self._process

    @staticmethod
    def _ask(process: subprocess.Popen[bytes], content: bytes, options: dict[str, int | str], seconds: float) -> bytes | None:
        """Send a request and wait for its answer; None where the process has ended or did not answer in time."""
        source, sink = process.stdout, process.stdin
        if source is None or sink is None:
            return None
        watch = threading.Timer(seconds, process.kill)
        watch.start()
        try:
            _send(sink, json.dumps(options).encode())
            _send(sink, content)
            return _receive(source)
        except OSError:
            return None
        finally:
            watch.cancel()

    def _stop(self) -> None:
        process, self._process = self._process, None
        if process is None:
            return
        process.kill()
        for stream in (process.stdin, process.stdout):
            if stream is not None:
                try:
                    stream.close()
                except OSError:
                    continue
        process.wait()


def serve() -> None:
    """Answer requests on standard input until it ends; run in the decoding process."""
    source = sys.stdin.buffer
    with os.fdopen(os.dup(1), "wb") as sink:
        nowhere = os.open(os.devnull, os.O_WRONLY)
        os.dup2(nowhere, 1)  # what a decoder prints would be taken for an answer
        while (options := _receive(source)) is not None and (content := _receive(source)) is not None:
            _send(sink, _decoded(json.loads(options), content))


def _decoded(options: dict[str, Any], content: bytes) -> bytes:
    from pydicom.pixels.decoders.base import get_decoder
    from pydicom.uid import UID

    if not options:
        return b"ready"
    try:
        decoder = get_decoder(UID(str(options.pop("transfer_syntax"))))
        plugin = str(options.pop("plugin"))
        values, _ = decoder.as_array(content, raw=True, decoding_plugin=plugin, **options)
    except Exception:  # noqa: BLE001 (each decoder raises what it likes)
        return b""
    kind = f"<{values.dtype.kind}{values.dtype.itemsize}"
    return kind.encode("ascii") + values.astype(kind, copy=False).tobytes()


def _send(sink: IO[bytes], content: bytes) -> None:
    sink.write(_LENGTH.pack(len(content)))
    sink.write(content)
    sink.flush()


def _receive(source: IO[bytes]) -> bytes | None:
    head = source.read(_LENGTH.size)
    if len(head) < _LENGTH.size:
        return None
    (length,) = _LENGTH.unpack(head)
    content = source.read(length)
    return content if len(content) == length else None
