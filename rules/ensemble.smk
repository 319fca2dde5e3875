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


rule ensemble_risk:
    input:
        totals=PLAN.totals,
        global_means=PLAN.global_means,
        population=PLAN.population,
    output:
        partition=LAYOUT.ensemble_table("partition"),
        emergence=LAYOUT.ensemble_table("emergence"),
        classes=LAYOUT.ensemble_table("classes"),
        robustness=LAYOUT.ensemble_table("robustness"),
        levels=LAYOUT.ensemble_table("levels"),
        windows=LAYOUT.ensemble_table("windows"),
        shortfall=LAYOUT.ensemble_table("shortfall"),
        joint=LAYOUT.ensemble_table("joint"),
        losses=LAYOUT.ensemble_table("losses"),
        supply=LAYOUT.ensemble_table("supply"),
    log:
        "logs/ensemble/risk.log",
    conda:
        "environment.yaml"
    threads: 1
    resources:
        mem_mb=lambda wildcards, threads: PLAN.memory("ensemble_risk", threads),
    params:
        fingerprint=PLAN.fingerprint("ensemble_risk"),
    shell:
        'exec "$STOOK_PYTHON" -m stook.job ensemble risk --results . --threads {threads} '
        "> {log:q} 2>&1"


rule ensemble_robustness:
    input:
        yields=PLAN.yields,
        layers=LAYOUT.layers,
        overlay=LAYOUT.overlay,
        global_means=PLAN.global_means,
    output:
        grids=LAYOUT.robustness_pixels("{crop}", "{system}", "{scenario}"),
        losses=LAYOUT.area_losses("{crop}", "{system}", "{scenario}"),
    log:
        "logs/ensemble/robustness_{crop}_{system}_{scenario}.log",
    conda:
        "environment.yaml"
    threads: 1
    resources:
        mem_mb=lambda wildcards, threads: PLAN.memory("ensemble_robustness", threads),
    params:
        fingerprint=PLAN.fingerprint("ensemble_robustness"),
    shell:
        'exec "$STOOK_PYTHON" -m stook.job ensemble robustness --results . --threads {threads} '
        "crop={wildcards.crop} system={wildcards.system} scenario={wildcards.scenario:q} > {log:q} 2>&1"
