"""What the record keeps, as bytes: blocks taken apart and checked, checksums, and JSON that knows every float."""

from __future__ import annotations

import contextlib
import hashlib
import json
import math
import platform
import re
import sqlite3
import zlib
from collections.abc import Iterable, Iterator, Sequence
from dataclasses import dataclass
from importlib import metadata
from pathlib import Path
from typing import Any, NamedTuple

import numpy as np

from .errors import ArgumentError
from .facts import FACTS

SCHEMA = 2  # DEVELOPERS.md says what a record of each format is
PHASES = ("settle", "keep")
# SQLite copies a blob three times on its way to the log: pieces of this size stay in the cache meanwhile, which takes
# 0.7 ns a byte and not 1.5. They fill the pages of 32 KiB that large records have: eight and the least part that SQLite
# keeps with a row, less the rest of the row.
PIECE_BYTES = 8 * 32_764 + 4_087 - 60
COLUMNS = "id, chain, phase, start, count, dimension, draws, facts, failures, gradients, note"


class Event(NamedTuple):
    """A note in the record: UTC time (ISO 8601), kind, and details."""

    time: str
    kind: str
    details: dict[str, Any]


class Failures(NamedTuple):
    """Failed steps whose position was kept: draw number in the phase (m,), code (m,), position (m, dimension)."""

    draw: np.ndarray
    code: np.ndarray
    position: np.ndarray


@dataclass(frozen=True, eq=False)
class Block:
    """A finished block of one chain, as `Record.append_blocks` takes it; the fields are those of `append_block`."""

    chain: int
    phase: str
    start: int
    facts: np.ndarray
    state: bytes
    draws: np.ndarray | None = None
    failures: tuple[np.ndarray, np.ndarray, np.ndarray] | None = None
    gradients: np.ndarray | None = None
    note: dict[str, Any] | None = None
    moments: bytes | None = None


class Row(NamedTuple):
    id: int
    chain: int
    phase: str
    start: int
    count: int
    dimension: int | None
    draws: int | None
    facts: int
    failures: int | None
    gradients: int | None
    note: str | None

    def label(self, kind: str) -> str:
        return f"{kind} {self.chain} {self.phase} {self.start} {self.count} {self.dimension}"


def _slow_checksum(label: str, data: Any = b"") -> bytes:
    digest = hashlib.sha256(label.encode(errors="backslashreplace") + b"\0", usedforsecurity=False)
    digest.update(data)
    return digest.digest()[:16]


def _checksum_of(label: str, data: Any, schema: int) -> bytes:
    # Against damage, not against forgery. CRC-32 misses one damage in 4e9, and none of less than 32 bits in a row, at a
    # third of the time of SHA-256, which format 1 has. The label makes a swapped blob as visible as a broken one.
    if schema == 1:
        return _slow_checksum(label, data)
    return zlib.crc32(data, zlib.crc32(label.encode())).to_bytes(4, "big")


def row_checksum(*values: Any) -> bytes:
    return _slow_checksum(json.dumps(values, default=repr))


