"""External reference numbers and open data sets that the tests compare with, each with its source beside it.

``values.json`` holds entries ``{id, title, kind, source, how, formula or model, values}``; numbers are strings with
every digit that is known. ``kind`` says where they come from: *published* (printed in the named source), *open-data*
(computed from a named open data set), *common-practice* (no source), *computed-here* (a formula of the named source,
evaluated to many digits). README.md names the sources of the files in ``data``.
"""

import json
from functools import cache
from pathlib import Path
from typing import Any

import numpy as np

HERE = Path(__file__).resolve().parent


@cache
def _entries() -> dict[str, dict[str, Any]]:
    with (HERE / "values.json").open(encoding="utf-8") as file:
        return {entry["id"]: entry for entry in json.load(file)["entries"]}


def entry(name: str) -> dict[str, Any]:
    """The entry with the id `name`, or the only one whose id begins with it; KeyError otherwise."""
    found = [name] if name in _entries() else [key for key in _entries() if key.startswith(name)]
    if len(found) != 1:
        raise KeyError(f"{len(found)} entries of {HERE / 'values.json'} have an id that begins with {name!r}.")
    return _entries()[found[0]]


def values(name: str) -> dict[str, Any]:
    """The `values` of :func:`entry`; numbers are strings, for ``float`` or ``mpmath.mpf``."""
    return entry(name)["values"]


def source(name: str) -> str:
    """Where the numbers of :func:`entry` come from."""
    return entry(name)["source"]


def nist_data(name: str) -> np.ndarray:
    """The observations of a NIST StRD file as floats, shape (observations, columns), response first."""
    lines = (HERE / "data" / f"{name}.dat").read_text(encoding="ascii").splitlines()
    first = next(i for i, line in enumerate(lines) if line.startswith("Data:") and "y" in line.split())
    return np.array([[float(word) for word in line.split()] for line in lines[first + 1 :] if line.strip()])


def pima() -> tuple[np.ndarray, np.ndarray]:
    """(features (532, 7), response (532,)): the training set, then the test set; response 1 for type "Yes"."""
    rows = []
    for part in ("tr", "te"):
        rows += (HERE / "data" / f"Pima.{part}.csv").read_text(encoding="ascii").splitlines()[1:]
    words = [row.split(",") for row in rows if row]
    features = np.array([[float(word) for word in row[:-1]] for row in words])
    return features, np.array([float(row[-1].strip('"') == "Yes") for row in words])


def australian() -> tuple[np.ndarray, np.ndarray]:
    """(features (690, 14), response (690,)) of the Statlog Australian credit data."""
    table = np.loadtxt(HERE / "data" / "australian.dat", skiprows=1)
    return table[:, :-1], table[:, -1]


def ripley() -> tuple[np.ndarray, np.ndarray]:
    """(features xs and ys (250, 2), response (250,)) of Ripley's synthetic two-class training set."""
    table = np.loadtxt(HERE / "data" / "synth.tr.csv", delimiter=",", skiprows=1)
    return table[:, :-1], table[:, -1]
