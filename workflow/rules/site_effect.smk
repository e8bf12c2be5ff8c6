# Did it help: what differs between sites before and after, on phantoms and on regions.


def region_images(wildcards):
    return ancient(decision_tasks.region_inputs(TASKS, wildcards.entities))


def harmonised_image(wildcards):
    return ancient(LAYOUT.harmonised_image(TASKS.scans[wildcards.entities]))


def harmonised_record(wildcards):
    return LAYOUT.scan_record(TASKS.scans[wildcards.entities])


def region_settings(wildcards):
    return decision_tasks.region_settings(TASKS, wildcards.entities)


def compared_images(wildcards):
    return ancient(decision_tasks.compared_images(TASKS, current_plan(wildcards)))


def region_records(wildcards):
    return decision_tasks.region_records(TASKS, current_plan(wildcards))


def site_effect_settings(wildcards):
    return decision_tasks.site_effect_settings(TASKS, current_plan(wildcards))


def regions_memory(wildcards, attempt):
    return attempt * DEMANDS.regions(wildcards.entities)["mem_mb"]


def regions_minutes(wildcards, attempt):
    return attempt * DEMANDS.regions(wildcards.entities)["runtime"]


def site_effect_memory(wildcards, attempt):
    return attempt * DEMANDS.site_effect()["mem_mb"]


def site_effect_minutes(wildcards, attempt):
    return attempt * DEMANDS.site_effect()["runtime"]


rule measure_regions:
    input:
        images=region_images,
        harmonised=harmonised_image,
        made=harmonised_record,
    output:
        record=f"{LAYOUT.results}/site_effect/regions/{{entities}}.json",
    log:
        ".evenblur/logs/measure_regions/{entities}.log",
    benchmark:
        ".evenblur/benchmarks/measure_regions/{entities}.tsv"
    group:
        "smoothing"
    threads: 1
    resources:
        mem_mb=regions_memory,
        runtime=regions_minutes,
    params:
        job=region_settings,
    message:
        "Measure the regions of {wildcards.entities}"
    shell:
        "{PY:q} {workflow.basedir:q}/scripts/measure_regions.py --image={params.job[image]:q}"
        " --harmonised={params.job[after]:q} --places={params.job[places]:q} --expected={params.job[expected]:q}"
        " --record {output.record:q} 2>{log:q}"


rule measure_site_effect:
    input:
        plan=ancient(LAYOUT.plan),
        images=compared_images,
        resolution=ancient(TASKS.resolution_records()),
        intake=ancient(TASKS.phantom_intake_records()),
        regions=region_records,
    output:
        record=LAYOUT.site_effect,
    log:
        ".evenblur/logs/measure_site_effect.log",
    benchmark:
        ".evenblur/benchmarks/measure_site_effect.tsv"
    threads: 1
    resources:
        mem_mb=site_effect_memory,
        runtime=site_effect_minutes,
    params:
        job=site_effect_settings,
    message:
        "Compare the sites before and after"
    shell:
        "{PY:q} {workflow.basedir:q}/scripts/measure_site_effect.py --study-dir . 2>{log:q}"
