#!/usr/bin/env bash
# The one command that checks everything: style, types, tests, documented examples, and the installed wheel.
set -Eeuo pipefail
cd -- "$(dirname -- "${BASH_SOURCE[0]}")/.."
# shellcheck source=deploy/venv.sh
. deploy/venv.sh

step='preparing'
scratch=''
finish() {
  local code=$?
  [ -z "$scratch" ] || rm -rf -- "$scratch"
  if [ "$code" -ne 0 ]; then printf '== FAILED while %s\n' "$step" >&2; fi
}
trap finish EXIT
run() {
  step=$1
  say "$step ($SECONDS s)"
  shift
  "$@"
}

prepare_venv 'postgres,test'
run 'checking style' .venv/bin/ruff check .
run 'checking layout' .venv/bin/ruff format --check .
run 'checking types' .venv/bin/mypy
run 'running tests and documented examples' .venv/bin/python -m pytest -n 2 --dist loadscope -q "$@"

scratch=$(mktemp -d)
# built from a copy of what git knows, so that a file forgotten in git is missed here and not at a user's
copy_tree() {
  mkdir "$scratch/tree"
  if ! git rev-parse --is-inside-work-tree >/dev/null 2>&1; then
    cp -R pyproject.toml README.md connectors rules watcher "$scratch/tree"
    return
  fi
  git ls-files -z --cached | tar --null --files-from=- --ignore-failed-read -cf - | tar -xf - -C "$scratch/tree"
}
run 'copying the tracked files' copy_tree
run 'building the wheel' .venv/bin/python -m pip wheel -qq --no-deps --wheel-dir "$scratch" "$scratch/tree"
run 'making a second environment' new_venv "$scratch/plain"
run 'installing the wheel without optional packages' \
  "$scratch/plain/bin/python" -m pip install -qq --no-compile -c constraints.txt "$scratch"/gapbell-*.whl
start_wheel() {
  cd "$scratch"
  plain/bin/gapbell --help >help.txt
  grep -qi usage help.txt
  plain/bin/python -I - <<'PY'
import importlib
import importlib.util
import pkgutil
from pathlib import Path

for name in ("psycopg", "openpyxl", "holidays", "dask", "aiosmtpd", "pytest", "hypothesis"):
    assert importlib.util.find_spec(name) is None, f"{name} should not be here"
for top in ("rules", "connectors", "watcher"):
    package = importlib.import_module(top)
    for module in pkgutil.walk_packages(package.__path__, f"{top}."):
        # the trial needs an optional package, migrations and __main__ act when imported
        if not {"migrations", "trial", "__main__"} & set(module.name.split(".")):
            importlib.import_module(module.name)
    here = Path(package.__file__).parent
    for path in Path("tree", top).rglob("*"):
        if path.is_file() and "__pycache__" not in path.parts:
            inside = path.relative_to(Path("tree", top))
            assert (here / inside).is_file(), f"{top}/{inside} is not in the wheel"
PY
}
run 'starting the installed wheel' start_wheel
say "all green after $SECONDS s"
