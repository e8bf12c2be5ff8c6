"""The auditor's bag of a real run, and what its check finds in a tampered one."""

import json
import os
import re
import shutil
import signal
import subprocess
import sys
import time
from pathlib import Path

import nibabel as nib
import numpy as np
import pytest

import make_handover
import small_study as small
import smooth_scan
from bagit_package import load_bagit, validate
from evenblur.check.auditing import check_handover
from evenblur.check.bags import check_fixity, file_sha256
from evenblur.check.findings import DisagreementError
from evenblur.handover.bag import manifest_name

pytestmark = pytest.mark.slow

BAG = "results/handover"
DATA = f"{BAG}/data"
CHECK = small.PROGRAM / "scripts" / "check_handover.py"


def renew(bag):
    """Write a bag's checksums anew, as whoever tampers with it would."""
    payload = sorted(path for path in (bag / "data").rglob("*") if path.is_file())
    size = sum(path.stat().st_size for path in payload)
    info = bag / "bag-info.txt"
    info.write_text(re.sub(r"Payload-Oxum: .*", f"Payload-Oxum: {size}.{len(payload)}", info.read_text()))
    tags = [bag / name for name in ("bag-info.txt", "bagit.txt", "manifest-sha256.txt")]
    for name, paths in (("manifest-sha256.txt", payload), ("tagmanifest-sha256.txt", tags)):
        lines = [f"{file_sha256(path)}  {manifest_name(path.relative_to(bag).as_posix())}\n" for path in paths]
        (bag / name).write_text("".join(lines))


def pack_anew(study):
    """Pack the study's results as they are now, whatever was done to them."""
    make_handover.main(["--study-dir", str(study)])


def check(bag, **options):
    """Whether a bag checks out, and what the check said last."""
    lines = []
    agreed = check_handover(bag, say=lines.append, **options)
    return agreed, lines[-1]


def finds(bag, words, **options):
    agreed, last = check(bag, **options)
    assert not agreed
    assert last.startswith("first disagreement: ")
    assert re.search(words, last), last


def edit(path, change):
    record = json.loads(path.read_text())
    change(record)
    path.write_text(json.dumps(record, indent=2) + "\n")


def scan_files(study, subject):
    stem = f"results/harmonised/sub-{subject}/ses-base/pet/sub-{subject}_ses-base_desc-harmonised_pet"
    return study / f"{stem}.nii.gz", study / f"{stem}.json"


# --- the bag


def test_the_bag_is_valid_for_the_package_bagit(finished_study):
    assert validate(finished_study / BAG)
    info = load_bagit().Bag(str(finished_study / BAG)).info
    assert re.fullmatch(r"\d{4}-\d\d-\d\d", info["Bagging-Date"])
    assert not {"Source-Organization", "Contact-Name", "Organization-Address"} & set(info)


def test_the_bag_holds_a_file_for_every_row_and_no_subjects_image(finished_study):
    names = {p.relative_to(finished_study / DATA).as_posix() for p in (finished_study / DATA).rglob("*") if p.is_file()}
    expected = {"README.txt", "study.json", "images.tsv", "program/pins.txt", "program/code.json", "results/plan.json"}
    expected |= {f"results/audit/{name}.tsv" for name in ("sites", "scans", "queries", "covariates")}
    expected |= {"results/plan.tsv", "results/plan.html", "results/site_effect/site_effect.json"}
    expected |= {f"results/audit/{name}" for name in ("sites.csv", "scans.csv", "audit.json", "report.html")}
    expected |= {"results/audit/history.json", "history.tsv"}
    for setup in small.WIDTHS:
        site = setup.split("-")[0]
        expected |= {f"results/audit/sites/{site}.html", f"results/audit/sites/{site}.json"}
    for setup in small.WIDTHS:
        expected |= {f"phantoms/{setup}-points.nii.gz", f"results/achieved/{setup}.p1.json"}
        expected |= {f"results/{step}/{setup}-points.json" for step in ("intake/phantoms", "resolution")}
    for subject in small.SUBJECTS:
        expected.add(f"results/intake/scans/sub-{subject}_ses-base.json")
        expected.add(scan_files(Path(), subject)[1].as_posix())
    assert expected <= names
    told = (finished_study / DATA / "README.txt").read_text()
    assert all(name in told for name in ("plan.tsv", "plan.html", "covariates.tsv", "site_effect.json"))
    assert {name for name in names if name.endswith((".nii.gz", ".nii"))} == {n for n in expected if n.endswith(".gz")}


