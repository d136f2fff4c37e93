"""The record file: what goes in comes out bit for bit, survives kills and full disks, and never lies when damaged."""

from __future__ import annotations

import contextlib
import gzip
import json
import multiprocessing
import os
import signal
import sqlite3
import subprocess
import sys
import tempfile
import threading
import time
from dataclasses import replace
from pathlib import Path

import helpers_record_writer as writer
import numpy as np
import pytest
from helpers_record_writer import DIMENSION, expected_draws, make_block, state_after

from fellwalk import record as record_module
from fellwalk import record_file, record_items
from fellwalk.errors import (
    ArgumentError,
    DamagedRecordError,
    FellwalkError,
    RecordError,
    RecordExistsError,
    RecordInUseError,
)
from fellwalk.facts import FACTS
from fellwalk.record import Record

posix_only = pytest.mark.skipif(os.name == "nt", reason="needs POSIX signals, limits and rights")


def fill(record: Record, chains: int = 2, blocks: int = 6) -> None:
    for chain in range(chains):
        record.append_blocks([make_block(chain, "settle", start) for start in range(0, 10, 5)])
        record.append_blocks([make_block(chain, "keep", start) for start in range(0, 5 * blocks, 5)])


@pytest.fixture
def path(tmp_path: Path) -> str:
    return str(tmp_path / "wander ä?#%.fell")


def start_writer(mode: str, path: str) -> subprocess.Popen[bytes]:
    return subprocess.Popen([sys.executable, writer.__file__, mode, path], stdout=subprocess.PIPE)


# What goes in comes out


def test_everything_comes_back_bit_for_bit(path):
    with Record.create(path, {"seed": 7, "starts": np.arange(3.0)}) as record:
        for chain in (0, 3):
            record.append_blocks([make_block(chain, "settle", start) for start in (0, 5)])
            record.append_blocks([make_block(chain, "keep", 5 * k, gradients=True) for k in range(4 + chain)])
        record.set_entry("start", {"value": float("-inf"), "odd": [np.float64("nan"), 2.385, np.int32(3), None, "ß"]})
        record.append_event("interrupted", {"block": 3})
        record.append_event("resumed")
    with Record.open(path) as record:
        record.verify()
        assert record.settings == {"seed": 7, "starts": [0.0, 1.0, 2.0]}
        assert record.schema == record_items.SCHEMA == 2
        assert record.versions["numpy"] == np.__version__
        assert record.counts() == {0: {"settle": 10, "keep": 20}, 3: {"settle": 10, "keep": 35}}
        assert record.count(3, "keep") == 35
        assert record.count(1, "keep") == 0
        assert record.draws().shape == (2, 20, DIMENSION)
        blocks = {(chain, phase): [make_block(chain, phase, 5 * k, gradients=phase == "keep") for k in range(n)]
                  for chain, phase, n in ((0, "settle", 2), (0, "keep", 4), (3, "settle", 2), (3, "keep", 7))}
        for (chain, phase), made in blocks.items():
            assert record.facts(chain, phase).dtype == FACTS
            assert record.facts(chain, phase).tobytes() == b"".join(block.facts.tobytes() for block in made)
            failures = record.failures(chain, phase)
            numbers = [number for block in made for number in (block.start, block.start + 4)]
            np.testing.assert_array_equal(failures.draw, numbers)
            np.testing.assert_array_equal(failures.code, [3, 4] * len(made))
            np.testing.assert_array_equal(failures.position, np.concatenate([block.failures[2] for block in made]))
            assert record.notes(chain, phase) == [block.note for block in made]
            if phase == "keep":
                draws = np.concatenate([block.draws for block in made])
                assert record.chain_draws(chain).tobytes() == draws.tobytes()
                assert record.draws([chain])[0].tobytes() == draws.tobytes()
                assert record.gradients(chain).tobytes() == b"".join(block.gradients.tobytes() for block in made)
        assert record.latest_state(3) == ("keep", 35, state_after(3, "keep", 35))
        assert record.states() == {0: ("keep", 20, state_after(0, "keep", 20)), 3: record.latest_state(3)}
        assert record.latest_state(1) is None
        entry = record.get_entry("start")
        assert entry["value"] == -np.inf
        assert np.isnan(entry["odd"][0])
        assert entry["odd"][1:] == [2.385, 3, None, "ß"]
        assert record.get_entry("nothing", 5) == 5
        events = [(event.kind, event.details) for event in record.events()]
        assert events == [("interrupted", {"block": 3}), ("resumed", {})]


