"""Compiled code is kept between processes, wherever the package lies and whatever happens to the files.

Every case runs in processes of its own, as jobs do. What the code returns is compared with numpy: sums per
cell with `bincount`, a mirrored lower triangle with `tril`.
"""

import json
import os
import pickle
import shutil
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest

import odograph

PACKAGE = Path(odograph.__file__).parent
NAMES = ("cell_sums", "mirror")

# Answers each line "NAME ORDER" with the kernel's result, how often code was loaded and compiled, its folder.
JOB = """\
import json, sys
import numpy as np
{before}
from odograph.encoding import kernels

def cell_sums(order):
    cells = np.array([[0, 1, 2, 1], [1, 0, 1, 1]], dtype=np.int32, order=order)
    out = np.empty(5)
    kernels.cell_sums(cells, np.array([0.5, 1.0, 2.0, 4.0]), np.array([0, 3]), out)
    return out

def mirror(order):
    matrix = np.array(np.arange(16.0).reshape(4, 4), order=order)
    kernels.mirror(matrix)
    return matrix

print("ready", flush=True)
for line in sys.stdin:
    name, order = line.split()
    result = {{"cell_sums": cell_sums, "mirror": mirror}}[name](order).tolist()
    stats = getattr(kernels, name).stats
    count = [sum(stats.cache_hits.values()), sum(stats.cache_misses.values())]
    print(json.dumps([result, *count, stats.cache_path]), flush=True)
"""


def expected(name):
    if name == "mirror":
        lower = np.tril(np.arange(16.0).reshape(4, 4))
        return (lower + np.tril(lower, -1).T).tolist()
    weights = [0.5, 1.0, 2.0, 4.0]
    return [*np.bincount([0, 1, 2, 1], weights), *np.bincount([1, 0, 1, 1], weights)]


class Job:
    """A process that has loaded the kernels and waits to be told which to call."""

    def __init__(self, folder, *, before="", **environment):
        self.process = subprocess.Popen(
            [sys.executable, "-c", JOB.format(before=before)],
            stdin=subprocess.PIPE,
            stdout=subprocess.PIPE,
            stderr=subprocess.PIPE,
            text=True,
            cwd=folder,
            env={key: value for key, value in os.environ.items() if not key.startswith("NUMBA_")}
            | {"PYTHONDONTWRITEBYTECODE": "1"}
            | environment,
        )

    def call(self, *calls):
        """Results, loads, compilations and folder after each of the calls, and what the job said."""
        out, said = self.process.communicate("".join(f"{call}\n" for call in calls))
        assert self.process.returncode == 0, said
        ready, *lines = out.splitlines()
        assert ready == "ready"
        return [json.loads(line) for line in lines], said


def kept(folder):
    return sorted(path for path in Path(folder).rglob("*") if path.suffix in (".nbi", ".nbc"))


@pytest.fixture(scope="module")
def filled(tmp_path_factory):
    """A folder with the code of `cell_sums` for one kind of arguments."""
    folder = tmp_path_factory.mktemp("filled")
    ((result, loaded, compiled, _),), _ = Job(folder, NUMBA_CACHE_DIR=str(folder / "code")).call(
        "cell_sums C"
    )
    assert (result, loaded, compiled) == (expected("cell_sums"), 0, 1)
    return folder / "code"


@pytest.fixture
def code(filled, tmp_path):
    """A copy of it."""
    return Path(shutil.copytree(filled, tmp_path / "code"))


def test_a_package_that_cannot_be_written_keeps_its_code_with_the_results(tmp_path):
    shutil.copytree(PACKAGE, tmp_path / "odograph", ignore=shutil.ignore_patterns("__pycache__"))
    for path in [tmp_path / "odograph", *(tmp_path / "odograph").rglob("*")]:
        path.chmod(0o555 if path.is_dir() else 0o444)
    (tmp_path / "study").mkdir()
    # Permission bits do not bind root, who may run the tests in a container.
    before = (
        "import os\n"
        "from odograph.provenance import step\n"
        "if os.geteuid() == 0: os.access = lambda *of, **how: False\n"
        "step._prepare_process()"
    )
    for count in ([0, 1], [1, 0]):
        job = Job(tmp_path / "study", before=before, PYTHONPATH=str(tmp_path))
        ((result, *counted, folder),), _ = job.call("cell_sums C")
        assert (result, counted) == (expected("cell_sums"), count)
        assert Path(folder).parent == tmp_path / "study/results/store/compiled"
    assert kept(tmp_path / "study/results/store/compiled")
    assert not kept(tmp_path / "odograph")


