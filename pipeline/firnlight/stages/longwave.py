"""A day's longwave at lattice nodes and heights, and net radiation from it."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from firnlight.core.errors import SettingsProblem
from firnlight.core.grid import HIGHEST_M, LOWEST_M, Window
from firnlight.core.lattice import Lattice
from firnlight.core.layers import flag_bit, layer
from firnlight.core.settings import Longwave
from firnlight.physics import emissivity, longwave
from firnlight.physics.chain_fast import net_block
from firnlight.physics.humidity import vapour_pressure_at
from firnlight.physics.light import slope_tables
from firnlight.stages.albedo import stored_fill
from firnlight.stages.insolation import LEVEL_STEP_M, Relief, levels_m, without_files
from firnlight.stages.stage import Stage

LONGWAVE = Stage(
    "net longwave", 1, ("albedo", "quality", "insolation", "elevation", "ground", "terrain", "covers", "air"),
    ("net_longwave",), ("longwave",),
)  # fmt: skip
NET = Stage("net radiation", 1, ("absorbed_shortwave", "net_longwave"), ("net_radiation",), ())
NET_U = Stage(
    "net radiation uncertainty", 1, ("absorbed_shortwave_u", "net_longwave"), ("net_radiation_u",), ("longwave_error",)
)  # fmt: skip
_NONE = np.empty((0, 0), np.int16)
_NO_SURFACE = np.empty((0, 0), np.float32)


@dataclass(frozen=True, eq=False)
class Air:
    """A day's air at the lattice nodes, (k, n) means over intervals; heights (n,) are those of the weather's ground.

    Attributes
    ----------
    hours : (k,)        Length of each interval. [h]
    air_k, vapour_hpa   NaN is a gap. [K, hPa]
    cloud : (k, n)      Share of the sky; None: a cloudless sky. [1]
    height_m : (n,), None where the weather does not tell it: its temperature is then taken for every height.
    """

    hours: NDArray[np.float64]
    air_k: NDArray[np.float64]
    vapour_hpa: NDArray[np.float64]
    cloud: NDArray[np.float64] | None
    height_m: NDArray[np.float64] | None


def longwave_lattice(air: Air, nodes: Lattice, settings: Longwave) -> Lattice:
    """Day means at nodes x levels of longwave from the sky and of sigma T^4 of snow and of other ground. [W m-2]

    Air temperature goes with height by the set lapse, humidity keeps its share of saturation. The surface is as warm as
    the air, snow at most at melting point. A gap in any interval is NaN: no mean over part of a day.
    """
    heights = levels_m()
    total = np.zeros((air.air_k.shape[1], heights.size, 3))
    above = 0.0 if air.height_m is None else heights[np.newaxis, :] - air.height_m[:, np.newaxis]
    weights = air.hours / air.hours.sum()
    for k, weight in enumerate(weights):
        here = air.air_k[k][:, np.newaxis]
        there = np.broadcast_to(here - settings.lapse_k_per_m * above, total.shape[:2])
        vapour = vapour_pressure_at(there, here, air.vapour_hpa[k][:, np.newaxis])
        down = longwave.downward_clear(settings.method, there, vapour)
        if air.cloud is not None:
            down = longwave.with_cloud(settings.cloud, down, there, air.cloud[k][:, np.newaxis])
        total[:, :, 0] += weight * down
        for n, snowy in ((1, True), (2, False)):
            total[:, :, n] += weight * longwave.black_body(longwave.surface_temperature(there, snowy))
    return Lattice(nodes.row_step, nodes.col_step, total.reshape(*nodes.values.shape[:2], heights.size, 3))


def emissivities(settings: Longwave, classes: dict[int, str]) -> tuple[NDArray[np.float64], dict[int, int]]:
    """Emissivity of snow (0), of ground without a cover (1) and of covers, and the place of each class code among them.

    A cover's own number in the settings counts first, then the settings' "ground", then the table.
    """
    own = settings.emissivity
    ground = own.get("ground", emissivity.covers()["ground"])
    values, places = [emissivity.of_cover("snow", own), ground], {}
    for code, name in sorted(classes.items()):
        if name in own:
            one = own[name]
        elif "ground" in own:
            continue
        else:
            try:
                one = emissivity.of_cover(name)
            except SettingsProblem:  # a name without a word of the table
                continue
        places[code] = len(values)
        values.append(one)
    return np.array(values, np.float64), places


def cover_places(codes: NDArray[Any] | None, places: dict[int, int], shape: tuple[int, int]) -> NDArray[np.uint8]:
    """Place of each cell's cover among the emissivities."""
    out = np.ones(shape, np.uint8)
    if codes is not None:
        for code, place in places.items():
            out[codes == code] = place
    return out


def net_layers(
    blocks: dict[str, NDArray[Any]], elevation_m: NDArray[np.float32], covers: NDArray[np.uint8],
    share: NDArray[np.float64], relief: Relief | None, surface_k: NDArray[np.float32] | None, window: Window,
    night: Lattice, errors: tuple[float, float],
) -> None:  # fmt: skip
    """Add net longwave, net radiation and its uncertainty to the blocks of a window.

    `share` comes from emissivities; where `surface_k` is known it stands for the air's temperature.
    """
    shape = blocks["albedo"].shape
    made = {name: np.empty(shape, np.int16) for name in ("net_longwave", "net_radiation", "net_radiation_u")}
    tangent, _, _ = slope_tables()
    cosine = 1.0 / np.sqrt(1.0 + tangent.astype(np.float64) ** 2)
    net_block(
        blocks["absorbed_shortwave"], blocks["absorbed_shortwave_u"], blocks["quality"], np.uint8(flag_bit("snow")),
        elevation_m, covers, share, relief.slope if relief else _NONE, relief.sky_view if relief else _NONE, cosine,
        _NO_SURFACE if surface_k is None else surface_k, float(longwave.black_body(1.0)), longwave.MELTING_K,
        window.row, window.col, night.values, night.row_step, night.col_step, LOWEST_M, LEVEL_STEP_M,
        errors[0], errors[1], np.int16(stored_fill("net_longwave")), float(layer("net_longwave").high),
        float(layer("net_radiation_u").high), *made.values(),
    )  # fmt: skip
    blocks.update(made)


def longwave_facts(settings: Longwave | None, classes: dict[int, str]) -> list[object]:
    """What net longwave depends on beside the maps, the weather and the place.

    Raises
    ------
    SettingsProblem : no form of that name.
    """
    if settings is None:
        return []
    forms = longwave.method("clear", settings.method), longwave.method("cloud", settings.cloud)
    values, places = emissivities(settings, classes)
    chosen = without_files(settings.model_dump(mode="json", exclude={"uncertainty_wm2", "local_uncertainty_wm2"}))
    return [
        chosen,
        [form["numbers"] for form in forms],
        values.tolist(),
        sorted(places.items()),
        [LOWEST_M, HIGHEST_M, LEVEL_STEP_M],
    ]
