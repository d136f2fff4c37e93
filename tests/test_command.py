"""The command for machines and with files of settings, and the pages it writes; `test_cli.py` has the rest."""

import json
import shlex
import sys
from pathlib import Path

import numpy as np
import pytest
from command_line import inside
from run_models import START, python_density

import fellwalk as fw

MODELS = Path(__file__).with_name("run_models.py")
MODEL = f"{MODELS}:python_density"
SHORT = ["--chains", "2", "--settle", "60", "--keep", "40", "--seed", "5", "--executor", "here", "--progress", "off"]


@pytest.fixture
def record(tmp_path, capsys):
    path = tmp_path / "a walk.fell"
    assert inside(capsys, "run", MODEL, "--record", path, *SHORT)[0] == 0
    return path


def strict(text):
    """JSON without the NaN and Infinity that Python would let pass."""
    return json.loads(text, parse_constant=lambda word: pytest.fail(f"{word} is not JSON"))


# ---- for machines ---------------------------------------------------------------------------------------------------


def test_run_resume_and_report_as_json(record, tmp_path, capsys):
    status, out, err = inside(capsys, "run", MODEL, "--record", tmp_path / "b.fell", *SHORT, "--json")
    assert (status, err) == (0, "")
    found = strict(out)
    result = fw.load(tmp_path / "b.fell")
    assert (found["finished"], found["chains"], found["draws_per_chain"]) == (True, 2, 40)
    assert found["judgement"]["verdict"]["kind"] == result.judgement.verdict.kind
    assert [p["name"] for p in found["judgement"]["parameters"]] == result.names
    assert found["judgement"]["parameters"][1]["estimate"] == result.judgement.estimate[1]
    assert any(p["needs_attention"] for p in found["judgement"]["parameters"])
    assert found["run"]["seed"] == 5
    assert found["run"]["versions"]["fellwalk"] == fw.__version__
    assert found["next"].startswith(f"fellwalk resume {tmp_path}/b.fell --keep ")
    status, out, _ = inside(capsys, "resume", record, "--keep", 50, "--progress", "off", "--json")
    assert (status, strict(out)["draws_per_chain"]) == (0, 50)
    assert shlex.split(strict(out)["next"])[2] == str(record)
    status, out, err = inside(capsys, "report", record, "--json")
    assert (status, err) == (0, "")
    assert strict(out)["draws_per_chain"] == 50
    assert list(tmp_path.glob("*.html")) == []
    page = tmp_path / "p.html"
    status, out, _ = inside(capsys, "report", record, "--json", "-o", page)
    assert (status, strict(out)["page"], page.exists()) == (0, str(page), True)


def test_too_few_draws_have_no_judgement_in_json(tmp_path, capsys):
    status, out, _ = inside(capsys, "run", MODEL, "--record", tmp_path / "a.fell", *SHORT, "--keep", 2, "--json")
    assert (status, strict(out)["judgement"]) == (0, None)


def test_an_audit_as_json(capsys):
    status, out, _ = inside(capsys, "audit", MODEL, "--json")
    found = strict(out)
    assert (status, found["ok"], found["dimension"]) == (0, True, 3)
    assert {"weight", "about", "text", "where"} == set(found["findings"][0]) if found["findings"] else True
    assert found["seconds"]["gradient"] > 0


def test_errors_with_json_are_sentences_too(tmp_path, capsys):
    status, out, err = inside(capsys, "report", tmp_path / "none.fell", "--json")
    assert (status, out) == (1, "")
    assert err.startswith("fellwalk: ")


# ---- settings from a file -------------------------------------------------------------------------------------------


def settings(tmp_path, text):
    path = tmp_path / "run.toml"
    path.write_text(text, encoding="utf-8")
    return path


