"""Evenblur: bring the images of many centres to one resolution, and prove it.

make_demonstration (demo only)
        |
        v
config/ (study.yaml, tables)     images that the sites sent
        |                                  |
        +---------> take_in_image <--------+----> measure_resolution
        |                 |                               |
        |                 v                               v
        +----> make_plan (with `kernel: matched`: make_draft_plan, match_kernel, make_plan)
                          |
                          +---> price_targets
                          |
          +---------------+----------------+
          v               v                v
     smooth_scan   measure_achieved   describe_dataset
          |               |
          +--> measure_regions, measure_site_effect, make_pictures --+
          |               |                                          v
          +-------> record_history ---> make_audit_tables ---> make_report ---> make_handover

on a cluster: gather_intake and gather_records tie the intake and the smoothing of many scans into one submission

results/intake/      one record an image: can it be used
results/resolution/  the width of each phantom
results/plan.json    target, kernels, accepted and held scans
results/plan.html    what each target would cost (plan.tsv: the same as a table)
results/matching/    with `kernel: matched`: each period's kernel, adjusted on its own phantom
results/harmonised/  the images at the common width, with their records
results/achieved/    each period's phantom at the common width
results/site_effect/ what differs between sites before and after
results/audit/       sites.tsv, scans.tsv, queries.tsv, audit.json, report.html, history.json, sites/ (each site's own)
results/handover/    the bag for the auditor
history.tsv          what changed, when and why: the study's own log, beside results/
"""

from snakemake.utils import min_version

min_version("9.0")


include: "workflow/rules/study.smk"


if SITES:

    include: "workflow/rules/sites.smk"

else:

    include: "workflow/rules/demonstration.smk"
    include: "workflow/rules/intake.smk"
    include: "workflow/rules/resolution.smk"
    include: "workflow/rules/matching.smk"
    include: "workflow/rules/plan.smk"


include: "workflow/rules/smoothing.smk"
include: "workflow/rules/gathering.smk"
include: "workflow/rules/achieved.smk"


rule harmonise:
    default_target: len(SITES) > 0
    input:
        DRAFT,
        gathered_notes,
        files_of_sites,


if not SITES:

    include: "workflow/rules/site_effect.smk"
    include: "workflow/rules/audit.smk"
    include: "workflow/rules/history.smk"
    include: "workflow/rules/handover.smk"

    rule all:
        default_target: True
        input:
            DRAFT,
            rules.price_targets.output,
            PARTS.intake_notes(),
            gathered_notes,
            # Every image and record is made on the way to the report; those that got lost since are named.
            TASKS.lost_intake(),
            lost_files,
            TASKS.dataset_files(),
            LAYOUT.audit("report.html"),
            rules.make_handover.output,
