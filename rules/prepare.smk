rule prepare_layers:
    input:
        crops=PLAN.crop_layers,
        overlay=LAYOUT.overlay,
    output:
        layers=LAYOUT.layers,
    log:
        "logs/prepare/layers.log",
    conda:
        "environment.yaml"
    threads: 1
    resources:
        mem_mb=lambda wildcards, threads: PLAN.memory("prepare_layers", threads),
    params:
        fingerprint=PLAN.fingerprint("prepare_layers"),
    shell:
        'exec "$STOOK_PYTHON" -m stook.job prepare layers --results . --threads {threads} '
        "> {log:q} 2>&1"


rule prepare_tile:
    input:
        climate=PLAN.climate_files,
        layers=LAYOUT.layers,
    output:
        grids=LAYOUT.prepared("{simulation}", "{tile}"),
    log:
        "logs/prepare/tile_{simulation}_{tile}.log",
    conda:
        "environment.yaml"
    threads: PLAN.threads(workflow.cores)
    resources:
        mem_mb=lambda wildcards, threads: PLAN.memory("prepare_tile", threads),
    params:
        fingerprint=PLAN.fingerprint("prepare_tile"),
    shell:
        'exec "$STOOK_PYTHON" -m stook.job prepare tile --results . --threads {threads} '
        "simulation={wildcards.simulation:q} tile={wildcards.tile} > {log:q} 2>&1"
