# One assessment, from raw climate files to the report:
#
#     snakemake --cores 2 --config assessment=FILE [region=NAME] [set=key=value] [STAGE]
#
# The same as `stook run FILE`; see docs/command-line.md. Rules are in rules/<stage>.smk.
from snakemake.utils import min_version
from stook.engine.start import checked_plan, start

min_version("9.0")

# Nothing is written, and nothing computed, when the check finds an error.
PLAN, WARNINGS = checked_plan(config, workflow.is_main_process)


workdir: PLAN.root


include: "rules/common.smk"
include: "rules/prepare.smk"
include: "rules/correct.smk"
include: "rules/season.smk"
include: "rules/yields.smk"
include: "rules/regions.smk"
include: "rules/ensemble.smk"
include: "rules/trend.smk"
include: "rules/report.smk"


rule all:
    default_target: True
    input:
        PLAN.targets("report"),


rule prepare:
    input:
        PLAN.targets("prepare"),


rule correct:
    input:
        PLAN.targets("correct"),


rule season:
    input:
        PLAN.targets("season"),


rule yields:
    input:
        PLAN.targets("yields"),


rule regions:
    input:
        PLAN.targets("regions"),


rule ensemble:
    input:
        PLAN.targets("ensemble"),


rule trend:
    input:
        PLAN.targets("trend"),


rule report:
    input:
        PLAN.targets("report"),


onstart:
    start(PLAN, WARNINGS)
