"""How do the stream's process and the recording process talk? Framed messages over the pipes of the child.

From the child: one byte of kind, four of length (little-endian), then the content: JSON text, or a block of frames
(`pack_block`): the number of its first frame, its flags, its length, and float32 in rows of (sent, loopback, angle).
To the child: one line of JSON each; the end of that pipe means that the recording process is gone.
"""

from __future__ import annotations

import json
import os
import struct
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any, BinaryIO

import numpy as np

from freqid.capture.sound.interface import Float32s

__all__ = ["BLOCK", "COLUMNS", "TEXT", "Block", "pack_block", "read_message", "unpack_block", "write_message"]

TEXT, BLOCK = b"T", b"B"
COLUMNS = 3  # sent, loopback, angle
_FRAME = struct.Struct("<cI")
_BLOCK = struct.Struct("<QII")


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Block:
    """Successive frames (n, 3) from `first_frame` on: sent, loopback, angle in digital full scale."""

    first_frame: int
    flags: int
    frames: Float32s


def pack_block(block: Block) -> bytes:
    """The block as bytes, for the pipe and the journal."""
    head = _BLOCK.pack(block.first_frame, block.flags, len(block.frames))
    return head + np.ascontiguousarray(block.frames, dtype="<f4").tobytes()


def unpack_block(content: bytes) -> Block:
    """Back from `pack_block`; raises ValueError where the length does not fit."""
    if len(content) < _BLOCK.size:
        raise ValueError(f"a block of {len(content)} bytes is too short")
    first_frame, flags, n_frames = _BLOCK.unpack_from(content)
    frames = np.frombuffer(content, dtype="<f4", offset=_BLOCK.size)
    if frames.size != n_frames * COLUMNS:
        raise ValueError(f"a block of {n_frames} frames holds {frames.size} numbers")
    return Block(first_frame=first_frame, flags=flags, frames=frames.reshape(n_frames, COLUMNS))


def write_message(descriptor: int, kind: bytes, content: bytes | Mapping[str, Any]) -> None:
    """Write a whole message; raises OSError where nobody reads any more."""
    if isinstance(content, Mapping):
        content = json.dumps(content, ensure_ascii=False).encode()
    rest = memoryview(_FRAME.pack(kind, len(content)) + content)
    while rest:
        rest = rest[os.write(descriptor, rest) :]


def read_message(pipe: BinaryIO) -> tuple[bytes, bytes] | None:
    """The next message; None at the end of the pipe, also where it ends within a message."""
    head = pipe.read(_FRAME.size)
    if len(head) < _FRAME.size:
        return None
    kind, length = _FRAME.unpack(head)
    content = pipe.read(length)
    return (kind, content) if len(content) == length else None
