"""One list of dependencies, told three times: pyproject.toml, environment.yml, constraints.txt.

Requirements are read by packaging, the reference implementation of PEP 440 and PEP 508.
"""

from __future__ import annotations

import re
import tomllib
from importlib import metadata
from pathlib import Path

import yaml
from packaging.requirements import Requirement
from packaging.utils import canonicalize_name
from packaging.version import Version

ROOT = Path(__file__).parents[2]
PROJECT = tomllib.loads((ROOT / "pyproject.toml").read_text(encoding="utf-8"))
BUILD_TOOLS = {"setuptools"}
# The extras that make and conda install. The benchmarks do without their extra where it is missing.
INSTALLED_EXTRAS = ("cluster", "storage", "test", "lint")


def declared() -> dict[str, str]:
    """Version bounds by package of everything pyproject.toml asks for."""
    project = PROJECT["project"]
    texts = [*project["dependencies"], *PROJECT["build-system"]["requires"]]
    for extra in INSTALLED_EXTRAS:
        texts += project["optional-dependencies"][extra]
    requirements = [Requirement(text) for text in texts]
    return {canonicalize_name(one.name): str(one.specifier) for one in requirements}


def pinned() -> dict[str, Version]:
    """Exact versions by package in constraints.txt."""
    versions = {}
    for line in (ROOT / "constraints.txt").read_text(encoding="utf-8").splitlines():
        if line and not line.startswith("#"):
            name, exact, version = line.partition("==")
            assert exact, f"not an exact version: {line}"
            versions[canonicalize_name(name)] = Version(version)
    return versions


def test_conda_and_pip_install_the_same():
    environment = yaml.safe_load((ROOT / "environment.yml").read_text(encoding="utf-8"))
    conda = {}
    for entry in environment["dependencies"]:
        if isinstance(entry, str):
            requirement = Requirement(entry)
            conda[canonicalize_name(requirement.name)] = str(requirement.specifier)
    assert conda.pop("python") == PROJECT["project"]["requires-python"]
    conda.pop("pip")
    assert conda == declared()
    assert environment["name"] == PROJECT["project"]["name"]


def test_make_installs_every_extra():
    makefile = (ROOT / "Makefile").read_text(encoding="utf-8")
    assert f'".[{",".join(INSTALLED_EXTRAS)}]"' in makefile
    assert PROJECT["project"]["optional-dependencies"].keys() == set(INSTALLED_EXTRAS)


def test_the_pinned_versions_satisfy_what_is_declared():
    versions = pinned()
    for text in _asked_for():
        requirement = Requirement(text)
        assert requirement.specifier.contains(versions[canonicalize_name(requirement.name)]), text


def test_everything_that_gets_installed_is_pinned():
    """Walk the requirements of the installed packages; each must be in constraints.txt."""
    versions = pinned()
    waiting = [Requirement(text) for text in _asked_for()]
    seen: set[tuple[str, frozenset[str]]] = set()
    while waiting:
        requirement = waiting.pop()
        name = canonicalize_name(requirement.name)
        key = (name, frozenset(requirement.extras))
        if key in seen:
            continue
        seen.add(key)
        assert name in versions, f"{name} is not in constraints.txt"
        for text in metadata.requires(name) or []:
            needed = Requirement(text)
            wanted = [{"extra": extra} for extra in ("", *requirement.extras)]
            if needed.marker is None or any(needed.marker.evaluate(one) for one in wanted):
                waiting.append(needed)
    assert len(seen) > 50
    assert versions.keys() >= BUILD_TOOLS


def test_the_python_version_is_said_the_same_everywhere():
    lowest = re.search(r"\d+\.\d+", PROJECT["project"]["requires-python"]).group()
    assert lowest in (ROOT / "README.md").read_text(encoding="utf-8")
    assert f"({lowest.replace('.', ', ')})" in (ROOT / "Makefile").read_text(encoding="utf-8")
    assert PROJECT["tool"]["ruff"]["target-version"] == "py" + lowest.replace(".", "")


def _asked_for() -> list[str]:
    project = PROJECT["project"]
    return [
        *project["dependencies"],
        *(one for extra in INSTALLED_EXTRAS for one in project["optional-dependencies"][extra]),
    ]