def test_the_finished_study_checks_out_with_and_without_its_images(finished_study, tmp_path):
    lines = []
    assert check_handover(finished_study / BAG, study=finished_study, sample=99, say=lines.append)
    again = [line for line in lines if line.startswith("smoothed again")]
    assert len(again) == len(small.SUBJECTS)
    # float32 images: a few units in the last place; 1e-5 is what is allowed.
    assert max(float(line.split()[3]) for line in again) < 3e-6
    alone = shutil.copytree(finished_study / BAG, tmp_path / "on another machine")
    done = subprocess.run([sys.executable, CHECK, alone], cwd=tmp_path, capture_output=True, text=True, check=False)
    assert done.returncode == 0, done.stdout + done.stderr
    assert "everything that was compared agrees" in done.stdout


def test_the_draw_of_scans_is_the_seeds(finished_study):
    def draw(seed):
        lines = []
        check_handover(finished_study / BAG, study=finished_study, sample=2, seed=seed, say=lines.append)
        return [line.split()[2] for line in lines if line.startswith("smoothed again")]

    assert draw(1) == draw(1)
    assert len({tuple(draw(seed)) for seed in range(6)}) > 1


def test_a_run_with_nothing_to_do_leaves_the_bag_alone(study):
    before = (study / BAG / "tagmanifest-sha256.txt").stat()
    assert small.snakemake(study).idle
    assert (study / BAG / "tagmanifest-sha256.txt").stat() == before


def test_harmonised_images_are_packed_only_if_the_study_says_so(study):
    settings = study / "config" / "study.yaml"
    settings.write_text(settings.read_text() + "handover: {include_images: true}\n")
    _, real = small.dry_and_real(study)
    assert small.PACK in real
    assert not {job for job in real if job.startswith(("Smooth sub-", "Measure"))}
    image, _ = scan_files(study, "q01")
    packed = study / DATA / image.relative_to(study)
    assert packed.read_bytes() == image.read_bytes()
    assert validate(study / BAG)
    assert check(study / BAG, study=study)[0]
    other, _ = scan_files(study, "q02")
    shutil.copy(other, packed)
    renew(study / BAG)
    finds(study / BAG, "another image than the records name")


def test_the_check_follows_the_studys_own_folder_and_modality(study):
    settings = study / "config" / "study.yaml"
    settings.write_text(settings.read_text() + "results: out put/res\nmodality: spect\n")
    assert small.snakemake(study).code == 0
    bag = study / "out put/res/handover"
    assert validate(bag)
    assert check(bag, study=study, sample=99)[0]
    assert (bag / "data/results/harmonised/.bidsignore").is_file()


def test_a_failed_packing_leaves_the_old_bag(study, tmp_path):
    clone = small.copy_program(tmp_path / "clone")
    code = clone / "scripts/evenblur/handover/packing.py"
    text = code.read_text()
    broken = text.replace(
        "    write_bag(target", '    raise InputError("the disk", "is full", "make room")\n    write_bag(target', 1
    )
    assert broken != text
    code.write_text(broken)
    before = small.result_bytes(study)
    run = small.snakemake(study, program=clone)
    assert run.code != 0
    assert small.PACK in run.jobs
    assert small.result_bytes(study) == before
    code.write_text(text)
    assert small.snakemake(study, program=clone).code == 0
    assert validate(study / BAG)


def test_a_killed_packing_leaves_the_old_bag_and_is_taken_up_again(study, tmp_path):
    before = small.result_bytes(study)
    clone = small.copy_program(tmp_path / "clone")
    code = clone / "scripts/evenblur/handover/packing.py"
    text = code.read_text()
    slow = text.replace("    pack_volume(\n", "    __import__('time').sleep(60)\n    pack_volume(\n", 1)
    assert slow != text
    code.write_text(slow)
    run = subprocess.Popen(
        small.command(study, program=clone),
        stdout=subprocess.DEVNULL,
        stderr=subprocess.DEVNULL,
        start_new_session=True,
    )
    end = time.monotonic() + 120
    while not list((study / "results").glob(".handover.*.part/data/phantoms")):
        assert time.monotonic() < end, "the packing did not begin"
        time.sleep(0.05)
    os.killpg(run.pid, signal.SIGKILL)
    run.wait()
    whole = {name: content for name, content in small.result_bytes(study).items() if not name.startswith(".handover.")}
    assert whole == before
    again = subprocess.run(
        [sys.executable, small.PROGRAM / "scripts/start.py", "run", study, "--cores", "2"],
        capture_output=True,
        text=True,
        check=False,
        env=small.environment(),
    )
    assert again.returncode == 0, again.stdout + again.stderr
    assert small.result_bytes(study) == before


