"""Does the set-up call pip only when it must, and say clearly what is missing? (no network: pip is a stand-in)"""

import os
import shutil
import subprocess
import sys
from pathlib import Path

import pytest

ROOT = Path(__file__).parents[2]
STAND_IN = """#!/bin/sh
# a Python that makes environments out of itself and counts what pip is asked
case "$*" in
  *"-m venv "*) mkdir -p "$3/bin"; cp "$0" "$3/bin/python"; exit 0 ;;
  *"-m pip install"*) echo "$PIP_CONSTRAINT|$PROJ_DATA|$PYTHONPATH" >> "$CALLS"; [ -z "$PIP_FAILS" ] ; exit $? ;;
  *check_lock.py*) exit 0 ;;
esac
exec {python} "$@"
"""


@pytest.fixture
def tree(tmp_path):
    root = tmp_path / "a folder with spaces"
    (root / "pipeline").mkdir(parents=True)
    for name in ("pyproject.toml", "pipeline/lock.txt", "pipeline/setup.sh", "pipeline/check_lock.py"):
        shutil.copy(ROOT / name, root / name)
    tools = tmp_path / "tools"
    tools.mkdir()
    stand_in = tools / "python3.11"
    stand_in.write_text(STAND_IN.replace("{python}", sys.executable), encoding="utf-8")
    stand_in.chmod(0o755)
    return root


def set_up(root, part="run", python=None, **variables):
    tools, calls = root.parent / "tools", root.parent / "calls"
    environment = {"PATH": f"{tools}:/usr/bin:/bin", "CALLS": str(calls), **variables}
    if python is not None:
        environment["PATH"] = python
    done = subprocess.run(
        ["/bin/bash", "-c", '. "$0/pipeline/setup.sh"; firnlight_setup "$1"', str(root), part],
        env=environment, cwd="/", capture_output=True, text=True, check=False, timeout=60,
    )  # fmt: skip
    return done.returncode, done.stderr, calls.read_text(encoding="utf-8").splitlines() if calls.exists() else []


def test_a_second_set_up_calls_no_pip_and_the_dev_part_adds_one_call(tree):
    assert set_up(tree)[0] == 0
    assert len(set_up(tree)[2]) == 1
    assert len(set_up(tree, "dev")[2]) == 2
    assert len(set_up(tree, "dev")[2]) == 2
    assert len(set_up(tree)[2]) == 2


@pytest.mark.parametrize("name", ["pyproject.toml", "pipeline/lock.txt"])
def test_another_project_file_makes_it_anew(tree, name):
    set_up(tree)
    with (tree / name).open("a", encoding="utf-8") as stream:
        stream.write("\n# changed\n")
    assert len(set_up(tree)[2]) == 2


def test_a_moved_folder_and_a_half_made_set_up_are_remade(tree):
    set_up(tree)
    moved = tree.rename(tree.with_name("elsewhere"))
    assert len(set_up(moved)[2]) == 2
    (moved / ".venv/bin/python").unlink()
    assert len(set_up(moved)[2]) == 3


def test_a_failed_pip_is_said_and_tried_again(tree):
    code, err, _ = set_up(tree, PIP_FAILS="yes")
    assert code != 0
    assert "package registry" in err
    assert set_up(tree)[0] == 0


def test_variables_of_other_installations_are_unset(tree):
    _, _, calls = set_up(tree, PROJ_DATA="/elsewhere", PYTHONPATH="/elsewhere", HOME="")
    assert calls[0].endswith("||")


def test_no_python_is_a_clear_word(tree):
    bare = tree.parent / "bare"
    bare.mkdir()
    for name in ("bash", "dirname", "cat"):
        os.symlink(shutil.which(name), bare / name)
    code, err, _ = set_up(tree, python=str(bare))
    assert code == 2
    assert "Python 3.11 or newer" in err


def test_two_at_once_wait_and_make_it_once(tree):
    tools, calls = tree.parent / "tools", tree.parent / "calls"
    environment = {"PATH": f"{tools}:/usr/bin:/bin", "CALLS": str(calls)}
    command = ["/bin/bash", "-c", '. "$0/pipeline/setup.sh"; firnlight_setup run', str(tree)]
    runs = [subprocess.Popen(command, env=environment, stderr=subprocess.DEVNULL) for _ in range(3)]
    assert [run.wait(timeout=60) for run in runs] == [0, 0, 0]
    assert len(calls.read_text(encoding="utf-8").splitlines()) == 1


def test_the_lock_names_every_library_that_the_project_asks_for():
    import tomllib

    project = tomllib.loads((ROOT / "pyproject.toml").read_text(encoding="utf-8"))["project"]
    wanted = [*project["dependencies"], *project["optional-dependencies"]["dev"]]
    lock = (ROOT / "pipeline/lock.txt").read_text(encoding="utf-8").lower().replace("_", "-")
    for one in wanted:
        name = one.split(">")[0].split("=")[0].split("<")[0].strip().lower()
        assert f"\n{name}==" in lock
