"""The checksum of a record's blobs against a second writing of its specification, and against published values."""

from __future__ import annotations

import sqlite3

import numpy as np
import pytest
from helpers_record_writer import make_block

from fellwalk._core import checksum
from fellwalk.record import Record

PRIMES = (11400714785074694791, 14029467366897019727, 1609587929392839161, 9650029242287828579, 2870177450012600261)


def turn(x: int, bits: int) -> int:
    x %= 2**64
    return (x << bits | x >> (64 - bits)) % 2**64


def xxh64(data: bytes, seed: int) -> int:
    """XXH64 in whole numbers of any size, as its specification has it."""
    one, two, three, four, five = PRIMES

    def stirred(lane: int, word: int) -> int:
        return turn(lane + word * two, 31) * one % 2**64

    def word(place: int, size: int = 8) -> int:
        return int.from_bytes(data[place : place + size], "little")

    at = 0
    if len(data) < 32:
        h = seed + five
    else:
        lanes = [seed + one + two, seed + two, seed, seed - one]
        while len(data) - at >= 32:
            lanes = [stirred(lane, word(at + 8 * i)) for i, lane in enumerate(lanes)]
            at += 32
        h = sum(turn(lane, bits) for lane, bits in zip(lanes, (1, 7, 12, 18), strict=True))
        for lane in lanes:
            h = ((h % 2**64) ^ stirred(0, lane)) * one + four
    h = (h + len(data)) % 2**64
    while len(data) - at >= 8:
        h = (turn(h ^ stirred(0, word(at)), 27) * one + four) % 2**64
        at += 8
    if len(data) - at >= 4:
        h = (turn(h ^ (word(at, 4) * one % 2**64), 23) * two + three) % 2**64
        at += 4
    for byte in data[at:]:
        h = turn(h ^ (byte * five % 2**64), 11) * one % 2**64
    h = (h ^ h >> 33) * two % 2**64
    h = (h ^ h >> 29) * three % 2**64
    return h ^ h >> 32


def test_values_that_others_publish():
    """Of the empty text and two short ones (specification's own implementation), with and without a seed."""
    assert checksum(b"") == 0xEF46DB3751D8E999
    assert checksum(b"a") == 0xD24EC4F1A98C6E5B
    assert checksum(b"abc") == 0x44BC2CF5AD770999
    assert checksum(b"xxhash", 20141025) == 0xB559B98D844E0635


def test_every_length_and_seed_agrees_with_the_specification():
    data = np.random.default_rng(4).bytes(300)
    for n in range(130):
        seed = n * 0x123456789ABCDEF % 2**64
        assert checksum(data[:n], seed) == xxh64(data[:n], seed), n
    for start in range(9):  # from any place in memory
        assert checksum(memoryview(data)[start:], 2**64 - 1) == xxh64(data[start:], 2**64 - 1)


def test_every_flipped_bit_changes_it():
    data = np.random.default_rng(5).bytes(150)
    seen = {checksum(data)}
    for bit in range(8 * len(data)):
        changed = bytearray(data)
        changed[bit // 8] ^= 1 << bit % 8
        seen.add(checksum(changed))
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
        assert stored == xxh64(data, xxh64(label.encode(), 0)).to_bytes(8, "big")
    [(data, stored)] = plain.execute("SELECT data, checksum FROM states").fetchall()
    assert data == block.state
    assert stored == xxh64(data, xxh64(b"state 2 keep 7 0 1", 0)).to_bytes(8, "big")
    plain.close()
