"""Intervals x formulations: planning, workers, the run folder."""
