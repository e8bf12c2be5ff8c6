"""The house rules: format, lint, types, docstrings, what lies where, words that have no place here."""

import ast
import doctest
import fnmatch
import importlib
import re
import shutil
import subprocess
import sys
from collections.abc import Iterator
from pathlib import Path

import pytest

REPOSITORY = Path(__file__).resolve().parents[2]
LIBRARY = REPOSITORY / "scripts" / "evenblur"
TOP_LEVEL = {
    "Snakefile",
    "README.md",
    "DEVELOPERS.md",
    "LICENSE",
    "workflow",
    "scripts",
    "config",
    "tests",
    "envs",
}
CODE_SUFFIXES = {".py", ".smk", ".js", ".css", ".html"}
LONGEST_FILE = 500

# In pieces, so that this list does not find itself.
NO_PLACE_HERE = [
    r"\bTO" + r"DO\b",
    r"\bFIX" + r"ME\b",
    r"\bX" + r"XX\b",
    r"\b(issue|ticket|pull request) " + r"#?\d+\b",
    r"\b(closes|fixes|see) " + r"#\d+\b",
]


def ignored_patterns() -> list[str]:
    lines = (REPOSITORY / ".gitignore").read_text(encoding="utf-8").split()
    return [line.strip("/") for line in lines if line and not line.startswith("#")]


def own_files(folder: Path = REPOSITORY) -> Iterator[Path]:
    """Every file of the project: what lies in the folder, without what .gitignore names."""
    patterns = [*ignored_patterns(), ".git"]
    for path in sorted(folder.iterdir()):
        if any(fnmatch.fnmatch(path.name, pattern) for pattern in patterns):
            continue
        if path.is_dir():
            yield from own_files(path)
        else:
            yield path


def text_of(path: Path) -> str | None:
    try:
        return path.read_text(encoding="utf-8")
    except UnicodeDecodeError:
        return None


def run_tool(*command: str) -> subprocess.CompletedProcess[str]:
    return subprocess.run(
        [sys.executable, "-m", *command], cwd=REPOSITORY, capture_output=True, text=True, check=False, timeout=600
    )


@pytest.mark.parametrize(
    "command",
    [("ruff", "check", "."), ("ruff", "format", "--check", "."), ("mypy",)],
    ids=["lint", "format", "types"],
)
def test_tool_finds_nothing_to_complain_about(command: tuple[str, ...]) -> None:
    done = run_tool(*command)
    assert done.returncode == 0, done.stdout + done.stderr


# The linter's advice that we leave, and why.
LEFT_ADVICE = [
    r"Specify a conda environment or container for each rule\.",  # one pinned environment serves all rules
    r"Mixed rules and functions in same snakefile\.",  # a rule's input functions are read beside it
    # A step is called by the interpreter, place and cache of this very run; as params they would rerun all elsewhere.
    r"Shell command directly uses variable (PY|PHANTOM_CACHE|workflow) from outside of the rule",
]


def test_snakemake_lint_gives_no_advice_but_what_we_leave(tmp_path: Path) -> None:
    shutil.copytree(REPOSITORY / "config", tmp_path / "config")
    done = run_tool("snakemake", "--lint", "--snakefile", "Snakefile", "--directory", str(tmp_path))
    assert "Error" not in done.stderr
    advice = re.findall(r"^    \* (.*?):?$", done.stderr, flags=re.MULTILINE)
    assert advice or done.returncode == 0, done.stderr
    assert [line for line in advice if not any(re.fullmatch(left, line) for left in LEFT_ADVICE)] == []


def test_rules_are_formatted() -> None:
    done = run_tool("snakefmt", "--check", "--line-length", "120", "Snakefile", "workflow")
    assert done.returncode == 0, done.stdout + done.stderr


def test_start_script_parses_on_python_3_6() -> None:
    source = (REPOSITORY / "scripts" / "start.py").read_text(encoding="utf-8")
    tree = ast.parse(source, feature_version=(3, 6))
    # Annotations are evaluated where they stand: list[str] would stop 3.6 at the import, a quoted one does not.
    annotations = [node.annotation for node in ast.walk(tree) if isinstance(node, ast.arg | ast.AnnAssign)]
    annotations += [node.returns for node in ast.walk(tree) if isinstance(node, ast.FunctionDef)]
    subscripted = [ast.unparse(node) for node in annotations if isinstance(node, ast.Subscript | ast.BinOp)]
    assert subscripted == []


