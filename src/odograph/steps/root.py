"""Step of rule `root`: one identifier over the records of all jobs."""

from __future__ import annotations

import argparse
import sys

from odograph.errors import OdographError
from odograph.provenance.root import write_root


def main() -> int:
    """Write the root of the study in the folder that the workflow is run in."""
    parser = argparse.ArgumentParser(
        prog="python -m odograph.steps.root", description="The step of rule root; run by snakemake."
    )
    parser.add_argument("--code", required=True, help="fingerprint that the code has, so that it is run anew")
    parser.parse_args()
    try:
        print(f"the run root is {write_root()}")
    except OdographError as error:
        print(error.message(), file=sys.stderr)
        return 65
    return 0


if __name__ == "__main__":
    sys.exit(main())
