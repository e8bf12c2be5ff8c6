# On a cluster: gather the records of a part of the scans, so that one submission carries the whole part.


def gathered_intake(wildcards):
    return PARTS.intake_records(wildcards.group, wildcards.part)


def gathered_intake_settings(wildcards):
    return PARTS.intake_settings(wildcards.group, wildcards.part)


def gathered_scans(wildcards):
    return PARTS.scan_records(wildcards.period, wildcards.part, current_plan(wildcards))


def gathered_regions(wildcards):
    """Regional means of the part's scans, so that they travel in the same submission; a site's run measures none."""
    return [] if SITES else PARTS.region_records(wildcards.period, wildcards.part, current_plan(wildcards))


def gathered_scans_settings(wildcards):
    return PARTS.scan_settings(wildcards.period, wildcards.part, current_plan(wildcards))


rule gather_intake:
    input:
        records=gathered_intake,
    output:
        note=".evenblur/gathered/intake/{group}.{part}.json",
    log:
        ".evenblur/logs/gather_intake/{group}.{part}.log",
    benchmark:
        ".evenblur/benchmarks/gather_intake/{group}.{part}.tsv"
    group:
        "intake"
    threads: 1
    resources:
        mem_mb=150,
        runtime=2,
    params:
        job=gathered_intake_settings,
    message:
        "Gather the intake records of {wildcards.group}, part {wildcards.part}"
    shell:
        "{PY:q} {workflow.basedir:q}/scripts/gather_records.py --out {output.note:q} {input.records:q} 2>{log:q}"


rule gather_records:
    input:
        plan=ancient(LAYOUT.plan),
        records=gathered_scans,
        regions=gathered_regions,
    output:
        note=".evenblur/gathered/harmonised/{period}.{part}.json",
    log:
        ".evenblur/logs/gather_records/{period}.{part}.log",
    benchmark:
        ".evenblur/benchmarks/gather_records/{period}.{part}.tsv"
    group:
        "smoothing"
    threads: 1
    resources:
        mem_mb=150,
        runtime=2,
    params:
        job=gathered_scans_settings,
    message:
        "Gather the records of {wildcards.period}, part {wildcards.part}"
    shell:
        "{PY:q} {workflow.basedir:q}/scripts/gather_records.py --out {output.note:q} {input.records:q} 2>{log:q}"
