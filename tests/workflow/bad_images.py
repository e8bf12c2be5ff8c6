"""Bad input of many kinds beside good scans, each with the code that it must end with. All of it is invented.

A case writes an image and says what its row in the table is to look like where that differs from a good one.
"""

import gzip
import json
import shutil
from collections.abc import Callable
from dataclasses import dataclass, field

import nibabel as nib
import numpy as np

import dicom_simulation
import small_study as small

RECONSTRUCTION = {
    "Units": "Bq/mL",
    "ReconMethodName": "OSEM",
    "ReconMethodParameterLabels": ["iterations", "subsets"],
    "ReconMethodParameterValues": [4, 16],
    "ReconFilterType": "Gaussian",
    "ReconFilterSize": 5,
    "ManufacturersModelName": "Invented 3",
    "TracerRadionuclide": "F18",
}
AFFINE = np.diag([*small.VOXEL, 1.0])


@dataclass(frozen=True)
class Case:
    """One kind of bad (or odd) input.

    `write` gets the image's path and the case's own picture; `row` replaces cells of the row; `reasons` are the hold
    codes that the scan must end with (none: accepted) and `flags` those that it must bear at least.
    """

    write: Callable
    reasons: tuple[str, ...] = ()
    flags: tuple[str, ...] = ()
    row: dict = field(default_factory=dict)
    sidecar: dict | None = field(default_factory=lambda: dict(RECONSTRUCTION))
    ending: str = ".nii"


def picture(number):
    """A scan's picture, another one for each number."""
    rng = np.random.default_rng(7000 + number)
    return small.gaussians(6.0, 6.0, rng.uniform(30, 70, (12, 3)), seed=number)


# --- how files are written


def plain(path, volume, *, affine=AFFINE, dtype=np.float32, change=None):
    """A NIfTI file of this type; `change` edits the header after the affine was entered."""
    image = nib.Nifti1Image(np.asarray(volume).astype(dtype), affine)
    image.header.set_xyzt_units("mm", "sec")
    if change:
        change(image.header)
    path.write_bytes(image.to_bytes())


def patched(offset, values, kind):
    """Write a file, then other numbers into its header, as damaged or wrongly exported files have them."""

    def write(path, volume):
        plain(path, volume)
        data = bytearray(path.read_bytes())
        packed = np.array(values, kind).tobytes()
        data[offset : offset + len(packed)] = packed
        path.write_bytes(data)

    return write


def of_bytes(content):
    return lambda path, _: path.write_bytes(content)


def zipped(change):
    """A compressed file whose bytes are changed afterwards."""

    def write(path, volume):
        plain(path, volume)
        path.write_bytes(change(gzip.compress(path.read_bytes(), mtime=0)))

    return write


def cut(path, volume):
    plain(path, volume)
    path.write_bytes(path.read_bytes()[:-50_000])


def changed(function, **options):
    """A file of the picture after a function."""
    return lambda path, volume: plain(path, function(volume), **options)


def two_forms(affine):
    """A header whose sform is the usual one and whose qform is another."""

    def change(header):
        header.set_sform(AFFINE, code=1)
        header.set_qform(affine, code=1)
        header["pixdim"][1:4] = small.VOXEL

    return lambda path, volume: plain(path, volume, change=change)


def turned(degrees, axis=2):
    """The usual affine, turned about a world axis."""
    a, b = (other for other in range(3) if other != axis)
    turn = np.eye(4)
    angle = np.radians(degrees)
    turn[[a, b], [a, b]] = np.cos(angle)
    turn[a, b], turn[b, a] = -np.sin(angle), np.sin(angle)
    return turn @ AFFINE


def odd_pixdim(header):
    header["pixdim"][1:4] = 4.0


def colours(path, volume):
    bright = np.clip(volume / 10, 0, 255).astype(np.uint8)
    rgb = np.zeros(bright.shape, dtype=[("R", "u1"), ("G", "u1"), ("B", "u1")])
    rgb["R"] = bright
    path.write_bytes(nib.Nifti1Image(rgb, AFFINE).to_bytes())


