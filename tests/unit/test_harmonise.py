"""Scans on file: geometry, number types, header policy, sidecar, refusals, flags, memory."""

import gzip
import json
import subprocess
import sys
import zlib
from pathlib import Path

import nibabel as nib
import numpy as np
import pytest

from evenblur.errors import InputError
from evenblur.images.digests import file_sha256, voxels_sha256
from evenblur.images.harmonise import axial_end_weights, harmonise_scan
from evenblur.images.reading import open_image
from evenblur.images.sidecars import sidecar_path
from evenblur.images.streaming import iter_frames_float32
from evenblur.smoothing import smooth_volume

SCRIPTS = Path(__file__).parents[2] / "scripts"
AFFINE = np.array([[-2.0, 0, 0, 30], [0, 2.5, 0, -20], [0, 0, 3.0, -11], [0, 0, 0, 1]])


def picture(shape=(24, 20, 16), seed=1):
    values = np.random.default_rng(seed).random(shape) * 50 + 20
    values[..., :3] *= 0.01
    return values


def harmonise(folder: Path, scan: Path, *, in_plane_mm=6.0, axial_mm=5.0, ending=".nii.gz", **more):
    out, record = folder / f"h{ending}", folder / "h.json"
    done = harmonise_scan(scan, in_plane_mm=in_plane_mm, axial_mm=axial_mm, out=out, record=record, **more)
    return nib.load(out), done


def save(folder: Path, values, affine=AFFINE, name="s.nii.gz", kind=nib.Nifti1Image, **header):
    image = kind(values, affine)
    for field, value in header.items():
        image.header[field] = value
    image.header.set_xyzt_units("mm", "sec")
    nib.save(image, folder / name)
    return folder / name


@pytest.mark.parametrize("name", ["s.nii", "s.nii.gz"])
@pytest.mark.parametrize("number_type", ["<f4", ">f4", "<f8", ">i2", "<u1", "<i4"])
def test_any_number_type_is_smoothed_as_nibabel_reads_it(tmp_path, name, number_type):
    scan = save(tmp_path, picture().astype(number_type), name=name)
    image, record = harmonise(tmp_path, scan)
    expected = smooth_volume(nib.load(scan).get_fdata(), voxel_mm=(2.0, 2.5, 3.0), fwhm_mm=(6.0, 6.0, 5.0))
    np.testing.assert_array_equal(image.get_fdata(dtype=np.float32), expected)
    assert record["Evenblur"]["applied_fwhm_mm_by_array_axis"] == [6.0, 6.0, 5.0]
    assert record["Evenblur"]["maximum_after"] == pytest.approx(float(expected.max()), rel=1e-8)


def test_scale_factors_are_applied_and_not_carried_on(tmp_path):
    image = nib.Nifti1Image(np.round(picture()).astype(np.int16), AFFINE)
    image.header.set_slope_inter(2.5, -7.0)
    nib.save(image, tmp_path / "s.nii.gz")
    # nibabel writes the values as given, times (1 / slope): read back what they now mean.
    meant = nib.load(tmp_path / "s.nii.gz").get_fdata()
    done, _ = harmonise(tmp_path, tmp_path / "s.nii.gz")
    expected = smooth_volume(meant, voxel_mm=(2.0, 2.5, 3.0), fwhm_mm=(6.0, 6.0, 5.0))
    np.testing.assert_array_equal(done.get_fdata(dtype=np.float32), expected)
    raw = gzip.decompress((tmp_path / "h.nii.gz").read_bytes())
    header = nib.Nifti1Header(raw[:348])
    assert (header["scl_slope"], header["scl_inter"]) == (1.0, 0.0)
    assert header.get_data_dtype() == np.float32


@pytest.mark.parametrize("kind", [nib.Nifti1Image, nib.Nifti2Image])
def test_geometry_units_and_time_step_come_through_bit_for_bit(tmp_path, kind):
    image = kind(picture((12, 10, 9, 3)).astype(np.float32), None)
    header = image.header
    # A slightly turned qform and a different sform: both have to survive as they are.
    turn = np.radians(1.5)
    turned = AFFINE.copy()
    turned[:3, :3] = (
        np.array([[np.cos(turn), -np.sin(turn), 0], [np.sin(turn), np.cos(turn), 0], [0, 0, 1]]) @ (AFFINE[:3, :3])
    )
    image.set_qform(turned, code=1)
    image.set_sform(AFFINE, code=2)
    header.set_zooms((2.0, 2.5, 3.0, 0.1))
    header["toffset"] = 1.25
    header.set_xyzt_units("mm", "sec")
    nib.save(image, tmp_path / "s.nii")
    done, _ = harmonise(tmp_path, tmp_path / "s.nii")
    stored = nib.load(tmp_path / "s.nii").header
    for field in ("dim", "pixdim", "xyzt_units", "toffset", "qform_code", "sform_code", "quatern_b", "quatern_c"):
        assert done.header[field].tobytes() == stored[field].tobytes(), field
    for field in ("quatern_d", "qoffset_x", "qoffset_y", "qoffset_z", "srow_x", "srow_y", "srow_z"):
        assert done.header[field].tobytes() == stored[field].tobytes(), field
    assert type(done) is kind
    np.testing.assert_array_equal(done.affine, nib.load(tmp_path / "s.nii").affine)


