"""Damaged inputs by the thousand, each from a number: what the program makes of them.

`damaged(number)` names a kind of input, makes a sound one, damages it as the number says, and hands it to the library
as the workflow does. Every outcome is one of `OUTCOMES`; anything else is a fault of ours.
"""

import gzip
import io
import json
import math
import random
import shutil
import struct
import warnings
from collections.abc import Callable
from dataclasses import dataclass
from functools import cache
from pathlib import Path

import nibabel as nib
import numpy as np

from dicom_simulation import picture, write_enhanced, write_series, write_tomogram
from evenblur.errors import InputError
from evenblur.images.harmonise import harmonise_scan
from evenblur.intake import take_in_image
from evenblur.study import decision_tasks, history
from evenblur.study.ledger import Ledger
from evenblur.study.problems import StudyError
from evenblur.study.reading import load_study, resolved
from evenblur.study.tasks import Tasks
from evenblur.study.yaml_reading import parse_yaml

OUTCOMES = ("held row", "clear error", "unaffected", "used as it stands")
"""Held with a reason; refused in one line; the same voxels as before; sound by every check, with other content."""

PROGRAM = Path(__file__).resolve().parents[1]
NIBABEL_DATA = Path(nib.__file__).parent / "tests" / "data"  # shipped with nibabel for its own tests
SHAPE = (12, 11, 10)


@dataclass(frozen=True)
class Outcome:
    """What became of one input; `wrong` says what must not have happened, empty where nothing did."""

    kind: str
    outcome: str
    wrong: str = ""


# --- sound inputs


def _volume(shape: tuple[int, ...] = SHAPE) -> np.ndarray:
    return np.random.default_rng(5).gamma(2.0, 50.0, shape)


def _nifti(folder: Path, name: str, image: nib.Nifti1Image) -> str:
    image.header.set_xyzt_units("mm", "sec")
    nib.save(image, folder / name)
    return name


AFFINE = np.diag([2.0, 2.0, 3.0, 1.0])


def nifti_plain(folder: Path) -> str:
    return _nifti(folder, "a.nii", nib.Nifti1Image(_volume().astype(np.float32), AFFINE))


def nifti_packed(folder: Path) -> str:
    return _nifti(folder, "a.nii.gz", nib.Nifti1Image(_volume().astype(np.float32), AFFINE))


def nifti_frames(folder: Path) -> str:
    image = nib.Nifti1Image(_volume((*SHAPE, 3)).astype(">i2"), AFFINE)
    image.header.set_slope_inter(0.25, -3.0)
    return _nifti(folder, "a.nii.gz", image)


def nifti_extended(folder: Path) -> str:
    image = nib.Nifti1Image(_volume().astype(np.float32), AFFINE)
    image.header.extensions.append(nib.nifti1.Nifti1Extension("comment", b"invented words " * 20))
    return _nifti(folder, "a.nii", image)


def nifti_second(folder: Path) -> str:
    return _nifti(folder, "a.nii.gz", nib.Nifti2Image(_volume(), AFFINE))


def nifti_pair(folder: Path) -> str:
    return _nifti(folder, "a.hdr", nib.Nifti1Pair(_volume().astype(np.int16), AFFINE))


def analyze_pair(folder: Path) -> str:
    nib.save(nib.Spm99AnalyzeImage(_volume().astype(np.int16), AFFINE), folder / "a.img")
    return "a.img"


def mgh_packed(folder: Path) -> str:
    nib.save(nib.MGHImage(_volume().astype(np.float32), AFFINE), folder / "a.mgz")
    return "a.mgz"


def _foreign(name: str) -> Callable[[Path], str]:
    def copy(folder: Path) -> str:
        shutil.copy(NIBABEL_DATA / name, folder / name)
        return name

    copy.__name__ = name.partition(".")[2].lower()
    return copy


def par_rec(folder: Path) -> str:
    shutil.copy(NIBABEL_DATA / "Phantom_EPI_3mm_tra_SENSE_6_1.PAR", folder / "a.PAR")
    (folder / "a.REC").write_bytes(np.tile(_volume((64, 64)).astype("<u2"), (200, 1)).tobytes())
    return "a.PAR"


