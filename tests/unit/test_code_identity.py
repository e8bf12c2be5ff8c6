"""The identity of code changes with what it computes, and with nothing else."""

import shutil
import subprocess
import sys
from pathlib import Path

import pytest

from evenblur.code_identity import code_token

SCRIPTS = Path(__file__).resolve().parents[2] / "scripts"


def other_pythons():
    """Pythons of other versions on this machine that the program could run with."""
    found = []
    for minor in (11, 12, 13, 14):
        installed = sorted((Path.home() / ".pyenv" / "versions").glob(f"3.{minor}.*/bin/python"))
        path = str(installed[-1]) if installed else shutil.which(f"python3.{minor}")
        if path and sys.version_info[:2] != (3, minor):
            answer = subprocess.run(
                [path, "-c", "import sys; print(sys.version_info[1])"], capture_output=True, check=False
            )
            found += [path] if answer.stdout.strip() == str(minor).encode() else []
    return found


STEP = "from evenblur.sums import add\n\nprint(add(1, 2))\n"
SUMS = '"""Sums."""\n\n\ndef add(a, b):\n    """Add."""\n    return a + b\n'


@pytest.fixture
def scripts(tmp_path):
    (tmp_path / "evenblur").mkdir()
    (tmp_path / "evenblur" / "__init__.py").write_text('__version__ = "1"\n')
    (tmp_path / "evenblur" / "sums.py").write_text(SUMS)
    (tmp_path / "evenblur" / "other.py").write_text("x = 1\n")
    (tmp_path / "step.py").write_text(STEP)
    return tmp_path


def changed(scripts, name, text):
    before = code_token(scripts, files=["step.py"])
    (scripts / name).write_text(text)
    return code_token(scripts, files=["step.py"]) != before


def test_comments_docstrings_and_layout_do_not_count(scripts):
    text = '"""Other words."""\n\ndef add(a,\n        b):\n    # a comment\n    return a+b\n'
    assert not changed(scripts, "evenblur/sums.py", text)


def test_a_changed_expression_in_an_imported_module_counts(scripts):
    assert changed(scripts, "evenblur/sums.py", SUMS.replace("a + b", "a - b"))


def test_a_module_that_is_not_imported_does_not_count(scripts):
    assert not changed(scripts, "evenblur/other.py", "x = 2\n")


def test_imports_inside_functions_and_of_submodules_are_followed(scripts):
    (scripts / "step.py").write_text("def main():\n    from evenblur import other\n    return other.x\n")
    assert changed(scripts, "evenblur/other.py", "x = 2\n")


def test_the_version_number_does_not_count(scripts):
    assert not changed(scripts, "evenblur/__init__.py", '__version__ = "2"\n')


def test_the_place_of_the_program_does_not_count(scripts, tmp_path_factory):
    moved = tmp_path_factory.mktemp("moved") / "program"
    before = code_token(scripts, files=["step.py"])
    scripts.rename(moved)
    assert code_token(moved, files=["step.py"]) == before


ODD_CODE = r'''
def f(x, *, y=(1, 2), z: "int | None" = None):
    """Doc."""
    print(f"{z!r:>{x}} {y['a']} {'inner'}\n", "joined" f" {x:%Y-%m}", b"\x00", 1_000.5e-3, ...)
    return [f"{v=}" for v in y if (w := v)] + [x @ -y ** 2, lambda *a, **k: (yield)]
async def g():
    async with f(1) as (a, *b):
        match a:
            case {"k": [1, *_], **rest} if rest:
                return not a
'''


def test_the_value_agrees_between_python_versions(scripts):
    # Written down once: a Python that spells syntax trees in another way would change it and rerun every study.
    (scripts / "evenblur" / "sums.py").write_text(ODD_CODE)
    assert code_token(scripts, files=["step.py"]) == Path(__file__).with_name("code_token.txt").read_text().strip()


@pytest.mark.skipif(len(other_pythons()) == 0, reason="only one Python from 3.11 on is here")
def test_other_pythons_at_hand_give_the_programs_own_steps_the_same_identity():
    program = (
        "import sys; sys.path.insert(0, sys.argv[1])\n"
        "from pathlib import Path\n"
        "from evenblur.code_identity import code_token\n"
        "scripts = Path(sys.argv[1])\n"
        "for path in sorted(scripts.rglob('*.py')):\n"
        "    print(path.name, code_token(scripts, files=[path.relative_to(scripts).as_posix()]))\n"
    )
    told = {
        python: subprocess.run(
            [python, "-c", program, SCRIPTS], capture_output=True, text=True, check=True
        ).stdout.splitlines()
        for python in [sys.executable, *other_pythons()]
    }
    assert len(told[sys.executable]) > 50
    assert all(lines == told[sys.executable] for lines in told.values())


def test_a_missing_module_is_an_error(scripts):
    with pytest.raises(FileNotFoundError, match="no module"):
        code_token(scripts, modules=["evenblur.absent"])
