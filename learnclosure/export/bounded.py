"""Running the trial of a bundle in a process with limits of memory, time and output."""

from __future__ import annotations

import json
import os
import subprocess
import sys
from collections.abc import Mapping
from pathlib import Path
from typing import Any

from learnclosure.export.checks import Check

MEMORY_LIMIT = 1 << 30
"""Bytes of address space; libraries map about a third of it before they do anything."""
CPU_SECONDS = 20
WALL_SECONDS = 60.0
LARGEST_ANSWER = 1 << 16
NEEDED = ("family", "inputs", "bounds", "reference", "single_precision")

# The limits come first, so that they hold while libraries load as well.
_CHILD = """
import resource, sys
for kind, limit in (("AS", {memory}), ("CPU", {seconds}), ("FSIZE", 0), ("CORE", 0)):
    number = getattr(resource, "RLIMIT_" + kind)
    hard = resource.getrlimit(number)[1]
    limit = limit if hard == resource.RLIM_INFINITY else min(limit, hard)
    resource.setrlimit(number, (limit, limit))
from learnclosure.export.trial import main
main()
"""


def run_trial(
    manifest: Mapping[str, Any],
    graph: bytes,
    reference: bytes,
    single: bytes | None = None,
    *,
    memory: int = MEMORY_LIMIT,
    seconds: int = CPU_SECONDS,
) -> list[Check]:
    """Make the trial of a bundle in a child process.

    Parameters
    ----------
    manifest : mapping
    graph, reference : bytes
    single : bytes or None
        As ``trial.trial`` takes them.
    memory : int, optional
        Most bytes of address space of the child.
    seconds : int, optional
        Most processor time of the child, s. It may write no file.

    Returns
    -------
    list of Check
        Those of the trial; a failed one if the child broke a limit or died.
    """
    parts = {"graph": graph, "reference": reference}
    if single is not None:
        parts["single"] = single
    header = {
        "manifest": {name: manifest[name] for name in NEEDED if name in manifest},
        "sizes": {name: len(content) for name, content in parts.items()},
    }
    name = "reference outputs"
    if not sys.executable:
        # Within a host that embeds Python there is no interpreter to start.
        return [Check(name, False, "no Python interpreter to run it in", rule="run-limits")]
    try:
        done = subprocess.run(
            [sys.executable, "-P", "-c", _CHILD.format(memory=memory, seconds=seconds)],
            input=json.dumps(header).encode() + b"\n" + b"".join(parts.values()),
            capture_output=True,
            timeout=WALL_SECONDS,
            env=_environment(),
            check=False,
        )
    except subprocess.TimeoutExpired:
        return [Check(name, False, f"stopped after {WALL_SECONDS:.0f} s", rule="run-limits")]
    if done.returncode == 0 and len(done.stdout) <= LARGEST_ANSWER:
        return [Check(**entry) for entry in json.loads(done.stdout)]
    return [Check(name, False, _cause(done, memory, seconds), rule="run-limits")]


def _cause(done: subprocess.CompletedProcess[bytes], memory: int, seconds: int) -> str:
    if done.returncode < 0:
        used = f"signal {-done.returncode}"
        return f"the run died of {used}; it may take {seconds} s and {memory >> 20} MB"
    last = (done.stderr.decode(errors="replace").strip().splitlines() or ["no message"])[-1]
    return f"the run failed: {last[:200]}"


def _environment() -> dict[str, str]:
    """Return the variables of the child: the same modules, one thread, no usage reports."""
    return os.environ | {
        "PYTHONPATH": os.pathsep.join(entry or str(Path.cwd()) for entry in sys.path),
        "PYTHONDONTWRITEBYTECODE": "1",
        "OPENBLAS_NUM_THREADS": "1",
        "OMP_NUM_THREADS": "1",
        "ORT_DISABLE_TELEMETRY": "1",
    }
