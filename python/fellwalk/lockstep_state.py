"""The state of chains in lockstep as bytes: a head of plain JSON values, arrays of float64, a checksum."""

from __future__ import annotations

import json
import math
import struct
from collections.abc import Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray

from fellwalk.chain import _CHECKSUM_BYTES, _checksum
from fellwalk.errors import StateError
from fellwalk.settled import LOCKSTEP_MAGIC

__all__ = ["pack", "unpack"]


def pack(head: dict[str, Any], arrays: Sequence[NDArray[np.float64]]) -> bytes:
    """Bytes that `unpack` reads."""
    packed = json.dumps({**head, "shapes": [a.shape for a in arrays]}).encode()
    numbers = b"".join(a.astype("<f8").tobytes() for a in arrays)
    body = LOCKSTEP_MAGIC + struct.pack("<Q", len(packed)) + packed + numbers
    return body + _checksum(body)


def unpack(state: bytes) -> tuple[dict[str, Any], list[NDArray[np.float64]]]:
    """What `pack` was given. Errors: StateError."""
    if not isinstance(state, bytes) or not state.startswith(LOCKSTEP_MAGIC):
        raise StateError("this is not a state of chains in lockstep: it does not begin as one")
    body, checksum = state[:-_CHECKSUM_BYTES], state[-_CHECKSUM_BYTES:]
    if _checksum(body) != checksum:
        raise StateError("the stored state is damaged: it does not agree with its checksum")
    start = len(LOCKSTEP_MAGIC) + 8
    (length,) = struct.unpack("<Q", body[len(LOCKSTEP_MAGIC) : start])
    head = json.loads(body[start : start + length])
    numbers = np.frombuffer(body[start + length :], "<f8").astype(np.float64)
    ends = np.cumsum([math.prod(shape) for shape in head["shapes"]])
    return head, [numbers[end - math.prod(shape) : end].reshape(shape).copy()
                  for end, shape in zip(ends, head["shapes"], strict=True)]
