# The demonstration's invented images, made where a study says `demo: true`.

if STUDY.settings.demo:

    rule make_demonstration:
        input:
            provenance=PROVENANCE,
        output:
            TASKS.demonstration_files(),
        log:
            ".evenblur/logs/make_demonstration.log",
        benchmark:
            ".evenblur/benchmarks/make_demonstration.tsv"
        params:
            job=TASKS.demonstration_settings(),
        message:
            "Make the demonstration's invented images"
        shell:
            "{PY:q} {workflow.basedir:q}/scripts/make_demonstration.py --study-dir . >{log:q} 2>&1"
