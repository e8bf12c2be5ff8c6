"""What the step commands share: numerical settings before numpy is imported, errors as one line, records as JSON."""

import argparse
import json
import os
import sys
from collections.abc import Callable
from pathlib import Path
from typing import Any, NoReturn

from evenblur.errors import InputError
from evenblur.printable import printable

# One thread a job: the workflow runs as many jobs as there are cores, and sums must not depend on a thread count.
for _name in ("OPENBLAS_NUM_THREADS", "OMP_NUM_THREADS", "MKL_NUM_THREADS"):
    os.environ[_name] = "1"


class Arguments(argparse.ArgumentParser):
    """An argument parser whose complaints are one line, as all others."""

    def error(self, message: str) -> NoReturn:
        """End with one line on standard error and exit code 2."""
        print(printable(f"{self.prog}: {message}; see {self.prog} --help"), file=sys.stderr)
        raise SystemExit(2)


def run(main: Callable[[list[str]], int | None], arguments: list[str] | None = None) -> int:
    """Call a step's main function; bad input becomes one line on standard error and exit code 2."""
    try:
        return main(sys.argv[1:] if arguments is None else arguments) or 0
    except InputError as error:
        print(printable(error), file=sys.stderr)
        return 2
    except MemoryError:
        print("the job needs more memory than it may take; run fewer jobs at once or crop the image", file=sys.stderr)
        return 2
    except OSError as error:
        where = error.filename or "a file"
        told = f"{where}: {error.strerror or error}; make room or mend the permissions and run again"
        print(printable(told), file=sys.stderr)
        return 2


def write_text(path: Path, text: str) -> None:
    """Write a text file whole or not at all: to a temporary name beside it, then rename."""
    path.parent.mkdir(parents=True, exist_ok=True)
    temporary = path.with_name(f".{path.name}.{os.getpid()}.part")
    try:
        temporary.write_text(text, encoding="utf-8", newline="\n")
        temporary.replace(path)
    finally:
        temporary.unlink(missing_ok=True)


def write_record(path: Path, record: dict[str, Any]) -> None:
    """Write a record as JSON (two-space indent, keys in the given order, no NaN), whole or not at all."""
    write_text(path, json.dumps(record, indent=2, ensure_ascii=False, allow_nan=False) + "\n")


def read_record(path: Path) -> dict[str, Any]:
    """Read a record that a step wrote.

    Raises
    ------
    InputError
        If the file is missing or is no JSON object.
    """
    try:
        record = json.loads(path.read_text(encoding="utf-8"))
    except (OSError, ValueError) as error:
        raise InputError(str(path), f"cannot be read ({error})", "delete it and run again") from error
    if not isinstance(record, dict):
        raise InputError(str(path), "is not a JSON object", "delete it and run again")
    return record
