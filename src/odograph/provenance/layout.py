"""Where products lie under `results/`, for those who need many of them at once."""

from __future__ import annotations

import hashlib
from pathlib import Path

RESULTS = Path("results")
PLAN = RESULTS / "plan"
STORE = RESULTS / "store"
POPULATION = RESULTS / "population"
FIGURES = RESULTS / "figures"
REPORT = RESULTS / "report.html"


def session_folder(session: str) -> Path:
    """The folder of all products of one session."""
    return RESULTS / "sessions" / session


def plan_folder(session: str) -> Path:
    """The folder of one session's planned digests."""
    return PLAN / "sessions" / session


def inventory(session: str) -> Path:
    """What one recording holds, and its verdict."""
    return session_folder(session) / "intake" / "inventory.json"


def clock(session: str) -> Path:
    """One session's map from camera clock to recording clock."""
    return session_folder(session) / "sync" / "clock.json"


def residuals(session: str) -> Path:
    """How far each frame pulse lies from that map."""
    return session_folder(session) / "sync" / "residuals.parquet"


def behaviour(session: str) -> Path:
    """One session's position, head direction and speed on the analysis bins."""
    return session_folder(session) / "behaviour" / "behaviour.parquet"


def audit(session: str) -> Path:
    """What was dropped from one session's behaviour, and its verdict."""
    return session_folder(session) / "behaviour" / "audit.json"


def shard_folder(session: str, shard: int) -> Path:
    """The fits of one shard of a session's units."""
    return session_folder(session) / "encoding" / f"shard-{shard}"


def cards_folder(session: str) -> Path:
    """The cards of one session's units."""
    return session_folder(session) / "cards"


def shard_of(session: str, unit: int, shards: int) -> int:
    """The shard a unit belongs to: a hash of its name, so that no unit moves when another comes or goes."""
    return int(hashlib.sha256(f"{session}/{unit}".encode()).hexdigest()[:15], 16) % shards
