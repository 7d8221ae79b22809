"""Figures of the report, drawn with one style and returned as inline pictures."""

from __future__ import annotations

import base64
import io
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import cmocean
import matplotlib as mpl
import numpy as np
import numpy.typing as npt
import xarray as xr
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.figure import Figure

FloatArray = npt.NDArray[np.float64]

STYLE: dict[Any, Any] = {
    "font.size": 9.0,
    "axes.titlesize": 9.0,
    "axes.labelsize": 9.0,
    "axes.spines.top": False,
    "axes.spines.right": False,
    "figure.facecolor": "white",
    "image.cmap": "cmo.balance",
}
COLOURS = ("#0b5394", "#b45f06", "#38761d", "#741b47", "#666666")
LAYER_NAMES = ("upper layer", "lower layer")


@dataclass(frozen=True)
class Picture:
    """One figure of the page.

    Attributes
    ----------
    source : str
        ``data:`` address with the picture in it.
    text : str
        What it shows, for those who cannot see it.
    caption : str
        Words below it.
    """

    source: str
    text: str
    caption: str


def as_picture(figure: Figure, text: str, caption: str) -> Picture:
    """Turn a figure into an inline picture with its words."""
    buffer = io.BytesIO()
    FigureCanvasAgg(figure)
    figure.savefig(buffer, format="png", dpi=110, metadata={"Software": None})
    data = base64.b64encode(buffer.getvalue()).decode("ascii")
    return Picture(f"data:image/png;base64,{data}", text, caption)


def layer_name(number: int, layers: int) -> str:
    """Name a layer in words: upper and lower of two, else its number from the top."""
    return LAYER_NAMES[number] if layers == len(LAYER_NAMES) else f"layer {number + 1}"


def shown_layers(layers: int) -> list[int]:
    """Choose at most two layers to draw: the top one and the lowest."""
    return [0] if layers == 1 else [0, layers - 1]


def _extent(statistics: xr.Dataset) -> tuple[float, float, float, float]:
    width = np.asarray(statistics["cell_width_x"].values).mean() / 2e3
    height = np.asarray(statistics["cell_width_y"].values).mean() / 2e3
    x, y = statistics["x"].values / 1e3, statistics["y"].values / 1e3
    return (x[0] - width, x[-1] + width, y[0] - height, y[-1] + height)


def _limit(*fields: FloatArray) -> float:
    values = np.abs(np.concatenate([field[np.isfinite(field)].ravel() for field in fields]))
    return float(np.quantile(values, 0.98)) or 1.0 if values.size else 1.0


def _map(
    axes: Any, field: FloatArray, extent: Sequence[float], limit: float, *, signed: bool, title: str
) -> Any:
    axes.set_facecolor("#d9d9d9")
    image = axes.imshow(
        field,
        origin="lower",
        extent=extent,
        aspect="equal",
        interpolation="nearest",
        cmap=cmocean.cm.balance if signed else cmocean.cm.amp,
        vmin=-limit if signed else 0.0,
        vmax=limit,
    )
    axes.set_title(title)
    return image


def _grid(rows: int, columns: int, aspect: float, extra: float = 0.0) -> tuple[Figure, Any]:
    width = 10.0
    height = rows * (width / columns * 0.82 * aspect + 0.42) + 0.5 + extra
    figure = Figure(figsize=(width, height), layout="constrained")
    return figure, figure.subplots(rows, columns, squeeze=False, sharex=True, sharey=True)


def _aspect(extent: Sequence[float]) -> float:
    return min(1.6, max(0.25, (extent[3] - extent[2]) / (extent[1] - extent[0])))


def _parts(fields: Mapping[str, FloatArray]) -> dict[str, FloatArray]:
    """Symmetric components and alpha of a tensor given by its four components."""
    xy, yx = fields["transport_tensor_xy"], fields["transport_tensor_yx"]
    return {
        "Sxx": fields["transport_tensor_xx"],
        "Syy": fields["transport_tensor_yy"],
        "Sxy": 0.5 * (xy + yx),
        "alpha": 0.5 * (yx - xy),
    }


def _tensor_of(statistics: xr.Dataset, suffix: str = "") -> dict[str, FloatArray]:
    names = [f"transport_tensor_{pair}" for pair in ("xx", "xy", "yx", "yy")]
    return {name: np.asarray(statistics[name + suffix].values) for name in names}


