"""Makes the picture of the README from the sample's store: .venv/bin/python tests/bench/readme_picture.py

Run workflows/first-night before it.
"""

import io
from pathlib import Path

import rasterio
from PIL import Image

from firnlight.report.figures import MapPanel, map_picture

ROOT = Path(__file__).parents[2]
DAY = ROOT / "store/maps/FELL-B/2031-05-14"


def main() -> None:
    panels = []
    for name, title in (
        ("albedo", "Albedo, tile FELL-B, 14 May 2031"),
        ("absorbed_shortwave", "Absorbed sunlight, mean of the day"),
        ("net_radiation", "Net radiation, mean of the day"),
    ):
        with rasterio.open(DAY / f"{name}.tif") as dataset:
            panels.append(MapPanel(name, dataset.read(1), title))
    note = (
        "Invented area (Morrowfell snowfields). Hatched: not seen (cloud, shadow, outside the scene). Clear-sky insolation."
    )
    picture = Image.open(io.BytesIO(map_picture(panels, 30.0, note))).convert("RGB")
    picture.quantize(128).save(ROOT / "sample_tiles/first_night.png", optimize=True)  # the sample is to stay small


if __name__ == "__main__":
    main()
