"""The house: who imports whom, what is public, what is installed, and what is not loaded needlessly."""

import ast
import importlib
import subprocess
import sys
import tomllib
from collections.abc import Iterator
from importlib.metadata import packages_distributions
from pathlib import Path

import pytest

ROOT = Path(__file__).parents[2]
PACKAGES = ("sampler", "estimators", "reference", "canonry")
MODULES = sorted(path for package in PACKAGES for path in (ROOT / package).rglob("*.py"))
ALLOWED = {
    "sampler": (),
    "reference": (),
    "estimators": ("sampler.fluid", "sampler.series"),
    "canonry": ("sampler", "reference", "estimators"),
}


def dotted(path: Path) -> str:
    return ".".join(path.relative_to(ROOT).with_suffix("").parts).removesuffix(".__init__")


def imports(source: str) -> Iterator[str]:
    """Dotted names of all modules that a source imports, anywhere in it."""
    for node in ast.walk(ast.parse(source)):
        if isinstance(node, ast.Import):
            yield from (alias.name for alias in node.names)
        elif isinstance(node, ast.ImportFrom):
            yield "." * node.level + (node.module or "")


def faults(module: str, source: str) -> list[str]:
    """Imports of a module that go against the arrows, or through the root of its own package."""
    package = module.split(".")[0]
    found = []
    for name in imports(source):
        top = name.split(".")[0]
        inside = top == package and name != package
        allowed = any(name == other or name.startswith(f"{other}.") for other in ALLOWED[package])
        if name.startswith(".") or (top in PACKAGES and not inside and not allowed):
            found.append(name)
    return found


@pytest.mark.parametrize("path", MODULES, ids=dotted)
def test_imports_follow_the_arrows(path: Path) -> None:
    assert faults(dotted(path), path.read_text(encoding="utf-8")) == []


@pytest.mark.parametrize(
    ("module", "source", "wrong"),
    [
        ("sampler.forces", "from estimators.gamma import tau", ["estimators.gamma"]),
        ("reference.exact", "def f():\n    import sampler.fluid", ["sampler.fluid"]),
        ("estimators.gamma", "from sampler.series import Series", []),
        ("estimators.gamma", "from sampler.store import read", ["sampler.store"]),
        ("estimators.gamma", "from sampler import series", ["sampler"]),
        ("estimators.gamma", "from estimators import settle", ["estimators"]),
        ("estimators.gamma", "from . import settle", ["."]),
        ("sampler.forces", "import canonry", ["canonry"]),
        ("canonry.run", "import reference\nfrom sampler.store import read\nimport numpy", []),
        ("canonry.run", "from canonry import plan", ["canonry"]),
    ],
)
def test_an_import_against_the_arrows_would_be_seen(module: str, source: str, wrong: list[str]) -> None:
    assert faults(module, source) == wrong


@pytest.mark.parametrize("path", MODULES, ids=dotted)
def test_all_names_what_is_public(path: Path) -> None:
    module = importlib.import_module(dotted(path))
    body = ast.parse(path.read_text(encoding="utf-8")).body
    listed = [] if len(body) == 1 else module.__all__  # a docstring alone has nothing to list
    assert len(set(listed)) == len(listed)
    assert [name for name in listed if not hasattr(module, name)] == []
    defined = {node.name for node in body if isinstance(node, ast.FunctionDef | ast.ClassDef)}
    assert {name for name in defined if not name.startswith("_")} <= set(listed)


def test_every_package_is_installed() -> None:
    settings = tomllib.loads((ROOT / "pyproject.toml").read_text(encoding="utf-8"))["tool"]["setuptools"]
    found = {dotted(path) for path in MODULES if path.name == "__init__.py"}
    assert set(settings["packages"]) == found
    assert all((ROOT / package / "py.typed").exists() for package in PACKAGES)


@pytest.mark.parametrize("name", PACKAGES)
def test_the_installed_distribution_owns_its_names(name: str) -> None:
    assert set(packages_distributions()[name]) == {"canonry"}  # needs an installed canonry: pip install -e .


def python(code: str, *, directory: Path) -> subprocess.CompletedProcess[str]:
    command = [sys.executable, "-c", f"import sys; sys.path[1:1] = [{str(ROOT)!r}]\n{code}"]
    return subprocess.run(command, cwd=directory, capture_output=True, text=True, check=False)


@pytest.mark.parametrize("name", ["sampler", "estimators", "reference"])
def test_a_file_that_shadows_a_package_is_named(name: str, tmp_path: Path) -> None:
    (tmp_path / f"{name}.py").write_text("raise SystemExit('the file of the user was run')\n")
    result = python("import canonry", directory=tmp_path)
    assert result.returncode == 1
    assert f"ImportError: {tmp_path / name}.py stands in the way of canonry's own package {name}" in result.stderr


def test_a_folder_that_shadows_a_package_is_named(tmp_path: Path) -> None:
    (tmp_path / "sampler").mkdir()
    (tmp_path / "sampler" / "__init__.py").touch()
    result = python("import canonry", directory=tmp_path)
    assert f"{tmp_path / 'sampler' / '__init__.py'} stands in the way" in result.stderr


def test_nothing_is_in_the_way_elsewhere(tmp_path: Path) -> None:
    result = python("import canonry, sampler; print(canonry.__file__)", directory=tmp_path)
    assert result.stdout.strip() == str(ROOT / "canonry" / "__init__.py")


def test_the_command_line_loads_no_heavy_library(tmp_path: Path) -> None:
    heavy = {"h5py", "numba", "numpy", "pandas", "pint", "pymbar", "rich", "scipy"}
    result = python(f"import canonry.cli; print({heavy!r} & set(sys.modules))", directory=tmp_path)
    assert result.stdout.strip() == "set()", result.stderr


def test_reading_a_reduced_study_loads_no_heavy_library(tmp_path: Path) -> None:
    heavy = {"h5py", "numba", "pandas", "pint", "pymbar", "scipy.optimize"}
    result = python(f"import canonry.study; print({heavy!r} & set(sys.modules))", directory=tmp_path)
    assert result.stdout.strip() == "set()", result.stderr