# --- privacy

NAME = "Imogen Quayle"


def test_nothing_of_a_phantoms_header_reaches_the_bag(study):
    image = study / "images" / "quay-1.nii.gz"
    named = nib.Nifti1Image(small.phantom_volume("quay-1"), np.diag([*small.VOXEL, 1.0]))
    for field in ("descrip", "intent_name", "aux_file"):
        named.header[field] = NAME.encode()
    named.header.extensions.append(nib.nifti1.Nifti1Extension("comment", NAME.encode()))
    nib.save(named, image)
    assert NAME.encode() in nib.load(image).to_bytes()
    assert small.snakemake(study).code == 0
    for path in (study / BAG).rglob("*"):
        if path.is_file():
            content = nib.load(path).to_bytes() if path.suffix == ".gz" else path.read_bytes()
            assert NAME.encode() not in content, path.name
    assert check(study / BAG, study=study)[0]


# --- tampering


def test_one_byte_in_any_file_of_the_bag_is_found(study):
    for path in sorted((study / BAG).rglob("*")):
        if not path.is_file():
            continue
        whole = path.read_bytes()
        path.write_bytes(whole[:-2] + bytes([whole[-2] ^ 1]) + whole[-1:])
        with pytest.raises(DisagreementError):
            check_fixity(study / BAG)
        path.write_bytes(whole)
    assert check_fixity(study / BAG)


def numeric_cells(text):
    """Every cell of a table that is a number or a list of numbers or a hash: (line, column)."""
    rows = [line.split("\t") for line in text.splitlines()]
    for number, row in enumerate(rows[1:], start=1):
        for column, cell in enumerate(row):
            if re.search(r"\d$", cell) or (cell and "sha256" in rows[0][column]):
                yield number, column


def with_other_digit(text, line, column):
    rows = [row.split("\t") for row in text.splitlines()]
    cell = rows[line][column]
    rows[line][column] = cell[:-1] + "1234567890bcdefa"["0123456789abcdef".index(cell[-1])]
    return "\n".join("\t".join(row) for row in rows) + "\n"


TABLES = [f"results/audit/{name}.tsv" for name in ("sites", "scans", "covariates")] + ["images.tsv", "results/plan.tsv"]


@pytest.mark.parametrize("table", TABLES)
def test_any_changed_digit_of_a_table_is_found_with_renewed_checksums(study, table):
    path = study / DATA / table
    whole = path.read_text()
    cells = list(numeric_cells(whole))
    assert len(cells) > 15
    for line, column in cells:
        path.write_text(with_other_digit(whole, line, column))
        renew(study / BAG)
        assert validate(study / BAG), "for a tool that knows bags only, all is well"
        finds(study / BAG, re.escape(table))


def test_a_changed_digit_of_the_plan_or_a_width_is_found_with_renewed_checksums(study):
    def change_plan(record):
        record["periods"][0]["kernel"]["in_plane_mm"] += 0.0001

    def change_width(record):
        record["axial"]["fwhm_mm"] -= 0.0001

    def change_achieved(record):
        record["in_plane"]["fwhm_mm"] += 0.0001

    changes = {
        "results/plan.json": change_plan,
        "results/resolution/mill-1-points.json": change_width,
        "results/achieved/moor-1.p1.json": change_achieved,
    }
    for name, change in changes.items():
        path = study / DATA / name
        whole = path.read_text()
        edit(path, change)
        renew(study / BAG)
        finds(study / BAG, "plan.json|sites.tsv")
        path.write_text(whole)


