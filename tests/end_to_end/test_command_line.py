"""Are the commands polite: examples first, nearest words, exit codes, tables that can be read by machines?"""

import csv
import json
import subprocess
import sys
import time

import pyarrow.parquet as pq
import pytest

from firnlight.cli import commands, main


@pytest.mark.parametrize("name", sorted(commands.commands))
def test_help_begins_with_two_examples_and_ends_with_the_next_command(name, capsys):
    assert main([name, "--help"]) == 0
    text = capsys.readouterr().out
    body = text.split("\n\n", 1)[1]
    assert body.lstrip().startswith("Examples:")
    assert text.count(f"firnlight {name}") >= 2
    assert "Next:" in text


def test_a_wrong_word_is_answered_with_the_nearest(capsys):
    assert main(["nigth", "x.toml"]) == 2
    assert "did you mean 'night'?" in capsys.readouterr().err


def test_no_arguments_show_the_help(capsys):
    assert main([]) == 0
    assert "firnlight night workflows/nightly.toml" in capsys.readouterr().out


def test_help_needs_no_heavy_library():
    code = (
        "import sys; from firnlight.cli import main; main(['--help']); "
        "heavy = {'numpy', 'numba', 'rasterio', 'dask', 'pandas', 'pyarrow'} & set(sys.modules); assert not heavy, heavy"
    )
    begun = time.monotonic()
    subprocess.run([sys.executable, "-c", code], check=True, capture_output=True)
    assert time.monotonic() - begun < 5  # a hang, not a speed goal: that stands in tests/bench


def test_a_broken_pipe_and_a_missing_workflow_are_no_tracebacks(tmp_path, capsys):
    assert main(["night", str(tmp_path / "none.toml")]) == 2
    assert "no such file" in capsys.readouterr().err


def test_a_budget_can_be_written_in_three_forms_that_agree(done_area):
    for ending in ("csv", "json", "parquet"):
        code, _, err = done_area.run("budget", "--every", "day", "--out", str(done_area.folder / f"budget.{ending}"))
        assert code == 0
        assert "rows written" in err
    with (done_area.folder / "budget.csv").open(encoding="utf-8") as stream:
        from_csv = list(csv.DictReader(stream))
    # the units of a .csv lie in the .json beside it, so the .json form is written anew
    assert "units" in json.loads((done_area.folder / "budget.json").read_text(encoding="utf-8"))
    assert done_area.run("budget", "--every", "day", "--out", str(done_area.folder / "again.json"))[0] == 0
    from_json = json.loads((done_area.folder / "again.json").read_text(encoding="utf-8"))["rows"]
    table = pq.read_table(done_area.folder / "budget.parquet")
    assert table.schema.field("absorbed_wm2").metadata[b"unit"] == b"W m-2"
    assert len(from_csv) == len(from_json) == table.num_rows
    for text, plain, typed in zip(from_csv, from_json, table.to_pylist(), strict=True):
        assert text["row_id"] == plain["row_id"] == typed["row_id"]
        if plain["absorbed_wm2"] is None:
            assert text["absorbed_wm2"] == ""
        else:
            assert float(text["absorbed_wm2"]) == plain["absorbed_wm2"] == typed["absorbed_wm2"]


def test_a_mean_below_the_coverage_limit_is_empty_and_never_zero(done_area):
    done_area.edit("[regions]", "[regions]\nleast_coverage = 1.0")
    _, text, _ = done_area.run("budget", "--by", "region", "--json")
    for row in json.loads(text)["rows"]:
        assert row["absorbed_wm2"] is None
        assert row["coverage"] < 1


def test_ground_of_overlapping_regions_counts_once_without_the_region_key(done_area):
    _, text, _ = done_area.run("budget", "--by", "land_cover", "--json")
    covers = json.loads(text)["rows"]
    _, text, _ = done_area.run("budget", "--by", "", "--json")
    whole = json.loads(text)["rows"]
    assert len(whole) == 1
    assert sum(row["area_km2"] for row in covers) == pytest.approx(whole[0]["area_km2"])


