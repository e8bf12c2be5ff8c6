# Say what was done to whom: data and tables, pictures, the report, each site's own record.

from evenblur.study import audit_tasks


localrules:
    make_audit_tables,
    make_report,
    audit,


def achieved_records(wildcards):
    return TASKS.achieved_records(current_plan(wildcards))


def audit_settings(wildcards):
    return TASKS.audit_settings(current_plan(wildcards))


def pictured_scan_images(wildcards):
    return ancient(audit_tasks.pictured_scan_images(TASKS, current_plan(wildcards)))


def pictured_harmonised(wildcards):
    return ancient(audit_tasks.pictured_harmonised(TASKS, current_plan(wildcards)))


def pictured_records(wildcards):
    return audit_tasks.pictured_records(TASKS, current_plan(wildcards))


def pictures_settings(wildcards):
    return audit_tasks.pictures_settings(TASKS, current_plan(wildcards))


def report_settings(wildcards):
    return audit_tasks.report_settings(TASKS, current_plan(wildcards), PROGRAM / "workflow" / "report")


def pictures_memory(wildcards, attempt):
    return attempt * DEMANDS.pictures()["mem_mb"]


def pictures_minutes(wildcards, attempt):
    return attempt * DEMANDS.pictures()["runtime"]


rule make_audit_tables:
    input:
        plan=ancient(LAYOUT.plan),
        resolution=TASKS.resolution_records(),
        achieved=achieved_records,
        # What the scans' intake and records say is read as well. The history is made from the scans' records, and the
        # settings name what the intake is made from: two inputs a scan less.
        history=LAYOUT.audit("history.json"),
        # The audit looks at every file of the data set: nothing may be half-way there meanwhile.
        dataset=ancient(TASKS.dataset_files()),
    output:
        sites=report(LAYOUT.audit("sites.tsv"), caption="../report/sites.rst", category="Audit"),
        scans=report(LAYOUT.audit("scans.tsv"), caption="../report/scans.rst", category="Audit"),
        queries=report(LAYOUT.audit("queries.tsv"), caption="../report/queries.rst", category="Audit"),
        sites_csv=LAYOUT.audit("sites.csv"),
        scans_csv=LAYOUT.audit("scans.csv"),
        record=LAYOUT.audit("audit.json"),
        covariates=LAYOUT.audit("covariates.tsv"),
    log:
        ".evenblur/logs/make_audit_tables.log",
    benchmark:
        ".evenblur/benchmarks/make_audit_tables.tsv"
    params:
        job=audit_settings,
    message:
        "Write the audit tables"
    shell:
        "{PY:q} {workflow.basedir:q}/scripts/make_audit_tables.py --study-dir . 2>{log:q}"


GROWING_TABLES = [path for path in rules.make_audit_tables.output if path != rules.make_audit_tables.output.sites]


rule make_pictures:
    input:
        plan=ancient(LAYOUT.plan),
        scans=pictured_scan_images,
        harmonised=pictured_harmonised,
        records=pictured_records,
    output:
        record=LAYOUT.audit("pictures.json"),
    log:
        ".evenblur/logs/make_pictures.log",
    benchmark:
        ".evenblur/benchmarks/make_pictures.tsv"
    threads: 1
    resources:
        mem_mb=pictures_memory,
        runtime=pictures_minutes,
    params:
        job=pictures_settings,
    message:
        "Draw a few scans of each site before and after smoothing"
    shell:
        "{PY:q} {workflow.basedir:q}/scripts/make_pictures.py --study-dir . 2>{log:q}"


rule make_report:
    input:
        plan=ancient(LAYOUT.plan),
        # One small table stands for all: of large files the dates would count, and thousands of scans make 20 MB.
        tables=rules.make_audit_tables.output.sites,
        growing=ancient(GROWING_TABLES),
        pictures=rules.make_pictures.output,
        resolution=TASKS.resolution_records(),
        achieved=achieved_records,
        effect=rules.measure_site_effect.output,
    output:
        page=report(LAYOUT.audit("report.html"), caption="../report/page.rst", category="Audit"),
        sites=report(audit_tasks.site_files(TASKS), caption="../report/site.rst", category="Records of the sites"),
    log:
        ".evenblur/logs/make_report.log",
    benchmark:
        ".evenblur/benchmarks/make_report.tsv"
    params:
        job=report_settings,
    message:
        "Write the report"
    shell:
        "{PY:q} {workflow.basedir:q}/scripts/make_report.py --study-dir . 2>{log:q}"


rule audit:
    input:
        DRAFT,
        TASKS.lost_intake(),
        PARTS.intake_notes(),
        gathered_notes,
        rules.make_audit_tables.output,
        rules.make_report.output,
