"""The exhibit: a folder that stands on its own and can be recomputed by someone else."""
