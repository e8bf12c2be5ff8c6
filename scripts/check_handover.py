"""Check the bag that a run packed for the auditor, and with the study at hand smooth scans again by another route.

python scripts/check_handover.py BAG [--study STUDY] [--sample N --seed S]

Exit codes: 0 everything that was compared agrees, 1 something does not (the last line says what), 2 the call has to be
mended. The checks are in scripts/evenblur/check and share no code with the program that they check.
"""

from pathlib import Path

from evenblur.command import Arguments, run
from evenblur.errors import InputError


def main(arguments: list[str]) -> int:
    """Read the arguments, check, say what was found."""
    parser = Arguments(prog="check_handover.py", description=__doc__.split("\n\n")[0])
    parser.add_argument("bag", type=Path, help="the bag, as results/handover")
    parser.add_argument("--study", type=Path, help="the study folder: also compare its images with the bag")
    parser.add_argument("--sample", type=int, default=5, help="scans to smooth again, with --study (default: 5)")
    parser.add_argument("--seed", type=int, default=0, help="which draw of scans (default: 0)")
    options = parser.parse_args(arguments)
    if not options.bag.is_dir():
        raise InputError(str(options.bag), "there is no such folder", "name the bag's folder, as results/handover")
    if options.study is not None and not options.study.is_dir():
        raise InputError(str(options.study), "there is no such folder", "name the study folder")
    if options.sample < 0:
        raise InputError("--sample", f"{options.sample} scans cannot be drawn", "give 0 or more")

    from evenblur.check.auditing import check_handover

    agreed = check_handover(options.bag, study=options.study, sample=options.sample, seed=options.seed)
    return 0 if agreed else 1


if __name__ == "__main__":
    raise SystemExit(run(main))
