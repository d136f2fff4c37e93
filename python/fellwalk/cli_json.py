"""What the commands print with --json: one document, plain values, nothing that is not finite."""

from __future__ import annotations

import dataclasses
import json
import math
from typing import TYPE_CHECKING, Any

import numpy as np

from fellwalk.report_table import needs_attention

if TYPE_CHECKING:
    from fellwalk.audit import Audit
    from fellwalk.result import Result

__all__ = ["audit_document", "print_document", "result_document"]


def result_document(result: Result, following: str = "", page: str = "") -> dict[str, Any]:
    """The run, how far it came, and the judgement (null with too few draws). following: the next command to type."""
    judgement = None
    if result.judged:
        judgement = result.judgement.to_dict()
        for parameter, short in zip(judgement["parameters"], needs_attention(result.judgement), strict=True):
            parameter["needs_attention"] = bool(short)
    chains, draws = result.facts.shape
    return {
        "finished": result.finished,
        "ended": result.ended,
        "chains": chains,
        "draws_per_chain": draws,
        "judgement": judgement,
        "run": result.provenance(),
        **({"next": following} if following else {}),
        **({"page": page} if page else {}),
    }


def audit_document(found: Audit) -> dict[str, Any]:
    """What an audit has found."""
    return {
        "ok": found.ok,
        "findings": [dataclasses.asdict(finding) for finding in found.findings],
        "points": [{"label": label, "position": position} for label, position in found.points],
        "dimension": found.dimension,
        "seconds": dict(found.seconds),
        "behaviour": list(found.behaviour),
        "calls": found.calls,
        "largest_share": found.largest_share,
    }


def print_document(document: dict[str, Any]) -> None:
    """Print as JSON on standard output."""
    print(json.dumps(_plain(document), indent=1, allow_nan=False))


def _plain(value: Any) -> Any:
    if isinstance(value, dict):
        return {str(key): _plain(item) for key, item in value.items()}
    if isinstance(value, np.ndarray | np.generic):
        value = value.tolist()
    if isinstance(value, list | tuple):
        return [_plain(item) for item in value]
    if isinstance(value, float) and not math.isfinite(value):
        return None
    return value
