"""How is a number shown to a person? Rounded by its uncertainty, with "no data" where there is none."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence

NO_DATA = "-"


def by_uncertainty(value: float, u: float) -> str:
    """value +- u, both to the second significant digit of u (GUM, JCGM 100:2008, 7.2.6)."""
    if not math.isfinite(value):
        return NO_DATA
    if not math.isfinite(u) or u <= 0:
        return f"{value:.3g}"
    decimals = max(0, 1 - math.floor(math.log10(u)))
    return f"{value:.{decimals}f} ± {u:.{decimals}f}"


def plain(value: object, decimals: int) -> str:
    """A number with fixed decimals and thin thousands, or text as it is."""
    if value is None or (isinstance(value, float) and not math.isfinite(value)):
        return NO_DATA
    if isinstance(value, float):
        return f"{value:,.{decimals}f}".replace(",", " ")
    return str(value)


def band(low: object, high: object) -> str:
    """An elevation band in words."""
    if low is None and high is None:
        return "all"
    if low is None:
        return f"below {high:g} m"
    return f"above {low:g} m" if high is None else f"{low:g} to {high:g} m"


def budget_table(rows: Sequence[Mapping[str, object]], by: Sequence[str], several_periods: bool) -> str:
    """The main columns of a budget as aligned text; the full table is for files."""
    columns: list[tuple[str, list[str]]] = []

    def add(title: str, cells: list[str]) -> None:
        columns.append((title, cells))

    def number(row: Mapping[str, object], name: str) -> float:
        value = row[name]
        return float(value) if isinstance(value, (int, float)) else math.nan

    if several_periods:
        add("from", [str(row["period_start"]) for row in rows])
        add("to", [str(row["period_end"]) for row in rows])
    if "region" in by:
        add("region", [str(row["region_name"]) for row in rows])
    if "elevation_band" in by:
        add("elevation", [band(row["band_low_m"], row["band_high_m"]) for row in rows])
    if "land_cover" in by:
        add("land cover", [str(row["land_cover"]) for row in rows])
    if "snow" in by:
        add("snow", [str(row["snow"]) for row in rows])
    text = len(columns)
    add("area km2", [plain(row["area_km2"], 2) for row in rows])
    add("seen %", [plain(number(row, "coverage") * 100, 0) for row in rows])
    add("albedo", [by_uncertainty(number(row, "albedo"), number(row, "albedo_u")) for row in rows])
    add("incoming W m-2", [plain(row["insolation_wm2"], 1) for row in rows])
    add("reflected W m-2", [plain(row["reflected_wm2"], 1) for row in rows])
    add(
        "absorbed W m-2",
        [by_uncertainty(number(row, "absorbed_wm2"), number(row, "absorbed_u")) for row in rows],
    )
    if any(math.isfinite(number(row, "net_radiation_wm2")) for row in rows):
        add("net longwave W m-2", [plain(row["net_longwave_wm2"], 1) for row in rows])
        add(
            "net radiation W m-2",
            [by_uncertainty(number(row, "net_radiation_wm2"), number(row, "net_radiation_u")) for row in rows],
        )
    add("absorbed GJ", [plain(row["absorbed_gj"], 0) for row in rows])
    widths = [max(len(title), *map(len, cells)) if cells else len(title) for title, cells in columns]

    def line(cells: Sequence[str]) -> str:
        parts = [c.ljust(w) if n < text else c.rjust(w) for n, (c, w) in enumerate(zip(cells, widths, strict=True))]
        return "  ".join(parts).rstrip()

    lines = [line([title for title, _ in columns]), line(["-" * width for width in widths])]
    lines += [line([cells[n] for _, cells in columns]) for n in range(len(rows))]
    return "\n".join(lines)
