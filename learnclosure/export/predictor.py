"""Running a bundle: on arrays, and on files of mean fields."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt

from learnclosure.closures.points import checked_inputs
from learnclosure.errors import BundleError, InputError, RoleError
from learnclosure.export.gate import Contents, load_bundle
from learnclosure.export.layout import GRAPH_FILE, MANIFEST_FILE, SINGLE_FILE, digest
from learnclosure.export.mean_fields import read_mean_fields, write_predictions
from learnclosure.export.runtime import open_session, run_session
from learnclosure.features.inputs import compute_inputs
from learnclosure.quantities import INPUTS

FloatArray = npt.NDArray[np.float64]


class Predictor:
    """A closure ready to run, from a bundle that passed the gate.

    Parameters
    ----------
    contents : Contents
    single : bool, optional
        Whether to run the variant in single precision.

    Attributes
    ----------
    manifest : dict
        What the bundle says of itself.
    inputs, outputs : tuple of str
        Names of physical inputs and of outputs, in order.
    """

    def __init__(self, contents: Contents, *, single: bool = False) -> None:
        graph = contents.model.graph
        self.manifest = contents.manifest
        self.manifest_digest = digest(contents.files[MANIFEST_FILE])
        self.inputs = tuple(value.name for value in graph.input)
        self.outputs = tuple(value.name for value in graph.output)
        self._session = open_session(contents.files[SINGLE_FILE if single else GRAPH_FILE])

    @property
    def uses_energy(self) -> bool:
        """Whether a host must give eddy kinetic energy."""
        return any(INPUTS[name].energy for name in self.inputs)

    def __call__(self, inputs: Mapping[str, npt.ArrayLike]) -> dict[str, FloatArray]:
        """Predict transport tensors, half-widths and trust.

        Parameters
        ----------
        inputs : mapping of str to array-like
            Every name in ``inputs``, in SI units, all of one shape, without land.

        Returns
        -------
        dict of str to ndarray
            Every name in ``outputs``, of the same shape.

        Raises
        ------
        InputError
            If an input is missing, has another shape or holds values that are not finite.
        """
        arrays = {
            name: np.asarray(inputs[name], dtype=np.float64)
            for name in self.inputs
            if name in inputs
        }
        shape = next(iter(arrays.values())).shape if arrays else ()
        for name, values in arrays.items():
            if values.shape != shape:
                raise InputError(
                    "a closure input has the wrong shape",
                    where=name,
                    found=values.shape,
                    expected=shape,
                    remedy="give all inputs on the same points",
                )
        flat = checked_inputs(
            {name: values.ravel() for name, values in arrays.items()}, self.inputs
        )
        found = run_session(self._session, flat, self.outputs)
        return {name: values.reshape(shape) for name, values in found.items()}


def load_predictor(
    folder: str | Path, *, single: bool = False, signers: str | Path | None = None
) -> Predictor:
    """Load a bundle that passes the gate.

    Parameters
    ----------
    folder : str or Path
        Folder or archive.
    single : bool, optional
        Whether to run the variant in single precision, whose tolerance the manifest states.
    signers : str or Path, optional
        File of allowed signers; if given, the bundle must be signed by one of them.

    Returns
    -------
    Predictor

    Raises
    ------
    BundleError
        If the path is not a bundle, a check failed, or there is no such variant.
    """
    contents = load_bundle(folder, signers=signers)
    if single and SINGLE_FILE not in contents.files:
        raise BundleError(
            "has no variant in single precision",
            where=folder,
            remedy="run it in double precision",
        )
    return Predictor(contents, single=single)


def predict_file(
    bundle: str | Path,
    source: str | Path,
    target: str | Path,
    *,
    single: bool = False,
    signers: str | Path | None = None,
) -> None:
    """Apply a bundle to a file of mean fields.

    Parameters
    ----------
    bundle : str or Path
        Folder or archive of the bundle.
    source : str or Path
        NetCDF file with the variables of ``quantities.MEAN_STATE`` in SI units, such as
        a ``statistics.nc``, and a global attribute ``periodic`` that names the periodic
        axes.
    target : str or Path
        NetCDF file to write: tensor, half-widths and trust on the grid of the source,
        missing on land.
    single, signers
        As for ``load_predictor``.

    Raises
    ------
    BundleError
        If the bundle cannot be used.
    SourceError
        If the source cannot be read.
    RoleError, UnitError
        If a mean field is missing, has other dimensions or other units.
    OutputError
        If the target cannot be written.
    """
    predictor = load_predictor(bundle, single=single, signers=signers)
    fields = read_mean_fields(Path(source), energy=predictor.uses_energy)
    mask = fields.state.geometry.mask
    if not mask.any():
        raise RoleError(
            "there is no sea",
            where=f"{source}: wet_share",
            found="no value above zero",
            remedy="give the share of each cell that is sea",
        )
    inputs = compute_inputs(fields.state)
    found = predictor({name: inputs[name][mask] for name in predictor.inputs})
    outputs: dict[str, FloatArray] = {}
    for name, values in found.items():
        outputs[name] = np.full(mask.shape, np.nan)
        outputs[name][mask] = values
    write_predictions(Path(target), fields, outputs, _attributes(predictor))


def _attributes(predictor: Predictor) -> dict[str, Any]:
    manifest = predictor.manifest
    return {
        "title": f"eddy transport tensor predicted by {manifest['name']} {manifest['version']}",
        "source": f"{manifest['name']} {manifest['version']}",
        "family": manifest["family"],
        "licence": manifest["licence"],
        "manifest_sha256": predictor.manifest_digest,
        "tensor_convention": str(manifest["conventions"].get("tensor", "")),
    }
