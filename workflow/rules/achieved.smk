# Prove each period's kernel on its own phantoms.


def period_images(wildcards):
    images = TASKS.proving_images(wildcards.setup, wildcards.phantom_session, current_plan(wildcards))
    return ancient(images)


def period_resolution(wildcards):
    return ancient(TASKS.proving_records(wildcards.setup, wildcards.phantom_session, current_plan(wildcards)))


def achieved_settings(wildcards):
    return TASKS.achieved_settings(wildcards.setup, wildcards.phantom_session, current_plan(wildcards))


def achieved_demand(wildcards):
    return DEMANDS.period("measure_achieved", wildcards.setup, wildcards.phantom_session, current_plan(wildcards))


def achieved_memory(wildcards, attempt):
    return attempt * achieved_demand(wildcards)["mem_mb"]


def achieved_minutes(wildcards, attempt):
    return attempt * achieved_demand(wildcards)["runtime"]


def files_of_sites(wildcards):
    return site_files(TASKS, current_plan(wildcards), SITES)


rule measure_achieved:
    input:
        plan=ancient(LAYOUT.plan),
        images=period_images,
        provenance=PROVENANCE,
        resolution=period_resolution,
    output:
        record=f"{LAYOUT.results}/achieved/{{setup}}.{{phantom_session}}.json",
    log:
        ".evenblur/logs/measure_achieved/{setup}.{phantom_session}.log",
    benchmark:
        ".evenblur/benchmarks/measure_achieved/{setup}.{phantom_session}.tsv"
    threads: 1
    resources:
        mem_mb=achieved_memory,
        runtime=achieved_minutes,
    params:
        job=achieved_settings,
    message:
        "Smooth and measure again the phantoms of {wildcards.setup}.{wildcards.phantom_session}"
    shell:
        "{PY:q} {workflow.basedir:q}/scripts/measure_achieved.py --study-dir . --setup={wildcards.setup:q}"
        " --phantom-session={wildcards.phantom_session:q} 2>{log:q}"
