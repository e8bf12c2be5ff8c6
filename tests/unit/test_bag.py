"""Bags are whole or not there, valid for a package that is not ours, and every tampered byte is found."""

import os
import shutil
import signal
import subprocess
import sys
from pathlib import Path

import pytest

from bagit_package import load_bagit, validate
from evenblur.check.bags import check_fixity, decoded, file_sha256
from evenblur.check.findings import DisagreementError
from evenblur.handover.bag import manifest_name, text_file, write_bag

SCRIPTS = Path(__file__).resolve().parents[2] / "scripts"
INFO = {"Bagging-Date": "2026-01-31", "External-Description": "two\nlines"}
PLAIN = {"a.txt": text_file("one"), "folder/with space/ü.txt": text_file("two"), "empty.bin": text_file("")}
ODD = {**PLAIN, "line\nend": text_file("three"), "carriage\rreturn": text_file("four"), "*star": text_file("five")}


def read_all(folder):
    return {p.relative_to(folder).as_posix(): p.read_bytes() for p in folder.rglob("*") if p.is_file()}


@pytest.fixture
def bag(tmp_path):
    write_bag(tmp_path / "bag", payload=ODD, info=INFO)
    return tmp_path / "bag"


def test_a_bag_is_valid_for_the_package_and_for_our_own_check(bag):
    assert validate(bag)
    assert check_fixity(bag) == len(ODD) + 3
    assert (bag / "data/line\nend").read_text() == "three"
    assert load_bagit().Bag(str(bag)).info["External-Description"] == "two lines"


def test_names_are_percent_encoded_as_the_standard_says():
    # RFC 8493, 2.1.3: LF, CR, CRLF and the percent sign, and nothing else.
    assert manifest_name("data/a b\r\n100%25ü") == "data/a b%0D%0A100%2525ü"
    for name in ("100%", "%0A", "a\nb\rc%25", "plain", "%%0d"):
        assert decoded(manifest_name(name)) == name


def test_a_percent_sign_in_a_name_passes_our_check(tmp_path):
    # Not shown to the package: version 1.8.1 leaves %25 as it stands, against the standard.
    write_bag(tmp_path / "bag", payload={"100%0A": text_file("x")}, info=INFO)
    assert "data/100%250A" in (tmp_path / "bag/manifest-sha256.txt").read_text()
    assert check_fixity(tmp_path / "bag") == 4


def test_manifests_are_what_sha256sum_checks(tmp_path):
    write_bag(tmp_path / "bag", payload=PLAIN, info=INFO)
    for name in ("manifest-sha256.txt", "tagmanifest-sha256.txt"):
        command = ["sha256sum", "--check", "--strict", name]
        done = subprocess.run(command, cwd=tmp_path / "bag", capture_output=True, check=False)
        assert done.returncode == 0, done.stderr


def test_the_same_files_on_one_day_give_the_same_bytes(bag, tmp_path):
    write_bag(tmp_path / "other", payload=ODD, info=INFO)
    assert read_all(tmp_path / "other") == read_all(bag)


@pytest.mark.parametrize("name", ["../a", "/a", "a//b", "a/./b", ""])
def test_names_that_lead_elsewhere_are_refused(tmp_path, name):
    with pytest.raises(ValueError, match="no name"):
        write_bag(tmp_path / "bag", payload={name: text_file("x")}, info=INFO)
    assert list(tmp_path.iterdir()) == []


def test_a_failed_packing_leaves_the_old_bag_and_nothing_else(bag):
    before = read_all(bag)

    def fail(path):
        path.write_text("half")
        raise OSError("disk full")

    with pytest.raises(OSError, match="disk full"):
        write_bag(bag, payload={"a.txt": text_file("new"), "b.txt": fail}, info=INFO)
    assert read_all(bag) == before
    assert [path.name for path in bag.parent.iterdir()] == ["bag"]


def test_a_first_packing_that_fails_leaves_nothing(tmp_path):
    def fail(path):
        raise OSError("disk full")

    with pytest.raises(OSError, match="disk full"):
        write_bag(tmp_path / "bag", payload={"a.txt": fail}, info=INFO)
    assert list(tmp_path.iterdir()) == []


