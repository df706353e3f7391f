"""The frames in which the simulator's host and its caller talk: a JSON header and raw bytes."""

import json
import os
import struct
from typing import Any

SCRATCH_PREFIX = "qcosim-"
FRAME = struct.Struct("<IQ")  # bytes of the JSON header, bytes of the payload


def pack(header: dict[str, Any], payload: bytes = b"") -> bytes:
    """Make one frame.

    Parameters
    ----------
    header : dict
        What JSON can hold.
    payload : bytes
        Raw bytes.

    Returns
    -------
    bytes
    """
    text = json.dumps(header).encode()
    return FRAME.pack(len(text), len(payload)) + text + payload


def send(descriptor: int, data: bytes) -> None:
    """Write all bytes to a blocking descriptor.

    Parameters
    ----------
    descriptor : int
        The descriptor.
    data : bytes
        The bytes.
    """
    view = memoryview(data)
    while view:
        view = view[os.write(descriptor, view) :]


class Assembler:
    """Cuts complete frames out of a stream of bytes."""

    def __init__(self) -> None:
        self._buffer = bytearray()

    def feed(self, data: bytes) -> list[bytes]:
        """Take bytes in.

        Parameters
        ----------
        data : bytes
            The next bytes of the stream.

        Returns
        -------
        list of bytes
            The frames that are complete now.
        """
        self._buffer += data
        frames = []
        while len(self._buffer) >= FRAME.size:
            header, payload = FRAME.unpack_from(self._buffer)
            size = FRAME.size + header + payload
            if len(self._buffer) < size:
                break
            frames.append(bytes(memoryview(self._buffer)[:size]))
            del self._buffer[:size]
        return frames


def unpack(frame: bytes) -> tuple[dict[str, Any], memoryview]:
    """Split a frame.

    Parameters
    ----------
    frame : bytes
        A complete frame.

    Returns
    -------
    dict
        Its header.
    memoryview
        Its payload.
    """
    size, _ = FRAME.unpack_from(frame)
    header: dict[str, Any] = json.loads(frame[FRAME.size : FRAME.size + size])
    return header, memoryview(frame)[FRAME.size + size :]
