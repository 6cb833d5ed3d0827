"""An existing engine of many machines as an executor."""

from __future__ import annotations

from collections.abc import Iterator
from concurrent.futures import Executor
from contextlib import contextmanager

from moire.errors import BadRequest


@contextmanager
def engine(address: str, *, wait_s: float = 20.0) -> Iterator[tuple[Executor, int]]:
    """A dask.distributed scheduler as an executor, and how many files to hand out at a time.

    Parameters
    ----------
    address : str
        As ``tcp://host:8786``. Its workers must see the scans under the same paths and have
        this version of moire; one thread for each worker, so that a file that hangs can be ended.
    wait_s : float
        Seconds to wait for the scheduler and its first worker.

    Raises
    ------
    BadRequest
        If the package is not installed or the engine does not answer.
    """
    try:
        from distributed import Client
    except ImportError as error:
        raise BadRequest("--cluster needs an extra package: pip install 'moire-scan[cluster]'") from error
    try:
        client = Client(address, timeout=wait_s, set_as_default=False)
    except (OSError, TimeoutError, ValueError) as error:
        raise BadRequest(
            f"no engine answers at {address}: start its scheduler, or check the address"
        ) from error
    with client:
        try:
            client.wait_for_workers(1, timeout=wait_s)
        except TimeoutError as error:
            raise BadRequest(f"the engine at {address} has no workers: start some") from error
        # Enough in hand to keep every worker busy between two answers.
        yield client.get_executor(pure=False), max(32, 4 * sum(client.nthreads().values()))
