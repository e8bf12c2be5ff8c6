"""The demonstration study: its images show what the generator says, and its tables say what the generator knows."""

import csv
import gzip
import subprocess
import sys
from datetime import date, timedelta
from itertools import pairwise
from math import exp, log, sqrt
from pathlib import Path

import nibabel as nib
import numpy as np
import pytest
import yaml
from scipy.optimize import brentq, least_squares
from scipy.special import ndtr

import make_demonstration as step
from evenblur.demonstration import make, scenario
from evenblur.demonstration.blur import blur_weights, sample_blurred
from evenblur.demonstration.head import Pose, draw_head, tissue_shares
from evenblur.demonstration.noise import add_noise, correlated_noise
from evenblur.demonstration.phantoms import cylinder_image, disc_profile, point_source_image
from evenblur.study.rows import SCALE_DETAILS

ROOT = Path(__file__).parents[2]
FWHM_PER_SIGMA = 2 * sqrt(2 * log(2))


def table(name: str) -> list[dict[str, str]]:
    with (ROOT / "config" / name).open(encoding="utf-8", newline="") as stream:
        return list(csv.DictReader(stream, delimiter="\t", quoting=csv.QUOTE_NONE))


def phantom(label: str) -> scenario.PhantomImage:
    return next(image for image in scenario.PHANTOM_IMAGES if image.phantom == label)


# --- the blur ---------------------------------------------------------------------------------------------------------


def test_blur_weights_are_integrals_of_the_gaussian_over_each_cell() -> None:
    cells = np.arange(-12.0, 12.1, 2.0)
    sigma = 7.0 / FWHM_PER_SIGMA
    fine = np.linspace(-1, 1, 2001)
    density = np.exp(-0.5 * ((cells[:, None] + fine - 0.7) / sigma) ** 2) / (sigma * sqrt(2 * np.pi))
    slow = np.trapezoid(density, fine, axis=1)
    # The trapezoid's own error at a step of 0.001 mm is below 1e-7.
    assert blur_weights(np.array([0.7]), cells, fwhm_mm=7.0)[0] == pytest.approx(slow, abs=1e-7)


def test_blurred_slab_has_the_erf_edge_in_each_direction() -> None:
    axis = np.arange(-40.0, 40.1, 2.0)
    samples = np.array([-4.3, -1.0, 0.4, 2.9, 7.7])
    middle = np.zeros(1)
    for direction, fwhm_mm in enumerate((6.0, 6.0, 8.0)):
        slab = np.zeros((41, 41, 41))
        slab[(slice(None),) * direction + (slice(20, None),)] = 1.0
        places = [middle, middle, middle]
        places[direction] = samples
        values = sample_blurred(
            slab,
            cell_axes_mm=(axis, axis, axis),
            sample_axes_mm=(places[0], places[1], places[2]),
            in_plane_mm=6.0,
            axial_mm=8.0,
        ).ravel()
        # The slab's edge is the lower face of cell 20, at -1 mm; the far ends are over ten sigmas away.
        assert values == pytest.approx(ndtr((samples + 1.0) * FWHM_PER_SIGMA / fwhm_mm), abs=1e-9)


def test_disc_profile_equals_the_disc_integrated_chord_by_chord() -> None:
    radius, sigma = 40.0, 2.5
    distance, value = disc_profile(radius, sigma_mm=sigma)
    chords = np.linspace(-radius, radius, 200_001)
    half = np.sqrt(radius**2 - chords**2)
    for r in (24.0, 36.0, 39.0, 40.0, 41.5, 46.0):
        across = np.exp(-0.5 * ((chords - r) / sigma) ** 2) / (sigma * sqrt(2 * np.pi))
        slow = np.trapezoid(across * (2 * ndtr(half / sigma) - 1), chords)
        # The table's linear interpolation errs by step² / 8 times the curvature: under 1e-5.
        assert np.interp(r, distance, value) == pytest.approx(slow, abs=1e-5)


