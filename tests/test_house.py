"""The house rules that no one should have to remember: arrows, public names, cheap help."""

import ast
import importlib
import os
import subprocess
import sys
from pathlib import Path

import pytest

ROOT = Path(__file__).parent.parent
ORDER = ("procedures", "instruments", "benchkit")
TOP = {"README.md", "DEVELOPERS.md", "pyproject.toml", "LICENSE", "tests", *ORDER}


def imports(path: Path) -> set[str]:
    tree = ast.parse(path.read_text(encoding="utf-8"))
    found: set[str] = set()
    for node in ast.walk(tree):
        if isinstance(node, ast.Import):
            found |= {alias.name for alias in node.names}
        elif isinstance(node, ast.ImportFrom):
            assert node.level == 0, f"{path}: relative import"
            found.add(node.module or "")
    return found


def modules(package: str) -> list[Path]:
    found = sorted((ROOT / package).rglob("*.py"))
    assert found, package
    return found


@pytest.mark.parametrize("package", ORDER)
def test_no_arrow_runs_up(package: str) -> None:
    above = ORDER[: ORDER.index(package)]
    for path in modules(package):
        for name in imports(path):
            assert name.split(".")[0] not in (*above, "tests"), f"{path} imports {name}"


def test_only_one_module_imports_pyvisa() -> None:
    users = [
        path.relative_to(ROOT).as_posix()
        for package in ORDER
        for path in modules(package)
        if any(n.split(".")[0].startswith("pyvisa") for n in imports(path))
    ]
    assert users == ["instruments/link.py"]


def test_benchkit_opens_no_connection_and_does_not_sleep() -> None:
    forbidden = {"socket", "subprocess", "threading", "asyncio", "signal", "pyvisa", "requests"}
    for path in modules("benchkit"):
        assert not {n.split(".")[0] for n in imports(path)} & forbidden, path
        text = path.read_text(encoding="utf-8")
        assert "time.sleep" not in text, path


def test_procedures_cannot_reach_a_raw_supply_or_load() -> None:
    """Only the guard can energise: no procedure imports an adapter, and none looks inside."""
    raw = {"instruments.supply", "instruments.load", "instruments.switch_off"}
    for path in modules("procedures"):
        assert not imports(path) & raw, path
        tree = ast.parse(path.read_text(encoding="utf-8"))
        for node in ast.walk(tree):
            if isinstance(node, ast.Attribute):
                assert "_Guard__" not in node.attr, path
                assert "_Live__" not in node.attr, path


PUBLIC = {
    "benchkit.circuit": {
        "GROUND", "Bipolar", "Channel", "CurrentLoad", "Emf", "FuseLink", "Junction",
        "LimitedSource", "Network", "Resistor", "Solution", "network", "solve",
    },
    "benchkit.files": {"BenchFile", "LotFile", "StageFile", "load"},
    "benchkit.guard": {"Burst", "Ceilings", "Drive", "Envelope", "Guard", "Live"},
    "benchkit.topologies": {
        "TOPOLOGIES", "Ports", "Topology", "Wiring", "wire", "wire_network",
    },
}  # fmt: skip


@pytest.mark.parametrize("name", sorted(PUBLIC))
def test_public_names(name: str) -> None:
    module = importlib.import_module(name)
    assert set(module.__all__) == PUBLIC[name]
    for public in module.__all__:
        assert getattr(module, public) is not None


def test_packages_are_listed_explicitly() -> None:
    import tomllib

    listed = tomllib.loads((ROOT / "pyproject.toml").read_text())["tool"]["setuptools"]["packages"]
    found = {
        str(path.parent.relative_to(ROOT)).replace("/", ".")
        for package in ORDER
        for path in (ROOT / package).rglob("__init__.py")
    }
    assert set(listed) == found


def test_nothing_else_at_the_top() -> None:
    tracked = subprocess.run(
        ["git", "ls-files"], cwd=ROOT, capture_output=True, text=True, check=True
    ).stdout.splitlines()
    tops = {name.split("/")[0] for name in tracked}
    assert {top for top in tops if not top.startswith(".")} <= TOP


def test_help_imports_no_heavy_package() -> None:
    code = (
        "import sys\n"
        "sys.argv = ['benchkit', '--help']\n"
        "from procedures.__main__ import main\n"
        "try:\n    main()\nexcept SystemExit as end:\n    assert not end.code, end.code\n"
        "heavy = {'scipy', 'pandas', 'matplotlib', 'numpy', 'pyvisa'} & set(sys.modules)\n"
        "assert not heavy, heavy\n"
    )
    done = subprocess.run(
        [sys.executable, "-c", code],
        cwd=ROOT,
        capture_output=True,
        text=True,
        env={**os.environ, "COLUMNS": "100"},
        check=False,
    )
    assert done.returncode == 0, done.stderr
    for command in ("demo", "new", "predict", "verify", "batch", "report", "audit", "simulate"):
        assert command in done.stdout
