"""Slices before and after smoothing: one scale, the right way up, and bounded in number."""

import base64

import nibabel as nib
import numpy as np
import pytest

from evenblur.audit.scan_pictures import scan_pictures
from evenblur.audit.slices import slice_couple
from evenblur.errors import InputError
from evenblur.picture_pairs import pair_record, phantom_pair
from evenblur.study.pictured import A_SITE, IN_ALL, pictured_scans


def greys(record, word):
    shape = (record["height"], record["width"])
    return np.frombuffer(base64.b64decode(record[word]), dtype=np.uint8).reshape(shape)


def test_both_pictures_share_the_scale_of_the_first():
    before = np.linspace(0.0, 200.0, 400).reshape(20, 20)
    record = pair_record(before, before / 2, pixel_mm=(2.0, 3.0), label="x")
    low, high = record["low"], record["high"]
    for word, image in (("before", before), ("after", before / 2)):
        wanted = np.rint(np.clip(255 * (image - low) / (high - low), 0, 255))
        np.testing.assert_allclose(greys(record, word), wanted, atol=1)  # the scale is kept to six digits
    assert (record["width_mm"], record["height_mm"]) == (40.0, 60.0)
    couple = slice_couple(record, title="t", subtitle="s")
    assert [picture.word for picture in couple.pictures] == ["before", "after"]
    assert couple.aspect == "40 / 60"


def test_nothing_known_is_black_and_an_empty_slice_has_a_picture():
    record = pair_record(np.full((3, 4), np.nan), np.full((3, 4), np.nan), pixel_mm=(1.0, 1.0), label="x", cut=True)
    assert not greys(record, "before").any()
    with pytest.raises(ValueError, match="one shape"):
        pair_record(np.zeros((3, 4)), np.zeros((4, 3)), pixel_mm=(1.0, 1.0), label="x")


def test_surroundings_are_cut_and_large_slices_thinned():
    wide = np.zeros((40, 60))
    wide[10:20, 30:45] = 5.0
    record = pair_record(wide, wide, pixel_mm=(1.0, 1.0), label="x", cut=True)
    assert (record["height"], record["width"]) == (10 + 2 * 4, 15 + 2 * 4)  # four pixels are left about the object
    large = np.ones((200, 300))
    record = pair_record(large, large, pixel_mm=(1.0, 1.0), label="x")
    assert (record["height"], record["width"]) == (50, 75)  # every fourth voxel, 96 a side at most
    assert (record["height_mm"], record["width_mm"]) == (200.0, 300.0)


def test_each_kind_of_phantom_has_its_view():
    volume = np.zeros((12, 10, 8))
    volume[3, 4, 2], volume[8, 6, 5] = 9.0, 5.0
    sources = phantom_pair(volume, volume, voxel_mm=(2, 2, 3), kind="point_source")
    assert sources["label"] == "Largest value along the bed"
    assert sorted(set(greys(sources, "before").ravel())) == [0, round(255 * 5 / 9), 255]  # both, white the larger
    cylinder = np.zeros((12, 10, 8))
    cylinder[2:9, 3:6, 1:7] = 1.0  # its middle is the fifth voxel along y
    found = phantom_pair(cylinder, cylinder, voxel_mm=(2, 2, 3), kind="uniform_cylinder")
    assert found["label"] == "Coronal slice 5 of 10"
    assert phantom_pair(volume, volume, voxel_mm=(2, 2, 3), kind="hot_spheres")["label"] == "Axial slice 3 of 8"


def save(path, volume, affine):
    nib.save(nib.Nifti1Image(volume.astype(np.float32), affine), path)


@pytest.mark.parametrize("codes", ["RAS", "LPS", "ARS", "PLI", "SRA", "IAL"])
def test_scans_are_shown_alike_however_their_axes_run(tmp_path, codes):
    """The world's right at the left of the picture, its front on top: nibabel turns the same object round."""
    volume = np.zeros((30, 24, 7))
    volume[5:25, 4:20, :] = 1.0
    volume[20:24, 15:19, 3] = 8.0  # on the right, in front, in the middle slice
    plain = nib.Nifti1Image(volume.astype(np.float32), np.diag([2.0, 2.5, 3.0, 1.0]))
    turned = plain.as_reoriented(
        nib.orientations.ornt_transform(nib.io_orientation(plain.affine), nib.orientations.axcodes2ornt(codes))
    )
    for name in ("a.nii", "b.nii"):
        nib.save(turned, tmp_path / name)
    record = scan_pictures([("sub-a", "a.nii", "b.nii")], study_dir=tmp_path)["sub-a"]
    rows, columns = np.nonzero(greys(record, "before") == 255)
    height, width = record["height"], record["width"]
    assert rows.max() < height / 2
    assert columns.max() < width / 2
    assert record["label"] == "Axial slice 4 of 7"
    assert (record["width_mm"] / width, record["height_mm"] / height) == (2.0, 2.5)


def test_a_dynamic_scan_shows_its_middle_frame(tmp_path):
    frames = np.ones((6, 6, 4, 5)) * np.arange(1.0, 6.0)
    for name in ("a.nii", "b.nii"):
        save(tmp_path / name, frames, np.eye(4))
    record = scan_pictures([("sub-a", "a.nii", "b.nii")], study_dir=tmp_path)["sub-a"]
    assert record["label"] == "Axial slice 3 of 4, frame 3 of 5"
    assert record["high"] == 3.0


def test_images_on_two_grids_are_refused(tmp_path):
    save(tmp_path / "a.nii", np.ones((6, 6, 4)), np.eye(4))
    save(tmp_path / "b.nii", np.ones((6, 6, 5)), np.eye(4))
    with pytest.raises(InputError, match=r"b\.nii.*another grid"):
        scan_pictures([("sub-a", "a.nii", "b.nii")], study_dir=tmp_path)


def plan_scans(counts):
    """Accepted scans of setups with two periods each: `counts` scans a period, and one held scan a setup."""
    scans = []
    for setup, count in counts.items():
        for session in ("p", "q"):
            scans += [
                {
                    "entities": f"sub-{setup}{session}{n}",
                    "setup": setup,
                    "phantom_session": session,
                    "status": "accepted",
                }
                for n in range(count)
            ]
        scans.append({"entities": f"sub-{setup}held", "setup": setup, "phantom_session": "p", "status": "held"})
    return scans


def test_a_few_scans_of_each_site_and_period_are_shown():
    shown = pictured_scans(plan_scans({"a": 9, "b": 1}), {"a": "quay", "b": "mill"})
    assert shown == ["sub-ap0", "sub-ap1", "sub-aq0", "sub-bp0", "sub-bq0"]  # in the plan's order
    assert len([one for one in shown if one.startswith("sub-a")]) == A_SITE


def test_many_sites_share_the_room_evenly():
    sites = {f"s{n}": f"site{n}" for n in range(45)}
    shown = pictured_scans(plan_scans(dict.fromkeys(sites, 4)), sites)
    assert len(shown) == IN_ALL
    assert all(any(one.startswith(f"sub-{setup}p") for one in shown) for setup in sites)  # nobody is left out
