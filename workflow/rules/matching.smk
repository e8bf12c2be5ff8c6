# Where a study says `kernel: matched`: a draft plan by quadrature, and every period's kernel matched to its phantom.

# The draft is an input of the plan and of every target, so that a stale or missing one is always made first.
DRAFT = [LAYOUT.draft_plan] if STUDY.settings.kernel == "matched" else []

if STUDY.settings.kernel == "matched":

    localrules:
        make_draft_plan,

    checkpoint make_draft_plan:
        input:
            study=ancient(TASKS.study_files()),
            intake=TASKS.intake_records(),
            resolution=TASKS.resolution_records(),
        output:
            plan=LAYOUT.draft_plan,
        log:
            ".evenblur/logs/make_draft_plan.log",
        benchmark:
            ".evenblur/benchmarks/make_draft_plan.tsv"
        params:
            job=TASKS.draft_plan_settings(),
        message:
            "Draft the plan by quadrature"
        shell:
            "{PY:q} {workflow.basedir:q}/scripts/make_plan.py --draft --study-dir . 2>{log:q}"

    def draft_plan(wildcards):
        return checkpoints.make_draft_plan.get().output.plan

    def matched_images(wildcards):
        images = TASKS.proving_images(wildcards.setup, wildcards.phantom_session, draft_plan(wildcards))
        return ancient(images)

    def matched_resolution(wildcards):
        return ancient(TASKS.proving_records(wildcards.setup, wildcards.phantom_session, draft_plan(wildcards)))

    def matching_settings(wildcards):
        return TASKS.matching_settings(wildcards.setup, wildcards.phantom_session, draft_plan(wildcards))

    def matching_demand(wildcards):
        return DEMANDS.period("match_kernel", wildcards.setup, wildcards.phantom_session, draft_plan(wildcards))

    def matching_memory(wildcards, attempt):
        return attempt * matching_demand(wildcards)["mem_mb"]

    def matching_minutes(wildcards, attempt):
        return attempt * matching_demand(wildcards)["runtime"]

    rule match_kernel:
        input:
            draft=ancient(LAYOUT.draft_plan),
            provenance=PROVENANCE,
            images=matched_images,
            resolution=matched_resolution,
        output:
            record=f"{LAYOUT.results}/matching/{{setup}}.{{phantom_session}}.json",
        log:
            ".evenblur/logs/match_kernel/{setup}.{phantom_session}.log",
        benchmark:
            ".evenblur/benchmarks/match_kernel/{setup}.{phantom_session}.tsv"
        threads: 1
        resources:
            mem_mb=matching_memory,
            runtime=matching_minutes,
        params:
            job=matching_settings,
        message:
            "Match the kernel of {wildcards.setup}.{wildcards.phantom_session} to its phantoms"
        shell:
            "{PY:q} {workflow.basedir:q}/scripts/match_kernel.py --study-dir . --setup={wildcards.setup:q}"
            " --phantom-session={wildcards.phantom_session:q} 2>{log:q}"


def matching_records(wildcards):
    """Records of the matched kernels; none where kernels follow from quadrature."""
    return TASKS.matching_records(draft_plan(wildcards)) if STUDY.settings.kernel == "matched" else []