def _label_axes(axes: Any) -> None:
    for row in axes:
        row[0].set_ylabel("y, km")
    for panel in axes[-1]:
        panel.set_xlabel("x, km")


def tensor_maps(region: str, statistics: xr.Dataset) -> Picture:
    """Draw the diagnosed tensor of a region and its standard error.

    Parameters
    ----------
    region : str
    statistics : xarray.Dataset

    Returns
    -------
    Picture
    """
    extent = _extent(statistics)
    layers = shown_layers(statistics.sizes["layer"])
    values = _parts(_tensor_of(statistics))
    known = "transport_tensor_xx_standard_error" in statistics
    errors: dict[str, FloatArray] = {}
    if known:
        raw = _tensor_of(statistics, "_standard_error")
        mixed = 0.5 * np.hypot(raw["transport_tensor_xy"], raw["transport_tensor_yx"])
        errors = {
            "Sxx": raw["transport_tensor_xx"],
            "Syy": raw["transport_tensor_yy"],
            "Sxy": mixed,
            "alpha": mixed,
        }
    with mpl.rc_context(STYLE):
        figure, axes = _grid(len(layers) * (2 if known else 1), 4, _aspect(extent))
        row = 0
        for layer in layers:
            limit = _limit(*(field[layer] for field in values.values()))
            name = layer_name(layer, statistics.sizes["layer"])
            for panel, (part, field) in zip(axes[row], values.items(), strict=True):
                image = _map(panel, field[layer], extent, limit, signed=True,
                             title=f"{part}, {name}")  # fmt: skip
            figure.colorbar(image, ax=list(axes[row]), shrink=0.85, label="m2 s-1", extend="both")
            row += 1
            if not known:
                continue
            limit = _limit(*(field[layer] for field in errors.values()))
            for panel, (part, field) in zip(axes[row], errors.items(), strict=True):
                image = _map(panel, field[layer], extent, limit, signed=False,
                             title=f"error of {part}, {name}")  # fmt: skip
            figure.colorbar(image, ax=list(axes[row]), shrink=0.85, label="m2 s-1", extend="max")
            row += 1
        _label_axes(axes)
        return as_picture(
            figure,
            f"Maps of the symmetric components and alpha of the transport tensor of {region}",
            f"Transport tensor of {region} as diagnosed from all members"
            + (", with its standard error from leaving out one member each." if known else ".")
            + " Grey is land or undetermined.",
        )


def prediction_maps(
    region: str,
    statistics: xr.Dataset,
    predictions: Mapping[str, Mapping[str, FloatArray]],
    part: str,
) -> Picture:
    """Draw one part of the tensor as diagnosed, as predicted, and the difference.

    Parameters
    ----------
    region : str
    statistics : xarray.Dataset
    predictions : mapping of str to mapping
        Predicted fields by family.
    part : {"Sxx", "Syy", "Sxy", "alpha"}

    Returns
    -------
    Picture
    """
    extent = _extent(statistics)
    layers = shown_layers(statistics.sizes["layer"])
    true = _parts(_tensor_of(statistics))[part]
    guesses = {family: _parts(fields)[part] for family, fields in predictions.items()}
    with mpl.rc_context(STYLE):
        figure, axes = _grid(len(layers), 1 + 2 * len(guesses), _aspect(extent))
        for row, layer in zip(axes, layers, strict=True):
            limit = _limit(true[layer], *(guess[layer] for guess in guesses.values()))
            name = layer_name(layer, statistics.sizes["layer"])
            image = _map(row[0], true[layer], extent, limit, signed=True,
                         title=f"diagnosed, {name}")  # fmt: skip
            for number, (family, guess) in enumerate(guesses.items()):
                _map(row[1 + 2 * number], guess[layer], extent, limit, signed=True, title=family)
                _map(row[2 + 2 * number], guess[layer] - true[layer], extent, limit, signed=True,
                     title="minus diagnosed")  # fmt: skip
            figure.colorbar(image, ax=list(row), shrink=0.85, label="m2 s-1", extend="both")
        _label_axes(axes)
        return as_picture(
            figure,
            f"Maps of {part} of {region}, diagnosed and predicted by each family",
            f"{part} of {region}: diagnosed, predicted, and predicted minus diagnosed. "
            "One colour scale for each layer.",
        )


