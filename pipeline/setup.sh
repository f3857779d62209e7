# Makes .venv at the project's root; sourced by workflows/first-night and tests/run, not run by users.
# Tested on Linux x86_64 with Python 3.11; other systems and newer Pythons are not tested.
# shellcheck shell=bash

unset PROJ_DATA PROJ_LIB GDAL_DATA GDAL_DRIVER_PATH PYTHONPATH PYTHONHOME

firnlight_root=$(cd -- "$(dirname -- "${BASH_SOURCE[0]}")/.." && pwd -P)
firnlight_venv="$firnlight_root/.venv"
firnlight_lock="$firnlight_root/pipeline/lock.txt"

firnlight_say() { printf '%s\n' "$*" >&2; }

firnlight_find_python() {
  local name
  for name in "${FIRNLIGHT_PYTHON:-}" python3.11 python3.12 python3.13 python3; do
    [ -n "$name" ] || continue
    if command -v "$name" >/dev/null 2>&1 &&
      "$name" -c 'import sys; sys.exit(sys.version_info < (3, 11))' >/dev/null 2>&1; then
      command -v "$name"
      return 0
    fi
  done
  firnlight_say "firnlight needs Python 3.11 or newer and found none."
  firnlight_say "  Fix: install it (Debian: apt-get install python3.11 python3.11-venv), or set FIRNLIGHT_PYTHON to its path."
  return 1
}

# what the set-up was made from; while it is the same, pip is not called
firnlight_stamp_of() { # part, python
  {
    printf '%s\n' "$1" "$firnlight_root"
    "$2" -c 'import sys; print(sys.version, sys.base_prefix)' || return 1
    cat "$firnlight_root/pyproject.toml" "$firnlight_lock" "$firnlight_root/pipeline/setup.sh"
  } | "$2" -c 'import hashlib, sys; print(hashlib.sha256(sys.stdin.buffer.read()).hexdigest())'
}

firnlight_holds() { # part, python: the stamp matches and the interpreter starts
  [ -f "$firnlight_venv/stamp-$1" ] && [ "$(cat "$firnlight_venv/stamp-$1")" = "$(firnlight_stamp_of "$1" "$2")" ] &&
    "$firnlight_venv/bin/python" -c '' >/dev/null 2>&1
}

firnlight_make() { # part, python
  local part=$1 python=$2 free target
  free=$(df -Pk "$firnlight_root" | awk 'NR==2 {print $4}')
  if [ "${free:-9999999}" -lt 2000000 ]; then
    firnlight_say "less than 2 GB free at $firnlight_root: the set-up needs about 1.2 GB. Make room first."
    return 6
  fi
  # a half-made or moved environment has no matching stamp of its first part
  if [ "$part" = run ] || ! firnlight_holds run "$python"; then
    rm -rf "$firnlight_venv"
    firnlight_say "Setting up (once, about a minute): $firnlight_venv"
    if ! "$python" -m venv "$firnlight_venv" >&2; then
      rm -rf "$firnlight_venv"
      firnlight_say "$python cannot make a virtual environment."
      firnlight_say "  Fix: install its venv module (Debian: apt-get install python3.11-venv)."
      return 2
    fi
  fi
  rm -f "$firnlight_venv/stamp-$part"
  # pip splits PIP_CONSTRAINT at spaces, which the project's path may hold
  target=$(mktemp -d) || return 1
  cp "$firnlight_lock" "$target/constraints.txt"
  if ! (
    cd "$firnlight_root" || exit 1
    extra=.
    [ "$part" = dev ] && extra='.[dev]'
    cache=()
    { [ -n "${HOME:-}" ] && [ -w "$HOME" ]; } || cache=(--no-cache-dir)
    PIP_CONSTRAINT="$target/constraints.txt" "$firnlight_venv/bin/python" -m pip install --quiet \
      --disable-pip-version-check "${cache[@]}" --editable "$extra" >&2
  ); then
    rm -rf "$target"
    firnlight_say "pip could not install the libraries (its words are above)."
    firnlight_say "  Fix: see that the package registry can be reached, then run the same command: it starts again."
    return 1
  fi
  rm -rf "$target"
  "$firnlight_venv/bin/python" "$firnlight_root/pipeline/check_lock.py" "$firnlight_lock" || return 1
  firnlight_stamp_of "$part" "$python" >"$firnlight_venv/stamp-$part"
}

# firnlight_setup run|dev: the environment with that part, made where it is not there
firnlight_setup() {
  local want=$1 python part
  python=$(firnlight_find_python) || return 2
  local parts=(run)
  [ "$want" = dev ] && parts=(run dev)
  for part in "${parts[@]}"; do firnlight_holds "$part" "$python" || break; done
  if firnlight_holds "$part" "$python" && [ "$part" = "$want" ]; then return 0; fi
  exec 9>"$firnlight_root/.setup.lock"
  if ! flock -n 9; then
    firnlight_say "Another set-up is running; waiting for it."
    flock 9
  fi
  for part in "${parts[@]}"; do
    if ! firnlight_holds "$part" "$python"; then
      firnlight_make "$part" "$python" || { local code=$?; exec 9>&-; return "$code"; }
    fi
  done
  exec 9>&-
}
