# Sourced by the other scripts: makes or reuses .venv with the pinned packages. Usage: prepare_venv EXTRAS
# shellcheck shell=bash

# One thread a process: numpy's own threads only get in each other's way on small machines.
export OPENBLAS_NUM_THREADS=1 OMP_NUM_THREADS=1 MKL_NUM_THREADS=1
export PIP_DISABLE_PIP_VERSION_CHECK=1 PYTHONNOUSERSITE=1
unset PYTHONPATH PYTHONHOME

say() { printf '== %s\n' "$*"; }

is_new_enough() { "$1" -c 'import sys; raise SystemExit(sys.version_info < (3, 11))' >/dev/null 2>&1; }

find_python() {
  local candidate
  for candidate in "${PYTHON:-}" python3 python3.13 python3.12 python3.11 python3.14 python; do
    [ -n "$candidate" ] || continue
    if is_new_enough "$candidate"; then
      command -v "$candidate"
      return
    fi
  done
  printf 'No Python 3.11 or newer found: install one, or set PYTHON to its path.\n' >&2
  return 1
}

new_venv() {
  local python
  python=$(find_python)
  say "making $1 with $("$python" --version)"
  rm -rf -- "$1"
  "$python" -m venv "$1" || {
    printf 'Python cannot make a virtual environment here; on Debian and Ubuntu: apt-get install python3-venv\n' >&2
    return 1
  }
}

# The stamp names what was installed and where; while folder, settings and pins stay the same nothing is installed again.
prepare_venv() {
  local extras=$1 stamp wanted
  wanted=$({ pwd && cat pyproject.toml constraints.txt; } | cksum | tr ' ' '-')
  if ! is_new_enough .venv/bin/python || ! .venv/bin/python -m pip --version >/dev/null 2>&1; then
    new_venv .venv
  fi
  for stamp in ".venv/installed-$extras" ".venv/installed-postgres,test"; do
    if [ -f "$stamp" ] && [ "$(cat "$stamp")" = "$wanted" ]; then
      say "packages in .venv are as pinned"
      return
    fi
  done
  say "installing the pinned packages into .venv (the first time takes a minute or two)"
  .venv/bin/python -m pip install -qq --no-compile -c constraints.txt -e ".[$extras]"
  printf '%s' "$wanted" >".venv/installed-$extras"
}
