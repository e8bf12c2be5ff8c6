"""The invented study as data: who scanned what, when, on which grid, and how wide each camera's true response is.

Everything here is invented: sites, scanners, subjects, tracers, dates. The tables in `config/` tell the workflow what
a coordinating centre would know; this module adds what only the generator knows, above all the true widths. A test
holds the two in step. Nothing heavy is imported, so that a workflow file may ask for the list of images.
"""

from dataclasses import dataclass
from typing import Any

SCAN_FOLDER = "results/demonstration/scans"
PHANTOM_FOLDER = "results/demonstration/phantoms"
REGION_FOLDER = "results/demonstration/regions"
DECLARED = "declared"
"""Label of the period of a setup that has declared widths and no phantom."""


@dataclass(frozen=True)
class Geometry:
    """A voxel grid as a site's files have it.

    Attributes
    ----------
    directions
        Where each array axis points: three of the letters R L (right, left), A P (front, back), S I (up, down).
    shape
        Voxels along the array axes.
    voxel_mm
        Voxel size along the array axes, mm.
    stored
        `float32`, or `int16` with a scale factor.
    """

    directions: str
    shape: tuple[int, int, int]
    voxel_mm: tuple[float, float, float]
    stored: str


@dataclass(frozen=True)
class Camera:
    """A setup at one time: its true widths (FWHM, mm) and its noise.

    `noise_fwhm_mm` is the width of the noise's correlation; `iterative` is False for filtered back-projection.
    """

    in_plane_mm: float
    axial_mm: float
    noise_fwhm_mm: float
    iterative: bool = True


@dataclass(frozen=True)
class Cylinder:
    """A filled cylinder: its size (mm), its centre (x, y, z; mm), its tilt and the direction that it leans to (deg)."""

    radius_mm: float
    length_mm: float
    centre_mm: tuple[float, float, float] = (0.0, 0.0, 0.0)
    tilt_deg: float = 0.0
    lean_deg: float = 0.0


@dataclass(frozen=True)
class PointSources:
    """Small spheres of equal activity: their diameter (mm) and centres (x, y, z; mm)."""

    diameter_mm: float
    centres_mm: tuple[tuple[float, float, float], ...]


@dataclass(frozen=True)
class PhantomImage:
    """A phantom image to make. `noise` is the standard deviation of a voxel in full activity, as a share of it."""

    phantom: str
    setup: str
    phantom_session: str
    kind: str
    phantom_object: Cylinder | PointSources
    noise: float

    @property
    def path(self) -> str:
        """Where the image lies in the study folder."""
        return f"{PHANTOM_FOLDER}/{self.phantom}.nii.gz"


@dataclass(frozen=True)
class ScanImage:
    """A subject image to make: the head's seed name, the camera's state at the time, the tracer, frames, noise."""

    subject: str
    session: str
    setup: str
    phantom_session: str
    """The session whose camera state made the image, whether or not the date rules let it speak for the scan."""
    tracer: str
    noise: float = 0.06
    frames: int = 1

    @property
    def path(self) -> str:
        """Where the image lies in the study folder."""
        return f"{SCAN_FOLDER}/{self.setup}_{self.subject}_{self.session}.nii.gz"

    @property
    def regions_path(self) -> str:
        """Where the image of its regions lies."""
        return f"{REGION_FOLDER}/{self.setup}_{self.subject}_{self.session}.nii.gz"


GEOMETRIES = {
    "quay-1": Geometry("LAS", (128, 128, 56), (2.5, 2.5, 3.27), "float32"),
    "quay-2": Geometry("RAS", (100, 100, 64), (3.0, 3.0, 2.8), "int16"),
    "mill-1": Geometry("SPL", (58, 96, 96), (3.1, 2.8, 2.8), "int16"),
    "fern-1": Geometry("RPI", (96, 96, 52), (3.0, 3.0, 3.4), "float32"),
    "fern-2": Geometry("ARS", (92, 84, 55), (3.1, 3.1, 3.2), "int16"),
    "ridge-1": Geometry("LPS", (80, 80, 46), (4.0, 4.0, 3.8), "float32"),
    "dale-1": Geometry("RAS", (96, 96, 58), (3.0, 3.0, 3.0), "float32"),
    "moor-1": Geometry("LPI", (104, 104, 58), (2.6, 2.6, 3.0), "int16"),
}