def head_brik(folder: Path) -> str:
    shutil.copy(NIBABEL_DATA / "scaled+tlrc.HEAD", folder / "a+tlrc.HEAD")
    shutil.copy(NIBABEL_DATA / "scaled+tlrc.BRIK", folder / "a+tlrc.BRIK")
    return "a+tlrc.HEAD"


def dicom_slices(folder: Path) -> str:
    write_series(folder / "s", picture())
    return "s"


def dicom_enhanced(folder: Path) -> str:
    write_enhanced(folder / "s", picture((6, 5, 4)))
    return "s"


def dicom_tomogram(folder: Path) -> str:
    write_tomogram(folder / "s", picture((6, 5, 4)))
    return "s"


SIDECAR = {
    "Units": "Bq/mL",
    "TracerName": "invented",
    "FrameDuration": [60, 60.5],
    "ImageDecayCorrected": True,
    "ReconMethodName": "OSEM",
    "ReconMethodParameterValues": [4, 8],
}


def sidecar_json(folder: Path) -> str:
    name = nifti_plain(folder)
    (folder / "a.json").write_text(json.dumps(SIDECAR, indent=1))
    return name


STUDY_YAML = """\
study: {title: "Invented \\u00e4 study"}
modality: pet
target:
  choose: fixed
  in_plane_mm: 8.0
  axial_mm: 8.0
  approval: {by: invented board, on: 2026-01-02, reason: agreed}
phantoms: {valid_days: 365, prefer: [uniform_cylinder, point_source]}
tolerance: {achieved_mm: 0.3}
"""
TABLES = {
    "setups.tsv": "setup\tsite\tscanner\tdeclared_in_plane_mm\tdeclared_source\tchanged\n"
    "quay-1\tquay\tinvented 3\t5.5\tdata sheet\t2025-03-01;2025-06-01\nmill-1\tmill\t\t\t\t\n",
    "phantoms.tsv": "phantom\tsetup\tphantom_session\tacquired\tkind\timage\tdetails\tuse\tuse_reason\n"
    "q-cyl\tquay-1\tp1\t2026-01-10\tuniform_cylinder\timages/q.nii\t{radius_mm: 100}\tyes\t\n"
    "m-sph\tmill-1\tp1\t2026-01-11\thot_spheres\timages/m.nii\t{diameters_mm: [10, 13]}\tno\tspilt\n",
    "scans.tsv": "subject\tsession\tsetup\tacquired\timage\trun\ttracer\n"
    "q01\tbase\tquay-1\t2026-02-01\timages/q01.nii\t1\tFDG\nm01\tbase\tmill-1\t2026-02-02\timages/m01.nii.gz\t\t\n",
    "regions.tsv": "region\timage\tvalue\tcentre_mm\tdiameter_mm\treference\tsubject\n"
    "cortex\timages/{subject}-parts.nii\t3\t\t\tno\t\nwhite\t\t\t10;-20.5;30\t20\tyes\tq01\n",
}

IMAGES: tuple[Callable[[Path], str], ...] = (
    nifti_plain,
    nifti_packed,
    nifti_frames,
    nifti_extended,
    nifti_second,
    nifti_pair,
    analyze_pair,
    mgh_packed,
    _foreign("tinypet.v"),
    _foreign("tiny.mnc"),
    par_rec,
    head_brik,
    dicom_slices,
    dicom_enhanced,
    dicom_tomogram,
    sidecar_json,
)
HISTORY = ("target", "added", "", '{"in_plane_mm": "8.0"}', "agreed"), ("setup quay-1", "scanner", "old", "=new", "")
TEXTS = ("study.yaml", *TABLES, "history.tsv")


@cache
def sound_files(kind: str) -> tuple[str, dict[str, bytes], str]:
    """The path that a table names, all files by name, and the hash of the voxels, of a sound input."""
    import tempfile

    make = next(made for made in IMAGES if made.__name__ == kind)
    with tempfile.TemporaryDirectory() as place:
        name = make(Path(place))
        files = {p.relative_to(place).as_posix(): p.read_bytes() for p in Path(place).rglob("*") if p.is_file()}
        record = take_in_image(Path(place) / name, name=name, item="scan", key="k")
    return name, files, str(record["voxels_sha256"])


# --- damage

