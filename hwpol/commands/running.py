"""Options and executors that the long commands share."""

from __future__ import annotations

import argparse
import contextlib
import os
from collections.abc import Iterator
from concurrent.futures import Executor
from typing import Any

from hwpol.errors import ConfigError, MissingError


def add_execution(parser: argparse.ArgumentParser) -> None:
    """Add --jobs and --dask."""
    parser.add_argument(
        "--jobs",
        type=int,
        default=0,
        metavar="N",
        help="processes at once (default: the cores of this machine, at most 8)",
    )
    parser.add_argument("--dask", metavar="ADDRESS", help="run on the Dask cluster at this address instead")


def check_jobs(jobs: int) -> int:
    """Return a number of processes; ConfigError where it is none."""
    if jobs < 0:
        raise ConfigError(f"--jobs = {jobs}: expected a number of processes, or 0 for all cores")
    return jobs


@contextlib.contextmanager
def executor_for(options: argparse.Namespace) -> Iterator[Executor | None]:
    """Yield the executor that the options ask for; None for this process alone."""
    if options.dask:
        with _dask(options.dask) as executor:
            yield executor
        return
    jobs = check_jobs(options.jobs) or min(
        len(os.sched_getaffinity(0)) if hasattr(os, "sched_getaffinity") else os.cpu_count() or 1, 8
    )
    if jobs == 1:
        yield None
        return
    from concurrent.futures import ProcessPoolExecutor
    from multiprocessing import get_context

    # Spawned, not forked: the same on every system, and safe beside threads of numerical libraries.
    with ProcessPoolExecutor(jobs, mp_context=get_context("spawn"), initializer=_single_threaded) as executor:
        try:
            yield executor
        except BaseException:
            executor.shutdown(wait=False, cancel_futures=True)
            raise


def _single_threaded() -> None:
    for name in ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS"):
        os.environ.setdefault(name, "1")


@contextlib.contextmanager
def _dask(address: str) -> Iterator[Any]:
    try:
        from distributed import Client
    except ImportError:
        raise MissingError("--dask needs the package distributed: pip install 'hwpol[cluster]'") from None
    try:
        client = Client(address, timeout=20)
    except (OSError, ValueError) as problem:
        raise ConfigError(f"--dask = {address!r}: no scheduler answers there ({problem})") from None
    with client:
        yield client.get_executor(pure=False)
