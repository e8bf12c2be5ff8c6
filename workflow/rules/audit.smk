# Say what was done to whom: the tables and the report.


localrules:
    make_audit_tables,
    make_report,
    audit,


def achieved_records(wildcards):
    return TASKS.achieved_records(current_plan(wildcards))


def scan_records(wildcards):
    return TASKS.scan_records(current_plan(wildcards))


def audit_settings(wildcards):
    return TASKS.audit_settings(current_plan(wildcards))


def report_settings(wildcards):
    return TASKS.report_settings(current_plan(wildcards))


rule make_audit_tables:
    input:
        plan=ancient(LAYOUT.plan),
        intake=TASKS.intake_records(),
        resolution=TASKS.resolution_records(),
        achieved=achieved_records,
        scans=scan_records,
        history=LAYOUT.audit("history.json"),
    output:
        sites=LAYOUT.audit("sites.tsv"),
        scans=LAYOUT.audit("scans.tsv"),
        queries=LAYOUT.audit("queries.tsv"),
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


rule make_report:
    input:
        plan=ancient(LAYOUT.plan),
        tables=rules.make_audit_tables.output,
        effect=rules.measure_site_effect.output,
    output:
        page=LAYOUT.audit("report.html"),
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
        rules.make_audit_tables.output,
        rules.make_report.output,