def test_free_text_and_extensions_stay_behind(tmp_path):
    image = nib.Nifti1Image(picture().astype(np.float32), AFFINE)
    for field in ("descrip", "aux_file", "intent_name", "db_name"):
        image.header[field] = b"Invented Name"
    image.header.extensions.append(nib.nifti1.Nifti1Extension("comment", b"Invented Name, born long ago"))
    nib.save(image, tmp_path / "s.nii.gz")
    harmonise(tmp_path, tmp_path / "s.nii.gz")
    assert b"Invented" in gzip.decompress((tmp_path / "s.nii.gz").read_bytes())
    assert b"Invented" not in gzip.decompress((tmp_path / "h.nii.gz").read_bytes())


def test_compressed_file_holds_no_name_and_no_time_and_comes_out_the_same_twice(tmp_path):
    scan = save(tmp_path, picture().astype(np.float32))
    harmonise(tmp_path, scan)
    first = (tmp_path / "h.nii.gz").read_bytes(), (tmp_path / "h.json").read_bytes()
    harmonise(tmp_path, scan)
    assert ((tmp_path / "h.nii.gz").read_bytes(), (tmp_path / "h.json").read_bytes()) == first
    assert first[0][:10] == bytes([0x1F, 0x8B, 8, 0, 0, 0, 0, 0, 0, 255])  # RFC 1952: no flags, time 0, system unknown
    # The standard library's inflate checks checksum and length at the end.
    assert len(zlib.decompress(first[0], wbits=31)) == 352 + 4 * 24 * 20 * 16


def test_plain_and_compressed_results_hold_the_same_picture(tmp_path):
    scan = save(tmp_path, picture().astype(np.float32))
    _, compressed = harmonise(tmp_path, scan)
    _, plain = harmonise(tmp_path, scan, ending=".nii")
    assert plain["Evenblur"]["output"]["voxels_sha256"] == compressed["Evenblur"]["output"]["voxels_sha256"]
    assert (tmp_path / "h.nii").read_bytes() == gzip.decompress((tmp_path / "h.nii.gz").read_bytes())


@pytest.mark.parametrize("turned", [(0, 1, 2), (2, 0, 1), (1, 2, 0)])
def test_axial_width_goes_along_the_bed_whatever_the_axis_order(tmp_path, turned):
    values = picture().astype(np.float32).transpose(turned)
    affine = np.eye(4)
    affine[:3, :3] = AFFINE[:3, :3][:, list(turned)]
    scan = save(tmp_path, values, affine)
    image, record = harmonise(tmp_path, scan)
    axis = record["Evenblur"]["axial_axis"]
    assert axis == turned.index(2)
    assert record["Evenblur"]["applied_fwhm_mm_by_array_axis"][axis] == 5.0
    straight = smooth_volume(picture().astype(np.float32), voxel_mm=(2.0, 2.5, 3.0), fwhm_mm=(6.0, 6.0, 5.0))
    np.testing.assert_allclose(image.get_fdata(), straight.transpose(turned), atol=1e-5 * straight.max())


def test_every_frame_is_smoothed_alike_with_its_own_nan(tmp_path):
    values = picture((14, 12, 10, 4)).astype(np.float32)
    values[3:5, 3, 3, 1] = np.nan
    scan = save(tmp_path, values)
    image, record = harmonise(tmp_path, scan)
    smoothed = image.get_fdata(dtype=np.float32)
    for index in range(4):
        frame = np.asfortranarray(values[..., index])  # as in the file: another memory order rounds differently
        alone = smooth_volume(frame, voxel_mm=(2.0, 2.5, 3.0), fwhm_mm=(6.0, 6.0, 5.0))
        np.testing.assert_array_equal(smoothed[..., index], alone)
    block = record["Evenblur"]
    assert block["frames"] == 4
    assert block["nan_voxels"] == 2
    assert [flag["value"] for flag in block["flags"] if flag["code"] == "nan_voxels"] == [2]
    assert block["total_before_ml"] == pytest.approx(np.nansum(values.astype(float)) * 0.015, rel=1e-8)


