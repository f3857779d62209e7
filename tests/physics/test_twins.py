"""Is each fast kernel equal to its plain reference, and where do compiled kernels lie?"""

import os
import subprocess
import sys
import tempfile
from pathlib import Path

import numpy as np
import pytest

from firnlight.physics.kernel_cache import kernels_id
from twins import TWINS


@pytest.mark.parametrize("seed", range(12))
@pytest.mark.parametrize("name", TWINS)
def test_fast_kernel_equals_the_reference(name, seed):
    """Integers equal to the bit; floats to 1e-12: the two libraries round sine and power differently."""
    fast, reference, arguments = TWINS[name]
    call = arguments(np.random.default_rng(seed))
    results = [out if isinstance(out, tuple) else (out,) for out in (fast(*call), reference(*call))]
    for got, wanted in zip(*results, strict=True):
        got, wanted = np.asarray(got), np.asarray(wanted)
        assert got.shape == wanted.shape
        assert got.dtype == wanted.dtype
        if wanted.dtype.kind == "f":
            np.testing.assert_allclose(got, wanted, rtol=1e-12, atol=1e-12)
        else:
            np.testing.assert_array_equal(got, wanted)


def chosen_folder(settings: dict[str, str | None], then: str = "pass") -> Path:
    """The kernel folder that a fresh Python chooses with these variables, before numba is loaded."""
    code = (
        "import os, sys; from firnlight.physics.kernel_cache import prepare; "
        f"folder = prepare(); assert 'numba' not in sys.modules; {then}; "
        "assert os.environ['NUMBA_CACHE_DIR'] == str(folder); print(folder)"
    )
    kept = {"NUMBA_CACHE_DIR", "XDG_CACHE_HOME", "HOME"}
    env = {key: value for key, value in os.environ.items() if key not in kept}
    env.update({key: value for key, value in settings.items() if value is not None})
    done = subprocess.run([sys.executable, "-c", code], env=env, capture_output=True, text=True, check=True)
    return Path(done.stdout.strip())


def test_kernels_lie_in_the_users_cache(tmp_path):
    name = f"kernels-{kernels_id()}"
    home, xdg, own = str(tmp_path / "home"), str(tmp_path / "xdg"), str(tmp_path / "own")
    assert chosen_folder({"HOME": home}) == tmp_path / "home/.cache/firnlight" / name
    assert chosen_folder({"HOME": home, "XDG_CACHE_HOME": xdg}) == tmp_path / "xdg/firnlight" / name
    asked = {"HOME": home, "XDG_CACHE_HOME": xdg, "NUMBA_CACHE_DIR": own}
    assert chosen_folder(asked) == tmp_path / "own" / name
    # a worker started by us finds the folder chosen and keeps it
    assert chosen_folder({**asked, "NUMBA_CACHE_DIR": f"{own}/{name}"}) == tmp_path / "own" / name
    assert (tmp_path / "own" / name).stat().st_mode & 0o077 == 0


@pytest.mark.parametrize("home", [None, os.devnull], ids=["no HOME", "HOME cannot be written"])
def test_kernels_fall_back_to_a_temporary_folder(tmp_path, home):
    folder = chosen_folder({"HOME": home, "TMPDIR": str(tmp_path)})
    assert folder == tmp_path / f"firnlight-{os.getuid()}" / f"kernels-{kernels_id()}"


def test_a_temporary_folder_that_others_may_write_is_not_trusted(tmp_path):
    """What lies in the cache is run, so another user must not be able to put it there."""
    shared = tmp_path / f"firnlight-{os.getuid()}"
    shared.mkdir()
    shared.chmod(0o777)
    folder = chosen_folder({"TMPDIR": str(tmp_path)})
    assert folder.parent == tmp_path
    assert folder.stat().st_mode & 0o077 == 0


def test_a_second_call_keeps_the_folder_and_the_kernels_are_kept_there(tmp_path):
    run = (
        "assert prepare() == folder; import datetime; from firnlight.physics import clearsky, clearsky_fast; "
        "air = clearsky.Atmosphere.of(0.1, 1.0, 0.3); "
        "clearsky_fast.day_moments(datetime.date(2024, 6, 1), [46.5], [-36.0], [0.0], air)"
    )
    folder = chosen_folder({"HOME": str(tmp_path), "TMPDIR": tempfile.gettempdir()}, run)
    assert list(folder.rglob("*.nbi"))
    assert list(folder.rglob("*.nbc"))
