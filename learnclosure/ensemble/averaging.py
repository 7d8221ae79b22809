"""The averages a study asks for: on levels or layers, weighted by thickness or not."""

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt

from learnclosure.ensemble.density_layers import DensityLayers
from learnclosure.ensemble.protocol import EnsembleSource
from learnclosure.errors import SourceError, StudyError
from learnclosure.study import DiagnosisSettings

FloatArray = npt.NDArray[np.float64]

TIMES_LOOKED_AT = 8
"""Times, spread over the record, from which the share of outcropping layers is told."""


class ThicknessWeighted:
    """Members on layers of varying thickness, to be averaged with it as weight.

    Parameters
    ----------
    source : EnsembleSource
        An open ensemble whose fields hold ``thickness``.

    Attributes
    ----------
    weighted : bool
        True.
    valid_share : ndarray, shape (layer, y, x)
        Share of members and of the times looked at in which a layer is there.

    Raises
    ------
    StudyError
        If the ensemble has no thickness of its own, or stands on levels.
    SourceError
        If a thickness is negative, missing or zero everywhere.
    """

    weighted = True

    def __init__(self, source: EnsembleSource) -> None:
        if source.grid.vertical != "layers":
            raise StudyError(
                "thickness-weighted averages need layers",
                where=f"region '{source.name}': [diagnosis] averaging",
                found="an ensemble on levels",
                expected="vertical = 'layers', or levels remapped by [diagnosis.layers]",
                remedy="add [diagnosis.layers], or correct 'vertical' under [ensemble.grid]",
            )
        self._source = source
        self.name, self.split, self.grid = source.name, source.split, source.grid
        self.member_labels, self.times = source.member_labels, source.times
        self.tracers, self.withheld_tracers = source.tracers, source.withheld_tracers
        self.active, self.left_out_gradients = source.active, source.left_out_gradients
        self.units, self.has_buoyancy = source.units, source.has_buoyancy
        self.valid_share = self._look()
        self.assumptions = (*source.assumptions, *self._notes())

    @property
    def input_sha256(self) -> str | None:
        """SHA-256 over names and contents of all files, where there are files."""
        return getattr(self._source, "input_sha256", None)

    @property
    def attributes(self) -> dict[str, Any]:
        """What an artefact records of the averages beyond what every one does."""
        return {}

    def fields(self, time: int) -> dict[str, FloatArray]:
        """Read all members of one time and check their thickness.

        Parameters
        ----------
        time : int
            Number of the time.

        Returns
        -------
        dict of str to ndarray, shape (member, layer, y, x)
            What the source has; ``thickness`` in m is zero where a layer outcrops.
        """
        fields = self._source.fields(time)
        if "thickness" not in fields:
            raise StudyError(
                "thickness-weighted averages need the thickness of each member",
                where=f"region '{self.name}': [diagnosis] averaging",
                found=", ".join(fields),
                expected="a thickness that varies in time",
                remedy="name 'thickness' under [ensemble.variables], or choose 'reynolds'",
            )
        mask = self.grid.geometry.mask
        negative = int(np.count_nonzero(~(fields["thickness"] >= 0.0) & mask))
        if negative:
            raise SourceError(
                "layers have negative or missing thickness",
                where=f"region '{self.name}': thickness",
                found=f"{negative} cells at time number {time}",
                expected="thicknesses in m, zero where a layer outcrops",
                remedy="correct the variable named by 'thickness'",
            )
        return {**fields, "thickness": np.where(mask, fields["thickness"], 0.0)}

    def _look(self) -> FloatArray:
        last = len(self.times) - 1
        chosen = np.unique(np.linspace(0, last, min(TIMES_LOOKED_AT, last + 1)).round().astype(int))
        present = np.zeros(self.grid.shape)
        for time in chosen:
            present += (self.fields(int(time))["thickness"] > 0.0).sum(axis=0)
        share = present / (len(chosen) * len(self.member_labels))
        vanished = int(np.count_nonzero(self.grid.geometry.mask & (share == 0.0)))
        if vanished:
            raise SourceError(
                "layers have no thickness in any member",
                where=f"region '{self.name}': thickness",
                found=f"{vanished} cells",
                expected="some thickness wherever the tracers are sea",
                remedy="mask these cells in the tracers too",
            )
        return share

    def _notes(self) -> list[str]:
        mask = self.grid.geometry.mask
        left_out = self.left_out_gradients.get("thickness")
        notes = []
        if left_out is not None and np.any(left_out):
            notes.append("weights lack the uniform gradient that the thickness leaves out")
        return notes + [
            f"layer {layer} outcrops: at the times looked at it is there in "
            f"{float(share[wet].mean()):.1%} of members and times on average and in "
            f"{float(share[wet].min()):.1%} at least"
            for layer, (wet, share) in enumerate(zip(mask, self.valid_share, strict=True), start=1)
            if wet.any() and float(share[wet].min()) < 1.0
        ]


def averaged(
    source: EnsembleSource, settings: DiagnosisSettings
) -> EnsembleSource | DensityLayers | ThicknessWeighted:
    """See an ensemble as the study wants it averaged.

    Parameters
    ----------
    source : EnsembleSource
        An open ensemble.
    settings : DiagnosisSettings

    Returns
    -------
    EnsembleSource
        The ensemble itself, or one that offers the same on remapped layers or with
        thickness as weight.

    Raises
    ------
    InputError
        If the ensemble does not hold what the averages need.
    """
    if settings.layers is not None:
        weighted = settings.averaging != "reynolds"
        return DensityLayers(source, settings.layers, weighted=weighted)
    if settings.averaging == "thickness-weighted":
        return ThicknessWeighted(source)
    return source
