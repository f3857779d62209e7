"""Maps as pictures: one value per cell with its scale, unit and date; what was not seen is hatched."""

from __future__ import annotations

import io
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from firnlight.core.layers import layer
from firnlight.core.tables import load_table


@dataclass(frozen=True)
class MapPanel:
    """One map of a picture: stored integers of a layer, and what stands above it."""

    layer: str
    stored: NDArray[Any]
    title: str


def map_picture(panels: Sequence[MapPanel], cell_m: float, note: str) -> bytes:
    """Panels side by side as a PNG.

    Parameters
    ----------
    panels : maps of one tile, (rows, cols) each.
    cell_m : side of a cell, for the scale bar. [m]
    note : one line below: place, source, caution.
    """
    from matplotlib.backends.backend_agg import FigureCanvasAgg
    from matplotlib.colors import LinearSegmentedColormap
    from matplotlib.figure import Figure

    figure = Figure(figsize=(5.0 * len(panels), 5.6), dpi=110, layout="constrained")
    FigureCanvasAgg(figure)
    axes = figure.subplots(1, len(panels), squeeze=False)[0]
    for axis, panel in zip(axes, panels, strict=True):
        about, row = layer(panel.layer), load_table("layers").row(panel.layer)
        ramp = LinearSegmentedColormap.from_list(panel.layer, row["ramp"])
        low, high = row["shown"]
        values = about.values(panel.stored)
        axis.set_facecolor("white")
        rows, cols = values.shape
        axis.fill_between([0, cols], 0, rows, facecolor="none", edgecolor="0.75", hatch="////", linewidth=0, zorder=-1)
        image = axis.imshow(
            np.ma.masked_invalid(values),
            cmap=ramp,
            vmin=low,
            vmax=high,
            extent=(0, cols, rows, 0),
            interpolation="nearest",
            zorder=1,
        )
        axis.set_title(panel.title, fontsize=11)
        axis.set_xticks([])
        axis.set_yticks([])
        unit = "" if about.unit == "1" else f" [{about.unit}]"
        bar = figure.colorbar(image, ax=axis, orientation="horizontal", shrink=0.8, pad=0.02)
        bar.set_label(panel.layer.replace("_", " ") + unit, fontsize=9)
        length = _round_length(cols * cell_m / 4)
        at = rows * 0.95
        axis.plot([cols * 0.05, cols * 0.05 + length / cell_m], [at, at], color="black", linewidth=3, zorder=2)
        axis.text(cols * 0.05, at - rows * 0.02, f"{length / 1000:g} km", fontsize=9, va="bottom", zorder=2)
    figure.supxlabel(note, fontsize=8)
    out = io.BytesIO()
    figure.savefig(out, format="png", metadata={"Software": "firnlight"})
    return out.getvalue()


def _round_length(metres: float) -> float:
    """1, 2 or 5 times a power of ten, at most `metres`."""
    power = 10.0 ** np.floor(np.log10(metres))
    return float(max(step * power for step in (1, 2, 5) if step * power <= metres))