def _flux(fields: Mapping[str, FloatArray], statistics: xr.Dataset, tracer: str) -> FloatArray:
    g_x = np.asarray(statistics[f"{tracer}_gradient_x"].values)
    g_y = np.asarray(statistics[f"{tracer}_gradient_y"].values)
    return np.stack(
        [
            -(fields["transport_tensor_xx"] * g_x + fields["transport_tensor_xy"] * g_y),
            -(fields["transport_tensor_yx"] * g_x + fields["transport_tensor_yy"] * g_y),
        ]
    )


def scored_tracer(statistics: xr.Dataset) -> str:
    """Name the tracer fluxes are drawn for: a withheld one if there is one."""
    names = str(statistics.attrs.get("withheld_tracers", "")).split()
    return (names or str(statistics.attrs["tracers"]).split())[0]


def flux_maps(
    region: str, statistics: xr.Dataset, predictions: Mapping[str, Mapping[str, FloatArray]]
) -> Picture:
    """Draw the eddy flux along y of a withheld tracer, true and predicted, and how they agree.

    Parameters
    ----------
    region : str
    statistics : xarray.Dataset
    predictions : mapping of str to mapping

    Returns
    -------
    Picture
    """
    tracer = scored_tracer(statistics)
    extent = _extent(statistics)
    layers = shown_layers(statistics.sizes["layer"])
    true = np.stack([np.asarray(statistics[f"{tracer}_eddy_flux_{axis}"].values) for axis in "xy"])
    wet = np.asarray(statistics["wet_share"].values) > 0.0
    true = np.where(wet, true, np.nan)
    guesses = {name: _flux(fields, statistics, tracer) for name, fields in predictions.items()}
    units = str(statistics[f"{tracer}_eddy_flux_y"].attrs.get("units", ""))
    with mpl.rc_context(STYLE):
        columns = 1 + 2 * len(guesses)
        width, aspect = 10.0, max(0.62, _aspect(extent))
        figure = Figure(
            figsize=(width, len(layers) * (width / columns * 0.9 * aspect + 0.5) + 0.4),
            layout="constrained",
        )
        axes = figure.subplots(len(layers), columns, squeeze=False)
        for row, layer in zip(axes, layers, strict=True):
            limit = _limit(true[1][layer])
            name = layer_name(layer, statistics.sizes["layer"])
            image = _map(row[0], true[1][layer], extent, limit, signed=True, title=f"true, {name}")
            for number, (family, guess) in enumerate(guesses.items()):
                _map(row[1 + 2 * number], guess[1][layer], extent, limit, signed=True,
                     title=family)  # fmt: skip
                _scatter(row[2 + 2 * number], true[:, layer], guess[:, layer])
            figure.colorbar(image, ax=list(row), shrink=0.85, label=units, extend="both")
            row[0].set_ylabel("y, km")
        return as_picture(
            figure,
            f"Eddy flux of {tracer} in {region}, true and predicted",
            f"Eddy flux along y of {tracer}, a tracer "
            + ("never used in any inversion" if _withheld(statistics) else "of the inversion")
            + f", in {region}; beside each prediction both components against the truth, with the "
            "line of agreement.",
        )


def _withheld(statistics: xr.Dataset) -> bool:
    return bool(str(statistics.attrs.get("withheld_tracers", "")).split())


def _scatter(axes: Any, true: FloatArray, guess: FloatArray) -> None:
    known = np.isfinite(true) & np.isfinite(guess)
    limit = _limit(true[known], guess[known])
    axes.hexbin(
        true[known], guess[known], gridsize=40, extent=(-limit, limit, -limit, limit), bins="log",
        cmap=cmocean.cm.dense, mincnt=1, linewidths=0.0,
    )  # fmt: skip
    axes.plot([-limit, limit], [-limit, limit], color="black", linewidth=0.8)
    axes.set_xlim(-limit, limit)
    axes.set_ylim(-limit, limit)
    axes.set_aspect("equal")
    axes.set_title("predicted against true")
    axes.tick_params(labelleft=False, labelbottom=False)


