"""What is read is never run, and never leads where it should not: looked for in the code itself.

Ruff's S rules look for much of this as well; here it is looked for in the workflow's files too, and names
that come from files are followed to the paths that are written.
"""

from __future__ import annotations

import ast
import re
import shlex
import tomllib
from pathlib import Path

import pytest

from odograph.errors import InputError, OdographError, printable
from odograph.provenance import plan_files
from odograph.provenance.archive.replay import lay_out
from odograph.provenance.plan import make_plan
from odograph.provenance.record_shape import fault_of_record, fault_of_root
from odograph.settings.fields import setting_facts
from odograph.settings.sessions import read_sessions

ROOT = Path(__file__).parents[2]
CODE = sorted([*(ROOT / "src").rglob("*.py"), *(ROOT / "demo_data").glob("*.py")])
TESTS = sorted((ROOT / "tests").rglob("*.py"))
RULES = sorted([ROOT / "Snakefile", *(ROOT / "workflow").rglob("*.smk")])

# Calls that run what they are given, or may.
FORBIDDEN = {
    "eval", "exec", "compile", "__import__", "os.system", "os.popen", "subprocess.getoutput",
    "subprocess.getstatusoutput", "pickle.load", "pickle.loads", "marshal.load", "marshal.loads",
    "shelve.open", "dill.loads", "joblib.load", "pd.read_pickle", "pandas.read_pickle", "yaml.load",
    "yaml.load_all", "yaml.full_load", "yaml.unsafe_load", "tempfile.mktemp", "np.load", "numpy.load",
}  # fmt: skip
UNPACKING = {"extractall", "extract", "unpack_archive"}
# numba's kept code is pickled; `odograph.compiled` says whose files it reads, and is tested for it.
EXCEPTIONS = {("src/odograph/compiled.py", "pickle.loads")}
STARTING = {"run", "Popen", "call", "check_call", "check_output"}

HOSTILE = (
    "../../x",
    "a/b",
    "/etc/x",
    "a b",
    "$(touch x)",
    "`touch x`",
    "a;b",
    "x'\"y",
    "-rf",
    "a\nb",
    "..",
    "é",
)


def dotted(node: ast.AST) -> str:
    if isinstance(node, ast.Attribute):
        above = dotted(node.value)
        return f"{above}.{node.attr}" if above else node.attr
    return node.id if isinstance(node, ast.Name) else ""


def faults_of(text: str, file: str) -> list[str]:
    """Calls in a module that must not be there, each with its line."""
    found = []
    for node in ast.walk(ast.parse(text)):
        if not isinstance(node, ast.Call):
            continue
        name = dotted(node.func)
        last = name.rpartition(".")[2]
        words = {word.arg: word.value for word in node.keywords}
        if name in FORBIDDEN and (file, name) not in EXCEPTIONS:
            found.append(f"line {node.lineno}: {name}")
        if last in UNPACKING and name != "re.extract":
            found.append(f"line {node.lineno}: {name} unpacks without a check")
        shell = words.get("shell")
        if shell is not None and not (isinstance(shell, ast.Constant) and shell.value is False):
            found.append(f"line {node.lineno}: a shell")
        pickled = words.get("allow_pickle")
        if pickled is not None and not (isinstance(pickled, ast.Constant) and pickled.value is False):
            found.append(f"line {node.lineno}: allow_pickle")
        if name.startswith("subprocess.") and last in STARTING:
            command = node.args[0] if node.args else words.get("args")
            if isinstance(command, ast.JoinedStr | ast.Constant | ast.BinOp):
                found.append(f"line {node.lineno}: a command that is one text")
    return found


def named(path: Path) -> str:
    return path.relative_to(ROOT).as_posix()


@pytest.mark.parametrize("path", CODE, ids=named)
def test_nothing_that_is_read_is_run(path):
    assert faults_of(path.read_text(encoding="utf-8"), named(path)) == []


@pytest.mark.parametrize(
    "line",
    [
        "eval(x)", "pickle.loads(x)", "yaml.load(x)", "os.system('ls')", "subprocess.run(f'ls {x}')",
        "subprocess.run(['ls'], shell=True)", "archive.extractall()", "np.load(x)",
        "subprocess.run('ls ' + x)",
        "read_array(x, allow_pickle=True)", "subprocess.Popen(args=f'{x}')",
    ],
)  # fmt: skip
def test_the_search_finds_each_of_them(line):
    assert faults_of(line, "a file")


def test_the_exceptions_are_still_needed():
    for file, name in EXCEPTIONS:
        text = (ROOT / file).read_text(encoding="utf-8")
        assert name in text
        assert any(name in fault for fault in faults_of(text, "another file"))


