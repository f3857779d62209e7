"""In which order do the stages run, what does each product depend on, and what happens to one block?"""

from __future__ import annotations

import threading
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from typing import Any, Protocol

import numpy as np
from numpy.typing import NDArray

from firnlight.core.grid import Window
from firnlight.core.lattice import Lattice
from firnlight.core.layers import flag_bit, layer, layer_names
from firnlight.physics.chain_fast import absorbed_block, albedo_block, carry_block
from firnlight.stages.albedo import ALBEDO, ALBEDO_U, SNOW, AlbedoNumbers, carried_share, empty_layers, stored_fill
from firnlight.stages.insolation import (
    INSOLATION,
    SLOPE_PARALLEL,
    Relief,
    SkyLattice,
    SourceCells,
    flat_insolation,
    rescaled,
    slope_insolation,
    slope_parallel,
)
from firnlight.stages.longwave import LONGWAVE, NET, NET_U, cover_places, net_layers
from firnlight.stages.radiation import RADIATION, RADIATION_U
from firnlight.stages.stage import Stage
from firnlight.stages.summarise import SUMMARISE

STAGES: tuple[Stage, ...] = (
    ALBEDO, ALBEDO_U, SNOW, INSOLATION, SLOPE_PARALLEL, RADIATION, RADIATION_U, LONGWAVE, NET, NET_U, SUMMARISE,
)  # fmt: skip
Blocks = dict[str, NDArray[Any]]
FLAG_BITS = tuple(flag_bit(name) for name in layer("quality").flags)


def product_keys(
    inputs: Mapping[str, object], facts: Mapping[str, object], digest: Callable[[object], str]
) -> dict[str, str]:
    """The key of every product of a tile-day: what decides its numbers, and nothing else.

    Parameters
    ----------
    inputs : content of what comes from outside the chain, by name (reflectance, sun, elevation, ground, strata).
    facts : settings and table numbers by group name.
    digest : turns plain data into a short text, the same for the same data.
    """
    known: dict[str, object] = dict(inputs)
    keys: dict[str, str] = {}
    for stage in STAGES:
        key = digest(
            [
                stage.name,
                stage.version,
                [[n, known[n]] for n in stage.needs],
                [[f, facts[f]] for f in stage.facts],
            ]
        )
        for name in stage.makes:
            # the definition of a layer (step, nodata, unit) is part of what its integers mean
            definition = repr(layer(name)) if name in layer_names() else ""
            keys[name] = known[name] = digest([key, name, definition])
    return keys


class BlockReader(Protocol):
    """Gives the cells of one scene: see io.bands.SceneReader."""

    def read(self, window: Window) -> tuple[NDArray[Any], NDArray[np.float64], NDArray[np.uint8]]: ...


def scene_block(
    reader: BlockReader, window: Window, numbers: AlbedoNumbers, scale: NDArray[np.float64], offset: NDArray[np.float64],
    sky: SkyLattice, number: int,
) -> Blocks:  # fmt: skip
    """Albedo, its uncertainty, snow fraction and quality of one window of scene `number` of the day."""
    dn, nodata, flags = reader.read(window)
    out = empty_layers((window.rows, window.cols))
    albedo_block(
        dn, scale, offset, nodata, flags, window.row, window.col, sky.zenith_deg[number], sky.row_step, sky.col_step,
        **numbers.kernel_arguments(), bits=tuple(np.uint8(bit) for bit in FLAG_BITS), fill=np.int16(stored_fill()),
        albedo=out["albedo"], albedo_u=out["albedo_u"], snow_fraction=out["snow_fraction"], quality=out["quality"],
    )  # fmt: skip
    if sky.shapes:
        carry_block(
            out["albedo"], out["albedo_u"], out["quality"], np.uint8(flag_bit("snow")), sky.shapes[number].values,
            sky.row_step, sky.col_step, window.row, window.col, carried_share(), np.int16(stored_fill()),
        )  # fmt: skip
    return out


def merge(scenes: list[Blocks]) -> Blocks:
    """One value per cell from several scenes of a day, the first in the list that saw the cell.

    A cell that none saw keeps the flags of the first scene that has data there.
    """
    first = scenes[0]
    fill = stored_fill()
    for other in scenes[1:]:
        seen = other["albedo"] != fill
        missing_here = (first["quality"] & flag_bit("missing")) != 0
        take = (first["albedo"] == fill) & (seen | (missing_here & ((other["quality"] & flag_bit("missing")) == 0)))
        for name in first:
            first[name] = np.where(take, other[name], first[name])
    return first