KILLED = """
import os, signal, sys
from pathlib import Path
from evenblur.handover import bag
from evenblur.handover.bag import text_file, write_bag
target, point = Path(sys.argv[1]), sys.argv[2]
def die(*_):
    os.kill(os.getpid(), signal.SIGKILL)
if point == "payload":
    payload = {"a.txt": text_file("new"), "b.txt": die}
else:
    payload = {"a.txt": text_file("new")}
    if point == "before the swap":
        bag._take_place = die
    else:  # between the two renames
        rename = Path.rename
        Path.rename = lambda self, to: die() if self.name.endswith(".part") else rename(self, to)
write_bag(target, payload=payload, info={})
"""


@pytest.mark.parametrize("point", ["payload", "before the swap", "between the renames"])
def test_a_killed_packing_leaves_no_half_bag_and_the_next_one_clears_up(bag, point):
    before = read_all(bag)
    environment = {**os.environ, "PYTHONPATH": str(SCRIPTS)}
    done = subprocess.run([sys.executable, "-c", KILLED, bag, point], env=environment, check=False)
    assert done.returncode == -signal.SIGKILL
    if point == "between the renames":
        assert not bag.exists()  # no half bag; the old one stands aside until the next packing
    else:
        assert read_all(bag) == before

    def fail(path):
        raise OSError("disk full")

    with pytest.raises(OSError, match="disk full"):
        write_bag(bag, payload={"b.txt": fail}, info=INFO)
    assert read_all(bag) == before, "the old bag is back, whole"
    write_bag(bag, payload={"b.txt": text_file("b")}, info=INFO)
    assert validate(bag)
    assert [path.name for path in bag.parent.iterdir()] == ["bag"]


def test_a_folder_that_stands_ready_for_the_bag_is_taken(tmp_path):
    (tmp_path / "bag").mkdir()
    write_bag(tmp_path / "bag", payload=PLAIN, info=INFO)
    assert validate(tmp_path / "bag")


def renew(bag):
    """Write a bag's checksums anew, as whoever tampers with it would."""
    for name, files in (("manifest-sha256.txt", sorted((bag / "data").rglob("*"))), ("tagmanifest-sha256.txt", None)):
        names = files or [bag / n for n in ("bag-info.txt", "bagit.txt", "manifest-sha256.txt")]
        lines = [(file_sha256(p), manifest_name(p.relative_to(bag).as_posix())) for p in names if p.is_file()]
        (bag / name).write_text("".join(f"{digest}  {path}\n" for digest, path in lines))


def flip(path):
    data = bytearray(path.read_bytes())
    data[len(data) // 2] ^= 1
    path.write_bytes(data)


@pytest.mark.parametrize("name", ["data/a.txt", "data/folder/with space/ü.txt", "data/line\nend", "bag-info.txt"])
def test_one_byte_in_any_file_is_found(bag, name):
    flip(bag / name)
    with pytest.raises(DisagreementError):
        check_fixity(bag)


def test_files_added_taken_away_or_renamed_are_found(bag, tmp_path):
    changes = [
        lambda b: (b / "data/new.txt").write_text("x"),
        lambda b: (b / "new.txt").write_text("x"),
        lambda b: (b / "data/a.txt").unlink(),
        lambda b: (b / "data/a.txt").rename(b / "data/b.txt"),
        lambda b: (b / "bagit.txt").unlink(),
        lambda b: (b / "tagmanifest-sha256.txt").unlink(),
        lambda b: (b / "data/link").symlink_to(b / "data/a.txt"),
        lambda b: (b / "data/empty.bin").write_bytes(b"\0"),
        lambda b: (b / "manifest-sha256.txt").write_text((b / "manifest-sha256.txt").read_text() * 2),
        lambda b: (b / "manifest-sha256.txt").write_text("no manifest\n"),
        lambda b: (b / "manifest-sha256.txt").write_text(f"{'0' * 64}  ../outside\n"),
    ]
    for number, change in enumerate(changes):
        copy = shutil.copytree(bag, tmp_path / f"copy{number}")
        change(copy)
        with pytest.raises(DisagreementError):
            check_fixity(copy)


def test_a_wrong_oxum_is_found_even_with_renewed_checksums(bag):
    info = bag / "bag-info.txt"
    info.write_text(info.read_text().replace("Payload-Oxum: ", "Payload-Oxum: 1"))
    renew(bag)
    with pytest.raises(DisagreementError, match="Oxum"):
        check_fixity(bag)
