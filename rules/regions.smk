rule regions_overlay:
    input:
        polygons=PLAN.polygons,
    output:
        overlay=LAYOUT.overlay,
    log:
        "logs/regions/overlay.log",
    conda:
        "environment.yaml"
    threads: 1
    resources:
        mem_mb=lambda wildcards, threads: PLAN.memory("regions_overlay", threads),
    params:
        fingerprint=PLAN.fingerprint("regions_overlay"),
    shell:
        'exec "$STOOK_PYTHON" -m stook.job regions overlay --results . --threads {threads} '
        "> {log:q} 2>&1"


rule regions_totals:
    input:
        yields=PLAN.yields,
        seasons=PLAN.seasons,
        coefficients=PLAN.coefficients,
        responses=PLAN.responses,
        technology=PLAN.technology,
        concentrations=PLAN.concentrations,
        overlay=LAYOUT.overlay,
        layers=LAYOUT.layers,
    output:
        totals=LAYOUT.totals("{simulation}", "{crop}"),
    log:
        "logs/regions/totals_{simulation}_{crop}.log",
    conda:
        "environment.yaml"
    threads: PLAN.threads(workflow.cores)
    resources:
        mem_mb=lambda wildcards, threads: PLAN.memory("regions_totals", threads),
    params:
        fingerprint=PLAN.fingerprint("regions_totals"),
    shell:
        'exec "$STOOK_PYTHON" -m stook.job regions totals --results . --threads {threads} '
        "simulation={wildcards.simulation:q} crop={wildcards.crop} > {log:q} 2>&1"
