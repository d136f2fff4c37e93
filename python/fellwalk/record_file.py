"""The record as a file: its tables, the lock of its one writer, opening it, and sentences for what can go wrong."""

from __future__ import annotations

import contextlib
import os
import re
import shutil
import socket
import sqlite3
import threading
import urllib.parse
from collections.abc import Iterator
from pathlib import Path
from typing import Any

from .errors import DamagedRecordError, RecordError, RecordInUseError
from .record_items import SCHEMA, row_checksum

try:
    import fcntl
except ImportError:  # Windows
    fcntl = None  # type: ignore[assignment]
    import msvcrt

APPLICATION_ID = 0x46656C6C
BUSY_SECONDS = 30.0
# A byte in pages of 32 KiB takes two thirds of its time in pages of 4 KiB. But an empty record of them has half a
# megabyte, and every commit writes some pages that it fills in part only: for records that will be large.
_PAGE_BYTES, _LARGE_PAGE_BYTES, _LARGE_RECORD_BYTES = 4_096, 32_768, 16_000_000
_LOG_BYTES, _CACHE_KILOBYTES = 4_096_000, 500  # after so many the log is folded in; blobs only pass through the cache

TABLES = """
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
CREATE TABLE moments (chain INTEGER NOT NULL, piece INTEGER NOT NULL, pieces INTEGER NOT NULL, start INTEGER NOT NULL,
    data BLOB NOT NULL, checksum BLOB NOT NULL, PRIMARY KEY (chain, piece));
CREATE TABLE parts (name TEXT NOT NULL, piece INTEGER NOT NULL, pieces INTEGER NOT NULL, data BLOB NOT NULL,
    checksum BLOB NOT NULL, PRIMARY KEY (name, piece));
"""
# Write-ahead logs need memory shared between all readers, which these file systems do not give between machines.
_NETWORK = {"nfs", "nfs4", "cifs", "smb3", "smbfs", "lustre", "gpfs", "beegfs", "afs", "ceph", "glusterfs", "9p",
            "davfs", "panfs", "pvfs2", "ocfs2", "gfs2", "fuse.sshfs", "fuse.glusterfs", "fuse.cephfs", "fuse.davfs"}
REMEDY = " Open it with salvage=True to read what is whole, or take a copy from a backup."


class WriterLock:
    """Held by the one writer of a record as long as it lives, on a file beside it; the system drops it when it dies.

    POSIX record locks on a file of its own: on the database file they would be SQLite's, and flock would pass to forked
    workers, who can outlive a killed run and keep it shut. They guard against other processes only, hence `held`.
    """

    held: set[str] = set()  # noqa: RUF012 - shared by design
    guard = threading.Lock()

    def __init__(self, record: str) -> None:
        self.path = record + ".writer"
        self.pid = os.getpid()
        with WriterLock.guard:
            if self.path in WriterLock.held:
                raise RecordInUseError(f"{record}: this process is already writing this record. Close it there first.")
            self._file = self._take(record)
            WriterLock.held.add(self.path)

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
            with WriterLock.guard, contextlib.suppress(OSError):
                WriterLock.held.discard(self.path)
                if os.name != "nt":
                    os.unlink(self.path)  # while still locked: afterwards it may be another's
            self._file.close()
            if os.name == "nt":
                with contextlib.suppress(OSError):
                    os.unlink(self.path)


if hasattr(os, "register_at_fork"):
    os.register_at_fork(after_in_child=WriterLock.held.clear)


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


def connect(path: str, options: str) -> sqlite3.Connection:
    # Paths can hold "?", "#" and bytes that are no UTF-8: hence a quoted URI.
    text = Path(path).as_posix()
    uri = f"file://{'' if text.startswith('/') else '/'}{urllib.parse.quote(os.fsencode(text))}?{options}"
    return sqlite3.connect(uri, uri=True, isolation_level=None, timeout=BUSY_SECONDS, check_same_thread=False)


