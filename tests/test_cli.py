"""The command as people type it: real processes; exit status, sentences, and never a traceback without --debug."""

import os
import re
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest
from command_line import inside
from run_models import python_density

import fellwalk as fw
from fellwalk import cli
from fellwalk.record import Record

MODELS = Path(__file__).with_name("run_models.py")
SHORT = ["--chains", "2", "--settle", "60", "--keep", "40", "--seed", "5", "--executor", "here"]


def fellwalk(*arguments, **more):
    done = subprocess.run([sys.executable, "-m", "fellwalk", *map(str, arguments)], capture_output=True, text=True,
                          timeout=60, check=False, **more)
    return done.returncode, done.stdout, done.stderr


@pytest.fixture
def record(tmp_path, capsys):
    path = tmp_path / "a.fell"
    assert inside(capsys, "run", f"{MODELS}:python_density", "--record", path, *SHORT)[0] == 0
    return path


def test_run_report_and_resume(tmp_path):
    record = tmp_path / "a.fell"
    status, out, err = fellwalk("run", "run_models.py:python_density", "--record", record, *SHORT, cwd=MODELS.parent)
    assert status == 0, err
    assert max(map(len, out.splitlines())) <= 80 + len(str(record))
    assert "Verdict:" in out
    assert "blocks run in this process, one at a time, as asked" in err
    assert "kept 80 of 80 draws" in err
    expected = fw.run(python_density(), settle=60, keep=40, chains=2, seed=5)
    np.testing.assert_array_equal(fw.load(record).draws, expected.draws)
    # the model is found again from another folder
    status, out, err = fellwalk("resume", record, "--keep", 70, "--progress", "off", cwd=tmp_path)
    assert (status, err) == (0, "")
    more = fw.run(python_density(), settle=60, keep=70, chains=2, seed=5)
    np.testing.assert_array_equal(fw.load(record).draws, more.draws)
    status, said, err = fellwalk("report", record)
    assert status == 0, err
    assert said.partition("\n\nPage:")[0].strip() == out.partition("\n\nNext:")[0].strip()


def test_a_model_of_a_module(tmp_path):
    record = tmp_path / "a.fell"
    status, _, err = fellwalk("run", "run_models:python_density", "--record", record, *SHORT, cwd=MODELS.parent)
    assert status == 0, err
    assert fw.load(record).plan["model"] == "run_models:python_density"


@pytest.mark.parametrize("command", ["", "demo", "run", "resume", "report"])
def test_help_reads_well_at_80_columns(command):
    status, out, err = fellwalk(*command.split(), "--help", env={**os.environ, "COLUMNS": "80"})
    assert (status, err) == (0, "")
    assert max(map(len, out.splitlines())) <= 80
    assert "None" not in out
    assert "False" not in out
    assert "==" not in out


@pytest.mark.parametrize("wrong", [
    "", "walk", "run", "run model.py:density", "run m.py:d --record a --chains two", "run m.py:d --record a --keep 0",
    "run m.py:d --record a --chains -1", "run m.py:d --record a --settle soon", "run m.py:d --record a --motion fast",
    "run m.py:d --record a --seed 1.5", "run m.py:d --recor a", "run m.py:d --record a --seconds soon", "resume",
    "resume a --keep few", "resume a --executor cloud", "report", "report a b"])
def test_wrong_usage_is_status_2(wrong, capsys):
    status, out, err = inside(capsys, *wrong.split())
    assert (status, out) == (2, "")
    assert re.search(r"^fellwalk.*: error: ", err, re.MULTILINE)


@pytest.mark.parametrize(("model", "sentence"), [
    ("models.py", "a model is named module:object or file.py:object"),
    ("no_such_file.py:density", "there is no file no_such_file.py"),
    ("no_such_module:density", "there is no module 'no_such_module' here or on the Python path"),
    (f"{MODELS}:pyton_density", "has no 'pyton_density'"),
    (f"{MODELS}:curved", "needs arguments, so it is not a model"),
    (f"{MODELS}:START", "is a ndarray; it must be a fellwalk.Density, or a function"),
    (f"{MODELS}:os.getpid", "is a int; it must be a fellwalk.Density"),
])
def test_a_model_that_is_not_found(model, sentence, tmp_path, capsys):
    status, out, err = inside(capsys, "run", model, "--record", tmp_path / "a.fell")
    assert (status, out) == (1, "")
    assert err.startswith("fellwalk: ")
    assert sentence in err
    assert not (tmp_path / "a.fell").exists()


@pytest.mark.parametrize(("options", "sentence"), [
    (["--start", "1,2"], "must have shape (3,); it has shape (2,)"),
    (["--start", "1,2,x"], "--start must be numbers separated by commas, or a .npy file; it is '1,2,x'"),
    (["--start", "there.npy"], "cannot be read from there.npy"),
    (["--start", "nan,0,0"], "not finite at the starting point"),
    (["--acceptance", "1.5"], "acceptance must be above 0"),
    (["--settle", "0"], "with settle=0 nothing finds a step size"),
    (["--step-size", "-1"], "step_size must be above 0"),
    (["--seconds", "0"], "seconds must be above 0"),
    (["--motion", "lagrangian", "--bend", "-1"], "bend must be at least 0"),
    (["--record", "/no/such/folder/a.fell"], "could not write the record (No such file or directory)"),
    (["--record", "/"], "is a folder, not a record"),
])
def test_wrong_values_get_a_sentence(options, sentence, tmp_path, capsys):
    status, out, err = inside(capsys, "run", f"{MODELS}:python_density", "--record", tmp_path / "a.fell", *options)
    assert (status, out) == (1, "")
    assert err.startswith("fellwalk: ")
    assert sentence in err
    assert len(err.splitlines()) == 1
    assert not (tmp_path / "a.fell").exists()


