"""Draws in files that other programs read: NumPy's .npz, CSV, and classic netCDF.

Every function writes a new file beside the old one and renames it when it is whole and on disk, so an interrupted or
failed export leaves what was there. Numbers come back bit for bit (in CSV: except which NaN it was).
"""

from __future__ import annotations

import contextlib
import csv
import io
import json
import os
import re
import secrets
import unicodedata
from collections.abc import Iterable, Iterator, Mapping, Sequence
from datetime import UTC, datetime
from typing import IO, Any

import numpy as np

from .errors import ArgumentError, RecordError

# SciPy writes the size of a netCDF variable as a signed 32-bit number.
NETCDF_BYTES = 2**31 - 4


def save_npz(path: str | os.PathLike[str], draws: np.ndarray, names: Sequence[str], *, facts: np.ndarray | None = None,
             attributes: Mapping[str, Any] | None = None) -> None:
    """Write a .npz file that numpy.load reads without pickle.

    It holds `draws` (chains, n, dimension), `names` (dimension,), `facts` (chains, n) when given, and `attributes`,
    JSON text of provenance such as the seed and versions. Raises ArgumentError, or RecordError when the disk refuses.
    """
    draws, names, facts = _checked(draws, names, facts)
    arrays = {"draws": draws, "names": np.array(names, dtype=str), "attributes": np.array(_json(attributes or {}))}
    if facts is not None:
        arrays["facts"] = facts
    with _whole_file(path) as file:
        np.savez(file, allow_pickle=False, **arrays)


def save_csv(path: str | os.PathLike[str], draws: np.ndarray, names: Sequence[str], *,
             facts: np.ndarray | None = None) -> None:
    """Write UTF-8 CSV: a header, then one row a draw with chain, draw (both from 0) and every parameter.

    `draws` has shape (chains, n, dimension). Each number has the fewest digits, at most 17, that give it back exactly.
    With `facts` (chains, n) their fields follow, in columns named facts.FIELD. Raises ArgumentError, or RecordError
    when the disk refuses.
    """
    draws, names, facts = _checked(draws, names, facts)
    fields = [] if facts is None else list(facts.dtype.names or ())
    header = ["chain", "draw", *names, *(f"facts.{field}" for field in fields)]
    if len(set(header)) != len(header):
        raise ArgumentError("a parameter is named chain, draw or facts.FIELD, as columns of the file are: rename it")
    with _whole_file(path) as file:
        text = io.TextIOWrapper(file, encoding="utf-8", newline="")
        rows = csv.writer(text, lineterminator="\n")
        rows.writerow(header)
        for chain, block in enumerate(draws):
            # Row by row as Python floats: repr of these is the shortest text that reads back to the same bits.
            for number, row in enumerate(block):
                extra = () if facts is None else facts[chain, number].item()
                rows.writerow([chain, number, *map(repr, row.tolist()), *map(repr, extra)])
        text.flush()
        text.detach()


def save_netcdf(path: str | os.PathLike[str], draws: np.ndarray, names: Sequence[str], *,
                facts: np.ndarray | None = None, attributes: Mapping[str, Any] | None = None,
                title: str = "Draws from a density") -> None:
    """Write a classic netCDF file (64-bit offsets), readable by every netCDF library.

    Dimensions chain and draw; one double variable (chain, draw) for each parameter of `draws` (chains, n, dimension),
    named with letters, digits and underscores, its own name in the attribute long_name; each field of `facts`
    (chains, n) as facts_FIELD. `attributes` become global attributes (text, real numbers, 32-bit whole numbers; all
    else as JSON text) beside title and history. Raises ArgumentError, or RecordError when the disk refuses.
    """
    from scipy.io import netcdf_file  # slow to import, and the only use of it

    draws, names, facts = _checked(draws, names, facts)
    chains, count, _ = draws.shape
    if chains == 0 or count == 0:
        raise ArgumentError("there are no draws to write: a classic netCDF file cannot hold an empty dimension")
    if chains * count * 8 > NETCDF_BYTES:
        raise ArgumentError(f"{chains} x {count} draws are too many for classic netCDF (2 GB a parameter): write "
                            "a .npz file")
    columns: dict[str, tuple[np.ndarray, str]] = {}
    fields = () if facts is None else facts.dtype.names or ()
    taken = {"chain", "draw", *(f"facts_{field}" for field in fields)}
    for column, name in enumerate(names):
        columns[_safe(name, taken)] = (draws[:, :, column], name)
    if facts is not None:
        columns |= {f"facts_{field}": (facts[field], field) for field in fields}
    with _whole_file(path) as file:
        out = netcdf_file(_Kept(file), "w", version=2)
        out.title = _text(title)
        out.history = _text(f"{datetime.now(UTC).isoformat(timespec='seconds')} written by fellwalk")
        used = {"title", "history", *dir(out)}  # attributes share a name space with the methods of SciPy's object
        for name, value in (attributes or {}).items():
            setattr(out, _safe(name, used), _attribute(value))
        for dimension, size in (("chain", chains), ("draw", count)):
            out.createDimension(dimension, size)
            out.createVariable(dimension, "i4", (dimension,))[:] = np.arange(size)
        for safe, (values, name) in columns.items():
            variable = out.createVariable(safe, "i4" if values.dtype.kind == "i" else "f8", ("chain", "draw"))
            variable[:] = values
            variable.long_name = _text(name)
        out.close()


