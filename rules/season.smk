rule season_tile:
    input:
        climate=PLAN.climate,
        layers=LAYOUT.layers,
    output:
        indices=LAYOUT.season("{simulation}", "{crop}", "{system}", "{tile}"),
    log:
        "logs/season/tile_{simulation}_{crop}_{system}_{tile}.log",
    conda:
        "environment.yaml"
    threads: PLAN.threads(workflow.cores)
    resources:
        mem_mb=lambda wildcards, threads: PLAN.memory("season_tile", threads),
    params:
        fingerprint=PLAN.fingerprint("season_tile"),
    shell:
        'exec "$STOOK_PYTHON" -m stook.job season tile --results . --threads {threads} '
        "simulation={wildcards.simulation:q} crop={wildcards.crop} system={wildcards.system} tile={wildcards.tile} > {log:q} 2>&1"
