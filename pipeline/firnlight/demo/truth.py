"""What air does the demo have, and how is its truth stored?"""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from firnlight.core.layers import layer
from firnlight.physics.clearsky import Atmosphere

# what the demo's workflow says of the air; invented, mountain air
AEROSOL_500NM, WATER_VAPOUR_CM, OZONE_CM = 0.1, 1.0, 0.3
LEVELS_M = np.arange(600.0, 3601.0, 200.0)


def air() -> Atmosphere:
    """The demo's cloudless atmosphere."""
    return Atmosphere.of(AEROSOL_500NM, WATER_VAPOUR_CM, OZONE_CM)


def stored(name: str, values: NDArray[np.floating[Any]]) -> NDArray[np.int16]:
    """Values as the integers of a layer of tables/layers.toml."""
    return np.rint(values * values.dtype.type(1 / layer(name).step)).astype(np.int16)
