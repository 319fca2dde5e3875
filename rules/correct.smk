rule correct_tile:
    input:
        simulation=LAYOUT.prepared("{simulation}", "{tile}"),
        reference=PLAN.reference,
        layers=LAYOUT.layers,
    output:
        grids=LAYOUT.corrected("{simulation}", "{tile}"),
        transfer=LAYOUT.transfer("{simulation}", "{tile}"),
        evaluation=LAYOUT.evaluation("{simulation}", "{tile}"),
    log:
        "logs/correct/tile_{simulation}_{tile}.log",
    conda:
        "environment.yaml"
    threads: PLAN.threads(workflow.cores)
    resources:
        mem_mb=lambda wildcards, threads: PLAN.memory("correct_tile", threads),
    params:
        fingerprint=PLAN.fingerprint("correct_tile"),
    shell:
        'exec "$STOOK_PYTHON" -m stook.job correct tile --results . --threads {threads} '
        "simulation={wildcards.simulation:q} tile={wildcards.tile} > {log:q} 2>&1"


rule correct_summary:
    input:
        evaluations=PLAN.evaluations,
        layers=LAYOUT.layers,
    output:
        table=LAYOUT.evaluation_table,
    log:
        "logs/correct/summary.log",
    conda:
        "environment.yaml"
    threads: 1
    resources:
        mem_mb=lambda wildcards, threads: PLAN.memory("correct_summary", threads),
    params:
        fingerprint=PLAN.fingerprint("correct_summary"),
    shell:
        'exec "$STOOK_PYTHON" -m stook.job correct summary --results . --threads {threads} '
        "> {log:q} 2>&1"