def test_ruff_looks_for_security_and_every_exception_says_why():
    lint = tomllib.loads((ROOT / "pyproject.toml").read_text(encoding="utf-8"))["tool"]["ruff"]["lint"]
    assert "S" in lint["select"]
    assert not [rule for rule in lint["ignore"] if rule.startswith("S")]
    assert all(place.startswith("tests/") for place in lint["per-file-ignores"])
    assert "ruff check ." in (ROOT / "Makefile").read_text(encoding="utf-8")
    for path in CODE:
        for line in path.read_text(encoding="utf-8").splitlines():
            if re.search(r"noqa: *S\d", line):
                assert re.search(r"noqa: S\d+ \(.{15,}\)", line), f"{named(path)}: {line.strip()}"


def test_no_test_turns_to_a_shell():
    for path in TESTS:
        if path == Path(__file__):
            continue
        faults = [
            fault for fault in faults_of(path.read_text(encoding="utf-8"), named(path)) if "shell" in fault
        ]
        assert faults == [], named(path)


# ---- the workflow's shell commands


# Values that the workflow makes itself: digests and whole numbers. Paths come from the rules' own patterns,
# whose wildcards are constrained.
OWN_VALUES = {"params.planned", "params.code", "params.shards"}
OWN_PATHS = re.compile(r"(input|output|log)(\.\w+)?|wildcards\.(session|shard)")


def shell_blocks(text: str) -> list[str]:
    return re.findall(r'shell:\s*("""(?:.|\n)*?"""|"(?:[^"\\]|\\.)*")', text)


def unquoted(block: str) -> list[str]:
    """Placeholders of a shell block that are put in as they are, although they may hold anything."""
    found = re.findall(r"(?<!\{)\{([\w.\[\]]+)(:\w+)?\}(?!\})", block)
    return [
        name
        for name, how in found
        if how != ":q" and name not in OWN_VALUES and not OWN_PATHS.fullmatch(name)
    ]


@pytest.mark.parametrize("path", RULES, ids=named)
def test_user_data_are_quoted_in_shell_commands(path):
    for block in shell_blocks(path.read_text(encoding="utf-8")):
        assert unquoted(block) == []


def test_shell_blocks_are_found_and_what_is_not_quoted_too():
    text = "".join(path.read_text(encoding="utf-8") for path in RULES)
    blocks = shell_blocks(text)
    assert len(blocks) == len(re.findall(r"^    shell:", text, flags=re.MULTILINE)) >= 8
    assert unquoted("x {params.settings} {params.settings:q} {input.nwb}") == ["params.settings"]
    assert sum("{params.settings:q}" in block for block in blocks) >= 8
    assert any("{params.origin:q}" in block for block in blocks)


def test_paths_of_the_rules_lie_in_the_results_and_the_logs():
    """So that an input or an output that is put into a command is one of the workflow's own paths."""
    for path in RULES:
        text = path.read_text(encoding="utf-8")
        for section in re.findall(
            r"^    (?:input|output|log|benchmark):\n((?:        .*\n)+)", text, flags=re.M
        ):
            for literal in re.findall(r'"([^"]*/[^"]*)"', section):
                assert re.match(r"(results|logs)/", literal) or literal.startswith("{folder}"), literal


def constraint(name: str) -> str:
    text = (ROOT / "workflow/rules/common.smk").read_text(encoding="utf-8")
    return re.search(rf'^    {name}=r"(.*)",$', text, flags=re.MULTILINE).group(1)


@pytest.mark.parametrize("name", HOSTILE)
def test_wildcards_hold_no_path_and_no_word_of_a_shell(name):
    for wildcard in ("session", "shard"):
        matched = re.fullmatch(constraint(wildcard), name)
        # A dash at the beginning could be taken for an option; the sessions table refuses it.
        assert matched is None or name == "-rf"


# ---- names that come from files


@pytest.mark.parametrize("name", [*HOSTILE, "", ".", "x\0y", "CON/", "a\\b", "x" + chr(0x202E)])
def test_a_session_is_never_a_path(tmp_path, name):
    table = tmp_path / "sessions.tsv"
    cell = '"' + name.replace('"', '""') + '"'
    table.write_text(f"session\tnwb\n{cell}\ta.nwb\n", encoding="utf-8")
    with pytest.raises(InputError) as caught:
        read_sessions(table)
    assert caught.value.place == f"line {2 + name.count(chr(10))}, column session"