def public_definitions(tree: ast.Module) -> Iterator[tuple[str, ast.FunctionDef | ast.ClassDef]]:
    for node in tree.body:
        if isinstance(node, ast.FunctionDef | ast.ClassDef) and not node.name.startswith("_"):
            yield node.name, node
            if isinstance(node, ast.ClassDef):
                for inner in node.body:
                    if isinstance(inner, ast.FunctionDef) and not inner.name.startswith("_"):
                        yield f"{node.name}.{inner.name}", inner


def test_modules_and_public_functions_say_what_they_are() -> None:
    silent = []
    for path in sorted(LIBRARY.rglob("*.py")):
        tree = ast.parse(path.read_text(encoding="utf-8"))
        where = path.relative_to(REPOSITORY).as_posix()
        if tree.body and ast.get_docstring(tree) is None:
            silent.append(where)
        silent += [f"{where}: {name}" for name, node in public_definitions(tree) if ast.get_docstring(node) is None]
    assert silent == []


def library_modules() -> list[str]:
    return [
        ".".join(path.relative_to(LIBRARY.parent).with_suffix("").parts).removesuffix(".__init__")
        for path in sorted(LIBRARY.rglob("*.py"))
    ]


@pytest.mark.parametrize("name", library_modules())
def test_examples_in_docstrings_run(name: str, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.chdir(tmp_path)
    results = doctest.testmod(importlib.import_module(name))
    assert results.failed == 0


def test_library_knows_nothing_of_snakemake() -> None:
    guilty = []
    for path in sorted(LIBRARY.rglob("*.py")):
        for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
            names = [alias.name for alias in node.names] if isinstance(node, ast.Import) else []
            names += [node.module or ""] if isinstance(node, ast.ImportFrom) else []
            guilty += [path.name for name in names if name.split(".")[0] == "snakemake"]
    assert guilty == []


def test_the_auditors_check_shares_no_code_with_what_it_checks() -> None:
    shared = set()
    for path in [*sorted((LIBRARY / "check").rglob("*.py")), REPOSITORY / "scripts" / "check_handover.py"]:
        for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
            names = [alias.name for alias in node.names] if isinstance(node, ast.Import) else []
            names += [node.module or ""] if isinstance(node, ast.ImportFrom) else []
            shared |= {name for name in names if name.startswith("evenblur") and not name.startswith("evenblur.check")}
    # What the command reads its arguments and ends with; neither computes anything.
    assert shared == {"evenblur.command", "evenblur.errors"}


def test_top_level_holds_only_what_belongs_there() -> None:
    patterns = ignored_patterns()
    strangers = {
        path.name
        for path in REPOSITORY.iterdir()
        if not path.name.startswith(".") and not any(fnmatch.fnmatch(path.name, pattern) for pattern in patterns)
    } - TOP_LEVEL
    assert strangers == set()


def test_no_code_file_is_too_long_to_read() -> None:
    long = {}
    for path in own_files():
        if path.suffix in CODE_SUFFIXES or path.name == "Snakefile":
            lines = path.read_text(encoding="utf-8").count("\n")
            if lines > LONGEST_FILE:
                long[path.relative_to(REPOSITORY).as_posix()] = lines
    assert long == {}


def test_words_that_have_no_place_here_are_absent() -> None:
    found = []
    for path in own_files():
        text = text_of(path)
        if text is None:
            continue
        for pattern in NO_PLACE_HERE:
            where = path.relative_to(REPOSITORY).as_posix()
            found += [f"{where}: {match.group()}" for match in re.finditer(pattern, text, flags=re.IGNORECASE)]
    assert found == []


def pins(name: str) -> dict[str, str]:
    """Package to the rest of its line, of a pins file."""
    lines = (REPOSITORY / "envs" / f"{name}.txt").read_text(encoding="utf-8").splitlines()
    wanted = [line for line in lines if line and not line.startswith(("#", "--no-binary"))]
    return dict(line.split("==", 1) for line in wanted)


def test_develop_pins_hold_the_run_pins() -> None:
    run, develop = pins("run"), pins("develop")
    assert len(run) > 20
    assert {name: develop.get(name) for name in run} == run


@pytest.mark.parametrize("name", ["run", "develop"])
def test_pins_name_one_version_of_each_package_and_no_place_to_get_it_from(name: str) -> None:
    lines = (REPOSITORY / "envs" / f"{name}.txt").read_text(encoding="utf-8").splitlines()
    packages = [line for line in lines if not line.startswith("#")]
    pin = re.compile(r'[A-Za-z0-9_-]+==[0-9][0-9a-z.]*( ; python_version < "3\.\d+")?')
    strange = [line for line in packages if not pin.fullmatch(line)]
    assert strange == ["--no-binary connection_pool"]  # the one package that is published as source only
    names = [re.sub(r"[-_]+", "-", line.split("==")[0].lower()) for line in packages if "==" in line]
    assert len(names) == len(set(names))
