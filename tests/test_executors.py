"""The same draws on every kind of executor; what is chosen when none is given; what cannot be sent; what is said."""

import io
import multiprocessing
import os
import re
import signal
import sys
import threading
import time
from concurrent.futures import Executor, Future, ProcessPoolExecutor, ThreadPoolExecutor

import numpy as np
import pytest
import run_models
from run_models import START, Boom

import fellwalk as fw
from fellwalk import pools
from fellwalk.errors import ArgumentError, RemoteError, WorkerError
from fellwalk.progress import Lines
from fellwalk.record import Record
from fellwalk.work import Check

loky = pytest.importorskip("loky")

OPTIONS = {"settle": 60, "keep": 40, "chains": 5, "seed": 8, "path": fw.Jittered(6)}


def pool(method):
    return ProcessPoolExecutor(2, mp_context=multiprocessing.get_context(method))


class Bare(Executor):
    """The least that is an executor: one thread, of which it says nothing."""

    def __init__(self):
        self.inner = ThreadPoolExecutor(1)
        self.flying = self.most = 0

    def submit(self, function, /, *args, **kwargs) -> Future:
        self.flying += 1
        self.most = max(self.most, self.flying)
        future = self.inner.submit(function, *args, **kwargs)
        future.add_done_callback(self._landed)
        return future

    def _landed(self, future):
        self.flying -= 1

    def shutdown(self, wait=True, *, cancel_futures=False):
        self.inner.shutdown(wait=wait, cancel_futures=cancel_futures)


EXECUTORS = {
    "fork": lambda: pool("fork"),
    "forkserver": lambda: pool("forkserver"),
    "spawn": lambda: pool("spawn"),
    "loky": lambda: loky.ProcessPoolExecutor(2),
    "threads": lambda: ThreadPoolExecutor(2),
    "bare": Bare,
}


@pytest.fixture(scope="module")
def expected():
    return fw.run(run_models.python_density(), **OPTIONS, executor="here")


@pytest.fixture(scope="module")
def compiled():
    return fw.run(run_models.compiled_density(), **OPTIONS, executor="here")


def assert_same(result, expected):
    assert result.finished
    np.testing.assert_array_equal(result.draws, expected.draws)
    np.testing.assert_array_equal(result.facts, expected.facts)
    for mine, other in zip(result.settling, expected.settling, strict=True):
        np.testing.assert_array_equal(mine, other)


@pytest.mark.filterwarnings("ignore:this executor forks:RuntimeWarning")
@pytest.mark.filterwarnings("ignore:.*use of fork:DeprecationWarning")
@pytest.mark.parametrize("kind", EXECUTORS)
def test_the_same_draws_on_every_executor(kind, expected, compiled, request):
    """A lambda-like closure and a compiled density made by a factory, one after the other on one executor; and the
    executor can be used afterwards."""
    if kind == "fork":
        request.getfixturevalue("forks")
    with EXECUTORS[kind]() as executor:
        assert_same(fw.run(run_models.slow_density(0.0), **OPTIONS, executor=executor), expected)
        assert_same(fw.run(run_models.compiled_from_factory(), **OPTIONS, executor=executor), compiled)
        assert executor.submit(len, "abc").result() == 3


@pytest.mark.parametrize("kind", ["here", "threads", "processes"])
def test_the_same_draws_on_our_own(kind, expected, compiled):
    assert_same(fw.run(run_models.python_density(), **OPTIONS, executor=kind), expected)
    assert_same(fw.run(run_models.compiled_from_factory(), **OPTIONS, executor=kind), compiled)


@pytest.fixture(scope="module")
def cluster():
    distributed = pytest.importorskip("distributed")
    with distributed.LocalCluster(n_workers=2, threads_per_worker=1, dashboard_address=":0") as cluster, \
            distributed.Client(cluster) as client:
        yield client


