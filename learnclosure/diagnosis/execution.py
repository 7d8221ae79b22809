"""Who sums the chunks of a run: this process, others on this machine, or a cluster."""

from __future__ import annotations

import pickle
from collections.abc import Callable, Iterator
from concurrent.futures import Future, ProcessPoolExecutor
from concurrent.futures.process import BrokenProcessPool
from contextlib import ExitStack
from dataclasses import dataclass
from functools import lru_cache
from multiprocessing import get_context
from typing import Any

from learnclosure.diagnosis.checkpoints import Checkpoint
from learnclosure.diagnosis.eddies import Accumulation, Chunk
from learnclosure.diagnosis.moment_sums import MomentState
from learnclosure.errors import DiagnosisError, InputError

PATIENCE = 20.0
"""Seconds a cluster gets to answer."""
ATTEMPTS = 3
"""Times a chunk is given out before its process is taken to die of it."""


@dataclass(frozen=True)
class Execution:
    """How a run is carried out; its result does not depend on it.

    Attributes
    ----------
    workers : int
        Processes on this machine.
    cluster : str or None
        Address of a dask scheduler, in place of processes on this machine.
    checkpoint : Checkpoint or None
        Where to keep what is done.
    """

    workers: int = 1
    cluster: str | None = None
    checkpoint: Checkpoint | None = None


@lru_cache(maxsize=1)
def _unpacked(packed: bytes) -> Accumulation:
    """Open an ensemble once in a process that sums several of its chunks."""
    accumulation: Accumulation = pickle.loads(packed)
    return accumulation


def run_chunk(packed: bytes, chunk: Chunk) -> MomentState:
    """Sum one chunk in another process.

    Parameters
    ----------
    packed : bytes
        A pickled Accumulation.
    chunk : Chunk

    Returns
    -------
    MomentState
    """
    return _unpacked(packed).run(Chunk(*chunk))


def merged_chunks(
    accumulation: Accumulation,
    execution: Execution,
    progress: Callable[[float], None] | None = None,
) -> MomentState:
    """Sum all chunks and merge them in their order.

    Parameters
    ----------
    accumulation : Accumulation
    execution : Execution
    progress : callable, optional
        Called with the share done.

    Returns
    -------
    MomentState

    Raises
    ------
    DiagnosisError
        If a process keeps dying, or values are missing where none may be.
    InputError
        If there is no cluster at the address.
    """
    chunks = accumulation.chunks()
    checkpoint = execution.checkpoint
    done, state = (0, MomentState({})) if checkpoint is None else checkpoint.load()

    def report(share: float) -> None:
        if progress is not None:
            progress((done + share) / len(chunks))

    if execution.cluster is not None:
        results = _on_cluster(accumulation, chunks[done:], execution.cluster)
    elif min(execution.workers, len(chunks) - done) > 1:
        results = _in_processes(accumulation, chunks[done:], execution.workers)
    else:
        results = (accumulation.run(chunk, report) for chunk in chunks[done:])
    for result in results:
        state = state.merge(result)
        done += 1
        report(0.0)
        if checkpoint is not None:
            checkpoint.save(done, state)
    return state


def _in_processes(
    accumulation: Accumulation, chunks: list[Chunk], workers: int
) -> Iterator[MomentState]:
    """Yield the sums of chunks in order, made in processes that are replaced if they die."""
    packed = pickle.dumps(accumulation)
    with ExitStack() as stack:
        futures: dict[int, Future[MomentState]] = {}
        attempts, number = 0, 0
        pool = _pool(workers, stack)
        while number < len(chunks):
            try:
                for ahead in range(number, min(number + 2 * workers, len(chunks))):
                    if ahead not in futures:
                        futures[ahead] = pool.submit(run_chunk, packed, chunks[ahead])
                result = futures[number].result()
            except BrokenProcessPool:
                attempts += 1
                if attempts == ATTEMPTS:
                    raise DiagnosisError(
                        "a process that sums moments died again and again",
                        where=f"region '{accumulation.source.name}'",
                        found=f"{attempts} deaths at chunk number {number}",
                        remedy="look for a lack of memory; give fewer workers",
                    ) from None
                # What was finished stays; what died with the pool is given out again.
                futures = {key: one for key, one in futures.items() if _is_whole(one)}
                pool = _pool(workers, stack)
                continue
            del futures[number]
            attempts = 0
            number += 1
            yield result


def _pool(workers: int, stack: ExitStack) -> ProcessPoolExecutor:
    context = get_context("forkserver")
    # Libraries are loaded once, in the server all workers are forked from.
    context.set_forkserver_preload([__name__])
    pool = ProcessPoolExecutor(workers, mp_context=context)
    stack.callback(pool.shutdown, wait=False, cancel_futures=True)
    return pool


def _is_whole(future: Future[MomentState]) -> bool:
    return future.done() and not future.cancelled() and future.exception() is None


def _on_cluster(
    accumulation: Accumulation, chunks: list[Chunk], address: str
) -> Iterator[MomentState]:
    """Yield the sums of chunks in order, made by the workers of a dask cluster."""
    client = _connected(address)
    packed = pickle.dumps(accumulation)
    with client:
        futures: list[Any] = client.map(
            run_chunk, [packed] * len(chunks), [tuple(chunk) for chunk in chunks], pure=False,
            retries=ATTEMPTS - 1,
        )  # fmt: skip
        for number in range(len(futures)):
            result: MomentState = futures[number].result()
            # Released here, so that the cluster forgets it.
            futures[number] = None
            yield result


def _connected(address: str) -> Any:
    try:
        from distributed import Client
    except ImportError:
        raise InputError(
            "a cluster needs the package 'distributed'",
            where="--cluster",
            remedy="install learnclosure[cluster], or use --workers",
        ) from None
    try:
        return Client(address, timeout=PATIENCE)
    except (OSError, ValueError) as error:
        raise InputError(
            "there is no dask scheduler at the address",
            where="--cluster",
            found=f"{address} ({type(error).__name__})",
            expected="an address such as tcp://host:8786",
            remedy="start one with 'dask scheduler', or use --workers",
        ) from None