CAMERAS = {
    ("quay-1", "q1-winter"): Camera(6.1, 5.6, 5.2),
    ("quay-1", "q1-summer"): Camera(5.4, 5.1, 4.8),
    ("quay-2", "q2-winter"): Camera(4.9, 4.7, 4.4),
    ("mill-1", "m1-winter"): Camera(6.8, 6.3, 5.4),
    ("fern-1", "f1-spring"): Camera(5.3, 5.9, 5.0),
    ("fern-2", "f2-spring"): Camera(7.2, 6.6, 5.6, iterative=False),
    ("ridge-1", "r1-winter"): Camera(9.2, 8.7, 6.0, iterative=False),
    ("dale-1", DECLARED): Camera(7.3, 6.7, 5.5),
    ("moor-1", "o1-spring"): Camera(8.14, 8.1, 5.8),
}


@dataclass(frozen=True)
class Reconstruction:
    """What the sidecars of a setup's images state: model, method, iterations and subsets, filter (mm; 0: none)."""

    model: str
    method: str
    parameters: tuple[tuple[str, int], ...]
    filter_mm: float

    def sidecar(self) -> dict[str, Any]:
        """The sidecar's content, by the names of BIDS."""
        return {
            "Units": "Bq/mL",
            "ManufacturersModelName": self.model,
            "ReconMethodName": self.method,
            "ReconMethodParameterLabels": [label for label, _ in self.parameters],
            "ReconMethodParameterUnits": ["none" for _ in self.parameters],
            "ReconMethodParameterValues": [value for _, value in self.parameters],
            "ReconFilterType": "Gaussian" if self.filter_mm else "none",
            "ReconFilterSize": self.filter_mm,
        }


def _ordered_subsets(model: str, iterations: int, subsets: int, filter_mm: float, more: str = "") -> Reconstruction:
    method = f"ordered subsets{more}"
    return Reconstruction(model, method, (("iterations", iterations), ("subsets", subsets)), filter_mm)


# The site mill sends no sidecars: what nobody states is flagged.
RECONSTRUCTIONS = {
    "quay-1": _ordered_subsets("Talvik 3", 4, 16, 5.0),
    "quay-2": _ordered_subsets("Sarn 20", 6, 12, 0.0, " with resolution model"),
    "fern-1": _ordered_subsets("Brask 2", 4, 21, 3.0, " with resolution model"),
    "fern-2": Reconstruction("Veyl Duo", "filtered back-projection", (), 6.0),
    "ridge-1": Reconstruction("Morrow 12", "filtered back-projection", (), 8.0),
    "dale-1": _ordered_subsets("Talvik 1", 4, 16, 6.0),
    "moor-1": _ordered_subsets("Sarn 8", 2, 24, 7.0),
}

# Fifteen sources, 45 mm and more apart: fields of several widths around each stay its own.
_FIFTEEN = tuple(
    (x, y, z)
    for z in (-46.3, 0.9, 45.8)
    for x, y in ((1.2, -0.7), (61.4, 2.1), (-59.8, -3.3), (2.6, 62.2), (-1.9, -60.7))
)
_FIVE = ((0.6, 1.1, -30.2), (52.3, 3.7, 1.4), (-48.9, -2.2, 32.6), (3.1, 55.4, 22.8), (-2.7, -51.6, -18.9))

PHANTOM_IMAGES = (
    PhantomImage(
        "quay-1-cylinder-winter", "quay-1", "q1-winter", "uniform_cylinder",
        Cylinder(98.0, 112.0, (2.4, -3.1, 1.3), 2.0, 40.0), 0.05,
    ),
    PhantomImage(
        "quay-1-cylinder-summer", "quay-1", "q1-summer", "uniform_cylinder",
        Cylinder(98.0, 112.0, (-1.6, 4.2, -2.2), 2.8, 205.0), 0.05,
    ),
    PhantomImage(
        "quay-2-cylinder", "quay-2", "q2-winter", "uniform_cylinder",
        Cylinder(98.0, 112.0, (3.3, 1.8, 0.6)), 0.06,
    ),
    PhantomImage("quay-2-points", "quay-2", "q2-winter", "point_source", PointSources(1.0, _FIVE), 0.03),
    PhantomImage(
        "mill-1-cylinder", "mill-1", "m1-winter", "uniform_cylinder",
        Cylinder(104.0, 106.0, (-2.2, 2.7, 1.9), 3.2, 118.0), 0.05,
    ),
    PhantomImage("fern-1-points", "fern-1", "f1-spring", "point_source", PointSources(1.0, _FIFTEEN), 0.03),
    PhantomImage(
        "fern-2-cylinder", "fern-2", "f2-spring", "uniform_cylinder",
        Cylinder(92.0, 108.0, (1.4, -2.6, -1.1), 2.2, 300.0), 0.05,
    ),
    PhantomImage(
        "ridge-1-cylinder", "ridge-1", "r1-winter", "uniform_cylinder",
        Cylinder(100.0, 104.0, (4.1, 3.6, 2.3), 4.0, 75.0), 0.05,
    ),
    PhantomImage(
        "moor-1-cylinder", "moor-1", "o1-spring", "uniform_cylinder",
        Cylinder(100.0, 110.0, (-3.2, -1.5, 0.8), 2.5, 162.0), 0.05,
    ),
    PhantomImage(
        "moor-1-cylinder-late", "moor-1", "o1-spring", "uniform_cylinder",
        Cylinder(100.0, 110.0, (2.8, -4.4, -1.7), 3.0, 20.0), 0.3,
    ),
)  # fmt: skip