def test_record_says_what_was_done(tmp_path):
    values = picture().astype(np.float32) - 30  # negative values are ordinary
    scan = save(tmp_path, values)
    facts = {
        "Sources": ["bids:raw:sub-1/pet/s.nii.gz"],
        "subject": "1",
        "target": {"in_plane_mm": 8.0, "axial_mm": 7.0},
    }
    _, record = harmonise(tmp_path, scan, facts=facts, code_token="abc")
    block = record["Evenblur"]
    assert json.loads((tmp_path / "h.json").read_text()) == record
    assert record["Sources"] == ["bids:raw:sub-1/pet/s.nii.gz"]
    assert record["SkullStripped"] is False
    assert block["kernel"] == {"in_plane_mm": 6.0, "axial_mm": 5.0}
    assert block["voxel_mm"] == [2.0, 2.5, 3.0]
    assert block["smoothing_version"].endswith("+abc")
    assert block["subject"] == "1"
    assert block["target"] == {"in_plane_mm": 8.0, "axial_mm": 7.0}
    assert "Sources" not in block
    assert block["total_before_ml"] == pytest.approx(values.sum(dtype=float) * 0.015, rel=1e-8)
    assert block["total_after_ml"] == pytest.approx(block["total_before_ml"], rel=1e-6)
    assert block["maximum_before"] == pytest.approx(float(values.max()), rel=1e-8)
    assert block["input"]["sha256"] == file_sha256(scan)
    assert block["input"]["voxels_sha256"] == voxels_sha256(open_image(scan).iter_frames())
    assert block["output"]["sha256"] == file_sha256(tmp_path / "h.nii.gz")
    assert block["output"]["voxels_sha256"] == voxels_sha256(open_image(tmp_path / "h.nii.gz").iter_frames())
    assert block["input"]["path"] == "s.nii.gz"  # an absolute path gives its last part only
    assert str(tmp_path) not in (tmp_path / "h.json").read_text()


def test_facts_do_not_overwrite_what_was_seen(tmp_path):
    scan = save(tmp_path, picture().astype(np.float32))
    _, record = harmonise(tmp_path, scan, facts={"frames": 99, "kernel": {}})
    assert record["Evenblur"]["frames"] == 1
    assert record["Evenblur"]["kernel"] == {"in_plane_mm": 6.0, "axial_mm": 5.0}


def test_sidecar_gives_named_fields_only(tmp_path):
    scan = save(tmp_path, picture().astype(np.float32))
    given = {
        "Units": "Bq/mL",
        "TracerName": "invented",
        "ReconFilterSize": [4.0],
        "FrameTimesStart": [0],
        "TimeZero": "10:11:12",
        "BodyWeight": 71,
        "InstitutionName": "somewhere",
        "ReconMethodName": {"nested": "object"},
    }
    (tmp_path / "s.json").write_text(json.dumps(given))
    _, record = harmonise(tmp_path, scan)
    inherited = {key: value for key, value in record.items() if key in given}
    assert inherited == {"Units": "Bq/mL", "TracerName": "invented", "ReconFilterSize": [4.0], "FrameTimesStart": [0]}


def test_damaged_sidecar_counts_as_none(tmp_path):
    scan = save(tmp_path, picture().astype(np.float32))
    (tmp_path / "s.json").write_text('{"Units": NaN')
    _, record = harmonise(tmp_path, scan)
    assert "Units" not in record


@pytest.mark.parametrize(
    ("image", "sidecar"),
    [("a.nii", "a.json"), ("a.b.nii.gz", "a.b.json"), ("a.v", "a.json"), ("a.img.gz", "a.img.json")],
)
def test_sidecar_has_the_images_name(image, sidecar):
    assert sidecar_path(Path(image)) == Path(sidecar)


@pytest.mark.parametrize("name", ["s.img", "s.mgz"])
def test_other_formats_come_out_as_nifti_with_their_geometry(tmp_path, name):
    values = picture().astype(np.float32)
    image = nib.Nifti1Pair(values, AFFINE) if name == "s.img" else nib.MGHImage(values, AFFINE)
    nib.save(image, tmp_path / name)
    done, _ = harmonise(tmp_path, tmp_path / name)
    np.testing.assert_allclose(done.affine, nib.load(tmp_path / name).affine, atol=1e-5)
    assert done.header.get_xyzt_units()[0] in ("mm", "unknown")
    expected = smooth_volume(values, voxel_mm=(2.0, 2.5, 3.0), fwhm_mm=(6.0, 6.0, 5.0))
    np.testing.assert_allclose(done.get_fdata(), expected, atol=1e-6 * expected.max())