@pytest.mark.parametrize(
    ("arguments", "said"),
    [
        (["--by", "basin"], "elevation_band"),
        (["--out", "x.xlsx"], ".parquet"),
        (["--since", "1999-01-01", "--until", "1999-02-01"], "none in the span"),
        (["--year", "2031", "--since", "2031-01-01"], "leave one out"),
    ],
    ids=["key", "ending", "span", "year"],
)
def test_wrong_use_of_budget_is_said(done_area, arguments, said):
    code, _, err = done_area.run("budget", *arguments)
    assert code == 2
    assert said in err


def test_status_tells_what_waits_and_what_ran(done_area):
    code, out, _ = done_area.run("status")
    assert code == 0
    assert "Up to date: 4 tile-days." in out
    assert "exit code 0" in out
    next(done_area.store.rglob("albedo.tif")).unlink()
    _, out, _ = done_area.run("status", "--waiting")
    assert "Waits: 1 tile-days." in out
    assert "file gone: albedo" in out


def test_demo_refuses_a_folder_with_something_in_it(tmp_path, capsys):
    (tmp_path / "mine.txt").write_text("x", encoding="utf-8")
    assert main(["demo", str(tmp_path)]) == 2
    assert "not empty" in capsys.readouterr().err


def test_a_failed_tile_day_stays_in_the_status_until_it_is_made(area, monkeypatch):
    from firnlight.run import night as nights

    def fail(job):
        def run(threads):
            raise RuntimeError("the engine coughed")

        return run

    with monkeypatch.context() as patch:
        patch.setattr(nights, "job_call", fail)
        assert area.run("night")[0] == 3
    _, out, _ = area.run("status", "--failed")
    assert out.startswith("Refused or failed: 4.")
    assert "the engine coughed" in out
    assert area.night() == 0
    assert area.run("status", "--failed")[1] == "Refused or failed: 0.\n"


def test_ground_that_is_missing_or_damaged_for_one_tile_stops_no_command(area):
    path = area.folder / "static/FELL-B/land_cover.tif"
    data = path.read_bytes()
    for spoil in (lambda: path.unlink(), lambda: path.write_bytes(data[: len(data) // 2])):
        spoil()
        code, _, err = area.run("check")
        assert code == 3
        assert "land_cover" in err
        assert area.run("night", "--dry-run")[0] == 0
        code, out, _ = area.run("night", "--quiet")
        assert code == 3
        assert "Traceback" not in out
        code, out, _ = area.run("status", "--failed")
        assert code == 0
        assert "land_cover" in out
    path.write_bytes(data)
    assert area.night() == 0


def test_a_dry_run_without_ledger_says_what_a_night_would_find(done_area):
    (done_area.store / "ledger.db").unlink()
    _, out, _ = done_area.run("night", "--dry-run")
    assert out.count("done (nothing has changed)") == 4
    assert not (done_area.store / "ledger.db").exists()


def test_totals_whose_scene_is_gone_are_named(done_area):
    import shutil

    shutil.rmtree(done_area.items()[0].parent)
    assert done_area.night() == 0
    assert "no scene of theirs can be used now: 1 tile-days" in done_area.run("status")[1]


@pytest.mark.parametrize(
    "arguments",
    [["budget", "--year", "99999"], ["night", "--on", "0001-01-05", "--dry-run"], ["budget", "--out", "nowhere/x.csv"]],
)
def test_absurd_dates_and_folders_are_no_tracebacks(done_area, arguments):
    code, _, err = done_area.run(*arguments)
    assert code in (0, 2)
    assert "Traceback" not in err


def test_the_list_of_commands_tells_what_each_does(capsys):
    main(["--help"])
    assert "night     Turn every due scene into maps" in capsys.readouterr().out