def test_settings_from_a_file_are_those_of_options(record, tmp_path, capsys):
    path = settings(tmp_path, f"""
        model = {json.dumps(MODEL)}
        record = {json.dumps(str(tmp_path / "b.fell"))}
        chains = 2
        settle = 60
        keep = 40
        seed = 5
        executor = "here"
        progress = "off"
        motion = "lagrangian"
        step-size = 0.25
        halvings = 3
        no_audit = true
        start = [0.3, -0.2, 1.1]
    """)
    status, _, err = inside(capsys, "run", "--settings", path, "--motion", "leapfrog", "--halvings", 0)
    assert (status, err) == (0, "")
    result = fw.load(tmp_path / "b.fell")
    expected = fw.run(python_density(), START, settle=60, keep=40, chains=2, seed=5, step_size=0.25, executor="here",
                      progress="off")
    np.testing.assert_array_equal(result.draws, expected.draws)
    assert result.settings["motion"] == {"name": "leapfrog", "halvings": 0}
    notes = result.plan["notes"]
    assert notes["settings"]["start"] == [0.3, -0.2, 1.1]
    assert notes["settings"]["step_size"] == 0.25
    assert notes["settings"]["no_audit"] is True
    assert notes["settings file"] == str(path)
    assert notes["command"] == f"fellwalk run --settings {shlex.quote(str(path))} --motion leapfrog --halvings 0"
    page = result.report()
    assert "Note: settings" in page
    assert "step_size = 0.25" in page
    assert fw.load(record).plan["notes"]["command"].startswith("fellwalk run ")


def test_one_start_a_chain_and_a_number_for_settle(tmp_path, capsys):
    path = settings(tmp_path, 'settle = "auto"\nchains = 2\nkeep = 3\nstart = [[0, 0, 1], [1.5, 0, 2]]\n'
                              'progress = "off"\nexecutor = "here"')
    status, _, err = inside(capsys, "run", MODEL, "--record", tmp_path / "a.fell", "--settings", path)
    assert (status, err) == (0, "")
    assert fw.load(tmp_path / "a.fell").settings["settle"] == "auto"


@pytest.mark.parametrize(("text", "sentence"), [
    ("kep = 3", "there is no setting 'kep'; did you mean keep?"),
    ("colour = 'red'", "there is no setting 'colour'; there are acceptance, bend"),
    ("keep = 2.5", "keep: it must be a whole number, not '2.5'"),
    ("keep = 0", "keep: it must be at least 1, not 0"),
    ("keep = true", "keep must be a number or a text, not True"),
    ("bend = 'much'", "bend: it must be a number, not 'much'"),
    ("motion = 'fast'", "motion must be one of 'isokinetic', 'lagrangian', 'leapfrog', 'auto', not 'fast'"),
    ("motion = 3", "motion must be a text, not 3"),
    ("no-audit = 1", "no-audit must be true or false, not 1"),
    ("start = ['a', 'b']", "start must be a list of numbers, or of one such list a chain"),
    ("start = [[1, 2, 3], [1, 2]]", "start must be a list of numbers, or of one such list a chain"),
    ("step-size = 0.1\nstep_size = 0.2", "'step_size' is given twice, with a dash and with an underline"),
    ("debug = true", "there is no setting 'debug'"),
    ("[run]\nkeep = 3", "there is no setting 'run'"),
    ("keep = ", "this is not TOML: "),
])
def test_settings_that_are_wrong_get_a_sentence(text, sentence, tmp_path, capsys):
    path = settings(tmp_path, text)
    status, out, err = inside(capsys, "run", MODEL, "--record", tmp_path / "a.fell", "--settings", path)
    assert (status, out) == (1, "")
    assert err.startswith(f"fellwalk: {path}: ")
    assert sentence in err
    assert len(err.splitlines()) == 1
    assert not (tmp_path / "a.fell").exists()


def test_settings_that_are_not_there(tmp_path, capsys):
    status, _, err = inside(capsys, "run", MODEL, "--record", tmp_path / "a.fell", "--settings", tmp_path / "no.toml")
    assert (status, "no.toml: the settings cannot be read (No such file or directory)" in err) == (1, True)
    (tmp_path / "bytes.toml").write_bytes(b"keep = \xff")
    bad = tmp_path / "bytes.toml"
    status, _, err = inside(capsys, "run", MODEL, "--record", tmp_path / "a.fell", "--settings", bad)
    assert (status, "bytes.toml: this is not TOML" in err) == (1, True)


