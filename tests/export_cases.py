"""Small fitted closures and graphs for testing what is shipped."""

from __future__ import annotations

from functools import cache

import numpy as np
from onnx.reference import ReferenceEvaluator

from closures_cases import invented_regions
from learnclosure.closures.closure import Closure
from learnclosure.closures.intervals import HalfWidths
from learnclosure.closures.table import Table, table_from_statistics
from learnclosure.export.bundle import export_bundle
from learnclosure.export.runtime import open_session
from learnclosure.study import ClosureSettings, ExportSettings


@cache
def table(family: str) -> Table:
    """Return every fourth point of the invented regions."""
    whole = table_from_statistics(invented_regions(family))
    return whole.select(np.arange(0, len(whole), 4))


@cache
def closure(family: str, regressor: str, target: str = "linear") -> Closure:
    """Return a fitted closure with half-widths."""
    fitted = Closure(family, regressor, target, ClosureSettings()).fit(table(family))
    multipliers = np.array([0.5, 0.2, 0.3, 0.6])
    return fitted.set_half_widths(HalfWidths(multipliers, {"amber": multipliers}, 0.1, 50.0))


def export(folder, family="local-energy", regressor="ridge", **changes):
    """Write a bundle and return its folder."""
    points = {name: values[::11] for name, values in table(family).inputs.items()}
    arguments = {
        "provenance": {"regions": [{"name": "amber"}], "seed": 0},
        "evaluation": {"families": {family: {"chosen": {"regressor": regressor}}}},
        "reference_inputs": points,
        "settings": ExportSettings(),
        "render_card": lambda manifest: f"# {manifest['name']}\n",
    }
    export_bundle(closure(family, regressor), folder, **(arguments | changes))
    return folder


def evaluate_twice(model, feed):
    """Return the outputs of a model by onnxruntime and by the reference evaluator."""
    session = open_session(model.SerializeToString())
    return session.run(None, feed), ReferenceEvaluator(model).run(None, feed)