def tilted(degrees: float) -> np.ndarray:
    turn = np.radians(degrees)
    rotation = np.array([[1, 0, 0], [0, np.cos(turn), -np.sin(turn)], [0, np.sin(turn), np.cos(turn)]])
    affine = np.eye(4)
    affine[:3, :3] = rotation @ np.diag([2.0, 2.5, 3.0])
    return affine


@pytest.mark.parametrize(
    ("degrees", "axial_mm", "used"),
    [(1.9, 5.0, True), (2.1, 5.0, False), (2.1, 5.95, True), (2.1, 5.93, False), (20.0, 6.0, True)],
)
def test_tilted_grid_is_used_only_with_equal_widths(tmp_path, degrees, axial_mm, used):
    scan = save(tmp_path, picture().astype(np.float32), tilted(degrees))
    if not used:
        with pytest.raises(InputError, match="tilted") as caught:
            harmonise(tmp_path, scan, axial_mm=axial_mm)
        assert caught.value.code == "oblique_grid"
        assert sorted(path.name for path in tmp_path.iterdir()) == ["s.nii.gz"]
        return
    _, record = harmonise(tmp_path, scan, axial_mm=axial_mm)
    codes = [flag["code"] for flag in record["Evenblur"]["flags"]]
    assert ("oblique_grid_used" in codes) == (degrees > 2)


@pytest.mark.parametrize(("axial_mm", "used"), [(0.0, True), (6.0, True), (6.1, False)])
def test_fewer_slices_than_the_axial_kernel_are_held(tmp_path, axial_mm, used):
    scan = save(tmp_path, picture((20, 20, 2)).astype(np.float32))  # two slices of 3 mm
    if used:
        harmonise(tmp_path, scan, axial_mm=axial_mm)
        return
    with pytest.raises(InputError, match="slices") as caught:
        harmonise(tmp_path, scan, axial_mm=axial_mm)
    assert caught.value.code == "too_few_slices"


def test_activity_near_an_axial_end_is_flagged_with_its_share(tmp_path):
    values = np.zeros((8, 8, 40), np.float32)
    values[:, :, 20] = 93
    values[:, :, 38] = 7  # ends 3 mm before the outer face, so it lies from 3 to 6 mm away
    scan = save(tmp_path, values)
    codes = {}
    for target in (3.0, 4.5, 6.0):
        _, record = harmonise(tmp_path, scan, facts={"target": {"axial_mm": target}})
        codes[target] = [(flag["code"], flag["value"]) for flag in record["Evenblur"]["flags"]]
    assert codes == {3.0: [], 4.5: [("activity_at_axial_end", 0.035)], 6.0: [("activity_at_axial_end", 0.07)]}


def test_axial_end_zones_that_meet_count_once():
    np.testing.assert_allclose(axial_end_weights(4, thickness_mm=2.0, zone_mm=5.0), 1.0)
    np.testing.assert_allclose(axial_end_weights(4, thickness_mm=2.0, zone_mm=1.0), [0.5, 0, 0, 0.5])


@pytest.mark.parametrize(("number_type", "value"), [("f4", np.inf), ("f8", -np.inf), ("f8", 1e200)])
def test_infinite_values_are_refused(tmp_path, number_type, value):
    values = picture().astype(number_type)
    values[1, 1, 1] = value
    scan = save(tmp_path, values)
    with pytest.raises(InputError, match="infinite") as caught:
        harmonise(tmp_path, scan)
    assert caught.value.code == "image_not_finite"


