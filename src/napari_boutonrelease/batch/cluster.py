"""Recordings on the workers of a cluster, through dask.distributed."""

from __future__ import annotations

import logging
import secrets
from collections.abc import Generator, Iterator, Sequence
from contextlib import contextmanager
from importlib import import_module, metadata
from typing import Any

from ..errors import InputError
from .processes import Ending, analyse_apart

_CONNECT_S = 15
_WORKERS_S = 60


@contextmanager
def connected(address: str) -> Iterator[Any]:
    """Connect to a scheduler; its workers must have this program in this version.

    Parameters
    ----------
    address : str
        As the scheduler prints it: `tcp://host:8786`.

    Yields
    ------
    distributed.Client

    Raises
    ------
    InputError
        If dask.distributed is not installed, the scheduler does not answer, no worker comes, or a worker lacks this
        program or has another version.
    """
    distributed = _distributed()
    logger = logging.getLogger("distributed.client")
    level = logger.level
    logger.setLevel(logging.CRITICAL)  # what matters of a lost connection is said as a sentence, not as its traceback
    try:
        with _client(distributed, address) as client:
            _check_workers(client, address)
            yield client
    finally:
        logger.setLevel(level)


@contextmanager
def _client(distributed: Any, address: str) -> Iterator[Any]:
    try:
        client = distributed.Client(address, timeout=_CONNECT_S, set_as_default=False)
    except (OSError, ValueError, TypeError) as error:
        raise InputError(
            f"No scheduler answers at {address}; check the address that dask scheduler printed, as tcp://host:8786."
        ) from error
    try:
        yield client
    finally:
        client.close()


def analyse_on_cluster(jobs: Sequence[tuple[int, dict[str, Any]]], *, client: Any) -> Generator[Ending, None, None]:
    """Analyse recordings on the cluster's workers, each in a process of its own there.

    Parameters
    ----------
    jobs : sequence of (int, dict)
        Index of each recording and what `Recording.job` says of it. Workers must see the same files.
    client : distributed.Client
        Connection to the scheduler, which gives the recordings of a worker that dies to others.

    Yields
    ------
    Ending
        One a job, as they end. Closing the iterator takes back those that have not begun.
    """
    run = secrets.token_hex(4)
    indices = {}
    for index, job in jobs:
        future = client.submit(analyse_apart, index, job, key=f"boutonrelease-{run}-{index}", pure=False)
        indices[future] = index
    try:
        for future in _distributed().as_completed(list(indices), loop=client.loop):
            if future.status == "finished":
                yield future.result()
            else:
                yield Ending(index=indices[future], status="failed", failure=_reason(future))
            future.release()
    finally:
        client.cancel([future for future in indices if not future.done()])


def _reason(future: Any) -> str:
    if future.status == "cancelled":
        return "The cluster lost it: the connection to the scheduler ended."
    error = future.exception()
    if type(error).__name__ == "KilledWorker":
        return "Every worker that began it died; most often memory ran out: give workers more, or fewer threads each."
    return f"{type(error).__name__}: {error}".rstrip(": ")


def _check_workers(client: Any, address: str) -> None:
    try:
        client.wait_for_workers(1, timeout=_WORKERS_S)
    except TimeoutError as error:
        raise InputError(f"The scheduler at {address} has no worker; start some with dask worker {address}.") from error
    here = _version()
    for worker, found in client.run(_version, on_error="return").items():
        if isinstance(found, BaseException):
            raise InputError(
                f"The worker {worker} cannot use this program ({found}); install napari-boutonrelease {here} "
                "where workers run."
            )
        if found != here:
            raise InputError(
                f"The worker {worker} has version {found} of this program, not {here}; install the same there."
            )


def _version() -> str:
    return metadata.version("napari-boutonrelease")


def _distributed() -> Any:
    try:
        return import_module("distributed")
    except ImportError as error:
        raise InputError(
            'A scheduler needs dask.distributed: install it with pip install "napari-boutonrelease[batch]".'
        ) from error