def test_special_numbers_keep_their_bits(path):
    bits = np.array([0x7FF8DEADBEEF0001, 0x8000000000000000, 0x7FF0000000000000, 1], np.uint64)
    block = replace(make_block(0, "keep", 0, 2, failed=False), draws=bits.view("<f8").reshape(2, 2))
    with Record.create(path, {}) as record:
        record.append_blocks([block])
        assert record.draws().tobytes() == bits.tobytes()


def test_other_byte_order_is_stored_as_the_same_numbers(path):
    block = make_block(0, "keep", 0)
    swapped = replace(block, draws=block.draws.astype(">f8"), facts=block.facts.astype(FACTS.newbyteorder(">")))
    with Record.create(path, {}) as record:
        record.append_blocks([swapped])
        assert record.chain_draws(0).tobytes() == block.draws.tobytes()
        assert record.facts(0).tobytes() == block.facts.tobytes()


def test_the_file_is_plain_to_other_programs(path):
    block = make_block(2, "keep", 0)
    with Record.create(path, {"seed": 11}) as record:
        record.append_blocks([block])
    with contextlib.closing(sqlite3.connect(path)) as plain:
        settings = plain.execute("SELECT value FROM entries WHERE name = 'settings'").fetchone()[0]
        assert json.loads(settings) == {"seed": 11}
        data = plain.execute("SELECT data FROM arrays, blocks WHERE arrays.id = blocks.draws").fetchone()[0]
        assert data == block.draws.tobytes()


def test_large_items_are_split_in_pieces(path, monkeypatch):
    monkeypatch.setattr(record_items, "PIECE_BYTES", 37)
    with Record.create(path, {}) as record:
        fill(record, 1)
        part = record.put_part(bytes(range(256)))
        record.verify()
    monkeypatch.undo()
    with Record.open(path) as record:
        record.verify()
        assert record.chain_draws(0).tobytes() == expected_draws(0, 30).tobytes()
        assert record.latest_state(0)[2] == state_after(0, "keep", 30)
        assert record.part(part) == bytes(range(256))
    with contextlib.closing(sqlite3.connect(path)) as plain:
        for table in ("arrays", "states", "parts"):
            assert plain.execute(f"SELECT max(length(data)) FROM {table}").fetchone() == (37,)


@pytest.mark.parametrize("expected", [0, 10**9])
def test_no_blob_is_over_a_piece(path, expected):
    piece = record_items.PIECE_BYTES
    state = np.random.default_rng(5).bytes(3 * piece + 1)
    with Record.create(path, {}, expected=expected) as record:
        record.append_blocks([replace(make_block(0, "settle", 0), state=state)])
    with Record.open(path) as record:
        assert record.latest_state(0)[2] == state
    with contextlib.closing(sqlite3.connect(path)) as plain:
        assert plain.execute("SELECT length(data) FROM states ORDER BY piece").fetchall() == [(piece,)] * 3 + [(1,)]
        assert plain.execute("PRAGMA page_size").fetchone() == (32_768 if expected else 4_096,)


def test_a_part_is_stored_once(path):
    with Record.create(path, {}) as record:
        names = {record.put_part(b"scale" * 100) for _ in range(3)}
        other = record.put_part(b"another")
        assert len(names) == 1
        assert other not in names
        assert record.part(other) == b"another"
        assert record._connection.execute("SELECT count(*) FROM parts").fetchone() == (2,)
        with pytest.raises(RecordError, match="no part named"):
            record.part("absent")


def test_only_the_latest_state_stays(path):
    with Record.create(path, {}) as record:
        for start in range(0, 500, 5):
            record.append_blocks([make_block(0, "keep", start)])
        assert record._connection.execute("SELECT count(*) FROM states").fetchone() == (1,)


def test_a_record_without_draws_has_empty_arrays(path):
    with Record.create(path, {}) as record:
        assert record.draws().shape == (0, 0, 0)
        record.append_blocks([make_block(0, "settle", 0, failed=False)])
        assert record.draws().shape == (1, 0, 0)
        assert record.facts(0).shape == (0,)
        assert record.failures(0).position.shape == (0, 0)
        assert record.gradients(0) is None
        record.verify()


# Order and arguments


def test_gaps_overlaps_and_settling_after_keeping_are_refused(path):
    with Record.create(path, {}) as record:
        record.append_blocks([make_block(0, "keep", 0)])
        for start in (0, 4, 6, 10):
            with pytest.raises(ArgumentError, match="but draw 5 is next"):
                record.append_blocks([make_block(0, "keep", start)])
        with pytest.raises(ArgumentError, match="no settling can follow"):
            record.append_blocks([make_block(0, "settle", 0)])
        with pytest.raises(ArgumentError, match="but draw 0 is next"):
            record.append_blocks([make_block(1, "settle", 5)])
        with pytest.raises(ArgumentError, match="gradients must come with every"):
            record.append_blocks([make_block(0, "keep", 5, gradients=True)])
        with pytest.raises(ArgumentError, match="has dimension 3"):
            record.append_blocks([replace(make_block(1, "keep", 0, failed=False), draws=np.ones((5, 3)))])
        assert record.counts() == {0: {"settle": 0, "keep": 5}}


