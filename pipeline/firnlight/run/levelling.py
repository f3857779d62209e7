"""Scenes of a tile-day with their slopes levelled: the fit over the whole scene first, then block by block."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from firnlight.core.grid import Window
from firnlight.core.layers import flag_bit
from firnlight.run.engine import run_blocks
from firnlight.run.tile_sources import Sources, TileJob, lattice_positions
from firnlight.stages import illumination

Scale = tuple[NDArray[np.float64], NDArray[np.float64]]  # scale and offset of each band


class LevelledScene:
    """Reads one scene as `SceneReader` does, as reflectance with the cells on slopes corrected.

    Cells that the scene's sun did not reach are flagged as shadow: their reflectance is that of the sky's light alone.
    """

    def __init__(self, job: TileJob, sources: Sources, number: int, scale: Scale) -> None:
        self._job, self._sources, self._number, self._scale = job, sources, number, scale
        self._sun = illumination.SceneSun.at(job.scenes[number].datetime.timestamp(), *lattice_positions(job.grid))
        self._directions = self._sun.directions()
        self._fit: illumination.Fit = {}

    def _window(self, window: Window) -> tuple[Any, NDArray[np.bool_], Any, illumination.Incidence, NDArray[np.uint8]]:
        dn, nodata, flags = self._sources.readers[self._number].read(window)
        rho = illumination.reflectance(dn, *self._scale, nodata)
        bands, settings = self._job.numbers[self._number].bands, self._job.workflow.albedo
        use = illumination.level_cells(rho, bands, flags, settings.illumination_over_snow)
        light = illumination.incidence(
            self._sources.relief(window, self._directions), self._directions, window, self._sun
        )  # fmt: skip
        return rho, use, self._sources.cover(window), light, flags

    def fit(self, threads: int) -> None:
        """Fit every band and cover over the whole scene."""
        sums = illumination.FitSums()

        def gather(window: Window) -> None:
            rho, use, cover, light, _ = self._window(window)
            sums.add(rho, use, cover, light)

        run_blocks(gather, self._job.grid.windows(*self._job.block), {"": lambda: None}, threads)
        self._fit = sums.fit()

    def read(self, window: Window) -> tuple[NDArray[Any], NDArray[np.float64], NDArray[np.uint8]]:
        """Reflectance (bands, y, x), NaN as its nodata, and the flags."""
        rho, use, cover, light, flags = self._window(window)
        method = self._job.workflow.albedo.illumination
        assert method != "none"
        level = illumination.levelled(rho, use, cover, light, self._fit, method)
        dark = ~light.lit & (flags == 0)
        flags = np.where(dark, flags | np.uint8(flag_bit("shadow")), flags).astype(np.uint8)
        return level, np.full(level.shape[0], np.nan), flags
