"""Images made to hurt: each is held with one sentence, in little memory and time, and nothing in it is carried out."""

import json
import os
import subprocess
import sys
from pathlib import Path

import nibabel as nib
import numpy as np
import pytest

from evenblur.errors import InputError
from evenblur.images.containers import TIGHTEST_PACKING, check_packing
from evenblur.images.harmonise import harmonise_scan
from evenblur.images.reading import open_image
from evenblur.intake import take_in_image
from hostile_images import BESIDE, BOMBS, ecat, nifti1, write_gzip

STEP = Path(__file__).resolve().parents[2] / "scripts" / "take_in_image.py"
# What the step takes for a small image, and what the largest text header adds; the bombs claim two gigabytes and more.
MOST_MIB, MOST_S = 256, 60
TOO_LARGE = {name for name in BOMBS if name.startswith(("claims", "packed_frame", "packed_offset", "packed_mgh"))}


# The step as it is called, and at its end the peak of its own memory (kB): `ru_maxrss` would count this process's too.
CALL = """
import runpy, sys
from pathlib import Path
sys.argv[0] = sys.argv.pop(1)
try:
    runpy.run_path(sys.argv[0], run_name="__main__")
finally:
    said = Path("/proc/self/status").read_text()
    Path("peak").write_text(said.split("VmHWM:")[1].split()[0])
"""


def run_step(image: str, folder: Path) -> tuple[int, str, float]:
    """Exit code, standard error and peak memory (MiB) of the intake step."""
    done = subprocess.run(
        [sys.executable, "-c", CALL, str(STEP), f"--image={image}", "--record", "record.json"],
        cwd=folder,
        env={**os.environ, "PYTHONPATH": str(STEP.parent)},
        capture_output=True,
        text=True,
        timeout=MOST_S,
        check=False,
    )
    return done.returncode, done.stderr, int((folder / "peak").read_text()) / 1024


@pytest.mark.skipif(not sys.platform.startswith("linux"), reason="reads /proc")
@pytest.mark.parametrize("name", BOMBS)
def test_an_image_made_to_hurt_is_held_in_little_memory(tmp_path, name):
    image = BOMBS[name](tmp_path).relative_to(tmp_path).as_posix()
    code, text, memory = run_step(image, tmp_path)
    assert (code, "Traceback" in text) == (0, False), text
    record = json.loads((tmp_path / "record.json").read_text())
    assert len(record["holds"]) == 1
    assert "\n" not in record["problems"][0]
    assert "passwd" not in json.dumps(record)
    assert not (tmp_path / "executed").exists()
    assert memory < MOST_MIB
    if name in TOO_LARGE:
        assert record["holds"] == ["too_large"]


@pytest.mark.parametrize("name", BESIDE)
def test_a_sidecar_made_to_hurt_changes_nothing_but_its_fields(tmp_path, name):
    image = BESIDE[name](tmp_path)
    record = take_in_image(image, name="a.nii", item="scan", key="k")
    assert (record["holds"], record["maximum"]) == ([], 511.0)
    written = harmonise_scan(image, in_plane_mm=5, axial_mm=5, out=tmp_path / "h.nii", record=tmp_path / "h.json")
    assert not {"Units", "TracerName", "FrameDuration"} & set(written)
    assert "Evenblur" in json.loads((tmp_path / "h.json").read_text(encoding="utf-8"))


def test_only_pictures_that_pack_beyond_belief_are_too_large():
    frame = 512**3 // 4  # 256 MiB in double precision
    check_packing("a", frame_voxels=frame, claimed_bytes=4 * frame, file_bytes=1000)
    check_packing("a", frame_voxels=8 * frame, claimed_bytes=TIGHTEST_PACKING * 10**7, file_bytes=10**7)
    for voxels, claimed in ((8 * frame, TIGHTEST_PACKING * 10**7 + 1), (10, 1 << 40)):
        with pytest.raises(InputError) as caught:
            check_packing("a", frame_voxels=voxels, claimed_bytes=claimed, file_bytes=10**7)
        assert caught.value.code == "too_large"


def test_bytes_behind_the_voxels_are_no_fault_within_reason(tmp_path):
    image = write_gzip(tmp_path / "a.nii.gz", nifti1((8, 8, 8)) + b"\1" * 512, count=1 << 20)
    assert take_in_image(image, name="a", item="scan", key="k")["holds"] == []


def test_header_extensions_stay_unread(tmp_path):
    image = nib.Nifti1Image(np.ones((4, 4, 4), np.float32), np.eye(4))
    image.header.extensions.append(nib.nifti1.Nifti1Extension("comment", b"planted words"))
    nib.save(image, tmp_path / "a.nii.gz")
    opened = open_image(tmp_path / "a.nii.gz")
    assert list(opened.source.header.extensions) == []
    assert float(opened.frame().sum()) == 64.0


def test_ecat_frames_of_different_sizes_are_no_volume(tmp_path):
    data = ecat()
    data += data[1024:]  # a second frame, and its entry in the list
    data[512:516] = (29).to_bytes(4, "big")
    data[524:528] = (2).to_bytes(4, "big")
    second = (2136 + 511) // 512 + 1
    data = data[:2136].ljust((second - 1) * 512, b"\0") + data[2136:]
    entry = [b"\0\0\0\2", second.to_bytes(4, "big"), (second + 3).to_bytes(4, "big"), b"\0\0\0\1"]
    data[544:560] = b"".join(entry)
    data[(second - 1) * 512 + 4 : (second - 1) * 512 + 6] = b"\0\x08"
    data[354:356] = b"\0\2"
    (tmp_path / "a.v").write_bytes(data)
    record = take_in_image(tmp_path / "a.v", name="a.v", item="scan", key="k")
    assert record["holds"] in (["not_a_volume"], ["image_unreadable"])


def test_a_voxel_size_below_what_records_keep_is_held(tmp_path):
    data = nifti1((8, 8, 8)) + b"\1" * 512
    data[280:284] = np.float32(1e-9).tobytes()
    (tmp_path / "a.nii").write_bytes(data)
    assert take_in_image(tmp_path / "a.nii", name="a", item="scan", key="k")["holds"] != []