def surface(path, _):
    points = nib.gifti.GiftiDataArray(np.zeros((4, 3), np.float32), intent="NIFTI_INTENT_POINTSET")
    path.write_bytes(nib.GiftiImage(darrays=[points]).to_bytes())


def half_a_pair(path, volume):
    nib.save(nib.Nifti1Pair(volume, AFFINE), path)
    path.with_suffix(".img").unlink()


def nothing(path, _):
    """An image that was never sent."""


def dead_link(path, _):
    path.symlink_to("never-sent.nii")


def empty_folder(path, _):
    path.mkdir()


def two_series(path, volume):
    for name in ("a", "b"):
        dicom_simulation.write_series(path / name, np.asarray(volume[:8, :8, :4], float), series=f"1.2.3.{ord(name)}")


def full_range(path, volume):
    """Whole numbers that were cut off at the top of their range."""
    values = np.asarray(volume) * 200
    plain(path, np.clip(values, -32768, 32767), dtype=np.int16)


def plateau(path, volume):
    """A scale factor lets a plateau of the object stand at the top of the range: no cut."""
    top = np.minimum(volume, 0.2 * volume.max())
    values = np.clip(np.round(top / top.max() * 32767), -32768, 32767)
    plain(path, values, dtype=np.int16, change=lambda header: header.set_slope_inter(top.max() / 32767, 0))


def copy_of(name):
    """The picture of another image in another number type and without compression."""
    return lambda path, _: plain(path, nib.load(path.parent / name).get_fdata(), dtype=np.float64)


def harmonised(*, with_record, mark):
    """A picture that this program smoothed before."""

    def write(path, volume):
        image = nib.Nifti1Image(volume, AFFINE)
        if mark:
            image.header["descrip"] = b"harmonised in resolution by Evenblur"
        path.write_bytes(image.to_bytes())
        if with_record:
            path.with_suffix(".json").write_text(json.dumps({"Evenblur": {}}))

    return write


def frames_of(path, volume):
    """Three frames, the first before the injection."""
    plain(path, np.stack([0 * volume, volume, 2 * volume], axis=-1))


def with_gap(volume):
    gap = volume.copy()
    gap[:5, :5, :5] = np.nan
    return gap


def with_infinity(volume):
    return np.where(np.arange(volume.size).reshape(volume.shape) == 5000, np.inf, volume)


def long_object(volume):
    """An object that fills every slice alike."""
    return np.repeat(volume.max(axis=2, keepdims=True), volume.shape[2], axis=2)


def wide_voxels(volume):
    return volume[::2, ::2]


