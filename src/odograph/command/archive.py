"""`odograph archive TARGET`: one verified package beside the paper."""

from __future__ import annotations

import argparse
import json
import sys
from pathlib import Path
from typing import Any

from odograph.errors import OdographError

EXIT_OK, EXIT_BREACH, EXIT_NO_INPUT = 0, 1, 66

_EXAMPLES = """\
examples:
  odograph archive ../study-2026.zip                     one file, recordings named by digest
  odograph archive ../study-2026 --with-recordings       a folder, recordings taken along
  odograph archive ../study-2026.zip --recordings-at https://example.org/set/12   where they can be fetched

The package is a BagIt bag (RFC 8493) with a Workflow Run RO-Crate inside; the same run gives the same bytes.

exit codes: 0 written, 1 the study does not verify (nothing is written), 66 no finished study there
"""


def add_parser(subparsers: argparse._SubParsersAction[argparse.ArgumentParser]) -> None:
    """Add the command to the parser of `odograph`."""
    parser = subparsers.add_parser(
        "archive",
        help="one verified package beside the paper",
        description="Put results, records, settings, workflow, library and the exact versions of what was "
        "used into one package, with a README for a reader in ten years. The study is verified first.",
        epilog=_EXAMPLES,
        formatter_class=argparse.RawDescriptionHelpFormatter,
    )
    parser.add_argument("target", metavar="TARGET", type=Path, help="a folder to make, or a file named .zip")
    parser.add_argument("--study", type=Path, default=Path(), help="the study's folder (here)")
    parser.add_argument("--with-recordings", action="store_true", help="take the recordings along")
    parser.add_argument("--recordings-at", metavar="URL", help="where the recordings can be fetched")
    parser.add_argument("--json", action="store_true", help="write one JSON document instead of text")
    parser.set_defaults(run=run)


def run(args: argparse.Namespace) -> int:
    """Archive the study in `args.study`; returns the exit code."""
    from odograph.provenance.archive.make import make_archive
    from odograph.provenance.verify import verify

    try:
        found = verify(args.study)
        if found.breaches:
            print(f"the study does not verify: {len(found.breaches)} things do not hold", file=sys.stderr)
            for breach in found.breaches[:5]:
                print(f"  {breach.file}: {breach.found}", file=sys.stderr)
            print("  what to do: run snakemake, then `odograph verify`", file=sys.stderr)
            return EXIT_BREACH
        name, parameters, statement = _words(args)
        made = make_archive(
            args.study, args.target, name=name, parameters=parameters, statement=statement,
            with_recordings=args.with_recordings, recordings_at=args.recordings_at,
        )  # fmt: skip
    except OdographError as error:
        print(error.message(), file=sys.stderr)
        return EXIT_NO_INPUT
    for file, word in made.naming:
        print(f"{file} holds {word}, a place on this machine; look whether to leave it in", file=sys.stderr)
    if args.json:
        document = {
            "schema_version": 1, "path": made.path.as_posix(), "root": made.root, "files": made.files,
            "bytes": made.bytes, "recordings": len(made.recordings), "with_recordings": args.with_recordings,
        }  # fmt: skip
        print(json.dumps(document, indent=1, sort_keys=True))
    else:
        enclosed = "enclosed" if args.with_recordings else "named by digest"
        print(f"{made.path}: {made.files} files, {made.bytes / 1e6:,.1f} MB")
        print(f"{len(made.recordings)} recordings, {enclosed}")
        print(made.root)
    return EXIT_OK


def _words(args: argparse.Namespace) -> tuple[str, dict[str, Any], str]:
    """The study's name, its settings that are not the default, and METHODS.md."""
    from odograph.provenance.files import read_json
    from odograph.provenance.root import read_root
    from odograph.report.methods import methods
    from odograph.settings.load import load_settings, settings_table

    settings = load_settings(args.study / "config" / "config.yaml")
    values = settings.model_dump(mode="json")
    root = read_root(args.study)
    software: dict[str, str] = {}
    for row in root["records"]:
        software |= read_json(args.study / row["file"])["software"]

    def value(path: str) -> Any:
        found: Any = values
        for part in path.split("."):
            found = found[part]
        return found

    paragraphs, references = methods(value, software)
    table = settings_table(settings)
    parameters = {row["path"]: row["value"] for row in table if row["value"] != row["default"]}
    commit, modified = root["code"]["commit"], root["code"]["modified"]
    code = f" at commit {commit}" if commit else ""
    if modified:
        code += ", with changes that were not committed"
    if args.with_recordings:
        place = "The recordings are enclosed."
    elif args.recordings_at:
        place = f"The recordings can be fetched from {args.recordings_at}."
    else:
        place = "The recordings are available from: (say where)."
    lines = [
        "# Methods", "", *(f"{paragraph}\n" for paragraph in paragraphs), "## References", "",
        *(f"{number}. {reference}" for number, reference in enumerate(references, 1)),
        "", "# Data and code availability", "",
        f"{place} They are listed in recordings.tsv, {len(root['recordings'])} files with their SHA-256 "
        "digests. Results, records of provenance, settings, workflow, library and the versions of all "
        f"software are in this archive. The analysis was made with odograph {software['odograph']}{code}; "
        f"its run root, one identifier over all {len(root['records'])} records, is {root['root']}. Every "
        "figure carries the identifier of its record, from which `odograph trace` follows it back to the "
        "recordings and settings; `odograph verify` checks that nothing was changed since, and `odograph "
        "replay` runs the analysis again and compares.", "",
    ]  # fmt: skip
    return settings.study.name, parameters, "\n".join(lines)
