"""Weather of all kinds through the whole way: sources of insolation, gaps, what the settings tell, wrong places."""

import csv
import json

import numpy as np
import pytest
import rasterio
import xarray as xr

from end_to_end.conftest import GAP, cells, days, rows


def without_day(area, day):
    path = area.folder / "weather.nc"
    with xr.open_dataset(path) as data:
        kept = data.sel(time=[t for t in data.time.values if str(t)[:10] != day]).load()
    path.unlink()
    kept.to_netcdf(path, engine="h5netcdf")


def test_missing_weather_is_a_gap_that_is_told_and_filled_when_it_comes(area):
    whole = (area.folder / "weather.nc").read_bytes()
    day = area.items()[0].stem.split("_")[1]
    day = f"{day[:4]}-{day[4:6]}-{day[6:]}"
    without_day(area, day)
    code, _, err = area.run("night")
    assert code == 0
    assert "air_temperature has gaps" in err
    assert day in err
    for folder in days(area):
        gap = (cells(folder / "net_radiation.tif") == GAP).all()
        assert gap == (folder.name == day)
        assert (cells(folder / "absorbed_shortwave.tif") != GAP).any()
    gone = rows(area, "--since", day, "--until", day, "--by", "region")
    assert all(row["net_radiation_wm2"] is None and row["net_longwave_wm2"] is None for row in gone)
    assert any(row["absorbed_wm2"] is not None for row in gone)
    (area.folder / "weather.nc").write_bytes(whole)
    before = area.times()
    assert area.night("--quiet") == 0
    touched = area.touched_since(before)
    assert touched
    assert all(day in name for name in touched)
    assert not any("albedo" in name or "insolation" in name for name in touched)


SOURCES = {
    "grid": 'source = { grid = "insolation.nc", elevation = { grid = "weather.nc", variable = "surface_altitude" } }',
    "cloud": 'source = "clear-sky"\ncloud = { grid = "weather.nc", variable = "cloud_fraction" }',
    "station": 'source = { station = "high_camp" }',
}


def with_source(area, kind):
    area.edit('source = "clear-sky"', SOURCES[kind])
    about = json.loads((area.folder / "truth/about.json").read_text(encoding="utf-8"))["stations"]["high_camp"]
    text = "\n".join(f"{name} = {value}" for name, value in about.items())
    area.edit("[uncertainty]", f'[stations.high_camp]\nfile = "stations/high_camp.csv"\n{text}\n\n[uncertainty]')


@pytest.mark.parametrize("kind", SOURCES)
def test_cloudy_sources_dim_the_light_and_close(area, done_area_light, kind):
    with_source(area, kind)
    assert area.night("--quiet") == 0
    for day in days(area):
        light = cells(day / "insolation.tif")
        clear = done_area_light[f"{day.parent.name} {day.name}"]
        known = (light != GAP) & (clear != GAP)
        assert known.any()
        assert 0.2 < light[known].mean() / clear[known].mean() < 1.1
    with_net = [row for row in rows(area, "--by", "region") if row["net_radiation_wm2"] is not None]
    assert all(row["net_radiation_wm2"] == pytest.approx(row["absorbed_wm2"] + row["net_longwave_wm2"]) for row in with_net)


@pytest.fixture
def done_area_light(made_area, tmp_path, capsys):
    import shutil

    from end_to_end.conftest import Area

    shutil.copytree(made_area, tmp_path / "clear")
    clear = Area(tmp_path / "clear", capsys)
    assert clear.night("--quiet") == 0
    return {f"{day.parent.name} {day.name}": cells(day / "insolation.tif") for day in days(clear)}


