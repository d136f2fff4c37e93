"""The record: one SQLite file that keeps what a run has finished.

A block of draws, its per-draw facts and the chain's new state go in as one transaction, synced to disk, so a killed run
or a power cut loses at most the block in hand. While a run writes, others may read. Numbers are little-endian and every
stored item carries a checksum; nothing is ever unpickled. DEVELOPERS.md describes the format.

record_items.py turns blocks into bytes, record_file.py knows the file and its lock, record_reading.py reads; here is
`Record`, which makes, opens, writes and closes.
"""

from __future__ import annotations

import contextlib
import hashlib
import os
import sqlite3
import warnings
from collections.abc import Iterable, Iterator
from datetime import UTC, datetime
from typing import Any, NamedTuple

import numpy as np

from .errors import ArgumentError, RecordError, RecordExistsError
from .facts import FACTS
from .record_file import WriterLock, build, check_file, explained, open_reader, open_writer
from .record_items import (
    Block,
    Event,
    Failures,
    current_versions,
    encode,
    row_checksum,
    split,
    to_json,
)
from .record_reading import RecordReader

__all__ = ["Block", "Event", "Failures", "Record", "current_versions"]


class _Tail(NamedTuple):
    phase: str
    stop: int
    gradients: bool


class Record(RecordReader):
    """A record file, open to read or for the one run that writes it; comes from `Record.create` or `Record.open`.

    A context manager. Methods raise RecordError when the file cannot be read or written, its subclass
    DamagedRecordError when what they read does not agree with its checksum, and ArgumentError for wrong arguments.
    Chains are numbered from 0; `phase` is "settle" or "keep", and draws are numbered from 0 in each. Any thread may use
    it, one call at a time.
    """

    @classmethod
    def create(cls, path: str | os.PathLike[str], settings: dict[str, Any], *, replace: bool = False,
               expected: int = 0) -> Record:
        """Make a new record with the settings of a run, and open it for writing. `expected`: about how many bytes will
        go into it, if it is known; large records are laid out for speed, small ones to be small.

        Raises RecordExistsError when a file is there already, unless `replace` is true; RecordInUseError when another
        run is writing it.
        """
        full = os.path.realpath(path)
        entries = {"settings": settings, "versions": current_versions(), "facts": FACTS.descr}
        first = {name: to_json(value) for name, value in entries.items()}
        with explained(full, "write"):
            if os.path.isdir(full):
                raise RecordError(f"{full}: is a folder, not a record. Give the name of a file.")
            lock = WriterLock(full)
            try:
                if os.path.exists(full) and not replace:
                    raise RecordExistsError(f"{full}: there is a file already. Resume it, use another name, or say "
                                            "replace=True.")
                build(full, first, expected)
                return cls(full, *cls._with_lock(full, lock))
            except BaseException:
                lock.release()
                raise

    @staticmethod
    def _with_lock(full: str, lock: WriterLock) -> tuple[sqlite3.Connection, WriterLock, str]:
        connection, journal = open_writer(full)
        return connection, lock, journal

    @classmethod
    def open(cls, path: str | os.PathLike[str], *, write: bool = False, salvage: bool = False) -> Record:
        """Open a record to read it, also while a run is writing it, or with `write` to go on with it.

        `salvage` (reading only) checks everything once and then gives, of each chain and phase, the blocks before the
        first damage; the sentences about what is damaged stand in `damage`. Raises RecordInUseError when `write` is
        asked and another run is writing, DamagedRecordError or RecordError when the file is not a whole record.
        """
        full = os.path.realpath(path)
        if write and salvage:
            raise ArgumentError("a salvaged record can only be read: leave out write or salvage")
        with explained(full, "write" if write else "salvage" if salvage else "read"):
            check_file(full)
            if write:
                lock = WriterLock(full)
                try:
                    return cls(full, *cls._with_lock(full, lock))
                except BaseException:
                    lock.release()
                    raise
            record = cls(full, open_reader(full, salvage), None, "")
        if salvage:
            with record._reading():
                record._sound, damage = record._survey()
            record.damage = tuple(damage)
        return record

    def close(self) -> None:
        """Close the record; a written one becomes one single file, unless it is still open elsewhere."""
        with self._guard:
            connection, self._connection = self._connection, None
            if connection is None or self._pid != os.getpid():
                return
            try:
                if self._lock is not None and self.journal == "wal":
                    connection.execute("PRAGMA busy_timeout=100")  # a reader that stays folds the log in when it closes
                    connection.execute("PRAGMA wal_checkpoint(TRUNCATE)").fetchone()
                    connection.execute("PRAGMA journal_mode=DELETE").fetchone()
            except sqlite3.Error as error:
                if getattr(error, "sqlite_errorcode", 0) & 0xFF != sqlite3.SQLITE_BUSY:
                    warnings.warn(f"{self.path}: could not be made one file ({error}). Nothing is lost: keep the -wal "
                                  "file beside it, make room, then open it for writing and close it.", stacklevel=2)
            finally:
                connection.close()
                if self._lock is not None:
                    self._lock.release()

    def __enter__(self) -> Record:
        return self

    def __exit__(self, *_: object) -> None:
        self.close()

    def __del__(self) -> None:
        if getattr(self, "_connection", None) is not None:
            with contextlib.suppress(Exception):
                self.close()

    @contextlib.contextmanager
    def _writing(self) -> Iterator[sqlite3.Connection]:
        with self._guard, explained(self.path, "write"):
            connection = self._live()
            if self._lock is None:
                raise RecordError(f"{self.path}: this record was opened for reading. Open it with write=True.")
            try:
                connection.execute("BEGIN IMMEDIATE")
                yield connection
                connection.execute("COMMIT")
            except BaseException:  # also Ctrl-C, at any line: what was remembered may not be what was committed
                self._memory.clear()
                with contextlib.suppress(sqlite3.Error):
                    if connection.in_transaction:
                        connection.execute("ROLLBACK")
                raise

    def append_block(self, chain: int, phase: str, start: int, *, facts: np.ndarray, state: bytes,
                     draws: np.ndarray | None = None, failures: tuple[np.ndarray, np.ndarray, np.ndarray] | None = None,
                     gradients: np.ndarray | None = None, note: dict[str, Any] | None = None,
                     moments: bytes | None = None) -> None:
        """Add a finished block and the chain's new state; when this returns, they survive a kill and a power cut.

        `start` is the number of the block's first draw in its phase and must follow the last one without gap or
        overlap. `facts`: FACTS array (n,). `draws`: float64 (n, dimension) when keeping, None when settling.
        `gradients`: float64 (n, dimension), in all blocks kept of a chain or in none. `failures`: (index, code,
        position), whole numbers (m,) counting draws inside the block, codes (m,), float64 (m, dimension). `note`: any
        JSON values. `moments`: bytes about all draws of the chain so far, in place of the last. After an error nothing
        of the block is in the record, and the same call may be made again.
        """
        self.append_blocks([Block(chain, phase, start, facts, state, draws, failures, gradients, note, moments)])

    def append_blocks(self, blocks: Iterable[Block]) -> None:
        """Add several blocks, of one chain or many, in one transaction: all or none; see `append_block`."""
        ready = [(block, *encode(block), None if block.note is None else to_json(block.note)) for block in blocks]
        if ready:
            with self._writing() as connection:
                for item in ready:
                    self._append(connection, *item)

    def _append(self, connection: sqlite3.Connection, block: Block, count: int, dimension: int | None,
                arrays: dict[str, np.ndarray], note: str | None) -> None:
        chain, start = int(block.chain), int(block.start)
        self._check_place(connection, block, count, dimension)
        if "next array" not in self._memory:
            self._memory["next array"] = connection.execute("SELECT coalesce(max(id), 0) + 1 FROM arrays").fetchone()[0]
        ids: dict[str, int] = {}
        label = f"{chain} {block.phase} {start} {count} {dimension}"
        for kind, data in arrays.items():
            ids[kind] = self._memory["next array"]
            for item in split(f"{kind} {label}", data, self.schema):
                connection.execute("INSERT INTO arrays VALUES (?, ?, ?, ?, ?)", (self._memory["next array"], *item))
                self._memory["next array"] += 1
        row = (chain, block.phase, start, count, dimension,
               ids.get("draws"), ids["facts"], ids.get("failures"), ids.get("gradients"), note)
        connection.execute("INSERT INTO blocks VALUES (NULL, ?, ?, ?, ?, ?, ?, ?, ?, ?, ?, ?)",
                           (*row, row_checksum(*row)))
        stop = start + count
        connection.execute("DELETE FROM states WHERE chain = ?", (chain,))
        for piece, pieces, chunk, checksum in split(f"state {chain} {block.phase} {stop}", block.state, self.schema):
            connection.execute("INSERT INTO states VALUES (?, ?, ?, ?, ?, ?, ?)",
                               (chain, piece, pieces, block.phase, stop, chunk, checksum))
        if block.moments is not None:
            connection.execute("DELETE FROM moments WHERE chain = ?", (chain,))
            for piece, pieces, chunk, checksum in split(f"moments {chain} {stop}", block.moments, self.schema):
                connection.execute("INSERT INTO moments VALUES (?, ?, ?, ?, ?, ?)",
                                   (chain, piece, pieces, stop, chunk, checksum))
        self._memory["tail", chain] = _Tail(block.phase, stop, "gradients" in ids)
        self._memory["dimension"] = dimension if dimension is not None else self._memory.get("dimension")

    def _check_place(self, connection: sqlite3.Connection, block: Block, count: int, dimension: int | None) -> None:
        tail = self._memory.get(("tail", block.chain))
        if tail is None:
            found = connection.execute("SELECT phase, start + count, gradients IS NOT NULL FROM blocks WHERE chain = ? "
                                       "ORDER BY id DESC LIMIT 1", (int(block.chain),)).fetchone()
            tail = _Tail(*found) if found else _Tail("settle", 0, False)
        where = f"{self.path}: block of chain {block.chain} ({block.phase} from draw {block.start})"
        if (tail.phase, block.phase) == ("keep", "settle"):
            raise ArgumentError(f"{where}: this chain keeps draws already, so no settling can follow")
        stop = tail.stop if tail.phase == block.phase else 0
        if block.start != stop:
            raise ArgumentError(f"{where}: draws {block.start} to {block.start + count - 1} were given, but draw "
                                f"{stop} is next")
        if tail.phase == block.phase == "keep" and tail.stop and tail.gradients != (block.gradients is not None):
            raise ArgumentError(f"{where}: gradients must come with every kept block of a chain or with none")
        if self._memory.get("dimension") is None:
            self._memory["dimension"] = self._dimension(connection)
        if None not in (dimension, self._memory["dimension"]) and dimension != self._memory["dimension"]:
            raise ArgumentError(f"{where}: has dimension {dimension}, but the record's is {self._memory['dimension']}")

    def put_part(self, data: bytes) -> str:
        """Keep a part that many states share (bytes, not empty), once; returns its name, the hash of its content."""
        if not isinstance(data, bytes) or not data:
            raise ArgumentError("a part must be bytes, and not empty")
        name = hashlib.blake2b(data, digest_size=32).hexdigest()
        with self._writing() as connection:
            if connection.execute("SELECT 1 FROM parts WHERE name = ?", (name,)).fetchone() is None:
                connection.executemany("INSERT INTO parts VALUES (?, ?, ?, ?, ?)",
                                       ((name, *item) for item in split(f"part {name}", data, self.schema)))
        return name

    def set_entry(self, name: str, value: Any) -> None:
        """Keep a value of JSON kinds (NumPy arrays become lists) under a name, in place of an earlier one."""
        if not isinstance(name, str):
            raise ArgumentError(f"the name of an entry must be text, not {type(name).__name__}")
        text = to_json(value)
        with self._writing() as connection:
            connection.execute("INSERT OR REPLACE INTO entries VALUES (?, ?, ?)",
                               (name, text, row_checksum(name, text)))

    def append_event(self, kind: str, details: dict[str, Any] | None = None) -> None:
        """Add a note of what happened (interrupted, resumed, an error, costs) with the present time."""
        row = (datetime.now(UTC).isoformat(), str(kind), to_json(details or {}))
        with self._writing() as connection:
            connection.execute("INSERT INTO events VALUES (NULL, ?, ?, ?, ?)", (*row, row_checksum(*row)))
