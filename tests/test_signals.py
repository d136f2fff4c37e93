"""Ctrl-C, SIGTERM and kill -9, sent to real processes that run; what they leave is resumed, and the bits are right."""

import os
import signal
import subprocess
import sys
import threading
import time
from pathlib import Path

import numpy as np
import pytest
from run_models import python_density

import fellwalk as fw
from fellwalk.errors import RecordError
from fellwalk.record import Record

MODELS = Path(__file__).with_name("run_models.py")
SETTLE, KEEP = 120, 600


@pytest.fixture(scope="module")
def expected():
    return fw.run(python_density(), settle=SETTLE, keep=KEEP, chains=2, seed=5, path=fw.Jittered(6), executor="here")


def command(*arguments, **more):
    # a session of its own, so that a signal reaches all its processes at once, as from a terminal
    return subprocess.Popen([sys.executable, "-m", "fellwalk", *map(str, arguments)], start_new_session=True,
                            stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True, **more)


def started(record, executor, model="slow_density", **more):
    return command("run", f"{MODELS}:{model}", "--record", record, "--settle", SETTLE, "--keep", KEEP, "--chains", 2,
                   "--seed", 5, "--path", "jittered", "--steps", 6, "--executor", executor, **more)


def wait_for(record, phase, least=1, process=None):
    """Wait until some chain has finished `least` transitions of the phase."""
    end = time.monotonic() + 60
    while time.monotonic() < end:
        try:
            with Record.open(record) as file:
                if any(count[phase] >= least for count in file.counts().values()):
                    return
        except RecordError:
            pass
        assert process is None or process.poll() is None, process.communicate()
        time.sleep(0.02)
    raise AssertionError(f"no {phase} in 60 s")


def finished(process, seconds=30):
    out, err = process.communicate(timeout=seconds)
    assert "Traceback" not in err
    return process.returncode, out, err


def assert_resumed(record, expected, executor="here"):
    # by the quick form of the density, which gives the same numbers
    result = fw.resume(record, python_density(), executor=executor)
    assert result.finished
    np.testing.assert_array_equal(result.draws, expected.draws)
    np.testing.assert_array_equal(result.facts, expected.facts)
    for mine, other in zip(result.settling, expected.settling, strict=True):
        np.testing.assert_array_equal(mine, other)


@pytest.mark.parametrize("executor", ["here", "threads", "processes"])
@pytest.mark.parametrize("phase", ["settle", "keep"])
def test_ctrl_c_ends_at_a_block_edge(executor, phase, tmp_path, expected):
    record = tmp_path / "a.fell"
    process = started(record, executor)
    wait_for(record, phase, process=process)
    os.killpg(process.pid, signal.SIGINT)
    status, out, err = finished(process)
    assert status == 130, (out, err)
    assert "Ctrl-C: stopping at the end of the blocks in hand" in err
    assert "Stopped early: Ctrl-C" in out
    assert f"Next: fellwalk resume {record}" in out
    assert not fw.load(record).finished
    assert fw.load(record).ended == "Ctrl-C"
    assert sorted(path.name for path in tmp_path.iterdir()) == ["a.fell"]
    assert_resumed(record, expected)


def test_sigterm_counts_as_ctrl_c_in_the_command(tmp_path, expected):
    record = tmp_path / "a.fell"
    process = started(record, "threads")
    wait_for(record, "keep", process=process)
    process.terminate()
    status, out, err = finished(process)
    assert status == 143, (out, err)
    assert "Stopped early: SIGTERM" in out
    status, out, err = finished(command("resume", record, "--executor", "threads"))
    assert status == 0, err
    assert "Next: fellwalk" in out
    assert_resumed(record, expected)


