"""Step of rule `root`: one identifier over the records of all jobs."""

from __future__ import annotations

import argparse
import logging
import sys

from odograph.errors import OdographError
from odograph.provenance.job_log import start_log
from odograph.provenance.renaming import disk_full_told
from odograph.provenance.root import ROOT, write_root
from odograph.provenance.step import told

logger = logging.getLogger("odograph.step")


def main() -> int:
    """Write the root of the study in the folder that the workflow is run in."""
    parser = argparse.ArgumentParser(
        prog="python -m odograph.steps.root", description="The step of rule root; run by snakemake."
    )
    parser.add_argument("--code", required=True, help="fingerprint that the code has, so that it is run anew")
    parser.add_argument("--log", help="the log file")
    arguments = parser.parse_args()
    try:
        with disk_full_told(arguments.log or ROOT):
            start_log(arguments.log)
        logger.info("the run root is %s", write_root())
    except OdographError as error:
        return told(error)
    return 0


if __name__ == "__main__":
    sys.exit(main())