@dataclass(frozen=True, eq=False)
class Light:
    """All that the fluxes of a tile-day need beside its maps.

    Attributes
    ----------
    sky : the day's light; errors of insolation, relative: shared, local.
    around : albedo of the surroundings on coarse cells of `step` cells; None on flat ground.
    night : longwave at nodes x levels; None where it is not asked for; its errors [W m-2]: shared, local.
    emissivity : of snow, other ground, and the covers of `places`.
    cells, factors : of a supplied grid whose means are kept on slopes, and what brings them back.
    """

    sky: SkyLattice
    errors: tuple[float, float]
    around: NDArray[np.float64] | None = None
    step: int = 1
    night: Lattice | None = None
    night_errors: tuple[float, float] = (0.0, 0.0)
    emissivity: NDArray[np.float64] | None = None
    places: Mapping[int, int] = field(default_factory=dict)
    cells: SourceCells | None = None
    factors: NDArray[np.float64] | None = None


def light_of_all_ground(
    elevation_m: NDArray[np.float32], relief: Relief, window: Window, light: Light
) -> tuple[NDArray[np.int16], NDArray[np.int16]]:
    """Insolation of every cell with a height, seen or not: as if the ground were flat, and on its slopes."""
    assert light.around is not None
    everywhere = ~np.isnan(elevation_m)
    flat = flat_insolation(np.zeros(elevation_m.shape, np.int16), elevation_m, window, light.sky)
    slopes = slope_insolation(everywhere, elevation_m, relief, light.around, light.step, window, light.sky)
    return flat, slopes["insolation"]


@dataclass(frozen=True, eq=False)
class Ground:
    """The ground of a window: height (y, x), NaN where unknown. [m]

    Attributes
    ----------
    relief : slope and horizons; None: flat ground.
    cover : land cover codes, where an emissivity goes by cover.
    surface_k : (y, x) temperature of the surface, NaN where only the air's is known; None: nowhere. [K]
    """

    elevation_m: NDArray[np.float32]
    relief: Relief | None = None
    cover: NDArray[Any] | None = None
    surface_k: NDArray[np.float32] | None = None


def flux_layers(blocks: Blocks, ground: Ground, window: Window, light: Light) -> None:
    """Add insolation and all fluxes that follow from it to the blocks of a window."""
    relief, elevation_m = ground.relief, ground.elevation_m
    albedo, shape = blocks["albedo"], blocks["albedo"].shape
    if relief is None or light.around is None:
        blocks["insolation"] = flat_insolation(albedo, elevation_m, window, light.sky)
    else:
        seen = albedo != stored_fill()
        blocks.update(slope_insolation(seen, elevation_m, relief, light.around, light.step, window, light.sky))
        if light.cells is not None and light.factors is not None:
            numbers = light.cells.numbers(window)
            for name in ("insolation", "terrain_light"):
                blocks[name] = rescaled(blocks[name], light.factors, numbers)
        blocks["insolation_slope"] = slope_parallel(blocks["insolation"], relief.slope)
    made = {name: np.empty(shape, np.int16) for name in ("absorbed_shortwave", "absorbed_shortwave_u")}
    absorbed_block(
        albedo, blocks["albedo_u"], blocks["insolation"], *light.errors, np.int16(stored_fill()),
        float(layer("absorbed_shortwave_u").high), *made.values(),
    )  # fmt: skip
    blocks.update(made)
    if light.night is not None and light.emissivity is not None:
        covers = cover_places(ground.cover, dict(light.places), shape)
        net_layers(
            blocks, elevation_m, covers, light.emissivity, relief, ground.surface_k, window, light.night, light.night_errors
        )  # fmt: skip


class Around:
    """Gathers the albedo of a tile on coarse cells, block by block, from any number of threads; sums are integers."""

    def __init__(self, rows: int, cols: int, step: int) -> None:
        self.step = step
        self._sums = np.zeros((2, -(-rows // step), -(-cols // step)), np.int64)
        self._lock = threading.Lock()

    def add(self, albedo: NDArray[np.int16], window: Window) -> None:
        """Add the seen cells of one window."""
        seen = albedo != stored_fill()
        sums = []
        for values in (np.where(seen, albedo, 0).astype(np.int64), seen.astype(np.int64)):
            rows = np.arange(window.row, window.row + window.rows) // self.step
            cols = np.arange(window.col, window.col + window.cols) // self.step
            down = np.add.reduceat(values, np.nonzero(np.diff(rows, prepend=-1))[0], axis=0)
            sums.append(np.add.reduceat(down, np.nonzero(np.diff(cols, prepend=-1))[0], axis=1))
        i, j = window.row // self.step, window.col // self.step
        with self._lock:
            self._sums[:, i : i + sums[0].shape[0], j : j + sums[0].shape[1]] += np.stack(sums)

    def mean(self) -> NDArray[np.float64]:
        """Albedo of the coarse cells; one without a seen cell takes the mean of its nearest neighbours that have some."""
        total, count = self._sums
        while (count == 0).any() and (count > 0).any():
            wide = [np.pad(one, 1) for one in (total, count)]
            shifts = [(i, j) for i in range(3) for j in range(3)]
            near = [sum(w[i : i + total.shape[0], j : j + total.shape[1]] for i, j in shifts) for w in wide]
            empty = count == 0
            total, count = np.where(empty, near[0], total), np.where(empty, near[1], count)
        return np.asarray(total / np.maximum(count, 1) * layer("albedo").step)
