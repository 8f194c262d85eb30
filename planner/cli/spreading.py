"""Where blocks of rehearsals run: here, on this machine's cores, or on a Dask cluster."""

from collections.abc import Callable, Iterable, Iterator
from contextlib import contextmanager
from typing import Any

from planner.errors import InputError

CONNECT_S = 10.0


@contextmanager
def spread_over(jobs: int, cluster: str | None) -> Iterator[Callable[..., Iterable[Any]]]:
    """A function like `map` that runs blocks on `jobs` processes (1: here), or on the cluster at an address.

    Raises:
        InputError: the cluster cannot be reached, or the package for it is not installed.
    """
    if cluster is not None:
        with _cluster(cluster) as spread:
            yield spread
    elif jobs == 1:
        yield map
    else:
        from joblib import Parallel, delayed  # type: ignore[import-untyped]

        def on_cores(function: Callable[[Any], Any], blocks: list[Any]) -> Iterable[Any]:
            found: Iterable[Any] = Parallel(n_jobs=min(jobs, len(blocks)))(delayed(function)(one) for one in blocks)
            return found

        yield on_cores


@contextmanager
def _cluster(address: str) -> Iterator[Callable[..., Iterable[Any]]]:
    try:
        import distributed
    except ImportError as error:
        raise InputError(
            '--cluster needs the package "distributed": install nightfringe[cluster], here and on the workers'
        ) from error
    try:
        connect: Any = distributed.Client
        client = connect(address, timeout=CONNECT_S, set_as_default=False)
    except (OSError, ValueError, TimeoutError) as error:
        raise InputError(
            f'no Dask scheduler answers at "{address}" ({error}); an address looks like "tcp://10.0.0.5:8786"'
        ) from error
    with client:

        def on_cluster(function: Callable[[Any], Any], blocks: list[Any]) -> Iterable[Any]:
            found: Iterable[Any] = client.gather(client.map(function, blocks, pure=False))
            return found

        yield on_cluster