@pytest.mark.filterwarnings("ignore")
def test_the_same_draws_on_dask(cluster, expected, compiled):
    with cluster.get_executor() as executor:
        assert_same(fw.run(run_models.python_density(), **OPTIONS, executor=executor), expected)
        assert_same(fw.run(run_models.compiled_from_factory(), **OPTIONS, executor=executor), compiled)


@pytest.mark.filterwarnings("ignore")
def test_dask_workers_in_this_process(expected):
    distributed = pytest.importorskip("distributed")
    with distributed.Client(processes=False, n_workers=1, threads_per_worker=2, dashboard_address=":0") as client:
        before = signal.getsignal(signal.SIGINT)
        assert_same(fw.run(run_models.python_density(), **OPTIONS, executor=client.get_executor()), expected)
        assert signal.getsignal(signal.SIGINT) is before


@pytest.mark.filterwarnings("ignore")
def test_dask_merges_no_equal_blocks(cluster, tmp_path):
    """Two runs with equal arguments: all work is done twice."""
    calls = []
    for _ in range(2):
        density = run_models.counted_density(tmp_path / "calls")
        with cluster.get_executor() as executor:
            fw.run(density, **OPTIONS, executor=executor)
        calls.append(os.path.getsize(tmp_path / "calls"))
    # apart from looking at the density, which a worker does once
    assert abs(calls[1] - 2 * calls[0]) <= 4


@pytest.mark.filterwarnings("ignore:this executor forks:RuntimeWarning")
@pytest.mark.filterwarnings("ignore:.*use of fork:DeprecationWarning")
@pytest.mark.usefixtures("forks")
def test_a_large_density_is_sent_only_to_workers_that_lack_it(expected):
    data = np.zeros(300_000)
    density = fw.Density(lambda x: (data[0] + run_models.curved(x)[0], run_models.curved(x)[1]), 3, start=START)
    sizes = []

    class Weighing(ProcessPoolExecutor):
        def submit(self, function, parcel, job):
            sizes.append(len(parcel.packed or b""))
            return super().submit(function, parcel, job)

    with Weighing(2, mp_context=multiprocessing.get_context("fork")) as executor:
        assert_same(fw.run(density, **OPTIONS, executor=executor), expected)
    assert max(sizes) > 2_400_000
    assert len(sizes) >= 12
    assert 1 <= np.count_nonzero(sizes) <= 5  # the trial, and at most once for each block in flight


def test_few_blocks_are_in_flight_however_many_chains(expected):
    with ThreadPoolExecutor(2) as two:
        bare = Bare()
        bare.inner, bare._max_workers = two, 2
        result = fw.run(run_models.python_density(), **{**OPTIONS, "chains": 64}, executor=bare)
    assert result.draws.shape == (64, 40, 3)
    np.testing.assert_array_equal(result.draws[:5, :, :][0], expected.draws[0])
    assert bare.most == 4


# ---- what is chosen, and said ---------------------------------------------------------------------------------------


def why(density, chains=4, transitions=4000, given=None):
    with pools.Workers(given, density, chains, transitions, Check.of(density, START)) as workers:
        return workers.kind, workers.why


def test_the_choice_when_nothing_is_given(monkeypatch):
    monkeypatch.setattr(pools, "cores", lambda: 2)
    assert why(run_models.compiled_density()) == (
        "threads", "blocks run on 2 threads: the density is compiled, so threads can share this process")
    kind, sentence = why(run_models.python_density())
    assert kind == "here"
    assert "microseconds an evaluation, worker processes would not pay" in sentence
    slow = run_models.slow_density(0.002)
    kind, sentence = why(slow)
    assert kind == "processes"
    assert re.fullmatch(r"blocks run in 2 worker processes: at [\d.]+ ms an evaluation they pay", sentence)
    assert why(slow, transitions=100)[0] == "here"
    assert why(slow, chains=1) == ("here", "blocks run in this process, one at a time: there is only one chain")
    lock = threading.Lock()
    unsendable = fw.Density(lambda x: (time.sleep(0.002), lock, run_models.curved(x))[2], 3)
    kind, sentence = why(unsendable)
    assert kind == "here"
    assert sentence.endswith(": the density cannot be pickled, so it cannot be sent to worker processes")
    monkeypatch.setattr(pools, "cores", lambda: 1)
    assert why(slow)[1] == "blocks run in this process, one at a time: there is only one core"


