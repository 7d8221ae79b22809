"""The figure that answers how many members, and how many snapshots, are needed."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import matplotlib as mpl
import numpy as np
import xarray as xr
from matplotlib.figure import Figure
from matplotlib.ticker import NullLocator

from learnclosure.diagnosis.ceiling_artefact import read_ceilings
from learnclosure.diagnosis.reliability import CeilingCurve, members_needed
from learnclosure.report.figures import (
    COLOURS,
    STYLE,
    Picture,
    as_picture,
    layer_name,
    shown_layers,
)

AIM = 0.9
"""Reliability whose price in members is told."""
LINES = (
    ("eddy flux", ("flux",)),
    ("tensor, smooth", tuple(f"transport_tensor_{a}{b}" for a in "xy" for b in "xy")),
    ("tensor, least squares", tuple(f"least_squares_tensor_{a}{b}" for a in "xy" for b in "xy")),
)


def _mean_curve(curves: Sequence[CeilingCurve]) -> CeilingCurve:
    """Average curves of one axis; their errors are taken to go together."""
    first = curves[0]
    return CeilingCurve(
        first.counts,
        np.mean([curve.reliability for curve in curves], axis=0),
        np.mean([curve.standard_error for curve in curves], axis=0),
        first.measured,
        first.offset,
    )


def _draw(panel: Any, curve: CeilingCurve, layer: int, colour: str, label: str) -> None:
    counts, value = curve.counts, curve.reliability[:, layer]
    known = slice(0, curve.measured)
    panel.plot(counts[known], value[known], "-", color=colour, label=label)
    panel.plot(counts[curve.measured - 1 :], value[curve.measured - 1 :], ":", color=colour)
    for part, face in ((known, colour), (slice(curve.measured, None), "white")):
        panel.errorbar(
            counts[part], value[part], yerr=curve.standard_error[part, layer], fmt="o",
            markersize=4, markerfacecolor=face, color=colour, elinewidth=1, capsize=2,
        )  # fmt: skip


def _finish(panel: Any, curve: CeilingCurve, here: int, what: str) -> None:
    panel.axvline(here, color="#999999", linewidth=0.8, zorder=0)
    panel.axhline(AIM, color="#cccccc", linewidth=0.8, zorder=0)
    panel.text(here, 0.03, f" here: {here}", color="#555555", fontsize=8)
    panel.set_xscale("log")
    panel.set_xticks(curve.counts, [str(count) for count in curve.counts])
    panel.xaxis.set_minor_locator(NullLocator())
    panel.set_xlabel(what)
    panel.set_ylim(0.0, 1.02)


def _price(curve: CeilingCurve, layers: Sequence[int]) -> str:
    needed = members_needed(curve, AIM)
    parts = [
        f"{needed.members[layer]:.0f} ± {max(1.0, needed.standard_error[layer]):.0f}"
        if np.isfinite(needed.members[layer])
        else "no number"
        for layer in layers
    ]
    return " / ".join(parts)


def ceiling_curves(region: str, statistics: xr.Dataset) -> Picture | None:
    """Draw reliability against members and against snapshots.

    Parameters
    ----------
    region : str
    statistics : xarray.Dataset

    Returns
    -------
    Picture or None
        None where no ceilings were measured.
    """
    ceilings = read_ceilings(statistics)
    if ceilings is None:
        return None
    total = statistics.sizes["layer"]
    layers = shown_layers(total)
    axes_of = (
        (ceilings.members, int(statistics.attrs["members"]), "members"),
        (ceilings.snapshots, int(statistics.attrs["snapshots"]), "snapshots"),
    )
    prices = []
    with mpl.rc_context(STYLE):
        figure = Figure(figsize=(10.0, 3.1 * len(layers)), layout="constrained")
        panels = figure.subplots(len(layers), 2, squeeze=False, sharey=True)
        for row, layer in zip(panels, layers, strict=True):
            for panel, (curves, here, what) in zip(row, axes_of, strict=True):
                for (label, names), colour in zip(LINES, COLOURS, strict=False):
                    curve = _mean_curve([curves[name] for name in names])
                    _draw(panel, curve, layer, colour, label)
                _finish(panel, curve, here, what)
                panel.set_title(f"{layer_name(layer, total)}, against {what}")
            row[0].set_ylabel("reliability")
        panels[0, 0].legend(loc="lower right", frameon=False)
        for label, names in LINES:
            curve = _mean_curve([ceilings.members[name] for name in names])
            prices.append(f"{label} {_price(curve, layers)}")
        return as_picture(
            figure,
            f"Reliability of eddy fluxes and of the transport tensor of {region} against the "
            "number of members and of snapshots",
            f"How many members? Reliability in {region}, the highest R2 any prediction can reach: "
            "filled points measured on random halves of the members (left) or on the two halves "
            "over consecutive times (right), open ones extrapolated; tensors are means of four "
            f"components, bars one standard error. Members for a reliability of {AIM:g}"
            f"{' (' + ' / '.join(layer_name(n, total) for n in layers) + ')' if total > 1 else ''}"
            f": {'; '.join(prices)}.",
        )