def test_two_processes_may_compile_at_the_same_moment(tmp_path):
    place = {"NUMBA_CACHE_DIR": str(tmp_path / "code")}
    both = [Job(tmp_path, **place) for _ in range(2)]
    for job in both:
        assert job.process.stdout.readline() == "ready\n"
    for job in both:
        job.process.stdin.write("cell_sums C\nmirror F\n")
        job.process.stdin.flush()
    for job in both:
        answers = [json.loads(job.process.stdout.readline()) for _ in NAMES]
        assert [answer[0] for answer in answers] == [expected(name) for name in NAMES]
        _, said = job.process.communicate()
        assert (job.process.returncode, said) == (0, "")
    third, _ = Job(tmp_path, **place).call("cell_sums C", "mirror F")
    assert [answer[:3] for answer in third] == [[expected(name), 1, 0] for name in NAMES]


def test_code_for_other_arguments_compiled_at_the_same_moment_is_not_mixed_up(tmp_path):
    place = {"NUMBA_CACHE_DIR": str(tmp_path / "code")}
    Job(tmp_path, **place).call("mirror F")
    # As the job before, this one found no index; its own was replaced at once by that of the other; it writes
    # its code last.
    late = (
        "from numba.core.caching import IndexDataCacheFile\n"
        "IndexDataCacheFile._load_index = lambda self: {}\n"
        "IndexDataCacheFile._save_index = lambda self, index: None"
    )
    Job(tmp_path, before=late, **place).call("mirror C")
    answers, said = Job(tmp_path, **place).call("mirror F", "mirror C")
    assert [answer[0] for answer in answers] == [expected("mirror")] * 2
    assert answers[0][1:3] == [1, 0]
    assert said == ""


def cut(path):
    path.write_bytes(path.read_bytes()[:40])


def empty(path):
    path.write_bytes(b"")


def zeros_within(path):
    """A block that never reached the disk; the machine code behind it can still be read, and would be run."""
    content = bytearray(path.read_bytes())
    content[1500:2100] = bytes(600)
    path.write_bytes(content)


@pytest.mark.parametrize(
    ("suffix", "damage"), [(".nbi", cut), (".nbi", empty), (".nbc", empty), (".nbc", zeros_within)]
)
def test_damaged_code_is_told_and_made_again(code, suffix, damage):
    (path,) = [path for path in kept(code) if path.suffix == suffix]
    damage(path)
    for count, telling in (([0, 1], True), ([1, 0], False)):
        ((result, *counted, folder),), said = Job(code.parent, NUMBA_CACHE_DIR=str(code)).call("cell_sums C")
        assert (result, counted) == (expected("cell_sums"), count)
        assert ("damaged" in said and folder in said) is telling


def test_code_that_cannot_be_kept_is_run_all_the_same(tmp_path):
    """The folder turns into a file under a job that is at work, as a disk that is lost would do."""
    folder = tmp_path / "code"
    job = Job(tmp_path, NUMBA_CACHE_DIR=str(folder))
    assert job.process.stdout.readline() == "ready\n"
    shutil.rmtree(folder)
    folder.write_text("")
    job.process.stdin.write("cell_sums C\n")
    job.process.stdin.flush()
    assert json.loads(job.process.stdout.readline())[:3] == [expected("cell_sums"), 0, 1]
    _, said = job.process.communicate()
    assert job.process.returncode == 0
    assert "could not be kept" in said and str(folder) in said


def test_where_no_folder_can_be_written_the_code_is_compiled_in_every_process(tmp_path):
    """Neither the folder asked for, nor the one beside the module, nor the user's."""
    shutil.copytree(PACKAGE, tmp_path / "odograph", ignore=shutil.ignore_patterns("__pycache__"))
    (tmp_path / "odograph/encoding/__pycache__").write_text("")
    (tmp_path / "file").write_text("")
    nowhere = dict.fromkeys(("NUMBA_CACHE_DIR", "XDG_CACHE_HOME", "HOME"), str(tmp_path / "file/cache"))
    ((result, *counted, folder),), said = Job(tmp_path, PYTHONPATH=str(tmp_path), **nowhere).call(
        "cell_sums C"
    )
    assert (result, counted, folder) == (expected("cell_sums"), [0, 1], None)
    assert "set NUMBA_CACHE_DIR" in said


class Trap:
    """What unpickles to a call."""

    def __init__(self, mark):
        self.mark = mark

    def __reduce__(self):
        return Path.touch, (self.mark,)


@pytest.mark.parametrize("suffix", [".nbi", ".nbc"])
def test_code_that_others_may_have_written_is_not_even_read(code, suffix):
    (path,) = [path for path in kept(code) if path.suffix == suffix]
    mark = code.parent / "sprung"
    path.write_bytes(pickle.dumps(Trap(mark)))
    path.chmod(0o666)
    before = path.read_bytes()
    ((result, *counted, _),), said = Job(code.parent, NUMBA_CACHE_DIR=str(code)).call("cell_sums C")
    assert (result, counted) == (expected("cell_sums"), [0, 1])
    assert not mark.exists()
    assert "others may have written" in said and str(path) in said
    assert path.read_bytes() == before
    # The same trap in a file of the user's own does spring: there is one in it.
    path.chmod(0o600)
    Job(code.parent, NUMBA_CACHE_DIR=str(code)).call("cell_sums C")
    assert mark.exists()