def test_the_choice_is_said_in_one_line(capsys):
    fw.run(run_models.python_density(), **OPTIONS, progress="lines")
    lines = capsys.readouterr().err.splitlines()
    assert sum("blocks run" in line for line in lines) == 1
    fw.run(run_models.python_density(), **OPTIONS)
    assert capsys.readouterr().err == ""


@pytest.mark.parametrize("given", ["process", 3, True, Executor])
def test_something_else_is_refused(given):
    with pytest.raises(ArgumentError, match="executor must be a concurrent"):
        fw.run(run_models.python_density(), **OPTIONS, executor=given)


def test_an_executor_that_was_shut_down():
    for executor in (ThreadPoolExecutor(1), loky.ProcessPoolExecutor(1)):
        executor.shutdown()
        with pytest.raises(WorkerError, match="shutdown"):
            fw.run(run_models.python_density(), **OPTIONS, executor=executor)


# ---- what cannot be sent, or is another there -----------------------------------------------------------------------


@pytest.mark.parametrize("what", ["lock", "compiled"])
def test_what_cannot_be_sent_is_refused_before_anything_runs(what, tmp_path):
    lock = threading.Lock()
    density = (run_models.compiled_density() if what == "compiled"
               else fw.Density(lambda x: (lock, run_models.curved(x))[1], 3, start=START))
    record = tmp_path / "a.fell"
    record.write_bytes(b"precious")
    with loky.ProcessPoolExecutor(2) as executor:
        for given in (executor, "processes"):
            with pytest.raises(ArgumentError, match=r"cannot be sent to other processes .*Density\.factory"):
                fw.run(density, **OPTIONS, executor=given, record=record, replace=True)
        assert not executor._processes
    assert record.read_bytes() == b"precious"


def test_factory_says_what_is_wrong():
    with pytest.raises(ArgumentError, match="needs a function that makes a"):
        fw.Density.factory(3)
    with pytest.raises(ArgumentError, match=r"must return .*; it returned tuple"):
        fw.Density.factory(run_models.curved, START)
    density = fw.Density.factory(run_models.python_density)
    assert density.model == "run_models:python_density"
    assert fw.Density.factory(run_models.slow_density, 0.0).model is None


def test_a_worker_that_rounds_differently_is_reported(tmp_path, capsys):
    record = tmp_path / "a.fell"
    density = run_models.elsewhere_density(os.getpid(), "rounding")
    with loky.ProcessPoolExecutor(1) as executor:
        fw.run(density, **OPTIONS, executor=executor, record=record, progress="lines")
    said = [line for line in capsys.readouterr().err.splitlines() if "rounds this density differently" in line]
    assert len(said) == 1
    with Record.open(record) as file:
        events = [event for event in file.events() if event.kind == "rounding"]
    assert len(events) == 1
    assert "Draws will not be the same bits" in events[0].details["remark"]


@pytest.mark.parametrize(("how", "sentence"), [("other", "does not calculate this density: its log density is"),
                                               ("raise", "cannot be used in worker process .* Boom: no data here")])
def test_a_worker_with_another_density_is_refused(how, sentence, tmp_path):
    record = tmp_path / "a.fell"
    with loky.ProcessPoolExecutor(1) as executor, pytest.raises(WorkerError, match=sentence):
        fw.run(run_models.elsewhere_density(os.getpid(), how), **OPTIONS, executor=executor, record=record)
    assert not record.exists()