def test_a_supplied_grid_keeps_its_mean_on_slopes(area):
    """Every cell of the tile under one cell of a coarse grid: the mean over the ground is the supplied value."""
    value = 180.0
    times = np.array([np.datetime64(f"{item.stem[7:11]}-{item.stem[11:13]}-{item.stem[13:15]}") for item in area.items()])
    day_starts = np.unique(times)
    hours = (day_starts[:, None] + np.arange(24).astype("timedelta64[h]")).ravel()
    noon = np.maximum(np.cos((np.arange(24) + 0.5 - 14.4) / 24 * 2 * np.pi), 0)
    course = np.tile(noon / noon.mean() * value, day_starts.size)
    data = xr.Dataset(
        {"light": (("time", "lat", "lon"), np.broadcast_to(course[:, None, None], (hours.size, 2, 2)).copy())},
        {"time": hours, "lat": [46.0, 47.0], "lon": [-37.0, -35.0]},
    )
    data.light.attrs.update(units="W m-2", cell_methods="time: mean")
    data.lat.attrs.update(units="degrees_north", standard_name="latitude")
    data.lon.attrs.update(units="degrees_east", standard_name="longitude")
    data.to_netcdf(area.folder / "coarse.nc", engine="h5netcdf")
    area.edit('source = "clear-sky"', 'source = { grid = "coarse.nc", variable = "light", label = "start" }')
    # without cloud every cell is seen, so the maps hold all ground
    for item in area.items():
        quality = item.parent / "quality.tif"
        with rasterio.open(quality, "r+") as dataset:
            dataset.write(np.zeros(dataset.shape, np.uint8), 1)
        body = json.loads(item.read_text(encoding="utf-8"))
        body["assets"]["quality"].pop("file:checksum", None)
        item.write_text(json.dumps(body), encoding="utf-8")
    assert area.night("--quiet") == 0
    for day in days(area):
        light = cells(day / "insolation.tif").astype(float)
        light[light == GAP] = np.nan
        if np.isnan(light).mean() > 0.02:  # a swath that missed part of the tile
            continue
        assert np.nanmean(light) * 0.1 == pytest.approx(value, rel=0.02)
        assert np.nanstd(light) * 0.1 > 5


def test_a_station_table_has_units_in_its_names(area):
    with (area.folder / "stations/high_camp.csv").open(encoding="utf-8") as stream:
        assert "sw_down_wm2" in next(csv.reader(stream))
    with_source(area, "station")
    area.edit('file = "stations/high_camp.csv"', 'file = "stations/nowhere.csv"')
    code, _, err = area.run("night")
    assert code == 2
    assert "nowhere.csv" in err


@pytest.mark.parametrize(
    ("old", "new", "said"),
    [
        ('air_temperature = "air_temperature"', 'air_temperature = "air_temp"', "air_temperature"),
        ('grid = "weather.nc"', 'grid = "wether.nc"', "wether.nc"),
        ('method = "brutsaert1975"', 'method = "brutsaert"', "brutsaert1975"),
    ],
)
def test_wrong_weather_settings_are_said(area, old, new, said):
    area.edit(old, new)
    code, _, err = area.run("night")
    assert code in (2, 3)
    assert said in err
    assert "Traceback" not in err
    assert not list(area.store.rglob("net_radiation.tif"))


def test_a_measured_surface_temperature_stands_for_the_airs(area):
    assert area.night("--quiet") == 0
    day = days(area)[1]  # in July
    before, snow = cells(day / "net_longwave.tif"), cells(day / "quality.tif") & 8 > 0
    path = area.folder / "surface" / day.parent.name / f"{day.name}.tif"
    path.parent.mkdir(parents=True)
    with rasterio.open(day / "albedo.tif") as dataset:
        profile = {"driver": "GTiff", "count": 1, "dtype": "float32", "crs": dataset.crs, "transform": dataset.transform}
        shape = dataset.shape
    kelvin = np.full(shape, 320.0, np.float32)
    kelvin[:, ::2] = -9999.0
    with rasterio.open(path, "w", height=shape[0], width=shape[1], nodata=-9999.0, **profile) as out:
        out.write(kelvin, 1)
    area.edit("[longwave]", '[longwave]\nsurface_temperature = "surface/{tile}/{date}.tif"')
    touched_before = area.times()
    assert area.night("--quiet") == 0
    now, known = cells(day / "net_longwave.tif"), before != GAP
    odd = np.zeros(shape, bool)
    odd[:, 1::2] = True
    assert (now[known & ~odd] == before[known & ~odd]).all()
    assert (now[known & odd & ~snow] < before[known & odd & ~snow] - 500).all()  # warmer ground loses more
    assert (known & odd & snow).sum() > 20
    assert now[known & odd & snow].min() > now[known & odd & ~snow].max()  # snow is not warmer than melting
    touched = area.touched_since(touched_before)
    assert not any("insolation" in name or "albedo" in name for name in touched)
    path.unlink()
    assert area.night("--quiet") == 0
    assert (cells(day / "net_longwave.tif") == before).all()


