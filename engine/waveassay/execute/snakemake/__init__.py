"""The Snakemake backend. Nothing outside this package knows Snakemake."""
