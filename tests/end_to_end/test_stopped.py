"""Is nothing lost when the disk is full, a write fails or the run is killed, and does the same command go on?"""

import resource
import signal
import subprocess
import sys
import time
from contextlib import contextmanager

import pytest

from firnlight.io import cog
from firnlight.run import store


@contextmanager
def files_at_most(size):
    """The system refuses larger files, as a full disk would; SIGXFSZ is ignored by Python."""
    old = resource.getrlimit(resource.RLIMIT_FSIZE)
    resource.setrlimit(resource.RLIMIT_FSIZE, (size, old[1]))
    try:
        yield
    finally:
        resource.setrlimit(resource.RLIMIT_FSIZE, old)


def no_scratch_left(area):
    return not list(area.store.rglob("*.part*"))


def test_a_disk_that_fills_up_ends_the_run_with_6_and_the_same_command_goes_on(area, monkeypatch):
    with monkeypatch.context() as patch, files_at_most(150_000):
        patch.setattr(cog, "LITTLE_ROOM_BYTES", 1 << 60)  # however much is free, the failed write is for want of room
        code, _, err = area.run("night")
    assert code == 6
    assert "No space left on device" in err
    assert ".tif" in err
    assert "Traceback" not in err
    assert no_scratch_left(area)
    assert not list((area.store / "maps").rglob("*.tif"))
    assert area.night() == 0


def test_a_failed_write_with_room_left_is_a_failed_tile_day(area):
    with files_at_most(150_000):
        code, out, err = area.run("night")
    assert code == 3
    assert "4 tile-days failed" in out
    assert "could not be written" in err
    assert no_scratch_left(area)
    assert area.night() == 0


def test_too_little_room_is_said_before_work_starts(area, monkeypatch):
    usage = type("Usage", (), {"free": 1 << 20})
    monkeypatch.setattr(store.shutil, "disk_usage", lambda path: usage)
    code, _, err = area.run("night")
    assert code == 6
    assert "found 1.0 MiB" in err


@pytest.mark.parametrize("number", [signal.SIGKILL, signal.SIGTERM, signal.SIGINT], ids=lambda number: number.name)
@pytest.mark.parametrize("after_s", [0.0, 0.1, 0.3])
def test_a_stopped_run_goes_on_to_the_same_bytes(area, done_bytes, number, after_s):
    command = [sys.executable, "-m", "firnlight", "night", str(area.workflow), "--quiet"]
    process = subprocess.Popen(command, stdout=subprocess.DEVNULL, stderr=subprocess.PIPE)
    while process.poll() is None and not list(area.store.rglob("*.part*")):
        time.sleep(0.01)
    time.sleep(after_s)
    process.send_signal(number)
    _, err = process.communicate(timeout=60)
    # it may have ended before the signal came
    assert process.returncode in (0, -9, 143, 130)
    assert b"Traceback" not in err
    assert area.night("--quiet") == 0
    assert no_scratch_left(area)
    assert area.files() == done_bytes


SIGNAL_IN_A_CALLBACK = """
import ctypes, signal, sys, time
from firnlight.cli.stopping import stoppable

@ctypes.CFUNCTYPE(None)
def called_from_c():
    signal.raise_signal(signal.Signals(int(sys.argv[1])))

with stoppable():
    called_from_c()
    time.sleep(20)
    print("went on")
"""


@pytest.mark.parametrize("number", [signal.SIGTERM, signal.SIGINT], ids=lambda number: number.name)
def test_a_signal_inside_a_callback_from_c_is_not_lost(number):
    done = subprocess.run([sys.executable, "-c", SIGNAL_IN_A_CALLBACK, str(int(number))], capture_output=True, timeout=60)
    assert b"went on" not in done.stdout
    assert b"Exception ignored" not in done.stderr
    assert done.returncode in (143, -signal.SIGINT)


@pytest.fixture
def done_bytes(made_area, tmp_path, capsys):
    """What an unbroken run of the same area gives."""
    import shutil

    from end_to_end.conftest import Area

    shutil.copytree(made_area, tmp_path / "area_done")
    whole = Area(tmp_path / "area_done", capsys)
    assert whole.night("--quiet") == 0
    # items name their scenes relative to themselves, so both areas give the same text
    return whole.files()
