# Pack what the auditor gets.

from evenblur.study import handover_files


localrules:
    make_handover,
    handover,


def handover_records(wildcards):
    return handover_files.handover_records(TASKS, current_plan(wildcards)) + matching_records(wildcards)


def handover_images(wildcards):
    return ancient(handover_files.handover_images(TASKS, current_plan(wildcards)))


def handover_settings(wildcards):
    return handover_files.handover_settings(TASKS, current_plan(wildcards), PROGRAM)


# The output keeps its place until the new bag is complete, so a failed packing leaves the old bag whole. The audit's
# small files are no ancient inputs: a job behind one that runs is asked for nothing but such inputs, not even for its
# settings. Its larger ones are: a new date on a large file would count, its content would not.
rule make_handover:
    input:
        plan=ancient(LAYOUT.plan),
        draft=DRAFT,
        records=handover_records,
        images=handover_images,
        decisions=handover_files.decision_files(STUDY),
        audit=handover_files.small_audit_files(STUDY),
        growing=ancient(handover_files.growing_audit_files(STUDY)),
    output:
        manifest=update(f"{LAYOUT.handover}/tagmanifest-sha256.txt"),
    log:
        ".evenblur/logs/make_handover.log",
    benchmark:
        ".evenblur/benchmarks/make_handover.tsv"
    params:
        job=handover_settings,
    message:
        "Pack the bag for the auditor"
    shell:
        "{PY:q} {workflow.basedir:q}/scripts/make_handover.py --study-dir . 2>{log:q}"


rule handover:
    input:
        DRAFT,
        TASKS.lost_intake(),
        f"{LAYOUT.handover}/tagmanifest-sha256.txt",