@pytest.mark.parametrize("damage", ["cut", "flipped", "checksum"])
def test_damaged_compressed_scan_is_refused_and_nothing_is_left(tmp_path, damage):
    scan = save(tmp_path, picture((30, 30, 30)).astype(np.float32))
    data = bytearray(scan.read_bytes())
    if damage == "cut":
        data = data[: len(data) // 2]
    elif damage == "flipped":
        data[len(data) // 2] ^= 0xFF
    else:
        data[-6] ^= 0xFF
    scan.write_bytes(bytes(data))
    with pytest.raises(InputError, match="cannot be read") as caught:
        harmonise(tmp_path, scan)
    assert caught.value.code == "image_unreadable"
    assert sorted(path.name for path in tmp_path.iterdir()) == ["s.nii.gz"]


def test_truncated_plain_scan_is_refused(tmp_path):
    scan = save(tmp_path, picture().astype(np.float32), name="s.nii")
    scan.write_bytes(scan.read_bytes()[:-10])
    with pytest.raises(InputError, match="ends before its last voxel"):
        harmonise(tmp_path, scan)


def test_scan_that_changed_is_refused(tmp_path):
    scan = save(tmp_path, picture().astype(np.float32))
    with pytest.raises(InputError, match="changed during the run"):
        harmonise(tmp_path, scan, expected_sha256="0" * 64)
    harmonise(tmp_path, scan, expected_sha256=file_sha256(scan).upper())


@pytest.mark.parametrize("width", [-1.0, float("nan"), float("inf")])
def test_widths_that_are_none_are_refused(tmp_path, width):
    scan = save(tmp_path, picture().astype(np.float32))
    with pytest.raises(InputError, match="not a width"):
        harmonise(tmp_path, scan, axial_mm=width)


def test_targets_of_no_use_are_refused(tmp_path):
    scan = save(tmp_path, picture().astype(np.float32))
    for out, record in (
        (scan, tmp_path / "r.json"),
        (tmp_path / "h.mha", tmp_path / "r.json"),
        (tmp_path / "h.nii",) * 2,
    ):
        with pytest.raises(InputError):
            harmonise_scan(scan, in_plane_mm=1.0, axial_mm=1.0, out=out, record=record)
    assert sorted(path.name for path in tmp_path.iterdir()) == ["s.nii.gz"]


def test_what_a_killed_run_left_is_cleared_away(tmp_path):
    scan = save(tmp_path, picture().astype(np.float32))
    (tmp_path / ".h.nii.gz.12345.part").write_bytes(b"half an image")
    harmonise(tmp_path, scan)
    assert sorted(path.name for path in tmp_path.iterdir()) == ["h.json", "h.nii.gz", "s.nii.gz"]


def test_image_and_record_are_both_written_or_neither(tmp_path, monkeypatch):
    scan = save(tmp_path, picture().astype(np.float32))

    def full(path, record):
        raise OSError(28, "No space left on device", str(path))

    monkeypatch.setattr("evenblur.images.harmonise.write_record", full)
    with pytest.raises(OSError, match="No space"):
        harmonise(tmp_path, scan)
    assert sorted(path.name for path in tmp_path.iterdir()) == ["s.nii.gz"]


def test_frames_are_read_as_nibabel_reads_them(tmp_path):
    for number, number_type in enumerate(("<i2", ">f8", "<u2")):
        image = nib.Nifti1Image(np.round(picture((9, 8, 7, 3))).astype(number_type), AFFINE)
        image.header.set_slope_inter(0.37, 5)
        nib.save(image, tmp_path / f"{number}.nii.gz")
        wanted = nib.load(tmp_path / f"{number}.nii.gz").get_fdata().astype(np.float32)
        frames = [frame.copy() for frame in iter_frames_float32(open_image(tmp_path / f"{number}.nii.gz"))]
        np.testing.assert_array_equal(np.stack(frames, axis=-1), wanted)


MEMORY = """
import resource, sys
from pathlib import Path
from evenblur import command
from evenblur.images.harmonise import harmonise_scan
scan = Path(sys.argv[1])
before = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
harmonise_scan(scan, in_plane_mm=6.0, axial_mm=5.0, out=scan.with_name("h.nii.gz"), record=scan.with_name("h.json"))
print((resource.getrusage(resource.RUSAGE_SELF).ru_maxrss - before) * 1024)
"""


@pytest.mark.skipif(not sys.platform.startswith("linux"), reason="counts resident memory in Linux's unit")
@pytest.mark.parametrize("with_nan", [False, True])
def test_forty_frames_take_no_more_memory_than_four(tmp_path, with_nan):
    shape = (128, 128, 96)
    frame_bytes = 4 * int(np.prod(shape))
    values = np.zeros((*shape, 40), np.int16 if not with_nan else np.float32)
    values[40:80, 40:80, 20:70] = 1000
    if with_nan:
        values[:10] = np.nan
    nib.save(nib.Nifti1Image(values, np.diag([2.0, 2, 2, 1])), tmp_path / "s.nii.gz")
    done = subprocess.run(
        [sys.executable, "-c", MEMORY, str(tmp_path / "s.nii.gz")],
        env={"PYTHONPATH": str(SCRIPTS), "PATH": ""},
        capture_output=True,
        text=True,
        check=True,
    )
    assert int(done.stdout) <= 4 * frame_bytes
