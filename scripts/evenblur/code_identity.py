"""The identity of code: a hash of what a step's program does, blind to comments, docstrings and layout."""

import ast
import hashlib
from collections.abc import Callable, Iterable, Iterator
from functools import cache
from pathlib import Path
from typing import Any

# The version number is a label on the code, not part of it.
_LEFT_OUT = frozenset({"evenblur"})

# Fields of a syntax tree that say nothing about what the code does.
_UNSPOKEN = frozenset({"ctx", "kind", "type_comment"})


def code_token(scripts_dir: Path, *, files: Iterable[str] = (), modules: Iterable[str] = ()) -> str:
    """Hash (16 hex digits) of source files of the scripts folder and of all `evenblur` modules that they import.

    Imports are followed through the whole library, those inside functions too. Two versions of a file agree when
    their syntax trees without docstrings are alike, whichever Python from 3.11 on reads them.

    Parameters
    ----------
    scripts_dir
        The folder that holds the step commands and the package `evenblur`.
    files
        Step commands, by file name.
    modules
        Modules of the library, by dotted name.

    Raises
    ------
    FileNotFoundError
        If a file or module does not exist.
    """
    waiting = [(scripts_dir / name) for name in files] + [_module_path(scripts_dir, name) for name in modules]
    found: dict[str, str] = {}
    while waiting:
        path = waiting.pop()
        key = path.relative_to(scripts_dir).as_posix()
        if key in found:
            continue
        found[key], imported = _read(path, path.stat().st_mtime_ns, path.stat().st_size)
        for name in imported:
            target = _find_module(scripts_dir, name)
            if target is not None and name not in _LEFT_OUT:
                waiting.append(target)
    lines = "".join(f"{key} {found[key]}\n" for key in sorted(found))
    return hashlib.sha256(lines.encode()).hexdigest()[:16]


def _module_path(scripts_dir: Path, name: str) -> Path:
    path = _find_module(scripts_dir, name)
    if path is None:
        raise FileNotFoundError(f"no module {name} under {scripts_dir}")
    return path


def _find_module(scripts_dir: Path, name: str) -> Path | None:
    base = scripts_dir.joinpath(*name.split("."))
    for path in (base.with_suffix(".py"), base / "__init__.py"):
        if path.is_file():
            return path
    return None


@cache
def _read(path: Path, _date: int, _size: int) -> tuple[str, tuple[str, ...]]:
    spelling: list[str] = []
    imported: set[str] = set()
    _spell(ast.parse(path.read_text(encoding="utf-8")), spelling.append, imported)
    return hashlib.sha256("".join(spelling).encode()).hexdigest(), tuple(sorted(imported))


def _spell(node: Any, write: Callable[[str], None], imported: set[str]) -> None:
    """A syntax tree as text that every Python from 3.11 on spells alike; what it imports of the library goes apart.

    Neither `ast.dump` nor `ast.unparse` does: fields were added, and quotes within f-strings changed with 3.12.
    Fields without content are left out, and with them those that only newer versions have. All the library is spelled
    at the start of every run, so this is one pass that makes no lists on its way.
    """
    if isinstance(node, ast.AST):
        kind = type(node)
        if kind is ast.Import or kind is ast.ImportFrom:
            imported.update(_of_the_library(node))
        mark = f"{kind.__name__}("
        for name in node._fields:
            value = getattr(node, name, None)
            if name == "body" and isinstance(value, list):
                # Strings that stand alone say something to readers only: docstrings, and notes below a constant.
                value = [part for part in value if not _is_text(part)] or [ast.Pass()]
            if value is None or value == [] or name in _UNSPOKEN:
                continue
            write(f"{mark}{name}=")
            mark = ","
            _spell(value, write, imported)
        write(")" if mark == "," else f"{mark})")
    elif isinstance(node, list):
        mark = "["
        for part in node:
            # Some releases of 3.12 end format specifications with an empty text.
            if not _is_nothing(part):
                write(mark)
                mark = ","
                _spell(part, write, imported)
        write("]" if mark == "," else "[]")
    else:
        write(repr(node))


def _of_the_library(node: Any) -> Iterator[str]:
    """The names of modules, and perhaps of modules, that an import statement takes from the library."""
    if isinstance(node, ast.Import):
        yield from (alias.name for alias in node.names if alias.name.split(".")[0] == "evenblur")
    elif node.module and node.module.split(".")[0] == "evenblur":
        yield node.module
        yield from (f"{node.module}.{alias.name}" for alias in node.names)


def _is_nothing(node: Any) -> bool:
    return isinstance(node, ast.Constant) and node.value == "" and isinstance(node.value, str)


def _is_text(node: ast.AST) -> bool:
    return isinstance(node, ast.Expr) and isinstance(node.value, ast.Constant) and isinstance(node.value.value, str)
