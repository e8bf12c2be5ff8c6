"""Damage thousands of inputs and count what becomes of them.

    .venv/bin/python tests/benchmarks/fuzz_inputs.py --inputs 20000 --seed 1

Each worker may take 2 GiB beyond what it starts with, and 20 seconds an input. Ends with 1 where anything went wrong;
`--only NUMBER` repeats one input and shows its traceback.
"""

import argparse
import multiprocessing
import resource
import shutil
import signal
import sys
import tempfile
import time
from collections import Counter
from pathlib import Path
from typing import Any

TESTS = Path(__file__).resolve().parents[1]
sys.path[:0] = [str(TESTS), str(TESTS.parent / "scripts")]

from evenblur import command  # noqa: E402, F401 - one thread, before numpy

import fuzzing  # noqa: E402 # isort: skip

LIMIT_BYTES, LIMIT_S = 2 << 30, 20


class TooLongError(BaseException):
    """Raised in the middle of an input that takes too long; no handler of the library catches it."""


def _too_long(*_: Any) -> None:
    raise TooLongError


def prepare() -> None:
    """Limit this process's memory and set its alarm."""
    pages = int(Path("/proc/self/statm").read_text().split()[0])
    limit = pages * resource.getpagesize() + LIMIT_BYTES
    resource.setrlimit(resource.RLIMIT_AS, (limit, limit))
    signal.signal(signal.SIGALRM, _too_long)
    fuzzing.quiet_nibabel()


def one(number: int) -> tuple[int, fuzzing.Outcome, float]:
    """What became of one input, and how long it took."""
    started = time.monotonic()
    folder = Path(tempfile.mkdtemp(prefix="fuzz"))
    signal.alarm(LIMIT_S)
    try:
        outcome = fuzzing.damaged(number, folder)
    except TooLongError:
        outcome = fuzzing.Outcome("", "", f"longer than {LIMIT_S} s")
    finally:
        signal.alarm(0)
        shutil.rmtree(folder, ignore_errors=True)
    return number, outcome, time.monotonic() - started


def main(arguments: list[str]) -> int:
    """Run the inputs and print the counts by kind."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--inputs", type=int, default=5000)
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--workers", type=int, default=2)
    parser.add_argument("--only", type=int, help="repeat the input of this number")
    given = parser.parse_args(arguments)
    if given.only is not None:
        prepare()
        print(one(given.only))
        return 0
    first = given.seed * 1_000_000
    counts: Counter[tuple[str, str]] = Counter()
    wrong, slowest = [], 0.0
    with multiprocessing.get_context("fork").Pool(given.workers, initializer=prepare) as pool:
        for number, outcome, seconds in pool.imap_unordered(one, range(first, first + given.inputs), chunksize=20):
            counts[outcome.kind, outcome.outcome if not outcome.wrong else "WRONG"] += 1
            slowest = max(slowest, seconds)
            if outcome.wrong:
                wrong.append(f"{number} {outcome.kind}: {outcome.wrong}")
    columns = [*fuzzing.OUTCOMES, "WRONG"]
    print(f"{'kind':16}" + "".join(f"{column:>20}" for column in columns))
    for kind in sorted({kind for kind, _ in counts}):
        print(f"{kind:16}" + "".join(f"{counts[kind, column]:20}" for column in columns))
    totals = [sum(count for (_, found), count in counts.items() if found == column) for column in columns]
    print(f"{'all':16}" + "".join(f"{total:20}" for total in totals))
    print(f"slowest input {slowest:.1f} s")
    print("\n".join(wrong[:60]))
    return 1 if wrong else 0


if __name__ == "__main__":
    raise SystemExit(main(sys.argv[1:]))