CASES = {
    # Files that cannot be read
    "neversent": Case(nothing, ("image_missing",)),
    "deadlink": Case(dead_link, ("image_missing",)),
    "nobytes": Case(of_bytes(b""), ("image_unreadable",)),
    "sometext": Case(of_bytes(b"Please find the image attached.\n" * 40), ("image_unreadable",)),
    "headeronly": Case(lambda p, v: (plain(p, v), p.write_bytes(p.read_bytes()[:348])), ("image_unreadable",)),
    "cutplain": Case(cut, ("image_unreadable",)),
    "cutgzip": Case(zipped(lambda b: b[:-9000]), ("image_unreadable",), ending=".nii.gz"),
    "checksum": Case(zipped(lambda b: b[:-6] + bytes([b[-6] ^ 255]) + b[-5:]), ("image_unreadable",), ending=".nii.gz"),
    "moreafter": Case(zipped(lambda b: b + b"more"), ("image_unreadable",), ending=".nii.gz"),
    "notgzip": Case(plain, ("image_unreadable",), ending=".nii.gz"),
    "halfpair": Case(half_a_pair, ("image_unreadable",), ending=".hdr"),
    "emptyfolder": Case(empty_folder, ("image_unreadable",), ending=""),
    "twoseries": Case(two_series, ("image_unreadable",), ending=""),
    # Files that hold something else
    "flat": Case(changed(lambda v: v[:, :, 0]), ("not_a_volume",)),
    "fivedims": Case(changed(lambda v: np.stack([v[..., None]] * 2, axis=-1)), ("not_a_volume",)),
    "complex": Case(changed(lambda v: v, dtype=np.complex64), ("not_a_volume",)),
    "colours": Case(colours, ("not_a_volume",)),
    "surface": Case(surface, ("not_a_volume",), ending=".gii"),
    "hugeclaim": Case(patched(42, [3000, 3000, 3000], "<i2"), ("too_large",)),
    # Geometry
    "novoxelsize": Case(
        lambda p, v: plain(p, v, change=lambda h: h["pixdim"].__setitem__(slice(1, 4), 0)), ("image_unreadable",)
    ),
    "hugevoxels": Case(changed(lambda v: v, affine=np.diag([2, 2, 60, 1.0])), ("image_unreadable",)),
    "tinyvoxels": Case(changed(lambda v: v, affine=np.diag([0.002, 0.002, 0.0025, 1])), ("image_unreadable",)),
    "singular": Case(patched(280, [[2, 0, 0, 0], [0, 2, 0, 0], [0, 2, 0, 0]], "<f4"), ("image_unreadable",)),
    "sheared": Case(patched(280, [[2, 0.3, 0, 0], [0, 2, 0, 0], [0, 0, 2.5, 0]], "<f4"), ("image_unreadable",)),
    "nanaffine": Case(patched(280, [np.nan], "<f4"), ("image_unreadable",)),
    "formsapart": Case(two_forms(turned(5.0)), ("image_unreadable",)),
    "formsmirrored": Case(two_forms(AFFINE @ np.diag([-1, 1, 1, 1.0])), ("image_unreadable",)),
    "pixdimapart": Case(lambda p, v: plain(p, v, change=odd_pixdim), ("image_unreadable",)),
    "tilted": Case(changed(lambda v: v, affine=turned(8.0, axis=0)), ("oblique_grid",)),
    "fewslices": Case(changed(lambda v: v[:, :, 20:22]), ("too_few_slices",)),
    # Values
    "zeros": Case(changed(np.zeros_like), ("image_zero",)),
    "novalues": Case(changed(lambda v: np.full_like(v, np.nan)), ("image_not_finite",)),
    "infinite": Case(changed(with_infinity), ("image_not_finite",)),
    "beyond": Case(changed(lambda v: v.astype(float) * 1e36, dtype=np.float64), ("image_not_finite",)),
    "cutoff": Case(full_range, ("image_not_finite",)),
    # The same picture, pictures that were smoothed before
    "copied": Case(copy_of("q01.nii.gz"), ("duplicate_image",)),
    "phantomcopy": Case(copy_of("mill-1.nii.gz"), ("duplicate_image",)),
    "again": Case(harmonised(with_record=True, mark=False), ("already_harmonised",), sidecar=None),
    "againbare": Case(harmonised(with_record=False, mark=True), ("already_harmonised",)),
    # Another reconstruction than the phantom's
    "othervoxels": Case(
        changed(wide_voxels, affine=np.diag([4, 4, 2.5, 1.0])), ("reconstruction_mismatch",), ("under_sampled_width",)
    ),
    "otherfilter": Case(plain, ("reconstruction_mismatch",), sidecar={**RECONSTRUCTION, "ReconFilterSize": 2}),
    "othersubsets": Case(
        plain, ("reconstruction_mismatch",), sidecar={**RECONSTRUCTION, "ReconMethodParameterValues": [4, 8]}
    ),
    "othermodel": Case(
        plain, ("reconstruction_mismatch",), sidecar={**RECONSTRUCTION, "ManufacturersModelName": "Invented 4"}
    ),
    # Dates, setups, decisions
    "tooearly": Case(plain, ("no_phantom_session",), row={"acquired": "2026-01-09"}),
    "toolate": Case(plain, ("phantom_expired",), row={"acquired": "2027-01-11"}),
    "serviced": Case(plain, ("setup_changed",), row={"setup": "fen-1", "acquired": "2026-02-01"}),
    "nowidth": Case(plain, ("unmeasured",), row={"setup": "fen-2"}),
    "coarse": Case(plain, ("coarser_than_target",), row={"setup": "fen-3"}),
    "fine": Case(plain, ("under_sampled",), row={"setup": "fen-4"}),
    "excluded": Case(
        plain, ("excluded_by_decision",), row={"use": "no", "use_reason": "moved", "decided_by": "invented board"}
    ),
}
"""What must be held."""

