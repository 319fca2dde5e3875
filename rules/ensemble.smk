rule ensemble_changes:
    input:
        totals=PLAN.totals,
    output:
        changes=LAYOUT.changes,
        members=LAYOUT.members,
        yearly=LAYOUT.yearly,
    log:
        "logs/ensemble/changes.log",
    conda:
        "environment.yaml"
    threads: 1
    resources:
        mem_mb=lambda wildcards, threads: PLAN.memory("ensemble_changes", threads),
    params:
        fingerprint=PLAN.fingerprint("ensemble_changes"),
    shell:
        'exec "$STOOK_PYTHON" -m stook.job ensemble changes --results . --threads {threads} '
        "> {log:q} 2>&1"


rule ensemble_pixels:
    input:
        yields=PLAN.yields,
        layers=LAYOUT.layers,
    output:
        grids=LAYOUT.ensemble_pixels("{crop}", "{system}", "{scenario}"),
    log:
        "logs/ensemble/pixels_{crop}_{system}_{scenario}.log",
    conda:
        "environment.yaml"
    threads: 1
    resources:
        mem_mb=lambda wildcards, threads: PLAN.memory("ensemble_pixels", threads),
    params:
        fingerprint=PLAN.fingerprint("ensemble_pixels"),
    shell:
        'exec "$STOOK_PYTHON" -m stook.job ensemble pixels --results . --threads {threads} '
        "crop={wildcards.crop} system={wildcards.system} scenario={wildcards.scenario:q} > {log:q} 2>&1"
