"""Do the stated uncertainties of a budget's rows fit together, whatever the keys and the span?"""

import json
import math
import shutil

import pytest

from firnlight.cli import main

PARTS = ("absorbed_u_independent", "absorbed_u_local", "absorbed_u_shared")
NO_LIMIT = "[regions]\nleast_coverage = 0.0"
EDITS = {
    "[regions]": NO_LIMIT,
    "\nlocal_uncertainty = 0.03": "\nlocal_uncertainty = 0.08",
    "correlation_length_m = 1500.0": "correlation_length_m = 1000.0",
    "\nuncertainty_wm2 = 2.0": "\nuncertainty_wm2 = 6.0",
    "local_uncertainty_wm2 = 6.0": "local_uncertainty_wm2 = 9.0",
}


@pytest.fixture(scope="module")
def done_workflow(made_area, tmp_path_factory):
    """Local errors of albedo, sky and longwave over tiles of a few correlation lengths; no row is left empty."""
    workflow = shutil.copytree(made_area, tmp_path_factory.mktemp("uncertain") / "area") / "workflow.toml"
    text = workflow.read_text(encoding="utf-8")
    for old, new in EDITS.items():
        assert old in text
        text = text.replace(old, new)
    workflow.write_text(text, encoding="utf-8")
    assert main(["night", str(workflow), "--quiet"]) == 0
    return workflow


@pytest.fixture
def uncertain_area(area, done_workflow):
    area.workflow = done_workflow  # tests only read
    return area


def rows(area, by, *arguments):
    code, text, err = area.run("budget", "--by", by, "--json", "--quiet", *arguments)
    assert code == 0, err
    return [row for row in json.loads(text)["rows"] if row["cell_count"]]


KEYS = ("", "region", "land_cover", "region,elevation_band", "region,elevation_band,land_cover,snow")


def test_the_parts_of_each_row_add_up_to_its_uncertainty(uncertain_area):
    for every in ((), ("--every", "day")):
        for by in KEYS:
            for row in rows(uncertain_area, by, *every):
                independent, local, shared = (row[name] for name in PARTS)
                assert min(independent, local, shared) > 0
                assert row["absorbed_u"] == pytest.approx(math.hypot(independent, local, shared), rel=1e-12)
                # longwave: 6 shared, and 9 of each day at one place
                assert row["absorbed_u"] ** 2 + 6**2 < row["net_radiation_u"] ** 2
                assert row["net_radiation_u"] ** 2 < row["absorbed_u"] ** 2 + 6**2 + 9**2 * (1 + 1e-9)
                # 5 % of what is absorbed is shared by all light; the sensor's calibration lies on top
                assert shared > 0.01 * row["absorbed_wm2"] * 0.999  # of the sky alone


def grouped(area, keys, every):
    """Uncertainty of each row by region alone, and (uncertainty, share of the area) of its parts by finer keys."""
    parts = {}
    for row in rows(area, keys, *every):
        parts.setdefault((row["period_start"], row["region"]), []).append(row)
    for whole in rows(area, "region", *every):
        yield whole, parts[whole["period_start"], whole["region"]]


@pytest.mark.parametrize("keys", ["region,snow", "region,elevation_band", "region,elevation_band,land_cover,snow"])
@pytest.mark.parametrize("every", [(), ("--every", "day")], ids=["span", "days"])
def test_a_region_is_less_certain_than_independent_parts_and_more_than_parts_in_step(uncertain_area, keys, every):
    between = 0
    for whole, parts in grouped(uncertain_area, keys, every):
        share = [row["seen_km2"] / whole["seen_km2"] for row in parts]
        assert sum(share) == pytest.approx(1)
        for name in ("absorbed_u", "net_radiation_u", *PARTS):
            weighted = [part[name] * w for part, w in zip(parts, share, strict=True)]
            # 0.5 %: a sum over blocks is not exact (correlation.sum_variance)
            assert math.hypot(*weighted) * 0.995 <= whole[name] <= sum(weighted) * 1.005
            between += len(parts) > 3 and math.hypot(*weighted) * 1.2 < whole[name]
        independent = math.hypot(*(part[PARTS[0]] * w for part, w in zip(parts, share, strict=True)))
        assert whole[PARTS[0]] == pytest.approx(independent, rel=1e-9)
    assert between > 10 or keys == "region,snow"


def test_shared_errors_of_one_sensor_add_fully(uncertain_area):
    # calibration grows with albedo and the sky's error with what is absorbed, each of one sign: of two parts the sums
    # per source add, so that the whole is near the parts in step
    for whole, parts in grouped(uncertain_area, "region,elevation_band", ()):
        in_step = sum(part["absorbed_u_shared"] * part["seen_km2"] for part in parts) / whole["seen_km2"]
        assert 0.9 * in_step < whole["absorbed_u_shared"] <= in_step * (1 + 1e-9)


def test_many_days_are_more_certain_of_weather_and_no_more_of_the_sensor(uncertain_area):
    days = {}
    for row in rows(uncertain_area, "region", "--every", "day"):
        days.setdefault(row["region"], []).append(row)
    spans = {row["region"]: row for row in rows(uncertain_area, "region")}
    assert any(len(seen) == 2 for seen in days.values())
    for region, seen in days.items():
        weight = [row["cell_count"] / sum(one["cell_count"] for one in seen) for row in seen]
        for name in ("absorbed_u_local", "net_radiation_u"):
            each = [row[name] * w for row, w in zip(seen, weight, strict=True)]
            assert math.hypot(*each) * 0.995 <= spans[region][name] <= sum(each) * 1.005


def test_the_local_error_of_the_sky_is_another_each_day_and_that_of_albedo_is_not(area):
    area.edit("[regions]", NO_LIMIT)
    found, before = {}, 0.03
    for sky in (0.0, 0.3):
        area.edit(f"\nlocal_uncertainty = {before}", f"\nlocal_uncertainty = {sky}")
        before = sky
        assert area.night("--quiet") == 0
        found[sky] = rows(area, "region", "--every", "day"), rows(area, "region")
    for plain, more in zip(*(days + spans for days, spans in found.values()), strict=True):
        assert plain["absorbed_wm2"] == more["absorbed_wm2"]
        assert (plain["albedo_u"], plain["absorbed_u_shared"]) == (more["albedo_u"], more["absorbed_u_shared"])
        assert 0 < plain["absorbed_u_local"] < more["absorbed_u_local"]
        assert plain["net_radiation_u"] < more["net_radiation_u"]
    (days, spans), (more_days, more_spans) = found.values()
    for span, more_span in zip(spans, more_spans, strict=True):
        pairs = zip(days, more_days, strict=True)
        seen = [(one, more, one["seen_km2"]) for one, more in pairs if one["region"] == span["region"]]
        whole = sum(km2 for *_, km2 in seen)
        sky = [sky_part(one, more) * km2 / whole for one, more, km2 in seen]
        assert sky_part(span, more_span) == pytest.approx(math.hypot(*sky), rel=1e-9)
        albedo = [one["absorbed_u_local"] * km2 / whole for one, _, km2 in seen]
        # one error through all days, though snow and light fall on other ground each day
        assert span["absorbed_u_local"] == pytest.approx(sum(albedo), rel=0.05)
    assert sum(row["region"] == spans[0]["region"] for row in days) == 2


def sky_part(plain, more):
    """Local uncertainty that came with the sky."""
    return math.sqrt(more["absorbed_u_local"] ** 2 - plain["absorbed_u_local"] ** 2)
