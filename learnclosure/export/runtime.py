"""The one place that loads onnxruntime: no telemetry, one thread, no spinning."""

from __future__ import annotations

import os
from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np
import numpy.typing as npt

# The library reads this when it is loaded; without it some builds open connections.
os.environ["ORT_DISABLE_TELEMETRY"] = "1"

import onnxruntime

FloatArray = npt.NDArray[np.float64]

POINTS_AT_ONCE = 1024
"""Points per call; keeps what a forest gathers for them within the cache."""
QUIET = 3


def open_session(model: bytes) -> Any:
    """Load a graph for running on one thread.

    Parameters
    ----------
    model : bytes
        The graph, already checked.

    Returns
    -------
    onnxruntime.InferenceSession
    """
    options = onnxruntime.SessionOptions()
    options.intra_op_num_threads = 1
    options.inter_op_num_threads = 1
    options.execution_mode = onnxruntime.ExecutionMode.ORT_SEQUENTIAL
    options.log_severity_level = QUIET
    options.add_session_config_entry("session.intra_op.allow_spinning", "0")
    options.add_session_config_entry("session.inter_op.allow_spinning", "0")
    return onnxruntime.InferenceSession(model, options, providers=["CPUExecutionProvider"])


def run_session(
    session: Any, inputs: Mapping[str, FloatArray], outputs: Sequence[str]
) -> dict[str, FloatArray]:
    """Run a graph over points, some hundreds at a time.

    Parameters
    ----------
    session : onnxruntime.InferenceSession
    inputs : mapping of str to ndarray, shape (point,)
        Every input of the graph.
    outputs : sequence of str
        Names of the outputs wanted.

    Returns
    -------
    dict of str to ndarray, shape (point,)
    """
    count = len(next(iter(inputs.values())))
    results = {name: np.empty(count) for name in outputs}
    for start in range(0, count, POINTS_AT_ONCE):
        part = slice(start, start + POINTS_AT_ONCE)
        feed = {
            name: np.ascontiguousarray(values[part], dtype=np.float64)[:, None]
            for name, values in inputs.items()
        }
        for name, values in zip(outputs, session.run(list(outputs), feed), strict=True):
            results[name][part] = values[:, 0]
    return results
