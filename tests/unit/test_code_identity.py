"""The identity of code changes with what it computes, and with nothing else."""

from pathlib import Path

import pytest

from evenblur.code_identity import code_token

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


def test_the_value_agrees_between_python_versions(scripts):
    # Written down once: a Python that prints syntax trees in another way would change it and rerun every study.
    (scripts / "evenblur" / "sums.py").write_text(
        'def f(x, *, y=(1, 2)):\n    """Doc."""\n    return [f"{v!r:>{x}}" for v in y if (z := v)] + [x @ -y ** 2]\n'
    )
    assert code_token(scripts, files=["step.py"]) == Path(__file__).with_name("code_token.txt").read_text().strip()


def test_a_missing_module_is_an_error(scripts):
    with pytest.raises(FileNotFoundError, match="no module"):
        code_token(scripts, modules=["evenblur.absent"])