def test_an_exception_of_the_model_is_told_with_its_place(tmp_path, capsys):
    model = tmp_path / "model.py"
    model.write_text("import numpy as np\nimport fellwalk as fw\ncalls = [0]\n"
                     "def f(x):\n    calls[0] += 1\n    if calls[0] > 300:\n"
                     "        raise ZeroDivisionError('by nothing')\n"
                     "    return -0.5 * float(x @ x), -x\ndensity = fw.Density(f, 2, start=[0.1, 0.2])\n")
    status, _, err = inside(capsys, "run", f"{model}:density", "--record", tmp_path / "a.fell", *SHORT)
    assert status == 1
    assert "fellwalk: ZeroDivisionError in the model: by nothing\n  fellwalk: raised in chain " in err
    assert "at transition" in err
    assert "--debug shows where" in err
    with pytest.raises(ZeroDivisionError):
        cli.main(["run", f"{model}:density", "--record", str(tmp_path / "b.fell"), *SHORT, "--debug"])


def test_a_model_file_that_is_broken(tmp_path, capsys):
    model = tmp_path / "broken.py"
    model.write_text("import no_such_thing_at_all\n")
    status, _, err = inside(capsys, "run", f"{model}:density", "--record", tmp_path / "a.fell")
    assert status == 1
    assert "ModuleNotFoundError in the model: No module named 'no_such_thing_at_all'" in err


def test_a_record_that_is_there(record, capsys):
    before = record.read_bytes()
    status, _, err = inside(capsys, "run", f"{MODELS}:python_density", "--record", record, *SHORT)
    assert status == 1
    assert "there is a file already" in err
    assert record.read_bytes() == before
    assert inside(capsys, "run", f"{MODELS}:python_density", "--record", record, *SHORT, "--replace")[0] == 0


@pytest.mark.parametrize("command", ["report", "resume"])
def test_records_that_cannot_be_used(command, record, tmp_path, capsys):
    status, _, err = inside(capsys, command, tmp_path / "none.fell")
    assert (status, "there is no such file" in err) == (1, True)
    text = tmp_path / "text.fell"
    text.write_text("these are not draws " * 100)
    status, _, err = inside(capsys, command, text)
    assert (status, "is not a fellwalk record" in err) == (1, True)
    other = tmp_path / "other.fell"
    Record.create(other, {"seed": 3}).close()
    status, _, err = inside(capsys, command, other)
    assert (status, "was not made by fellwalk.run" in err) == (1, True)
    whole = bytearray(record.read_bytes())
    whole[len(whole) // 3 : len(whole) // 3 + 4000] = bytes(4000)
    record.write_bytes(whole)
    status, _, err = inside(capsys, command, record)
    assert (status, "damaged" in err) == (1, True), err
    assert len(err.splitlines()) == 1


def test_records_of_another_model(record, tmp_path, capsys):
    for model, sentence in (("other_dimension", "is of a model with 3 coordinates; this density has 2"),
                            ("other_data", "it is another model, or other data"),
                            ("other_names", "is of a model with a coordinate 'x[0]' where this density has 'a'")):
        status, _, err = inside(capsys, "resume", record, "--model", f"{MODELS}:{model}", "--keep", 50)
        assert (status, sentence in err) == (1, True), err
    status, _, err = inside(capsys, "resume", record, "--keep", 20)
    assert (status, "keep= can only ask for more, not for 20" in err) == (1, True), err
    assert inside(capsys, "resume", record)[0] == 0
    assert fw.load(record).draws.shape == (2, 40, 3)


def test_a_record_without_a_model(tmp_path, capsys):
    path = tmp_path / "a.fell"
    fw.run(python_density(), settle=60, keep=40, chains=2, seed=5, record=path)
    status, _, err = inside(capsys, "resume", path)
    assert (status, "does not name its model" in err) == (1, True)
    assert inside(capsys, "resume", path, "--model", f"{MODELS}:python_density", "--keep", 41)[0] == 0


def test_a_run_killed_while_its_record_was_made(record, capsys):
    import sqlite3

    with sqlite3.connect(record) as connection:
        connection.execute("DELETE FROM entries WHERE name = 'beginning'")
    connection.close()
    status, _, err = inside(capsys, "resume", record, "--keep", 50)
    assert (status, "killed before its first block" in err) == (1, True), err


def test_few_draws_are_told_without_a_verdict(tmp_path, capsys):
    status, out, _ = inside(capsys, "run", f"{MODELS}:python_density", "--record", tmp_path / "a.fell", "--settle", 60,
                            "--keep", 2, "--chains", 2)
    assert status == 0
    assert "2 chains of 2 draws" in out
    assert "Verdict" not in out


def test_a_reader_who_has_gone(record):
    """As in `fellwalk report FILE | head -1`, when head has ended before anything is written."""
    read, write = os.pipe()
    os.close(read)
    done = subprocess.run([sys.executable, "-m", "fellwalk", "report", record], stdout=write, stderr=subprocess.PIPE,
                          text=True, timeout=60, check=False)
    os.close(write)
    assert (done.returncode, done.stderr) == (1, "")


def test_the_demo(tmp_path):
    status, out, err = fellwalk("demo", cwd=tmp_path)
    assert status == 0, err
    assert "Verdict: fit for use." in out
    assert "Saved: demo.fell" in out
    assert (tmp_path / "demo.fell").exists()
    status, out, err = fellwalk("demo", "--folder", tmp_path / "none")
    assert (status, "No such file or directory" in err) == (1, True)