def test_a_station_in_the_wrong_place_is_told_and_no_number_is_made_of_it(area):
    with_source(area, "station")
    text = area.workflow.read_text(encoding="utf-8")
    place = next(line for line in text.splitlines() if line.startswith("longitude"))
    area.edit(place, "longitude = 60.0")
    code, _, err = area.run("night")
    assert code == 0
    assert "times the clear sky: check its place, clock and units" in err
    for day in days(area):
        assert (cells(day / "insolation.tif") == GAP).all()
        assert (cells(day / "albedo.tif") != GAP).any()


def test_a_supplied_grid_may_lack_the_night_and_its_height_counts_on_slopes_too(area):
    area.edit('source = "clear-sky"', SOURCES["grid"])
    assert area.night("--quiet") == 0
    own = {day: cells(day / "insolation.tif") for day in days(area)}
    path = area.folder / "insolation.nc"
    with xr.open_dataset(path) as data:
        holes = data.load()
    name = next(iter(holes.data_vars.keys() - {"time_bounds"}))
    hour = holes.time.dt.hour.values
    holes[name].values[(hour >= 0) & (hour < 4)] = np.nan
    path.unlink()
    holes.to_netcdf(path, engine="h5netcdf")
    code, _, err = area.run("night")
    assert code == 0
    assert "gaps" not in err
    for day, before in own.items():
        assert (cells(day / "insolation.tif") == before).all()
    with xr.open_dataset(area.folder / "weather.nc") as data:
        low = data.load()
    low.surface_altitude.values[:] = 300.0  # the same light, said to be that of low ground: more arrives higher up
    (area.folder / "low.nc").unlink(missing_ok=True)
    low.to_netcdf(area.folder / "low.nc", engine="h5netcdf")
    area.edit('{ grid = "weather.nc", variable = "surface_altitude" }', '{ grid = "low.nc", variable = "surface_altitude" }')
    assert area.night("--quiet") == 0
    for day, before in own.items():
        now = cells(day / "insolation.tif")
        known = (now != GAP) & (before != GAP)
        assert now[known].mean() > 1.005 * before[known].mean()


def test_gaps_of_static_fields_and_units_told_in_the_settings(area):
    with xr.open_dataset(area.folder / "weather.nc") as data:
        bare = data.load()
    del bare.air_temperature.attrs["units"]
    bare.to_netcdf(area.folder / "bare.nc", engine="h5netcdf")
    area.edit('grid = "weather.nc", air_temperature', 'grid = "bare.nc", air_temperature')
    code, _, err = area.run("night")
    assert code == 3
    assert "units" in err
    area.edit('grid = "bare.nc", air_temperature', 'units = { air_temperature = "K" }, grid = "bare.nc", air_temperature')
    assert area.night("--quiet") == 0
    bare.surface_altitude.values[:] = np.nan
    bare.to_netcdf(area.folder / "holes.nc", engine="h5netcdf")
    area.edit('grid = "bare.nc"', 'grid = "holes.nc"')
    code, _, err = area.run("night")
    assert code == 0
    assert "surface_altitude has gaps" in err
    assert all((cells(day / "net_longwave.tif") == GAP).all() for day in days(area))


def test_an_emissivity_of_an_unknown_cover_is_a_wrong_setting(area):
    area.edit("emissivity = { snow = 0.99,", "emissivity = { snow = 0.99, glacierr = 0.9,")
    code, _, err = area.run("night")
    assert code == 2
    assert "glacierr" in err
    assert not area.store.exists()
