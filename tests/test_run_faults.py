"""Real faults: workers and drivers killed, a full disk, a clock that jumps, one record for two runs. In every case the
draws and per-draw facts, once finished, equal the undisturbed run's, and no finished block is lost."""

import multiprocessing
import os
import shutil
import signal
import subprocess
import sys
import time
from concurrent.futures import ProcessPoolExecutor, ThreadPoolExecutor
from pathlib import Path

import numpy as np
import pytest
import run_models
from test_executors import assert_same
from test_signals import MODELS, command, finished, wait_for

import fellwalk as fw
from fellwalk.driver import Driver
from fellwalk.errors import RecordInUseError, WorkerError
from fellwalk.record import Record

loky = pytest.importorskip("loky")
OPTIONS = {"settle": 100, "keep": 300, "chains": 4, "seed": 9, "path": fw.Jittered(6)}
TESTS = Path(__file__).parent


@pytest.fixture(scope="module")
def expected():
    return fw.run(run_models.python_density(), **OPTIONS, executor="here")


@pytest.fixture
def small_blocks(monkeypatch):
    monkeypatch.setattr(Driver, "_most", lambda self, chain: 25)


def arm(folder, *harms):
    """Harm comes to whoever evaluates next."""
    for harm in harms:
        (folder / harm).touch()
    (folder / "armed").touch()


def arm_at(folder, phase, count, harm, monkeypatch):
    """Arm the harm when some chain has finished `count` transitions of the phase."""
    write = Driver._write

    def writing(self):
        write(self)
        if not (folder / "armed").exists() and any(part.count(phase) >= count for part in self.parts):
            arm(folder, harm)

    monkeypatch.setattr(Driver, "_write", writing)


@pytest.mark.parametrize(("phase", "count"), [("settle", 50), ("keep", 100)])
def test_a_killed_worker_of_our_own_costs_one_block(phase, count, tmp_path, monkeypatch, small_blocks, expected):
    arm_at(tmp_path, phase, count, "kill", monkeypatch)
    record = tmp_path / "a.fell"
    result = fw.run(run_models.harmed_density(tmp_path), **OPTIONS, executor="processes", record=record)
    assert not (tmp_path / "kill").exists()
    assert_same(result, expected)
    assert_same(fw.load(record), expected)


def test_workers_that_always_die_are_given_up(tmp_path):
    with pytest.raises(WorkerError, match=r"a worker process died when it tried this density \(Termin"):
        fw.run(run_models.deadly_density(os.getpid(), 0), **OPTIONS, executor="processes")
    record = tmp_path / "a.fell"
    with pytest.raises(WorkerError, match=r"died 5 times in a row .*; look for a density that crashes") as caught:
        fw.run(run_models.deadly_density(os.getpid(), 1), **OPTIONS, executor="processes", record=record)
    assert f"the record {record} holds every finished block" in caught.value.__notes__[0]


@pytest.mark.filterwarnings("ignore:this executor forks:RuntimeWarning")
@pytest.mark.filterwarnings("ignore:.*use of fork:DeprecationWarning")
@pytest.mark.parametrize("make", [lambda: ProcessPoolExecutor(2, mp_context=multiprocessing.get_context("fork")),
                                  lambda: loky.ProcessPoolExecutor(2)])
@pytest.mark.usefixtures("forks")
def test_a_broken_executor_of_the_user_leaves_all_safe(make, tmp_path, monkeypatch, small_blocks, expected):
    arm_at(tmp_path, "keep", 100, "kill", monkeypatch)
    record = tmp_path / "a.fell"
    density = run_models.harmed_density(tmp_path)
    with make() as executor, pytest.raises(WorkerError, match="a worker of the executor died") as caught:
        fw.run(density, **OPTIONS, executor=executor, record=record)
    assert "the block in hand of chain" in caught.value.__notes__[0]
    safe = caught.value.fellwalk_result
    part = fw.load(record)
    np.testing.assert_array_equal(part.draws, safe.draws)
    with Record.open(record) as file:
        assert sum(count["keep"] for count in file.counts().values()) >= 100
    assert_same(fw.resume(record, density, executor="threads"), expected)


