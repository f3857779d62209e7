"""Do threads, block sizes and a real cluster give the same bytes?"""

import json
import shutil

import pytest
import rasterio

from firnlight.run.night import run_night

BLOCKS = [(128, 128), (256, 512), (1024, 1024), (17, 80)]


def results(area):
    return {name: data for name, data in area.files().items() if not name.endswith("scene.json")}


@pytest.fixture
def expected(done_area):
    found = results(done_area)
    shutil.rmtree(done_area.store)
    return found


@pytest.mark.parametrize("workers", [1, 2, 4])
@pytest.mark.parametrize("block", BLOCKS, ids=str)
def test_threads_and_blocks_change_no_byte(area, expected, workers, block):
    area.edit("workers = ", f"workers = {workers} #")
    assert run_night(area.workflow, block=block).exit_code == 0
    assert results(area) == expected


@pytest.mark.cluster
def test_two_worker_processes_change_no_byte(area, expected):
    area.edit('run_on = "threads"', 'run_on = "processes"')
    area.edit("workers = ", "workers = 2 #")
    assert run_night(area.workflow).exit_code == 0
    found = results(area)
    assert found == expected
    with rasterio.open(next(area.store.rglob("albedo.tif"))) as dataset:
        assert dataset.read(1).any()


@pytest.mark.cluster
def test_a_scheduler_by_address_changes_no_byte(area, expected):
    from distributed import LocalCluster

    with LocalCluster(n_workers=2, threads_per_worker=1, host="127.0.0.1", dashboard_address=None) as cluster:
        assert run_night(area.workflow, cluster=cluster.scheduler_address).exit_code == 0
    assert results(area) == expected


@pytest.mark.cluster
def test_a_truncated_scene_is_refused_by_a_worker_process_too(area):
    item = area.items()[0]
    body = json.loads(item.read_text(encoding="utf-8"))
    body["assets"]["red"].pop("file:checksum")
    item.write_text(json.dumps(body), encoding="utf-8")
    for path in (item.parent / "red.tif", area.folder / "static/FELL-B/elevation.tif"):
        path.write_bytes(path.read_bytes()[: path.stat().st_size * 2 // 3])
    area.edit('run_on = "threads"', 'run_on = "processes"')
    area.edit("workers = ", "workers = 2 #")
    code, _, err = area.run("night")
    assert code == 3
    assert "red.tif" in err
    assert "elevation.tif" in err
    assert "setter" not in err


@pytest.mark.cluster
def test_an_address_where_nobody_answers_is_said(area):
    code, _, err = area.run("night", "--cluster", "tcp://127.0.0.1:9")
    assert code == 2
    assert "a dask scheduler that answers" in err
