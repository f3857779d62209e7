"""Where do the cells of a supplied grid lie, and which of them are near an area?"""

from __future__ import annotations

from typing import Any, TypedDict

import numpy as np
from numpy.typing import NDArray
from pyproj import CRS
from pyproj.exceptions import CRSError

from firnlight.core.errors import InputProblem
from firnlight.io.ground import between, is_geographic, unit_of

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Box = tuple[float, float, float, float]
_LENGTHS_M = {"m": 1.0, "metre": 1.0, "meter": 1.0, "metres": 1.0, "meters": 1.0, "km": 1000.0}
EVEN_DEG = 1e-4  # longitudes that come round: the last cell ends where the first begins
MARGIN_CELLS = 2  # beyond an area: what bilinear values at its edge need, and one more
EDGE_NODES = 33  # along each side of an area, whose sides are curved in another projection


class Places(TypedDict):
    """Ascending cell centres, their indices in the file, and the CRS."""

    x: Floats
    y: Floats
    cols: Ints
    rows: Ints
    crs_wkt: str


def wkt_of(user: Any, where: str) -> str:
    """A CRS in any form as WKT; an unknown one is refused."""
    try:
        return str(CRS.from_user_input(user).to_wkt())
    except CRSError as error:
        fix = "write the CRS into the file as WKT (crs_wkt), or set crs"
        raise InputProblem(where, "CRS", str(error)[:120], "a known coordinate reference system", fix) from None


def coordinate(values: Floats, units: str, what: str, crs: str, where: str) -> Floats:
    """Cell centres in units of the CRS.

    Raises
    ------
    InputProblem : units that are not known.
    """
    if units in _LENGTHS_M and not is_geographic(crs):
        return values * (_LENGTHS_M[units] / unit_of(crs))
    if units and not units.startswith("degree"):
        wanted = "degrees, or one of " + ", ".join(_LENGTHS_M) + " in a map projection"
        raise InputProblem(where, f"units of {what}", units, wanted, "write the coordinates in such units")
    return values


def ordered(values: Floats, round_deg: bool, where: str, what: str) -> tuple[Floats, Ints]:
    """Coordinates made ascending, and where each lies in the file; longitudes run on at the seam, each once.

    Raises
    ------
    InputProblem : empty values, or an order that neither rises nor falls.
    """
    nodes = np.unwrap(values, period=360) if round_deg else values
    places = np.arange(nodes.size)
    if nodes.size > 1 and nodes[-1] < nodes[0]:
        nodes, places = nodes[::-1], places[::-1]
    if not (nodes.size and np.isfinite(nodes).all() and (np.diff(nodes) > 0).all()):
        raise InputProblem(where, what, "empty, repeated or unordered values", "rising or falling cell centres",
                           "correct the coordinates of the file")  # fmt: skip
    if round_deg:
        once = nodes < nodes[0] + 360 - EVEN_DEG
        nodes, places = nodes[once], places[once]
        nodes = nodes - 360 * np.floor((nodes[0] + 180) / 360)
    return nodes, places


def placed(x: Floats, y: Floats, crs: str, where: str) -> Places:
    """Cell centres in the file's order as places.

    Raises
    ------
    InputProblem : unordered or impossible coordinates, or a single cell, whose size nobody can tell.
    """
    round_deg = is_geographic(crs)
    nodes_x, cols = ordered(x, round_deg, where, "x or longitude")
    nodes_y, rows = ordered(y, False, where, "y or latitude")
    if round_deg and np.abs(nodes_y).max() > 90.001:
        raise InputProblem(where, "latitude", f"up to {np.abs(nodes_y).max():g}", "at most 90 degrees",
                           "correct the coordinates, or the CRS, of the file")  # fmt: skip
    if nodes_x.size == nodes_y.size == 1:
        raise InputProblem(where, "grid", "one cell", "at least two cells along an axis", "supply more cells")
    return {"x": nodes_x, "y": nodes_y, "cols": cols, "rows": rows, "crs_wkt": crs}


def near_area(places: Places, box: Box, where: str) -> Places:
    """The cells near a box of longitude and latitude (west, south, east, north). [deg]

    Raises
    ------
    InputProblem : none is near.
    """
    west, south, east, north = box
    east += 360 * (east < west)
    x, y = places["x"], places["y"]
    part = np.linspace(0, 1, EDGE_NODES)
    lon = np.concatenate([west + (east - west) * part] * 2 + [np.full(EDGE_NODES, v) for v in (west, east)])
    lat = np.concatenate([np.full(EDGE_NODES, v) for v in (south, north)] + [south + (north - south) * part] * 2)
    u, v = between("EPSG:4326", places["crs_wkt"]).transform(lon, lat)
    slack_x, slack_y = (MARGIN_CELLS * float(np.diff(n).max()) if n.size > 1 else np.inf for n in (x, y))
    rows = np.flatnonzero((y >= v.min() - slack_y) & (y <= v.max() + slack_y))
    if is_geographic(places["crs_wkt"]):
        u = np.unwrap(u, period=360)
        middle = (u.min() + u.max()) / 2
        turned = middle + np.mod(x - middle + 180, 360) - 180
    else:
        turned = x
    order = np.argsort(turned)
    cols = order[(turned[order] >= u.min() - slack_x) & (turned[order] <= u.max() + slack_x)]
    if not (rows.size and cols.size):
        found = f"x {x[0]:g} .. {x[-1]:g}, y {y[0]:g} .. {y[-1]:g}"
        wanted = f"cells near {west:.3f} .. {east:.3f} E, {south:.3f} .. {north:.3f} N"
        raise InputProblem(where, "area", found, wanted, "supply a grid that covers the tiles")
    return Places(x=turned[cols], y=y[rows], cols=places["cols"][cols], rows=places["rows"][rows], crs_wkt=places["crs_wkt"])