@pytest.mark.filterwarnings("ignore")
def test_a_dask_worker_is_lost_and_replaced(tmp_path, monkeypatch, small_blocks, expected):
    distributed = pytest.importorskip("distributed")
    arm_at(tmp_path, "keep", 50, "kill", monkeypatch)
    record = tmp_path / "a.fell"
    with distributed.LocalCluster(n_workers=2, threads_per_worker=1, dashboard_address=":0") as cluster, \
            distributed.Client(cluster) as client:
        before = set(client.run(os.getpid).values())
        with client.get_executor() as executor:
            result = fw.run(run_models.harmed_density(tmp_path), **OPTIONS, executor=executor, record=record)
        client.wait_for_workers(2, timeout=30)
        after = set(client.run(os.getpid).values())
    assert len(before & after) == 1
    assert_same(result, expected)
    assert_same(fw.load(record), expected)


@pytest.mark.parametrize("phase", ["settle", "keep"])
@pytest.mark.parametrize("kind", ["pool", "dask"])
def test_ctrl_c_on_an_executor_that_was_given(kind, phase, tmp_path, expected):
    """To all processes at once, as a terminal sends it: the workers go on, and the executor works afterwards."""
    if kind == "dask":
        pytest.importorskip("distributed", reason="Dask (extra cluster) is not installed")
    record = tmp_path / "a.fell"
    process = subprocess.Popen([sys.executable, TESTS / "helpers_given_executor.py", kind, record], text=True,
                               stdout=subprocess.PIPE, stderr=subprocess.PIPE, start_new_session=True)
    wait_for(record, phase, process=process)
    os.killpg(process.pid, signal.SIGINT)
    out, err = process.communicate(timeout=30)
    assert process.returncode == 0, err
    assert out.split() == ["Ctrl-C", "False", "still", "works"], err
    assert not fw.load(record).finished
    assert_same(fw.resume(record, run_models.python_density()), expected)


def test_a_killed_driver_and_other_executors(tmp_path, expected):
    record = tmp_path / "a.fell"
    process = command("run", f"{MODELS}:slow_density", "--record", record, "--settle", 100, "--keep", 300,
                      "--chains", 4, "--seed", 9, "--path", "jittered", "--steps", 6, "--executor", "processes")
    wait_for(record, "settle", process=process)
    process.kill()
    process.communicate()
    density = run_models.slow_density()
    stopped = fw.resume(record, density, executor="threads", seconds=0.3)
    assert not stopped.finished
    with ThreadPoolExecutor(3) as executor:
        stopped = fw.resume(record, density, executor=executor, seconds=0.3)
    assert not stopped.finished
    with loky.ProcessPoolExecutor(2) as executor:
        assert_same(fw.resume(record, executor=executor), expected)


def test_two_runs_on_one_record(tmp_path):
    record = tmp_path / "a.fell"
    process = command("run", f"{MODELS}:slow_density", "--record", record, "--settle", 500, "--keep", 3000,
                      "--executor", "here")
    wait_for(record, "settle", process=process)
    before = fw.load(record)
    assert before.ended == "the run was killed or is still going on"
    with pytest.raises(RecordInUseError, match="is writing this record"):
        fw.resume(record, run_models.slow_density())
    status, _, err = finished(command("run", f"{MODELS}:slow_density", "--record", record, "--replace"))
    assert status == 1
    assert f"another run (process {process.pid} on " in err
    process.send_signal(signal.SIGINT)
    assert finished(process)[0] == 130
    with Record.open(record) as file:
        file.verify()


@pytest.fixture
def small_disk(tmp_path):
    """A file system of 400 kB, or None where it cannot be mounted."""
    folder = tmp_path / "disk"
    folder.mkdir()
    mount = ["mount", "-t", "tmpfs", "-o", "size=400k", "none", folder]
    if os.geteuid() or subprocess.run(mount, check=False).returncode:
        yield None
        return
    yield folder
    subprocess.run(["umount", folder], check=True)