def test_one_wrong_block_keeps_its_whole_group_out(path):
    with Record.create(path, {}) as record:
        with pytest.raises(ArgumentError, match="but draw 5 is next"):
            record.append_blocks([make_block(0, "keep", 0), make_block(1, "keep", 0), make_block(0, "keep", 10)])
        assert record.counts() == {}
        record.append_blocks([make_block(0, "keep", 0), make_block(1, "keep", 0), make_block(0, "keep", 5)])
        record.verify()
        assert record.latest_state(0)[1] == 10


def test_order_is_also_kept_after_reopening(path):
    with Record.create(path, {}) as record:
        fill(record, 1)
    with Record.open(path, write=True) as record:
        with pytest.raises(ArgumentError, match="but draw 30 is next"):
            record.append_blocks([make_block(0, "keep", 25)])
        with pytest.raises(ArgumentError, match="has dimension 3"):
            record.append_blocks([replace(make_block(1, "keep", 0, failed=False), draws=np.ones((5, 3)))])
        record.append_blocks([make_block(0, "keep", 30)])
        record.verify()
        assert record.chain_draws(0).tobytes() == expected_draws(0, 35).tobytes()


@pytest.mark.parametrize(("change", "sentence"), [
    ({"chain": -1}, "chain must be a whole number"),
    ({"chain": True}, "chain must be a whole number"),
    ({"start": 0.0}, "start must be a whole number"),
    ({"phase": "walk"}, "phase must be one of settle, keep"),
    ({"state": "text"}, "state must be bytes"),
    ({"state": b""}, "state must be bytes"),
    ({"facts": np.zeros(5)}, "dtype FACTS"),
    ({"facts": np.zeros((5, 1), FACTS)}, "dtype FACTS"),
    ({"facts": np.zeros(0, FACTS)}, "at least one draw"),
    ({"facts": np.zeros(4, FACTS)}, "for 4 facts"),
    ({"draws": None}, "draws belong to the phase keep"),
    ({"phase": "settle"}, "draws belong to the phase keep"),
    ({"draws": np.zeros((5, DIMENSION), np.float32)}, "got float32"),
    ({"draws": np.zeros(5)}, r"shape \(5,\)"),
    ({"draws": np.zeros((5, 0))}, r"shape \(5, 0\)"),
    ({"gradients": np.zeros((5, 2))}, "gradients must be float64"),
    ({"failures": (np.array([5]), np.array([1]), np.zeros((1, DIMENSION)))}, "0 <= index < 5"),
    ({"failures": (np.array([0]), np.array([1, 2]), np.zeros((1, DIMENSION)))}, "failures must be"),
    ({"failures": (np.array([0]), np.array([1]), np.zeros((1, 2)))}, "failures must be"),
    ({"failures": (np.array([0]),)}, "failures must be"),
    ({"note": {"what": object()}}, "of type object, which a record cannot keep"),
])
def test_wrong_blocks_are_refused_in_a_sentence(path, change, sentence):
    with Record.create(path, {}) as record:
        with pytest.raises(ArgumentError, match=sentence):
            record.append_blocks([replace(make_block(0, "keep", 0, failed=False), **change)])
        assert record.counts() == {}


def test_other_wrong_arguments(path):
    with pytest.raises(ArgumentError, match="cannot keep"):
        Record.create(path, {"density": print})
    assert not os.path.exists(path)
    with Record.create(path, {}) as record:
        for call in (lambda: record.put_part(b""), lambda: record.put_part("text"), lambda: record.set_entry(3, 1),
                     lambda: record.facts(0, "walk"), lambda: Record.open(path, write=True, salvage=True)):
            with pytest.raises(ArgumentError):
                call()
    with pytest.raises(RecordError, match="has been closed"):
        record.counts()
    with Record.open(path) as record, pytest.raises(RecordError, match="opened for reading"):
        record.append_event("no")


# Files


def test_a_closed_record_is_one_file(path, tmp_path):
    with Record.create(path, {}) as record:
        fill(record)
        assert record.journal == "wal"
        assert os.path.exists(path + "-wal")
    assert os.listdir(tmp_path) == [Path(path).name]
    with Record.open(path) as record:
        record.verify()
    with Record.open(path, write=True) as record:
        record.append_event("resumed")
    assert os.listdir(tmp_path) == [Path(path).name]


