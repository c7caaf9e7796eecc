"""python tests/bench/run.py NAME… [--json FILE]: print benchmark rows and write them as JSON.

Each benchmark is a file of this folder, NAME.py, with a function rows() that returns dictionaries
{name, value, unit, goal, met}: goal is a sentence ("" when there is none, and then met is None).
The exit code is 1 when a goal is missed. Times are ratios of works done in turn in one process, so
that they mean the same on another machine.
"""

from __future__ import annotations

import argparse
import importlib.util
import json
import os
import sys
from pathlib import Path
from typing import Any

HERE = Path(__file__).parent
SHARED = {
    "run",
    "measure",
    "reference_functions",
    "economy_problems",
    "engine_large",
    "answers_drivers",
    "answers_questions",
}


def names() -> list[str]:
    return sorted(
        file.stem
        for file in HERE.glob("*.py")
        if file.stem not in SHARED and not file.stem.startswith("_")
    )


def rows_of(name: str) -> list[dict[str, Any]]:
    spec = importlib.util.spec_from_file_location(f"bench_{name}", HERE / f"{name}.py")
    assert spec is not None
    assert spec.loader is not None
    module = importlib.util.module_from_spec(spec)
    sys.modules[spec.name] = module
    spec.loader.exec_module(module)
    return [{"benchmark": name, **row} for row in module.rows()]


def table(rows: list[dict[str, Any]]) -> str:
    cells = [("", "work", "value", "unit", "goal", "met")]
    for row in rows:
        met = "" if row["met"] is None else ("yes" if row["met"] else "NO")
        cells.append(
            (row["benchmark"], row["name"], f"{row['value']:.4g}", row["unit"], row["goal"], met)
        )
    widths = [max(len(line[k]) for line in cells) for k in range(6)]
    return "\n".join(
        "  ".join(text.ljust(width) for text, width in zip(line, widths, strict=True)).rstrip()
        for line in cells
    )


def main() -> int:
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument(
        "names", nargs="+", choices=names(), metavar="NAME", help=", ".join(names())
    )
    parser.add_argument("--json", type=Path, metavar="FILE")
    arguments = parser.parse_args()
    found: list[dict[str, Any]] = []
    for name in arguments.names:
        found += rows_of(name)
    print(table(found))
    if arguments.json is not None:
        arguments.json.write_text(json.dumps(found, indent=1) + "\n", encoding="utf-8")
    return 1 if any(row["met"] is False for row in found) else 0


if __name__ == "__main__":
    # one thread each: what is compared is the work, not how many cores happen to be idle
    for variable in ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS"):
        os.environ.setdefault(variable, "1")
    sys.path.insert(0, str(HERE))
    sys.exit(main())
