"""BIDS data sets of empty files, and the tables that `new_study.py` writes from them."""

import csv
import json

import new_study
from evenblur.command import run

FIELDS = {
    "ManufacturersModelName": "Talvik 3",
    "InstitutionName": "Plantedclinic of Quay",
    "TracerRadionuclide": "F18",
    "ReconMethodName": "ordered subsets",
    "ReconMethodParameterLabels": ["iterations", "subsets"],
    "ReconMethodParameterValues": [4, 8],
    "ReconFilterType": "Gaussian",
    "ReconFilterSize": 5,
}


class Bids:
    """A BIDS data set whose images are empty files: a look through it opens none."""

    def __init__(self, folder):
        self.folder = folder
        folder.mkdir(parents=True)
        self.write("dataset_description.json", json.dumps({"Name": "Invented set", "BIDSVersion": "1.11.1"}))

    def write(self, name, text):
        path = self.folder / name
        path.parent.mkdir(parents=True, exist_ok=True)
        path.write_text(text, encoding="utf-8")

    def table(self, name, *rows):
        self.write(name, "".join("\t".join(row.split("|")) + "\n" for row in rows))

    def image(self, subject, session=None, *, entities="", fields=None, day=None, **changed):
        place = f"sub-{subject}" + (f"/ses-{session}" if session else "")
        stem = f"sub-{subject}" + (f"_ses-{session}" if session else "")
        self.write(f"{place}/pet/{stem}{entities}_pet.nii.gz", "")
        self.write(
            f"{place}/pet/{stem}{entities}_pet.json", json.dumps({**(FIELDS if fields is None else fields), **changed})
        )
        if day:
            path = self.folder / place / f"{stem}_scans.tsv"
            known = path.read_text(encoding="utf-8") if path.exists() else "filename\tacq_time\n"
            path.write_text(f"{known}pet/{stem}{entities}_pet.nii.gz\t{day}\n", encoding="utf-8")


def begin(study, *bids, options=()):
    """Call the command; gives the rows of the three tables."""
    named = [part for one in bids for part in ("--from-bids", str(one.folder))]
    assert run(new_study.main, [str(study), *named, *options]) == 0
    return tables(study)


def tables(study):
    found = {}
    for name in ("setups", "phantoms", "scans"):
        with (study / "config" / f"{name}.tsv").open(encoding="utf-8", newline="") as stream:
            found[name] = list(csv.DictReader(stream, delimiter="\t"))
    return found


def column(rows, name):
    return [row[name] for row in rows]