def test_existing_files_are_kept_unless_replaced(path):
    with Record.create(path, {"seed": 1}) as record:
        fill(record)
    with pytest.raises(RecordExistsError, match="there is a file already"):
        Record.create(path, {"seed": 2})
    with Record.open(path) as record:
        assert record.settings == {"seed": 1}
    with Record.create(path, {"seed": 2}, replace=True) as record:
        assert record.counts() == {}
        assert record.settings == {"seed": 2}


def test_replacing_does_not_mix_with_a_killed_run_or_an_old_reader(path, tmp_path):
    with Record.create(path, {"seed": 1}):
        pass
    with start_writer("wal", path) as child:
        child.stdout.readline()
        child.stdout.readline()
        child.kill()
    assert os.path.exists(path + "-wal")
    os.rename(path + "-wal", path + "-held")  # as it was, after the reader below has folded it in
    with Record.open(path) as reader:
        reader.counts()
        os.replace(path + "-held", path + "-wal")
        with Record.create(path, {"seed": 2}, replace=True) as record:
            assert record.counts() == {}
            record.append_blocks([make_block(0, "keep", 0)])
            reader.close()
            record.append_blocks([make_block(0, "keep", 5)])
            record.verify()
    with Record.open(path) as record:
        record.verify()
        assert record.settings == {"seed": 2}
        assert record.chain_draws(0).tobytes() == expected_draws(0, 10).tobytes()
    assert os.listdir(tmp_path) == [Path(path).name]


@pytest.mark.parametrize("content", [b"chain,draw,x\n0,0,1.5\n" * 50, b"short"])
def test_a_file_that_is_no_sqlite_file(path, content):
    Path(path).write_bytes(content)
    for options in ({}, {"write": True}, {"salvage": True}):
        with pytest.raises(RecordError, match="is not a fellwalk record: not an SQLite file"):
            Record.open(path, **options)
    assert Path(path).read_bytes() == content
    assert not os.path.exists(path + ".writer")


def test_an_sqlite_file_of_something_else(path):
    with contextlib.closing(sqlite3.connect(path)) as other:
        other.execute("CREATE TABLE blocks (id)")
    before = Path(path).read_bytes()
    for options in ({}, {"write": True}, {"salvage": True}):
        with pytest.raises(RecordError, match="an SQLite file, but not a fellwalk record"):
            Record.open(path, **options)
    assert Path(path).read_bytes() == before


def test_a_newer_layout(path):
    with Record.create(path, {}):
        pass
    with contextlib.closing(sqlite3.connect(path)) as plain:
        plain.execute("PRAGMA user_version = 3")
    with pytest.raises(RecordError, match=r"newer fellwalk \(record format 3; this one reads up to 2\)"):
        Record.open(path)


def test_a_record_of_format_1_is_read_and_gone_on_with(path):
    """The file was written by the version of fellwalk that made this format, with the blocks of `make_block`."""
    old = gzip.decompress((Path(__file__).parent / "checks/data/record_format_1.fell.gz").read_bytes())
    Path(path).write_bytes(old)
    with Record.create(path + "-again", {"seed": 3}) as record:
        record.set_entry("start", [1.5, 2.5])
        record.put_part(bytes(range(256)) * 4)
        record.append_blocks([make_block(0, "settle", 0)])
        for start in range(0, 30, 5):
            record.append_blocks([make_block(chain, "keep", start, gradients=True) for chain in (0, 1)])
        truth = contents(record)
    with Record.open(path) as record:
        record.verify()
        assert record.schema == 1
        assert [event.kind for event in record.events()] == ["interrupted"]
        assert contents(record)[1:] == truth[1:]
        assert record.states() == {chain: ("keep", 30, state_after(chain, "keep", 30)) for chain in (0, 1)}
    with Record.open(path, write=True) as record:
        record.append_blocks([make_block(chain, "keep", 30, gradients=True) for chain in (0, 1)])
    with Record.open(path) as record:
        record.verify()
        assert record.schema == 1
        assert record.chain_draws(1).tobytes() == expected_draws(1, 35).tobytes()
    with contextlib.closing(sqlite3.connect(path)) as plain:  # what the version that made the file would read
        for table in ("arrays", "states", "parts"):
            assert plain.execute(f"SELECT DISTINCT length(checksum) FROM {table}").fetchall() == [(16,)]
    changed = bytearray(old)
    changed[old.index(make_block(1, "keep", 20).draws.tobytes()[:64]) + 9] ^= 16
    Path(path).write_bytes(changed)
    with Record.open(path) as record, pytest.raises(DamagedRecordError, match="draws of draws 20 to 24 of chain 1"):
        record.verify()