EDGES = (0, 1, 0x7F, 0x80, 0xFF, 0x7FFF, 0x8000, 0xFFFF, 0x7FFFFFFF, 0x80000000, 0xFFFFFFFF, 1 << 62, (1 << 64) - 1)
NUMBERS = (math.nan, math.inf, -math.inf, 0.0, -1.0, 1e-38, 3e38, 1e300, 5e-324)
WORDS = (
    b"\0",
    b"\xff\xfe",
    b"\xed\xa0\x80",
    b"{",
    b"[" * 300,
    b'"',
    b"\t",
    b"\n",
    b"\r",
    b"&x *x ",
    b"!!python/name:os ",
)
WORDS += (
    b"1e999",
    b"-0",
    b"9" * 400,
    b"NaN",
    b"\xe2\x80\xae",
    b"\x1b[2J",
    b"../",
    b"=1+1",
    b"\\ud800",
    b"<b>",
    b"9999-12-31",
)


def mutate(data: bytes, chance: random.Random, *, text: bool = False) -> bytes:
    """Damage some bytes: mostly the first few hundred, where headers are."""
    made = bytearray(data)
    for _ in range(chance.choice((1, 1, 1, 2, 3, 8))):
        reach = len(made) if text or chance.random() < 0.3 else min(len(made), 600)
        at = chance.randrange(reach) if reach else 0
        way = chance.randrange(8)
        if text and chance.random() < 0.7:  # stay within what text is
            way = chance.choice((3, 4, 4, 5, 8))
        if way == 8:
            made[at : at + 1] = chance.choice(b"0123456789-,;.:{}[]\"'#|>*&!%@=\t\n ABab").to_bytes()
        elif way == 0:
            made[at : at + 1] = bytes([chance.randrange(256)])
        elif way == 1:
            size = chance.choice((1, 2, 4, 8))
            value = chance.choice(EDGES) & ((1 << 8 * size) - 1)
            made[at : at + size] = value.to_bytes(size, chance.choice(("little", "big")))
        elif way == 2:
            made[at : at + 8] = struct.pack(chance.choice(("<d", ">d", "<f", ">f")), _fitting(chance))
        elif way == 3:
            del made[at : at + chance.choice((1, 2, 16, 400))]
        elif way == 4:
            made[at:at] = chance.choice(WORDS) if text or chance.random() < 0.5 else chance.randbytes(16)
        elif way == 5:
            made[at:at] = made[: chance.choice((1, 16, 300))]
        elif way == 6:
            del made[chance.randrange(len(made) + 1) :]
        else:
            made[at : at + 4] = bytes(chance.choice((0, 255)) for _ in range(4))
    return bytes(made)


def _fitting(chance: random.Random) -> float:
    value = chance.choice(NUMBERS)
    return value if not math.isfinite(value) or abs(value) < 3.1e38 else 3e38


def _damage_file(data: bytes, chance: random.Random, *, text: bool) -> bytes:
    if data[:2] == b"\x1f\x8b" and chance.random() < 0.7:  # inside the packing, which is then sound
        return gzip.compress(mutate(gzip.decompress(data), chance), compresslevel=1, mtime=0)
    return mutate(data, chance, text=text)


# --- what the program makes of it


def try_image(kind: str, chance: random.Random, folder: Path) -> Outcome:
    """Damage a sound image and take it in; one that is accepted must smooth, or be refused in one line."""
    name, files, voxels = sound_files(kind)
    victim = "a.json" if kind == "sidecar_json" else chance.choice(sorted(files))
    for file, data in files.items():
        (folder / file).parent.mkdir(exist_ok=True)
        text = file.endswith((".json", ".PAR", ".HEAD"))
        (folder / file).write_bytes(_damage_file(data, chance, text=text) if file == victim else data)
    record = take_in_image(folder / name, name=name, item="scan", key="k")
    json.dumps(record, allow_nan=False, ensure_ascii=False).encode()
    problems = " ".join(record["problems"])
    if "MemoryError" in problems:
        return Outcome(kind, "", "more memory than the limit")
    if record["holds"]:
        return Outcome(kind, "held row", "" if problems and "\n" not in problems else "a hold without a sentence")
    widths = {"in_plane_mm": 5.0, "axial_mm": 5.0}
    try:
        made = harmonise_scan(folder / name, **widths, out=folder / "h.nii", record=folder / "h.out.json")
    except InputError as error:
        fits = error.code in ("oblique_grid", "too_few_slices")  # what the plan asks of the grid, not of the file
        return Outcome(kind, "clear error", "" if fits else f"accepted, then refused: {error}")
    if made["Evenblur"]["input"]["voxels_sha256"] != record["voxels_sha256"]:
        return Outcome(kind, "", "two readings of one file differ")
    if not np.isfinite(np.asarray(nib.load(folder / "h.nii").dataobj)).any():
        return Outcome(kind, "", "no value is left after smoothing")
    return Outcome(kind, "unaffected" if record["voxels_sha256"] == voxels else "used as it stands")


