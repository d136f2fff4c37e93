"""Exported files come back bit for bit, in plain formats, and a failed export leaves what was there."""

from __future__ import annotations

import csv
import json
import os
import signal
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest
from scipy.io import netcdf_file

from fellwalk import export
from fellwalk.errors import ArgumentError, RecordError
from fellwalk.export import save_csv, save_netcdf, save_npz
from fellwalk.facts import FACTS

NAMES = ["growth", "spread (kg)", "μ", "Größe", "growth?", "2nd", "a,\"b\"\nc", "chain", "!"]
SAVERS = (save_npz, save_csv, save_netcdf)


def awkward_draws(chains: int = 3, count: int = 40, dimension: int = len(NAMES)) -> np.ndarray:
    """Every kind of double: all exponents, subnormals, both zeros and infinities, NaN."""
    rng = np.random.default_rng(8)
    draws = rng.integers(0, 2**64, (chains, count, dimension), dtype=np.uint64).view(np.float64)
    draws[np.isnan(draws)] = np.nan
    draws[0, :6, 0] = [0.0, -0.0, np.inf, -np.inf, np.nan, 5e-324]
    draws[1] = rng.normal(size=draws[1].shape)
    return draws


def some_facts(chains: int = 3, count: int = 40) -> np.ndarray:
    rng = np.random.default_rng(9)
    facts = np.zeros((chains, count), FACTS)
    for name in FACTS.names:
        kind = FACTS[name].kind
        facts[name] = rng.integers(-5, 2**31 - 1, facts.shape) if kind == "i" else rng.normal(size=facts.shape)
    return facts


@pytest.fixture
def draws() -> np.ndarray:
    return awkward_draws()


def test_npz_comes_back_bit_for_bit_without_pickle(tmp_path, draws):
    facts = some_facts()
    save_npz(tmp_path / "a.npz", draws, NAMES, facts=facts, attributes={"seed": 2**90, "starts": np.arange(2.0)})
    with np.load(tmp_path / "a.npz", allow_pickle=False) as file:
        assert sorted(file.files) == ["attributes", "draws", "facts", "names"]
        assert file["draws"].tobytes() == draws.tobytes()
        assert file["facts"].dtype == FACTS
        assert file["facts"].tobytes() == facts.tobytes()
        assert file["names"].tolist() == NAMES
        assert json.loads(str(file["attributes"])) == {"seed": 2**90, "starts": [0.0, 1.0]}


def test_csv_comes_back_bit_for_bit(tmp_path, draws):
    names = [name.replace("chain", "chain length") for name in NAMES]
    facts = some_facts()
    for given in (None, facts):
        save_csv(tmp_path / "a.csv", draws, names, facts=given)
        with open(tmp_path / "a.csv", encoding="utf-8", newline="") as file:
            header, *rows = csv.reader(file)
        columns = 2 + len(names)
        assert header[:columns] == ["chain", "draw", *names]
        assert [tuple(map(int, row[:2])) for row in rows] == [(c, n) for c in range(3) for n in range(40)]
        back = np.array([[float(cell) for cell in row[2:columns]] for row in rows]).reshape(draws.shape)
        assert back.tobytes() == draws.tobytes()
        if given is not None:
            assert header[columns:] == [f"facts.{field}" for field in FACTS.names]
            table = np.array([tuple(float(cell) for cell in row[columns:]) for row in rows], FACTS)
            assert table.tobytes() == facts.tobytes()
        else:
            assert len(header) == columns


def test_netcdf_comes_back_bit_for_bit(tmp_path, draws):
    facts = some_facts()
    provenance = {"seed": 7, "big seed": 2**90, "time": 1.5, "versions": {"numpy": "2.1"}, "mode": "w", "note": "",
                  "who": "Ø", "title": "mine", "flag": True, "count": np.int64(3)}
    save_netcdf(tmp_path / "a.nc", draws, NAMES, facts=facts, attributes=provenance, title="Hives of Größe")
    assert (tmp_path / "a.nc").read_bytes()[:4] == b"CDF\x02"
    with netcdf_file(tmp_path / "a.nc", mmap=False) as file:
        assert file.dimensions == {"chain": 3, "draw": 40}
        found = {v.long_name.decode(): name for name, v in file.variables.items() if hasattr(v, "long_name")}
        plain = ["growth", "spread_kg", "x", "Groe", "growth_2", "x_2nd", "a_b_c", "chain_2", "x_2"]
        assert [found[name] for name in NAMES] == plain
        for column, name in enumerate(NAMES):
            variable = file.variables[found[name]]
            assert variable.dimensions == ("chain", "draw")
            assert variable[:].astype("<f8").tobytes() == draws[:, :, column].tobytes()
        for field in FACTS.names:
            variable = file.variables[f"facts_{field}"]
            assert variable[:].astype(FACTS[field]).tobytes() == facts[field].tobytes()
        np.testing.assert_array_equal(file.variables["chain"][:], range(3))
        np.testing.assert_array_equal(file.variables["draw"][:], range(40))
        attributes = file._attributes
        assert attributes["title"].decode() == "Hives of Größe"
        assert b"written by fellwalk" in attributes["history"]
        assert attributes["seed"] == 7
        assert attributes["seed"].dtype == np.int32
        assert attributes["big_seed"] == str(2**90).encode()
        assert attributes["time"] == 1.5
        assert json.loads(attributes["versions"]) == {"numpy": "2.1"}
        assert [attributes[name] for name in ("mode_2", "title_2", "flag", "count")] == [b"w", b"mine", b"true", 3]
        assert attributes["who"].decode() == "Ø"


