"""Where blocks of trials run: here, on the cores of this machine, or on a Dask cluster."""

from collections.abc import Callable, Iterator
from contextlib import contextmanager
from importlib import import_module
from typing import TYPE_CHECKING, Any

from planner.errors import InputError

if TYPE_CHECKING:
    from planner.arrays import FloatArray
    from planner.design.forecast.blocks import Block, Spread

ANSWER_S = 10.0  # how long a scheduler may take to answer


@contextmanager
def spread_over(jobs: int, dask: str | None) -> "Iterator[Spread]":
    """A `Spread` over `jobs` processes of this machine, or over the cluster whose scheduler listens at `dask`.

    Raises:
        InputError: a worker process ended, Dask is not installed, nobody answers at the address, or the cluster's
            workers cannot run the blocks.
    """
    if dask is not None:
        with _cluster(dask) as spread:
            yield spread
    elif jobs > 1:
        with _processes(jobs) as spread:
            yield spread
    else:
        yield map


@contextmanager
def _processes(jobs: int) -> "Iterator[Spread]":
    from concurrent.futures import ProcessPoolExecutor
    from concurrent.futures.process import BrokenProcessPool
    from multiprocessing import get_context

    # fresh processes: a fork of a process with threads, as numpy's own, may hang
    with ProcessPoolExecutor(max_workers=jobs, mp_context=get_context("spawn")) as pool:
        try:
            yield pool.map
        except BrokenProcessPool as error:
            raise InputError(
                f"one of the {jobs} worker processes ended before its trials did, perhaps for lack of memory: try "
                "fewer --jobs"
            ) from error


@contextmanager
def _cluster(address: str) -> "Iterator[Spread]":
    try:
        distributed = import_module("distributed")
    except ImportError as error:
        raise InputError(
            "--dask needs Dask's distributed scheduler, which is not installed: pip install 'nightfringe[cluster]', or "
            "use --jobs for the cores of this machine"
        ) from error
    try:
        client: Any = distributed.Client(address, timeout=ANSWER_S, set_as_default=False)
    except (OSError, TimeoutError, ValueError) as error:
        raise InputError(
            f'no Dask scheduler answers at "{address}" ({error}): start one with `dask scheduler`, and give its '
            'address, such as "tcp://127.0.0.1:8786"'
        ) from error

    def spread(function: "Callable[[Block], FloatArray]", blocks: "list[Block]") -> "list[FloatArray]":
        try:
            return list(client.gather(client.map(function, blocks, pure=False)))
        except (ImportError, AttributeError, distributed.KilledWorker) as error:
            raise InputError(
                f'the workers of "{address}" cannot run the rehearsals ({type(error).__name__}: {error}): install this '
                "version of Nightfringe, and of Python, on every one of them"
            ) from error

    with client:
        yield spread
