"""What a call of Snakemake asks for, read from its arguments.

Only the standard library is used, so that the start script can ask before anything is installed.
"""

import os
import re
from pathlib import Path

_AT_HOME = frozenset({"local", "dryrun", "touch"})
"""Executors that send nothing elsewhere."""


def option_values(arguments: list[str], *names: str) -> list[str]:
    """What a call gives to an option.

    >>> option_values(["-e", "slurm", "--profile=mine"], "-e", "--executor", "--profile")
    ['slurm', 'mine']
    """
    found = [value for place, value in enumerate(arguments) if place and arguments[place - 1] in names]
    parted = [argument.partition("=") for argument in arguments]
    return found + [value for name, sign, value in parted if sign and name in names]


def cluster_of(arguments: list[str]) -> str:
    """The executor that sends jobs elsewhere, named by the call or by a profile that it names; empty for none.

    >>> cluster_of(["--executor", "slurm"]), cluster_of(["--executor=local", "plan"])
    ('slurm', '')
    """
    found = option_values(arguments, "--executor", "-e")
    for profile in option_values(arguments, "--profile"):
        for settings in sorted(Path(profile).glob("config*.yaml")):
            text = settings.read_text(encoding="utf-8", errors="replace")
            found += re.findall(r"^executor:[ \t]*[\"']?([\w-]+)", text, flags=re.MULTILINE)
    return next((name for name in found if name not in _AT_HOME), "")


def asks_for_all(arguments: list[str]) -> bool:
    """Whether a call asks for the whole study and for nothing out of the ordinary, in its arguments or from outside.

    >>> asks_for_all([]), asks_for_all(["--cores", "2"]), asks_for_all(["plan"]), asks_for_all(["--force"])
    (True, True, False, False)
    """
    ordinary = re.fullmatch(r"((--cores[= ]|-c ?)(\d+|all))?", " ".join(arguments))
    return bool(ordinary) and not any(name.startswith("SNAKEMAKE_") for name in os.environ)