def test_missing_empty_and_folder(path, tmp_path):
    with pytest.raises(RecordError, match="there is no such file"):
        Record.open(path)
    with pytest.raises(RecordError, match="is a folder"):
        Record.open(tmp_path)
    with pytest.raises(RecordError, match="is a folder"):
        Record.create(tmp_path, {}, replace=True)
    with pytest.raises(RecordError, match="Check the folder"):
        Record.create(tmp_path / "absent" / "a.fell", {})
    Path(path).touch()
    with pytest.raises(DamagedRecordError, match="is empty"):
        Record.open(path)
    assert sorted(os.listdir(tmp_path)) == [Path(path).name]


RIGHTS = """
import os, sys
Record.create(sys.argv[4], {}).close()
if os.getuid() == 0:
    os.setgid(65534); os.setuid(65534)
from fellwalk.errors import RecordError
for call in (lambda: Record.open(sys.argv[1]), lambda: Record.open(sys.argv[2], write=True),
             lambda: Record.create(sys.argv[3], {}), lambda: Record.open(sys.argv[2]).close() or print("read")):
    try:
        call()
    except RecordError as error:
        print(error)
"""


@posix_only
def test_no_permission(path):
    # The folder of pytest is closed to other users, and root may do anything: hence a folder and a user of its own.
    with tempfile.TemporaryDirectory() as folder:
        hidden, fixed = f"{folder}/hidden.fell", f"{folder}/fixed.fell"
        for file in (hidden, fixed):
            with Record.create(file, {}):
                pass
        os.chmod(hidden, 0)
        os.chmod(fixed, 0o444)
        os.chmod(folder, 0o555)
        # Used once before the user changes: that user may be unable to read the installed packages.
        code = f"import sys; sys.path[:0] = {sys.path!r}\nfrom fellwalk.record import Record\n{RIGHTS}"
        names = [hidden, fixed, f"{folder}/new.fell", path]
        out = subprocess.run([sys.executable, "-c", code, *names], capture_output=True, text=True)
        os.chmod(folder, 0o755)
        lines = out.stdout.splitlines()
        assert len(lines) == 4, out
        assert lines[0].startswith(f"{hidden}: no permission to read")
        assert lines[1].startswith(f"{fixed}: could not write the record (Permission denied)")
        assert lines[2].startswith(f"{folder}/new.fell: could not write the record (Permission denied)")
        assert lines[3] == "read"


# Several at once


def test_a_second_writer_is_refused_and_readers_are_not(path):
    with Record.create(path, {}) as record:
        fill(record)
        with pytest.raises(RecordInUseError, match="this process is already writing"):
            Record.open(path, write=True)
        with start_writer("wal", path) as child:
            assert child.stdout.read() == b""
        assert child.returncode == 1
        with Record.open(path) as reader:
            reader.verify()
            assert reader.count(0, "keep") == 30
            record.append_blocks([make_block(0, "keep", 30)])
            assert reader.count(0, "keep") == 35
    with Record.open(path, write=True) as record:
        record.verify()


def test_another_process_holds_the_record_until_it_is_killed(path):
    with Record.create(path, {}):
        pass
    with start_writer("wal", path) as child:
        assert child.stdout.readline() == b"ready\n"
        for make in (lambda: Record.open(path, write=True), lambda: Record.create(path, {}, replace=True)):
            with pytest.raises(RecordInUseError, match=f"process {child.pid} on "):
                make()
        counts = []
        deadline = time.monotonic() + 30
        while len(counts) < 3 and time.monotonic() < deadline:
            with Record.open(path) as reader:
                counts = sorted({*counts, reader.count(0, "keep")})
                reader.verify()
        assert len(counts) == 3, "a reader saw no progress of the running writer"
        child.kill()
    with Record.open(path, write=True) as record:
        record.verify()
        assert record.count(0, "keep") >= counts[-1]


def test_a_reader_that_stays_does_not_stop_the_writer_from_closing(path, tmp_path):
    record = Record.create(path, {})
    fill(record)
    with Record.open(path) as reader:
        record.close()
        assert reader.count(0, "keep") == 30
    assert os.listdir(tmp_path) == [Path(path).name]
    with Record.open(path, write=True) as record:
        record.verify()


