"""How fast is `verify`, against sha256sum over the same bytes?

    python tests/benchmarks/verify_speed.py [--quick] [--json FILE]

A made-up study: records whose products are random bytes, nothing else. Both use all processors; files are
read before, so that neither waits for the disk. Wall time, medians of three.
"""

from __future__ import annotations

import contextlib
import os
import shutil
import subprocess
import sys
import tempfile
import time
from collections.abc import Callable
from pathlib import Path
from statistics import median

from benchmark_table import Table, read_options

from odograph.provenance.files import write_json
from odograph.provenance.records import RecordDraft
from odograph.provenance.root import workers, write_root
from odograph.provenance.verify import verify

CONFIG = Path(__file__).parents[2] / "config" / "config.yaml"


def make_study(folder: Path, records: int, products: int, megabytes: float) -> list[Path]:
    """A study of `records` records, each with `products` files of so many megabytes."""
    (folder / "config").mkdir()
    shutil.copy(CONFIG, folder / "config" / "config.yaml")
    (folder / "config" / "sessions.tsv").write_text("session\tnwb\none\tone.nwb\n")
    write_json(folder / "results/plan/population.json", {"sessions": []})
    write_json(folder / "results/plan/cache.json", {"sessions": {}})
    files = []
    with contextlib.chdir(folder):
        for r in range(records):
            draft = RecordDraft(f"made_{r}", keys={}, settings={}, code={})
            for p in range(products):
                path = Path(f"results/{r}/{p}.bin")
                path.parent.mkdir(parents=True, exist_ok=True)
                path.write_bytes(os.urandom(int(megabytes * 1e6)))
                draft.add_product(path)
                files.append(folder / path)
            draft.write(f"results/{r}/record.json")
        write_root()
    return files


def seconds(work: Callable[[], object]) -> float:
    times = []
    for _ in range(3):
        start = time.perf_counter()
        work()
        times.append(time.perf_counter() - start)
    return median(times)


def main() -> int:
    options = read_options(__doc__)
    table = Table("verify: speed", quick=options.quick, seed=0)
    sizes = [(10, 10, 0.2)] if options.quick else [(20, 10, 10.0), (20, 500, 0.1)]
    for records, products, megabytes in sizes:
        with tempfile.TemporaryDirectory() as name:
            folder = Path(name)
            files = make_study(folder, records, products, megabytes)
            names = "\0".join(map(str, files)).encode()
            command = ["xargs", "-0", "-P", str(workers()), "-n", "50", "sha256sum"]
            theirs = seconds(
                lambda c=command, n=names: subprocess.run(c, input=n, stdout=subprocess.DEVNULL, check=True)
            )
            found = []
            ours = seconds(lambda f=folder, k=found: k.append(verify(f)))
            assert found[-1].breaches == [], found[-1].breaches[:3]
            total = records * products * megabytes
            what = f"{records * products} products of {megabytes:g} MB: rate of sha256sum"
            told = f"{theirs / ours:.0%} ({total / ours:,.0f} against {total / theirs:,.0f} MB/s)"
            table.add(what, "70 %", told, theirs / ours >= 0.7, theirs / ours)
    table.note(f"{workers()} processors; sha256sum is started for 50 files at a time on all of them.")
    return table.finish(options.json)


if __name__ == "__main__":
    sys.exit(main())