# --- phantoms ---------------------------------------------------------------------------------------------------------


def voxelised_cylinder(
    axes: tuple[np.ndarray, np.ndarray, np.ndarray], *, radius: float, length: float, tilt: float, lean: float
) -> np.ndarray:
    """Share of each 0.4 mm cell inside a cylinder about the origin: 3 x 3 lines a cell, each cut exactly along z."""
    lines = [(axis[:, None] + 0.4 * (np.arange(3) - 1) / 3).ravel() for axis in axes[:2]]
    x, y = np.meshgrid(*lines, indexing="ij")
    dx, dy, dz = np.sin(tilt) * np.cos(lean), np.sin(tilt) * np.sin(lean), np.cos(tilt)
    b = dx * x + dy * y
    # |p|² - (p.d)² < R² is a quadratic in z; |p.d| < L / 2 is linear.
    a2, root = 1 - dz**2, (b * dz) ** 2 - (1 - dz**2) * (x**2 + y**2 - b**2 - radius**2)
    reach = np.sqrt(np.clip(root, 0, None))
    low = np.maximum((b * dz - reach) / a2, (-length / 2 - b) / dz)
    high = np.minimum((b * dz + reach) / a2, (length / 2 - b) / dz)
    high = np.where(root > 0, high, low)
    edges = axes[2][:, None, None]
    share = np.clip((np.minimum(high, edges + 0.2) - np.maximum(low, edges - 0.2)) / 0.4, 0, 1)
    return share.reshape(len(axes[2]), len(axes[0]), 3, len(axes[1]), 3).mean(axis=(2, 4)).transpose(1, 2, 0)


@pytest.mark.parametrize(("in_plane_mm", "axial_mm"), [(5.0, 7.0), (7.0, 5.5)])
def test_tilted_cylinder_agrees_with_a_voxelised_one_best_at_the_true_widths(
    in_plane_mm: float, axial_mm: float
) -> None:
    cells = (np.arange(-22.0, 22.1, 0.4), np.arange(-22.0, 22.1, 0.4), np.arange(-16.0, 16.1, 0.4))
    samples = (np.arange(-31.0, 32.0, 3.1), np.arange(-31.0, 32.0, 2.9), np.arange(-25.0, 26.0, 2.7))
    object_ = voxelised_cylinder(cells, radius=20.0, length=26.0, tilt=np.radians(4.0), lean=np.radians(30.0))
    slow = sample_blurred(
        object_, cell_axes_mm=cells, sample_axes_mm=samples, in_plane_mm=in_plane_mm, axial_mm=axial_mm
    )

    def error(in_plane: float, axial: float) -> np.ndarray:
        closed = cylinder_image(
            sample_axes_mm=samples,
            radius_mm=20.0,
            length_mm=26.0,
            centre_mm=(0.0, 0.0, 0.0),
            tilt_deg=4.0,
            lean_deg=30.0,
            in_plane_mm=in_plane,
            axial_mm=axial,
        )
        return (closed - slow).ravel()

    # An edge within a cell becomes two steps: up to 0.04 mm² more variance, under 0.5 % of sigma.
    assert np.abs(error(in_plane_mm, axial_mm)).max() < 0.0015
    fitted = least_squares(lambda w: error(*w), (in_plane_mm + 0.3, axial_mm - 0.3), diff_step=1e-3).x
    # On average over the edges' places that is 0.4² / 6 mm² of variance: 0.015 mm of the narrowest width.
    assert fitted == pytest.approx([in_plane_mm, axial_mm], abs=0.02)


