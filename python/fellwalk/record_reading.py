"""Reading a record: everything it holds, checked as it is read, and what is whole of a damaged one."""

from __future__ import annotations

import contextlib
import os
import sqlite3
import threading
from collections.abc import Iterator, Sequence
from typing import Any

import numpy as np

from .errors import ArgumentError, DamagedRecordError, RecordError
from .record_file import REMEDY, WriterLock, explained
from .record_items import (
    COLUMNS,
    PHASES,
    Event,
    Failures,
    Row,
    failure_layout,
    from_json,
    join,
    row_checksum,
)


class RecordReader:
    """The reading half of `Record`, which see. `schema`: the number of the file's format."""

    def __init__(self, path: str, connection: sqlite3.Connection, lock: WriterLock | None, journal: str) -> None:
        self.path = path
        self.journal = journal
        self.schema: int = connection.execute("PRAGMA user_version").fetchone()[0]
        self.damage: tuple[str, ...] = ()
        self._connection: sqlite3.Connection | None = connection
        self._lock = lock
        self._pid = os.getpid()
        self._guard = threading.RLock()
        self._memory: dict[Any, Any] = {}
        self._sound: dict[tuple[int, str], list[Row]] | None = None

    def _live(self) -> sqlite3.Connection:
        if self._connection is None:
            raise RecordError(f"{self.path}: this record has been closed. Open it again.")
        if self._pid != os.getpid():
            raise RecordError(f"{self.path}: this record was opened by the parent process. Open it anew in this one.")
        return self._connection

    @contextlib.contextmanager
    def _reading(self) -> Iterator[sqlite3.Connection]:
        with self._guard, explained(self.path, "read"):
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

    @property
    def settings(self) -> dict[str, Any]:
        """What the run was asked for, as given to `create`."""
        return self.get_entry("settings")

    @property
    def versions(self) -> dict[str, Any]:
        """`current_versions()` at the time the record was made."""
        return self.get_entry("versions")

    def get_entry(self, name: str, default: Any = None) -> Any:
        """The value kept under a name, or `default`."""
        with self._reading() as connection:
            found = connection.execute("SELECT value, checksum FROM entries WHERE name = ?", (name,)).fetchone()
            if found is None:
                return default
            if row_checksum(name, found[0]) != found[1]:
                raise self._damaged(f"the entry {name!r}")
            return from_json(found[0])

    def events(self) -> list[Event]:
        """All notes, oldest first."""
        with self._reading() as connection:
            result = []
            found = connection.execute("SELECT time, kind, details, checksum FROM events ORDER BY number")
            for *row, checksum in found:
                if row_checksum(*row) != checksum:
                    raise self._damaged("an event")
                result.append(Event(row[0], row[1], from_json(row[2])))
            return result

    def part(self, name: str) -> bytes:
        """The part kept under a name that `put_part` returned; RecordError when there is none."""
        with self._reading() as connection:
            rows = connection.execute("SELECT piece, pieces, data, checksum FROM parts WHERE name = ? ORDER BY piece",
                                      (name,)).fetchall()
        if not rows:
            raise RecordError(f"{self.path}: holds no part named {name!r}")
        data = join(f"part {name}", rows, self.schema)
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
        data = None
        if rows:
            data = join(f"state {chain} {rows[0][0]} {rows[0][1]}", [row[2:] for row in rows], self.schema)
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
                    table = np.frombuffer(self._bytes(row, "failures"), failure_layout(row.dimension or 0))
                    draw.append(row.start + table["index"])
                    code.append(table["code"])
                    position.append(table["position"])
            return Failures(np.concatenate(draw), np.concatenate(code), np.concatenate(position))

    def moments(self, chain: int) -> bytes | None:
        """What the last kept block of a chain said about all draws so far; None without, and where a salvaged record
        has lost blocks since."""
        with self._reading() as connection:
            query = "SELECT start, piece, pieces, data, checksum FROM moments WHERE chain = ? ORDER BY piece"
            rows = connection.execute(query, (chain,)).fetchall()
            if not rows or (self._sound is not None and rows[0][0] != self.count(chain, "keep")):
                return None
            data = join(f"moments {chain} {rows[0][0]}", [row[1:] for row in rows], self.schema)
            if data is None:
                raise self._damaged(f"the running moments of chain {chain}")
            return data

    def notes(self, chain: int, phase: str = "keep") -> list[dict[str, Any] | None]:
        """The note of each block of one chain and phase, in order."""
        with self._reading():
            return [None if row.note is None else from_json(row.note) for row in self._rows(chain, phase)]

    def verify(self) -> None:
        """Read everything; check every checksum and SQLite's own structure; DamagedRecordError names the first flaw."""
        with self._reading() as connection:
            answers = connection.execute("PRAGMA integrity_check(3)").fetchall()
            problems = [f"SQLite says {text}." for (text,) in answers if text != "ok"]
            sound, more = self._survey()
            problems += more
            names = [name for (name,) in connection.execute("SELECT name FROM entries").fetchall()]
            parts = [name for (name,) in connection.execute("SELECT DISTINCT name FROM parts").fetchall()]
            chains = [*self.counts()]
            for read, choices in ((self.get_entry, names), (self.part, parts), (self.latest_state, chains),
                                  (self.moments, chains)):
                for choice in choices:
                    try:
                        read(choice)
                    except DamagedRecordError as error:
                        problems.append(str(error).removesuffix(REMEDY))
            try:
                self.events()
            except DamagedRecordError as error:
                problems.append(str(error).removesuffix(REMEDY))
        if problems:
            whole = [f"{rows[-1].start + rows[-1].count} of chain {chain} ({phase})" for (chain, phase), rows in
                     sound.items() if rows]
            raise DamagedRecordError(f"{self.path}: {len(problems)} damaged places; first: {problems[0]} Whole draws: "
                                     f"{', '.join(whole) or 'none'}.{REMEDY}")

    def _damaged(self, what: str) -> DamagedRecordError:
        return DamagedRecordError(f"{self.path}: the file is damaged at {what}.{REMEDY}")

    def _checked(self, raw: tuple[Any, ...]) -> Row:
        if row_checksum(*raw[1:-1]) != raw[-1]:
            raise self._damaged(f"block number {raw[0]}")
        return Row(*raw[:-1])

    def _rows(self, chain: int, phase: str) -> list[Row]:
        if phase not in PHASES:
            raise ArgumentError(f"the phase must be one of {', '.join(PHASES)}, not {phase!r}")
        if self._sound is not None:
            return self._sound.get((chain, phase), [])
        rows: list[Row] = []
        query = f"SELECT {COLUMNS}, checksum FROM blocks WHERE chain = ? AND phase = ? ORDER BY start"
        for raw in self._live().execute(query, (chain, phase)):
            rows.append(self._following(self._checked(raw), rows))
        return rows

    def _following(self, row: Row, rows: list[Row]) -> Row:
        if row.start != (rows[-1].start + rows[-1].count if rows else 0):
            raise self._damaged(f"the draws before {row.start} of chain {row.chain} ({row.phase}), which are missing")
        return row

    def _bytes(self, row: Row, kind: str) -> bytes:
        first = getattr(row, kind)
        with contextlib.closing(self._live().execute(
                "SELECT piece, pieces, data, checksum FROM arrays WHERE id >= ? ORDER BY id", (first,))) as found:
            data = join(row.label(kind), found, self.schema)
        if data is None:
            span = f"draws {row.start} to {row.start + row.count - 1} of chain {row.chain} ({row.phase})"
            raise self._damaged(f"the {kind} of {span}")
        return data

    def _stack(self, rows: list[Row], kind: str, layout: Any, out: np.ndarray) -> np.ndarray:
        done = 0
        for row in rows:
            if done >= len(out):
                break
            block = np.frombuffer(self._bytes(row, kind), layout).reshape(row.count, *out.shape[1:])
            out[done : done + row.count] = block[: len(out) - done]
            done += row.count
        return out

    def _survey(self) -> tuple[dict[tuple[int, str], list[Row]], list[str]]:
        """The whole blocks before the first damage of each chain and phase, and a sentence for each damage found."""
        sound: dict[tuple[int, str], list[Row]] = {}
        broken: set[tuple[int, str]] = set()
        problems: list[str] = []
        # By row number and never through an index: each look-up then meets as few pages as it can.
        raws: list[tuple[Any, ...]] = []
        try:
            with explained(self.path, "read"):
                raws.extend(self._live().execute(f"SELECT {COLUMNS}, checksum FROM blocks NOT INDEXED ORDER BY id"))
        except RecordError as error:
            problems.append(str(error).removesuffix(REMEDY))
        for raw in raws:
            key = None
            try:
                row = self._checked(raw)
                key = (row.chain, row.phase)
                rows = sound.setdefault(key, [])
                if key not in broken:
                    self._following(row, rows)
                with explained(self.path, "read"):
                    for kind in ("draws", "facts", "failures", "gradients"):
                        if getattr(row, kind) is not None:
                            self._bytes(row, kind)
                if key not in broken:
                    rows.append(row)
            except RecordError as error:
                problems.append(str(error).removesuffix(REMEDY))
                if key is not None:
                    broken.add(key)
        return sound, problems

    @staticmethod
    def _dimension(connection: sqlite3.Connection) -> int | None:
        found = connection.execute("SELECT dimension FROM blocks WHERE dimension IS NOT NULL LIMIT 1").fetchone()
        return found[0] if found else None
