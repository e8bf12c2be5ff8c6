# Decide the target and every kernel. What comes later asks the plan, so it is a checkpoint.


localrules:
    make_plan,
    plan,


checkpoint make_plan:
    input:
        study=ancient(TASKS.study_files()),
        intake=TASKS.intake_records(),
        resolution=TASKS.resolution_records(),
        draft=DRAFT,
        matching=matching_records,
    output:
        plan=LAYOUT.plan,
    log:
        ".evenblur/logs/make_plan.log",
    benchmark:
        ".evenblur/benchmarks/make_plan.tsv"
    params:
        job=TASKS.plan_settings(),
    message:
        "Make the plan: target, kernels, accepted and held scans"
    shell:
        "{PY:q} {workflow.basedir:q}/scripts/make_plan.py --study-dir . 2>{log:q}"


def current_plan(wildcards):
    """The plan's file; where the plan is still to be made, the workflow comes back once it is."""
    return checkpoints.make_plan.get().output.plan


rule plan:
    input:
        DRAFT,
        LAYOUT.plan,
        PARTS.intake_notes(),
