"""The demo generator is a folder of scripts, not a package: its modules are imported as a run of it would."""

from __future__ import annotations

import sys
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parents[2]
sys.path.insert(0, str(ROOT / "demo_data"))


@pytest.fixture(scope="session")
def root() -> Path:
    """The repository's top folder."""
    return ROOT


@pytest.fixture(scope="session")
def session():
    """A whole simulated session, long enough for statistics."""
    from make_recordings import simulate_session
    from study_plan import plans

    (plan,) = plans(["bracken_2"], minutes=12)
    return simulate_session(plan)


@pytest.fixture(scope="session")
def small_files(tmp_path_factory) -> dict[str, Path]:
    """Small recordings: with observed intervals, with invalid times, and one sorted again."""
    from make_recordings import main

    folder = tmp_path_factory.mktemp("recordings")
    size = ["--minutes", "1", "--units", "6", "--out", str(folder)]
    assert main(["--sessions", "bracken_2", "teasel_2", *size]) == 0
    assert main(["--resort", "bracken_2", *size]) == 0
    return {path.stem: path for path in sorted(folder.glob("*.nwb"))}
