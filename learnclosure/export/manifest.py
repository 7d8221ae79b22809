"""The manifest: what a bundle says of itself, for people and for hosts."""

from __future__ import annotations

import json
from collections.abc import Mapping
from typing import TYPE_CHECKING, Any

from learnclosure import __version__
from learnclosure.export.graph import TENSOR_CONVENTION
from learnclosure.export.layout import CARD_FILE, GRAPH_FILE, REFERENCE_FILE, SCHEMA, SUMS_FILE
from learnclosure.export.operators import BATCH, IR_VERSION, ML_DOMAIN, ML_OPSET, OPSET
from learnclosure.export.reference import AGREEMENT_LIMIT
from learnclosure.quantities import FEATURES, INPUTS, OUTPUTS, Quantity

if TYPE_CHECKING:
    import numpy as np
    import numpy.typing as npt

    from learnclosure.closures.closure import Closure
    from learnclosure.study import ExportSettings

CONVENTIONS = {
    "tensor": TENSOR_CONVENTION,
    "axes": "components along the model's own axes; y is x turned anticlockwise by a right angle",
    "layers": "from the top down; layer_index 0 is the uppermost",
    "units": "SI in and out",
    "land": "leave land out; where an input is not finite the graph gives the floor, no half-width "
    "(1e30) and trust 0",
}


def describe(quantity: Quantity) -> dict[str, Any]:
    """Return what a manifest says of a quantity.

    Parameters
    ----------
    quantity : Quantity

    Returns
    -------
    dict
        JSON-safe.
    """
    return {
        "name": quantity.name,
        "symbol": quantity.symbol,
        "units": quantity.units,
        "long_name": quantity.long_name,
        "standard_name": quantity.standard_name,
        "parity": quantity.parity,
        "locality": quantity.locality,
        "needs_eddy_energy": quantity.energy,
        "validity": quantity.validity,
        "source": quantity.source,
        "dtype": "float64",
    }


def _describe_column(quantity: Quantity) -> dict[str, Any]:
    return describe(quantity) | {"shape": [BATCH, 1]}


def make_manifest(
    closure: Closure,
    settings: ExportSettings,
    *,
    provenance: Mapping[str, Any],
    evaluation: Mapping[str, Any],
    reference_inputs: Mapping[str, npt.NDArray[np.float64]],
    points: int,
    agreement: Mapping[str, float],
    single: Mapping[str, Any] | None = None,
) -> dict[str, Any]:
    """Put together the manifest of a bundle.

    Parameters
    ----------
    closure : Closure
    settings : ExportSettings
    provenance : mapping
        What the closure was trained from and with.
    evaluation : mapping
        Contents of ``evaluation.json``.
    reference_inputs : mapping of str to ndarray, shape (point,)
        Points of the study's regions, without added tails.
    points : int
        Points in ``reference.nc``.
    agreement : mapping of str to float
        Largest difference found between evaluations, over the spread of the output.
    single : mapping, optional
        What is said of the variant in single precision, if one ships.

    Returns
    -------
    dict
        JSON-safe.
    """
    ranges = closure.guard_.ranges()
    half_widths = closure.half_widths_
    return {
        "schema": SCHEMA,
        "name": f"learnclosure-{closure.family}",
        "version": settings.version,
        "licence": settings.licence,
        "citation": settings.citation or default_citation(closure.family, settings.version),
        "family": closure.family,
        "regressor": closure.regressor,
        "target": closure.target,
        "conventions": dict(CONVENTIONS),
        "graph": {
            "file": GRAPH_FILE,
            "ir_version": IR_VERSION,
            "opset": OPSET,
            "ml_domain": ML_DOMAIN,
            "ml_opset": ML_OPSET,
            "dtype": "float64",
        },
        "inputs": [
            _describe_column(INPUTS[name])
            | {
                "range_in_regions": [
                    float(reference_inputs[name].min()),
                    float(reference_inputs[name].max()),
                ]
            }
            for name in closure.inputs_
        ],
        "outputs": [_describe_column(row) for row in OUTPUTS.values()],
        "features": [
            describe(FEATURES[name]) | {"trained_range": list(ranges[name])}
            for name in closure.feature_names_
        ],
        "bounds": {
            "floor": closure.settings.floor,
            "cap": closure.settings.cap,
            "units": "m2 s-1",
            "meaning": "eigenvalues of the symmetric part lie between floor and cap; the "
            "antisymmetric part is no larger than cap",
        },
        "fallback": {
            "name": closure.fallback_.name,
            "parameters": closure.fallback_.parameters(),
            "meaning": "the isotropic tensor blended in as trust falls from 1 to 0",
        },
        "half_width": None if half_widths is None else half_widths.as_record(),
        "training": dict(provenance),
        "evaluation": family_evaluation(closure.family, evaluation),
        "reference": {
            "file": REFERENCE_FILE,
            "points": points,
            "region_points": len(next(iter(reference_inputs.values()))),
            "limit": AGREEMENT_LIMIT,
        },
        "single_precision": None if single is None else dict(single),
        "agreement": dict(agreement),
        "card": CARD_FILE,
    }


def default_citation(family: str, version: str) -> str:
    """Return how to cite a bundle whose author has not said how.

    Parameters
    ----------
    family, version : str

    Returns
    -------
    str
    """
    return (
        f"learnclosure-{family} {version}, a mesoscale eddy closure made with learnclosure "
        f"{__version__}; cite it by this name, its version and the SHA-256 of its {SUMS_FILE}, "
        "and the ensembles it was trained on"
    )


def family_evaluation(family: str, evaluation: Mapping[str, Any]) -> dict[str, Any]:
    """Return the part of an evaluation that concerns one family.

    Parameters
    ----------
    family : str
    evaluation : mapping
        Contents of ``evaluation.json``.

    Returns
    -------
    dict
        Its own record as ``closure``, baselines, ceiling, audit and what was scored.
    """
    return {
        "study": evaluation.get("study", {}),
        "tracers_scored": evaluation.get("tracers_scored"),
        "closure": evaluation.get("families", {}).get(family, {}),
        "baselines": evaluation.get("baselines", {}),
        "ceiling": evaluation.get("ceiling", {}),
        "audit": evaluation.get("audit", {}).get(family, []),
    }


def manifest_text(manifest: Mapping[str, Any]) -> bytes:
    """Return the contents of ``manifest.json``.

    Parameters
    ----------
    manifest : mapping

    Returns
    -------
    bytes
        UTF-8 JSON with sorted keys and no values beyond the JSON standard.
    """
    text = json.dumps(manifest, indent=1, sort_keys=True, allow_nan=False, ensure_ascii=False)
    return (text + "\n").encode()