@contextlib.contextmanager
def explained(path: str, doing: str) -> Iterator[None]:
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
        remedy = " Nothing can be saved from it: take a copy from a backup." if doing == "salvage" else REMEDY
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


def check_file(path: str) -> None:
    try:
        size = os.stat(path).st_size
    except FileNotFoundError:
        raise RecordError(f"{path}: there is no such file. Check the name, or create a new record.") from None
    if os.path.isdir(path):
        raise RecordError(f"{path}: is a folder, not a record. Give the name of a file.")
    if size == 0:
        raise DamagedRecordError(f"{path}: is empty, so nothing can be read from it. Take a copy from a backup, or "
                                 "start anew.")


def open_writer(path: str) -> tuple[sqlite3.Connection, str]:
    for wanted in ("delete",) if _on_network(path) else ("wal", "delete"):
        connection = connect(path, "mode=rw")
        try:
            if wanted == "delete":
                # Lets SQLite read a log that a killed run left, with no shared memory; ends with the next read.
                connection.execute("PRAGMA locking_mode=EXCLUSIVE")
            _recognise(connection, path)
            if connection.execute(f"PRAGMA journal_mode={wanted}").fetchone()[0] == wanted:
                connection.execute("PRAGMA locking_mode=NORMAL")
                # FULL syncs the log at every commit; a rollback journal also needs its folder synced, which EXTRA does.
                connection.execute(f"PRAGMA synchronous={'FULL' if wanted == 'wal' else 'EXTRA'}")
                page = connection.execute("PRAGMA page_size").fetchone()[0]
                connection.execute(f"PRAGMA wal_autocheckpoint={_LOG_BYTES // page}")
                connection.execute(f"PRAGMA cache_size=-{_CACHE_KILOBYTES}")
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


def open_reader(path: str, salvage: bool) -> sqlite3.Connection:
    # Read-write with query_only, so that the log of a killed run can be recovered. Salvage touches nothing, and
    # writable_schema lets SQLite read past the missing end of a file that was cut short.
    for options in ("mode=ro", "immutable=1") if salvage else ("mode=rw",):
        connection = connect(path, options)
        try:
            connection.execute("PRAGMA writable_schema=ON" if salvage else "PRAGMA query_only=ON")
            _recognise(connection, path)
            return connection
        except BaseException as error:
            connection.close()
            if options != "mode=ro" or not isinstance(error, sqlite3.Error):
                raise
    raise AssertionError


def sync_folder(path: str) -> None:
    with contextlib.suppress(OSError):  # Windows cannot open folders; there the rename itself is durable enough
        handle = os.open(os.path.dirname(path), os.O_RDONLY)
        try:
            os.fsync(handle)
        finally:
            os.close(handle)


def build(full: str, entries: dict[str, str], expected: int) -> None:
    """Make the empty record `full` with these entries (JSON text), in place of what stands there, for about so many
    bytes."""
    page = _LARGE_PAGE_BYTES if expected >= _LARGE_RECORD_BYTES else _PAGE_BYTES
    # Built beside and then renamed, so a kill here leaves no half-made record and an old one is replaced whole.
    new = full + ".new"
    with contextlib.suppress(FileNotFoundError):
        os.unlink(new)
    try:
        with contextlib.closing(connect(new, "mode=rwc")) as connection:
            connection.executescript(f"PRAGMA page_size={page}; PRAGMA synchronous=EXTRA; "
                                     f"PRAGMA application_id={APPLICATION_ID}; PRAGMA user_version={SCHEMA}; "
                                     f"BEGIN; {TABLES}")
            connection.execute("INSERT INTO format VALUES ('fellwalk record', ?)", (SCHEMA,))
            for name, text in entries.items():
                connection.execute("INSERT INTO entries VALUES (?, ?, ?)", (name, text, row_checksum(name, text)))
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
    sync_folder(full)
