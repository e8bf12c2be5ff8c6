# Take in every image: one record each.


def intake_image(wildcards):
    table = TASKS.scans if wildcards.group == "scans" else TASKS.phantoms
    return ancient(TASKS.image(table[wildcards.key].image))


def intake_settings(wildcards):
    return TASKS.intake_settings(wildcards.group, wildcards.key)


def intake_memory(wildcards, attempt):
    return attempt * DEMANDS.intake(wildcards.group, wildcards.key)["mem_mb"]


def intake_minutes(wildcards, attempt):
    return attempt * DEMANDS.intake(wildcards.group, wildcards.key)["runtime"]


rule take_in_image:
    input:
        image=intake_image,
        provenance=PROVENANCE,
    output:
        record=f"{LAYOUT.results}/intake/{{group}}/{{key}}.json",
    log:
        ".evenblur/logs/take_in_image/{group}/{key}.log",
    benchmark:
        ".evenblur/benchmarks/take_in_image/{group}/{key}.tsv"
    group:
        "intake"
    threads: 1
    resources:
        mem_mb=intake_memory,
        runtime=intake_minutes,
    params:
        job=intake_settings,
    message:
        "Take in {params.job[image]}"
    shell:
        "{PY:q} {workflow.basedir:q}/scripts/take_in_image.py --image={params.job[image]:q} --item {params.job[item]}"
        " --key={params.job[key]:q} --expect-sha256={params.job[expected]:q} --record {output.record:q} 2>{log:q}"


rule check:
    input:
        TASKS.intake_records(),
        PARTS.intake_notes(),
    log:
        ".evenblur/logs/check.log",
    message:
        "Say what the sites have to mend"
    shell:
        "{PY:q} {workflow.basedir:q}/scripts/summarise_intake.py --study-dir . 2>{log:q}"
