"""In which order do the stages run, what does each product depend on, and what happens to one block?"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from typing import Any, Protocol

import numpy as np
from numpy.typing import NDArray

from firnlight.core.grid import Window
from firnlight.core.layers import flag_bit, layer, layer_names
from firnlight.physics.chain_fast import albedo_block, flux_block
from firnlight.stages.albedo import ALBEDO, ALBEDO_U, SNOW, AlbedoNumbers, empty_layers, stored_fill
from firnlight.stages.insolation import INSOLATION, SkyLattice
from firnlight.stages.radiation import RADIATION, RADIATION_U
from firnlight.stages.stage import Stage
from firnlight.stages.summarise import SUMMARISE

STAGES: tuple[Stage, ...] = (ALBEDO, ALBEDO_U, SNOW, INSOLATION, RADIATION, RADIATION_U, SUMMARISE)
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
    zenith_deg: NDArray[np.float64], sky: SkyLattice,
) -> Blocks:  # fmt: skip
    """Albedo, its uncertainty, snow fraction and quality of one window of one scene."""
    dn, nodata, flags = reader.read(window)
    out = empty_layers((window.rows, window.cols))
    albedo_block(
        dn, scale, offset, nodata, flags, window.row, window.col, zenith_deg, sky.row_step, sky.col_step,
        **numbers.kernel_arguments(), bits=tuple(np.uint8(bit) for bit in FLAG_BITS), fill=np.int16(stored_fill()),
        albedo=out["albedo"], albedo_u=out["albedo_u"], snow_fraction=out["snow_fraction"], quality=out["quality"],
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


def flux_layers(
    blocks: Blocks, elevation_m: NDArray[np.float32], window: Window, sky: SkyLattice, relative_u: float
) -> None:
    """Add insolation, absorbed shortwave and its uncertainty to the blocks of a window."""
    shape = blocks["albedo"].shape
    made = {name: np.empty(shape, np.int16) for name in ("insolation", "absorbed_shortwave", "absorbed_shortwave_u")}
    flux_block(
        blocks["albedo"], blocks["albedo_u"], elevation_m, window.row, window.col, **sky.flux_arguments(),
        relative_u=relative_u, fill=np.int16(stored_fill("insolation")), insolation=made["insolation"],
        absorbed=made["absorbed_shortwave"], absorbed_u=made["absorbed_shortwave_u"],
    )  # fmt: skip
    blocks.update(made)
