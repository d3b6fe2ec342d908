"""The house keeps its shape: data flows one way, files are touched at the edges, modules stay small."""

from __future__ import annotations

import ast
import re
from pathlib import Path

import pytest

ROOT = Path(__file__).parents[2]
PACKAGE = ROOT / "src/odograph"
MODULES = sorted(PACKAGE.rglob("*.py"))

# A stage may import from those before it.
FLOW = (
    "recording",
    "sync",
    "behaviour",
    "descriptors",
    "encoding",
    "population",
    "figures",
    "report",
)
TOUCH_FILES = ("recording", "provenance", "steps", "command", "settings")
# The page reads its own template and style sheet; a figure is written where its file format is dealt with.
FILES_OF_THEIR_OWN = {
    "src/odograph/report/page.py": {"read_text"},
    "src/odograph/figures/style.py": {"write_bytes"},
}
LONGEST_MODULE = 420


def part_of(path: Path) -> str:
    return path.relative_to(PACKAGE).parts[0].removesuffix(".py")


def imports(path: Path) -> set[str]:
    """Full names of all modules a file imports, wherever in the file."""
    found: set[str] = set()
    for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
        if isinstance(node, ast.Import):
            found |= {alias.name for alias in node.names}
        elif isinstance(node, ast.ImportFrom):
            assert node.level == 0, f"{path}: import by full path"
            found |= {node.module, *(f"{node.module}.{alias.name}" for alias in node.names)}
    return found


def brings(names: set[str], package: str) -> bool:
    return any(name == package or name.startswith(f"{package}.") for name in names)


def named(path: Path) -> str:
    return str(path.relative_to(ROOT))


@pytest.mark.parametrize("path", MODULES, ids=named)
def test_data_flows_one_way(path):
    part = part_of(path)
    if part not in FLOW:
        return
    allowed = {"odograph", "odograph.errors", "odograph.compiled"}
    allowed |= {f"odograph.{name}" for name in FLOW[: FLOW.index(part) + 1]}
    own_settings = {"recording": "odograph.settings.intake", "report": "odograph.settings"}
    allowed.add(own_settings.get(part, f"odograph.settings.{part}"))
    allowed.add("odograph.settings.base")
    if part in TOUCH_FILES:
        allowed.add("odograph.provenance")
    for name in imports(path):
        if brings({name}, "odograph") and name not in ("odograph.settings",):
            assert any(brings({name}, one) for one in allowed - {"odograph"}), f"{named(path)} imports {name}"


@pytest.mark.parametrize("path", MODULES, ids=named)
def test_the_library_does_not_know_the_engine_and_pynwb_stays_in_one_place(path):
    names = imports(path)
    assert not brings(names, "snakemake")
    assert not brings(names, "matplotlib.pyplot")
    if part_of(path) != "recording":
        assert not brings(names, "pynwb")
        assert not brings(names, "hdmf")


@pytest.mark.parametrize("path", MODULES, ids=named)
def test_numeric_code_does_not_open_files(path):
    if part_of(path) in TOUCH_FILES:
        return
    calls = {
        node.func.id if isinstance(node.func, ast.Name) else getattr(node.func, "attr", "")
        for node in ast.walk(ast.parse(path.read_text(encoding="utf-8")))
        if isinstance(node, ast.Call)
    }
    calls -= FILES_OF_THEIR_OWN.get(named(path), set())
    assert not calls & {"open", "read_text", "write_text", "read_bytes", "write_bytes", "read_parquet"}


@pytest.mark.parametrize("path", [path for path in MODULES if path.name == "__init__.py"], ids=named)
def test_packages_hold_a_docstring_and_nothing_else(path):
    if path.parent == PACKAGE:
        return  # the package itself also says its version
    (only,) = ast.parse(path.read_text(encoding="utf-8")).body
    assert isinstance(only, ast.Expr)
    assert isinstance(only.value.value, str)


@pytest.mark.parametrize("path", MODULES, ids=named)
def test_modules_are_explained_and_short(path):
    text = path.read_text(encoding="utf-8")
    assert ast.get_docstring(ast.parse(text))
    assert len(text.splitlines()) <= LONGEST_MODULE


def test_every_stage_of_the_flow_is_there():
    assert all((PACKAGE / name / "__init__.py").is_file() for name in FLOW)


def test_every_rule_calls_a_step_that_exists():
    rules = "\n".join(path.read_text(encoding="utf-8") for path in (ROOT / "workflow/rules").glob("*.smk"))
    called = set(re.findall(r"odograph\.steps\.(\w+)", rules))
    assert len(called) >= 9
    for name in called:
        assert (PACKAGE / "steps" / f"{name}.py").is_file(), name
