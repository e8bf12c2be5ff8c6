# A run about some sites only (`--config site=...`): the plan is taken as it stands, and nothing before it is looked at.

DRAFT = []

try:
    if workflow.is_main_process:
        check_plan_serves(TASKS, LAYOUT.plan, SITES)
except InputError as error:
    refuse(error)


def current_plan(wildcards):
    """The plan's file, which a run of the target `plan` made."""
    return LAYOUT.plan
