"""Where do compiled kernels lie, and when are they stale?"""

from __future__ import annotations

import hashlib
import os
import platform
import sys
import tempfile
from importlib.metadata import version
from pathlib import Path

_LIBRARIES = ("numba", "numpy", "llvmlite")


def kernels_id() -> str:
    """A short hash of every *_fast.py and of what compiles it: any change gives another folder."""
    digest = hashlib.sha256()
    for path in sorted(Path(__file__).parent.glob("*_fast.py")):
        digest.update(path.name.encode() + path.read_bytes())
    for name in _LIBRARIES:
        digest.update(f"{name} {version(name)}".encode())
    digest.update(f"{sys.version} {platform.machine()}".encode())
    return digest.hexdigest()[:16]


def _parents() -> list[Path]:
    """Folders to try, best first; HOME may be missing or closed."""
    tries = []
    if os.environ.get("NUMBA_CACHE_DIR"):
        tries.append(Path(os.environ["NUMBA_CACHE_DIR"]))
    if os.environ.get("XDG_CACHE_HOME"):
        tries.append(Path(os.environ["XDG_CACHE_HOME"]) / "firnlight")
    if os.environ.get("HOME"):
        tries.append(Path(os.environ["HOME"]) / ".cache" / "firnlight")
    tries.append(Path(tempfile.gettempdir()) / f"firnlight-{os.getuid()}")
    return tries


def _ours(folder: Path) -> bool:
    """Nobody else may write there, and it is no link that another user could turn."""
    found = folder.lstat()
    return found.st_uid == os.getuid() and not found.st_mode & 0o022


def _usable(folder: Path) -> bool:
    """Make the folder; it must be ours alone to write, since what lies there is run."""
    try:
        folder.parent.mkdir(parents=True, exist_ok=True, mode=0o700)
        folder.mkdir(exist_ok=True, mode=0o700)
        # everybody may write beside our parent in the temporary folder, so that parent must be ours too
        open_to_all = folder.parent.parent == Path(tempfile.gettempdir())
        if not _ours(folder) or (open_to_all and not _ours(folder.parent)):
            return False
        with tempfile.TemporaryFile(dir=folder):
            return True
    except OSError:
        return False


def prepare() -> Path:
    """Set numba's cache folder, before numba is first imported; the folder chosen.

    Called at the top of every *_fast.py. A second call keeps the first one's folder.
    """
    name = f"kernels-{kernels_id()}"
    current = os.environ.get("NUMBA_CACHE_DIR", "")
    if Path(current).name == name:
        return Path(current)
    for parent in _parents():
        if _usable(parent / name):
            os.environ["NUMBA_CACHE_DIR"] = str(parent / name)
            break
    else:
        os.environ["NUMBA_CACHE_DIR"] = tempfile.mkdtemp(prefix="firnlight-kernels-")
    loaded = sys.modules.get("numba")
    if loaded is not None:
        loaded.core.config.reload_config()
    return Path(os.environ["NUMBA_CACHE_DIR"])