def test_names_within_a_recording_reach_no_path(tmp_path, monkeypatch):
    """An animal, a region, a signal of any name: files are named after sessions and shards alone."""
    monkeypatch.chdir(tmp_path)
    study = tmp_path / "study"
    study.mkdir()
    monkeypatch.chdir(study)
    (study / "config").mkdir()
    (study / "config/sessions.tsv").write_text("session\tnwb\none\tone.nwb\n", encoding="utf-8")
    (study / "one.nwb").write_bytes(b"a recording")
    regions = {str(number): name for number, name in enumerate(HOSTILE)}
    answer = {
        "inventory": "sha256:1", "signals": {"tracking": "sha256:2", "covariate:../x": "sha256:3"},
        "units": dict.fromkeys(regions, "sha256:4"), "links": [], "animal": "../../x $(touch y)",
        "regions": regions, "duration_s": 60.0,
    }  # fmt: skip
    monkeypatch.setattr(
        plan_files, "survey", lambda requests: {one.session: dict(answer) for one in requests}
    )
    plan = make_plan({"study": {"sessions_table": "config/sessions.tsv"}})
    made = {path.relative_to(tmp_path).as_posix() for path in tmp_path.rglob("*") if path.is_file()}
    made -= {"study/config/sessions.tsv", "study/one.nwb"}
    safe = re.compile(r"study/results/[\w./-]+")
    assert made and all(safe.fullmatch(name) and ".." not in name for name in made)
    told = [plan.origin_of("one", shard) for shard in range(plan.shards["one"])]
    assert sum(text.count("touch y") for text in told) == len(told)
    # As the engine quotes it, it is one word of a command and the same text again.
    assert all(shlex.split(shlex.quote(text)) == [text] for text in told)


def test_names_in_settings_that_become_names_of_columns_are_plain_words():
    named_by_user = {facts.path for facts in setting_facts() if facts.path.startswith("intake.covariates")}
    assert named_by_user
    from odograph.settings.intake import CovariateSource

    for name in HOSTILE:
        with pytest.raises(ValueError, match="name"):
            CovariateSource(name=name, place="processing/x")


def record(**changes):
    whole = {
        "record_id": "record:0", "format": 1, "rule": "sync", "keys": {"session": "one"}, "inputs": [],
        "settings": {}, "code": {}, "software": {}, "products": [], "run": {"started": "", "host": ""},
    }  # fmt: skip
    return whole | changes


@pytest.mark.parametrize("path", ["../x", "/etc/x", "results/../../x", "", "C:/x", "a\0b"])
def test_records_and_roots_name_no_path_outside(path):
    assert fault_of_record(record()) is None
    inside = {"path": "results/x.png", "digest": "sha256:0"}
    assert fault_of_record(record(products=[inside])) is None
    assert fault_of_record(record(products=[inside | {"path": path}]))
    entry = inside | {"kind": "product", "producer": None}
    assert fault_of_record(record(inputs=[entry])) is None
    assert fault_of_record(record(inputs=[entry | {"path": path}]))
    if path:
        assert fault_of_record(record(keys={"session": path}))
    row = {"file": path, "record_id": "record:0", "content": "sha256:0", "digest": "sha256:0"}
    root = {"format": 1, "root": "", "own_digest": "", "user_files": [], "recordings": [], "code": {}}
    root["code"] = {"commit": None, "modified": None}
    assert fault_of_root(root | {"records": [row | {"file": "results/record.json"}]}) is None
    assert "records[0].file" in fault_of_root(root | {"records": [row]})


@pytest.mark.parametrize(
    ("change", "found"),
    [
        ({"file": "../x.nwb"}, "leads out"),
        ({"file": "/etc/x.nwb"}, "leads out"),
        ({"file": "a\\..\\x.nwb"}, "leads out"),
        ({"bytes": "-1"}, "bytes"),
        ({"sha256": None}, "no sha256"),
    ],
)
def test_an_archive_lays_no_recording_outside_the_study(tmp_path, change, found):
    row = {"session": "a", "file": "a.nwb", "enclosed": "yes", "bytes": "3", "fetch_from": "", "sha256": "0"}

    def laid_out(name, row):
        payload, study = tmp_path / name / "data", tmp_path / name / "study" / "inner"
        (payload / "results").mkdir(parents=True)
        study.mkdir(parents=True)
        (payload / "a.nwb").write_bytes(b"abc")
        kept = {key: value for key, value in row.items() if value is not None}
        table = "\t".join(kept) + "\n" + "\t".join(kept.values()) + "\n"
        (payload / "recordings.tsv").write_text(table, encoding="utf-8")
        lay_out(payload.parent, study, None)
        return study

    assert (laid_out("whole", row) / "a.nwb").read_bytes() == b"abc"
    with pytest.raises(InputError, match=found):
        laid_out("damaged", row | change)
    assert [path.name for path in (tmp_path / "damaged/study").rglob("*")] == ["inner"]


def test_what_a_file_says_does_not_reach_the_terminal_as_a_command():
    # ECMA-48: ESC [ begins a control sequence, and so does the single character 9B hex.
    said = OdographError("\x1b[31mred\x9b2J\u202egnp.exe", file="a\x07b", remedy="line\n\tindented")
    assert said.message() == ("a\\x07b: \\x1b[31mred\\x9b2J\\u202egnp.exe\n  what to do: line\n\tindented")
    assert printable("Sören, 北, µm·°, Κατερίνα") == "Sören, 北, µm·°, Κατερίνα"
    assert printable("a\ud800b") == "a\\ud800b"
