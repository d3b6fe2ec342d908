"""The log of a job: a file with everything, and the error stream with what a user wants to know."""

from __future__ import annotations

import logging
import sys
import time
from pathlib import Path

from odograph.provenance.renaming import is_full


def start_log(path: str | None) -> None:
    """Tell on the error stream what a user wants to know, and all of it in the job's log file."""
    logging.captureWarnings(True)
    root = logging.getLogger()
    root.setLevel(logging.DEBUG)
    for name in ("matplotlib", "numba", "hdmf", "pynwb", "PIL", "h5py"):
        logging.getLogger(name).setLevel(logging.WARNING)
    speak = logging.StreamHandler(sys.stderr)
    speak.setLevel(logging.INFO)
    speak.setFormatter(logging.Formatter("%(message)s"))
    root.addHandler(speak)
    if path is not None:
        Path(path).parent.mkdir(parents=True, exist_ok=True)
        # A job that outlived its run may still write to the old file.
        Path(path).unlink(missing_ok=True)
        keep = _LogFile(path, mode="w", encoding="utf-8")
        form = logging.Formatter("%(asctime)sZ %(levelname)s %(message)s", "%Y-%m-%dT%H:%M:%S")
        form.converter = time.gmtime
        keep.setFormatter(form)
        root.addHandler(keep)


class _LogFile(logging.FileHandler):
    """A log file that a full disk cuts short: the products decide whether a job fails."""

    def handleError(self, record: logging.LogRecord) -> None:  # noqa: N802 (the base class calls it so)
        if not is_full(sys.exc_info()[1]):
            super().handleError(record)
