# Smooth every accepted scan by its period's kernel.


localrules:
    describe_dataset,


def lost_files(wildcards):
    return TASKS.lost_harmonised(current_plan(wildcards))


def gathered_notes(wildcards):
    return PARTS.scan_notes(current_plan(wildcards), SITES)


def scan_image(wildcards):
    # The plan comes first, but is no input: Snakemake would look through all of the plan's own inputs for each scan.
    current_plan(wildcards)
    return ancient(TASKS.image(TASKS.scans[wildcards.entities].image))


def smoothing_settings(wildcards):
    return TASKS.smoothing_settings(wildcards.entities, current_plan(wildcards))


HARMONISED_SCAN = (
    f"{LAYOUT.harmonised}/sub-{{subject}}/ses-{{session}}/{LAYOUT.modality}/"
    f"{{entities}}_desc-harmonised_{LAYOUT.modality}"
)


def smoothing_memory(wildcards, attempt):
    return attempt * DEMANDS.smoothing(wildcards.entities)["mem_mb"]


def smoothing_minutes(wildcards, attempt):
    return attempt * DEMANDS.smoothing(wildcards.entities)["runtime"]


rule smooth_scan:
    input:
        image=scan_image,
        provenance=PROVENANCE,
    output:
        image=f"{HARMONISED_SCAN}.nii.gz",
        record=f"{HARMONISED_SCAN}.json",
    log:
        ".evenblur/logs/smooth_scan/sub-{subject}/ses-{session}/{entities}.log",
    benchmark:
        ".evenblur/benchmarks/smooth_scan/sub-{subject}/ses-{session}/{entities}.tsv"
    group:
        "smoothing"
    threads: 1
    resources:
        mem_mb=smoothing_memory,
        runtime=smoothing_minutes,
    params:
        job=smoothing_settings,
    message:
        "Smooth {wildcards.entities} by {params.job[in_plane_mm]} mm in-plane and {params.job[axial_mm]} mm axial"
    shell:
        "{PY:q} {workflow.basedir:q}/scripts/smooth_scan.py --image={params.job[image]:q}"
        " --in-plane-mm {params.job[in_plane_mm]} --axial-mm {params.job[axial_mm]} --out {output.image:q}"
        " --record {output.record:q} --expect-sha256={params.job[expected]:q} --facts {params.job[facts]:q}"
        " --code-token {params.job[code]} 2>{log:q}"


rule describe_dataset:
    input:
        provenance=PROVENANCE,
    output:
        TASKS.dataset_files(),
    log:
        ".evenblur/logs/describe_dataset.log",
    benchmark:
        ".evenblur/benchmarks/describe_dataset.tsv"
    params:
        job=TASKS.dataset_settings(),
    message:
        "Describe the harmonised data set"
    shell:
        "{PY:q} {workflow.basedir:q}/scripts/describe_dataset.py --study-dir . 2>{log:q}"