def test_changed_words_and_verdicts_are_found_with_renewed_checksums(study):
    sites, scans = study / DATA / "results/audit/sites.tsv", study / DATA / "results/audit/scans.tsv"
    for path, old, new in [
        (sites, "\tpass\t", "\tdeclared\t"),
        (sites, "\tquadrature\t", "\tmatched\t"),
        (scans, "\taccepted\t", "\theld\t"),
        (scans, "images/q01", "images/q02"),
    ]:
        whole = path.read_text()
        path.write_text(whole.replace(old, new, 1))
        renew(study / BAG)
        finds(study / BAG, path.name)
        path.write_text(whole)


def test_changed_numbers_of_the_site_effect_are_found_with_renewed_checksums(study):
    rows = [["middle", "55;55;50", "30", "no"], ["edge", "30;55;50", "20", "yes"]]
    small.write_table(study / "config/regions.tsv", "region centre_mm diameter_mm reference", rows)
    assert small.snakemake(study).code == 0
    assert check(study / BAG, study=study)[0]
    effect = study / DATA / "results/site_effect/site_effect.json"
    whole = effect.read_text()
    places = [match.end() - 1 for match in re.finditer(r'"(variation|f|eta_squared|share)": [0-9.]*[1-9]', whole)]
    assert len(places) > 8
    for place in places:
        effect.write_text(whole[:place] + str((int(whole[place]) + 1) % 10) + whole[place + 1 :])
        renew(study / BAG)
        finds(study / BAG, "site_effect.json")
    effect.write_text(whole)
    means = study / DATA / "results/site_effect/regions/sub-q01_ses-base.json"
    edit(means, lambda record: record["regions"]["middle"].update(after=1.01 * record["regions"]["middle"]["after"]))
    renew(study / BAG)
    finds(study / BAG, "site_effect.json, middle, after")


def test_queries_that_differ_from_the_studys_are_found(study):
    path = study / DATA / "results/audit/queries.tsv"
    path.write_text(path.read_text() + "quay\titem\tcode\tsentence\twho\n")
    renew(study / BAG)
    finds(study / BAG, "queries.tsv", study=study)


# Numbers that explain others, and that the check does not work out: half the intervals, the gain in noise.
EXPLAINING = r"half_interval|noise_factor|version|halves"


@pytest.mark.parametrize("name", ["sites.csv", "scans.csv", "audit.json", "sites/quay.json"])
def test_a_changed_number_in_any_other_view_of_the_tables_is_found_with_renewed_checksums(study, name):
    path = study / DATA / "results/audit" / name
    whole = path.read_text()
    places = [match.end() - 1 for match in re.finditer(r"\d\.\d+", whole)]
    lines = {place: whole[:place].rpartition("\n")[2] for place in places}
    explaining = EXPLAINING if name == "audit.json" else "version"
    compared = [place for place in places if not re.search(explaining, lines[place])]
    assert len(compared) > 5
    for place in compared:
        path.write_text(whole[:place] + str((int(whole[place]) + 1) % 10) + whole[place + 1 :])
        renew(study / BAG)
        agreed, last = check(study / BAG)
        # Sentences are not compared.
        assert not agreed or " " in lines[place].strip().partition(": ")[2], (lines[place], last)


def test_a_removed_line_of_the_history_is_found_with_renewed_checksums(study):
    path = study / DATA / "history.tsv"
    lines = path.read_text().splitlines()
    assert len(lines) > 5
    for number in (1, 3, len(lines) - 1):
        path.write_text("\n".join(lines[:number] + lines[number + 1 :]) + "\n")
        renew(study / BAG)
        finds(study / BAG, r"history\.tsv")
    path.unlink()
    renew(study / BAG)
    finds(study / BAG, r"history\.tsv: is not in the bag")


def test_a_removed_or_added_row_is_found_with_renewed_checksums(study):
    for name in ("results/audit/sites.tsv", "results/audit/scans.tsv", "images.tsv"):
        path = study / DATA / name
        whole = path.read_text()
        for text in (whole.rpartition("\n")[0].rpartition("\n")[0] + "\n", whole + whole.splitlines()[-1] + "\n"):
            path.write_text(text)
            renew(study / BAG)
            finds(study / BAG, path.name)
        path.write_text(whole)


def test_a_removed_record_is_found_with_renewed_checksums(study):
    (study / DATA / "results/intake/scans/sub-q01_ses-base.json").unlink()
    renew(study / BAG)
    finds(study / BAG, "sub-q01_ses-base.json: is not there")