def _checked(draws: Any, names: Iterable[str], facts: Any) -> tuple[np.ndarray, list[str], np.ndarray | None]:
    draws = np.asarray(draws)
    if draws.ndim != 3 or draws.dtype != np.float64:
        raise ArgumentError("draws must be float64 of shape (chains, n, dimension), not "
                            f"{draws.dtype} of shape {draws.shape}")
    names = [names] if isinstance(names, str) else list(names)
    if len(names) != draws.shape[2] or not all(isinstance(name, str) and name for name in names):
        raise ArgumentError(f"names must be {draws.shape[2]} texts, one a parameter; got {len(names)}: {names!r:.80}")
    if len(set(names)) != len(names):
        twice = next(name for name in names if names.count(name) > 1)
        raise ArgumentError(f"two parameters are named {twice!r}: give every parameter a name of its own")
    if facts is not None:
        facts = np.asarray(facts)
        if facts.dtype.names is None or facts.dtype.hasobject or facts.shape != draws.shape[:2]:
            raise ArgumentError(f"facts must be a structured array of numbers of shape {draws.shape[:2]}, not "
                                f"{facts.dtype} of shape {facts.shape}")
    return draws, names, facts


def _json(value: Any) -> str:
    try:
        return json.dumps(value, default=lambda item: item.tolist())
    except (TypeError, ValueError, AttributeError) as error:
        raise ArgumentError(f"the attributes must be numbers, text, lists and dicts ({error})") from error


def _text(value: str) -> bytes:
    # netCDF text carries no encoding; SciPy would take Latin-1 and refuse the rest. An empty text cannot be stored.
    return value.encode() or b" "


def _attribute(value: Any) -> Any:
    if isinstance(value, str):
        return _text(value)
    if isinstance(value, np.generic):
        value = value.item()
    if isinstance(value, float):
        return np.float64(value)
    if isinstance(value, int) and not isinstance(value, bool) and -(2**31) <= value < 2**31:
        return np.int32(value)
    return _text(_json(value))


def _safe(name: str, taken: set[str]) -> str:
    """A name of letters, digits and underscores, first a letter, that is not yet in `taken`, to which it is added."""
    plain = unicodedata.normalize("NFKD", name).encode("ascii", "ignore").decode()
    plain = re.sub(r"[^A-Za-z0-9]+", "_", plain).strip("_")
    plain = plain if plain[:1].isalpha() else f"x_{plain}".rstrip("_")
    unique, number = plain, 1
    while unique in taken:
        number += 1
        unique = f"{plain}_{number}"
    taken.add(unique)
    return unique


class _Kept:
    """A file that stays open when the netCDF writer closes it: it must still be synced and renamed."""

    def __init__(self, file: IO[bytes]) -> None:
        self._file, self._done = file, False
        self.seek, self.tell, self.write, self.flush = file.seek, file.tell, file.write, file.flush

    @property
    def closed(self) -> bool:
        return self._done or self._file.closed

    def close(self) -> None:
        self._done = True


@contextlib.contextmanager
def _whole_file(path: str | os.PathLike[str]) -> Iterator[IO[bytes]]:
    """A file that takes its name only when all is written and on disk."""
    full = os.path.realpath(path)
    if os.path.isdir(full):
        raise RecordError(f"{full}: is a folder. Give the name of a file.")
    partial = f"{full}.{secrets.token_hex(4)}.part"
    try:
        with open(partial, "xb") as file:
            yield file
            file.flush()
            os.fsync(file.fileno())
        os.replace(partial, full)
    except BaseException as error:
        with contextlib.suppress(OSError):
            os.unlink(partial)
        if isinstance(error, OSError):
            raise RecordError(f"{full}: could not be written ({error.strerror}). An earlier file of this name is as it "
                              "was. Check the folder, its rights and the free space.") from error
        raise