def score_chart(evaluation: Mapping[str, Any], measure: str, title: str) -> Picture:
    """Draw the scores of closures and baselines of every region beside the ceiling.

    Parameters
    ----------
    evaluation : mapping
        Contents of ``evaluation.json``.
    measure : {"flux_r2", "divergence_r2"}
    title : str
        What is scored, in words.

    Returns
    -------
    Picture
    """
    families, baselines = evaluation["families"], evaluation["baselines"]
    regions = list(evaluation["ceiling"])
    fitted = {name: record for name, record in baselines.items() if "published" not in name}
    first = next(iter(families.values()))
    layers = len(next(iter(first["regions"].values()))["scores"][measure])
    with mpl.rc_context(STYLE):
        figure = Figure(figsize=(10.0, 0.5 + 0.42 * len(regions) * 1.6 + 0.9), layout="constrained")
        axes = figure.subplots(1, len(shown_layers(layers)), squeeze=False, sharey=True)[0]
        for panel, layer in zip(axes, shown_layers(layers), strict=True):
            for place, region in enumerate(regions):
                ceiling = (evaluation["ceiling"][region] or {}).get(measure)
                if ceiling is not None and ceiling[layer] is not None:
                    panel.plot([ceiling[layer]] * 2, [place - 0.38, place + 0.38], color="black",
                               linewidth=2.0, label="independent half" if place == 0 else None,
                               zorder=3)  # fmt: skip
                _dots(panel, fitted, region, place, measure, layer, hollow=True)
                _dots(panel, families, region, place, measure, layer, hollow=False)
            panel.set_yticks(range(len(regions)), regions)
            panel.set_ylim(len(regions) - 0.5, -0.5)
            panel.set_xlim(-0.25, 1.0)
            panel.set_title(layer_name(layer, layers))
            panel.set_xlabel(f"R2 of {title} (values below -0.25 are drawn at the edge)")
            panel.grid(axis="x", color="#dddddd", linewidth=0.6)
        handles, labels = axes[0].get_legend_handles_labels()
        known = dict(zip(labels, handles, strict=True))
        figure.legend(known.values(), known.keys(), loc="outside lower center", ncols=4,
                      frameon=False)  # fmt: skip
        return as_picture(
            figure,
            f"Scores of {title} by region and layer for closures, baselines and the ceiling",
            f"R2 of {title}: closures (filled), fitted baselines (hollow) and the tensor of an "
            "independent half of the members (black bar). Training regions are scored by "
            "closures that did not see them.",
        )


def _dots(
    panel: Any, records: Mapping[str, Any], region: str, place: int, measure: str, layer: int,
    *, hollow: bool,
) -> None:  # fmt: skip
    marks = "sDv^" if hollow else "oo"
    for number, (name, record) in enumerate(records.items()):
        scores = record["regions"].get(region, {}).get("scores", {}).get(measure)
        if scores is None or scores[layer] is None:
            continue
        colour = COLOURS[(number + (2 if hollow else 0)) % len(COLOURS)]
        panel.plot(
            [max(scores[layer], -0.24)], [place + (0.22 if hollow else 0.0)],
            marks[number % len(marks)], color=colour, markersize=6 if hollow else 8,
            markerfacecolor="white" if hollow else colour, linestyle="none",
            label=name if place == 0 else None, zorder=4,
        )  # fmt: skip


def trust_map(
    region: str, statistics: xr.Dataset, predictions: Mapping[str, Mapping[str, FloatArray]]
) -> Picture:
    """Draw the trust of each family over a region.

    Parameters
    ----------
    region : str
    statistics : xarray.Dataset
    predictions : mapping of str to mapping

    Returns
    -------
    Picture
    """
    extent = _extent(statistics)
    layers = shown_layers(statistics.sizes["layer"])
    with mpl.rc_context(STYLE):
        figure, axes = _grid(1, len(predictions) * len(layers), _aspect(extent))
        panels = iter(axes[0])
        for family, fields in predictions.items():
            for layer in layers:
                name = layer_name(layer, statistics.sizes["layer"])
                image = _map(next(panels), fields["trust"][layer], extent, 1.0, signed=False,
                             title=f"{family}, {name}")  # fmt: skip
        figure.colorbar(image, ax=list(axes[0]), shrink=0.85, label="trust")
        _label_axes(axes)
        return as_picture(
            figure,
            f"Maps of trust over {region}",
            f"Trust over {region}: 1 where all inputs are well inside the training sample; where "
            "it is below 1 the prediction is blended into the fallback.",
        )