SCAN_IMAGES = (
    ScanImage("q01", "base", "quay-1", "q1-winter", "cortical"),
    ScanImage("trav1", "quay1", "quay-1", "q1-winter", "cortical"),
    ScanImage("q02", "base", "quay-1", "q1-summer", "cortical"),
    ScanImage("q01", "later", "quay-1", "q1-summer", "cortical"),
    ScanImage("q03", "base", "quay-1", "q1-summer", "cortical", noise=0.08),
    ScanImage("q11", "base", "quay-2", "q2-winter", "cortical", noise=0.08),
    ScanImage("trav1", "quay2", "quay-2", "q2-winter", "cortical", noise=0.08),
    ScanImage("q12", "base", "quay-2", "q2-winter", "striatal", noise=0.08),
    ScanImage("m01", "base", "mill-1", "m1-winter", "cortical"),
    ScanImage("m02", "base", "mill-1", "m1-winter", "cortical"),
    ScanImage("trav1", "mill1", "mill-1", "m1-winter", "cortical"),
    ScanImage("m03", "base", "mill-1", "m1-winter", "striatal", noise=0.08),
    ScanImage("f01", "base", "fern-1", "f1-spring", "cortical"),
    ScanImage("f02", "base", "fern-1", "f1-spring", "cortical", noise=0.07),
    ScanImage("f03", "dynamic", "fern-1", "f1-spring", "striatal", noise=0.08, frames=6),
    ScanImage("f11", "base", "fern-2", "f2-spring", "cortical", noise=0.07),
    ScanImage("f12", "base", "fern-2", "f2-spring", "cortical", noise=0.07),
    ScanImage("r01", "base", "ridge-1", "r1-winter", "cortical", noise=0.05),
    ScanImage("r02", "base", "ridge-1", "r1-winter", "striatal", noise=0.05),
    ScanImage("d01", "base", "dale-1", DECLARED, "cortical", noise=0.07),
    ScanImage("d02", "base", "dale-1", DECLARED, "cortical", noise=0.07),
    ScanImage("o01", "base", "moor-1", "o1-spring", "cortical", noise=0.05),
    ScanImage("o02", "base", "moor-1", "o1-spring", "cortical", noise=0.05),
    ScanImage("o03", "base", "moor-1", "o1-spring", "striatal", noise=0.05),
)

NEVER_SENT = f"{SCAN_FOLDER}/dale-1_d03_base.nii.gz"
"""The image that the scans table names and no site ever sent: it is not made."""


def demonstration_images() -> list[str]:
    """Paths of all images that the generator makes, relative to the study folder, phantoms first.

    >>> len(demonstration_images())
    58
    """
    scans = [path for image in SCAN_IMAGES for path in (image.path, image.regions_path)]
    return [image.path for image in PHANTOM_IMAGES] + scans


def demonstration_sidecars() -> dict[str, Reconstruction]:
    """What stands in each sidecar that the generator writes, by its path relative to the study folder.

    >>> demonstration_sidecars()["results/demonstration/scans/moor-1_o01_base.json"].model
    'Sarn 8'
    """
    images: tuple[PhantomImage | ScanImage, ...] = (*PHANTOM_IMAGES, *SCAN_IMAGES)
    return {
        image.path.removesuffix(".nii.gz") + ".json": RECONSTRUCTIONS[image.setup]
        for image in images
        if image.setup in RECONSTRUCTIONS
    }


def true_widths() -> dict[tuple[str, str], tuple[float, float]]:
    """True in-plane and axial width (FWHM, mm) of each period, by setup and phantom session.

    >>> true_widths()["quay-1", "q1-winter"]
    (6.1, 5.6)
    """
    return {period: (camera.in_plane_mm, camera.axial_mm) for period, camera in CAMERAS.items()}
