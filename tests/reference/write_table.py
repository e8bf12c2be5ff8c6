"""Write README.md of this folder from a run of its tests.

python tests/reference/write_table.py
"""

import json
import os
import subprocess
import sys
import tempfile
from pathlib import Path

HERE = Path(__file__).resolve().parent
sys.path.insert(0, str(HERE.parent))

from reference_checks import TABLE, TITLES, Check, table_text  # noqa: E402 - the folder above is no package


def main() -> int:
    """Run the tests, keep the table only if all of them pass."""
    with tempfile.TemporaryDirectory() as folder:
        records = Path(folder) / "checks.jsonl"
        tests = [str(HERE / f"{module}.py") for module in TITLES]
        command = [sys.executable, "-m", "pytest", "-q", "-p", "no:xdist", *tests]
        environment = {**os.environ, "EVENBLUR_REFERENCE_CHECKS": str(records)}
        failed = subprocess.call(command, cwd=HERE.parents[1], env=environment)
        if failed:
            print("the table is left as it was: not all checks pass")
            return 1
        lines = records.read_text(encoding="utf-8").splitlines()
    TABLE.write_text(table_text([Check(**json.loads(line)) for line in lines]), encoding="utf-8")
    print(f"{len(lines)} checks written to {TABLE.relative_to(HERE.parents[1])}")
    return 0


if __name__ == "__main__":
    sys.exit(main())
