"""Sort a shoot by camera body and neutralise each body's frames on their own, each with its own preset.

    python examples/split_by_body.py shoot/ graded/ --preset evening-warmth --for "Northlight N2 0042=full-neutral"

Each body gets a folder below ``graded/`` with its files and its log.  (Within one batch, grader matches bodies to each
other; this script is for bodies that ought to look different.)
"""

from __future__ import annotations

import argparse
import re
import sys
from collections import defaultdict
from pathlib import Path

import grader
from grader.batch import Options
from grader.workers import Pool


def files_by_body(paths: list[str], pool: Pool) -> dict[str, list[str]]:
    """Return the files of each body; frames that name no body stand under an empty name."""
    groups: dict[str, list[str]] = defaultdict(list)
    for line in grader.measure_files(paths, options=Options(pool=pool, dry_run=True)):
        if line["status"] == "failed":
            print(f"{line['file']}: {line['error']['message']}", file=sys.stderr)
        else:
            groups[line["body"]].append(line["file"])
    return dict(groups)


def folder_name(body: str) -> str:
    """Return a name for a body's folder that every system takes.

    >>> folder_name("Northlight N2 0042/a")
    'Northlight-N2-0042-a'
    """
    return re.sub(r"[^A-Za-z0-9]+", "-", body).strip("-") or "unknown-body"


def main(arguments: list[str] | None = None) -> int:
    """Run the split."""
    parser = argparse.ArgumentParser(
        description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter
    )
    parser.add_argument("paths", nargs="+", help="files, folders or globs; the last is the output folder")
    parser.add_argument("--preset", default="full-neutral", help="for bodies not named by --for")
    parser.add_argument("--for", dest="own", action="append", default=[], metavar="BODY=PRESET")
    parser.add_argument("--workers", type=int, default=1)
    given = parser.parse_args(arguments)
    *paths, out = given.paths
    presets = {
        body: grader.load_preset(name) for body, _, name in (text.rpartition("=") for text in given.own)
    }
    default, pool = grader.load_preset(given.preset), Pool(processes=given.workers)
    failed = 0
    for body, files in sorted(files_by_body(paths, pool).items()):
        target = Path(out) / folder_name(body)
        lines = grader.neutralise(
            files, target, preset=presets.get(body, default), options=Options(pool=pool)
        )
        wrong = sum(line["status"] == "failed" for line in lines)
        failed += wrong
        print(f"{body or 'unknown body'}: {len(files) - wrong} graded, {wrong} failed -> {target}")
    return 3 if failed else 0


if __name__ == "__main__":
    sys.exit(main())
