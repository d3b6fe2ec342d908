"""The benchmark of `verify` runs and has the form that is promised; the figures are not judged here."""

import json
import subprocess
import sys
from pathlib import Path

SCRIPT = Path(__file__).with_name("verify_speed.py")


def test_the_rate_is_measured_against_sha256sum(tmp_path):
    file = tmp_path / "table.json"
    done = subprocess.run(
        [sys.executable, str(SCRIPT), "--quick", "--json", str(file)],
        capture_output=True, text=True, check=False, cwd=tmp_path, timeout=120,
    )  # fmt: skip
    assert file.exists(), done.stderr
    table = json.loads(file.read_text(encoding="utf-8"))
    (line,) = table["lines"]
    assert line["what"] == "100 products of 0.2 MB: rate of sha256sum" and line["value"] > 0
    assert done.returncode == int(not table["holds"])
