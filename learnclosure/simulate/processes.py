"""Running regions side by side, one process each, with progress and a clean way out."""

from __future__ import annotations

import signal
import sys
from collections.abc import Callable, Mapping
from multiprocessing import get_context, parent_process
from multiprocessing.connection import Connection, wait
from multiprocessing.process import BaseProcess
from typing import Any

from learnclosure.errors import LearnclosureError, SimulationError

Progress = Callable[[str, float, str], None]
Job = Callable[..., object]


class _DeadError(SimulationError):
    """A process ended without a word."""


PATIENCE = 10.0
"""Seconds a stopped process gets to remove what it was writing."""


def _leave(number: int, _frame: object) -> None:
    """Turn a request to stop into an ordinary exit, so that partial files are removed."""
    sys.exit(128 + number)


def _serve(name: str, job: Job, channel: Connection) -> None:
    """Run one job in a child process and send what happens to the parent."""
    # The parent answers the keyboard for all its children.
    signal.signal(signal.SIGINT, signal.SIG_IGN)
    signal.signal(signal.SIGTERM, _leave)
    parent = parent_process()

    def progress(region: str, share: float, note: str) -> None:
        if parent is not None and not parent.is_alive():
            sys.exit(1)
        channel.send(("progress", (region, share, note)))

    try:
        job(progress=progress)
    except LearnclosureError as error:
        channel.send(("failed", error))
    else:
        channel.send(("done", name))


def _stop(running: Mapping[str, BaseProcess]) -> None:
    for process in running.values():
        process.terminate()
    for process in running.values():
        process.join(PATIENCE)
        if process.is_alive():
            process.kill()
            process.join()


def _collect(name: str, channel: Connection, progress: Progress) -> bool:
    """Take one message of a child; say whether it is done."""
    try:
        kind, content = channel.recv()
    except EOFError:
        raise _DeadError(
            "its process ended without a word",
            where=name,
            remedy="look for a message above and for a lack of memory, then start again",
        ) from None
    if kind == "failed":
        raise content
    if kind == "progress":
        progress(*content)
    return bool(kind == "done")


def run_in_processes(
    jobs: Mapping[str, Job], workers: int, progress: Progress, *, attempts: int = 1
) -> None:
    """Run jobs, some at a time, each in a process of its own.

    Parameters
    ----------
    jobs : mapping of str to callable
        Picklable; each is called with the keyword ``progress``.
    workers : int
        Jobs run at once. With one worker or one job nothing is started: they run here.
    progress : callable
        Called here with what the jobs report.
    attempts : int, optional
        How often a job is started whose process dies.

    Raises
    ------
    LearnclosureError
        What a job raised; the others are then stopped.
    SimulationError
        If a process died.
    """
    if workers == 1 or len(jobs) <= 1:
        for job in jobs.values():
            job(progress=progress)
        return
    context = get_context("spawn")
    waiting = dict(jobs)
    running: dict[str, BaseProcess] = {}
    channels: dict[Any, str] = {}
    left = dict.fromkeys(jobs, attempts)
    try:
        while waiting or running:
            while waiting and len(running) < workers:
                name = next(iter(waiting))
                left[name] -= 1
                ours, theirs = context.Pipe(duplex=False)
                process = context.Process(
                    target=_serve, args=(name, waiting.pop(name), theirs), daemon=True
                )
                process.start()
                theirs.close()
                running[name], channels[ours] = process, name
            for channel in wait(list(channels)):
                name = channels[channel]
                try:
                    done = _collect(name, channel, progress)  # type: ignore[arg-type]
                except _DeadError:
                    if not left[name]:
                        raise
                    waiting[name] = jobs[name]
                    done = True
                if done:
                    running.pop(name).join()
                    channels.pop(channel)
    finally:
        _stop(running)