@posix_only
@pytest.mark.filterwarnings("ignore:.*fork:DeprecationWarning")
def test_a_forked_worker_can_neither_write_nor_keep_the_record_shut(path, tmp_path):
    record = Record.create(path, {})
    fill(record)
    context = multiprocessing.get_context("fork")
    answers, go = context.Queue(), context.Event()

    def worker():
        for call in (record.counts, lambda: Record.open(path, write=True)):
            try:
                answers.put(repr(call()))
            except FellwalkError as error:
                answers.put(str(error))
        record.close()
        answers.put("closed")
        go.wait(60)

    child = context.Process(target=worker)
    child.start()
    try:
        assert "opened by the parent process" in answers.get(timeout=60)
        assert "another run" in answers.get(timeout=60)
        assert answers.get(timeout=60) == "closed"
        record.append_blocks([make_block(0, "keep", 30)])
        record.close()
        with Record.open(path, write=True) as again:
            again.verify()
            assert again.count(0, "keep") == 35
    finally:
        go.set()
        child.join(60)
    assert child.exitcode == 0
    assert os.listdir(tmp_path) == [Path(path).name]


def test_threads_may_share_a_record(path):
    with Record.create(path, {}) as record:
        def add(chain):
            for start in range(0, 100, 5):
                record.append_blocks([make_block(chain, "keep", start)])
                record.counts()

        threads = [threading.Thread(target=add, args=(chain,)) for chain in range(4)]
        for thread in threads:
            thread.start()
        for thread in threads:
            thread.join()
        record.verify()
        assert record.draws().tobytes() == np.array([expected_draws(chain, 100) for chain in range(4)]).tobytes()


def test_ctrl_c_inside_a_transaction_leaves_nothing_behind(path, monkeypatch):
    with Record.create(path, {}) as record:
        record.append_blocks([make_block(0, "keep", 0)])
        real, calls = record_module.row_checksum, []

        def interrupted(*values):
            calls.append(values)
            if len(calls) == 2:
                raise KeyboardInterrupt
            return real(*values)

        monkeypatch.setattr(record_module, "row_checksum", interrupted)
        with pytest.raises(KeyboardInterrupt):
            record.append_blocks([make_block(0, "keep", 5), make_block(0, "keep", 10)])
        monkeypatch.undo()
        assert record.count(0, "keep") == 5
        record.append_blocks([make_block(0, "keep", 5)])
        record.verify()
        assert record.chain_draws(0).tobytes() == expected_draws(0, 10).tobytes()


# Kills, full disks, other file systems


@posix_only
@pytest.mark.parametrize(("mode", "kills", "expected"), [("wal", 16, 0), ("wal", 8, 10**9), ("rollback", 8, 0)])
def test_kill_at_any_moment_loses_at_most_the_block_in_hand(path, tmp_path, mode, kills, expected):
    rng = np.random.default_rng(20)
    with Record.create(path, {}, expected=expected):
        pass
    confirmed = {0: 0, 1: 0}
    for _ in range(kills):
        with start_writer(mode, path) as child:
            assert child.stdout.readline() == b"ready\n"
            lines = [child.stdout.readline() for _ in range(rng.integers(0, 12))]
            time.sleep(rng.uniform(0, 0.005))
            child.send_signal(signal.SIGKILL)
            lines += child.stdout.read().splitlines()
        assert child.returncode == -signal.SIGKILL
        for line in lines:
            chain, count = map(int, line.split())
            confirmed[chain] = count
        with Record.open(path) as record:
            record.verify()
            extra = [record.count(chain, "keep") - confirmed[chain] for chain in (0, 1)]
            assert sorted(extra) in ([0, 0], [0, 5])
            for chain in (0, 1):
                confirmed[chain] += extra[chain]
                assert record.chain_draws(chain).tobytes() == expected_draws(chain, confirmed[chain]).tobytes()
                stop = confirmed[chain]
                state = ("keep", stop, state_after(chain, "keep", stop)) if stop else None
                assert record.latest_state(chain) == state
    assert min(confirmed.values()) > 10 * kills
    with Record.open(path, write=True) as record:
        record.append_event("resumed")
    assert os.listdir(tmp_path) == [Path(path).name]


@posix_only
@pytest.mark.parametrize("mode", ["full", "full-close"])
def test_a_full_disk_says_so_and_keeps_earlier_blocks(path, mode):
    with Record.create(path, {}):
        pass
    child = subprocess.run([sys.executable, writer.__file__, mode, path], capture_output=True, text=True)
    assert child.returncode == 0, child.stderr
    lines = child.stdout.splitlines()
    message = next(line for line in lines if line.startswith("RecordError"))
    assert "the disk, a quota or a file-size limit is full" in message
    assert "Finished blocks are safe" in message
    counts = [int(line.split()[1]) for line in lines if line != message]
    assert counts[0] == 5
    assert ("could not be made one file" in child.stderr) == (mode == "full-close")
    with Record.open(path, write=True) as record:
        record.verify()
        assert record.count(0, "keep") == counts[-1]
        assert record.chain_draws(0).tobytes() == expected_draws(0, counts[-1]).tobytes()
    assert not os.path.exists(path + "-wal")


