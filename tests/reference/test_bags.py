"""Bags for the auditor against the standard as another implementation checks it."""

import pytest

from bagit_package import load_bagit, validate
from evenblur.check.bags import check_fixity
from evenblur.check.findings import DisagreementError
from evenblur.handover.bag import text_file, write_bag

SOURCE = "RFC 8493 as the package bagit 1.8.1 checks it"
NAMES = ["plain.txt", "folder/two words.txt", "ümlaut.txt", "line\nend.txt", "carriage\rreturn.txt", "*star.txt"]
INFO = {"Bagging-Date": "2026-01-31", "External-Description": "an invented study"}


@pytest.fixture
def bag(tmp_path):
    write_bag(tmp_path / "bag", payload={name: text_file(f"this is {name}") for name in NAMES}, info=INFO)
    return tmp_path / "bag"


def rejected(bag):
    """Whether the package and our own check refuse a bag."""
    bagit = load_bagit()
    ours = theirs = False
    try:
        check_fixity(bag)
    except DisagreementError:
        ours = True
    try:
        validate(bag)
    except bagit.BagError:
        theirs = True
    return theirs, ours


def test_bags_are_valid_for_the_package(bag, check):
    read = load_bagit().Bag(str(bag))
    found = sorted(name.removeprefix("data/") for name in read.payload_files())
    check.holds(
        "bag with spaces, letters of other alphabets and line ends in file names",
        source=SOURCE,
        expected="valid, and every name is read back",
        found="valid, and every name is read back" if validate(bag) and found == sorted(NAMES) else "not so",
        true=validate(bag) and found == sorted(NAMES),
    )
    size = sum(len(f"this is {name}".encode()) for name in NAMES)
    text = f"{size}.{len(NAMES)}"
    check.holds(
        "Payload-Oxum (octets and files)",
        source=SOURCE,
        expected=text,
        found=read.info["Payload-Oxum"],
        true=read.info["Payload-Oxum"] == text,
    )


CHANGES = {
    "changed byte": lambda bag: (bag / "data/plain.txt").write_text("this is plain,txt"),
    "added file": lambda bag: (bag / "data/added.txt").write_text("x"),
    "lost file": lambda bag: (bag / "data/plain.txt").unlink(),
    "changed tag file": lambda bag: (bag / "bag-info.txt").write_text("Bagging-Date: 2026-02-01\n"),
}


def test_both_refuse_what_was_tampered_with(bag, check):
    whole = {path: path.read_bytes() for path in bag.rglob("*") if path.is_file()}
    refused = []
    for name, change in CHANGES.items():
        change(bag)
        if rejected(bag) == (True, True):
            refused.append(name)
        for path in bag.rglob("*"):
            if path.is_file() and path not in whole:
                path.unlink()
        for path, content in whole.items():
            path.write_bytes(content)
    assert rejected(bag) == (False, False)
    check.holds(
        "tampered bags that both the package and our check refuse",
        source=SOURCE,
        expected=", ".join(CHANGES),
        found=", ".join(refused),
        true=refused == list(CHANGES),
    )