def test_an_added_file_is_found(study):
    (study / DATA / "results/audit/more.tsv").write_text("x\n")
    finds(study / BAG, "no manifest lists it")
    (study / DATA / "results/audit/more.tsv").unlink()
    (study / "results/harmonised/sub-q01/extra.nii.gz").write_bytes(b"x")
    finds(study / BAG, "no accepted scan stands for it", study=study)


def test_another_phantom_in_the_bag_is_found_with_renewed_checksums(study):
    phantoms = study / DATA / "phantoms"
    shutil.copy(phantoms / "mill-1-points.nii.gz", phantoms / "quay-1-points.nii.gz")
    renew(study / BAG)
    finds(study / BAG, "other voxels than those that were taken in")


def test_two_swapped_scans_are_found_by_their_hashes(study):
    first, _ = scan_files(study, "q01")
    second, _ = scan_files(study, "q02")
    aside = first.rename(first.with_name("aside"))
    second.rename(first)
    aside.rename(second)
    finds(study / BAG, "sub-q01.*another image than the records name", study=study)


def test_two_swapped_scans_are_found_by_smoothing_where_the_hashes_were_renewed_too(study):
    files = [scan_files(study, subject) for subject in ("q01", "q02")]
    outputs = [json.loads(record.read_text())["Evenblur"]["output"] for _, record in files]
    aside = files[0][0].rename(study / "aside")
    files[1][0].rename(files[0][0])
    aside.rename(files[1][0])
    for (_, record), output in zip(files, reversed(outputs), strict=True):
        edit(record, lambda content, output=output: content["Evenblur"].update(output=output))
    forge_tables(study)
    assert check(study / BAG)[0], "the bag alone cannot know"
    finds(study / BAG, "sub-q0[12]_ses-base: smoothed again it differs", study=study, sample=99)


def forge_tables(study):
    """Write the tables anew from forged records, and the bag from both."""
    import make_audit_tables
    import make_report

    make_audit_tables.main(["--study-dir", str(study)])
    make_report.main(["--study-dir", str(study)])
    pack_anew(study)


def test_a_kernel_two_percent_off_is_caught(study):
    image, record = scan_files(study, "m01")
    said = json.loads(record.read_text())["Evenblur"]
    widths = [
        f"--{name}-mm={1.02 * said['kernel'][key]}"
        for name, key in (("in-plane", "in_plane_mm"), ("axial", "axial_mm"))
    ]
    elsewhere = [f"--out={study / 'other.nii.gz'}", f"--record={study / 'other.json'}"]
    smooth_scan.main([f"--image={study / 'images/m01.nii.gz'}", *widths, *elsewhere])
    made = json.loads((study / "other.json").read_text())["Evenblur"]
    (study / "other.nii.gz").replace(image)
    # The record says what it said before, hashes and totals aside: the kernel of the plan.
    keys = ("output", "total_after_ml", "maximum_after")
    edit(record, lambda content: content["Evenblur"].update({key: made[key] for key in keys}))
    forge_tables(study)
    assert check(study / BAG)[0]
    finds(study / BAG, "sub-m01_ses-base: smoothed again it differs by [0-9.]+e-0[23] ", study=study, sample=99)


def test_an_original_that_was_changed_since_is_found(study):
    small.save(study / "images" / "o01.nii.gz", small.scan_volume("o02"))
    finds(study / BAG, "images/o01.nii.gz: is another image", study=study)


def test_the_command_says_what_it_found_by_its_exit_code(study):
    def run(*arguments):
        return subprocess.run(
            [sys.executable, CHECK, *arguments], cwd=study, capture_output=True, text=True, check=False
        )

    good = run(BAG, "--study", ".", "--sample", "1", "--seed", "3")
    assert (good.returncode, good.stderr) == (0, "")
    assert len(re.findall(r"^smoothed again: .* of max   agrees$", good.stdout, flags=re.MULTILINE)) == 1
    os.truncate(study / DATA / "study.json", 5)
    bad = run(BAG)
    assert bad.returncode == 1
    assert "first disagreement: data/study.json: has other bytes" in bad.stdout
    renew(study / BAG)
    assert "cannot be read as JSON" in run(BAG).stdout
    for wrong in (["nowhere"], [BAG, "--study", "nowhere"], [BAG, "--sample", "-1"], [BAG, "--sample", "x"], []):
        done = run(*wrong)
        assert done.returncode == 2, wrong
        assert len(done.stderr.splitlines()) == 1, done.stderr
