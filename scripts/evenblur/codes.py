"""Every reason to hold a scan and every flag, with what to do about it: the one list.

A hold keeps a scan out of the harmonised data set; what would make the pooled value wrong holds. A flag is what a
reader should know; it does not hold. The hold reasons are agreed names that other programs look for, so a new fault
finds its place under one of them: a geometry that contradicts itself cannot be read, a value that its number type cut
off is none. Images in different units are flagged: each is right in the unit that its record states.
"""

from dataclasses import dataclass


@dataclass(frozen=True)
class Code:
    """A code, what it means, what to do about it, and who acts (site, physicist, data manager)."""

    code: str
    meaning: str
    mend: str
    who: str


def _listed(*codes: Code) -> dict[str, Code]:
    return {code.code: code for code in codes}


HOLDS = _listed(
    Code("image_missing", "the image file is not there", "send the file, or correct its path in the table", "site"),
    Code(
        "image_unreadable",
        "the image file cannot be read, or its header gives no geometry or two that contradict each other",
        "send the file again from the archive, as the scanner exported it",
        "site",
    ),
    Code("image_zero", "every voxel of the image has the value zero", "export the image again", "site"),
    Code(
        "image_not_finite",
        "the image holds infinite values, values cut off at the limit of its number type, or no value at all",
        "export the image again with its full range and without masking",
        "site",
    ),
    Code("not_a_volume", "the image is neither 3-D nor 4-D with time last", "export the reconstructed volume", "site"),
    Code("too_large", "the image claims more than 2 GiB a frame", "check its header, or crop the image", "site"),
    Code(
        "duplicate_image",
        "the same picture stands under an earlier row of the table",
        "say which subject the image belongs to and send the other one, or set `use: no` on the wrong row",
        "site",
    ),
    Code(
        "already_harmonised",
        "the image has been smoothed for a pooled study already, by its record, its header or its voxels",
        "send the image as it was reconstructed",
        "site",
    ),
    Code(
        "no_phantom_session",
        "no phantom session of the setup speaks for the scan's date",
        "send a phantom scan made with this setup, or correct a date",
        "site",
    ),
    Code(
        "phantom_expired",
        "the latest phantom session is too old for the scan",
        "send a newer phantom scan, or let the physicist decide on `valid_until`",
        "site",
    ),
    Code(
        "setup_changed",
        "the scanner was serviced or upgraded between the phantom session and the scan",
        "send a phantom scan made after the change",
        "site",
    ),
    Code(
        "unmeasured",
        "the width of the period is known in neither measurement nor declaration",
        "send a phantom scan that shows the missing direction, or declare the width with its source",
        "physicist",
    ),
    Code(
        "coarser_than_target",
        "the scanner resolves less than the target, and smoothing cannot be undone",
        "choose a wider target, or leave the setup out",
        "physicist",
    ),
    Code(
        "oblique_grid",
        "the voxel grid is tilted against the bed by more than 2 degrees while the two kernel widths differ",
        "send the image on the scanner's own grid",
        "site",
    ),
    Code(
        "too_few_slices",
        "the image has fewer slices than the axial kernel is wide",
        "send the whole volume",
        "site",
    ),
    Code(
        "under_sampled",
        "fewer than one voxel lies across the measured width",
        "reconstruct on smaller voxels",
        "site",
    ),
    Code(
        "reconstruction_mismatch",
        "the scan was not reconstructed as the phantom was, by voxel size, header or sidecar",
        "reconstruct both alike and send them again",
        "site",
    ),
    Code(
        "excluded_by_decision",
        "taken out of use by a decision that the table records",
        "nothing: the reason stands in the table",
        "data manager",
    ),
)

