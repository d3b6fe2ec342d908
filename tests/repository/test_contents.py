"""What the repository says about itself is true, and it says nothing about the machines it was made on."""

from __future__ import annotations

import os
import re
import subprocess
import sys
import tomllib
from pathlib import Path

import pytest
import yaml

import odograph

ROOT = Path(__file__).parents[2]
README = (ROOT / "README.md").read_text(encoding="utf-8")
DEVELOPERS = (ROOT / "DEVELOPERS.md").read_text(encoding="utf-8")
PROJECT = tomllib.loads((ROOT / "pyproject.toml").read_text(encoding="utf-8"))["project"]

TEXT_ENDINGS = {
    ".py",
    ".md",
    ".smk",
    ".yaml",
    ".yml",
    ".toml",
    ".tsv",
    ".txt",
    ".cff",
    ".json",
    ".html",
    ".css",
    ".js",
}
TEXT_NAMES = {"Makefile", "Snakefile", "LICENSE", "run", ".gitignore"}
MADE_FOLDERS = {".git", ".venv", ".snakemake", "results", "logs", "recordings", "build", "__pycache__"}

# Written with a bracketed letter, so that this file does not hold what it looks for.
MACHINE_PATHS = re.compile(r"(?<![\w.~}>)-])/(?:hom[e]|Users|roo[t]|wor[k]|tm[p]|mn[t]|op[t]|va[r])/")
PACKAGE_HOSTS = re.compile(r"py[p]i\b|pythonhoste[d]|anaconda\.or[g]|index-ur[l]", re.IGNORECASE)


def text_files() -> list[Path]:
    found = []
    for folder, folders, names in os.walk(ROOT):
        folders[:] = [
            name
            for name in folders
            if name not in MADE_FOLDERS and not name.endswith(("_cache", ".egg-info"))
        ]
        paths = [Path(folder) / name for name in names]
        found += [path for path in paths if path.suffix in TEXT_ENDINGS or path.name in TEXT_NAMES]
    return sorted(found)


def make_targets() -> set[str]:
    makefile = (ROOT / "Makefile").read_text(encoding="utf-8")
    return set(re.findall(r"^([a-z][a-z-]*):(?!=)", makefile, flags=re.MULTILINE))


def make_commands(text: str) -> set[str]:
    return set(re.findall(r"(?:^|`|\s{4})make ([a-z][a-z-]+)(?=[`\s]|$)", text, flags=re.MULTILINE))


def test_the_files_are_found():
    assert len(text_files()) > 50
    assert ROOT / "Makefile" in text_files()


@pytest.mark.parametrize("path", text_files(), ids=lambda path: str(path.relative_to(ROOT)))
def test_no_file_names_a_machine(path):
    text = path.read_text(encoding="utf-8")
    for pattern in (MACHINE_PATHS, PACKAGE_HOSTS):
        found = pattern.search(text)
        assert found is None, f"line {text[: found.start()].count(chr(10)) + 1}: {found.group()}"


def test_the_search_finds_what_it_should():
    for path in ("/" + "home/me/data.nwb", "open('/" + "tmp/x')", "cd /" + "work/main"):
        assert MACHINE_PATHS.search(path)
    for path in ("processing/behavior/Position", "https://example.org/home/page", "results/" + "work/x"):
        assert not MACHINE_PATHS.search(path)
    assert PACKAGE_HOSTS.search("files.pythonhoste" + "d.example")


def test_the_readme_asks_for_two_commands_and_make_knows_them():
    first = re.search(r"(?:^    .*\n)+", README, flags=re.MULTILINE).group()
    commands = [line.split("#")[0].strip() for line in first.strip().splitlines()]
    assert commands == ["make demo", "make test"]
    assert make_commands(README) | make_commands(DEVELOPERS) <= make_targets()
    assert {"env", "demo", "test", "lint", "truth", "clean"} <= make_targets()


def test_the_check_of_every_change_runs_the_tests_of_the_readme_and_the_linters():
    script = ROOT / ".ci/run"
    assert os.access(script, os.X_OK)
    text = script.read_text(encoding="utf-8")
    assert "make test" in text
    assert "make lint" in text
    subprocess.run(["bash", "-n", str(script)], check=True)
    makefile = (ROOT / "Makefile").read_text(encoding="utf-8")
    for linter in ("ruff check", "ruff format --check", "snakemake --lint", "snakefmt --check"):
        assert linter in makefile


@pytest.mark.parametrize("text", [README, DEVELOPERS], ids=["README.md", "DEVELOPERS.md"])
def test_links_lead_somewhere(text):
    links = re.findall(r"\]\(([^)#\s]+)\)", text)
    for link in links:
        assert "://" in link or (ROOT / link).exists(), f"{link} is not there"


def test_pictures_have_a_text_for_those_who_cannot_see_them():
    pictures = re.findall(r"!\[([^\]]*)\]\(([^)]+)\)", README)
    assert len(pictures) == 3
    assert all(len(words) > 20 for words, _ in pictures)


def test_the_commands_of_the_readme_exist():
    named = set(re.findall(r"odograph ([a-z]+)", README)) - {"is"}
    assert {"look", "trace", "summary"} <= named
    for command in named:
        done = subprocess.run(
            [sys.executable, "-m", "odograph.command.main", command, "--help"],
            capture_output=True,
            text=True,
            check=False,
        )
        assert done.returncode == 0, f"odograph {command}: {done.stderr}"
        assert command in done.stdout


def test_the_readme_is_short_and_carries_the_caution():
    words = re.sub(r"^\|.*$", "", README, flags=re.MULTILINE).split()
    assert len(words) < 1100
    assert "not for diagnosis or treatment" in README


def test_profiles_named_in_the_documents_exist():
    for name in re.findall(r"workflow/profiles/\w+", README + DEVELOPERS):
        assert (ROOT / name).is_dir(), name


def test_the_citation_is_complete_and_agrees_with_the_package():
    # Citation File Format 1.2.0, schema.json: these four keys are required; an entity has a name.
    citation = yaml.safe_load((ROOT / "CITATION.cff").read_text(encoding="utf-8"))
    assert {"cff-version", "message", "title", "authors"} <= citation.keys()
    assert citation["cff-version"] == "1.2.0"
    assert citation["type"] in ("software", "dataset")
    assert all(author["name"] for author in citation["authors"])
    assert str(citation["version"]) == PROJECT["version"] == odograph.__version__
    assert citation["license"] == PROJECT["license"]


def test_the_licence_is_what_it_says():
    # The three conditions of the BSD 3-Clause licence (SPDX identifier BSD-3-Clause), from memory.
    licence = (ROOT / "LICENSE").read_text(encoding="utf-8")
    assert "Redistributions of source code must retain" in licence
    assert "Redistributions in binary form must reproduce" in licence
    assert "Neither the name" in licence
