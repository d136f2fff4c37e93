"""2,000 blocks with a fault in every twentieth: workers and drivers killed, exceptions, Ctrl-C, all real."""

import json
import subprocess
import sys
from pathlib import Path

import helpers_fault_run
import run_models
from test_executors import assert_same

import fellwalk as fw
from fellwalk.record import Record

TESTS = Path(__file__).parent


def test_two_thousand_blocks_with_a_fault_in_every_twentieth(tmp_path):
    density = run_models.python_density()
    expected = fw.run(density, **helpers_fault_run.OPTIONS, executor="here")
    record = tmp_path / "a.fell"
    done = subprocess.run([sys.executable, TESTS / "helpers_fault_run.py", record, str(density.gradients)],
                          capture_output=True, text=True, timeout=280, check=False)
    assert done.returncode == 0, done.stderr
    told = json.loads(done.stdout)
    assert sum(told["met"].values()) >= 95
    assert set(told["met"]) == set(helpers_fault_run.KINDS)
    with Record.open(record) as file:
        file.verify()
        blocks = sum(-(-count // helpers_fault_run.BLOCK) for both in file.counts().values() for count in both.values())
    assert blocks >= 2000
    assert_same(fw.load(record), expected)