ODD = {
    "formsnear": Case(two_forms(turned(0.5)), flags=("forms_differ",)),
    "noforms": Case(patched(252, [0, 0], "<i2"), flags=("orientation_unstated",)),
    "gaps": Case(changed(with_gap), flags=("nan_voxels",)),
    "negative": Case(changed(lambda v: v - 400), flags=("negative_voxels",)),
    "plateau": Case(plateau, flags=("saturated",)),
    "constant": Case(changed(lambda v: np.full_like(v, 7)), flags=("constant_image",)),
    "beforeinjection": Case(frames_of, flags=("empty_frames",)),
    "longobject": Case(changed(long_object), flags=("field_short",)),
    "cropped": Case(changed(lambda v: v[4:-4]), flags=("matrix_differs",)),
    "kilo": Case(plain, flags=("units_differ",), sidecar={**RECONSTRUCTION, "Units": "kBq/mL"}),
    "nosidecar": Case(plain, flags=("units_unstated", "reconstruction_unverified"), sidecar=None),
    "othernuclide": Case(plain, flags=("radionuclide_differs",), row={"radionuclide": "C-11"}),
}
"""What a reader should know, and what is smoothed all the same."""

SCAN_COLUMNS = f"{small.SCAN_COLUMNS} radionuclide use use_reason decided_by"


def add(study_dir, cases):
    """Write the images of cases into a study and give their rows, in the order of `SCAN_COLUMNS`."""
    rows = []
    for number, (subject, case) in enumerate(cases.items()):
        path = study_dir / "images" / f"{subject}{case.ending}"
        case.write(path, picture(number))
        if case.sidecar is not None and not path.is_dir():
            name = path.name.removesuffix(".gz").removesuffix(case.ending) if case.ending else path.name
            (path.parent / f"{name.removesuffix('.nii')}.json").write_text(json.dumps(case.sidecar))
        image = f"images/{path.name}"
        cells = {"subject": subject, "session": "base", "setup": "quay-1", "acquired": "2026-02-01", "image": image}
        rows.append([{**cells, **case.row}.get(column, "") for column in SCAN_COLUMNS.split()])
    return rows


def good_rows(subjects=None):
    """Rows of the small study's own scans."""
    rows = small.scan_rows()
    return [[*row, "", "", "", ""] for row in rows if subjects is None or row[0] in subjects]


def add_setups(study_dir):
    """Four more setups: serviced since its phantom, with a broken phantom, coarser than the target, too fine."""
    config, images = study_dir / "config", study_dir / "images"
    setups = [[setup, setup.split("-")[0], ""] for setup in small.WIDTHS]
    setups += [["fen-1", "fen", "2026-01-20"], *([f"fen-{number}", "fen", ""] for number in (2, 3, 4))]
    small.write_table(config / "setups.tsv", "setup site changed", setups)
    phantoms = small.phantom_rows()
    for number in (1, 2, 3, 4):
        label = f"fen-{number}"
        details = "{source_diameter_mm: 0}"
        phantoms.append(
            [f"{label}-points", label, "p1", "2026-01-10", "point_source", f"images/{label}.nii.gz", details]
        )
    small.write_table(config / "phantoms.tsv", small.PHANTOM_COLUMNS, phantoms)
    centres = [(30, 30, 28), (82, 31, 29), (31, 81, 71), (80, 82, 70), (56, 55, 29), (54, 56, 72)]
    for number, width in ((1, 5.5), (3, 9.5), (4, 2.3)):
        small.save(images / f"fen-{number}.nii.gz", small.gaussians(width, width, centres, seed=50 + number))
    (images / "fen-2.nii.gz").write_bytes(b"no image")
    for setup in [*small.WIDTHS, "fen-1", "fen-3", "fen-4"]:
        (images / f"{setup}.json").write_text(json.dumps(RECONSTRUCTION))


def copy_study(study_dir, target):
    """A copy of a study's tables and images alone."""
    for part in ("config", "images"):
        shutil.copytree(study_dir / part, target / part, symlinks=True)
    return target
