# Decide the target and every kernel. What comes later asks the plan, so it is a checkpoint.


localrules:
    make_plan,
    price_targets,
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


def price_settings(wildcards):
    return decision_tasks.price_settings(TASKS, current_plan(wildcards))


rule price_targets:
    input:
        # The settings name what the intake is made from, and the plan comes after it.
        plan=ancient(LAYOUT.plan),
        resolution=TASKS.resolution_records(),
    output:
        page=LAYOUT.prices("html"),
        table=LAYOUT.prices("tsv"),
    log:
        ".evenblur/logs/price_targets.log",
    benchmark:
        ".evenblur/benchmarks/price_targets.tsv"
    params:
        job=price_settings,
    message:
        "Price the targets"
    shell:
        "{PY:q} {workflow.basedir:q}/scripts/price_targets.py --study-dir . 2>{log:q}"


rule plan:
    input:
        DRAFT,
        LAYOUT.plan,
        PARTS.intake_notes(),
        rules.price_targets.output,
    log:
        ".evenblur/logs/plan.log",
    message:
        "Say what the target costs"
    shell:
        "{PY:q} {workflow.basedir:q}/scripts/price_targets.py --show --study-dir . 2>{log:q}"
