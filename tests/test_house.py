"""The house: which folders stand where, and which way the imports run."""

import ast
import importlib.metadata
import importlib.util
import subprocess
import sys
import tomllib
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parents[1]
SHIPPED = ("analysis", "instruments", "cli")
CORE = ("waveform", "junction", "dark", "decide", "lot")
EDGE = ("files", "pictures")
HEAVY = ("numpy", "scipy", "pandas", "matplotlib", "pyarrow", "pydantic", "iminuit", "jinja2", "pyvisa")


def modules() -> dict[str, Path]:
    """Every shipped module by its dotted name."""
    found = {}
    for folder in SHIPPED:
        for path in sorted((ROOT / folder).rglob("*.py")):
            parts = path.relative_to(ROOT).with_suffix("").parts
            parts = parts[:-1] if parts[-1] == "__init__" else parts
            found["darkedge." + ".".join(parts)] = path
    return found


def imports_of(path: Path) -> set[str]:
    """Dotted names that a file imports anywhere, inside functions too."""
    names: set[str] = set()
    for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
        if isinstance(node, ast.Import):
            names.update(alias.name for alias in node.names)
        elif isinstance(node, ast.ImportFrom):
            assert node.level == 0, f"{path}: relative import"
            names.add(node.module or "")
            names.update(f"{node.module}.{alias.name}" for alias in node.names)
    return names


def own_imports(path: Path) -> set[str]:
    return {name for name in imports_of(path) if name in MODULES}


MODULES = modules()


@pytest.mark.parametrize("name", MODULES)
def test_imports_run_from_cli_to_instruments_to_analysis_and_never_back(name: str) -> None:
    part = name.split(".")[1]
    forbidden = {"analysis": ("instruments", "cli"), "instruments": ("cli",), "cli": ()}[part]
    reached = {other.split(".")[1] for other in own_imports(MODULES[name]) if other.count(".")}
    assert not reached & set(forbidden)


@pytest.mark.parametrize("name", [n for n in MODULES if n.split(".")[2:3] and n.split(".")[2] in CORE])
def test_the_core_never_imports_the_edge_nor_its_libraries(name: str) -> None:
    for other in imports_of(MODULES[name]):
        assert not other.startswith(tuple(f"darkedge.analysis.{edge}" for edge in EDGE))
        assert other.split(".")[0] not in {"pandas", "pyarrow", "pydantic", "matplotlib", "jinja2"}


@pytest.mark.parametrize("name", [n for n in MODULES if n.startswith("darkedge.instruments")])
def test_instruments_know_nothing_of_models_or_limits(name: str) -> None:
    for other in own_imports(MODULES[name]):
        assert not other.startswith(tuple(f"darkedge.analysis.{core}" for core in (*CORE, "pictures")))


def test_no_module_imports_itself_by_way_of_others() -> None:
    graph = {name: own_imports(path) - {name} for name, path in MODULES.items()}
    done: set[str] = set()

    def visit(name: str, trail: tuple[str, ...]) -> None:
        assert name not in trail, " -> ".join((*trail[trail.index(name) :], name))
        if name not in done:
            for other in graph[name]:
                visit(other, (*trail, name))
            done.add(name)

    for name in graph:
        visit(name, ())


def test_nothing_else_stands_at_the_root() -> None:
    tracked = subprocess.run(
        ["git", "ls-files"], cwd=ROOT, capture_output=True, text=True, check=True
    ).stdout.splitlines()
    allowed = {
        *SHIPPED, "tests", "sample_captures", "pyproject.toml", "README.md", "DEVELOPERS.md", "LICENSE", "CHANGELOG.md",
    }  # fmt: skip
    roots = {line.split("/")[0] for line in tracked}
    assert {name for name in roots if not name.startswith(".")} <= allowed


def test_every_folder_with_code_is_packaged() -> None:
    listed = set(tomllib.loads((ROOT / "pyproject.toml").read_text("utf-8"))["tool"]["setuptools"]["packages"])
    folders = {name for name, path in MODULES.items() if path.name == "__init__.py"}
    assert listed == folders


@pytest.mark.parametrize("bare", SHIPPED)
def test_the_bare_folder_names_cannot_be_imported(bare: str) -> None:
    """A second copy under a bare name would have its own classes, and isinstance would fail between them."""
    assert importlib.util.find_spec(bare) is None


def test_the_installed_package_is_marked_as_typed() -> None:
    for part in SHIPPED:
        spec = importlib.util.find_spec(f"darkedge.{part}")
        assert spec is not None
        assert spec.origin is not None
        assert (Path(spec.origin).parent / "py.typed").is_file()


@pytest.mark.parametrize(
    "library",
    ["numpy", "scipy", "pandas", "matplotlib", "typer", "pyvisa", "pydantic", "iminuit", "jinja2", "quantiphy", "rich"],
)
def test_shipped_code_uses_the_library_it_depends_on(library: str) -> None:
    assert any(name.split(".")[0] == library for path in MODULES.values() for name in imports_of(path))


def test_importing_the_command_line_loads_no_heavy_library() -> None:
    code = "import sys, darkedge.cli.main; print('\\n'.join(sys.modules))"
    loaded = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True).stdout.split()
    assert not set(HEAVY) & set(loaded)


def test_the_version_comes_from_the_installed_package() -> None:
    version = tomllib.loads((ROOT / "pyproject.toml").read_text("utf-8"))["project"]["version"]
    assert importlib.metadata.version("darkedge") == version