def test_straight_cylinder_shows_the_true_widths_to_an_independent_fit() -> None:
    image = phantom("quay-2-cylinder")
    in_plane_mm, axial_mm = scenario.true_widths()["quay-2", "q2-winter"]
    clean = make.phantom_volume(image, noisy=False) / 24000.0
    x, y, z = make.sample_axes(scenario.GEOMETRIES["quay-2"])
    cylinder = image.phantom_object
    assert isinstance(cylinder, scenario.Cylinder)
    xc, _, zc = cylinder.centre_mm

    column = clean[len(x) // 2, len(y) // 2]

    def ends(sigma: float) -> np.ndarray:
        return ndtr((z - zc + cylinder.length_mm / 2) / sigma) - ndtr((z - zc - cylinder.length_mm / 2) / sigma)

    axial = least_squares(lambda s: ends(s[0]) - column, [3.0], xtol=1e-12).x[0] * FWHM_PER_SIGMA
    assert axial == pytest.approx(axial_mm, abs=2e-3)  # closed form on both sides; the shifted copies' own error

    # Summed along y the disc is a half-circle of chords, blurred in x alone.
    chords = clean[:, :, len(z) // 2].sum(axis=1) * (y[1] - y[0])
    t = np.linspace(-1, 1, 4001)[1:-1] * np.pi / 2
    place, weight = cylinder.radius_mm * np.sin(t), 2 * (cylinder.radius_mm * np.cos(t)) ** 2 * (t[1] - t[0])

    def half_circle(sigma: float) -> np.ndarray:
        kernel = np.exp(-0.5 * ((x[:, None] - xc - place) / sigma) ** 2) / (sigma * sqrt(2 * np.pi))
        return kernel @ weight

    in_plane = least_squares(lambda s: half_circle(s[0]) - chords, [3.0], xtol=1e-12).x[0] * FWHM_PER_SIGMA
    assert in_plane == pytest.approx(in_plane_mm, abs=0.01)  # summing 3 mm rows stands for the integral to 1e-4


def test_point_sources_show_the_true_widths_in_their_logarithm() -> None:
    image = phantom("fern-1-points")
    clean = make.phantom_volume(image, noisy=False)
    geometry = scenario.GEOMETRIES["fern-1"]
    axes = make.sample_axes(geometry)
    points = image.phantom_object
    assert isinstance(points, scenario.PointSources)
    truth = scenario.true_widths()["fern-1", "f1-spring"]
    for centre in points.centres_mm:
        nearest = [int(np.argmin(np.abs(axis - c))) for axis, c in zip(axes, centre, strict=True)]
        for direction, fwhm_mm in enumerate((truth[0], truth[0], truth[1])):
            index: list[int | slice] = list(nearest)
            index[direction] = slice(nearest[direction] - 1, nearest[direction] + 2)
            before, at, after = np.log(clean[tuple(index)])
            step_mm = axes[direction][1] - axes[direction][0]
            measured = FWHM_PER_SIGMA * step_mm / sqrt(2 * at - before - after)
            # A 1 mm sphere adds d² / 20 of variance; neighbours are over seven widths away.
            assert measured == pytest.approx(sqrt(fwhm_mm**2 + 8 * log(2) / 20), abs=1e-6)


def test_sphere_as_gaussian_keeps_the_activity_and_the_half_width() -> None:
    fwhm_mm, diameter_mm = 5.3, 1.0
    sigma = fwhm_mm / FWHM_PER_SIGMA
    # The sphere's own convolution, ring by ring: slices of area pi (R² - u²) along the axis, cut off-axis by radius.
    u = np.linspace(-0.5, 0.5, 401)
    rho = np.linspace(0.0, 0.5, 401)

    def blurred(x: float) -> float:
        reach = np.sqrt(np.clip(0.25 - u**2, 0, None))[:, None]
        ring = np.where(rho <= reach, 2 * np.pi * rho * np.exp(-0.5 * (rho / sigma) ** 2), 0.0)
        return float(np.trapezoid(np.trapezoid(ring, rho, axis=1) * np.exp(-0.5 * ((x - u) / sigma) ** 2), u))

    half = brentq(lambda x: blurred(x) - blurred(0.0) / 2, 1.0, 5.0)
    model = point_source_image(
        sample_axes_mm=(np.array([0.0, half]), np.zeros(1), np.zeros(1)),
        centres_mm=((0.0, 0.0, 0.0),),
        diameter_mm=diameter_mm,
        in_plane_mm=fwhm_mm,
        axial_mm=fwhm_mm,
    ).ravel()
    # The ring sum is good to 1e-3 of the sphere's small share of the width; the docstring promises 0.001 mm.
    assert model[1] / model[0] == pytest.approx(0.5, abs=2e-4)
    assert model[0] == pytest.approx(blurred(0.0) / (np.pi / 6), rel=2e-3)


# --- noise ------------------------------------------------------------------------------------------------------------


def test_noise_has_unit_deviation_and_the_correlation_of_its_filter() -> None:
    noise = correlated_noise(np.random.default_rng(5), (64, 60, 56), voxel_mm=(3.0, 3.0, 3.5), fwhm_mm=6.0)
    sigma = 6.0 / FWHM_PER_SIGMA
    # About 20,000 independent values: the deviation's error is 0.5 %, a correlation's 0.7 %; four errors are allowed.
    assert float(noise.std()) == pytest.approx(1.0, abs=0.03)
    for axis, size in enumerate((3.0, 3.0, 3.5)):
        neighbour = float(np.mean(noise * np.roll(noise, 1, axis=axis)))
        # A Gaussian filter's autocorrelation is the Gaussian of twice the variance.
        assert neighbour == pytest.approx(exp(-(size**2) / (4 * sigma**2)), abs=0.03)


def noise_on(level: float, *, positive: bool) -> np.ndarray:
    return (
        add_noise(
            np.full((40, 40, 40), level),
            np.random.default_rng(8),
            voxel_mm=(3.0, 3.0, 3.0),
            fwhm_mm=5.0,
            share=0.1,
            full=100.0,
            positive=positive,
        )
        - level
    )


def test_noise_has_the_asked_share_at_full_activity_and_grows_with_it() -> None:
    for positive in (True, False):
        # 64,000 voxels, about 10,000 of them independent: four errors of 0.7 %.
        assert float(noise_on(100.0, positive=positive).std()) == pytest.approx(10.0, rel=0.03)
        # The same random numbers: well above full activity the variance grows in proportion to it.
        ratio = noise_on(40_000.0, positive=positive).std() / noise_on(10_000.0, positive=positive).std()
        assert float(ratio) == pytest.approx(2.0, rel=0.002)  # what knee and air leave at a hundred times full


def test_iterative_noise_stays_above_zero_and_back_projection_s_does_not() -> None:
    for level in (0.0, 0.5, 5.0, 50.0):
        # At a tenth of noise the deviation near the air is 0.28 of the activity: zero lies 3.6 deviations away.
        assert np.mean(level + noise_on(level, positive=True) < 0) < 1e-3
    assert float(noise_on(0.0, positive=False).min()) < 0.0


# --- heads ------------------------------------------------------------------------------------------------------------

AXES = (np.arange(-90.0, 90.1, 3.0), np.arange(-111.0, 111.1, 3.0), np.arange(-81.0, 90.1, 3.0))


def shares_of(seed: int) -> dict[str, np.ndarray]:
    return tissue_shares(draw_head(np.random.default_rng(seed)), pose=Pose(), axes_mm=AXES)


@pytest.fixture(scope="module")
def shares() -> dict[str, np.ndarray]:
    return shares_of(3)


def test_tissue_shares_are_shares(shares: dict[str, np.ndarray]) -> None:
    total = sum(shares.values())
    assert min(float(share.min()) for share in shares.values()) >= -1e-6  # single precision
    assert float(total.max()) <= 1 + 1e-5
    assert float(total[0].max()) == 0.0, "air beside the head"


def test_head_has_a_brain_of_a_person_s_size_with_more_cortex_than_nuclei(shares: dict[str, np.ndarray]) -> None:
    ml = {name: float(share.sum()) * 27 / 1000 for name, share in shares.items()}
    # Adult brains: about 1000 to 1600 mL, grey and white in rough balance.
    assert 1000 < ml["grey"] + ml["white"] + ml["deep"] + ml["cerebellum"] + ml["stem"] < 1700
    assert 0.6 < ml["grey"] / ml["white"] < 1.8
    assert ml["deep"] < 0.1 * ml["grey"]


def test_cortex_is_a_folded_ribbon_over_white_matter(shares: dict[str, np.ndarray]) -> None:
    x, y, z = np.meshgrid(*AXES, indexing="ij")
    radius = np.sqrt((x / 66) ** 2 + ((y + 2) / 84) ** 2 + ((z - 2) / 64) ** 2)
    upper = z > 15
    outer, inner = upper & (radius > 0.84) & (radius < 0.97), upper & (radius < 0.55) & (np.abs(x) > 12)
    assert shares["grey"][outer].mean() > 2 * shares["grey"][inner].mean()
    assert shares["white"][inner].mean() > 2 * shares["white"][outer].mean()
    # Folds: on one thin shell under the surface grey and white take turns.
    shell = shares["grey"][upper & (radius > 0.72) & (radius < 0.8)]
    assert shell.std() > 0.25


def test_head_is_nearly_but_not_exactly_symmetric(shares: dict[str, np.ndarray]) -> None:
    both = shares["grey"] + shares["deep"]
    likeness = np.corrcoef(both.ravel(), both[::-1].ravel())[0, 1]
    assert 0.6 < likeness < 0.99


def test_subjects_differ_and_one_subject_stays_the_same(shares: dict[str, np.ndarray]) -> None:
    assert np.array_equal(shares_of(3)["grey"], shares["grey"])
    assert np.corrcoef(shares_of(4)["grey"].ravel(), shares["grey"].ravel())[0, 1] < 0.8


def test_scan_shows_grey_over_white_and_hardly_anything_outside() -> None:
    scan = next(image for image in scenario.SCAN_IMAGES if image.subject == "q02")
    frames = make.scan_frames(scan, noisy=False)[..., 0]
    edges = np.concatenate([frames[:3].ravel(), frames[-3:].ravel(), frames[:, :3].ravel(), frames[:, -3:].ravel()])
    assert frames.min() >= 0
    assert edges.max() < 1e-3 * frames.max()
    brain = frames[frames > 0.18 * frames.max()]
    # Grey over white is near 4 in the object; 5 mm of blur leaves about half of that between the tails.
    assert 1.8 < np.percentile(brain, 95) / np.percentile(brain, 20) < 4.5


def test_dynamic_scan_moves_from_flow_to_binding() -> None:
    scan = next(image for image in scenario.SCAN_IMAGES if image.frames > 1)
    frames = make.scan_frames(scan, noisy=False)
    assert frames.shape[3] == scan.frames
    contrast = [float(frames[..., f].max() / frames[..., f].mean()) for f in range(scan.frames)]
    assert all(later > earlier for earlier, later in pairwise(contrast))


# --- files ------------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("setup", sorted(scenario.GEOMETRIES))
def test_files_keep_world_positions_in_every_array_order(setup: str, tmp_path: Path) -> None:
    geometry = scenario.GEOMETRIES[setup]
    axes = make.sample_axes(geometry)
    frames = np.zeros((*(len(axis) for axis in axes), 1))
    spot = (5, 11, 17)
    frames[(*spot, 0)] = 1000.0
    make.write_image(frames, geometry, tmp_path / "spot.nii.gz")
    image = nib.load(tmp_path / "spot.nii.gz")
    values = np.asarray(image.dataobj)
    assert values.shape == geometry.shape
    assert "".join(nib.aff2axcodes(image.affine)) == geometry.directions
    assert image.header.get_data_dtype() == np.dtype(geometry.stored)
    found = image.affine @ [*np.unravel_index(np.argmax(values), values.shape), 1.0]
    # The header keeps single precision: 1e-4 mm at 150 mm.
    assert found[:3] == pytest.approx([axis[i] for axis, i in zip(axes, spot, strict=True)], abs=1e-4)
    assert values.max() == pytest.approx(1000.0, rel=1e-6)


def test_make_demonstration_writes_the_same_bytes_in_any_folder(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    monkeypatch.setattr(make, "PHANTOM_IMAGES", (phantom("ridge-1-cylinder"), phantom("quay-2-points")))
    monkeypatch.setattr(make, "SCAN_IMAGES", tuple(i for i in scenario.SCAN_IMAGES if i.subject in ("r01", "f11")))
    first = make.make_demonstration(tmp_path / "first")
    step.main(["--study-dir", str(tmp_path / "second one")])
    assert capsys.readouterr().out.startswith("6 images")
    second = sorted((tmp_path / "second one").rglob("*.gz"))
    names = sorted(path.relative_to(tmp_path / "first") for path in first)
    assert [path.relative_to(tmp_path / "second one") for path in second] == names
    for a, b in zip(sorted(first), second, strict=True):
        assert a.read_bytes() == b.read_bytes()
        assert a.read_bytes()[4:8] == b"\0\0\0\0", "no time stamp in the gzip header"
        assert len(gzip.decompress(a.read_bytes())) > 1000
        if "regions" not in a.parts:
            assert len({path.with_name(path.name.replace(".nii.gz", ".json")).read_bytes() for path in (a, b)}) == 1


def test_each_image_has_its_own_noise() -> None:
    first, second = (image for image in scenario.PHANTOM_IMAGES if image.setup == "moor-1")
    generators = [make._generator("phantom", image.phantom) for image in (first, second)]
    assert generators[0].standard_normal() != generators[1].standard_normal()


# --- tables and scenario ----------------------------------------------------------------------------------------------


def test_scenario_is_cheap_to_import() -> None:
    code = (
        "import sys; from evenblur.demonstration.scenario import demonstration_images, true_widths;"
        "demonstration_images(); true_widths(); print('numpy' in sys.modules or 'scipy' in sys.modules)"
    )
    done = subprocess.run(
        [sys.executable, "-c", code], cwd=ROOT / "scripts", capture_output=True, text=True, check=True
    )
    assert done.stdout.strip() == "False"


def test_phantom_table_agrees_with_the_scenario() -> None:
    known = {
        image.phantom: (image.setup, image.phantom_session, image.kind, image.path) for image in scenario.PHANTOM_IMAGES
    }
    rows = table("phantoms.tsv")
    assert {r["phantom"]: (r["setup"], r["phantom_session"], r["kind"], r["image"]) for r in rows} == known
    for row in rows:
        shown = phantom(row["phantom"]).phantom_object
        details = {k: v for k, v in (yaml.safe_load(row["details"]) or {}).items() if k not in SCALE_DETAILS}
        if isinstance(shown, scenario.Cylinder):
            truth = {"radius_mm": shown.radius_mm, "length_mm": shown.length_mm}
        else:
            truth = {"source_diameter_mm": shown.diameter_mm}
        assert details.items() <= truth.items()


def test_scan_table_agrees_with_the_scenario_but_for_the_image_never_sent() -> None:
    known = {image.path: (image.subject, image.session, image.setup, image.tracer) for image in scenario.SCAN_IMAGES}
    rows = {r["image"]: (r["subject"], r["session"], r["setup"], r["tracer"]) for r in table("scans.tsv")}
    del rows[scenario.NEVER_SENT]
    assert rows == known
    assert scenario.NEVER_SENT not in scenario.demonstration_images()
    assert len(set(scenario.demonstration_images())) == 2 * len(known) + len(scenario.PHANTOM_IMAGES)


def test_setup_table_agrees_with_the_scenario() -> None:
    rows = table("setups.tsv")
    assert {row["setup"] for row in rows} == set(scenario.GEOMETRIES)
    assert {setup for setup, _ in scenario.CAMERAS} == set(scenario.GEOMETRIES)
    measured = {(row["setup"], row["phantom_session"]) for row in table("phantoms.tsv")}
    for row in rows:
        if not any(setup == row["setup"] for setup, _ in measured):
            measured.add((row["setup"], scenario.DECLARED))
            assert row["declared_in_plane_mm"]
            assert row["declared_axial_mm"]
    assert measured == set(scenario.CAMERAS)


def day(text: str) -> date:
    return date.fromisoformat(text)


def expected_reason(row: dict[str, str]) -> str | None:
    """Why the rules hold a scan, in the words of the list of codes, from the tables and the true widths alone."""
    if row["use"] == "no":
        return "excluded_by_decision"
    if row["image"] == scenario.NEVER_SENT:
        return "image_missing"
    setup = next(s for s in table("setups.tsv") if s["setup"] == row["setup"])
    phantoms = [p for p in table("phantoms.tsv") if p["setup"] == row["setup"] and p["use"] == "yes"]
    session, when = scenario.DECLARED, None
    if phantoms:
        earlier = sorted(
            (day(p["acquired"]), p["phantom_session"]) for p in phantoms if day(p["acquired"]) <= day(row["acquired"])
        )
        if not earlier:
            return "no_phantom_session"
        when, session = earlier[-1]
        if any(when < day(changed) <= day(row["acquired"]) for changed in setup["changed"].split(";") if changed):
            return "setup_changed"
        if day(row["acquired"]) - when > timedelta(days=365):
            return "phantom_expired"
    return "coarser_than_target" if max(scenario.true_widths()[row["setup"], session]) > 8.3 else None


def test_study_shows_each_kind_of_decision() -> None:
    reasons = [expected_reason(row) for row in table("scans.tsv")]
    assert sorted(filter(None, reasons)) == [
        "coarser_than_target",
        "coarser_than_target",
        "excluded_by_decision",
        "image_missing",
        "no_phantom_session",
        "phantom_expired",
        "setup_changed",
    ]
    assert reasons.count(None) == 18


def test_accepted_scans_are_made_with_the_camera_state_that_speaks_for_them() -> None:
    rows = {row["image"]: row for row in table("scans.tsv")}
    for scan in scenario.SCAN_IMAGES:
        row = rows[scan.path]
        if expected_reason(row) is None and scan.phantom_session != scenario.DECLARED:
            acquired = {
                p["phantom_session"]: day(p["acquired"]) for p in table("phantoms.tsv") if p["setup"] == scan.setup
            }
            latest = max((on, name) for name, on in acquired.items() if on <= day(row["acquired"]))
            assert latest[1] == scan.phantom_session


def test_study_file_has_every_key_with_a_comment_and_is_marked_invented() -> None:
    text = (ROOT / "config/study.yaml").read_text(encoding="utf-8")
    study = yaml.safe_load(text)
    assert study["demo"] is True
    assert (study["target"]["choose"], study["target"]["in_plane_mm"], study["target"]["axial_mm"]) == ("fixed", 8, 8)
    assert "invented" in study["study"]["title"].lower()
    assert "invented" in study["target"]["approval"]["by"]
    lines = text.splitlines()
    for before, line in pairwise(lines):
        if line.strip() and not line.strip().startswith("#") and line.split("#")[0].strip().endswith(":") is False:
            continuation = ":" not in line or before.rstrip().endswith((">-", ">"))
            assert continuation or before.strip().startswith("#"), f"no comment above: {line}"


def test_scans_differ_in_voxels_matrices_and_array_orders() -> None:
    geometries = scenario.GEOMETRIES.values()
    assert len({geometry.voxel_mm for geometry in geometries}) == len(scenario.GEOMETRIES)
    assert len({geometry.shape for geometry in geometries}) == len(scenario.GEOMETRIES)
    assert any(geometry.directions[0] in "SI" for geometry in geometries), "the bed's direction first in one"
    assert {geometry.stored for geometry in geometries} == {"float32", "int16"}