@pytest.mark.parametrize("executor", ["here", "threads", "processes"])
def test_a_second_ctrl_c_abandons_what_is_in_hand(executor, tmp_path, expected):
    """The density hangs for 20 s (in threads, which cannot be interrupted in a call: 2 s) when told to."""
    record = tmp_path / "a.fell"
    process = started(record, executor, "hanging_density",
                      env={**os.environ, "HANG": f"{tmp_path}/hang",
                           "HANG_SECONDS": "2" if executor == "threads" else "20"})
    wait_for(record, "settle", process=process)
    (tmp_path / "hang").touch()
    while (tmp_path / "hang").exists():
        assert process.poll() is None
        time.sleep(0.02)
    os.killpg(process.pid, signal.SIGINT)
    time.sleep(0.5)
    assert process.poll() is None
    begun = time.monotonic()
    os.killpg(process.pid, signal.SIGINT)
    status, out, err = finished(process, 15)
    assert status == 130, (out, err)
    assert time.monotonic() - begun < 8
    assert "the blocks finished before are safe" in err
    assert_resumed(record, expected)


@pytest.mark.parametrize("executor", ["here", "threads", "processes"])
def test_killed_at_random_moments(executor, tmp_path, expected):
    """kill -9, six times, 0.05 to 0.8 s after a process has begun or resumed the run."""
    record = tmp_path / "a.fell"
    rng = np.random.default_rng(11)
    process = started(record, executor)
    wait_for(record, "settle", process=process)
    had = {}
    for _ in range(6):
        time.sleep(rng.uniform(0.05, 0.8))
        process.kill()
        process.wait()
        process.stderr.close()
        process.stdout.close()
        with Record.open(record) as file:
            counts = file.counts()
            file.verify()
        assert all(counts[chain][phase] >= count for chain, both in had.items() for phase, count in both.items())
        had = counts
        process = command("resume", record, "--executor", executor)
        time.sleep(1.0)  # to be importing no more
    process.kill()
    process.communicate()
    assert_resumed(record, expected)


def test_worker_processes_end_with_a_killed_driver(tmp_path):
    record = tmp_path / "a.fell"
    process = started(record, "processes")
    wait_for(record, "settle", process=process)
    children = [int(pid) for pid in Path(f"/proc/{process.pid}/task/{process.pid}/children").read_text().split()]
    assert len(children) >= 2
    process.kill()
    process.communicate()
    end = time.monotonic() + 10
    while any(alive(pid) for pid in children) and time.monotonic() < end:
        time.sleep(0.1)
    assert not [pid for pid in children if alive(pid)]


def alive(pid):
    try:
        return Path(f"/proc/{pid}/stat").read_text().rpartition(")")[2].split()[0] != "Z"
    except FileNotFoundError:
        return False


@pytest.mark.usefixtures("forks")
def test_an_ignored_ctrl_c_stays_ignored(tmp_path):
    """As under nohup or in the background of a script."""
    record = tmp_path / "a.fell"
    process = started(record, "here", preexec_fn=lambda: signal.signal(signal.SIGINT, signal.SIG_IGN))
    wait_for(record, "settle", process=process)
    process.send_signal(signal.SIGINT)
    status, out, err = finished(process)
    assert status == 0, (out, err)


def test_handlers_are_given_back_and_other_threads_have_none():
    seen = []

    def look(x):
        seen.append(signal.getsignal(signal.SIGINT))
        return -0.5 * float(x @ x), -x

    density = fw.Density(look, 1, start=[0.1])
    before = signal.getsignal(signal.SIGINT)
    fw.run(density, settle=0, step_size=0.5, keep=5, chains=1, executor="here")
    assert signal.getsignal(signal.SIGINT) is before
    assert {handler is before for handler in seen} == {True, False}  # before the run begins, and in it
    seen.clear()
    thread = threading.Thread(target=fw.run, args=(density,),
                              kwargs={"settle": 0, "step_size": 0.5, "keep": 5, "chains": 1, "executor": "here"})
    thread.start()
    thread.join()
    assert {handler is before for handler in seen} == {True}