def plain_locks(monkeypatch) -> None:
    """SQLite's own file layer without shared memory: what a network file system offers, for real."""
    real = record_file.connect
    monkeypatch.setattr(record_file, "connect", lambda path, options: real(path, options + "&vfs=unix-dotfile"))


@posix_only
def test_where_a_log_cannot_work_a_rollback_journal_does(path, tmp_path, monkeypatch):
    plain_locks(monkeypatch)
    with Record.create(path, {}) as record:
        assert record.journal == "delete"
        fill(record)
        assert not os.path.exists(path + "-wal")
        with Record.open(path) as reader:
            assert reader.count(1, "keep") == 30
            record.append_blocks([make_block(0, "keep", 30)])
            assert reader.count(0, "keep") == 35
    assert os.listdir(tmp_path) == [Path(path).name]
    with Record.open(path) as record:
        record.verify()
        assert record.chain_draws(0).tobytes() == expected_draws(0, 35).tobytes()


@posix_only
def test_the_log_of_a_killed_run_is_read_where_a_log_cannot_work(path, tmp_path, monkeypatch):
    with Record.create(path, {}):
        pass
    with start_writer("wal", path) as child:
        for _ in range(9):
            child.stdout.readline()
        child.kill()
        lines = child.stdout.read()
    os.unlink(path + "-shm")
    plain_locks(monkeypatch)
    with Record.open(path, write=True) as record:
        assert record.journal == "delete"
        record.verify()
        assert record.count(0, "keep") >= 20 + 5 * lines.count(b"\n0 ")
    assert os.listdir(tmp_path) == [Path(path).name]


def test_network_file_systems_are_recognised(path, monkeypatch):
    table = ("21 1 8:1 / / rw - ext4 /dev/sda1 rw\n36 21 0:30 / /home rw shared:5 - nfs4 server:/home rw\n"
             "37 36 0:31 / /home/my\\040disk rw - xfs /dev/sdb rw\n")
    kinds = {"/a.fell": "ext4", "/home/x/a.fell": "nfs4", "/homes/a.fell": "ext4", "/home/my disk/a.fell": "xfs"}
    for file, kind in kinds.items():
        assert record_file._mount_kind(table, file) == kind
    monkeypatch.setattr(record_file, "_on_network", lambda path: True)
    with Record.create(path, {}) as record:
        assert record.journal == "delete"
        fill(record)
        record.verify()


# Damage


@pytest.fixture(scope="module")
def sound(tmp_path_factory) -> bytes:
    path = tmp_path_factory.mktemp("sound") / "a.fell"
    with Record.create(path, {"seed": 3}) as record:
        record.set_entry("start", [1.5, 2.5])
        record.put_part(np.random.default_rng(1).bytes(3000))
        for start in range(0, 60, 5):
            record.append_blocks([make_block(chain, "keep", start, gradients=True) for chain in (0, 1, 2)])
        record.append_event("finished")
    return path.read_bytes()


def contents(record: Record) -> list[bytes]:
    """All that a record holds, read by its public methods."""
    names = [name for (name,) in record._connection.execute("SELECT name FROM parts ORDER BY name")]
    small = (record.settings, record.get_entry("start"), record.events(), record.counts(), record.states())
    whole = [repr(small).encode()]
    for chain in record.counts():
        whole += [record.chain_draws(chain).tobytes(), record.facts(chain).tobytes(), record.gradients(chain).tobytes(),
                  record.failures(chain).position.tobytes(), repr(record.notes(chain)).encode()]
    return whole + [record.part(name) for name in names]


def saved_draws_are_true(path: str, size: int = 5, stop: int = 60) -> int:
    """Number of draws that salvage gives (all checked), 0 when it refuses the file."""
    try:
        record = Record.open(path, salvage=True)
    except RecordError:
        return 0
    with record:
        saved = 0
        for chain in record.counts():
            draws = record.chain_draws(chain)
            assert draws.tobytes() == expected_draws(chain, len(draws), size).tobytes()
            try:
                facts = len(record.facts(chain))
            except DamagedRecordError as error:  # the layout of all facts is one entry, which nothing can replace
                said = str(error)
            else:
                said = None
            assert facts == len(draws) if said is None else "the entry 'facts'" in said
            saved += len(draws)
        assert saved == 3 * stop or record.damage
        return saved


