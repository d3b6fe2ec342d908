"""A digest of the code that a step runs: its module and every odograph module that it imports.

The digest is taken from the syntax tree, so comments, docstrings and layout do not count. A `setting(...)`
declaration does not count either: the values of settings travel beside the code, in full. Files that lie
beside a module and are not Python (templates, styles) count with the modules of their folder.
"""

from __future__ import annotations

import ast
import hashlib
from collections.abc import Iterable
from pathlib import Path

PACKAGE = "odograph"
PACKAGE_FOLDER = Path(__file__).resolve().parent.parent

#: Facts of one module as kept in the cache: [stamp of its files, digest, modules it imports].
ModuleFacts = list


def code_fingerprint(
    module: str, cache: dict[str, ModuleFacts] | None = None, folder: Path = PACKAGE_FOLDER
) -> str:
    """Digest of a module and of all modules of this package that it imports, at any depth.

    Imports inside functions count; those under ``if TYPE_CHECKING:`` do not, since they never run.

    Parameters
    ----------
    module : str
        Full name, such as ``odograph.steps.sync``.
    cache : dict, optional
        Facts of modules met before, by name; files whose size and time are unchanged are not parsed again.
        New facts are added.
    folder : Path, optional
        Where the package lies.

    Returns
    -------
    str
        ``sha256:<64 hex digits>``, the same for every supported version of Python.

    Raises
    ------
    ModuleNotFoundError
        When the module is not part of the package.
    """
    closure = imported_modules(module, cache, folder)
    lines = [f"{name} {digest}\n" for name, digest in sorted(closure.items())]
    return "sha256:" + hashlib.sha256("".join(lines).encode()).hexdigest()


def imported_modules(
    module: str, cache: dict[str, ModuleFacts] | None = None, folder: Path = PACKAGE_FOLDER
) -> dict[str, str]:
    """The digest of each module that `module` needs, itself included, by name."""
    cache = {} if cache is None else cache
    if _source(module, folder) is None:
        raise ModuleNotFoundError(f"{module} is no module of {PACKAGE}")
    found: dict[str, str] = {}
    waiting = [module]
    while waiting:
        name = waiting.pop()
        if name in found:
            continue
        _, digest, imports = _facts(name, cache, folder)
        found[name] = digest
        waiting.extend(imports)
    return found


def _facts(name: str, cache: dict[str, ModuleFacts], folder: Path) -> ModuleFacts:
    path = _source(name, folder)
    if path is None:
        raise ModuleNotFoundError(f"{name} is no module of {PACKAGE}")
    beside = [] if path.parent == folder else sorted(_data_files(path.parent))
    stamp = [[file.name, (stat := file.stat()).st_size, stat.st_mtime_ns] for file in (path, *beside)]
    known = cache.get(name)
    if known is None or known[0] != stamp:
        tree = _without_noise(ast.parse(path.read_bytes()))
        state = hashlib.sha256()
        _feed(state, tree)
        for file in beside:
            state.update(f"{file.name}\n".encode() + file.read_bytes())
        known = cache[name] = [stamp, state.hexdigest(), _imports(tree, name, path, folder)]
    return known


def _source(name: str, folder: Path) -> Path | None:
    parts = name.split(".")
    if parts[0] != PACKAGE:
        return None
    base = folder.joinpath(*parts[1:])
    if len(parts) > 1 and (file := base.with_suffix(".py")).is_file():
        return file
    file = base / "__init__.py"
    return file if file.is_file() else None


def _data_files(folder: Path) -> Iterable[Path]:
    return (file for file in folder.iterdir() if file.is_file() and file.suffix not in {".py", ".pyc"})


def _imports(tree: ast.AST, name: str, path: Path, folder: Path) -> list[str]:
    """Modules of this package that a module imports, with the packages they lie in."""
    package = name.split(".") if path.name == "__init__.py" else name.split(".")[:-1]
    named: set[str] = set()
    for node in ast.walk(tree):
        if isinstance(node, ast.Import):
            named.update(alias.name for alias in node.names)
        elif isinstance(node, ast.ImportFrom):
            start = package[: len(package) - node.level + 1] if node.level else []
            base = ".".join([*start, *([node.module] if node.module else [])])
            named.add(base)
            named.update(f"{base}.{alias.name}" for alias in node.names)
    with_parents = {".".join(parts[:n]) for parts in map(_split, named) for n in range(1, len(parts) + 1)}
    return sorted(item for item in with_parents if _source(item, folder) is not None and item != name)


def _split(name: str) -> list[str]:
    return name.split(".")


def _without_noise(tree: ast.Module) -> ast.Module:
    """Drop docstrings, imports for type checkers, and the arguments of `setting(...)`."""
    for node in ast.walk(tree):
        body = getattr(node, "body", None)
        if not isinstance(body, list):
            if isinstance(node, ast.Call) and isinstance(node.func, ast.Name) and node.func.id == "setting":
                node.args, node.keywords = [], []
            continue
        documented = isinstance(node, ast.Module | ast.ClassDef | ast.FunctionDef | ast.AsyncFunctionDef)
        if documented and body and _is_text(body[0]):
            body = body[1:]
        node.body = [item for item in body if not _is_for_type_checkers(item)]
    return tree


def _is_text(node: ast.stmt) -> bool:
    return (
        isinstance(node, ast.Expr)
        and isinstance(node.value, ast.Constant)
        and isinstance(node.value.value, str)
    )


def _is_for_type_checkers(node: ast.stmt) -> bool:
    return (
        isinstance(node, ast.If)
        and isinstance(node.test, ast.Name)
        and node.test.id == "TYPE_CHECKING"
        and not node.orelse
    )


def _feed(state: hashlib._Hash, node: object) -> None:
    """Hash a syntax tree. Empty fields are passed over, since later versions of Python add some."""
    if isinstance(node, ast.AST):
        state.update(f"({type(node).__name__}".encode())
        for field in sorted(node._fields):
            value = getattr(node, field, None)
            if value is not None and value != []:
                state.update(f" {field}=".encode())
                _feed(state, value)
        state.update(b")")
    elif isinstance(node, list):
        state.update(b"[")
        for item in node:
            _feed(state, item)
        state.update(b"]")
    else:
        state.update(f"{type(node).__name__}:{node!r}".encode())
