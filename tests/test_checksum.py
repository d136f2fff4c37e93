"""The checksum of a record's blobs, against a second writing of it and its published check value."""

from __future__ import annotations

import sqlite3

import numpy as np
import pytest
from helpers_record_writer import make_block

from fellwalk.record import Record
from fellwalk.record_items import split


def crc32(data: bytes) -> int:
    """CRC-32 bit by bit, as ITU-T V.42 (2002), 8.1.1.6.2, has it: polynomial 0xEDB88320, lowest power on the left."""
    remainder = 0xFFFFFFFF
    for byte in data:
        remainder ^= byte
        for _ in range(8):
            remainder = remainder >> 1 ^ (0xEDB88320 if remainder & 1 else 0)
    return remainder ^ 0xFFFFFFFF


def stored_for(data: bytes) -> bytes:
    [(_, _, _, found)] = split("a", data, 2)
    return found


def test_the_published_check_value():
    """Of the nine digits, as catalogues of CRCs print it for CRC-32 (from memory)."""
    assert crc32(b"123456789") == 0xCBF43926


def test_every_length_agrees():
    data = np.random.default_rng(4).bytes(130)
    for n in range(1, 130):
        assert stored_for(data[:n]) == crc32(b"a 0 1" + data[:n]).to_bytes(4, "big"), n


def test_every_flipped_bit_changes_it():
    data = np.random.default_rng(5).bytes(150)
    seen = {stored_for(data)}
    for bit in range(8 * len(data)):
        changed = bytearray(data)
        changed[bit // 8] ^= 1 << bit % 8
        seen.add(stored_for(bytes(changed)))
    assert len(seen) == 8 * len(data) + 1


@pytest.mark.parametrize("expected", [0, 10**9])
def test_a_record_can_be_checked_by_its_description_alone(tmp_path, expected):
    """As "The record's format" in DEVELOPERS.md says it, of a small file and of one laid out to be large."""
    path = tmp_path / "a.fell"
    block = make_block(2, "keep", 0, 7, gradients=True)
    with Record.create(path, {}, expected=expected) as record:
        record.append_blocks([block])
    plain = sqlite3.connect(path)
    kinds = ("draws", "facts", "failures", "gradients")
    ids = plain.execute(f"SELECT {', '.join(kinds)} FROM blocks").fetchone()
    for kind, number in zip(kinds, ids, strict=True):
        rows = plain.execute("SELECT piece, pieces, data, checksum FROM arrays WHERE id = ?", (number,)).fetchall()
        [(piece, pieces, data, stored)] = rows
        label = f"{kind} 2 keep 0 7 {block.draws.shape[1]} {piece} {pieces}"
        assert stored == crc32(label.encode() + data).to_bytes(4, "big")
    [(data, stored)] = plain.execute("SELECT data, checksum FROM states").fetchall()
    assert data == block.state
    assert stored == crc32(b"state 2 keep 7 0 1" + data).to_bytes(4, "big")
    plain.close()
