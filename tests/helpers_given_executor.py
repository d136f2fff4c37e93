"""A run on an executor of the user's, as a process that the tests interrupt.

    python helpers_given_executor.py pool|dask RECORD

Prints how the run ended, whether it was finished, and what the executor does afterwards.
"""

import contextlib
import sys
from concurrent.futures import ProcessPoolExecutor

import run_models

import fellwalk as fw


@contextlib.contextmanager
def dask():
    """An executor on a Dask cluster of two worker processes."""
    import distributed

    with distributed.LocalCluster(n_workers=2, threads_per_worker=1, dashboard_address=":0") as cluster, \
            distributed.Client(cluster) as client, client.get_executor() as executor:
        yield executor


def main(kind, record):
    with dask() if kind == "dask" else ProcessPoolExecutor(2) as executor:
        result = fw.run(run_models.slow_density(0.001), settle=100, keep=300, chains=4, seed=9, path=fw.Jittered(6),
                        executor=executor, record=record)
        print(result.ended, result.finished)
        print(executor.submit("{} {}".format, "still", "works").result())


if __name__ == "__main__":
    main(*sys.argv[1:])
