"""A closure: features, frame, regressor, constraint, domain and interval in one object."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt
from sklearn.base import clone

from learnclosure.closures.baselines import Baseline, EkeMixingLength, Stone
from learnclosure.closures.constraints import bounded_tensor, clip
from learnclosure.closures.domain import RangeGuard
from learnclosure.closures.intervals import HalfWidths
from learnclosure.closures.points import (
    NotedInputs,
    checked_inputs,
    feature_matrix,
    stacked,
)
from learnclosure.closures.pointwise import (
    Outputs,
    Prepared,
    blended,
    flagged,
    half_widths_on_axes,
    on_model_axes,
)
from learnclosure.closures.regressors import MEAN_PARTS, MeanRegressor, make_regressor
from learnclosure.closures.table import Table, Weighting
from learnclosure.closures.targets import LinearTarget, LogCholeskyTarget, make_target
from learnclosure.errors import TrainingError
from learnclosure.features.frames import frame_axes, tensor_to_frame
from learnclosure.features.point_features import point_features
from learnclosure.features.scales import tensor_scale
from learnclosure.study import ClosureSettings, FeatureSettings

FloatArray = npt.NDArray[np.float64]

FALLBACKS: dict[str, type[Baseline]] = {
    "mean-field": Stone,
    "local-energy": EkeMixingLength,
}
BLOCK_CELLS = 8
LEAST_POINTS = 32


@dataclass(frozen=True)
class Prediction:
    """What a closure says of some points.

    Attributes
    ----------
    tensor : ndarray, shape (point, 4), m2 s-1
        Components xx, xy, yx, yy on model axes.
    half_width : ndarray, shape (point, 4), m2 s-1
        Half-width of each; 1e30 where none was calibrated.
    trust : ndarray, shape (point,), 1
        1 well inside what was trained, 0 outside.
    """

    tensor: FloatArray
    half_width: FloatArray
    trust: FloatArray


@dataclass
class _Training:
    """Sample a regressor is fitted to, kept for a mean of regressors over the same points."""

    features: FloatArray
    columns: FloatArray
    weight: FloatArray
    first_half: npt.NDArray[np.bool_]
    held_out: FloatArray | None = None


class Closure:
    """A learned eddy closure of one family.

    Parameters
    ----------
    family : {"mean-field", "local-energy"}
        What a host must give: mean fields only, or eddy kinetic energy as well.
    regressor : str
        Name known to ``make_regressor``.
    target : {"linear", "log-cholesky"}
    settings : ClosureSettings
        Floor and cap of the symmetric part, miscoverage, seed.
    features : FeatureSettings, optional
        Groups of features and the local frame.
    weighting : {"area", "area-and-sampling"}
        Weight of a point in training.

    Attributes
    ----------
    inputs_ : tuple of str
        Physical inputs it needs, in order.
    feature_names_ : tuple of str
        Features in the order the regressor takes them.
    regressor_, target_, guard_, fallback_ : objects
        Fitted parts.
    half_widths_ : HalfWidths or None
        Calibrated half-widths in the local frame.
    """

    def __init__(
        self,
        family: str,
        regressor: str,
        target: str,
        settings: ClosureSettings,
        features: FeatureSettings | None = None,
        *,
        weighting: Weighting = "area-and-sampling",
    ) -> None:
        if family not in FALLBACKS:
            raise TrainingError(
                "no such family",
                where="closure.families",
                found=repr(family),
                expected=" or ".join(FALLBACKS),
            )
        self.family = family
        self.regressor = regressor
        self.target = target
        self.settings = settings
        self.features = FeatureSettings() if features is None else features
        self.weighting: Weighting = weighting
        self.half_widths_: HalfWidths | None = None
        self.regressor_: Any = None

    @property
    def uses_energy(self) -> bool:
        """Whether a host must give eddy kinetic energy."""
        return self.family == "local-energy"

    def fit(self, table: Table, *, reuse: Sequence[Closure] = ()) -> Closure:
        """Train on a table.

        Parameters
        ----------
        table : Table
        reuse : sequence of Closure, optional
            Closures just fitted to the same table with the same family and target. A
            mean of regressors takes its parts from them instead of fitting them again;
            the result is the same.

        Returns
        -------
        Closure

        Raises
        ------
        TrainingError
            If the table has too few points or lacks an input.
        """
        if len(table) < LEAST_POINTS:
            raise TrainingError(
                "too few points to train on", found=len(table), expected=f"at least {LEAST_POINTS}"
            )
        inputs = NotedInputs(table.inputs)
        try:
            prepared = self.prepare(np, inputs)
        except KeyError as error:
            raise TrainingError(
                f"the regions lack the input {error.args[0]}",
                where=f"family {self.family}",
                remedy="diagnose them again, or leave this family out",
            ) from None
        self.feature_names_ = tuple(prepared.features)
        weight = table.training_weight(self.weighting)
        features = feature_matrix(prepared.features, len(table))
        self.fallback_ = FALLBACKS[self.family]().fit(table)
        self.guard_ = RangeGuard().fit(prepared.features)
        columns, trace = self._encode(table, prepared)
        self._training = _Training(features, columns, weight, _checkerboard(table))
        parts = self._parts(reuse)
        if parts:
            self.regressor_ = MeanRegressor.from_fitted([part.regressor_ for part in parts])
        else:
            self.regressor_ = make_regressor(self.regressor, self.settings.seed)
            self.regressor_.fit(features, columns, sample_weight=weight)
        if self.target_.corrected:
            self._training.held_out = self._held_out(parts)
            scale = np.broadcast_to(prepared.scale, len(table))
            self.target_.correct_trace(self._training.held_out, trace, scale, table.weight)
        self.finish(np, list(columns.T), prepared, inputs)
        self.inputs_ = tuple(name for name in table.inputs if name in inputs.asked)
        return self

    def set_half_widths(self, half_widths: HalfWidths) -> Closure:
        """Attach half-widths calibrated on regions left out of training.

        Parameters
        ----------
        half_widths : HalfWidths
            From ``calibrate_half_widths``.

        Returns
        -------
        Closure
        """
        self.half_widths_ = half_widths
        return self

    def prepare(self, xp: Any, inputs: Mapping[str, Any]) -> Prepared:
        """Compute features, local frame and scale.

        Parameters
        ----------
        xp : namespace
            Array namespace: NumPy or the graph.
        inputs : mapping of str to array
            Physical inputs in SI units.

        Returns
        -------
        Prepared
        """
        return Prepared(
            features=point_features(
                xp, inputs, self.uses_energy, self.features.groups, self.features.frame
            ),
            axes=frame_axes(xp, inputs, self.features.frame),
            scale=tensor_scale(xp, inputs, self.family),
        )

    def frame_components(
        self, xp: Any, raw: Sequence[Any], prepared: Prepared, inputs: Mapping[str, Any]
    ) -> tuple[tuple[Any, Any, Any, Any], Any]:
        """Turn what the regressor says into a bounded tensor in the local frame.

        Parameters
        ----------
        xp : namespace
            Array namespace: NumPy or the graph.
        raw : sequence of four arrays
            Outputs of the regressor.
        prepared : Prepared
        inputs : mapping of str to array

        Returns
        -------
        components : tuple of four arrays, m2 s-1
            nn, nt, tn, tt.
        trust : array, 1
        """
        floor, cap = self.settings.floor, self.settings.cap
        nn, tt, nt, alpha = (part * prepared.scale for part in self.target_.decode(xp, raw))
        learned = bounded_tensor(xp, nn, tt, nt, alpha, floor, cap)
        fallback = clip(xp, self.fallback_.diffusivity(xp, inputs), floor, cap)
        # Without a direction to learn in only the isotropic fallback is left.
        trust = self.guard_.trust(xp, prepared.features) * prepared.axes.defined
        return blended(trust, learned, fallback), trust

    def finish(
        self, xp: Any, raw: Sequence[Any], prepared: Prepared, inputs: Mapping[str, Any]
    ) -> Outputs:
        """Turn what the regressor says into outputs on model axes.

        Parameters
        ----------
        xp, raw, prepared, inputs
            As for ``frame_components``.

        Returns
        -------
        Outputs
        """
        frame, trust = self.frame_components(xp, raw, prepared, inputs)
        multipliers = None if self.half_widths_ is None else self.half_widths_.multipliers
        half_width = half_widths_on_axes(xp, prepared.axes, frame, multipliers, self.settings.floor)
        return Outputs(on_model_axes(xp, prepared.axes, frame), half_width, trust)

    def predict(self, inputs: Mapping[str, FloatArray]) -> Prediction:
        """Predict transport tensors on model axes.

        Parameters
        ----------
        inputs : mapping of str to ndarray, shape (point,)
            At least ``inputs_``, in SI units.

        Returns
        -------
        Prediction

        Raises
        ------
        InputError
            If an input is missing, has another length or holds a value that is not finite.
        """
        values, prepared, raw = self._raw(inputs)
        made = self.finish(np, raw, prepared, values)
        given = [values[name] for name in self.inputs_]
        outputs = flagged(np, given, made, self.settings.floor)
        count = len(raw[0])
        return Prediction(
            tensor=stacked(outputs.tensor, count),
            half_width=stacked(outputs.half_width, count),
            trust=np.array(np.broadcast_to(outputs.trust, count)),
        )

    def predict_frame(self, inputs: Mapping[str, FloatArray]) -> FloatArray:
        """Predict transport tensors in the local frame.

        Parameters
        ----------
        inputs : mapping of str to ndarray, shape (point,)

        Returns
        -------
        ndarray, shape (point, 4), m2 s-1
            Components nn, nt, tn, tt.

        Raises
        ------
        InputError
            As ``predict``.
        """
        values, prepared, raw = self._raw(inputs)
        frame, _ = self.frame_components(np, raw, prepared, values)
        return stacked(frame, len(raw[0]))

    def _raw(
        self, inputs: Mapping[str, FloatArray]
    ) -> tuple[dict[str, FloatArray], Prepared, list[FloatArray]]:
        values = checked_inputs(inputs, self.inputs_)
        prepared = self.prepare(np, values)
        features = feature_matrix(prepared.features, len(values[self.inputs_[0]]))
        return values, prepared, list(self.regressor_.predict(features).T)

    def _encode(self, table: Table, prepared: Prepared) -> tuple[FloatArray, FloatArray]:
        frame = true_frame_components(table, prepared.axes)
        trace = frame[:, 0] + frame[:, 3]
        scaled = frame / np.broadcast_to(prepared.scale, len(table))[:, None]
        parts = (
            scaled[:, 0],
            scaled[:, 3],
            0.5 * (scaled[:, 1] + scaled[:, 2]),
            0.5 * (scaled[:, 2] - scaled[:, 1]),
        )
        self.target_: LinearTarget | LogCholeskyTarget = make_target(self.target).fit(*parts)
        return self.target_.encode(*parts), trace

    def _held_out(self, parts: Sequence[Closure]) -> FloatArray:
        """Predict each half of the sample from the other half."""
        known = [part._training.held_out for part in parts if part._training.held_out is not None]
        if known:
            return np.asarray(np.mean(known, axis=0))
        sample = self._training
        result = np.empty_like(sample.columns)
        for chosen in (sample.first_half, ~sample.first_half):
            regressor = clone(self.regressor_)
            regressor.fit(
                sample.features[chosen],
                sample.columns[chosen],
                sample_weight=sample.weight[chosen],
            )
            result[~chosen] = regressor.predict(sample.features[~chosen])
        return result

    def _parts(self, reuse: Sequence[Closure]) -> list[Closure]:
        """Return fitted closures that together make up this one's mean, or none."""
        wanted = MEAN_PARTS.get(self.regressor, ())
        found = []
        for name in wanted:
            for closure in reuse:
                if closure.regressor == name and closure._matches(self):
                    found.append(closure)
                    break
        return found if wanted and len(found) == len(wanted) else []

    def _matches(self, other: Closure) -> bool:
        if not hasattr(self, "_training"):
            return False
        return (
            self.family == other.family
            and self.target == other.target
            and self.settings.seed == other.settings.seed
            and self.weighting == other.weighting
            and self.features == other.features
            and np.array_equal(self._training.features, other._training.features)
            and np.array_equal(self._training.columns, other._training.columns)
        )

    def __getstate__(self) -> dict[str, Any]:
        # The training sample serves only to reuse a fit; it is not part of a closure.
        return {name: value for name, value in self.__dict__.items() if name != "_training"}


def true_frame_components(table: Table, axes: Any) -> FloatArray:
    """Rotate the diagnosed tensors of a table into the local frame.

    Parameters
    ----------
    table : Table
    axes : Axes
        Local frame of each point.

    Returns
    -------
    ndarray, shape (point, 4), m2 s-1
        Components nn, nt, tn, tt.
    """
    return stacked(tensor_to_frame(np, axes, *table.tensor.T), len(table))


def _checkerboard(table: Table) -> npt.NDArray[np.bool_]:
    """Halve the points by a checkerboard of blocks, or evenly where there is one block."""
    colour = (table.row // BLOCK_CELLS + table.column // BLOCK_CELLS) % 2 == 0
    if colour.all() or not colour.any():
        return np.asarray(np.arange(len(table)) % 2 == 0)
    return np.asarray(colour, dtype=np.bool_)
