# Measure the width of every phantom.


def phantom_images(wildcards):
    row = TASKS.phantoms[wildcards.phantom]
    reference = TASKS.image(row.details["reference"]) if "reference" in row.details else []
    return ancient(TASKS.image(row.image) + reference)


def resolution_settings(wildcards):
    return TASKS.resolution_settings(wildcards.phantom)


def resolution_memory(wildcards, attempt):
    return attempt * DEMANDS.resolution(wildcards.phantom)["mem_mb"]


def resolution_minutes(wildcards, attempt):
    return attempt * DEMANDS.resolution(wildcards.phantom)["runtime"]


rule measure_resolution:
    input:
        images=phantom_images,
        provenance=PROVENANCE,
    output:
        record=f"{LAYOUT.results}/resolution/{{phantom}}.json",
    log:
        ".evenblur/logs/measure_resolution/{phantom}.log",
    benchmark:
        ".evenblur/benchmarks/measure_resolution/{phantom}.tsv"
    threads: 1
    resources:
        mem_mb=resolution_memory,
        runtime=resolution_minutes,
    params:
        job=resolution_settings,
    message:
        "Measure phantom {wildcards.phantom} of setup {params.job[setup]}"
    shell:
        "{PY:q} {workflow.basedir:q}/scripts/measure_resolution.py --tolerant --kind {params.job[kind]}"
        " --image={params.job[image]:q} --details-text {params.job[details]:q} --phantom={params.job[phantom]:q}"
        " --setup={params.job[setup]:q} --phantom-session={params.job[phantom_session]:q}"
        " --expect-sha256={params.job[expected]:q}"
        " --expect-reference-sha256={params.job[reference_expected]:q} --cache={PHANTOM_CACHE:q}"
        " --code-token {params.job[code]} --out {output.record:q} >{log:q} 2>&1"
