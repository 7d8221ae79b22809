"""learnclosure turns ensembles of eddy-rich ocean simulations into verified eddy closures.

The public names, in the order of the work:

reading      ``read_study``, ``Study``, ``open_ensemble``, ``Ensemble``, ``inspect_ensemble``
diagnosing   ``diagnose``, ``write_statistics``
features     ``MeanState``, ``compute_inputs``, ``point_features``
training     ``Table``, ``table_from_statistics``, ``Closure``, ``select_closure``
evidence     ``evaluate``, ``write_report``
shipping     ``build_graph``, ``export_bundle``, ``verify_bundle``, ``load_predictor``,
             ``predict_file``
simulating   ``simulate_regions``, ``simulate_spinning``, ``simulate_plane_wave``
all at once  ``run_study``
errors       ``LearnclosureError``, ``InputError``, ``CheckFailedError``

Names are loaded when first used, so that a receiver needs only the libraries of the
part it runs.
"""

from __future__ import annotations

from importlib import import_module
from typing import TYPE_CHECKING, Any

__version__ = "0.1.0"

if TYPE_CHECKING:
    from learnclosure.closures.closure import Closure
    from learnclosure.closures.table import Table, table_from_statistics
    from learnclosure.diagnosis.artefact import write_statistics
    from learnclosure.diagnosis.diagnose import diagnose
    from learnclosure.ensemble.reader import Ensemble, open_ensemble
    from learnclosure.ensemble.readiness import inspect_ensemble
    from learnclosure.errors import CheckFailedError, InputError, LearnclosureError
    from learnclosure.export.bundle import export_bundle
    from learnclosure.export.compare import compare_bundles
    from learnclosure.export.gate import verify_bundle
    from learnclosure.export.graph import build_graph
    from learnclosure.export.predictor import load_predictor, predict_file
    from learnclosure.features.inputs import compute_inputs
    from learnclosure.features.mean_state import MeanState
    from learnclosure.features.point_features import point_features
    from learnclosure.report.page import write_report
    from learnclosure.simulate.channel import simulate_regions
    from learnclosure.simulate.exact import simulate_plane_wave, simulate_spinning
    from learnclosure.study import Study, read_study
    from learnclosure.validation.evaluation import evaluate
    from learnclosure.validation.selection import select_closure
    from learnclosure.workflow import run_study

_HOMES = {
    "CheckFailedError": "errors",
    "Closure": "closures.closure",
    "Ensemble": "ensemble.reader",
    "InputError": "errors",
    "LearnclosureError": "errors",
    "MeanState": "features.mean_state",
    "Study": "study",
    "Table": "closures.table",
    "build_graph": "export.graph",
    "compute_inputs": "features.inputs",
    "diagnose": "diagnosis.diagnose",
    "evaluate": "validation.evaluation",
    "compare_bundles": "export.compare",
    "export_bundle": "export.bundle",
    "inspect_ensemble": "ensemble.readiness",
    "load_predictor": "export.predictor",
    "open_ensemble": "ensemble.reader",
    "point_features": "features.point_features",
    "predict_file": "export.predictor",
    "read_study": "study",
    "run_study": "workflow",
    "select_closure": "validation.selection",
    "simulate_plane_wave": "simulate.exact",
    "simulate_regions": "simulate.channel",
    "simulate_spinning": "simulate.exact",
    "table_from_statistics": "closures.table",
    "verify_bundle": "export.gate",
    "write_report": "report.page",
    "write_statistics": "diagnosis.artefact",
}

__all__ = [
    "CheckFailedError",
    "Closure",
    "Ensemble",
    "InputError",
    "LearnclosureError",
    "MeanState",
    "Study",
    "Table",
    "__version__",
    "build_graph",
    "compare_bundles",
    "compute_inputs",
    "diagnose",
    "evaluate",
    "export_bundle",
    "inspect_ensemble",
    "load_predictor",
    "open_ensemble",
    "point_features",
    "predict_file",
    "read_study",
    "run_study",
    "select_closure",
    "simulate_plane_wave",
    "simulate_regions",
    "simulate_spinning",
    "table_from_statistics",
    "verify_bundle",
    "write_report",
    "write_statistics",
]


def __getattr__(name: str) -> Any:
    home = _HOMES.get(name)
    if home is None:
        raise AttributeError(f"module 'learnclosure' has no attribute {name!r}")
    return getattr(import_module(f"learnclosure.{home}"), name)


def __dir__() -> list[str]:
    return sorted([*globals(), *__all__])