def test_what_neither_file_nor_options_give_is_wrong_usage(tmp_path, capsys):
    path = settings(tmp_path, "keep = 3")
    for arguments, missing in (([], "MODEL, --record"), ([MODEL], "--record"), (["--record", "a"], "MODEL")):
        status, out, err = inside(capsys, "run", *arguments, "--settings", path)
        assert (status, out) == (2, "")
        assert f"error: the following arguments are required: {missing}\n" in err


# ---- pages ----------------------------------------------------------------------------------------------------------


def test_a_report_is_a_page_beside_the_record(record, tmp_path, capsys):
    status, out, err = inside(capsys, "report", record)
    page = tmp_path / "a walk.html"
    assert (status, err) == (0, "")
    assert out.endswith(f"\nPage: {page}\n")
    text = page.read_text(encoding="utf-8")
    assert "Slice of the log density" in text  # the record names its model
    assert inside(capsys, "report", record)[0] == 0  # again
    page.write_text("a letter")
    status, out, err = inside(capsys, "report", record)
    assert (status, "it is not a page of fellwalk" in err) == (1, True)
    assert "Verdict:" in out
    assert page.read_text() == "a letter"
    assert inside(capsys, "report", record, "-o", page)[0] == 0
    assert "Slice of the log density" in page.read_text(encoding="utf-8")


def test_pages_with_and_without_the_model(record, tmp_path, capsys):
    page = tmp_path / "p.html"
    assert inside(capsys, "report", record, "-o", page, "--no-model")[0] == 0
    assert "the model was left out, as asked" in page.read_text(encoding="utf-8")
    assert inside(capsys, "report", record, "-o", page, "--model", MODEL)[0] == 0
    assert "Slice of the log density" in page.read_text(encoding="utf-8")
    status, _, err = inside(capsys, "report", record, "-o", page, "--model", "none.py:density")
    assert (status, "there is no file none.py" in err) == (1, True)
    assert inside(capsys, "report", record, "-o", page, "--model", f"{MODELS}:other_data")[0] == 0
    assert "it is another model, or other data" in page.read_text(encoding="utf-8")


def test_no_page_when_none_is_wanted(record, tmp_path, capsys):
    status, out, _ = inside(capsys, "report", record, "--no-page")
    assert (status, "Page:" in out, list(tmp_path.glob("*.html"))) == (0, False, [])
    status, _, err = inside(capsys, "report", record, "--no-page", "-o", "p.html")
    assert (status, "contradict each other" in err) == (1, True)
    status, _, err = inside(capsys, "report", record, "-o", tmp_path / "none" / "p.html")
    assert (status, "could not be written" in err) == (1, True)


def test_raw_numbers_on_demand(record, capsys):
    judgement = fw.load(record).judgement
    assert judgement.raw is not judgement
    for options, shown in (((), judgement), (("--raw",), judgement.raw)):
        status, out, _ = inside(capsys, "report", record, "--no-page", *options)
        assert (status, str(shown) in out) == (0, True)


def test_without_the_extra_the_table_is_printed_all_the_same(record, tmp_path, capsys, monkeypatch):
    for name in [name for name in sys.modules if name.startswith(("fellwalk.report", "fellwalk.figure"))]:
        monkeypatch.delitem(sys.modules, name)
    monkeypatch.delattr(fw, "report", raising=False)
    monkeypatch.setitem(sys.modules, "jinja2", None)
    status, out, err = inside(capsys, "report", record)
    assert status == 0
    assert "Verdict:" in out
    assert "no page: a page needs matplotlib and Jinja2" in err
    status, _, err = inside(capsys, "report", record, "-o", tmp_path / "p.html")
    assert (status, "pip install 'fellwalk[report]'" in err) == (1, True)