def test_no_flipped_bit_goes_unnoticed(path, sound):
    Path(path).write_bytes(sound)
    with Record.open(path) as record:
        record.verify()
        truth = contents(record)
    rng = np.random.default_rng(400)
    noticed = 0
    for place in [*range(100), *rng.integers(100, len(sound), 300)]:
        changed = bytearray(sound)
        changed[place] ^= 1 << rng.integers(8)
        Path(path).write_bytes(changed)
        try:
            with Record.open(path) as record:
                read = contents(record)
                assert read == truth, f"byte {place} was changed and wrong values were read"
                record.verify()
        except RecordError:
            noticed += 1
        saved_draws_are_true(path)
    # Unused space in the pages is the rest; the blobs alone are three quarters of this file.
    assert noticed > 200


def test_a_flipped_byte_is_named_and_the_blocks_before_it_are_saved(path, sound):
    changed = bytearray(sound)
    place = sound.index(make_block(1, "keep", 35).draws.tobytes()[:64])
    changed[place + 9] ^= 16
    Path(path).write_bytes(changed)
    sentence = r"damaged at the draws of draws 35 to 39 of chain 1 \(keep\).*salvage=True"
    with Record.open(path) as record:
        for read in (record.draws, record.verify):
            with pytest.raises(DamagedRecordError, match=sentence):
                read()
        assert record.chain_draws(0).tobytes() == expected_draws(0, 60).tobytes()
    with Record.open(path, salvage=True) as record:
        assert record.counts() == {chain: {"settle": 0, "keep": n} for chain, n in ((0, 60), (1, 35), (2, 60))}
        assert record.draws().shape == (3, 35, DIMENSION)
        assert len(record.facts(1)) == len(record.notes(1)) * 5 == 35
        assert len(record.damage) == 1
        assert "draws 35 to 39 of chain 1" in record.damage[0]
    assert saved_draws_are_true(path) == 155
    assert Path(path).read_bytes() == bytes(changed)


@pytest.mark.parametrize(("table", "what"), [
    ("states", r"state of chain 0, so this chain cannot go on"), ("parts", "the part "), ("entries", "the entry "),
    ("events", "an event"), ("blocks", "block number 1"),
])
def test_damage_in_every_table_is_found(path, sound, table, what):
    Path(path).write_bytes(sound)
    column = {"entries": "value", "events": "details", "blocks": "note"}.get(table, "data")
    with contextlib.closing(sqlite3.connect(path)) as plain:
        first = plain.execute(f"SELECT min(rowid), {column} FROM {table}").fetchone()
        other = first[1] + " " if isinstance(first[1], str) else first[1][:-1] + bytes([first[1][-1] ^ 1])
        plain.execute(f"UPDATE {table} SET {column} = ? WHERE rowid = ?", (other, first[0]))
        plain.commit()
    with Record.open(path) as record, pytest.raises(DamagedRecordError, match=what):
        record.verify()


def test_missing_rows_are_found(path, sound):
    commands = {
        "DELETE FROM blocks WHERE chain = 1 AND start = 20": "draws before 25 of chain 1",
        "DELETE FROM blocks WHERE chain = 1 AND start = 55": "state of chain 1",
        "DELETE FROM states WHERE chain = 2": "state of chain 2",
        "DELETE FROM arrays WHERE id = (SELECT facts FROM blocks WHERE id = 8)": "the facts of draws 10 to 14",
        "UPDATE blocks SET draws = gradients WHERE id = 8": "block number 8",
    }
    for command, what in commands.items():
        Path(path).write_bytes(sound)
        with contextlib.closing(sqlite3.connect(path)) as plain:
            plain.execute(command)
            plain.commit()
        with Record.open(path) as record, pytest.raises(DamagedRecordError, match=what):
            record.verify()


def test_a_file_cut_short(path):
    with Record.create(path, {}) as record:
        for start in range(0, 2000, 40):
            record.append_blocks([make_block(chain, "keep", start, 40) for chain in (0, 1, 2)])
    whole = Path(path).read_bytes()
    for part in (0.0001, 0.003, 0.1, 0.3, 0.5, 0.7, 0.9, 0.9999):
        Path(path).write_bytes(whole[: int(part * len(whole))])
        with pytest.raises(RecordError, match="damaged"), Record.open(path) as record:
            record.verify()
        if part < 0.999:  # within the last page only reading all can tell
            with pytest.raises(RecordError, match="damaged"):
                Record.open(path, write=True)
        # SQLite moves the oldest rows of the list of blocks once, when its first page is full: after about 50 of the
        # 150 blocks here. A file cut before that keeps no list; from there on all but a few blocks before the cut are
        # saved.
        saved = saved_draws_are_true(path, 40, 2000)
        assert saved >= (part - 0.05) * 6000 if part >= 0.5 else saved <= part * 6000
