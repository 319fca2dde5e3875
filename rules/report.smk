rule report_page:
    input:
        results=PLAN.before_report,
    output:
        page=LAYOUT.report_page,
    log:
        "logs/report/page.log",
    conda:
        "environment.yaml"
    threads: 1
    resources:
        mem_mb=lambda wildcards, threads: PLAN.memory("report_page", threads),
    params:
        fingerprint=PLAN.fingerprint("report_page"),
    shell:
        'exec "$STOOK_PYTHON" -m stook.job report page --results . --threads {threads} '
        "> {log:q} 2>&1"