@pytest.mark.parametrize("executor", ["threads", "processes"])
def test_a_full_disk(executor, small_disk, tmp_path):
    """A small tmpfs; where none can be mounted, a limit on the size of files."""
    options = {"settle": 50, "keep": 4000, "chains": 2, "seed": 3, "path": fw.Jittered(6)}
    expected = fw.run(run_models.python_density(), **options, executor="here")
    record = (small_disk or tmp_path) / "a.fell"
    limit = {} if small_disk else {"preexec_fn": limited}
    process = command("run", f"{MODELS}:python_density", "--record", record, "--settle", 50, "--keep", 4000,
                      "--chains", 2, "--seed", 3, "--path", "jittered", "--steps", 6, "--executor", executor, **limit)
    status, _, err = finished(process, 60)
    assert status == 1, err
    assert "could not be written" in err
    assert "is full" in err
    assert "Finished blocks are safe; make room and go on." in err
    kept = fw.load(record).draws
    np.testing.assert_array_equal(kept, expected.draws[:, : kept.shape[1]])
    if small_disk:
        subprocess.run(["mount", "-o", "remount,size=20m", small_disk], check=True)
    assert_same(fw.resume(record), expected)


def limited():
    import resource

    signal.signal(signal.SIGXFSZ, signal.SIG_IGN)
    resource.setrlimit(resource.RLIMIT_FSIZE, (300_000, 300_000))


FAKETIME = next((path for path in Path("/usr/lib").glob("**/faketime/libfaketime.so.1")), None)


@pytest.mark.skipif(FAKETIME is None, reason="libfaketime is not installed")
def test_a_clock_that_jumps(tmp_path, expected):
    """The system clock goes back a year and then on to two years ahead, while the run's own clock runs on."""
    record, stamp = tmp_path / "a.fell", tmp_path / "clock"
    stamp.write_text("+0")
    clock = {"LD_PRELOAD": str(FAKETIME), "FAKETIME_TIMESTAMP_FILE": str(stamp), "FAKETIME_NO_CACHE": "1",
             "FAKETIME_DONT_FAKE_MONOTONIC": "1"}
    process = command("run", f"{MODELS}:busy_density", "--record", record, "--settle", 100, "--keep", 300,
                      "--chains", 4, "--seed", 9, "--path", "jittered", "--steps", 6, "--executor", "here",
                      "--seconds", 60, env={**os.environ, **clock})
    wait_for(record, "settle", process=process)
    stamp.write_text("-365d")
    wait_for(record, "keep", process=process)
    stamp.write_text("+730d")
    status, out, err = finished(process, 60)
    assert status == 0, (out, err)
    assert_same(fw.load(record), expected)
    with Record.open(record) as file:
        ended = file.events()[-1]
    assert int(ended.time[:4]) > time.gmtime().tm_year + 1  # the jump was real


MPI = shutil.which("mpiexec")


@pytest.mark.skipif(MPI is None, reason="MPI is not installed")
def test_two_mpi_ranks(tmp_path, expected):
    pytest.importorskip("mpi4py")
    script = tmp_path / "drive.py"
    script.write_text(f"""
import sys
sys.path.insert(0, {str(TESTS)!r})
if __name__ == "__main__":
    import fellwalk as fw, run_models
    from mpi4py.futures import MPIPoolExecutor
    with MPIPoolExecutor() as executor:
        result = fw.run(run_models.python_density(), settle=100, keep=300, chains=4, seed=9, path=fw.Jittered(6),
                        executor=executor, record={str(tmp_path / "a.fell")!r}, progress="lines")
    assert result.finished
""")
    root = ["--allow-run-as-root"] if os.geteuid() == 0 else []
    done = subprocess.run([MPI, *root, "--oversubscribe", "-n", "2", sys.executable, "-m", "mpi4py.futures", script],
                          capture_output=True, text=True, timeout=60, check=False)
    assert done.returncode == 0, done.stderr
    assert "blocks run on the MPIPoolExecutor given" in done.stderr
    assert_same(fw.load(tmp_path / "a.fell"), expected)