FLAGS = _listed(
    # Images
    Code(
        "nan_voxels", "the image holds voxels without a value", "see that the mask is meant; totals change", "physicist"
    ),
    Code(
        "negative_voxels",
        "the image holds values far below zero",
        "ask how it was reconstructed and scaled",
        "physicist",
    ),
    Code(
        "saturated",
        "many voxels share the largest value: the image may be cut off at the top",
        "export the image with its full range",
        "site",
    ),
    Code(
        "constant_image",
        "every voxel of the image has one and the same value",
        "look at the image, and export it again",
        "site",
    ),
    Code(
        "empty_frames",
        "some time frames hold nothing but zero",
        "see that frames before the injection are meant, or send them again",
        "site",
    ),
    Code(
        "field_short",
        "the object goes on beyond the field of view",
        "treat values near the edge with care: what lies beyond is assumed to mirror what is seen",
        "physicist",
    ),
    Code(
        "forms_differ",
        "the two geometries in the header (qform and sform) differ a little",
        "nothing for the widths; registration should know which one it takes",
        "data manager",
    ),
    Code(
        "orientation_unstated",
        "the header does not say where the array axes point; the third was taken to run along the bed",
        "send the image in a format that says so, as NIfTI with a qform",
        "site",
    ),
    Code(
        "units_unstated",
        "neither header nor sidecar states the unit of the values",
        "send sidecars that state it (`Units`)",
        "site",
    ),
    Code(
        "units_differ",
        "the values are in another unit than in most of the study's scans",
        "bring the values to one unit before pooling them; the harmonised image keeps its own",
        "data manager",
    ),
    Code(
        "patient_fields",
        "the image's headers tell who the patient is; nothing of it is copied",
        "send the image without these fields, and see what your rules ask of the copies that were sent",
        "site",
    ),
    Code(
        "oblique_grid_used",
        "the voxel grid is tilted against the bed; both kernel widths agree, so it was used",
        "nothing, or send the scanner's own grid",
        "physicist",
    ),
    Code(
        "activity_at_axial_end",
        "part of the activity lies within one target width of an axial end of the field",
        "treat values near the end with care: what lies beyond is assumed to mirror what is seen",
        "physicist",
    ),
    Code(
        "voxel_size_differs",
        "phantom and scan have different voxel sizes, and the study lets that pass",
        "ask whether they were reconstructed alike",
        "site",
    ),
    Code(
        "reconstruction_differs",
        "scan and phantom were not reconstructed alike, by header or sidecar, and the study lets that pass",
        "ask the site; the width speaks for the phantom's reconstruction",
        "site",
    ),
    Code(
        "reconstruction_unverified",
        "header and sidecar do not state all that would show that scan and phantom were reconstructed alike",
        "send sidecars that state method, iterations and subsets, filter and scanner model of both",
        "site",
    ),
    Code(
        "matrix_differs",
        "phantom and scan have the same voxel size on matrices of different size",
        "nothing if one of them was cropped",
        "physicist",
    ),
    Code(
        "validity_extended",
        "the phantom session is older than the study's `valid_days` and speaks by decision",
        "nothing: the decision stands in the table",
        "physicist",
    ),
    Code(
        "duplicate_phantom",
        "the same picture stands under two phantoms",
        "say which scan the image belongs to and send the other one",
        "site",
    ),
    Code(
        "stray_image",
        "a file lies among the harmonised images that no accepted scan stands for",
        "move it away, or find out why its scan is held",
        "data manager",
    ),
    Code(
        "radionuclide_differs",
        "phantom and scan used different radionuclides, whose positron ranges differ",
        "judge whether the width carries over; it is never corrected",
        "physicist",
    ),
    Code(
        "history_altered",
        "history.tsv is not what the program wrote: lines were changed, added or taken out by another hand",
        "find out who changed it and why, and put the kept copy back if there is one",
        "data manager",
    ),
    Code(
        "mixed_versions",
        "results of different program versions stand side by side",
        "delete results/ and run again if all must come from one version",
        "data manager",
    ),
    # Measurements
    Code(
        "phantom_unusable",
        "no width could be measured from the phantom image",
        "look at the image and at the kind and details in the table",
        "physicist",
    ),
    Code(
        "under_sampled_width",
        "fewer than 1.5 voxels lie across the measured width",
        "reconstruct the phantom on smaller voxels, as the scans",
        "site",
    ),
    Code(
        "ends_not_seen",
        "no end of the cylinder lies well inside the field",
        "scan the phantom with an end inside the field if the axial width matters",
        "site",
    ),
    Code(
        "axial_from_tilt",
        "the axial width follows from the cylinder's tilt alone",
        "look at its standard error; an end inside the field tells more",
        "physicist",
    ),
    Code(
        "axial_uncertain",
        "the tilt tells the axial width to no better than 0.5 mm, so none is given",
        "scan the phantom with an end inside the field, or more tilted",
        "site",
    ),
    Code(
        "too_few_blocks",
        "too few independent parts of the image for a standard error",
        "send a phantom scan that shows more of the object",
        "site",
    ),
    Code(
        "object_cut",
        "part of the object lies outside the field or too near its edge",
        "scan the phantom nearer the middle of the field",
        "site",
    ),
    Code(
        "other_object",
        "a further object lies beside the phantom",
        "take it out of the field, or mask it",
        "site",
    ),
    Code("radius_differs", "the fitted radius is not the given one", "correct the table or the voxel size", "site"),
    Code("length_differs", "the fitted length is not the given one", "correct the table or the voxel size", "site"),
    Code(
        "tilt_large",
        "the cylinder is tilted by more than 20 degrees",
        "scan it straighter",
        "site",
    ),
    Code(
        "edge_overshoot",
        "the image overshoots at edges, as reconstructions that model the point spread do",
        "judge whether one Gaussian width describes this reconstruction",
        "physicist",
    ),
    Code(
        "tail_heavy",
        "the blur has longer tails than a Gaussian",
        "judge whether one Gaussian width describes this setup",
        "physicist",
    ),
    Code(
        "not_gaussian",
        "the shape of the blur departs from a Gaussian",
        "judge whether one Gaussian width describes this setup",
        "physicist",
    ),
    Code(
        "residuals_structured",
        "the image departs from the fit in a pattern, not as noise does",
        "look at the profile: another object, or another blur than assumed",
        "physicist",
    ),
    Code(
        "width_varies",
        "the width changes across the phantom",
        "say for which part of the field the width is to hold",
        "physicist",
    ),
    Code(
        "axial_width_varies",
        "the two ends give different axial widths",
        "say for which part of the field the width is to hold",
        "physicist",
    ),
    Code(
        "in_plane_not_round",
        "the two in-plane directions differ in width by more than 10 %",
        "judge whether one in-plane width describes this setup",
        "physicist",
    ),
    Code(
        "halves_disagree",
        "two halves of the data give different widths, beyond their errors",
        "look for motion, a second object or a width that varies",
        "physicist",
    ),
    Code(
        "source_large",
        "the source is so large against the width that its size decides the result",
        "measure with a smaller source, or check its diameter in the table",
        "site",
    ),
    Code(
        "sphere_not_found",
        "a sphere of the list was not found in the image",
        "correct the diameters in the table, or look for an unfilled sphere",
        "site",
    ),
    Code(
        "sphere_too_small",
        "a sphere is too small for this resolution to tell anything",
        "nothing: it was left out",
        "physicist",
    ),
    Code(
        "sphere_differs",
        "a sphere departs from what its diameter and the common widths give",
        "correct the diameters in the table, or look for an air bubble",
        "site",
    ),
    Code(
        "contrast_differs",
        "the fitted ratio of hot to background is not the given one",
        "check the filling and the table",
        "site",
    ),
    Code(
        "reference_mismatch",
        "the image holds structure that the blurred reference does not explain",
        "check that the reference describes this phantom and this filling",
        "physicist",
    ),
    Code(
        "mirror_ambiguous",
        "the reference fits about as well when it is mirrored",
        "nothing for the widths; orientation cannot be told from this phantom",
        "physicist",
    ),
    Code(
        "flipped_axes",
        "the image fits the reference only with an axis flipped: its header is likely wrong",
        "ask the site how it exports, for its scans may be flipped too",
        "site",
    ),
    Code(
        "moved_far",
        "the phantom lies far from where the reference expects it",
        "nothing, unless the match looks wrong",
        "physicist",
    ),
    Code(
        "fit_not_settled",
        "the fit did not settle on one answer",
        "look at the image and at the kind and details in the table",
        "physicist",
    ),
    # Plan
    Code(
        "kinds_disagree",
        "another kind of phantom gives a width more than 3 combined standard errors away",
        "find out which of the two describes the scans",
        "physicist",
    ),
    Code(
        "width_drifts",
        "the width lies beyond the control limits of the setup's earlier phantom sessions",
        "look for an unrecorded service or upgrade and enter its day under `changed`, or scan the phantom again",
        "site",
    ),
    Code(
        "source_without_background",
        "a bare point or line source speaks for an iterative reconstruction, which resolves it better than tissue",
        "send a phantom with a warm background or a filled cylinder",
        "site",
    ),
    Code(
        "declared_width",
        "the width is declared, not measured",
        "send a phantom scan",
        "site",
    ),
    Code(
        "no_statistical_error",
        "the measurement gave no standard error; the study's repeatability stands alone",
        "send a phantom scan with more data",
        "site",
    ),
    Code(
        "kernel_not_matched",
        "no kernel brings the period's own phantom to the target; the one by quadrature stands",
        "look at the profile: the blur may be far from a Gaussian",
        "physicist",
    ),
    Code(
        "phantom_missing",
        "a phantom of the session has no image that can be used",
        "send the image, or set `use: no` with a reason",
        "site",
    ),
)


def meaning(code: str) -> str:
    """A code's meaning in words; the code itself where the list does not know it."""
    known = HOLDS.get(code) or FLAGS.get(code)
    return known.meaning if known else code.replace("_", " ")
