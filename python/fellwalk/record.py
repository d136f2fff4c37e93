"""The record: one SQLite file that keeps what a run has finished.

A block of draws, its per-draw facts and the chain's new state go in as one transaction, synced to disk, so a killed run
or a power cut loses at most the block in hand. While a run writes, others may read. Numbers are little-endian and every
stored item carries a checksum; nothing is ever unpickled.

Order of this file: plain helpers, the writer's lock, opening and its sentences, then `Record`.
"""

from __future__ import annotations

import contextlib
import hashlib
import json
import math
import os
import platform
import re
import shutil
import socket
import sqlite3
import threading
import urllib.parse
import warnings
from collections.abc import Iterable, Iterator, Sequence
from dataclasses import dataclass
from datetime import UTC, datetime
from importlib import metadata
from pathlib import Path
from typing import Any, NamedTuple

import numpy as np

from .errors import ArgumentError, DamagedRecordError, RecordError, RecordExistsError, RecordInUseError
from .facts import FACTS

try:
    import fcntl
except ImportError:  # Windows
    fcntl = None  # type: ignore[assignment]
    import msvcrt

SCHEMA = 1
APPLICATION_ID = 0x46656C6C
PHASES = ("settle", "keep")
PIECE_BYTES = 64_000_000
BUSY_SECONDS = 30.0

_TABLES = """
CREATE TABLE format (name TEXT NOT NULL, version INTEGER NOT NULL);
CREATE TABLE entries (name TEXT PRIMARY KEY, value TEXT NOT NULL, checksum BLOB NOT NULL);
CREATE TABLE events (number INTEGER PRIMARY KEY, time TEXT NOT NULL, kind TEXT NOT NULL, details TEXT NOT NULL,
    checksum BLOB NOT NULL);
CREATE TABLE blocks (id INTEGER PRIMARY KEY, chain INTEGER NOT NULL, phase TEXT NOT NULL, start INTEGER NOT NULL,
    count INTEGER NOT NULL, dimension INTEGER, draws INTEGER, facts INTEGER NOT NULL, failures INTEGER,
    gradients INTEGER, note TEXT, checksum BLOB NOT NULL);
CREATE UNIQUE INDEX blocks_in_order ON blocks (chain, phase, start);
CREATE TABLE arrays (id INTEGER PRIMARY KEY, piece INTEGER NOT NULL, pieces INTEGER NOT NULL, data BLOB NOT NULL,
    checksum BLOB NOT NULL);
CREATE TABLE states (chain INTEGER NOT NULL, piece INTEGER NOT NULL, pieces INTEGER NOT NULL, phase TEXT NOT NULL,
    start INTEGER NOT NULL, data BLOB NOT NULL, checksum BLOB NOT NULL, PRIMARY KEY (chain, piece));
CREATE TABLE parts (name TEXT NOT NULL, piece INTEGER NOT NULL, pieces INTEGER NOT NULL, data BLOB NOT NULL,
    checksum BLOB NOT NULL, PRIMARY KEY (name, piece));
"""
_COLUMNS = "id, chain, phase, start, count, dimension, draws, facts, failures, gradients, note"
# Write-ahead logs need memory shared between all readers, which these file systems do not give between machines.
_NETWORK = {"nfs", "nfs4", "cifs", "smb3", "smbfs", "lustre", "gpfs", "beegfs", "afs", "ceph", "glusterfs", "9p",
            "davfs", "panfs", "pvfs2", "ocfs2", "gfs2", "fuse.sshfs", "fuse.glusterfs", "fuse.cephfs", "fuse.davfs"}
_REMEDY = " Open it with salvage=True to read what is whole, or take a copy from a backup."


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


class _Row(NamedTuple):
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


class _Tail(NamedTuple):
    phase: str
    stop: int
    gradients: bool


def _checksum(label: str, data: Any = b"") -> bytes:
    # BLAKE2b, not CRC-32: 16 bytes leave no chance for unnoticed damage (CRC-32: one in 4e9), its time is small beside
    # the sync's, and the same function names parts by their content. The label makes a swapped blob as visible as a
    # broken one.
    digest = hashlib.blake2b(label.encode(errors="backslashreplace") + b"\0", digest_size=16)
    digest.update(data)
    return digest.digest()


def _row_checksum(*values: Any) -> bytes:
    return _checksum(json.dumps(values, default=repr))


