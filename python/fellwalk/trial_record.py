"""What a run's trial writes into the record, and how it is read back."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

from fellwalk.record import Record
from fellwalk.trial_play import Answer, packed, unpacked

__all__ = ["record_answers", "record_winner", "stored_answers"]


def record_answers(record: Record, answers: Sequence[Answer]) -> None:
    """Add answers to those that the record has, so that the trial can go on from them."""
    names = record.get_entry("trial blocks", [])
    record.set_entry("trial blocks", [*names, record.put_part(packed(answers))])


def stored_answers(record: Record, dimension: int) -> list[Answer]:
    """All answers of a trial that was cut off."""
    return [answer for name in record.get_entry("trial blocks", []) for answer in
            unpacked(record.part(name), dimension)]


def record_winner(record: Record, chosen: dict[str, Any], states: Sequence[bytes]) -> None:
    """Write what the trial has changed in the plan, and the states that kept draws begin from."""
    record.set_entry("chosen", {
        **chosen, "states": record.put_part(b"".join(states)), "sizes": [len(state) for state in states]})
