rule yields_coefficients:
    input:
        response=PLAN.response,
    output:
        draws=LAYOUT.coefficients("{crop}", "{system}"),
    log:
        "logs/yields/coefficients_{crop}_{system}.log",
    conda:
        "environment.yaml"
    threads: 1
    resources:
        mem_mb=lambda wildcards, threads: PLAN.memory("yields_coefficients", threads),
    params:
        fingerprint=PLAN.fingerprint("yields_coefficients"),
    shell:
        'exec "$STOOK_PYTHON" -m stook.job yields coefficients --results . --threads {threads} '
        "crop={wildcards.crop} system={wildcards.system} > {log:q} 2>&1"


rule yields_grid:
    input:
        seasons=PLAN.seasons,
        coefficients=PLAN.coefficients,
        response=PLAN.response,
        technology=PLAN.technology,
        concentrations=PLAN.concentrations,
        layers=LAYOUT.layers,
    output:
        grids=LAYOUT.yields("{simulation}", "{crop}", "{system}"),
    log:
        "logs/yields/grid_{simulation}_{crop}_{system}.log",
    conda:
        "environment.yaml"
    threads: PLAN.threads(workflow.cores)
    resources:
        mem_mb=lambda wildcards, threads: PLAN.memory("yields_grid", threads),
    params:
        fingerprint=PLAN.fingerprint("yields_grid"),
    shell:
        'exec "$STOOK_PYTHON" -m stook.job yields grid --results . --threads {threads} '
        "simulation={wildcards.simulation:q} crop={wildcards.crop} system={wildcards.system} > {log:q} 2>&1"
