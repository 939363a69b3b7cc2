"""The floor plan holds: who may import what, what no file may contain, and how fast the command line starts."""

from __future__ import annotations

import ast
import re
import subprocess
import sys
from pathlib import Path

import pytest

ROOT = Path(__file__).parents[1]
PACKAGES = ("watcher", "connectors", "rules")
MODULES = sorted(
    path for package in PACKAGES for path in (ROOT / package).rglob("*.py") if "__pycache__" not in path.parts
)
OWN = sorted(
    path
    for path in [*MODULES, *(ROOT / "tests").rglob("*.py"), *(ROOT / "deploy").rglob("*.py")]
    if "__pycache__" not in path.parts
)

# rules: no clock, file, network, process, database or logging; data tables come through importlib.resources
RULES_STD = {
    "__future__", "abc", "array", "bisect", "collections", "contextlib", "copy", "dataclasses", "decimal",
    "enum", "fractions", "functools", "hashlib", "heapq", "importlib.resources", "itertools", "json", "math",
    "numbers", "operator", "re", "statistics", "string", "types", "typing", "warnings",
}  # fmt: skip
RULES_THIRD = {"numpy", "scipy"}
# a module above 500 lines stands here with the number it may reach and the reason
GIANTS: dict[str, int] = {}
CONNECTORS_THIRD = {"pandas", "sqlalchemy", "lxml", "defusedxml"}


def imported(path: Path) -> list[str]:
    """Dotted names a file imports, wherever in the file; ``from a import b`` gives a.b."""
    names: list[str] = []
    for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
        if isinstance(node, ast.Import):
            names += [alias.name for alias in node.names]
        elif isinstance(node, ast.ImportFrom):
            assert node.level == 0, f"{path.name} line {node.lineno}: imports are written in full"
            names += [f"{node.module}.{alias.name}" for alias in node.names]
    return names


def within(name: str, allowed: set[str]) -> bool:
    """Whether a dotted name is one of ``allowed`` or lies inside one."""
    return any(name == a or name.startswith(f"{a}.") for a in allowed)


def modules_of(package: str) -> list[Path]:
    return [path for path in MODULES if path.relative_to(ROOT).parts[0] == package]


def tracked() -> list[Path]:
    """Files that git keeps (those in the folder where there is no git)."""
    try:
        done = subprocess.run(["git", "ls-files", "-z"], cwd=ROOT, capture_output=True, check=True)
    except (OSError, subprocess.CalledProcessError):
        return OWN
    return [ROOT / name for name in done.stdout.decode().split("\0") if name and (ROOT / name).is_file()]


@pytest.mark.parametrize("path", modules_of("rules"), ids=lambda p: p.stem)
def test_rules_import_only_mathematics(path: Path) -> None:
    wrong = [
        name
        for name in imported(path)
        if not within(name, RULES_STD | RULES_THIRD | {"rules"}) or within(name, {"scipy.stats"})
    ]
    assert wrong == []


@pytest.mark.parametrize("path", modules_of("rules"), ids=lambda p: p.stem)
def test_rules_open_no_file_and_print_nothing(path: Path) -> None:
    calls = [
        node.func.id
        for node in ast.walk(ast.parse(path.read_text(encoding="utf-8")))
        if isinstance(node, ast.Call) and isinstance(node.func, ast.Name)
    ]
    assert not {"open", "print", "input", "exec", "eval"} & set(calls)


@pytest.mark.parametrize("path", modules_of("connectors"), ids=lambda p: p.stem)
def test_connectors_know_neither_the_watcher_nor_the_rules(path: Path) -> None:
    third = CONNECTORS_THIRD | {"connectors"}
    wrong = [
        name
        for name in imported(path)
        if name.split(".")[0] not in sys.stdlib_module_names and not within(name, third)
    ]
    assert wrong == []


@pytest.mark.parametrize("path", MODULES, ids=lambda p: ".".join(p.relative_to(ROOT).with_suffix("").parts))
def test_product_code_does_without_scipy_stats(path: Path) -> None:
    assert [name for name in imported(path) if within(name, {"scipy.stats"})] == []


def test_every_module_says_what_it_is_for() -> None:
    silent = [
        str(path.relative_to(ROOT))
        for path in OWN
        if path.read_text(encoding="utf-8").strip()
        and not ast.get_docstring(ast.parse(path.read_text(encoding="utf-8")))
    ]
    assert silent == []


def test_no_module_is_a_giant() -> None:
    lengths = {
        str(path.relative_to(ROOT)): len(path.read_text(encoding="utf-8").splitlines()) for path in MODULES
    }
    assert {name: lines for name, lines in lengths.items() if lines > GIANTS.get(name, 500)} == {}


def test_no_tracked_file_is_a_lock_that_names_hosts() -> None:
    assert [p.name for p in tracked() if re.fullmatch(r"uv\.lock|pylock(\..*)?\.toml", p.name)] == []


def test_no_tracked_text_names_a_registry_host_or_a_folder_of_one_machine() -> None:
    # the brackets keep this file from holding what it forbids
    hosts = r"pythonhosted[.]org|pypi[.]org|registry[.]npmjs|--index[-]url"
    folders = r"(?<![\w.~$}])/(?:[h]ome/\w|[U]sers/\w|[r]oot/|[w]ork/(?:main|shared|tmp)|[f]arm/)"
    found = []
    for path in tracked():
        try:
            text = path.read_text(encoding="utf-8")
        except UnicodeDecodeError:
            continue
        found += [
            f"{path.relative_to(ROOT)}:{number}: {line.strip()[:80]}"
            for number, line in enumerate(text.splitlines(), 1)
            if re.search(f"{hosts}|{folders}", line)
        ]
    assert found == []


def test_every_pin_is_exact_and_plain() -> None:
    pins = (ROOT / "constraints.txt").read_text(encoding="utf-8").splitlines()
    odd = [line for line in pins if line and not re.fullmatch(r"[a-z0-9.-]+==[\w.]+( ; [\w' .<>=!]+)?", line)]
    assert odd == []


def test_help_starts_without_the_heavy_packages() -> None:
    code = (
        "import sys\n"
        "sys.argv = ['gapbell', '--help']\n"
        "from watcher.cli import main\n"
        "try:\n    main()\n"
        "except SystemExit as end:\n    assert not end.code, end.code\n"
        "heavy = {'scipy', 'matplotlib', 'pandas', 'alembic', 'apscheduler', 'requests', 'rich'} & set(sys.modules)\n"
        "print('HEAVY', sorted(heavy))\n"
    )
    done = subprocess.run([sys.executable, "-c", code], cwd=ROOT, capture_output=True, text=True, check=False)
    assert done.returncode == 0, done.stderr
    assert "HEAVY []" in done.stdout
