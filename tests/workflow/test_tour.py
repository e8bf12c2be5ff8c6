"""The tour: every command that README.md prints, run in a fresh clone in the order of the page."""

import csv
import os
import re

import pytest

import tour

README = (tour.REPOSITORY / "README.md").read_text(encoding="utf-8")
STUDY = "../pool/study"


@pytest.fixture(scope="module")
def followed(tmp_path_factory):
    """The clone, and for each command block what its commands did; it ends at the first that goes wrong."""
    folder = tmp_path_factory.mktemp("a newcomer")
    clone = tour.fresh_clone(folder / "a clone")
    if os.environ.get(tour.BUILDS) != "1":
        tour.lend_environment(clone)
    environment = tour.newcomer(folder)
    done = []
    for block in tour.blocks(README):
        if block.mark == tour.COMMANDS:
            for step in tour.steps(block):
                done.append((block, tour.follow(step, clone, environment)))
                if done[-1][1].code != step.code:
                    return clone, done
    return clone, done


@pytest.mark.slow
def test_every_printed_command_does_what_the_page_says(followed):
    _, done = followed
    for _, one in done:
        where = f"README.md, block of line {one.step.place}: {one.step.printed}"
        assert one.code == one.step.code, f"{where}\n(run as {one.step.run})\n{one.text[-4000:]}"
        assert "Traceback" not in one.text, where
    printed = [
        step.printed for block in tour.blocks(README) if block.mark == tour.COMMANDS for step in tour.steps(block)
    ]
    assert [one.step.printed for _, one in done] == printed


@pytest.mark.slow
def test_what_the_page_shows_is_what_the_commands_print(followed):
    _, done = followed
    texts: dict[int, str] = {}
    for block, one in done:
        texts[block.place] = texts.get(block.place, "") + one.text
    shown, last = 0, None
    for block in tour.blocks(README):
        if block.mark == tour.COMMANDS:
            last = block.place
        elif block.mark == tour.SHOWN:
            assert last is not None, f"line {block.place}: no command stands before what is shown"
            printed = [line.strip() for line in texts[last].splitlines()]
            missing = [line for line in block.lines if line not in ("", "...") and line not in printed]
            assert missing == [], f"README.md, line {block.place}"
            shown += 1
    assert shown >= 4


@pytest.mark.slow
def test_the_example_ends_in_a_finished_audit_after_two_edits(followed):
    clone, done = followed
    edits = [one for _, one in done if re.search(r"^mv .*/config/", one.step.run)]
    assert len(edits) <= 2
    audit = (clone / STUDY / "results" / "audit").resolve()
    with (audit / "sites.tsv").open(encoding="utf-8", newline="") as stream:
        assert {row["site"]: row["verdict"] for row in csv.DictReader(stream, delimiter="\t")} == dict.fromkeys(
            ("fern", "mill", "quay"), "pass"
        )
    with (audit / "scans.tsv").open(encoding="utf-8", newline="") as stream:
        assert [row["status"] for row in csv.DictReader(stream, delimiter="\t")] == ["accepted"] * 6
    assert (audit / "report.html").stat().st_size > 10_000


# --- The page and its reading


def test_every_command_of_the_page_stands_in_a_block_marked_so():
    assert tour.unmarked_commands(README) == []
    assert sum(len(tour.steps(block)) for block in tour.blocks(README) if block.mark == tour.COMMANDS) >= 15


def test_pictures_and_pages_that_the_page_names_are_there():
    named = re.findall(r"\]\(([^)#:]+)(?:#[^)]*)?\)", README)
    assert [name for name in named if not (tour.REPOSITORY / name).exists()] == []
    pictures = [tour.REPOSITORY / name for name in named if name.endswith(".png")]
    assert pictures
    assert all(picture.stat().st_size < 150_000 for picture in pictures)


def test_only_what_a_test_cannot_do_is_run_otherwise():
    changed = [
        step.printed
        for block in tour.blocks(README)
        if block.mark == tour.COMMANDS
        for step in tour.steps(block)
        if any(re.search(pattern, step.run) for pattern, _, _ in tour.INSTEAD)
    ]
    assert all(re.search(r"start\.py test\b|--profile|--executor", command) for command in changed)


PAGE = """\
```sh
# a comment
one STUDY/a \\
  two    # exit code 3: why
python3 scripts/start.py test quick
```
```
setup	site
```
  ```text
  shown
  ```
"""


def test_blocks_are_read_with_their_commands_and_exit_codes():
    read = tour.blocks(PAGE)
    assert [(block.mark, block.place) for block in read] == [("sh", 1), ("", 7), ("text", 10)]
    assert read[2].lines == ("shown",)
    steps = tour.steps(read[0])
    assert [(step.run, step.code) for step in steps] == [
        ("one ../pool/study/a  two", 3),
        ("python3 scripts/start.py test quick -- --collect-only -q", 0),
    ]


def test_a_command_in_a_block_that_is_not_marked_is_noticed():
    assert tour.unmarked_commands("```\npython3 scripts/start.py demo\n```\n") == [
        "line 1: python3 scripts/start.py demo"
    ]


def test_a_block_without_an_end_is_an_error():
    with pytest.raises(ValueError, match="has no end"):
        tour.blocks("```sh\nls\n")
