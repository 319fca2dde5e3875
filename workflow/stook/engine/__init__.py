"""The engine: which jobs an assessment needs, and running them with Snakemake."""
