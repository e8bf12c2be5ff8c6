"""How long a newcomer takes from a BIDS data set to a finished audit: a fresh clone, the environment, README's example.

    .venv/bin/python tests/benchmarks/first_study.py [--lend]

Builds the environment as a newcomer's (pip needs an index, or PIP_FIND_LINKS), then runs the commands of the section
"An example" one by one and prints the seconds that each took. `--lend` leaves the building out.
"""

import argparse
import sys
import tempfile
from pathlib import Path

sys.path.insert(0, str(Path(__file__).resolve().parents[1]))

import tour

HEADING = "### An example"


def main() -> int:
    """Follow the section; print the time of each command and of all."""
    parser = argparse.ArgumentParser(description=__doc__.split("\n", maxsplit=1)[0])
    parser.add_argument("--lend", action="store_true", help="use the packages of this Python instead of building")
    lend = parser.parse_args().lend
    page = (tour.REPOSITORY / "README.md").read_text(encoding="utf-8")
    section = page[page.index(HEADING) :]
    section = section[: section.index("\n### ", 1)]
    total = 0.0
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        clone = tour.fresh_clone(folder / "a clone")
        if lend:
            tour.lend_environment(clone)
        environment = tour.newcomer(folder)
        for block in tour.blocks(section):
            for step in tour.steps(block) if block.mark == tour.COMMANDS else []:
                done = tour.follow(step, clone, environment)
                total += done.seconds
                print(f"{done.seconds:7.1f} s  exit code {done.code}  {step.printed[:90]}", flush=True)
                if done.code != step.code:
                    print(done.text[-2000:])
                    return 1
    print(f"{total:7.1f} s  from a fresh clone to the finished audit")
    return 0


if __name__ == "__main__":
    raise SystemExit(main())
