"""A process that runs a batch and reports what is kept: python runs_process.py FOLDER N [OPTIONS].

Prints `workers PID...` and `kept K` lines as runs are reported finished, and at the end a digest of
all numbers. Exit codes are those of the command line.
"""

from __future__ import annotations

import argparse
import hashlib
import resource
import sys
from pathlib import Path

from runs_samples import Sample, sample_batch

from nipc.errors import NipcError
from nipc.runs.engine import Engine
from nipc.runs.ledger import Ledger


class Reporter:
    """Says on stdout what progress hears."""

    kept = 0
    engine: Engine

    def start(self, label: str, total: int, reused: int) -> None:
        self.kept = reused
        print(f"start {total} {reused}", flush=True)

    def advance(self, done: int, failed: int) -> None:
        self.kept += done
        workers = getattr(self.engine._crew, "_workers", [])
        print("workers", *(worker.process.pid for worker in workers), flush=True)
        print(f"kept {self.kept}", flush=True)

    def finish(self) -> None:
        pass


def main() -> int:
    parser = argparse.ArgumentParser()
    parser.add_argument("folder", type=Path)
    parser.add_argument("n", type=int)
    parser.add_argument("--pause", type=float, default=0.0)
    parser.add_argument("--times", type=int, default=6)
    parser.add_argument("--jobs", type=int, default=2)
    parser.add_argument("--vectorised", action="store_true")
    parser.add_argument("--file-limit", type=int)
    parser.add_argument("--kind", type=int, nargs=2, metavar=("ROW", "KIND"))
    options = parser.parse_args()
    if options.file_limit:
        resource.setrlimit(resource.RLIMIT_FSIZE, (options.file_limit, options.file_limit))
    vectorised = options.vectorised
    propagator = Sample(pause=options.pause, vectorised=vectorised, mixing=vectorised)
    kinds = dict([options.kind]) if options.kind else None
    batch = sample_batch(options.n, times=options.times, kinds=kinds)
    reporter = Reporter()
    try:
        with (
            Ledger.open(options.folder) as ledger,
            Engine(propagator, ledger, n_jobs=options.jobs, progress=reporter) as engine,
        ):
            reporter.engine = engine
            outcomes = engine.run(batch, "arc 1")
            print("notes", *ledger.notes, flush=True)
    except NipcError as error:
        print(f"error {error}", flush=True)
        return error.exit_code
    print("digest", hashlib.sha256(outcomes.states.tobytes()).hexdigest(), flush=True)
    return 0


if __name__ == "__main__":
    sys.exit(main())