def _split(label: str, data: Any) -> Iterator[tuple[int, int, memoryview, bytes]]:
    view = memoryview(data)
    pieces = -(-len(view) // PIECE_BYTES)
    for piece in range(pieces):
        chunk = view[piece * PIECE_BYTES : (piece + 1) * PIECE_BYTES]
        yield piece, pieces, chunk, _checksum(f"{label} {piece} {pieces}", chunk)


def _join(label: str, rows: Iterable[tuple[int, int, bytes, bytes]]) -> bytes | None:
    """The bytes that `_split` took apart, or None when a piece is missing or does not agree with its checksum."""
    chunks: list[bytes] = []
    for piece, pieces, chunk, checksum in rows:
        if piece != len(chunks) or not isinstance(chunk, bytes):
            return None
        if _checksum(f"{label} {piece} {pieces}", chunk) != checksum:
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


def _to_json(value: Any) -> str:
    return json.dumps(_plain(value), allow_nan=False)


def _from_json(text: str) -> Any:
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


def _encode(block: Block) -> tuple[int, int | None, dict[str, np.ndarray]]:
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


def _failure_layout(dimension: int) -> np.dtype:
    return np.dtype([("index", "<i8"), ("code", "<i4"), ("position", "<f8", (dimension,))])


def _encode_failures(failures: Sequence[Any], count: int, dimension: int | None, where: str) -> np.ndarray:
    index, code, position = map(np.asarray, failures) if len(failures) == 3 else (np.empty(0),) * 3
    if (index.dtype.kind not in "iu" or code.dtype.kind not in "iu" or position.dtype.newbyteorder("<") != "<f8"
            or position.ndim != 2 or not index.shape == code.shape == position.shape[:1] or position.shape[1] == 0
            or dimension not in (None, position.shape[1]) or index.min() < 0 or index.max() >= count):
        raise ArgumentError(f"{where}: failures must be (index, code, position): whole numbers of shape (m,) with "
                            f"0 <= index < {count}, whole numbers (m,), float64 (m, dimension)")
    table = np.empty(len(index), _failure_layout(position.shape[1]))
    table["index"], table["code"], table["position"] = index, code, position
    return table


class _WriterLock:
    """Held by the one writer of a record as long as it lives, on a file beside it; the system drops it when it dies.

    POSIX record locks on a file of its own: on the database file they would be SQLite's, and flock would pass to forked
    workers, who can outlive a killed run and keep it shut. They guard against other processes only, hence `held`.
    """

    held: set[str] = set()  # noqa: RUF012 - shared by design
    guard = threading.Lock()

    def __init__(self, record: str) -> None:
        self.path = record + ".writer"
        self.pid = os.getpid()
        with _WriterLock.guard:
            if self.path in _WriterLock.held:
                raise RecordInUseError(f"{record}: this process is already writing this record. Close it there first.")
            self._file = self._take(record)
            _WriterLock.held.add(self.path)

    def _take(self, record: str) -> Any:
        while True:
            file = open(self.path, "a+b")  # noqa: SIM115 - stays open as long as the lock is held
            try:
                if fcntl is not None:
                    fcntl.lockf(file, fcntl.LOCK_EX | fcntl.LOCK_NB)
                else:
                    file.seek(1 << 30)  # beyond the text, which others must be able to read
                    msvcrt.locking(file.fileno(), msvcrt.LK_NBLCK, 1)
                file.seek(0)
                # Between open and lock the former holder may have removed this very file.
                if os.name == "nt" or os.path.samestat(os.fstat(file.fileno()), os.stat(self.path)):
                    file.truncate()
                    file.write(f"process {os.getpid()} on {socket.gethostname()}".encode())
                    file.flush()
                    return file
                file.close()
            except FileNotFoundError:
                file.close()
            except OSError as error:
                file.seek(0)
                holder = file.read(200).decode(errors="replace")
                file.close()
                if isinstance(error, (BlockingIOError, PermissionError)):
                    raise RecordInUseError(f"{record}: another run ({holder or 'unknown process'}) is writing this "
                                           "record. Wait until it ends, stop it, or use another file.") from None
                raise RecordError(f"{record}: this file system cannot lock files ({error.strerror}), so two runs could "
                                  "write at once. Put the record on a local disk.") from error

    def release(self) -> None:
        if self.pid == os.getpid():
            with _WriterLock.guard, contextlib.suppress(OSError):
                _WriterLock.held.discard(self.path)
                if os.name != "nt":
                    os.unlink(self.path)  # while still locked: afterwards it may be another's
            self._file.close()
            if os.name == "nt":
                with contextlib.suppress(OSError):
                    os.unlink(self.path)


if hasattr(os, "register_at_fork"):
    os.register_at_fork(after_in_child=_WriterLock.held.clear)


def _mount_kind(mountinfo: str, path: str) -> str:
    """Type of the file system that holds `path`, from the text of /proc/self/mountinfo."""
    best = kind = ""
    for line in mountinfo.splitlines():
        left, _, right = line.partition(" - ")
        point = re.sub(r"\\(\d{3})", lambda code: chr(int(code[1], 8)), left.split(" ")[4])
        if (path + "/").startswith(point.rstrip("/") + "/") and len(point) >= len(best):
            best, kind = point, right.split(" ")[0]
    return kind


def _on_network(path: str) -> bool:
    try:
        return _mount_kind(Path("/proc/self/mountinfo").read_text(errors="surrogateescape"), path) in _NETWORK
    except OSError:
        return False  # no such table on this system; SQLite's own answer then decides


def _connect(path: str, options: str) -> sqlite3.Connection:
    # Paths can hold "?", "#" and bytes that are no UTF-8: hence a quoted URI.
    text = Path(path).as_posix()
    uri = f"file://{'' if text.startswith('/') else '/'}{urllib.parse.quote(os.fsencode(text))}?{options}"
    return sqlite3.connect(uri, uri=True, isolation_level=None, timeout=BUSY_SECONDS, check_same_thread=False)


@contextlib.contextmanager
def _explained(path: str, doing: str) -> Iterator[None]:
    """Turns what SQLite raises into this package's exceptions, with a sentence that says what can be done."""
    try:
        yield
    except sqlite3.Error as error:
        code = (getattr(error, "sqlite_errorcode", None) or 0) & 0xFF
        if code in (sqlite3.SQLITE_FULL, sqlite3.SQLITE_IOERR) and doing == "write":
            free = shutil.disk_usage(os.path.dirname(path)).free / 1e6
            raise RecordError(f"{path}: could not be written ({error}): the disk, a quota or a file-size limit is full "
                              f"({free:.0f} MB free there). Finished blocks are safe; make room and go on.") from error
        if code in (sqlite3.SQLITE_BUSY, sqlite3.SQLITE_LOCKED):
            raise RecordInUseError(f"{path}: another program has locked this file for over {BUSY_SECONDS:.0f} s. "
                                   "Close it there and try again.") from error
        if code in (sqlite3.SQLITE_READONLY, sqlite3.SQLITE_CANTOPEN, sqlite3.SQLITE_PERM, sqlite3.SQLITE_AUTH):
            raise RecordError(f"{path}: no permission to {doing} this file or its folder ({error}). Change the rights, "
                              "or copy the record, with any -wal file beside it, to a folder of your own.") from error
        if code == sqlite3.SQLITE_NOTADB:
            raise RecordError(f"{path}: is not a fellwalk record: not an SQLite file, or its first bytes are damaged. "
                              "Check the name.") from error
        if code == sqlite3.SQLITE_IOERR:
            raise RecordError(f"{path}: the disk gave an error while reading ({error}). Copy the file elsewhere and "
                              "try there.") from error
        remedy = " Nothing can be saved from it: take a copy from a backup." if doing == "salvage" else _REMEDY
        raise DamagedRecordError(f"{path}: is damaged or cut short ({error}).{remedy}") from error
    except OSError as error:
        raise RecordError(f"{path}: could not {doing} the record ({error.strerror}). Check the folder, its rights and "
                          "the free space.") from error


def _recognise(connection: sqlite3.Connection, path: str) -> None:
    identity = connection.execute("PRAGMA application_id").fetchone()[0]
    version = connection.execute("PRAGMA user_version").fetchone()[0]
    if identity != APPLICATION_ID:
        raise RecordError(f"{path}: is an SQLite file, but not a fellwalk record. Check the name.")
    if version > SCHEMA:
        raise RecordError(f"{path}: was written by a newer fellwalk (record format {version}; this one reads up to "
                          f"{SCHEMA}). Update fellwalk to read it.")
    connection.execute("SELECT version FROM format").fetchone()


def _check_file(path: str) -> None:
    try:
        size = os.stat(path).st_size
    except FileNotFoundError:
        raise RecordError(f"{path}: there is no such file. Check the name, or create a new record.") from None
    if os.path.isdir(path):
        raise RecordError(f"{path}: is a folder, not a record. Give the name of a file.")
    if size == 0:
        raise DamagedRecordError(f"{path}: is empty, so nothing can be read from it. Take a copy from a backup, or "
                                 "start anew.")


def _open_writer(path: str) -> tuple[sqlite3.Connection, str]:
    for wanted in ("delete",) if _on_network(path) else ("wal", "delete"):
        connection = _connect(path, "mode=rw")
        try:
            if wanted == "delete":
                # Lets SQLite read a log that a killed run left, with no shared memory; ends with the next read.
                connection.execute("PRAGMA locking_mode=EXCLUSIVE")
            _recognise(connection, path)
            if connection.execute(f"PRAGMA journal_mode={wanted}").fetchone()[0] == wanted:
                connection.execute("PRAGMA locking_mode=NORMAL")
                # FULL syncs the log at every commit; a rollback journal also needs its folder synced, which EXTRA does.
                connection.execute(f"PRAGMA synchronous={'FULL' if wanted == 'wal' else 'EXTRA'}")
                connection.execute("SELECT version FROM format").fetchone()
                return connection, wanted
            connection.close()
        except sqlite3.OperationalError as error:
            connection.close()
            code = getattr(error, "sqlite_errorcode", 0) & 0xFF
            if wanted == "delete" or code not in (sqlite3.SQLITE_CANTOPEN, sqlite3.SQLITE_IOERR):
                raise
        except BaseException:
            connection.close()
            raise
    raise RecordError(f"{path}: SQLite can keep no journal here. Put the record on a local disk.")


def _open_reader(path: str, salvage: bool) -> sqlite3.Connection:
    # Read-write with query_only, so that the log of a killed run can be recovered. Salvage touches nothing, and
    # writable_schema lets SQLite read past the missing end of a file that was cut short.
    for options in ("mode=ro", "immutable=1") if salvage else ("mode=rw",):
        connection = _connect(path, options)
        try:
            connection.execute("PRAGMA writable_schema=ON" if salvage else "PRAGMA query_only=ON")
            _recognise(connection, path)
            return connection
        except BaseException as error:
            connection.close()
            if options != "mode=ro" or not isinstance(error, sqlite3.Error):
                raise
    raise AssertionError


def _sync_folder(path: str) -> None:
    with contextlib.suppress(OSError):  # Windows cannot open folders; there the rename itself is durable enough
        handle = os.open(os.path.dirname(path), os.O_RDONLY)
        try:
            os.fsync(handle)
        finally:
            os.close(handle)


class Record:
    """A record file, open to read or for the one run that writes it; comes from `Record.create` or `Record.open`.

    A context manager. Methods raise RecordError when the file cannot be read or written, its subclass
    DamagedRecordError when what they read does not agree with its checksum, and ArgumentError for wrong arguments.
    Chains are numbered from 0; `phase` is "settle" or "keep", and draws are numbered from 0 in each. Any thread may use
    it, one call at a time.
    """

    def __init__(self, path: str, connection: sqlite3.Connection, lock: _WriterLock | None, journal: str) -> None:
        self.path = path
        self.journal = journal
        self.damage: tuple[str, ...] = ()
        self._connection: sqlite3.Connection | None = connection
        self._lock = lock
        self._pid = os.getpid()
        self._guard = threading.RLock()
        self._memory: dict[Any, Any] = {}
        self._sound: dict[tuple[int, str], list[_Row]] | None = None

    @classmethod
    def create(cls, path: str | os.PathLike[str], settings: dict[str, Any], *, replace: bool = False) -> Record:
        """Make a new record with the settings of a run, and open it for writing.

        Raises RecordExistsError when a file is there already, unless `replace` is true; RecordInUseError when another
        run is writing it.
        """
        full = os.path.realpath(path)
        entries = {"settings": settings, "versions": current_versions(), "facts": FACTS.descr}
        first = {name: _to_json(value) for name, value in entries.items()}
        with _explained(full, "write"):
            if os.path.isdir(full):
                raise RecordError(f"{full}: is a folder, not a record. Give the name of a file.")
            lock = _WriterLock(full)
            try:
                if os.path.exists(full) and not replace:
                    raise RecordExistsError(f"{full}: there is a file already. Resume it, use another name, or say "
                                            "replace=True.")
                cls._build(full, first)
                return cls(full, *cls._with_lock(full, lock))
            except BaseException:
                lock.release()
                raise

    @staticmethod
    def _build(full: str, entries: dict[str, str]) -> None:
        # Built beside and then renamed, so a kill here leaves no half-made record and an old one is replaced whole.
        new = full + ".new"
        with contextlib.suppress(FileNotFoundError):
            os.unlink(new)
        try:
            with contextlib.closing(_connect(new, "mode=rwc")) as connection:
                connection.executescript(f"PRAGMA synchronous=EXTRA; PRAGMA application_id={APPLICATION_ID}; "
                                         f"PRAGMA user_version={SCHEMA}; BEGIN; {_TABLES}")
                connection.execute("INSERT INTO format VALUES ('fellwalk record', ?)", (SCHEMA,))
                for name, text in entries.items():
                    connection.execute("INSERT INTO entries VALUES (?, ?, ?)", (name, text, _row_checksum(name, text)))
                connection.execute("COMMIT")
            # Left by a killed run; SQLite would take them for the new file's own.
            for ending in ("-wal", "-shm", "-journal"):
                with contextlib.suppress(FileNotFoundError):
                    os.unlink(full + ending)
            os.replace(new, full)
        except BaseException:
            for leftover in (new, new + "-journal"):
                with contextlib.suppress(OSError):
                    os.unlink(leftover)
            raise
        _sync_folder(full)

    @staticmethod
    def _with_lock(full: str, lock: _WriterLock) -> tuple[sqlite3.Connection, _WriterLock, str]:
        connection, journal = _open_writer(full)
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
        with _explained(full, "write" if write else "salvage" if salvage else "read"):
            _check_file(full)
            if write:
                lock = _WriterLock(full)
                try:
                    return cls(full, *cls._with_lock(full, lock))
                except BaseException:
                    lock.release()
                    raise
            record = cls(full, _open_reader(full, salvage), None, "")
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

    def _live(self) -> sqlite3.Connection:
        if self._connection is None:
            raise RecordError(f"{self.path}: this record has been closed. Open it again.")
        if self._pid != os.getpid():
            raise RecordError(f"{self.path}: this record was opened by the parent process. Open it anew in this one.")
        return self._connection

    @contextlib.contextmanager
    def _reading(self) -> Iterator[sqlite3.Connection]:
        with self._guard, _explained(self.path, "read"):
            connection = self._live()
            if connection.in_transaction:
                yield connection
                return
            connection.execute("BEGIN")  # one view of the file, whatever a running writer adds meanwhile
            try:
                yield connection
            finally:
                if connection.in_transaction:
                    connection.execute("ROLLBACK")

    @contextlib.contextmanager
    def _writing(self) -> Iterator[sqlite3.Connection]:
        with self._guard, _explained(self.path, "write"):
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

    # Writing

    def append_block(self, chain: int, phase: str, start: int, *, facts: np.ndarray, state: bytes,
                     draws: np.ndarray | None = None, failures: tuple[np.ndarray, np.ndarray, np.ndarray] | None = None,
                     gradients: np.ndarray | None = None, note: dict[str, Any] | None = None) -> None:
        """Add a finished block and the chain's new state; when this returns, they survive a kill and a power cut.

        `start` is the number of the block's first draw in its phase and must follow the last one without gap or
        overlap. `facts`: FACTS array (n,). `draws`: float64 (n, dimension) when keeping, None when settling.
        `gradients`: float64 (n, dimension), in all blocks kept of a chain or in none. `failures`: (index, code,
        position), whole numbers (m,) counting draws inside the block, codes (m,), float64 (m, dimension). `note`: any
        JSON values. After an error nothing of the block is in the record, and the same call may be made again.
        """
        self.append_blocks([Block(chain, phase, start, facts, state, draws, failures, gradients, note)])

    def append_blocks(self, blocks: Iterable[Block]) -> None:
        """Add several blocks, of one chain or many, in one transaction: all or none; see `append_block`."""
        ready = [(block, *_encode(block), None if block.note is None else _to_json(block.note)) for block in blocks]
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
            for item in _split(f"{kind} {label}", data):
                connection.execute("INSERT INTO arrays VALUES (?, ?, ?, ?, ?)", (self._memory["next array"], *item))
                self._memory["next array"] += 1
        row = (chain, block.phase, start, count, dimension,
               ids.get("draws"), ids["facts"], ids.get("failures"), ids.get("gradients"), note)
        connection.execute("INSERT INTO blocks VALUES (NULL, ?, ?, ?, ?, ?, ?, ?, ?, ?, ?, ?)",
                           (*row, _row_checksum(*row)))
        stop = start + count
        connection.execute("DELETE FROM states WHERE chain = ?", (chain,))
        for piece, pieces, chunk, checksum in _split(f"state {chain} {block.phase} {stop}", block.state):
            connection.execute("INSERT INTO states VALUES (?, ?, ?, ?, ?, ?, ?)",
                               (chain, piece, pieces, block.phase, stop, chunk, checksum))
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

    @staticmethod
    def _dimension(connection: sqlite3.Connection) -> int | None:
        found = connection.execute("SELECT dimension FROM blocks WHERE dimension IS NOT NULL LIMIT 1").fetchone()
        return found[0] if found else None

    def put_part(self, data: bytes) -> str:
        """Keep a part that many states share (bytes, not empty), once; returns its name, the hash of its content."""
        if not isinstance(data, bytes) or not data:
            raise ArgumentError("a part must be bytes, and not empty")
        name = hashlib.blake2b(data, digest_size=32).hexdigest()
        with self._writing() as connection:
            if connection.execute("SELECT 1 FROM parts WHERE name = ?", (name,)).fetchone() is None:
                connection.executemany("INSERT INTO parts VALUES (?, ?, ?, ?, ?)",
                                       ((name, *item) for item in _split(f"part {name}", data)))
        return name

    def set_entry(self, name: str, value: Any) -> None:
        """Keep a value of JSON kinds (NumPy arrays become lists) under a name, in place of an earlier one."""
        if not isinstance(name, str):
            raise ArgumentError(f"the name of an entry must be text, not {type(name).__name__}")
        text = _to_json(value)
        with self._writing() as connection:
            connection.execute("INSERT OR REPLACE INTO entries VALUES (?, ?, ?)",
                               (name, text, _row_checksum(name, text)))

    def append_event(self, kind: str, details: dict[str, Any] | None = None) -> None:
        """Add a note of what happened (interrupted, resumed, an error, costs) with the present time."""
        row = (datetime.now(UTC).isoformat(), str(kind), _to_json(details or {}))
        with self._writing() as connection:
            connection.execute("INSERT INTO events VALUES (NULL, ?, ?, ?, ?)", (*row, _row_checksum(*row)))

    # Reading

    @property
    def settings(self) -> dict[str, Any]:
        """What the run was asked for, as given to `create`."""
        return self.get_entry("settings")

    @property
    def versions(self) -> dict[str, Any]:
        """`current_versions()` at the time the record was made."""
        return self.get_entry("versions")

    @property
    def schema(self) -> int:
        """Number of the file's layout."""
        with self._reading() as connection:
            return connection.execute("PRAGMA user_version").fetchone()[0]

    def get_entry(self, name: str, default: Any = None) -> Any:
        """The value kept under a name, or `default`."""
        with self._reading() as connection:
            found = connection.execute("SELECT value, checksum FROM entries WHERE name = ?", (name,)).fetchone()
            if found is None:
                return default
            if _row_checksum(name, found[0]) != found[1]:
                raise self._damaged(f"the entry {name!r}")
            return _from_json(found[0])

    def events(self) -> list[Event]:
        """All notes, oldest first."""
        with self._reading() as connection:
            result = []
            found = connection.execute("SELECT time, kind, details, checksum FROM events ORDER BY number")
            for *row, checksum in found:
                if _row_checksum(*row) != checksum:
                    raise self._damaged("an event")
                result.append(Event(row[0], row[1], _from_json(row[2])))
            return result

    def part(self, name: str) -> bytes:
        """The part kept under a name that `put_part` returned; RecordError when there is none."""
        with self._reading() as connection:
            rows = connection.execute("SELECT piece, pieces, data, checksum FROM parts WHERE name = ? ORDER BY piece",
                                      (name,)).fetchall()
        if not rows:
            raise RecordError(f"{self.path}: holds no part named {name!r}")
        data = _join(f"part {name}", rows)
        if data is None:
            raise self._damaged(f"the part {name}")
        return data

    def latest_state(self, chain: int) -> tuple[str, int, bytes] | None:
        """(phase, number of the next draw in it, state) after the chain's last block, or None before its first."""
        with self._reading() as connection:
            rows = connection.execute("SELECT phase, start, piece, pieces, data, checksum FROM states WHERE chain = ? "
                                      "ORDER BY piece", (chain,)).fetchall()
            query = "SELECT phase, start + count FROM blocks WHERE chain = ? ORDER BY id DESC LIMIT 1"
            last = connection.execute(query, (chain,)).fetchone()
        if not rows and last is None:
            return None
        data = _join(f"state {chain} {rows[0][0]} {rows[0][1]}", [row[2:] for row in rows]) if rows else None
        if data is None or last != rows[0][:2]:
            raise self._damaged(f"the state of chain {chain}, so this chain cannot go on")
        return last[0], last[1], data

    def states(self) -> dict[int, tuple[str, int, bytes]]:
        """`latest_state` of every chain that has one."""
        with self._reading():
            return {chain: state for chain in self.counts() if (state := self.latest_state(chain)) is not None}

    def counts(self) -> dict[int, dict[str, int]]:
        """Finished draws of every chain in each phase: {chain: {"settle": n, "keep": m}}."""
        result: dict[int, dict[str, int]] = {}
        with self._reading() as connection:
            if self._sound is not None:
                found = [(*key, sum(row.count for row in rows)) for key, rows in self._sound.items()]
            else:
                query = "SELECT chain, phase, sum(count) FROM blocks GROUP BY chain, phase"
                found = connection.execute(query).fetchall()
        for chain, phase, count in sorted(found):
            result.setdefault(chain, dict.fromkeys(PHASES, 0))[phase] = count
        return result

    def count(self, chain: int, phase: str) -> int:
        """Finished draws of one chain in one phase."""
        return self.counts().get(chain, {}).get(phase, 0)

    def draws(self, chains: Sequence[int] | None = None) -> np.ndarray:
        """Kept draws of all chains (or those named), float64 (chains, n, dimension); the shortest chain gives n."""
        with self._reading() as connection:
            rows = [self._rows(chain, "keep") for chain in (self.counts() if chains is None else chains)]
            shortest = min((sum(row.count for row in one) for one in rows), default=0)
            result = np.empty((len(rows), shortest, self._dimension(connection) or 0))
            for one, out in zip(rows, result, strict=True):
                self._stack(one, "draws", "<f8", out)
            return result

    def chain_draws(self, chain: int) -> np.ndarray:
        """Kept draws of one chain, float64 (n, dimension)."""
        return self.draws([chain])[0]

    def gradients(self, chain: int) -> np.ndarray | None:
        """Gradients at the kept draws of one chain, float64 (n, dimension), or None when none were kept."""
        with self._reading():
            rows = self._rows(chain, "keep")
            if not rows or rows[0].gradients is None:
                return None
            shape = (sum(row.count for row in rows), rows[0].dimension or 0)
            return self._stack(rows, "gradients", "<f8", np.empty(shape))

    def facts(self, chain: int, phase: str = "keep") -> np.ndarray:
        """Per-draw facts of one chain and phase, (n,), with the fields they were recorded with (now FACTS)."""
        with self._reading():
            layout = np.dtype([tuple(field) for field in self.get_entry("facts")])
            rows = self._rows(chain, phase)
            return self._stack(rows, "facts", layout, np.empty(sum(row.count for row in rows), layout))

    def failures(self, chain: int, phase: str = "keep") -> Failures:
        """Failed steps of one chain and phase whose position was kept."""
        with self._reading() as connection:
            nothing = np.empty((0, self._dimension(connection) or 0))
            draw, code, position = [np.empty(0, np.int64)], [np.empty(0, np.int32)], [nothing]
            for row in self._rows(chain, phase):
                if row.failures is not None:
                    table = np.frombuffer(self._bytes(row, "failures"), _failure_layout(row.dimension or 0))
                    draw.append(row.start + table["index"])
                    code.append(table["code"])
                    position.append(table["position"])
            return Failures(np.concatenate(draw), np.concatenate(code), np.concatenate(position))

    def notes(self, chain: int, phase: str = "keep") -> list[dict[str, Any] | None]:
        """The note of each block of one chain and phase, in order."""
        with self._reading():
            return [None if row.note is None else _from_json(row.note) for row in self._rows(chain, phase)]

    def verify(self) -> None:
        """Read everything; check every checksum and SQLite's own structure; DamagedRecordError names the first flaw."""
        with self._reading() as connection:
            answers = connection.execute("PRAGMA integrity_check(3)").fetchall()
            problems = [f"SQLite says {text}." for (text,) in answers if text != "ok"]
            sound, more = self._survey()
            problems += more
            names = [name for (name,) in connection.execute("SELECT name FROM entries").fetchall()]
            parts = [name for (name,) in connection.execute("SELECT DISTINCT name FROM parts").fetchall()]
            for read, choices in ((self.get_entry, names), (self.part, parts), (self.latest_state, [*self.counts()])):
                for choice in choices:
                    try:
                        read(choice)
                    except DamagedRecordError as error:
                        problems.append(str(error).removesuffix(_REMEDY))
            try:
                self.events()
            except DamagedRecordError as error:
                problems.append(str(error).removesuffix(_REMEDY))
        if problems:
            whole = [f"{rows[-1].start + rows[-1].count} of chain {chain} ({phase})" for (chain, phase), rows in
                     sound.items() if rows]
            raise DamagedRecordError(f"{self.path}: {len(problems)} damaged places; first: {problems[0]} Whole draws: "
                                     f"{', '.join(whole) or 'none'}.{_REMEDY}")

    def _damaged(self, what: str) -> DamagedRecordError:
        return DamagedRecordError(f"{self.path}: the file is damaged at {what}.{_REMEDY}")

    def _checked(self, raw: tuple[Any, ...]) -> _Row:
        if _row_checksum(*raw[1:-1]) != raw[-1]:
            raise self._damaged(f"block number {raw[0]}")
        return _Row(*raw[:-1])

    def _rows(self, chain: int, phase: str) -> list[_Row]:
        if phase not in PHASES:
            raise ArgumentError(f"the phase must be one of {', '.join(PHASES)}, not {phase!r}")
        if self._sound is not None:
            return self._sound.get((chain, phase), [])
        rows: list[_Row] = []
        query = f"SELECT {_COLUMNS}, checksum FROM blocks WHERE chain = ? AND phase = ? ORDER BY start"
        for raw in self._live().execute(query, (chain, phase)):
            rows.append(self._following(self._checked(raw), rows))
        return rows

    def _following(self, row: _Row, rows: list[_Row]) -> _Row:
        if row.start != (rows[-1].start + rows[-1].count if rows else 0):
            raise self._damaged(f"the draws before {row.start} of chain {row.chain} ({row.phase}), which are missing")
        return row

    def _bytes(self, row: _Row, kind: str) -> bytes:
        first = getattr(row, kind)
        with contextlib.closing(self._live().execute(
                "SELECT piece, pieces, data, checksum FROM arrays WHERE id >= ? ORDER BY id", (first,))) as found:
            data = _join(row.label(kind), found)
        if data is None:
            span = f"draws {row.start} to {row.start + row.count - 1} of chain {row.chain} ({row.phase})"
            raise self._damaged(f"the {kind} of {span}")
        return data

    def _stack(self, rows: list[_Row], kind: str, layout: Any, out: np.ndarray) -> np.ndarray:
        done = 0
        for row in rows:
            if done >= len(out):
                break
            block = np.frombuffer(self._bytes(row, kind), layout).reshape(row.count, *out.shape[1:])
            out[done : done + row.count] = block[: len(out) - done]
            done += row.count
        return out

    def _survey(self) -> tuple[dict[tuple[int, str], list[_Row]], list[str]]:
        """The whole blocks before the first damage of each chain and phase, and a sentence for each damage found."""
        sound: dict[tuple[int, str], list[_Row]] = {}
        broken: set[tuple[int, str]] = set()
        problems: list[str] = []
        # By row number and never through an index: each look-up then meets as few pages as it can.
        raws: list[tuple[Any, ...]] = []
        try:
            with _explained(self.path, "read"):
                raws.extend(self._live().execute(f"SELECT {_COLUMNS}, checksum FROM blocks NOT INDEXED ORDER BY id"))
        except RecordError as error:
            problems.append(str(error).removesuffix(_REMEDY))
        for raw in raws:
            key = None
            try:
                row = self._checked(raw)
                key = (row.chain, row.phase)
                rows = sound.setdefault(key, [])
                if key not in broken:
                    self._following(row, rows)
                with _explained(self.path, "read"):
                    for kind in ("draws", "facts", "failures", "gradients"):
                        if getattr(row, kind) is not None:
                            self._bytes(row, kind)
                if key not in broken:
                    rows.append(row)
            except RecordError as error:
                problems.append(str(error).removesuffix(_REMEDY))
                if key is not None:
                    broken.add(key)
        return sound, problems