@pytest.mark.filterwarnings("ignore:.*use of fork:DeprecationWarning")
@pytest.mark.usefixtures("forks")
def test_forking_beside_threads_warns_and_beside_jax_is_refused(monkeypatch):
    event = threading.Event()
    thread = threading.Thread(target=event.wait, name="somebody's thread")
    thread.start()
    try:
        with pool("fork") as executor, pytest.warns(RuntimeWarning, match=r"threads run .*somebody's thread"):
            fw.run(run_models.python_density(), **OPTIONS, executor=executor)
    finally:
        event.set()
        thread.join()
    monkeypatch.setitem(sys.modules, "jax", sys)
    with pool("fork") as executor, pytest.raises(ArgumentError, match="after JAX was imported"):
        fw.run(run_models.python_density(), **OPTIONS, executor=executor)
    with pool("spawn") as executor:
        fw.run(run_models.python_density(), **OPTIONS, executor=executor)


@pytest.mark.parametrize("ours", [True, False])
def test_blas_has_one_thread_in_workers(ours, tmp_path):
    pytest.importorskip("threadpoolctl")
    density = run_models.blas_density(tmp_path)
    with loky.ProcessPoolExecutor(2) as given:
        fw.run(density, **{**OPTIONS, "settle": 10, "keep": 5}, executor="processes" if ours else given)
    told = {int(path.name): path.read_text() for path in tmp_path.iterdir()}
    workers = [threads for pid, threads in told.items() if pid != os.getpid()]
    assert workers
    assert {number for threads in workers for number in threads.split()} == {"1"}


# ---- exceptions of the density --------------------------------------------------------------------------------------


def test_an_exception_comes_home_with_its_class_and_the_traceback_there():
    with loky.ProcessPoolExecutor(2) as executor, pytest.raises(Boom, match="in the middle") as caught:
        fw.run(run_models.raising_density(40, "boom"), **OPTIONS, executor=executor)
    assert "raised in chain" in caught.value.__notes__[0]
    assert "in raising" in str(caught.value.__cause__)
    assert caught.value.fellwalk_result.plan["seed"] == 8


def test_an_exception_that_cannot_come_home_is_told():
    with loky.ProcessPoolExecutor(2) as executor, pytest.raises(RemoteError, match="Unpicklable: this and that"):
        fw.run(run_models.raising_density(40, "unpicklable"), **OPTIONS, executor=executor)


@pytest.mark.parametrize("executor", ["here", "threads"])
def test_one_chain_of_four_raises(executor, tmp_path):
    """The others' draws stay, the message names chain and transition, the exception is the same object, and the run
    resumed after the repair has the right bits."""
    expected = fw.run(run_models.python_density(), **{**OPTIONS, "chains": 4}, executor="here")
    bad = expected.draws[2, 25, 0]  # chain 3 alone comes to this very point, as its 26th draw
    error = Boom("at that point")

    def broken(x):
        if x[0] == bad:
            raise error
        return run_models.curved(x)

    record = tmp_path / "a.fell"
    density = fw.Density(broken, 3, start=START)
    with pytest.raises(Boom) as caught:
        fw.run(density, **{**OPTIONS, "chains": 4}, executor=executor, record=record)
    assert caught.value is error
    note, = error.__notes__
    assert note.startswith("fellwalk: raised in chain 3, keeping draws, at transition ")
    number = int(note.removeprefix("fellwalk: raised in chain 3, keeping draws, at transition ").split(";")[0])
    assert number <= 26
    with Record.open(record) as file:
        counts = {chain: count["keep"] for chain, count in file.counts().items()}
        assert counts[2] == number - 1
        for chain, count in counts.items():
            np.testing.assert_array_equal(file.chain_draws(chain), expected.draws[chain, :count])
    assert str(record) in note
    assert_same(fw.resume(record, run_models.python_density(), executor=executor), expected)


def test_lines_go_on_when_the_log_has_gone():
    out = io.StringIO()
    lines = Lines(10, [0], out)
    out.close()
    lines.say("nobody hears this")
