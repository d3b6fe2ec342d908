"""The code fingerprint: what moves it and what does not."""

import pytest

from odograph.provenance.fingerprint import PACKAGE_FOLDER, code_fingerprint, imported_modules

MODULES = {
    "__init__.py": '"""A package."""\n',
    "errors.py": "class Trouble(Exception):\n    pass\n",
    "a/__init__.py": "",
    "a/top.py": '"""Top."""\nfrom odograph.a.middle import half\n\n\ndef work(x):\n    return half(x)\n',
    "a/middle.py": "def half(x):\n    from odograph.b.deep import TWO\n\n    return x / TWO\n",
    "b/__init__.py": "",
    "b/deep.py": "TWO = 2\n",
    "b/other.py": "import odograph.errors\n",
    "c/__init__.py": "",
    "c/page.py": "from odograph.a import middle\n",
    "c/page.css": "p { margin: 0 }\n",
}


@pytest.fixture
def package(tmp_path):
    for name, text in MODULES.items():
        (tmp_path / name).parent.mkdir(exist_ok=True)
        (tmp_path / name).write_text(text)
    return tmp_path


def edit(package, name, before, after):
    text = (package / name).read_text()
    assert before in text
    (package / name).write_text(text.replace(before, after))


def test_imports_are_followed_at_any_depth_and_inside_functions(package):
    assert set(imported_modules("odograph.a.top", folder=package)) == {
        "odograph",
        "odograph.a",
        "odograph.a.top",
        "odograph.a.middle",
        "odograph.b",
        "odograph.b.deep",
    }


@pytest.mark.parametrize(
    ("name", "before", "after"),
    [
        ("b/deep.py", "TWO = 2", "TWO = 2.0"),
        ("b/deep.py", "TWO = 2", "TWO = 2\nTHREE = 3"),
        ("a/middle.py", "x / TWO", "x * TWO"),
        ("a/top.py", "def work(x)", "def work(y)"),
        ("__init__.py", '"""A package."""', "import odograph.errors"),
    ],
)
def test_a_change_of_any_module_on_the_way_counts(package, name, before, after):
    was = code_fingerprint("odograph.a.top", folder=package)
    edit(package, name, before, after)
    assert code_fingerprint("odograph.a.top", folder=package) != was


@pytest.mark.parametrize(
    ("name", "before", "after"),
    [
        ("a/top.py", '"""Top."""', '"""The top of all."""'),
        ("a/top.py", "def work(x):\n", 'def work(x):\n    """Do it."""\n    # by half\n'),
        ("a/middle.py", "return x / TWO", "return (\n        x / TWO\n    )"),
        ("b/other.py", "import odograph.errors", "import odograph.a.middle"),
        ("errors.py", "pass", "code = 1"),
    ],
)
def test_comments_layout_docstrings_and_other_modules_do_not_count(package, name, before, after):
    was = code_fingerprint("odograph.a.top", folder=package)
    edit(package, name, before, after)
    assert code_fingerprint("odograph.a.top", folder=package) == was


def test_imports_for_type_checkers_do_not_count(package):
    was = code_fingerprint("odograph.b.deep", folder=package)
    guarded = "from typing import TYPE_CHECKING\n\nif TYPE_CHECKING:\n    from odograph.b import other\n"
    (package / "b/deep.py").write_text(guarded + "TWO = 2\n")
    now = code_fingerprint("odograph.b.deep", folder=package)
    assert now != was  # the import of TYPE_CHECKING itself is code
    edit(package, "b/other.py", "import odograph.errors", "import math")
    assert code_fingerprint("odograph.b.deep", folder=package) == now


def test_declarations_of_settings_do_not_count_but_their_checks_do(package):
    text = 'class S:\n    gap_s: float = setting(0.5, "Longest gap.", unit="s", ge=0)\n'
    (package / "b/deep.py").write_text(text)
    was = code_fingerprint("odograph.b.deep", folder=package)
    (package / "b/deep.py").write_text(text.replace("0.5", "0.3").replace("Longest", "The longest"))
    assert code_fingerprint("odograph.b.deep", folder=package) == was
    (package / "b/deep.py").write_text(text + "    def double(self):\n        return 2 * self.gap_s\n")
    assert code_fingerprint("odograph.b.deep", folder=package) != was


def test_files_beside_a_module_count(package):
    was = code_fingerprint("odograph.c.page", folder=package)
    edit(package, "c/page.css", "0", "1px")
    assert code_fingerprint("odograph.c.page", folder=package) != was


def test_cache_gives_the_same_and_notices_changes(package):
    cache = {}
    was = code_fingerprint("odograph.a.top", cache, package)
    assert set(cache) >= {"odograph.a.top", "odograph.b.deep"}
    assert code_fingerprint("odograph.a.top", cache, package) == was
    assert code_fingerprint("odograph.a.top", folder=package) == was
    edit(package, "b/deep.py", "TWO = 2", "TWO = 22")
    assert code_fingerprint("odograph.a.top", cache, package) == code_fingerprint(
        "odograph.a.top", folder=package
    )
    assert code_fingerprint("odograph.a.top", cache, package) != was


def test_circles_of_imports_end(package):
    (package / "b/deep.py").write_text("import odograph.a.top\nTWO = 2\n")
    assert "odograph.a.top" in imported_modules("odograph.b.deep", folder=package)


def test_relative_imports_are_followed(package):
    (package / "b/other.py").write_text("from .deep import TWO\nfrom ..a import middle\n")
    found = imported_modules("odograph.b.other", folder=package)
    assert {"odograph.b.deep", "odograph.a.middle"} <= set(found)


def test_an_unknown_module_is_refused(package):
    with pytest.raises(ModuleNotFoundError):
        code_fingerprint("odograph.nowhere", folder=package)


STAGES = {
    "intake": {"sync", "behaviour", "encoding", "population", "figures", "report"},
    "sync": {"behaviour", "encoding", "population", "figures", "report"},
    "behaviour": {"encoding", "population", "figures", "report"},
    "encoding": {"sync", "behaviour", "population", "figures", "report"},
    "cards": {"recording", "sync", "behaviour", "encoding", "population", "report"},
    "session_quality": {"recording", "sync", "behaviour", "encoding", "population", "report"},
    "population": {"recording", "sync", "behaviour", "encoding", "figures", "report"},
    "population_figures": {"recording", "sync", "behaviour", "encoding", "report"},
}


@pytest.mark.parametrize("step", STAGES)
def test_a_step_needs_no_code_of_stages_it_must_not_follow(step):
    """So that a line of encoding does not make sync run again, nor a line of figures a fit."""
    modules = imported_modules(f"odograph.steps.{step}", folder=PACKAGE_FOLDER)
    parts = {name.split(".")[1] for name in modules if "." in name}
    assert not parts & STAGES[step]
    assert not {"odograph.settings.all", "odograph.settings.load"} & set(modules)