def try_study(kind: str, chance: random.Random, folder: Path) -> Outcome:
    """Damage one of the four study files and read the study as the workflow does."""
    config = folder / "config"
    config.mkdir()
    texts = {"study.yaml": STUDY_YAML, **TABLES}
    for name, text in texts.items():
        data = text.encode()
        (config / name).write_bytes(mutate(data, chance, text=True) if name == kind else data)
    try:
        study = load_study(folder)
    except StudyError as error:
        lines = str(error).splitlines()
        known = all(line.startswith("config/") for line in lines) and len(lines) == len(error.problems)
        return Outcome(kind, "clear error", "" if known else f"lines of another form: {lines}")
    json.dumps(resolved(study), allow_nan=False, ensure_ascii=False).encode()
    tasks = Tasks(study, Ledger(folder), folder, PROGRAM)
    tasks.look_at_images()
    for group, rows in (("scans", tasks.scans), ("phantoms", tasks.phantoms)):
        for key in rows:
            json.dumps(tasks.intake_settings(group, key)).encode()
    for key in tasks.scans:
        decision_tasks.region_inputs(tasks, key)
        json.dumps(decision_tasks.region_settings(tasks, key)).encode()
    same = all((config / name).read_bytes() == text.encode() for name, text in texts.items())
    return Outcome(kind, "unaffected" if same else "used as it stands")


def try_history(kind: str, chance: random.Random, folder: Path) -> Outcome:
    """Damage a history: what it says is printable, the damage is told, and later lines are added all the same."""
    history.append(folder, [history.Entry(*cells) for cells in HISTORY], date="2026-01-01")
    path = folder / history.HISTORY_NAME
    sound = path.read_bytes()
    path.write_bytes(mutate(sound, chance, text=True))
    changed = path.read_bytes() != sound
    told = history.disagreements(folder)
    history.fold(history.entries(path))
    history.append(folder, [history.Entry("target", "in_plane_mm", "8.0", "8.1")], date="2026-01-02")
    told += [part for _, entry in history.entries(path) for part in vars(entry).values()]
    if not all(part.isprintable() for part in told):
        return Outcome(kind, "", "the history says what a terminal obeys")
    if changed != bool(history.told_disagreements(folder)):
        return Outcome(kind, "", "another hand's change is not told" if changed else "a change is told that was not")
    return Outcome(kind, "clear error" if changed else "unaffected")


def damaged(number: int, folder: Path) -> Outcome:
    """Make the input of this number in an empty folder, and say what became of it."""
    chance = random.Random(number)
    kinds = [*(made.__name__ for made in IMAGES), *TEXTS]
    kind = kinds[number % len(kinds)]
    try:
        # As in a run: warnings of the readers are written to a log and stop nothing.
        with warnings.catch_warnings(), np.errstate(all="warn"):
            warnings.simplefilter("ignore")
            attempt = try_history if kind == "history.tsv" else try_study if kind in TEXTS else try_image
            return attempt(kind, chance, folder)
    except Exception as error:
        import traceback

        last = traceback.extract_tb(error.__traceback__)[-1]
        return Outcome(kind, "", f"{type(error).__name__}: {error} ({Path(last.filename).name}:{last.lineno})")


def parse(text: str) -> str:
    """What becomes of a text as YAML: `read`, or the one line that refuses it."""
    try:
        values = parse_yaml(text)
    except ValueError as error:
        return str(error)
    json.dumps(values, default=str, ensure_ascii=False).encode()
    return "read"


def quiet_nibabel() -> None:
    """Send what nibabel's log would say of damaged headers nowhere."""
    nib.imageglobals.logger.handlers.clear()
    nib.imageglobals.logger.addHandler(__import__("logging").StreamHandler(io.StringIO()))
