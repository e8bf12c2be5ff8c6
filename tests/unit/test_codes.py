"""One list holds every code that the program can write, each with what to do about it."""

import ast
import re
from pathlib import Path

import pytest
from pydantic import BaseModel

from evenblur.codes import FLAGS, HOLDS
from evenblur.study.settings import Settings

LIBRARY = Path(__file__).resolve().parents[2] / "scripts" / "evenblur"


def text(node):
    return node.value if isinstance(node, ast.Constant) and isinstance(node.value, str) else None


def codes_in_source():
    """Every literal code that the library's source gives to a flag, a hold or an error, with its file."""
    for path in sorted(LIBRARY.rglob("*.py")):
        for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
            if isinstance(node, ast.Dict):
                for key, value in zip(node.keys, node.values, strict=True):
                    if key is not None and text(key) == "code" and text(value):
                        yield path.name, text(value)
            elif isinstance(node, ast.Call):
                name = getattr(node.func, "id", getattr(node.func, "attr", ""))
                if name == "Flag" and node.args and text(node.args[0]):
                    yield path.name, text(node.args[0])
                if name in ("hold", "flag", "Finding") and node.args and text(node.args[0]):
                    yield path.name, text(node.args[0])
                if name == "_hold_or_flag" and text(node.args[2]):
                    yield path.name, text(node.args[2])
                if name == "InputError" and len(node.args) > 3 and text(node.args[3]):
                    yield path.name, text(node.args[3])


def test_every_code_in_the_source_is_in_the_list():
    found = list(codes_in_source())
    assert len(found) > 30
    unknown = sorted({(name, code) for name, code in found if code not in HOLDS and code not in FLAGS})
    assert unknown == []


def test_every_code_in_the_list_is_raised_somewhere():
    source = "".join(p.read_text(encoding="utf-8") for p in sorted(LIBRARY.rglob("*.py")) if p.name != "codes.py")
    unused = [code for code in (*HOLDS, *FLAGS) if f'"{code}"' not in source]
    assert unused == []


def leaves(model):
    for name, known in model.model_fields.items():
        part = known.annotation
        if isinstance(part, type) and issubclass(part, BaseModel):
            yield from leaves(part)
        else:
            yield name


def test_every_setting_is_read_somewhere():
    left_out = {"settings.py", "documents.py"}
    source = "".join(p.read_text(encoding="utf-8") for p in sorted(LIBRARY.rglob("*.py")) if p.name not in left_out)
    # Fields of the approval and of the widths are read by their names too: as attributes or as keys.
    unread = [name for name in leaves(Settings) if not re.search(rf"[.\"]{name}\b", source)]
    assert unread == []


def test_the_hold_reasons_are_the_agreed_ones():
    agreed = (
        "image_missing image_unreadable image_zero image_not_finite not_a_volume too_large duplicate_image "
        "already_harmonised no_phantom_session phantom_expired setup_changed unmeasured coarser_than_target "
        "oblique_grid too_few_slices under_sampled reconstruction_mismatch excluded_by_decision"
    )
    assert list(HOLDS) == agreed.split()


@pytest.mark.parametrize("code", [*HOLDS.values(), *FLAGS.values()], ids=lambda code: code.code)
def test_every_code_says_what_it_means_who_acts_and_how(code):
    assert code.meaning
    assert code.mend
    assert code.who in ("site", "physicist", "data manager")
    assert not code.meaning.endswith(".")
