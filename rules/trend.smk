rule trend_pixels:
    input:
        seasons=PLAN.seasons,
        yields=PLAN.yields,
        layers=LAYOUT.layers,
    output:
        grids=LAYOUT.trend_pixels("{simulation}", "{crop}", "{system}"),
        distribution=LAYOUT.trend_distribution("{simulation}", "{crop}", "{system}"),
        field=LAYOUT.trend_field("{simulation}", "{crop}", "{system}"),
    log:
        "logs/trend/pixels_{simulation}_{crop}_{system}.log",
    conda:
        "environment.yaml"
    threads: PLAN.threads(workflow.cores)
    resources:
        mem_mb=lambda wildcards, threads: PLAN.memory("trend_pixels", threads),
    params:
        fingerprint=PLAN.fingerprint("trend_pixels"),
    shell:
        'exec "$STOOK_PYTHON" -m stook.job trend pixels --results . --threads {threads} '
        "simulation={wildcards.simulation:q} crop={wildcards.crop} system={wildcards.system} > {log:q} 2>&1"


rule trend_regions:
    input:
        totals=PLAN.totals,
    output:
        table=LAYOUT.trend_regions("{simulation}"),
    log:
        "logs/trend/regions_{simulation}.log",
    conda:
        "environment.yaml"
    threads: 1
    resources:
        mem_mb=lambda wildcards, threads: PLAN.memory("trend_regions", threads),
    params:
        fingerprint=PLAN.fingerprint("trend_regions"),
    shell:
        'exec "$STOOK_PYTHON" -m stook.job trend regions --results . --threads {threads} '
        "simulation={wildcards.simulation:q} > {log:q} 2>&1"


rule trend_impact:
    input:
        observed=PLAN.observed_grids,
        responses=PLAN.responses,
        layers=LAYOUT.layers,
        overlay=LAYOUT.overlay,
    output:
        table=LAYOUT.impact("{crop}"),
    log:
        "logs/trend/impact_{crop}.log",
    conda:
        "environment.yaml"
    threads: PLAN.threads(workflow.cores)
    resources:
        mem_mb=lambda wildcards, threads: PLAN.memory("trend_impact", threads),
    params:
        fingerprint=PLAN.fingerprint("trend_impact"),
    shell:
        'exec "$STOOK_PYTHON" -m stook.job trend impact --results . --threads {threads} '
        "crop={wildcards.crop} > {log:q} 2>&1"


rule trend_impact_map:
    input:
        observed=PLAN.observed_grids,
        response=PLAN.response,
        layers=LAYOUT.layers,
    output:
        grids=LAYOUT.impact_map("{crop}", "{system}"),
    log:
        "logs/trend/impact_map_{crop}_{system}.log",
    conda:
        "environment.yaml"
    threads: PLAN.threads(workflow.cores)
    resources:
        mem_mb=lambda wildcards, threads: PLAN.memory("trend_impact_map", threads),
    params:
        fingerprint=PLAN.fingerprint("trend_impact_map"),
    shell:
        'exec "$STOOK_PYTHON" -m stook.job trend impact_map --results . --threads {threads} '
        "crop={wildcards.crop} system={wildcards.system} > {log:q} 2>&1"
