# Keep the study's change log, and say in the trade's words what changed and what it did.


localrules:
    record_history,


CHRONICLE = Chronicle(TASKS, STUDY_DIR, PROGRAM)


def scan_records(wildcards):
    return TASKS.scan_records(current_plan(wildcards))


def history_settings(wildcards):
    return CHRONICLE.settings(current_plan(wildcards))


rule record_history:
    input:
        plan=ancient(LAYOUT.plan),
        # What the scans' intake is made from stands in the settings: an input a scan less.
        intake=[LAYOUT.intake(row) for row in STUDY.phantoms],
        resolution=TASKS.resolution_records(),
        achieved=achieved_records,
        scans=scan_records,
    output:
        head=LAYOUT.audit("history.json"),
    log:
        ".evenblur/logs/record_history.log",
    benchmark:
        ".evenblur/benchmarks/record_history.tsv"
    params:
        job=history_settings,
    message:
        "Record what changed"
    shell:
        "{PY:q} {workflow.basedir:q}/scripts/record_history.py --study-dir . --program {params.job[program]:q}"
        " --found {params.job[found]:q} 2>{log:q}"


# Hooks run in the main process of a real run that has work to do; a dry run says and writes nothing.
onstart:
    CHRONICLE.tell_before(sys.stderr)


onsuccess:
    CHRONICLE.tell_after(sys.stderr)


onerror:
    CHRONICLE.tell_after(sys.stderr)