def split(label: str, data: Any, schema: int) -> Iterator[tuple[int, int, memoryview, bytes]]:
    view = memoryview(data)
    pieces = -(-len(view) // PIECE_BYTES)
    for piece in range(pieces):
        chunk = view[piece * PIECE_BYTES : (piece + 1) * PIECE_BYTES]
        yield piece, pieces, chunk, _checksum_of(f"{label} {piece} {pieces}", chunk, schema)


def join(label: str, rows: Iterable[tuple[int, int, bytes, bytes]], schema: int) -> bytes | None:
    """The bytes that `split` took apart, or None when a piece is missing or does not agree with its checksum."""
    chunks: list[bytes] = []
    for piece, pieces, chunk, stored in rows:
        if piece != len(chunks) or not isinstance(chunk, bytes):
            return None
        if _checksum_of(f"{label} {piece} {pieces}", chunk, schema) != stored:
            return None
        chunks.append(chunk)
        if len(chunks) == pieces:
            return b"".join(chunks)
    return None


def _plain(value: Any) -> Any:
    if isinstance(value, (np.ndarray, np.generic)):
        value = value.tolist()
    if isinstance(value, dict) and all(isinstance(key, str) for key in value):
        return {key: _plain(item) for key, item in value.items()}
    if isinstance(value, (list, tuple)):
        return [_plain(item) for item in value]
    if isinstance(value, float) and not math.isfinite(value):
        return {"nonfinite": repr(float(value))}  # JSON has no spelling for these
    if value is None or isinstance(value, (bool, int, float, str)):
        return value
    raise ArgumentError(f"{value!r:.80} is of type {type(value).__name__}, which a record cannot keep: give numbers, "
                        "text, lists, and dicts whose keys are text")


def to_json(value: Any) -> str:
    return json.dumps(_plain(value), allow_nan=False)


def from_json(text: str) -> Any:
    return json.loads(text, object_hook=lambda item: float(item["nonfinite"]) if item.keys() == {"nonfinite"} else item)


def current_versions() -> dict[str, Any]:
    """Versions of fellwalk, Python, NumPy and SQLite, the platform and the CPU, as a new record keeps them."""
    try:
        own = metadata.version("fellwalk")
    except metadata.PackageNotFoundError:
        own = "not installed"
    cpu = platform.processor()
    with contextlib.suppress(OSError):
        found = re.search(r"^model name\s*:\s*(.+)$", Path("/proc/cpuinfo").read_text(), re.MULTILINE)
        cpu = found[1] if found else cpu
    return {"fellwalk": own, "python": platform.python_version(), "numpy": np.__version__,
            "sqlite": sqlite3.sqlite_version, "platform": platform.platform(), "cpu": cpu or platform.machine()}


def encode(block: Block) -> tuple[int, int | None, dict[str, np.ndarray]]:
    """Count, dimension and the arrays of a block as bytes, after all checks that need no look at the record."""
    where = f"block of chain {block.chain!r} ({block.phase} from draw {block.start!r})"
    for name, number in (("chain", block.chain), ("start", block.start)):
        if isinstance(number, bool) or not isinstance(number, (int, np.integer)) or not 0 <= number < 2**62:
            raise ArgumentError(f"{where}: {name} must be a whole number, 0 or more")
    if block.phase not in PHASES:
        raise ArgumentError(f"{where}: the phase must be one of {', '.join(PHASES)}")
    if not isinstance(block.state, bytes) or not block.state:
        raise ArgumentError(f"{where}: the chain's state must be bytes, and not empty")
    facts = np.asarray(block.facts)
    if facts.dtype.newbyteorder("<") != FACTS or facts.ndim != 1 or len(facts) == 0:
        raise ArgumentError(f"{where}: facts must be a one-dimensional array of dtype FACTS with at least one draw")
    if (block.draws is None) != (block.phase == "settle"):
        raise ArgumentError(f"{where}: draws belong to the phase keep, and only there")
    found: dict[str, Any] = {"facts": facts.astype(FACTS, copy=False)}
    dimension = None
    for name, value in (("draws", block.draws), ("gradients", block.gradients)):
        if value is None:
            continue
        array = np.asarray(value)
        wanted = (len(facts), array.shape[-1] if dimension is None and array.ndim else dimension)
        if block.draws is None or array.dtype.newbyteorder("<") != "<f8" or array.shape != wanted or 0 in wanted:
            raise ArgumentError(f"{where}: {name} must be float64 of shape (draws, dimension), a row for each fact, in "
                                f"the phase keep; got {array.dtype} of shape {array.shape} for {len(facts)} facts")
        found[name], dimension = array.astype("<f8", copy=False), wanted[1]
    if block.failures is not None and (len(block.failures) != 3 or len(block.failures[0])):
        found["failures"] = failures = _encode_failures(block.failures, len(facts), dimension, where)
        dimension = failures.dtype["position"].shape[0]
    flat = {name: np.ascontiguousarray(array).reshape(-1).view(np.uint8) for name, array in found.items()}
    return len(facts), dimension, flat


def failure_layout(dimension: int) -> np.dtype:
    return np.dtype([("index", "<i8"), ("code", "<i4"), ("position", "<f8", (dimension,))])


def _encode_failures(failures: Sequence[Any], count: int, dimension: int | None, where: str) -> np.ndarray:
    index, code, position = map(np.asarray, failures) if len(failures) == 3 else (np.empty(0),) * 3
    if (index.dtype.kind not in "iu" or code.dtype.kind not in "iu" or position.dtype.newbyteorder("<") != "<f8"
            or position.ndim != 2 or not index.shape == code.shape == position.shape[:1] or position.shape[1] == 0
            or dimension not in (None, position.shape[1]) or index.min() < 0 or index.max() >= count):
        raise ArgumentError(f"{where}: failures must be (index, code, position): whole numbers of shape (m,) with "
                            f"0 <= index < {count}, whole numbers (m,), float64 (m, dimension)")
    table = np.empty(len(index), failure_layout(position.shape[1]))
    table["index"], table["code"], table["position"] = index, code, position
    return table