def test_safe_names_are_unique_and_plain():
    taken = {"chain"}
    names = ["x", "x_2", "x", "X", "", "_", "9", "chain", "é", "x y", "x-y", "x  y"]
    safe = [export._safe(name, taken) for name in names]
    assert len(set(safe)) == len(safe)
    assert all(name[0].isalpha() and name.replace("_", "a").isalnum() and name.isascii() for name in safe)


@pytest.mark.parametrize("save", SAVERS)
def test_wrong_arguments_are_refused_before_anything_is_written(tmp_path, save):
    draws = np.ones((2, 3, 2))
    cases = [((draws[0], ["a", "b"]), "float64 of shape"), ((draws.astype(int), ["a", "b"]), "float64 of shape"),
             ((draws, ["a"]), "names must be 2 texts"), ((draws, "ab"), "names must be 2 texts"),
             ((draws, ["a", ""]), "names must be 2 texts"), ((draws, ["a", 3]), "names must be 2 texts"),
             ((draws, ["a", "a"]), "two parameters are named 'a'")]
    for arguments, sentence in cases:
        with pytest.raises(ArgumentError, match=sentence):
            save(tmp_path / "a", *arguments)
    for facts in (np.zeros((2, 3)), np.zeros((2, 4), FACTS), np.zeros((2, 3), [("a", object)])):
        with pytest.raises(ArgumentError, match="facts must be a structured array"):
            save(tmp_path / "a", draws, ["a", "b"], facts=facts)
    assert os.listdir(tmp_path) == []


def test_more_wrong_arguments(tmp_path, monkeypatch):
    draws = np.ones((2, 3, 1))
    with pytest.raises(ArgumentError, match="rename it"):
        save_csv(tmp_path / "a", draws, ["draw"])
    with pytest.raises(ArgumentError, match="no draws to write"):
        save_netcdf(tmp_path / "a", draws[:, :0], ["a"])
    for save in (save_npz, save_netcdf):
        with pytest.raises(ArgumentError, match="attributes must be"):
            save(tmp_path / "a", draws, ["a"], attributes={"density": print})
    monkeypatch.setattr(export, "NETCDF_BYTES", 47)
    with pytest.raises(ArgumentError, match="too many for classic netCDF"):
        save_netcdf(tmp_path / "a", draws, ["a"])
    assert os.listdir(tmp_path) == []


@pytest.mark.parametrize("save", SAVERS)
def test_the_sentence_names_the_file_and_its_fault(tmp_path, save):
    with pytest.raises(RecordError, match="is a folder"):
        save(tmp_path, np.ones((1, 1, 1)), ["a"])
    with pytest.raises(RecordError, match=r"absent.*could not be written \(No such file"):
        save(tmp_path / "absent" / "a", np.ones((1, 1, 1)), ["a"])


LIMITED = """
import resource, signal, sys
import numpy as np
from fellwalk import export
from fellwalk.errors import RecordError
save = getattr(export, sys.argv[1])
signal.signal(signal.SIGXFSZ, signal.SIG_IGN)
resource.setrlimit(resource.RLIMIT_FSIZE, (50_000, 50_000))
try:
    save(sys.argv[2], np.ones((2, 10_000, 2)) / 3, ["a", "b"])
except RecordError as error:
    print(error)
"""


@pytest.mark.skipif(os.name == "nt", reason="needs POSIX limits")
@pytest.mark.parametrize("save", SAVERS)
def test_a_full_disk_leaves_the_earlier_file(tmp_path, save):
    path = tmp_path / "a"
    path.write_bytes(b"earlier")
    child = subprocess.run([sys.executable, "-c", LIMITED, save.__name__, path], capture_output=True, text=True)
    assert "could not be written (File too large). An earlier file of this name is as it was." in child.stdout, child
    assert child.stderr == ""
    assert path.read_bytes() == b"earlier"
    assert os.listdir(tmp_path) == ["a"]


KILLED = """
import sys
import numpy as np
from fellwalk import export
draws = np.random.default_rng(1).normal(size=(4, 2_000, 5))
print("ready", flush=True)
while True:
    getattr(export, sys.argv[1])(sys.argv[2], draws, list("abcde"))
    print("saved", flush=True)
"""


@pytest.mark.skipif(os.name == "nt", reason="needs SIGKILL")
@pytest.mark.parametrize("save", SAVERS)
def test_a_kill_leaves_a_whole_file(tmp_path, save):
    draws = np.random.default_rng(1).normal(size=(4, 2_000, 5))
    save(tmp_path / "truth", draws, list("abcde"))
    whole = (tmp_path / "truth").read_bytes()
    path = tmp_path / "a"
    with subprocess.Popen([sys.executable, "-c", KILLED, save.__name__, path], stdout=subprocess.PIPE) as child:
        for _ in range(3):
            child.stdout.readline()
        while not list(tmp_path.glob("*.part")):  # a save is under way
            pass
        child.send_signal(signal.SIGKILL)
    # Only the time of writing, in the zip directory or the history, may differ.
    assert len(path.read_bytes()) == len(whole)
    if save is save_csv:
        assert path.read_bytes() == whole
    elif save is save_npz:
        with np.load(path) as file:
            assert file["draws"].tobytes() == draws.tobytes()
    else:
        with netcdf_file(path, mmap=False) as file:
            assert file.variables["e"][:].astype("<f8").tobytes() == draws[:, :, 4].tobytes()


def test_links_and_rights_are_kept(tmp_path):
    (tmp_path / "link").symlink_to("real")
    save_csv(tmp_path / "link", np.ones((1, 1, 1)), ["a"])
    assert (tmp_path / "link").is_symlink()
    assert (tmp_path / "real").read_text() == "chain,draw,a\n0,0,1.0\n"
    plain = Path(tmp_path / "plain")
    plain.touch()
    assert (tmp_path / "real").stat().st_mode == plain.stat().st_mode
